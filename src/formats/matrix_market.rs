//! Matrix Market files, as a solution may name them for its long data.
//!
//! Read are the kinds `matrix array|coordinate real|integer general|symmetric` of the format's
//! description (R. Boisvert, R. Pozo, K. Remington, NISTIR 5935, 1996): column by column in `array`
//! files, and of a `symmetric` matrix its lower triangle only. Positions given twice are refused.

use super::{
    FormatError, FormatErrorKind as Kind, MAX_DENSE_ORDER, MAX_FILE_BYTES, Source, read_text,
};
use std::ops::RangeInclusive;
use std::path::Path;

/// Cells for which memory is taken without asking whether the text can hold them.
const FEW_CELLS: usize = 1 << 12;

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

/// The shapes that a reader accepts.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Shape {
    /// Number of rows.
    pub rows: usize,
    /// Numbers of columns.
    pub columns: RangeInclusive<usize>,
}

impl Shape {
    /// Says what is accepted, for messages.
    fn sentence(&self) -> String {
        let (least, most) = (self.columns.start(), self.columns.end());
        let columns = if least == most { least.to_string() } else { format!("{least} to {most}") };
        format!("{} rows and {columns} columns", self.rows)
    }
}

/// Reads a Matrix Market file.
///
/// # Errors
/// The file is unreadable, or its text is refused; see [`parse`].
pub fn read(path: &Path) -> Result<RealMatrix, FormatError> {
    let text = read_text(path, MAX_FILE_BYTES)?;
    parse(&text, &path.display().to_string())
}

/// Reads a Matrix Market file of at most `most_bytes` bytes that must hold a matrix of the given shape.
///
/// # Errors
/// The file is unreadable or longer, or its text is refused; see [`parse_shaped`].
pub fn read_shaped(path: &Path, shape: &Shape, most_bytes: u64) -> Result<RealMatrix, FormatError> {
    let text = read_text(path, most_bytes)?;
    parse_shaped(&text, &path.display().to_string(), shape)
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
    parse_text(Source { file, text }, None)
}

/// Reads the text of a Matrix Market file that must hold a matrix of the given shape; another one is
/// refused before memory is taken for it.
///
/// # Errors
/// Those of [`parse`], and a size that is not in `shape`.
pub fn parse_shaped(text: &str, file: &str, shape: &Shape) -> Result<RealMatrix, FormatError> {
    parse_text(Source { file, text }, Some(shape))
}

fn parse_text(source: Source<'_>, shape: Option<&Shape>) -> Result<RealMatrix, FormatError> {
    let text = source.text;
    let header_end = text.find('\n').unwrap_or(text.len());
    let (layout, symmetry) = read_header(source, &text[..header_end])?;
    let mut words = Words { source, at: header_end, last: (0, 0) };
    let size_line = 1 + text[..words.peek_position()].bytes().filter(|&byte| byte == b'\n').count();
    let (rows, row_at) =
        (words.index(usize::MAX, "the number of rows, at least 1", 1)?, words.last);
    let (columns, column_at) = (words.count("the number of columns")?, words.last);
    let refuse = |at: (usize, usize), kind: Kind, expected: String| {
        Err(source.error(at.0, at.1, kind, expected))
    };
    if let Some(shape) = shape
        && !(rows == shape.rows && shape.columns.contains(&columns))
    {
        let at = if rows == shape.rows { column_at } else { row_at };
        return refuse(at, Kind::OutOfRange, shape.sentence());
    }
    if symmetry == Symmetry::Symmetric && rows != columns {
        let expected = format!("{rows} columns in a symmetric matrix");
        return refuse(column_at, Kind::OutOfRange, expected);
    }
    let cells = rows.saturating_mul(columns);
    let data = match layout {
        Layout::Array => {
            // Each number takes a digit and what parts it from the one before; a symmetric matrix gives
            // at least half of its cells.
            let held = text.len() - words.at;
            let most = if symmetry == Symmetry::Symmetric { held } else { held / 2 };
            // A small matrix that is cut short is refused where the text ends.
            if cells > most.max(FEW_CELLS) {
                let expected = format!("a size of at most {most} cells, which the text can hold");
                return refuse(column_at, Kind::TooLarge, expected);
            }
            read_array(&mut words, rows, columns, symmetry)?
        }
        Layout::Coordinate => {
            let most = MAX_DENSE_ORDER * MAX_DENSE_ORDER;
            if cells > most {
                return refuse(column_at, Kind::TooLarge, format!("at most {most} cells"));
            }
            let entries = words.count("the number of entries")?;
            read_coordinates(&mut words, rows, columns, entries, symmetry)?
        }
    };
    finish(words, rows, columns, data, size_line)
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
