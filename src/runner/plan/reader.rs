//! Walking a parsed document with the place of every key and value at hand.

use std::collections::BTreeSet;

use toml::Spanned;
use toml::de::{DeTable, DeValue};

use super::{PlanError, Span};
use crate::card::{Setting, nearest_word};

/// The text of a plan and its name.
#[derive(Clone, Copy, Debug)]
pub(super) struct Document<'t> {
    text: &'t str,
    file: &'t str,
}

impl<'t> Document<'t> {
    pub(super) fn new(text: &'t str, file: &'t str) -> Self {
        Document { text, file }
    }

    /// Parses the document.
    pub(super) fn parse(&self) -> Result<DeTable<'t>, PlanError> {
        DeTable::parse(self.text).map(Spanned::into_inner).map_err(|error| {
            let message = error.message().split_whitespace().collect::<Vec<_>>().join(" ");
            self.error(error.span().unwrap_or(0..0), &message, "", None)
        })
    }

    /// Makes an error at `span`.
    pub(super) fn error(
        &self,
        span: Span,
        message: &str,
        expected: &str,
        nearest: Option<&str>,
    ) -> PlanError {
        PlanError::locate(self.text, self.file, span, message, expected, nearest)
    }

    /// Makes an error about something the document lacks as a whole; it stands at its end.
    pub(super) fn missing(&self, message: &str, expected: &str) -> PlanError {
        let end = self.text.trim_end().len();
        self.error(end..end, message, expected, None)
    }
}

/// A value and its place.
#[derive(Clone, Debug)]
pub(super) struct Placed<T> {
    pub(super) value: T,
    pub(super) span: Span,
}

/// One table of the document.
pub(super) struct Section<'d, 't> {
    pub(super) document: &'d Document<'t>,
    pub(super) name: &'static str,
    table: &'d DeTable<'t>,
    span: Span,
}

/// One key of a table and its value.
pub(super) struct Entry<'d, 't> {
    pub(super) key: &'d str,
    pub(super) key_span: Span,
    pub(super) value: &'d Spanned<DeValue<'t>>,
}

/// Says what a value is, for messages.
fn kind(value: &DeValue<'_>) -> &'static str {
    match value {
        DeValue::String(_) => "a word",
        DeValue::Integer(_) => "a whole number",
        DeValue::Float(_) => "a decimal number",
        DeValue::Boolean(_) => "a truth value",
        DeValue::Datetime(_) => "a date",
        DeValue::Array(_) => "a list",
        DeValue::Table(_) => "a table",
    }
}

impl<'d, 't> Section<'d, 't> {
    /// Wraps the whole document.
    pub(super) fn top(document: &'d Document<'t>, table: &'d DeTable<'t>) -> Self {
        Section { document, name: "the plan", table, span: 0..0 }
    }

    /// Lists the keys in the order of the file.
    pub(super) fn entries(&self) -> Vec<Entry<'d, 't>> {
        let mut entries: Vec<_> = self
            .table
            .iter()
            .map(|(key, value)| Entry { key: key.get_ref(), key_span: key.span(), value })
            .collect();
        entries.sort_by_key(|entry| entry.key_span.start);
        entries
    }

    /// Refuses every key that is not in `known`.
    pub(super) fn only(&self, known: &[&str]) -> Result<(), PlanError> {
        match self.entries().iter().find(|entry| !known.contains(&entry.key)) {
            None => Ok(()),
            Some(entry) => Err(self.document.error(
                entry.key_span.clone(),
                &format!("unknown key in {}", self.name),
                &format!("one of {}", known.join(", ")),
                nearest_word(entry.key, known.iter().copied()),
            )),
        }
    }

    /// Finds a key.
    pub(super) fn get(&self, key: &str) -> Option<Entry<'d, 't>> {
        self.entries().into_iter().find(|entry| entry.key == key)
    }

    /// Makes an error about a key the section lacks; it stands where the section starts.
    pub(super) fn lacks(&self, key: &str, expected: &str) -> PlanError {
        self.beginning(&format!("{} has no `{key}`", self.name), expected)
    }

    /// Makes an error about the section as a whole; it stands where the section starts.
    pub(super) fn beginning(&self, message: &str, expected: &str) -> PlanError {
        let head = self.span.start..self.span.start;
        self.document.error(head, message, expected, None)
    }

    /// Makes an error about the value of `entry`.
    pub(super) fn wrong(&self, entry: &Entry<'d, 't>, expected: &str) -> PlanError {
        wrong(self.document, entry.key, entry.value, expected)
    }

    /// Reads a text that is not empty.
    pub(super) fn text(&self, key: &str) -> Result<Option<Placed<String>>, PlanError> {
        let Some(entry) = self.get(key) else {
            return Ok(None);
        };
        match entry.value.get_ref().as_str() {
            Some(text) if !text.trim().is_empty() => {
                Ok(Some(Placed { value: text.to_owned(), span: entry.value.span() }))
            }
            Some(_) => Err(self.wrong(&entry, "a text that is not empty")),
            None => Err(self.wrong(&entry, "a text in quotes")),
        }
    }

    /// Reads a whole number in `least..=most`.
    pub(super) fn whole(
        &self,
        key: &str,
        least: u64,
        most: u64,
    ) -> Result<Option<Placed<u64>>, PlanError> {
        let Some(entry) = self.get(key) else {
            return Ok(None);
        };
        let value = integer(entry.value.get_ref()).and_then(|value| u64::try_from(value).ok());
        match value {
            Some(value) if (least..=most).contains(&value) => {
                Ok(Some(Placed { value, span: entry.value.span() }))
            }
            _ => Err(self.wrong(&entry, &format!("a whole number from {least} to {most}"))),
        }
    }

    /// Reads a finite number.
    pub(super) fn number(
        &self,
        key: &str,
        expected: &str,
    ) -> Result<Option<Placed<f64>>, PlanError> {
        let Some(entry) = self.get(key) else {
            return Ok(None);
        };
        let value = match entry.value.get_ref() {
            DeValue::Float(float) => float.as_str().parse::<f64>().ok(),
            value => integer(value).map(|value| value as f64),
        };
        match value.filter(|value| value.is_finite()) {
            Some(value) => Ok(Some(Placed { value, span: entry.value.span() })),
            None => Err(self.wrong(&entry, expected)),
        }
    }

    /// Reads a table, `[name]` or inline.
    pub(super) fn table(
        &self,
        key: &str,
        name: &'static str,
    ) -> Result<Option<Section<'d, 't>>, PlanError> {
        let Some(entry) = self.get(key) else {
            return Ok(None);
        };
        match entry.value.get_ref() {
            DeValue::Table(table) => {
                Ok(Some(Section { document: self.document, name, table, span: entry.value.span() }))
            }
            _ => Err(self.wrong(&entry, &format!("a table: {name}"))),
        }
    }

    /// Reads a list of tables, `[[name]]`.
    pub(super) fn tables(
        &self,
        key: &str,
        name: &'static str,
    ) -> Result<Vec<Section<'d, 't>>, PlanError> {
        let Some(entry) = self.get(key) else {
            return Ok(Vec::new());
        };
        let DeValue::Array(items) = entry.value.get_ref() else {
            return Err(self.wrong(&entry, &format!("a list of tables: {name} in double brackets")));
        };
        let mut sections = Vec::new();
        for item in items.iter() {
            match item.get_ref() {
                DeValue::Table(table) => {
                    sections.push(Section {
                        document: self.document,
                        name,
                        table,
                        span: item.span(),
                    });
                }
                _ => return Err(wrong(self.document, key, item, &format!("a table: {name}"))),
            }
        }
        Ok(sections)
    }
}

/// Makes an error about a value.
pub(super) fn wrong(
    document: &Document<'_>,
    key: &str,
    value: &Spanned<DeValue<'_>>,
    expected: &str,
) -> PlanError {
    let message = format!("`{key}` is {}", kind(value.get_ref()));
    document.error(value.span(), &message, expected, None)
}

fn integer(value: &DeValue<'_>) -> Option<i64> {
    let integer = value.as_integer()?;
    i64::from_str_radix(integer.as_str(), integer.radix()).ok()
}

/// Reads a setting: a whole number, a word or a finite decimal number.
pub(super) fn setting(
    document: &Document<'_>,
    key: &str,
    value: &Spanned<DeValue<'_>>,
) -> Result<Placed<Setting>, PlanError> {
    let setting = match value.get_ref() {
        DeValue::String(word) => Some(Setting::Word(word.to_string())),
        DeValue::Float(float) => {
            float.as_str().parse::<f64>().ok().filter(|v| v.is_finite()).map(Setting::decimal)
        }
        other => integer(other).map(Setting::Integer),
    };
    match setting {
        Some(value_read) => Ok(Placed { value: value_read, span: value.span() }),
        None => {
            Err(wrong(document, key, value, "a word, a whole number or a finite decimal number"))
        }
    }
}

/// Reads a setting or a list of different settings.
pub(super) fn settings(
    document: &Document<'_>,
    key: &str,
    value: &Spanned<DeValue<'_>>,
) -> Result<Vec<Placed<Setting>>, PlanError> {
    let DeValue::Array(items) = value.get_ref() else {
        return Ok(vec![setting(document, key, value)?]);
    };
    if items.is_empty() {
        return Err(wrong(document, key, value, "at least one value in the list"));
    }
    let mut read: Vec<Placed<Setting>> = Vec::with_capacity(items.len());
    let mut seen = BTreeSet::new();
    for item in items.iter() {
        let next = setting(document, key, item)?;
        if !seen.insert(next.value.clone()) {
            let message = format!("`{key}` lists a value twice");
            return Err(document.error(next.span, &message, "different values", None));
        }
        read.push(next);
    }
    Ok(read)
}
