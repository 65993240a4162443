//! File formats: sparse SDPA, the native instance and solution files, Matrix Market, power networks.
//!
//! Every reader takes text from outside, so it trusts nothing: a size is held against a limit or
//! against the length of the text before memory is taken for it, and whatever is refused is refused
//! with file, line, column, the token found and what was expected in its place. This module does not
//! print, and it does not solve or judge.

pub mod instance;
mod json;
pub mod matrix_market;
pub mod network;
mod rows;
pub mod sdpa;
pub mod solution;

use crate::problem::{Block, Problem, ProblemError};
use std::path::Path;

/// Largest file that is read, in bytes.
pub const MAX_FILE_BYTES: u64 = 1 << 30;

/// Largest sum of the orders of all blocks and the size of the nonnegative part that is read.
pub const MAX_TOTAL_ORDER: usize = 1_000_000;

/// Largest order of a block that a solution file may give as a dense or sparse symmetric matrix:
/// the point is then held densely, 8 n^2 bytes (128 MiB here). Larger blocks are given by a factor.
pub const MAX_DENSE_ORDER: usize = 4096;

/// What is wrong at the position of a [`FormatError`].
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum FormatErrorKind {
    /// The file cannot be opened or read.
    Unreadable,
    /// A size is beyond a limit, or beyond what a text of this length can hold.
    TooLarge,
    /// The bytes are not UTF-8 text.
    NotText,
    /// The text ends where more is needed.
    EndOfFile,
    /// The line ends where more is needed.
    EndOfLine,
    /// A token, or the structure around it, is not what the format has in this place.
    Unexpected,
    /// An index or a size is outside its range.
    OutOfRange,
    /// An entry stands below the diagonal.
    LowerTriangle,
    /// An entry of a diagonal block stands off the diagonal.
    OffDiagonal,
    /// A position is given twice.
    Duplicate,
    /// A number is not finite.
    NotFinite,
    /// The digest in the file is not the digest of what the file holds.
    Digest,
}

/// The line of a text around an error, cut to a readable length.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Excerpt {
    /// The line, or the part of it around the token.
    pub text: String,
    /// Byte position of the token in `text`.
    pub start: usize,
    /// Byte length of the token in `text`; 0 when the text or the line ends there.
    pub length: usize,
}

/// Says what is wrong with a file and where.
#[derive(Clone, Debug, PartialEq, Eq, thiserror::Error)]
#[error("{}", self.sentence())]
pub struct FormatError {
    /// Name of the file as the caller gave it.
    pub file: String,
    /// Line, from 1; 0 when the error is not at a position (an unreadable file).
    pub line: usize,
    /// Column, from 1, in characters; 0 when the error is not at a position.
    pub column: usize,
    /// The token found; empty at the end of the line or of the file.
    pub token: String,
    /// What was expected there.
    pub expected: String,
    /// What kind of mistake it is.
    pub kind: FormatErrorKind,
    /// The line around the token, when the error is at a position.
    pub excerpt: Option<Box<Excerpt>>,
}

impl FormatError {
    fn unreadable(file: &str, reason: &str) -> Self {
        FormatError {
            file: file.to_owned(),
            line: 0,
            column: 0,
            token: reason.to_owned(),
            expected: "a readable file".to_owned(),
            kind: FormatErrorKind::Unreadable,
            excerpt: None,
        }
    }

    fn sentence(&self) -> String {
        let place = if self.line == 0 {
            self.file.clone()
        } else {
            format!("{}:{}:{}", self.file, self.line, self.column)
        };
        let found = match self.kind {
            FormatErrorKind::EndOfFile => "the end of the file".to_owned(),
            FormatErrorKind::EndOfLine => "the end of the line".to_owned(),
            _ => format!("`{}`", self.token),
        };
        format!("{place}: expected {}, found {found}", self.expected)
    }
}

/// A text under reading, with the name it is reported by.
#[derive(Clone, Copy)]
struct Source<'a> {
    file: &'a str,
    text: &'a str,
}

/// Most bytes of a line that an excerpt shows on each side of the token.
const EXCERPT_REACH: usize = 60;

/// Most characters of a token that an error repeats.
const TOKEN_REACH: usize = 40;

impl<'a> Source<'a> {
    /// Makes the error for the token of `length` bytes at byte `offset`.
    fn error(
        &self,
        offset: usize,
        length: usize,
        kind: FormatErrorKind,
        expected: impl Into<String>,
    ) -> FormatError {
        let offset = self.boundary(offset.min(self.text.len()));
        let end = self.boundary((offset + length).min(self.text.len()));
        let before = &self.text[..offset];
        let line_start = before.rfind('\n').map_or(0, |position| position + 1);
        let line_end = self.text[offset..].find('\n').map_or(self.text.len(), |at| offset + at);
        let from = self.boundary(line_start.max(offset.saturating_sub(EXCERPT_REACH)));
        let until = self.boundary(line_end.min(offset + EXCERPT_REACH));
        let shown_end = end.min(until).max(offset);
        let blank_free = self.text[from..until].trim_end().len();
        let shown = blank_free.max(shown_end - from);
        FormatError {
            file: self.file.to_owned(),
            line: 1 + before.bytes().filter(|&byte| byte == b'\n').count(),
            column: 1 + self.text[line_start..offset].chars().count(),
            token: shorten(self.text[offset..end].trim_end()),
            expected: expected.into(),
            kind,
            excerpt: Some(Box::new(Excerpt {
                text: self.text[from..from + shown].to_owned(),
                start: offset - from,
                length: shown_end - offset,
            })),
        }
    }

    /// Makes the error for a text that ends too early.
    fn end_error(&self, expected: impl Into<String>) -> FormatError {
        let end = self.text.trim_end().len();
        self.error(end, 0, FormatErrorKind::EndOfFile, expected)
    }

    /// Moves a byte position back to the start of its character.
    fn boundary(&self, mut position: usize) -> usize {
        while !self.text.is_char_boundary(position) {
            position -= 1;
        }
        position
    }
}

fn shorten(token: &str) -> String {
    shorten_to(token, TOKEN_REACH)
}

/// Cuts a text to `most` characters; dots stand for the rest.
fn shorten_to(text: &str, most: usize) -> String {
    match text.char_indices().nth(most) {
        None => text.to_owned(),
        Some((end, _)) => format!("{}...", &text[..end]),
    }
}

/// Reads a whole file of at most `most` bytes as text.
fn read_text(path: &Path, most: u64) -> Result<String, FormatError> {
    let file = path.display().to_string();
    let unreadable =
        |reason: &dyn std::fmt::Display| FormatError::unreadable(&file, &reason.to_string());
    let metadata = std::fs::metadata(path).map_err(|error| unreadable(&error))?;
    if !metadata.is_file() {
        return Err(unreadable(&"not a regular file"));
    }
    if metadata.len() > most {
        let reason = format!("{} bytes, more than {most}", metadata.len());
        return Err(FormatError { kind: FormatErrorKind::TooLarge, ..unreadable(&reason) });
    }
    let bytes = std::fs::read(path).map_err(|error| unreadable(&error))?;
    text_of(bytes, &file)
}

/// Turns bytes into text, or names the position of the first byte that is not UTF-8.
fn text_of(bytes: Vec<u8>, file: &str) -> Result<String, FormatError> {
    String::from_utf8(bytes).map_err(|error| {
        let good = error.utf8_error().valid_up_to();
        let bytes = error.into_bytes();
        let line = 1 + bytes[..good].iter().filter(|&&byte| byte == b'\n').count();
        let line_start =
            bytes[..good].iter().rposition(|&byte| byte == b'\n').map_or(0, |at| at + 1);
        FormatError {
            file: file.to_owned(),
            line,
            column: 1 + String::from_utf8_lossy(&bytes[line_start..good]).chars().count(),
            token: format!("byte 0x{:02x}", bytes[good]),
            expected: "UTF-8 text".to_owned(),
            kind: FormatErrorKind::NotText,
            excerpt: None,
        }
    })
}

/// Bounds the rank of the PSD blocks of an imported problem by one number.
///
/// The bound is set on every PSD block of order at least `rank`, replacing a bound that is there; a
/// smaller block cannot exceed it and is left free. Neither format-given data nor the order of
/// anything changes.
///
/// # Errors
/// `rank` is 0 and there is a PSD block.
pub fn with_ranks(problem: &Problem, rank: usize) -> Result<Problem, ProblemError> {
    let blocks = problem
        .blocks()
        .iter()
        .map(|block| Block { order: block.order, rank: (block.order >= rank).then_some(rank) })
        .collect();
    Problem::new(
        blocks,
        problem.orthant(),
        problem.cost().clone(),
        problem.constraints().to_vec(),
        problem.rhs().to_vec(),
    )
}
