//! Pure statistics for comparing methods on planted instances: intervals, paired tests, bootstrap, profiles, sample
//! sizes, sequential tests.
//!
//! Nothing here reads a record, a file or a clock: numbers in, numbers out. Not for model fitting and not a
//! general library: each function serves a comparison of heuristics on the same instances. Mistakes of the
//! caller (NaN, impossible counts, a confidence outside (0, 1)) panic and name the value; too little data gives
//! `None` or the widest interval.

pub mod bootstrap;
pub mod friedman;
pub mod multiple;
pub mod paired;
pub mod profiles;
pub mod proportion;
pub mod recovery;
pub mod sequential;
pub mod signed_rank;
mod special;
pub mod summary;

/// A closed interval; an end may be infinite.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Interval {
    /// Lower end.
    pub low: f64,
    /// Upper end, never below the lower one.
    pub high: f64,
}
