//! Pluggable methods: each a short composition of engines, in a file of its own.
//!
//! A method is one file here, one `mod` line and one line in [`registry`]. Methods are blind: they
//! see the problem, their target ranks, their budget and their random stream, never the planted
//! point or the certificate.

pub mod alternating_projections;
pub mod complementarity_penalty;
pub mod convex_iteration;
pub mod douglas_rachford;
pub mod factored_alm;
pub mod factored_newton;
pub mod gaussian_rounding;
pub mod hyperplane_rounding;
pub mod ipm_tail_weight;
pub mod iterative_rank_minimisation;
pub mod ky_fan_dc;
pub mod log_det;
pub mod newton_projections;
pub mod outside;
pub mod rank_admm;
pub mod reduce_both_ends;
pub mod reduce_gaussian;
pub mod reduce_largest;
pub mod reduce_random;
pub mod reduce_tail;
pub mod relax_admm;
pub mod relax_ipm;
pub mod reweighted_trace;
pub mod singular_value_projection;
pub mod staircase;

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
        &complementarity_penalty::ComplementarityPenalty,
        &convex_iteration::ConvexIteration,
        &douglas_rachford::DouglasRachford,
        &factored_alm::FactoredAlm,
        &factored_newton::FactoredNewton,
        &gaussian_rounding::GaussianRounding,
        &hyperplane_rounding::HyperplaneRounding,
        &ipm_tail_weight::IpmTailWeight,
        &iterative_rank_minimisation::IterativeRankMinimisation,
        &ky_fan_dc::KyFanDc,
        &log_det::LogDet,
        &newton_projections::NewtonProjections,
        &rank_admm::RankAdmm,
        &reduce_both_ends::ReduceBothEnds,
        &reduce_gaussian::ReduceGaussian,
        &reduce_largest::ReduceLargest,
        &reduce_random::ReduceRandom,
        &reduce_tail::ReduceTail,
        &relax_admm::RelaxAdmm,
        &relax_ipm::RelaxIpm,
        &reweighted_trace::ReweightedTrace,
        &singular_value_projection::SingularValueProjection,
        &staircase::Staircase,
    ]
}

/// Finds a built-in method by its id.
pub fn find(id: &str) -> Option<&'static dyn Method> {
    registry().iter().copied().find(|method| method.card().id == id)
}

#[cfg(test)]
mod factored_tests;
