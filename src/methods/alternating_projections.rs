//! `alternating-projections`: between matrices of bounded rank and the affine set cut by the objective.

use super::{Method, Trial};
use crate::budget::{Halt, Meter, TracePoint};
use crate::card::{DefaultSetting, Kind, MethodCard, MethodClass, SettingSpec};
use crate::engines::affine::{AffineProjector, Cut};
use crate::engines::anderson::Anderson;
use crate::engines::newton::{NewtonParams, polish};
use crate::linalg::eigen::{SymmetricEigen, flops_full};
use crate::linalg::project::{factor_of_rank, psd_projection, rank_projection};
use crate::linalg::vector::norm2;
use crate::linalg::workspace::Workspace;
use crate::linalg::{Mat, dense};
use crate::problem::{Answer, BlockPoint, Factor, Operator, Point, Problem, StopReason};
use crate::seed::Stream;

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
10.1287/moor.1070.0291. Anderson acceleration: H. Walker and P. Ni, SIAM J. Numer. Anal. 49:1715-1735, 2011, \
10.1137/10078356X. The cut and its bisection are our own. Bibliographic data from memory.",
    needs: "Any problem whose blocks fit in memory densely (about 25 matrices a block). Blocks without a rank bound \
are projected on the cone.",
    cost: "One step: one full eigendecomposition of each block (9 n^3) and one projection on the affine set \
(O(m^2) with the factor of AA*, m <= 1500; conjugate gradients beyond).",
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
            name: "starts",
            kind: Kind::Integer { least: 1, most: 1000 },
            default: DefaultSetting::Integer(3),
            meaning: "Most random starting points of the first stage: X = GG' with G Gaussian of the target \
width (the order, where the rank is free), scaled to the right side, projected on the affine set.",
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
/// Differences that the acceleration combines.
const MEMORY: usize = 8;
/// An accelerated point is taken back when its distance is more than this times the last one.
const WORSE: f64 = 1.5;
/// The bisection ends at this relative width.
const WIDTH: f64 = 1e-8;

impl Method for AlternatingProjections {
    fn card(&self) -> &'static MethodCard {
        &CARD
    }

    fn solve(&self, problem: &Problem, trial: &mut Trial) -> Result<Answer, Halt> {
        let squares: usize = problem.blocks().iter().map(|block| block.order * block.order).sum();
        let system = problem.constraints().len().min(1500).pow(2);
        trial.meter.check_room(8 * (25 * squares + 2 * system) as u64)?;
        let op = Operator::new(problem);
        let projector = AffineProjector::new(problem, &op, &mut trial.meter)
            .map_err(|error| Halt::Failed(error.to_string()))?;
        let mut run = Run::new(problem, &op, projector);
        let limits = Limits {
            starts: trial.options.size("starts"),
            stages: trial.options.size("stages"),
            steps: trial.options.size("steps"),
        };
        let outcome = run.bisect(limits, &mut trial.stream, &mut trial.meter);
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

/// Limits of the bisection, as on the card.
#[derive(Clone, Copy, Debug)]
struct Limits {
    starts: usize,
    stages: usize,
    steps: usize,
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

    /// Writes all numbers one after another.
    fn write_flat(&self, out: &mut [f64]) {
        let mut place = 0;
        let columns = self.blocks.iter().flat_map(|b| (0..b.ncols()).map(|j| b.col_as_slice(j)));
        for column in columns.chain(std::iter::once(self.x.as_slice())) {
            out[place..place + column.len()].copy_from_slice(column);
            place += column.len();
        }
    }

    /// Reads what [`Self::write_flat`] wrote.
    fn read_flat(&mut self, from: &[f64]) {
        let mut place = 0;
        for block in &mut self.blocks {
            for j in 0..block.ncols() {
                let column = block.col_as_slice_mut(j);
                column.copy_from_slice(&from[place..place + column.len()]);
                place += column.len();
            }
        }
        self.x.copy_from_slice(&from[place..]);
    }

    fn length(&self) -> usize {
        self.blocks.iter().map(|b| b.nrows() * b.ncols()).sum::<usize>() + self.x.len()
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
    /// Plain next point.
    plain: Dense,
    memory: Anderson,
    flat: Vec<f64>,
    flat_change: Vec<f64>,
    flat_next: Vec<f64>,
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
            plain: zero.clone(),
            memory: Anderson::new(zero.length(), MEMORY),
            flat: vec![0.0; zero.length()],
            flat_change: vec![0.0; zero.length()],
            flat_next: vec![0.0; zero.length()],
            low: zero.clone(),
            best: zero,
            best_value: f64::INFINITY,
            best_distance: f64::INFINITY,
            steps: 0,
            stages: 0,
        }
    }

    /// Bisects the cut; says how it ended.
    fn bisect(
        &mut self,
        limits: Limits,
        stream: &mut Stream,
        meter: &mut Meter,
    ) -> Result<StopReason, Halt> {
        // 1. Without a cut, from random points.
        let mut met = false;
        for _ in 0..limits.starts {
            self.draw(stream);
            met = self.stage(f64::INFINITY, 10 * limits.steps, meter)?;
            if met {
                break;
            }
        }
        if !met {
            return Ok(StopReason::Stalled);
        }
        if self.projector.cut() == Cut::Constant {
            return Ok(StopReason::Converged);
        }
        // 2. Downwards while it works, then bisection.
        let mut drop = 0.1 * (1.0 + self.best_value.abs());
        let mut failed: Option<f64> = None;
        for _ in 0..limits.stages {
            let gamma = match failed {
                Some(low) if self.best_value - low <= WIDTH * (1.0 + self.best_value.abs()) => {
                    return Ok(StopReason::Converged);
                }
                Some(low) => 0.5 * (low + self.best_value),
                None => self.best_value - drop,
            };
            self.point.copy_from(&self.best);
            if self.stage(gamma, limits.steps, meter)? {
                drop *= 2.0;
            } else {
                failed = Some(gamma);
            }
        }
        Ok(StopReason::IterationLimit)
    }

    /// Draws a point of bounded rank whose image has the norm of the right side.
    fn draw(&mut self, stream: &mut Stream) {
        for (block, point) in self.problem.blocks().iter().zip(&mut self.point.blocks) {
            let width = block.rank.unwrap_or(block.order);
            let mut g = Mat::zeros(block.order, width);
            for j in 0..width {
                g.col_as_slice_mut(j).iter_mut().for_each(|value| *value = stream.normal());
            }
            let (replace, g_t) = (dense::Accumulate::Replace, g.as_ref().transpose());
            dense::gemm(point.as_mut(), replace, 1.0, g.as_ref(), g_t);
        }
        self.point.x.iter_mut().for_each(|value| *value = stream.normal().abs());
        let mut image = vec![0.0; self.op.constraints()];
        self.op.apply_dense(&self.point.blocks, &self.point.x, &mut image);
        let factor = norm2(self.problem.rhs()) / norm2(&image);
        if factor.is_finite() && factor > 0.0 {
            self.point.blocks.iter_mut().for_each(|block| dense::scale(factor, block.as_mut()));
            self.point.x.iter_mut().for_each(|value| *value *= factor);
        }
    }

    /// Alternates at one value of the cut from `self.point`; true when the sets were met.
    fn stage(&mut self, gamma: f64, limit: usize, meter: &mut Meter) -> Result<bool, Halt> {
        self.stages += 1;
        self.memory.clear();
        self.onto_affine(gamma, meter);
        let (mut marked, mut nearest) = (f64::INFINITY, f64::INFINITY);
        let mut last = f64::INFINITY;
        for step in 0..limit {
            meter.check()?;
            // 1. Nearest point of bounded rank; an accelerated point that is much worse is taken back.
            let mut distance = self.onto_rank(meter)?;
            if distance > WORSE * last {
                self.memory.clear();
                self.point.copy_from(&self.plain);
                distance = self.onto_rank(meter)?;
            }
            last = distance;
            self.steps += 1;
            meter.effort.inner_steps += 1;
            self.record(distance, gamma);
            if distance <= CLOSE * (1.0 + self.point.norm()) {
                return Ok(true);
            }
            nearest = nearest.min(distance);
            if step % WINDOW == WINDOW - 1 {
                if nearest > 0.999 * marked {
                    return Ok(false);
                }
                marked = nearest;
                meter.trace(TracePoint {
                    flops: 0,
                    objective: Some(self.op.cost_dense(&self.low.blocks, &self.low.x)),
                    residual: Some(distance / (1.0 + self.point.norm())),
                    tail: None,
                });
            }
            // 2. Nearest point of the cut affine set.
            self.point.write_flat(&mut self.flat);
            self.point.copy_from(&self.low);
            self.onto_affine(gamma, meter);
            self.plain.copy_from(&self.point);
            // 3. Acceleration; combinations stay in the affine set, the cut is applied again.
            self.plain.write_flat(&mut self.flat_change);
            for (change, x) in self.flat_change.iter_mut().zip(&self.flat) {
                *change -= x;
            }
            self.memory.step(&self.flat, &self.flat_change, &mut self.flat_next);
            self.point.read_flat(&self.flat_next);
            self.onto_affine(gamma, meter);
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
        let better = if met {
            true
        } else {
            !had_met && gamma.is_infinite() && distance < self.best_distance
        };
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

    fn answer(
        &mut self,
        stop: StopReason,
        newton: bool,
        meter: &mut Meter,
    ) -> Result<Answer, Halt> {
        if !self.best_distance.is_finite() {
            return Err(match stop {
                StopReason::MemoryLimit => Halt::MemoryLimit,
                _ => Halt::TimeLimit,
            });
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
            let info = polish(self.op, self.problem, &mut factors, &mut x, &mut y, &params, meter);
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
        run.draw(&mut Stream::named(1, &["fall"]));
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
        let mut stream = Stream::named(1, &["cut"]);
        let uncut = Limits { starts: 5, stages: 0, steps: 300 };
        run.bisect(uncut, &mut stream.clone(), &mut meter).unwrap();
        assert!(run.best_distance <= 1e-8, "{}", run.best_distance);
        let mut cut = super::tests::run(&problem, &op, &mut meter);
        cut.bisect(Limits { stages: 40, ..uncut }, &mut stream, &mut meter).unwrap();
        assert!(cut.best_distance <= 1e-8, "{}", cut.best_distance);
        assert!(cut.best_value <= run.best_value, "{} {}", cut.best_value, run.best_value);
        // Every point of the rank set that is feasible is a sign vector, whose objective is at least 0.
        assert!(cut.best_value >= -1e-4, "{}", cut.best_value);
    }
}
