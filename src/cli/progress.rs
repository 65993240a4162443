//! The progress of a run on standard error: a bar on a terminal, a line a trial when verbose.

use std::io::IsTerminal;
use std::sync::{Mutex, PoisonError};

use indicatif::{ProgressBar, ProgressStyle};

use super::Loudness;
use super::output::tell;
use crate::record::Record;
use crate::runner::Observer;

/// Whether there may be a bar.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(super) enum Bar {
    /// When standard error is a terminal.
    OnTerminals,
    /// Not at all.
    Never,
}

/// Tells the progress of a run.
pub(super) struct Progress {
    loudness: Loudness,
    bar: Bar,
    running: Mutex<Option<ProgressBar>>,
}

impl Progress {
    pub(super) fn new(loudness: Loudness, bar: Bar) -> Self {
        Progress { loudness, bar, running: Mutex::new(None) }
    }

    /// Takes the bar away.
    pub(super) fn end(&self) {
        if let Some(bar) = self.running.lock().unwrap_or_else(PoisonError::into_inner).take() {
            bar.finish_and_clear();
        }
    }

    /// Says what begins, and shows a bar where there may be one.
    fn start(&self, pending: usize, text: &str) {
        if self.loudness == Loudness::Quiet {
            return;
        }
        tell(text);
        if self.bar == Bar::OnTerminals && std::io::stderr().is_terminal() {
            let style = ProgressStyle::with_template(
                "{bar:40} {pos}/{len} {elapsed} (about {eta} to go) {msg}",
            );
            let bar = ProgressBar::new(pending as u64);
            bar.set_style(style.unwrap_or_else(|_| ProgressStyle::default_bar()));
            *self.running.lock().unwrap_or_else(PoisonError::into_inner) = Some(bar);
        }
    }

    fn line(&self, text: &str) {
        match &*self.running.lock().unwrap_or_else(PoisonError::into_inner) {
            Some(bar) => bar.suspend(|| tell(text)),
            None => tell(text),
        }
    }
}

impl Observer for Progress {
    fn begin(&self, pending: usize, recorded: usize) {
        let already = if recorded == 0 {
            String::new()
        } else {
            format!(", {recorded} are recorded already")
        };
        self.start(pending, &format!("{pending} trials to run{already}"));
    }

    fn begin_retiming(&self, pending: usize) {
        self.end();
        self.start(pending, &format!("{pending} solved trials to time once more, one at a time"));
    }

    fn notice(&self, text: &str) {
        self.line(&format!("note: {text}"));
    }

    fn finished(&self, record: &Record) {
        if self.loudness == Loudness::Verbose {
            let cpu = record.cpu_s.map_or(String::new(), |cpu| format!(" {cpu:.3} s"));
            let message = if record.message.is_empty() {
                String::new()
            } else {
                format!(" ({})", record.message)
            };
            self.line(&format!("{} {}{cpu}{message}", record.trial, record.verdict.word()));
        }
        if let Some(bar) = &*self.running.lock().unwrap_or_else(PoisonError::into_inner) {
            bar.inc(1);
        }
    }
}
