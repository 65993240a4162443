//! `alternating-projections`: between matrices of bounded rank and the affine set cut by the objective.

use super::{Method, Trial};
use crate::budget::{Halt, Meter, TracePoint};
use crate::card::{DefaultSetting, Kind, MethodCard, MethodClass, SettingSpec};
use crate::engines::affine::{AffineProjector, Cut};
use crate::engines::newton::{NewtonParams, polish};
use crate::linalg::eigen::{SymmetricEigen, flops_full};
use crate::linalg::project::{factor_of_rank, psd_projection, rank_projection};
use crate::linalg::vector::norm2;
use crate::linalg::workspace::Workspace;
use crate::linalg::{Mat, dense};
use crate::problem::{Answer, BlockPoint, Factor, Operator, Point, Problem, StopReason};

/// The method.
#[derive(Clone, Copy, Debug)]
pub struct AlternatingProjections;

static CARD: MethodCard = MethodCard {
    id: "alternating-projections",
    title: "Alternating projections on the rank set and the affine set, with an objective cut",
    class: MethodClass::Projection,
    reference: "K. Grigoriadis and R. Skelton, Low-order control design for LMI problems using alternating \
projection methods, Automatica 32:1117-1125, 1996, 10.1016/0005-1098(96)00057-X; A. Lewis and J. Malick, \
Alternating projections on manifolds, Mathematics of Operations Research 33:216-234, 2008, \
10.1287/moor.1070.0291. The cut, its bisection and the extrapolation are our own. Bibliographic data from \
memory.",
    needs: "Any problem whose blocks fit in memory densely (four matrices a block). Blocks without a rank bound \
are projected on the cone.",
    cost: "One step: one full eigendecomposition of each block (9 n^3) and one projection on the affine set \
(O(m^2) with the factor of AA*, m <= 1500; conjugate gradients beyond). An extrapolation costs one step more.",
    guarantees: "Local linear convergence of one bisection stage where the sets meet transversally; none \
globally. Residual and rank are exact up to the tolerance reached; the objective is only bisected.",
    failures: "Stalls at a positive distance; sublinear where the cut touches the rank set at its optimum, so \
that the objective is rarely better than a few digits; knows no multipliers and certifies nothing.",
    options: &[
        SettingSpec {
            name: "steps",
            kind: Kind::Integer { least: 1, most: 1_000_000 },
            default: DefaultSetting::Integer(300),
            meaning: "Most projection pairs for one value of the cut; ten times as many for the first, uncut \
stage.",
        },
        SettingSpec {
            name: "stages",
            kind: Kind::Integer { least: 0, most: 1000 },
            default: DefaultSetting::Integer(40),
            meaning: "Most values of the cut. The first stage has none and gives the value f0; the cut then goes \
down to f0 - d, d = 0.1 (1 + |f0|), doubling d while it succeeds; from the first failure on it is bisected \
between the failed and the best value, until they differ by 1e-8 (1 + |f|).",
        },
        SettingSpec {
            name: "polish",
            kind: Kind::Word(&["off", "newton"]),
            default: DefaultSetting::Word("off"),
            meaning: "Whether the last point is improved by Newton steps in factor form.",
        },
    ],
};

/// A stage succeeds when ||P_r(X) - X|| <= this times (1 + ||X||).
const CLOSE: f64 = 1e-9;
/// A stage fails early when the distance fell by less than a thousandth over this many steps.
const WINDOW: usize = 50;
/// Steps between two extrapolations.
const EXTRAPOLATE_EVERY: usize = 6;
/// Largest ratio of successive changes that is extrapolated.
const LARGEST_RATIO: f64 = 0.99;
/// The bisection ends at this relative width.
const WIDTH: f64 = 1e-8;

impl Method for AlternatingProjections {
    fn card(&self) -> &'static MethodCard {
        &CARD
    }

    fn solve(&self, problem: &Problem, trial: &mut Trial) -> Result<Answer, Halt> {
        let squares: usize = problem.blocks().iter().map(|block| block.order * block.order).sum();
        let system = problem.constraints().len().min(1500).pow(2);
        trial.meter.check_room(8 * (6 * squares + 2 * system) as u64)?;
        let op = Operator::new(problem);
        let projector = AffineProjector::new(problem, &op, &mut trial.meter)
            .map_err(|error| Halt::Failed(error.to_string()))?;
        let mut run = Run::new(problem, &op, projector);
        let outcome = run.bisect(
            trial.options.size("stages"),
            trial.options.size("steps"),
            &mut trial.meter,
        );
        let stop = match outcome {
            Ok(stop) => stop,
            Err(Halt::TimeLimit) => StopReason::TimeLimit,
            Err(Halt::MemoryLimit) => StopReason::MemoryLimit,
            Err(halt) => return Err(halt),
        };
        let newton = trial.options.word("polish") == "newton";
        run.answer(stop, newton, &mut trial.meter)
    }
}

/// A dense point.
#[derive(Clone)]
struct Dense {
    blocks: Vec<Mat<f64>>,
    x: Vec<f64>,
}

impl Dense {
    fn copy_from(&mut self, other: &Dense) {
        for (to, from) in self.blocks.iter_mut().zip(&other.blocks) {
            dense::copy_into(from.as_ref(), to.as_mut());
        }
        self.x.copy_from_slice(&other.x);
    }

    fn distance(&self, other: &Dense) -> f64 {
        let mut square = 0.0;
        for (a, b) in self.blocks.iter().zip(&other.blocks) {
            for j in 0..a.ncols() {
                let pairs = a.col_as_slice(j).iter().zip(b.col_as_slice(j));
                square += pairs.map(|(x, y)| (x - y) * (x - y)).sum::<f64>();
            }
        }
        square += self.x.iter().zip(&other.x).map(|(a, b)| (a - b) * (a - b)).sum::<f64>();
        square.sqrt()
    }

    fn norm(&self) -> f64 {
        let blocks: f64 = self.blocks.iter().map(|b| dense::frobenius(b.as_ref()).powi(2)).sum();
        (blocks + norm2(&self.x).powi(2)).sqrt()
    }

    /// Sets self to `a + factor (a - b)`.
    fn extrapolate(&mut self, factor: f64, a: &Dense, b: &Dense) {
        for ((to, a), b) in self.blocks.iter_mut().zip(&a.blocks).zip(&b.blocks) {
            for j in 0..to.ncols() {
                let pairs = a.col_as_slice(j).iter().zip(b.col_as_slice(j));
                for (t, (x, y)) in to.col_as_slice_mut(j).iter_mut().zip(pairs) {
                    *t = x + factor * (x - y);
                }
            }
        }
        for (t, (x, y)) in self.x.iter_mut().zip(a.x.iter().zip(&b.x)) {
            *t = x + factor * (x - y);
        }
    }
}

struct Run<'a> {
    problem: &'a Problem,
    op: &'a Operator,
    projector: AffineProjector<'a>,
    eigen: Vec<SymmetricEigen>,
    workspace: Workspace,
    /// Point of the affine set.
    point: Dense,
    previous: Dense,
    trial: Dense,
    /// Nearest point of bounded rank.
    low: Dense,
    /// Best point of bounded rank, with its objective and distance to the affine set.
    best: Dense,
    best_value: f64,
    best_distance: f64,
    steps: usize,
    stages: usize,
}

impl<'a> Run<'a> {
    fn new(problem: &'a Problem, op: &'a Operator, projector: AffineProjector<'a>) -> Self {
        let zero = Dense {
            blocks: problem.blocks().iter().map(|b| Mat::zeros(b.order, b.order)).collect(),
            x: vec![0.0; problem.orthant()],
        };
        Run {
            problem,
            op,
            projector,
            eigen: problem.blocks().iter().map(|b| SymmetricEigen::new(b.order)).collect(),
            workspace: Workspace::new(),
            point: zero.clone(),
            previous: zero.clone(),
            trial: zero.clone(),
            low: zero.clone(),
            best: zero,
            best_value: f64::INFINITY,
            best_distance: f64::INFINITY,
            steps: 0,
            stages: 0,
        }
    }

    /// Bisects the cut; says how it ended.
    fn bisect(&mut self, stages: usize, steps: usize, meter: &mut Meter) -> Result<StopReason, Halt> {
        // 1. Without a cut, from the identity: the least-norm point is often the worst start for the rank set.
        for block in &mut self.point.blocks {
            (0..block.nrows()).for_each(|i| block[(i, i)] = 1.0);
        }
        self.point.x.fill(1.0);
        if !self.stage(f64::INFINITY, 10 * steps, meter)? {
            return Ok(StopReason::Stalled);
        }
        if self.projector.cut() == Cut::Constant {
            return Ok(StopReason::Converged);
        }
        // 2. Downwards while it works, then bisection.
        let mut drop = 0.1 * (1.0 + self.best_value.abs());
        let mut failed: Option<f64> = None;
        for _ in 0..stages {
            let gamma = match failed {
                Some(low) if self.best_value - low <= WIDTH * (1.0 + self.best_value.abs()) => {
                    return Ok(StopReason::Converged);
                }
                Some(low) => 0.5 * (low + self.best_value),
                None => self.best_value - drop,
            };
            self.point.copy_from(&self.best);
            if self.stage(gamma, steps, meter)? {
                drop *= 2.0;
            } else {
                failed = Some(gamma);
            }
        }
        Ok(StopReason::IterationLimit)
    }

    /// Alternates at one value of the cut from `self.point`; true when the sets were met.
    fn stage(&mut self, gamma: f64, limit: usize, meter: &mut Meter) -> Result<bool, Halt> {
        self.stages += 1;
        self.onto_affine(gamma, meter);
        let mut marked = f64::INFINITY;
        let (mut change, mut last_change) = (f64::INFINITY, f64::INFINITY);
        for step in 0..limit {
            meter.check()?;
            // 1. Nearest point of bounded rank.
            let distance = self.onto_rank(meter)?;
            self.steps += 1;
            meter.effort.inner_steps += 1;
            self.record(distance, gamma);
            if distance <= CLOSE * (1.0 + self.point.norm()) {
                return Ok(true);
            }
            if step % WINDOW == 0 {
                if distance > 0.999 * marked {
                    return Ok(false);
                }
                marked = distance;
                meter.trace(TracePoint {
                    flops: 0,
                    objective: Some(self.op.cost_dense(&self.low.blocks, &self.low.x)),
                    residual: Some(distance / (1.0 + self.point.norm())),
                    tail: None,
                });
            }
            // 2. Nearest point of the cut affine set.
            self.previous.copy_from(&self.point);
            self.point.copy_from(&self.low);
            self.onto_affine(gamma, meter);
            last_change = std::mem::replace(&mut change, self.point.distance(&self.previous)).min(last_change);
            // 3. Extrapolation along the last change, kept when it lowers the distance.
            let ratio = change / last_change;
            if step % EXTRAPOLATE_EVERY == EXTRAPOLATE_EVERY - 1 && ratio > 0.3 && ratio < LARGEST_RATIO {
                let factor = ratio / (1.0 - ratio);
                self.trial.extrapolate(factor, &self.point, &self.previous);
                self.previous.copy_from(&self.point);
                self.point.copy_from(&self.trial);
                self.onto_affine(gamma, meter);
                let reached = self.onto_rank(meter)?;
                if !(reached < distance) {
                    self.point.copy_from(&self.previous);
                }
                (change, last_change) = (f64::INFINITY, f64::INFINITY);
            }
        }
        Ok(false)
    }

    fn onto_affine(&mut self, gamma: f64, meter: &mut Meter) {
        let (points, x) = (&mut self.point.blocks, &mut self.point.x);
        if gamma.is_finite() {
            self.projector.project_cut(points, x, gamma, meter);
        } else {
            self.projector.project(points, x, meter);
        }
    }

    /// Sets `low` to the nearest point of bounded rank and returns its distance.
    fn onto_rank(&mut self, meter: &mut Meter) -> Result<f64, Halt> {
        for (k, block) in self.problem.blocks().iter().enumerate() {
            let point = self.point.blocks[k].as_ref();
            self.eigen[k]
                .decompose(point)
                .map_err(|error| Halt::Failed(format!("block {}: {error}", k + 1)))?;
            meter.effort.eigendecompositions += 1;
            meter.effort.flops += flops_full(block.order);
            let low = self.low.blocks[k].as_mut();
            match block.rank {
                Some(rank) => rank_projection(&self.eigen[k], rank, low, &mut self.workspace),
                None => psd_projection(&self.eigen[k], point, low, &mut self.workspace),
            };
        }
        for (low, x) in self.low.x.iter_mut().zip(&self.point.x) {
            *low = x.max(0.0);
        }
        Ok(self.point.distance(&self.low))
    }

    /// Keeps the point when both sets meet there (and the objective is lower), or while none met, when it is
    /// nearer.
    fn record(&mut self, distance: f64, gamma: f64) {
        let close = CLOSE * (1.0 + self.point.norm());
        let met = distance <= close;
        let had_met = self.best_value.is_finite();
        let better = if met { true } else { !had_met && gamma.is_infinite() && distance < self.best_distance };
        if !better {
            return;
        }
        if met {
            let value = self.op.cost_dense(&self.low.blocks, &self.low.x);
            if had_met && value >= self.best_value {
                return;
            }
            self.best_value = value;
        }
        self.best_distance = distance;
        self.best.copy_from(&self.low);
    }

    fn answer(&mut self, stop: StopReason, newton: bool, meter: &mut Meter) -> Result<Answer, Halt> {
        if !self.best_distance.is_finite() {
            return Err(Halt::TimeLimit);
        }
        let mut note = format!(
            "{} stages, {} steps, distance of the sets {:.1e}",
            self.stages, self.steps, self.best_distance
        );
        let mut factors = Vec::new();
        for (k, block) in self.problem.blocks().iter().enumerate() {
            self.eigen[k]
                .decompose(self.best.blocks[k].as_ref())
                .map_err(|error| Halt::Failed(format!("block {}: {error}", k + 1)))?;
            let columns = factor_of_rank(&self.eigen[k], block.rank.unwrap_or(block.order));
            let columns: Vec<Vec<f64>> =
                (0..columns.ncols()).map(|j| columns.col_as_slice(j).to_vec()).collect();
            factors.push(Factor::from_columns(block.order, &columns));
        }
        let mut x = self.best.x.clone();
        let mut multipliers = None;
        if newton {
            let mut y = vec![0.0; self.op.constraints()];
            let params = NewtonParams::default();
            let info =
                polish(self.op, self.problem, &mut factors, &mut x, &mut y, &params, meter);
            note.push_str(&format!("; {} Newton steps, merit {:.1e}", info.steps, info.merit));
            multipliers = Some(y);
        }
        let blocks = factors.into_iter().map(BlockPoint::Factor).collect();
        Ok(Answer { point: Point { blocks, orthant: x }, multipliers, stop, note })
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::engines::alm::tests::{mixed, trap};

    fn run<'a>(problem: &'a Problem, op: &'a Operator, meter: &mut Meter) -> Run<'a> {
        let projector = AffineProjector::new(problem, op, meter).unwrap();
        Run::new(problem, op, projector)
    }

    #[test]
    fn the_distance_never_rises_without_extrapolation() {
        // Each of the two points is nearest to the other one, so distances fall (Lewis and Malick 2008).
        let (problem, _, _) = mixed("projections");
        let op = Operator::new(&problem);
        let mut meter = Meter::unlimited();
        let mut run = run(&problem, &op, &mut meter);
        run.point.x.fill(1.0);
        run.onto_affine(f64::INFINITY, &mut meter);
        let mut last = f64::INFINITY;
        let mut first = 0.0;
        for step in 0..60 {
            let distance = run.onto_rank(&mut meter).unwrap();
            assert!(distance <= last * (1.0 + 1e-12), "step {step}: {last} to {distance}");
            last = distance;
            if step == 0 {
                first = distance;
            }
            run.point.copy_from(&run.low.clone());
            run.onto_affine(f64::INFINITY, &mut meter);
        }
        assert!(last < 0.5 * first, "{first} to {last}");
    }

    #[test]
    fn the_cut_lowers_the_objective_of_a_feasible_point() {
        let (problem, _) = trap();
        let op = Operator::new(&problem);
        let mut meter = Meter::unlimited();
        let mut run = run(&problem, &op, &mut meter);
        assert!(run.stage(f64::INFINITY, 1000, &mut meter).is_ok());
        let mut cut = super::tests::run(&problem, &op, &mut meter);
        cut.bisect(40, 300, &mut meter).unwrap();
        assert!(cut.best_distance <= 1e-8, "{}", cut.best_distance);
        assert!(cut.best_value <= run.best_value, "{} {}", cut.best_value, run.best_value);
        // Every point of the rank set that is feasible is a sign vector, whose objective is at least 0.
        assert!(cut.best_value >= -1e-4, "{}", cut.best_value);
    }
}
