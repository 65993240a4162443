//! Stages of methods that stay on the rank set and lower the residual of the constraints, the cut being one row more.
//!
//! A method gives one step ([`Advance`]); the loop around it (limits, best point, cut, trace, scaling, answer) is here.
//! Data are scaled: rows to norm 1, C and b to norm at most 1.

use super::levels::{Limits, Stage, Staged, descend};
use super::point::DensePoint;
use super::tangent::{Rows, Tangent};
use super::{Best, CLOSE, Finish, RankSet, answer, draw, memory_bytes, stop_of};
use crate::budget::{Halt, Meter, TracePoint};
use crate::engines::affine::{AffineProjector, Cut};
use crate::engines::ipm::scaling::Scaling;
use crate::linalg::vector::norm2;
use crate::problem::{Answer, Operator, Problem};
use crate::seed::Stream;

/// The place a step starts from and ends at.
pub struct Place<'a> {
    /// Projector on the rank set; its decomposition belongs to `low`.
    pub set: RankSet,
    /// Tangent space; a step moves it to `low` itself.
    pub tangent: Tangent,
    /// Constraints, holding the residual at `low`.
    pub rows: Rows<'a>,
    /// The point of the rank set.
    pub low: DensePoint,
    /// Room for the point that is projected.
    pub point: DensePoint,
    /// Norm of the residual at `low`.
    pub residual: f64,
    /// The cut, in scaled units; infinite without one.
    pub gamma: f64,
    /// Points projected so far.
    pub projected: usize,
}

impl Place<'_> {
    /// Projects `point` on the rank set and measures the result.
    ///
    /// # Errors
    /// `Failed` when an eigendecomposition fails.
    pub fn settle(&mut self, meter: &mut Meter) -> Result<(), Halt> {
        self.set.project(&self.point, &mut self.low, meter)?;
        self.residual = self.rows.measure(&self.low, self.gamma);
        self.projected += 1;
        meter.effort.operator_products += 1;
        meter.effort.flops += self.rows.flops();
        Ok(())
    }
}

/// One step of a method.
pub trait Advance {
    /// Moves from `place.low` to the next point of the rank set and measures it ([`Place::settle`]).
    ///
    /// # Errors
    /// A limit of the meter, or `Failed`.
    fn advance(&mut self, place: &mut Place<'_>, meter: &mut Meter) -> Result<(), Halt>;
}

/// How a search is run.
#[derive(Clone, Copy, Debug)]
pub struct SearchParams {
    /// Limits of the descent of the cut.
    pub limits: Limits,
    /// A stage fails when the residual fell by less than a thousandth over this many steps.
    pub window: usize,
    /// The search ends after so many projected points.
    pub total: usize,
    /// Where the first start lies; all others are drawn.
    pub first: First,
    /// What is done with the best point.
    pub finish: Finish,
}

/// Where the first start lies.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum First {
    /// At X = 0, x = 0.
    Zero,
    /// At a random point of the target rank.
    Drawn,
}

struct Search<'a, M: Advance> {
    problem: &'a Problem,
    op: &'a Operator,
    method: M,
    place: Place<'a>,
    best: Best,
    params: SearchParams,
    cut: Cut,
    rhs_norm: f64,
    /// What a value of the scaled problem is in the caller's units.
    unit: f64,
    starts: usize,
    stages: usize,
    steps: usize,
}

/// Runs a search and makes its answer.
///
/// # Errors
/// A limit without a point to return, `Interrupted`, or `Failed`.
pub fn run<M: Advance>(
    problem: &Problem,
    method: M,
    params: SearchParams,
    stream: &mut Stream,
    meter: &mut Meter,
) -> Result<Answer, Halt> {
    meter.check_room(memory_bytes(problem, 16))?;
    let (scaled, scaling) = Scaling::scale(problem);
    let op = Operator::new(&scaled);
    let cut = AffineProjector::new(&scaled, &op, meter)
        .map_err(|error| Halt::Failed(error.to_string()))?
        .cut();
    let zero = DensePoint::zeros(problem);
    let mut search = Search {
        problem: &scaled,
        op: &op,
        method,
        place: Place {
            set: RankSet::new(&scaled),
            tangent: Tangent::new(&scaled),
            rows: Rows::new(&scaled, &op),
            low: zero.clone(),
            point: zero,
            residual: f64::INFINITY,
            gamma: f64::INFINITY,
            projected: 0,
        },
        best: Best::new(problem),
        params,
        cut,
        rhs_norm: norm2(scaled.rhs()),
        unit: scaling.rhs * scaling.cost,
        starts: 0,
        stages: 0,
        steps: 0,
    };
    let outcome = descend(&mut search, params.limits, stream, meter);
    let stop = stop_of(outcome, &search.best)?;
    let note = format!(
        "{} stages, {} steps, residual {:.1e}",
        search.stages, search.steps, search.best.distance
    );
    let Search { place: Place { mut set, .. }, best, .. } = search;
    answer(problem, &mut set, &best, Some(&scaling), params.finish, (stop, note), meter)
}

impl<M: Advance> Staged for Search<'_, M> {
    fn draw(&mut self, stream: &mut Stream) {
        self.starts += 1;
        if self.starts == 1 && self.params.first == First::Zero {
            self.place.point.clear();
        } else {
            draw(self.problem, self.op, &mut self.place.point, stream);
        }
    }

    fn resume(&mut self) {
        self.place.point.copy_from(&self.best.point);
    }

    fn value(&self) -> f64 {
        self.unit * self.best.value
    }

    fn varies(&self) -> bool {
        self.cut == Cut::Works
    }

    fn spent(&self) -> bool {
        self.place.projected >= self.params.total
    }

    fn stage(&mut self, gamma: f64, limit: usize, meter: &mut Meter) -> Result<Stage, Halt> {
        self.stages += 1;
        self.place.gamma = gamma / self.unit;
        meter.check()?;
        self.place.settle(meter)?;
        let close = CLOSE * (1.0 + self.rhs_norm);
        let (mut marked, mut least) = (f64::INFINITY, f64::INFINITY);
        for step in 0..limit {
            meter.check()?;
            let (place, residual) = (&self.place, self.place.residual);
            if !residual.is_finite() {
                return Ok(Stage::Missed);
            }
            self.steps += 1;
            meter.effort.inner_steps += 1;
            let value = || place.rows.value(&place.low);
            self.best.offer(&place.low, residual, close, gamma, value);
            if residual <= close {
                return Ok(Stage::Met);
            }
            least = least.min(residual);
            if step % self.params.window == self.params.window - 1 {
                if least > 0.999 * marked {
                    return Ok(Stage::Missed);
                }
                marked = least;
            }
            meter.trace(TracePoint {
                flops: 0,
                objective: Some(self.unit * place.rows.value(&place.low)),
                residual: Some(residual / (1.0 + self.rhs_norm)),
                tail: None,
            });
            if self.spent() {
                return Ok(Stage::Missed);
            }
            self.method.advance(&mut self.place, meter)?;
        }
        Ok(Stage::Missed)
    }
}
