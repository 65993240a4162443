//! Pluggable methods: each a short composition of engines, in a file of its own.
//!
//! A method is one file here, one `mod` line and one line in [`registry`]. Methods are blind: they
//! see the problem, their target ranks, their budget and their random stream, never the planted
//! point or the certificate.

pub mod alternating_projections;
pub mod factored_alm;
pub mod factored_newton;
pub mod ipm_tail_weight;
pub mod outside;
pub mod reduce_both_ends;
pub mod reduce_largest;
pub mod relax_ipm;

use crate::budget::{Halt, Meter};
use crate::card::{MethodCard, Settings};
use crate::problem::{Answer, Problem};
use crate::seed::Stream;

/// Everything of its trial that a running method sees.
#[derive(Debug)]
pub struct Trial {
    /// Options resolved against the method's card.
    pub options: Settings,
    /// Clock, limits, effort and trace.
    pub meter: Meter,
    /// The method's random stream.
    pub stream: Stream,
}

/// A heuristic for the rank-constrained problem.
pub trait Method: Sync {
    /// Returns the card.
    fn card(&self) -> &'static MethodCard;

    /// Solves `problem` as well as the budget allows.
    ///
    /// # Errors
    /// [`Halt`]: a limit without a point to return, a refusal, or a failure with its reason.
    fn solve(&self, problem: &Problem, trial: &mut Trial) -> Result<Answer, Halt>;
}

/// Lists every built-in method, in alphabetical order of id.
pub fn registry() -> &'static [&'static dyn Method] {
    &[
        &alternating_projections::AlternatingProjections,
        &factored_alm::FactoredAlm,
        &factored_newton::FactoredNewton,
        &ipm_tail_weight::IpmTailWeight,
        &reduce_both_ends::ReduceBothEnds,
        &reduce_largest::ReduceLargest,
        &relax_ipm::RelaxIpm,
    ]
}

/// Finds a built-in method by its id.
pub fn find(id: &str) -> Option<&'static dyn Method> {
    registry().iter().copied().find(|method| method.card().id == id)
}

#[cfg(test)]
mod factored_tests;
