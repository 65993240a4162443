//! Failures of a command: what is told, with a snippet where there is a place, and the exit code.

use std::fmt;
use std::io::IsTerminal;
use std::process::ExitCode;

use miette::{
    Diagnostic, GraphicalReportHandler, GraphicalTheme, LabeledSpan, MietteError,
    MietteSpanContents, SourceCode, SourceSpan, SpanContents,
};

use super::output::tell;
use crate::formats::FormatError;
use crate::runner::{InputError, PlanError, RunError};

/// Exit code for a defect of this program.
const DEFECT: u8 = 1;

/// Exit code for bad usage or bad input.
const INPUT: u8 = 2;

/// Why a command ends early.
#[derive(Debug)]
pub(super) struct Failure {
    code: u8,
    message: String,
    snippet: Option<Box<Snippet>>,
}

/// One line of a file with the place of a token in it.
#[derive(Debug)]
struct Snippet {
    file: String,
    /// Line, from 0.
    line: usize,
    text: String,
    token: SourceSpan,
    label: String,
}

impl Failure {
    /// Makes a failure by bad usage or bad input.
    pub(super) fn input(message: impl fmt::Display) -> Self {
        Failure { code: INPUT, message: message.to_string(), snippet: None }
    }

    /// Makes a failure by a defect of this program.
    pub(super) fn defect(message: impl fmt::Display) -> Self {
        Failure { code: DEFECT, message: message.to_string(), snippet: None }
    }

    /// Tells it on standard error and returns the exit code.
    pub(super) fn tell(&self) -> ExitCode {
        tell(&format!("error: {}", self.message));
        if self.snippet.is_some() {
            let colours = std::io::stderr().is_terminal() && std::env::var_os("NO_COLOR").is_none();
            let theme = if colours { GraphicalTheme::unicode() } else { GraphicalTheme::none() };
            let handler =
                GraphicalReportHandler::new_themed(theme).with_wrap_lines(false).with_links(false);
            let mut drawn = String::new();
            if handler.render_report(&mut drawn, self).is_ok() {
                // The message has been told in one line; what is wanted here is the snippet.
                let lines: Vec<&str> = drawn
                    .lines()
                    .skip_while(|line| !line.contains("-[") && !line.contains("─["))
                    .collect();
                tell(lines.join("\n").trim_end());
            }
        }
        ExitCode::from(self.code)
    }
}

impl fmt::Display for Failure {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str(&self.message)
    }
}

impl std::error::Error for Failure {}

impl Diagnostic for Failure {
    fn source_code(&self) -> Option<&dyn SourceCode> {
        self.snippet.as_ref().map(|snippet| &**snippet as &dyn SourceCode)
    }

    fn labels(&self) -> Option<Box<dyn Iterator<Item = LabeledSpan> + '_>> {
        let snippet = self.snippet.as_ref()?;
        let label = LabeledSpan::new_with_span(Some(snippet.label.clone()), snippet.token);
        Some(Box::new(std::iter::once(label)))
    }
}

impl SourceCode for Snippet {
    fn read_span<'a>(
        &'a self,
        _span: &SourceSpan,
        _before: usize,
        _after: usize,
    ) -> Result<Box<dyn SpanContents<'a> + 'a>, MietteError> {
        Ok(Box::new(MietteSpanContents::new_named(
            self.file.clone(),
            self.text.as_bytes(),
            SourceSpan::from(0..self.text.len()),
            self.line,
            0,
            1,
        )))
    }
}

impl From<&PlanError> for Failure {
    fn from(error: &PlanError) -> Self {
        let start = error.text[..error.span.start].rfind('\n').map_or(0, |at| at + 1);
        let line = error.text[start..].lines().next().unwrap_or("");
        let from = error.span.start - start;
        let length = (error.span.end - error.span.start).min(line.len().saturating_sub(from));
        let snippet = Snippet {
            file: error.file.clone(),
            line: error.line - 1,
            text: line.to_owned(),
            token: SourceSpan::from(from..from + length),
            label: if error.expected.is_empty() {
                "here".to_owned()
            } else {
                format!("expected {}", error.expected)
            },
        };
        Failure { code: INPUT, message: error.to_string(), snippet: Some(Box::new(snippet)) }
    }
}

impl From<&FormatError> for Failure {
    fn from(error: &FormatError) -> Self {
        let snippet = error.excerpt.as_ref().map(|excerpt| {
            Box::new(Snippet {
                file: error.file.clone(),
                line: error.line.saturating_sub(1),
                text: excerpt.text.clone(),
                token: SourceSpan::from(excerpt.start..excerpt.start + excerpt.length),
                label: format!("expected {}", error.expected),
            })
        });
        Failure { code: INPUT, message: error.to_string(), snippet }
    }
}

impl From<InputError> for Failure {
    fn from(error: InputError) -> Self {
        match &error {
            InputError::Format(error) => Failure::from(error),
            other => Failure::input(other),
        }
    }
}

impl From<RunError> for Failure {
    fn from(error: RunError) -> Self {
        match error {
            RunError::Plan(error) => Failure::from(&error),
            RunError::Input(error) => Failure::from(*error),
            RunError::Internal { .. } => Failure::defect(error),
            other => Failure::input(other),
        }
    }
}
