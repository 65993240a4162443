//! Signs from unit rows by random hyperplanes, each improved by local search; the best is kept.
//!
//! x = sign(Q g) with g Gaussian: M. Goemans and D. Williamson, Journal of the ACM 42:1115-1145, 1995, who prove for
//! max-cut with nonnegative weights that the expected cut of a draw is at least 0.87856 times the relaxation's value
//! (bibliographic data from memory). Improvement never makes a draw worse, so the bound stays.

use super::signs::SignSearch;
use crate::budget::{Halt, Meter, TracePoint};
use crate::engines::alm::spheres::Whole;
use crate::engines::alm::spheres::cost::SphereBlock;
use crate::linalg::vector::dot;
use crate::problem::Factor;
use crate::seed::Stream;

/// How a draw is improved.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Improve {
    /// Not at all.
    Never,
    /// By flips of single signs.
    OneFlip,
    /// By passes of variable depth.
    VariableDepth,
}

/// Settings of a rounding.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct HyperplaneParams {
    /// Draws.
    pub draws: usize,
    /// Improvement of each draw.
    pub improve: Improve,
    /// Kicks of the best point after the draws, each improved; a result that is not worse takes its place.
    pub kicks: usize,
    /// Ends when `objective - bound <= certificate * (1 + |objective|)`.
    pub certificate: f64,
}

/// What a rounding found.
#[derive(Clone, Debug)]
pub struct SignOutcome {
    /// The best signs.
    pub signs: Vec<f64>,
    /// Their objective with the diagonal, in the problem's units.
    pub objective: f64,
    /// Draws made.
    pub draws: usize,
    /// Kicks made.
    pub kicks: usize,
    /// Whether the objective meets the bound.
    pub certified: bool,
    /// Why it ended early, if it did.
    pub halt: Option<Halt>,
}

/// Draws one sign vector: x_i = 1 when q_i.g >= 0 and -1 otherwise, g Gaussian, written to `direction`.
#[track_caller]
pub fn draw(rows: &Factor, direction: &mut [f64], signs: &mut [f64], stream: &mut Stream) {
    assert!(direction.len() == rows.width && signs.len() == rows.order, "lengths of the factor");
    direction.iter_mut().for_each(|value| *value = stream.normal());
    for (i, sign) in signs.iter_mut().enumerate() {
        *sign = if dot(rows.row(i), direction) >= 0.0 { 1.0 } else { -1.0 };
    }
}

/// Rounds the rows of `rows` (of any length) to signs. A block that is the whole problem leaves a trace of the best
/// objective. The first draw is made even when the budget has ended.
pub fn round(
    block: &SphereBlock,
    rows: &Factor,
    bound: f64,
    params: &HyperplaneParams,
    whole: Whole,
    stream: &mut Stream,
    meter: &mut Meter,
) -> SignOutcome {
    let mut search = SignSearch::new(block);
    let mut direction = vec![0.0; rows.width];
    let mut signs = vec![1.0; rows.order];
    let constant = block.constant();
    let mut best = SignOutcome {
        signs: signs.clone(),
        objective: f64::INFINITY,
        draws: 0,
        kicks: 0,
        certified: false,
        halt: None,
    };
    while best.draws < params.draws.max(1) && !best.certified && best.halt.is_none() {
        draw(rows, &mut direction, &mut signs, stream);
        search.load(&signs);
        best.draws += 1;
        meter.effort.operator_products += 1;
        meter.effort.flops += block.flops(1) + 2 * (rows.order * rows.width) as u64;
        let ended = improve(&mut search, params.improve, meter);
        best.take(&search, constant, bound, params.certificate);
        best.halt = ended.and_then(|()| meter.check()).err();
        leave_trace(&best, whole, meter);
    }
    let most = (rows.order / 5).max(3);
    while best.kicks < params.kicks && !best.certified && best.halt.is_none() {
        search.load(&best.signs);
        search.kick(2 + stream.index(most), stream);
        best.kicks += 1;
        meter.effort.operator_products += 1;
        meter.effort.flops += 2 * block.flops(1);
        let ended = improve(&mut search, params.improve, meter);
        best.take(&search, constant, bound, params.certificate);
        best.halt = ended.and_then(|()| meter.check()).err();
        leave_trace(&best, whole, meter);
    }
    best
}

impl SignOutcome {
    /// Takes the searched signs when they are not worse.
    fn take(&mut self, search: &SignSearch<'_>, constant: f64, bound: f64, certificate: f64) {
        let objective = search.value() + constant;
        if objective <= self.objective {
            self.objective = objective;
            self.signs.copy_from_slice(search.signs());
        }
        self.certified = self.objective - bound <= certificate * (1.0 + self.objective.abs());
    }
}

fn improve(search: &mut SignSearch<'_>, how: Improve, meter: &mut Meter) -> Result<(), Halt> {
    match how {
        Improve::Never => Ok(()),
        Improve::OneFlip => search.one_flip(meter).map(drop),
        Improve::VariableDepth => search.variable_depth(meter).map(drop),
    }
}

fn leave_trace(best: &SignOutcome, whole: Whole, meter: &mut Meter) {
    if whole == Whole::Yes {
        let (objective, zero) = (Some(best.objective), Some(0.0));
        meter.trace(TracePoint { objective, residual: zero, tail: zero, ..TracePoint::default() });
    }
}
