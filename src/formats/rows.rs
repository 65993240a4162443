//! Rows of numbers as JSON has them, held one after another: a text of many empty rows takes no memory
//! for each of them.

use serde::de::{DeserializeSeed, SeqAccess, Visitor};
use serde::ser::SerializeSeq;
use serde::{Deserialize, Deserializer, Serialize, Serializer};
use std::fmt;

/// Rows of numbers, not all of one length as long as [`Rows::ragged`] names one.
#[derive(Clone, Debug, Default, PartialEq)]
pub(super) struct Rows {
    count: usize,
    width: usize,
    ragged: Option<usize>,
    data: Vec<f64>,
}

impl Rows {
    /// Takes `count * width` numbers, row by row.
    #[track_caller]
    pub(super) fn new(count: usize, width: usize, data: Vec<f64>) -> Self {
        assert_eq!(data.len(), count * width, "{count} rows of {width} numbers");
        Rows { count, width, ragged: None, data }
    }

    /// Returns the number of rows.
    pub(super) fn count(&self) -> usize {
        self.count
    }

    /// Returns the length of the first row, 0 when there is none.
    pub(super) fn width(&self) -> usize {
        self.width
    }

    /// Returns the position of the first row that is not as long as row 0.
    pub(super) fn ragged(&self) -> Option<usize> {
        self.ragged
    }

    /// Returns all numbers, row by row.
    pub(super) fn data(&self) -> &[f64] {
        &self.data
    }
}

impl Serialize for Rows {
    fn serialize<S: Serializer>(&self, serializer: S) -> Result<S::Ok, S::Error> {
        let mut rows = serializer.serialize_seq(Some(self.count))?;
        for row in 0..self.count {
            rows.serialize_element(&self.data[row * self.width..(row + 1) * self.width])?;
        }
        rows.end()
    }
}

impl<'de> Deserialize<'de> for Rows {
    fn deserialize<D: Deserializer<'de>>(deserializer: D) -> Result<Self, D::Error> {
        struct List;

        impl<'de> Visitor<'de> for List {
            type Value = Rows;

            fn expecting(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
                f.write_str("a list of rows of numbers")
            }

            fn visit_seq<A: SeqAccess<'de>>(self, mut items: A) -> Result<Rows, A::Error> {
                let mut rows = Rows::default();
                while let Some(length) = items.next_element_seed(Row(&mut rows.data))? {
                    if rows.count == 0 {
                        rows.width = length;
                    } else if length != rows.width && rows.ragged.is_none() {
                        rows.ragged = Some(rows.count);
                    }
                    rows.count += 1;
                }
                Ok(rows)
            }
        }

        deserializer.deserialize_seq(List)
    }
}

/// Reads one row to the end of the numbers, and says how many there were.
struct Row<'a>(&'a mut Vec<f64>);

impl<'de> DeserializeSeed<'de> for Row<'_> {
    type Value = usize;

    fn deserialize<D: Deserializer<'de>>(self, deserializer: D) -> Result<usize, D::Error> {
        deserializer.deserialize_seq(self)
    }
}

impl<'de> Visitor<'de> for Row<'_> {
    type Value = usize;

    fn expecting(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str("a row of numbers")
    }

    fn visit_seq<A: SeqAccess<'de>>(self, mut items: A) -> Result<usize, A::Error> {
        let before = self.0.len();
        while let Some(number) = items.next_element()? {
            self.0.push(number);
        }
        Ok(self.0.len() - before)
    }
}
