//! Decisions from records: adopt a challenger or keep the incumbent ([`duel`]), hold a run against a
//! stored baseline ([`gate`]).
//!
//! Everything here is made from records alone, through the pure statistics of `crate::stats`. It does
//! not run methods, judge answers or print; renderers return text, and only [`gate::Baseline`] touches
//! files.

pub mod duel;
pub mod gate;
mod means;
pub mod pairing;
mod text;

pub use means::Making;

use serde::Serialize;

use crate::stats::Interval;

/// An estimate with its interval; an end that is `None` is unbounded (too few pairs for the confidence).
#[derive(Clone, Copy, Debug, PartialEq, Serialize)]
pub struct Estimate {
    /// The estimate.
    pub value: f64,
    /// Lower end of the interval.
    pub low: Option<f64>,
    /// Upper end of the interval.
    pub high: Option<f64>,
}

impl Estimate {
    /// Joins a value and an interval; infinite ends become `None`.
    fn new(value: f64, interval: Interval) -> Self {
        let finite = |end: f64| end.is_finite().then_some(end);
        Estimate { value, low: finite(interval.low), high: finite(interval.high) }
    }

    /// Applies an increasing function to the value and both ends.
    fn map(self, function: impl Fn(f64) -> f64) -> Self {
        Estimate {
            value: function(self.value),
            low: self.low.map(&function),
            high: self.high.map(&function),
        }
    }
}
