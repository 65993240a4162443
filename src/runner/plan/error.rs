//! What is wrong with a plan, and where.

use std::fmt;
use std::ops::Deref;

use super::Span;

/// An error in a plan. Its fields are those of [`Located`]; it is one pointer wide.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct PlanError(Box<Located>);

impl Deref for PlanError {
    type Target = Located;

    fn deref(&self) -> &Located {
        &self.0
    }
}

/// Where an error is, what stands there, and what was expected.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Located {
    /// Name of the plan file.
    pub file: String,
    /// Line, from 1.
    pub line: usize,
    /// Column in characters, from 1.
    pub column: usize,
    /// Byte offsets in the text.
    pub span: Span,
    /// What stands there, its first line; empty when something is missing.
    pub token: String,
    /// What is wrong.
    pub message: String,
    /// What was expected; empty when the message says it.
    pub expected: String,
    /// Nearest valid word, if one is near.
    pub nearest: Option<String>,
    /// The whole text, for a snippet.
    pub text: String,
}

impl PlanError {
    /// Locates an error in `text`.
    pub(super) fn locate(
        text: &str,
        file: &str,
        span: Span,
        message: &str,
        expected: &str,
        nearest: Option<&str>,
    ) -> Self {
        let mut start = span.start.min(text.len());
        while !text.is_char_boundary(start) {
            start -= 1;
        }
        let mut end = span.end.clamp(start, text.len());
        while !text.is_char_boundary(end) {
            end += 1;
        }
        let before = &text[..start];
        let line_start = before.rfind('\n').map_or(0, |at| at + 1);
        let mut token: String =
            text[start..end].lines().next().unwrap_or("").chars().take(60).collect();
        if token.len() < text[start..end].len() && !token.is_empty() {
            token.push_str("...");
        }
        PlanError(Box::new(Located {
            file: file.to_owned(),
            line: before.matches('\n').count() + 1,
            column: before[line_start..].chars().count() + 1,
            span: start..end,
            token,
            message: message.to_owned(),
            expected: expected.to_owned(),
            nearest: nearest.map(str::to_owned),
            text: text.to_owned(),
        }))
    }
}

impl fmt::Display for PlanError {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        write!(f, "{}:{}:{}: {}", self.file, self.line, self.column, self.message)?;
        if self.expected.is_empty() {
            return Ok(());
        }
        if !self.token.is_empty() {
            write!(f, ": found `{}`", self.token)?;
        }
        write!(f, ", expected {}", self.expected)?;
        if let Some(word) = &self.nearest {
            write!(f, " (did you mean `{word}`?)")?;
        }
        Ok(())
    }
}

impl std::error::Error for PlanError {}
