//! The reader of sparse SDPA text, token by token.

use super::FileBlock;
use crate::formats::{FormatError, FormatErrorKind as Kind, MAX_TOTAL_ORDER, Source};

/// One entry line.
#[derive(Clone, Copy)]
pub(super) struct Entry {
    pub matrix: usize,
    pub block: usize,
    pub row: usize,
    pub column: usize,
    pub value: f64,
    offset: usize,
}

/// A token: byte offset in the text, and its text.
type Token<'a> = (usize, &'a str);

/// A text and how far it has been read.
pub(super) struct Reader<'a> {
    pub source: Source<'a>,
    cursor: usize,
}

impl<'a> Reader<'a> {
    pub fn new(source: Source<'a>) -> Self {
        Reader { source, cursor: 0 }
    }

    /// Takes the next line that is neither a comment nor without tokens: its start, and its text.
    fn next_line(&mut self) -> Option<Token<'a>> {
        let text = self.source.text;
        while self.cursor < text.len() {
            let start = self.cursor;
            let end = text[start..].find('\n').map_or(text.len(), |at| start + at);
            self.cursor = end + 1;
            let line = &text[start..end];
            if !is_comment(line) && tokens((start, line)).next().is_some() {
                return Some((start, line));
            }
        }
        None
    }

    fn error(&self, token: Token<'_>, kind: Kind, expected: impl Into<String>) -> FormatError {
        self.source.error(token.0, token.1.len(), kind, expected)
    }

    fn remaining(&self) -> usize {
        self.source.text.len().saturating_sub(self.cursor)
    }

    /// Reads a positive count that stands first on its line, with any text after it.
    fn read_count(&mut self, what: &str) -> Result<usize, FormatError> {
        let line = self.next_line().ok_or_else(|| self.source.end_error(what))?;
        let token = tokens(line).next().expect("the line has a token");
        let count =
            leading_integer(token.1).ok_or_else(|| self.error(token, Kind::Unexpected, what))?;
        if count < 1 {
            return Err(self.error(token, Kind::OutOfRange, what));
        }
        // A number of the vector c or a block size takes at least a digit and what parts it from the next.
        let most = self.remaining() / 2 + 1;
        match usize::try_from(count) {
            Ok(count) if count <= most => Ok(count),
            _ => {
                let expected = format!(
                    "{what} of at most {most}, which is all that the text after it can hold"
                );
                Err(self.error(token, Kind::TooLarge, expected))
            }
        }
    }

    pub fn read_constraint_count(&mut self) -> Result<usize, FormatError> {
        self.read_count("the number of constraints, a positive whole number")
    }

    pub fn read_blocks(&mut self) -> Result<Vec<FileBlock>, FormatError> {
        let count = self.read_count("the number of blocks, a positive whole number")?;
        let mut blocks = Vec::with_capacity(count);
        let (mut psd, mut orthant, mut total) = (0, 0, 0usize);
        while blocks.len() < count {
            let expected =
                format!("the size of block {} of {count}, a whole number but 0", blocks.len() + 1);
            let line = self.next_line().ok_or_else(|| self.source.end_error(&expected))?;
            for token in tokens(line).take(count - blocks.len()) {
                let expected = format!(
                    "the size of block {} of {count}, a whole number but 0",
                    blocks.len() + 1
                );
                let size = leading_integer(token.1)
                    .ok_or_else(|| self.error(token, Kind::Unexpected, &expected))?;
                if size == 0 {
                    return Err(self.error(token, Kind::OutOfRange, &expected));
                }
                let order = usize::try_from(size.unsigned_abs()).unwrap_or(usize::MAX);
                total = total.saturating_add(order);
                if total > MAX_TOTAL_ORDER {
                    let expected = format!("block sizes that sum to at most {MAX_TOTAL_ORDER}");
                    return Err(self.error(token, Kind::TooLarge, expected));
                }
                if size >= 2 {
                    blocks.push(FileBlock::Psd { block: psd, order });
                    psd += 1;
                } else {
                    blocks.push(FileBlock::Nonnegative { first: orthant, count: order });
                    orthant += order;
                }
            }
        }
        Ok(blocks)
    }

    pub fn read_rhs(&mut self, count: usize) -> Result<Vec<f64>, FormatError> {
        let mut rhs = Vec::with_capacity(count);
        while rhs.len() < count {
            let expected = format!("number {} of the {count} of the vector c", rhs.len() + 1);
            let line = self.next_line().ok_or_else(|| self.source.end_error(&expected))?;
            for token in tokens(line) {
                if rhs.len() == count {
                    let expected =
                        format!("the end of the line after the {count} numbers of the vector c");
                    return Err(self.error(token, Kind::Unexpected, expected));
                }
                let expected = format!("number {} of the {count} of the vector c", rhs.len() + 1);
                rhs.push(self.finite(token, &expected)?);
            }
        }
        Ok(rhs)
    }

    fn finite(&self, token: Token<'_>, expected: &str) -> Result<f64, FormatError> {
        match token.1.parse::<f64>() {
            Ok(value) if value.is_finite() => Ok(value),
            Ok(_) => Err(self.error(token, Kind::NotFinite, format!("{expected}, finite"))),
            Err(_) => Err(self.error(token, Kind::Unexpected, expected)),
        }
    }

    pub fn read_entries(
        &mut self,
        constraints: usize,
        blocks: &[FileBlock],
    ) -> Result<Vec<Entry>, FormatError> {
        let mut entries = Vec::new();
        while let Some(line) = self.next_line() {
            entries.push(self.read_entry(line, constraints, blocks)?);
        }
        if entries.is_empty() {
            return Err(self.source.end_error("an entry: matrix, block, row, column and value"));
        }
        entries.sort_by_key(|entry| {
            (entry.matrix, entry.block, entry.column, entry.row, entry.offset)
        });
        let repeated = entries
            .windows(2)
            .filter(|pair| {
                let key = |entry: &Entry| (entry.matrix, entry.block, entry.column, entry.row);
                key(&pair[0]) == key(&pair[1])
            })
            .map(|pair| pair[1])
            .min_by_key(|entry| entry.offset);
        if let Some(entry) = repeated {
            let line = self.source.text[entry.offset..].lines().next().unwrap_or_default();
            let expected = "a position that no earlier line gives";
            return Err(self.error((entry.offset, line), Kind::Duplicate, expected));
        }
        Ok(entries)
    }

    fn read_entry(
        &self,
        line: Token<'a>,
        constraints: usize,
        blocks: &[FileBlock],
    ) -> Result<Entry, FormatError> {
        let mut parts = tokens(line);
        let mut next = |expected: &str| {
            let end = line.0 + line.1.trim_end().len();
            parts.next().ok_or_else(|| self.source.error(end, 0, Kind::EndOfLine, expected))
        };
        let expected = format!("a matrix number from 0 to {constraints}");
        let token = next(&expected)?;
        let offset = token.0;
        let matrix = self.index(token, 0, constraints, &expected)?;
        let expected = format!("a block number from 1 to {}", blocks.len());
        let block = self.index(next(&expected)?, 1, blocks.len(), &expected)? - 1;
        let size = blocks[block].size();
        let expected = format!("a row from 1 to {size}");
        let row_token = next(&expected)?;
        let row = self.index(row_token, 1, size, &expected)?;
        let expected = format!("a column from 1 to {size}");
        let column_token = next(&expected)?;
        let column = self.index(column_token, 1, size, &expected)?;
        if row > column {
            let expected = format!(
                "an entry of the upper triangle, with a row of at most its column {column}"
            );
            return Err(self.error(row_token, Kind::LowerTriangle, expected));
        }
        if row != column && matches!(blocks[block], FileBlock::Nonnegative { .. }) {
            let expected = format!("column {row}, as block {} is diagonal", block + 1);
            return Err(self.error(column_token, Kind::OffDiagonal, expected));
        }
        let value = self.finite(
            next("the value of the entry, a number")?,
            "the value of the entry, a number",
        )?;
        if let Some(extra) = parts.next() {
            return Err(self.error(
                extra,
                Kind::Unexpected,
                "the end of the line after five numbers",
            ));
        }
        Ok(Entry { matrix, block, row: row - 1, column: column - 1, value, offset })
    }

    fn index(
        &self,
        token: Token<'_>,
        least: usize,
        most: usize,
        expected: &str,
    ) -> Result<usize, FormatError> {
        match token.1.parse::<i128>() {
            Ok(value) if value >= least as i128 && value <= most as i128 => Ok(value as usize),
            Ok(_) => Err(self.error(token, Kind::OutOfRange, expected)),
            Err(_) => Err(self.error(token, Kind::Unexpected, expected)),
        }
    }
}

fn is_comment(line: &str) -> bool {
    line.trim_start().starts_with(['"', '*'])
}

/// Splits a line at blanks and punctuation.
fn tokens<'a>(line: Token<'a>) -> impl Iterator<Item = Token<'a>> {
    let (start, text) = line;
    text.split(|c: char| c.is_whitespace() || matches!(c, ',' | '(' | ')' | '{' | '}'))
        .filter(|token| !token.is_empty())
        .map(move |token| (start + (token.as_ptr() as usize - text.as_ptr() as usize), token))
}

/// Reads the whole number a token starts with; a sign such as `=` may follow it, a letter, digit or point may not.
fn leading_integer(token: &str) -> Option<i64> {
    let unsigned = token.strip_prefix(['+', '-']).unwrap_or(token);
    let digits = unsigned.len() - unsigned.trim_start_matches(|c: char| c.is_ascii_digit()).len();
    let rest = &unsigned[digits..];
    if digits == 0
        || rest.starts_with(|c: char| c.is_alphanumeric() || matches!(c, '.' | '+' | '-'))
    {
        return None;
    }
    let number = &token[..token.len() - rest.len()];
    // Saturates: a number this long is refused as too large in its place.
    let limit = if token.starts_with('-') { i64::MIN } else { i64::MAX };
    Some(number.parse().unwrap_or(limit))
}
