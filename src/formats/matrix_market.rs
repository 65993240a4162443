//! Matrix Market files, as a solution may name them for its long data.
//!
//! Read are the kinds `matrix array|coordinate real|integer general|symmetric` of the format's
//! description (R. Boisvert, R. Pozo, K. Remington, NISTIR 5935, 1996): column by column in `array`
//! files, and of a `symmetric` matrix its lower triangle only. Positions given twice are refused.

use super::{FormatError, FormatErrorKind as Kind, MAX_DENSE_ORDER, Source, read_text};
use std::path::Path;

/// A dense real matrix as read.
#[derive(Clone, Debug, PartialEq)]
pub struct RealMatrix {
    /// Number of rows.
    pub rows: usize,
    /// Number of columns.
    pub columns: usize,
    /// Rows one after another, `rows * columns` numbers.
    pub data: Vec<f64>,
    /// Line of the file that gives the size, from 1.
    pub size_line: usize,
}

/// Reads a Matrix Market file.
///
/// # Errors
/// The file is unreadable, or its text is refused; see [`parse`].
pub fn read(path: &Path) -> Result<RealMatrix, FormatError> {
    let text = read_text(path)?;
    parse(&text, &path.display().to_string())
}

#[derive(Clone, Copy, PartialEq, Eq)]
enum Layout {
    Array,
    Coordinate,
}

#[derive(Clone, Copy, PartialEq, Eq)]
enum Symmetry {
    General,
    Symmetric,
}

/// Reads the text of a Matrix Market file; `file` is the name that errors carry.
///
/// # Errors
/// Another kind than the module lists, a size beyond what the text or a dense matrix of order
/// [`MAX_DENSE_ORDER`] can hold, a number that is missing or not finite, an index out of range, an
/// entry above the diagonal of a symmetric matrix, a position given twice, anything after the data.
pub fn parse(text: &str, file: &str) -> Result<RealMatrix, FormatError> {
    let source = Source { file, text };
    let header_end = text.find('\n').unwrap_or(text.len());
    let (layout, symmetry) = read_header(source, &text[..header_end])?;
    let mut words = Words { source, at: header_end, last: (0, 0) };
    let size_line = 1 + text[..words.peek_position()].bytes().filter(|&byte| byte == b'\n').count();
    let rows = words.count("the number of rows")?;
    let (columns, column_at) = (words.count("the number of columns")?, words.last);
    let refuse_size =
        |expected: String| Err(source.error(column_at.0, column_at.1, Kind::TooLarge, expected));
    if symmetry == Symmetry::Symmetric && rows != columns {
        let expected = format!("{rows} columns in a symmetric matrix");
        return Err(source.error(column_at.0, column_at.1, Kind::OutOfRange, expected));
    }
    let cells = rows.saturating_mul(columns);
    match layout {
        Layout::Array => {
            // Half the cells of a symmetric matrix stand in the text, each with a digit and a blank.
            if cells / 4 > text.len() {
                return refuse_size("a size that the text can hold".to_owned());
            }
            read_array(&mut words, rows, columns, symmetry)
                .and_then(|data| finish(words, rows, columns, data, size_line))
        }
        Layout::Coordinate => {
            if cells > MAX_DENSE_ORDER * MAX_DENSE_ORDER {
                return refuse_size(format!("at most {} cells", MAX_DENSE_ORDER * MAX_DENSE_ORDER));
            }
            let entries = words.count("the number of entries")?;
            read_coordinates(&mut words, rows, columns, entries, symmetry)
                .and_then(|data| finish(words, rows, columns, data, size_line))
        }
    }
}

fn finish(
    mut words: Words<'_>,
    rows: usize,
    columns: usize,
    data: Vec<f64>,
    size_line: usize,
) -> Result<RealMatrix, FormatError> {
    match words.next() {
        Some((at, word)) => {
            Err(words.source.error(at, word.len(), Kind::Unexpected, "the end of the file"))
        }
        None => Ok(RealMatrix { rows, columns, data, size_line }),
    }
}

fn read_header(source: Source<'_>, line: &str) -> Result<(Layout, Symmetry), FormatError> {
    let mut at = 0;
    let mut next = |expected: &str, allowed: &[&str]| {
        let start = at + line[at..].len() - line[at..].trim_start().len();
        let length = line[start..].find(char::is_whitespace).unwrap_or(line.len() - start);
        at = start + length;
        let word = line[start..at].to_ascii_lowercase();
        let found = allowed.iter().position(|candidate| *candidate == word);
        found.ok_or_else(|| {
            let kind = if length == 0 { Kind::EndOfLine } else { Kind::Unexpected };
            source.error(start, length, kind, expected)
        })
    };
    next("the header `%%MatrixMarket`", &["%%matrixmarket"])?;
    next("`matrix`", &["matrix"])?;
    let layout = next("`array` or `coordinate`", &["array", "coordinate"])?;
    next("`real` or `integer`", &["real", "integer"])?;
    let symmetry = next("`general` or `symmetric`", &["general", "symmetric"])?;
    let layout = if layout == 0 { Layout::Array } else { Layout::Coordinate };
    Ok((layout, if symmetry == 0 { Symmetry::General } else { Symmetry::Symmetric }))
}

/// The words after the header, comment lines left out.
#[derive(Clone, Copy)]
struct Words<'a> {
    source: Source<'a>,
    at: usize,
    last: (usize, usize),
}

impl<'a> Words<'a> {
    fn peek_position(&self) -> usize {
        let mut copy = *self;
        copy.next().map_or(self.source.text.len(), |(at, _)| at)
    }

    fn next(&mut self) -> Option<(usize, &'a str)> {
        let text = self.source.text;
        loop {
            let rest = &text[self.at..];
            let start = self.at + (rest.len() - rest.trim_start().len());
            let rest = &text[start..];
            if rest.starts_with('%') && starts_its_line(text, start) {
                self.at = rest.find('\n').map_or(text.len(), |position| start + position);
                continue;
            }
            let length = rest.find(char::is_whitespace).unwrap_or(rest.len());
            self.at = start + length;
            self.last = (start, length);
            return (length > 0).then_some((start, &text[start..start + length]));
        }
    }

    fn count(&mut self, expected: &str) -> Result<usize, FormatError> {
        self.index(usize::MAX, expected, 0)
    }

    fn index(&mut self, most: usize, expected: &str, least: usize) -> Result<usize, FormatError> {
        let (at, word) = self.next().ok_or_else(|| self.source.end_error(expected))?;
        match word.parse::<usize>() {
            Ok(value) if (least..=most).contains(&value) => Ok(value),
            Ok(_) => Err(self.source.error(at, word.len(), Kind::OutOfRange, expected)),
            Err(_) => Err(self.source.error(at, word.len(), Kind::Unexpected, expected)),
        }
    }

    fn number(&mut self) -> Result<f64, FormatError> {
        let expected = "a number";
        let (at, word) = self.next().ok_or_else(|| self.source.end_error(expected))?;
        match word.parse::<f64>() {
            Ok(value) if value.is_finite() => Ok(value),
            Ok(_) => Err(self.source.error(at, word.len(), Kind::NotFinite, "a finite number")),
            Err(_) => Err(self.source.error(at, word.len(), Kind::Unexpected, expected)),
        }
    }
}

fn starts_its_line(text: &str, position: usize) -> bool {
    let line_start = text[..position].rfind('\n').map_or(0, |at| at + 1);
    text[line_start..position].trim().is_empty()
}

fn read_array(
    words: &mut Words<'_>,
    rows: usize,
    columns: usize,
    symmetry: Symmetry,
) -> Result<Vec<f64>, FormatError> {
    let mut data = vec![0.0; rows * columns];
    for j in 0..columns {
        let first = if symmetry == Symmetry::Symmetric { j } else { 0 };
        for i in first..rows {
            let value = words.number()?;
            data[i * columns + j] = value;
            if symmetry == Symmetry::Symmetric {
                data[j * columns + i] = value;
            }
        }
    }
    Ok(data)
}

fn read_coordinates(
    words: &mut Words<'_>,
    rows: usize,
    columns: usize,
    entries: usize,
    symmetry: Symmetry,
) -> Result<Vec<f64>, FormatError> {
    let mut data = vec![0.0; rows * columns];
    let mut given = vec![false; rows * columns];
    for _ in 0..entries {
        let i = words.index(rows, &format!("a row from 1 to {rows}"), 1)? - 1;
        let row_at = words.last;
        let j = words.index(columns, &format!("a column from 1 to {columns}"), 1)? - 1;
        if symmetry == Symmetry::Symmetric && i < j {
            let expected = "an entry of the lower triangle of a symmetric matrix";
            return Err(words.source.error(row_at.0, row_at.1, Kind::OutOfRange, expected));
        }
        if std::mem::replace(&mut given[i * columns + j], true) {
            let expected = "a position that no earlier entry gives";
            return Err(words.source.error(row_at.0, row_at.1, Kind::Duplicate, expected));
        }
        let value = words.number()?;
        data[i * columns + j] = value;
        if symmetry == Symmetry::Symmetric {
            data[j * columns + i] = value;
        }
    }
    Ok(data)
}
