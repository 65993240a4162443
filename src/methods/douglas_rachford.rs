//! `douglas-rachford`: reflections between the rank set and the affine set, the objective in the affine step.

use super::{Method, Trial};
use crate::budget::{Halt, Meter, TracePoint};
use crate::card::{DefaultSetting, Kind, MethodCard, MethodClass, SettingSpec};
use crate::engines::affine::{AffineProjector, Cut};
use crate::engines::ipm::scaling::Scaling;
use crate::engines::projections::point::DensePoint;
use crate::engines::projections::{
    Best, CLOSE, Finish, RankSet, answer, draw, memory_bytes, stop_of,
};
use crate::problem::{Answer, Operator, Problem, StopReason};
use crate::seed::Stream;

/// The method.
#[derive(Clone, Copy, Debug)]
pub struct DouglasRachford;

static CARD: MethodCard = MethodCard {
    id: "douglas-rachford",
    title: "Douglas-Rachford splitting between the rank set and the affine set",
    class: MethodClass::Projection,
    reference: "J. Douglas, H. Rachford, Trans. Amer. Math. Soc. 82:421-439, 1956; P.-L. Lions, B. Mercier, SIAM J. \
Numer. Anal. 16:964-979, 1979, 10.1137/0716071; on nonconvex sets H. Bauschke, P. Combettes, D. Luke, J. Opt. Soc. Am. A \
19:1334-1345, 2002, 10.1364/JOSAA.19.001334. The linear term's weight and its halving are our own. Bibliographic data \
from memory.",
    needs: "Any problem whose blocks fit in memory densely (about 16 matrices a block). Blocks without a rank bound are \
projected on the cone.",
    cost: "One step: one full eigendecomposition of each block (9 n^3) and one solve with AA*.",
    guarantees: "Where no block has a rank bound below its order the problem is convex and the shadow P_aff(Z) - t C' \
converges to an optimum, if both sides attain equal optima. With rank bounds nothing is proved globally; where the sets meet transversally convergence is locally \
linear. A point the iteration settles at with weight t satisfies the first-order conditions, X S = 0, with no eigenvalue \
of S below -lambda_r(X)/t: the larger t, the nearer to a certificate.",
    failures: "May wander without settling; the larger the weight of the objective the sooner. Fixed points with a small \
weight may be far from optimal. Slow or unsettled where the optimum lies on a face of optima or the multipliers are not \
unique (flat-face, sign-trap, hidden-partition, trust-region), as is the convex method. Certifies nothing.",
    options: &[
        SettingSpec {
            name: "weight",
            kind: Kind::Decimal { least: 0.0, most: 1e6 },
            default: DefaultSetting::Decimal(3.0),
            meaning: "How the objective enters: the affine step is P_aff(Z) - t C', C' being the cost projected on the \
null space of A (the minimiser of <C, X> + ||X - Z||^2/(2 t) on the set). A start begins with t = weight times the norm of \
the least-norm point of the affine set over ||C'||; 0 leaves the objective out.",
        },
        SettingSpec {
            name: "steps",
            kind: Kind::Integer { least: 1, most: 1_000_000 },
            default: DefaultSetting::Integer(1000),
            meaning: "Most steps at one t. When the two shadows then differ by more than 1e-9 (1 + ||X||), t is halved and \
the iteration goes on.",
        },
        SettingSpec {
            name: "halvings",
            kind: Kind::Integer { least: 0, most: 100 },
            default: DefaultSetting::Integer(15),
            meaning: "Most halvings of t in one start.",
        },
        SettingSpec {
            name: "starts",
            kind: Kind::Integer { least: 1, most: 10_000 },
            default: DefaultSetting::Integer(10),
            meaning: "Starts Z = GG' with G Gaussian of the target width (the order, where the rank is free), scaled to \
the right side; the point of least objective of all that settled is returned. No further start is made when three have \
settled at the least value (relative 1e-6), when there is no objective, or when nothing has a rank bound.",
        },
        SettingSpec {
            name: "total",
            kind: Kind::Integer { least: 1, most: 1_000_000_000 },
            default: DefaultSetting::Integer(6000),
            meaning: "Most steps of all starts together.",
        },
        SettingSpec {
            name: "polish",
            kind: Kind::Word(&["off", "newton"]),
            default: DefaultSetting::Word("off"),
            meaning: "Whether the last point is improved by Newton steps on the Lagrangian in factor form.",
        },
    ],
};

/// A round at one t ends early when the distance of the shadows fell by less than a hundredth over this many steps.
const WINDOW: usize = 200;
/// No further start is made when so many settled at the least value.
const AGREEING: usize = 3;

struct Run<'a> {
    op: &'a Operator,
    projector: AffineProjector<'a>,
    set: RankSet,
    z: DensePoint,
    shadow: DensePoint,
    reflected: DensePoint,
    low: DensePoint,
    best: Best,
    unit: f64,
    steps: usize,
    settled: usize,
    /// Starts that settled at the least value.
    agreeing: usize,
    total: usize,
}

impl<'a> Run<'a> {
    fn new(
        problem: &Problem,
        op: &'a Operator,
        projector: AffineProjector<'a>,
        unit: f64,
        total: usize,
    ) -> Self {
        let zero = DensePoint::zeros(problem);
        Run {
            op,
            projector,
            set: RankSet::new(problem),
            z: zero.clone(),
            shadow: zero.clone(),
            reflected: zero.clone(),
            low: zero,
            best: Best::new(problem),
            unit,
            steps: 0,
            settled: 0,
            agreeing: 0,
            total,
        }
    }

    /// Does one step and returns the distance of the two shadows.
    fn step(&mut self, t: f64, meter: &mut Meter) -> Result<f64, Halt> {
        self.shadow.copy_from(&self.z);
        let (points, x) = (&mut self.shadow.blocks, &mut self.shadow.x);
        self.projector.project_tilted(points, x, t, meter);
        self.reflected.copy_from(&self.shadow);
        self.reflected.scale(2.0);
        self.reflected.add(-1.0, &self.z);
        self.set.project(&self.reflected, &mut self.low, meter)?;
        self.z.add(1.0, &self.low);
        self.z.add(-1.0, &self.shadow);
        self.steps += 1;
        meter.effort.inner_steps += 1;
        Ok(self.low.distance(&self.shadow))
    }

    /// Iterates at one t; true when the shadows met.
    fn round(&mut self, t: f64, limit: usize, meter: &mut Meter) -> Result<bool, Halt> {
        let (mut marked, mut least) = (f64::INFINITY, f64::INFINITY);
        for step in 0..limit.min(self.total - self.steps) {
            meter.check()?;
            let distance = self.step(t, meter)?;
            if !distance.is_finite() {
                return Ok(false);
            }
            let close = CLOSE * (1.0 + self.low.norm());
            let (op, low) = (self.op, &self.low);
            let best = self.best.value;
            let value = || op.cost_dense(&low.blocks, &low.x);
            self.best.offer(low, distance, close, f64::INFINITY, value);
            if distance <= close {
                self.settled += 1;
                let new = value();
                let same = 1e-6 * (1.0 + best.abs());
                if new < best - same {
                    self.agreeing = 1;
                } else if new <= best + same {
                    self.agreeing += 1;
                }
                return Ok(true);
            }
            least = least.min(distance);
            if step % WINDOW == WINDOW - 1 {
                if least > 0.99 * marked {
                    return Ok(false);
                }
                marked = least;
            }
            if step % 10 == 0 {
                meter.trace(TracePoint {
                    flops: 0,
                    objective: Some(self.unit * self.op.cost_dense(&low.blocks, &low.x)),
                    residual: Some(distance / (1.0 + low.norm())),
                    tail: None,
                });
            }
        }
        Ok(false)
    }

    /// Makes all starts; says how it ended.
    fn starts(
        &mut self,
        problem: &Problem,
        options: &crate::card::Settings,
        stream: &mut Stream,
        meter: &mut Meter,
    ) -> Result<StopReason, Halt> {
        let bounded = problem.blocks().iter().any(|b| b.rank.is_some_and(|r| r < b.order));
        // The least-norm point sets the scale of t.
        self.shadow.clear();
        self.projector.project(&mut self.shadow.blocks, &mut self.shadow.x, meter);
        let scale = self.shadow.norm().max(f64::MIN_POSITIVE);
        let works = self.projector.cut() == Cut::Works && options.decimal("weight") > 0.0;
        let first = if works {
            options.decimal("weight") * scale / self.projector.cost_norm()
        } else {
            0.0
        };
        for _ in 0..options.size("starts") {
            draw(problem, self.op, &mut self.z, stream);
            let mut t = first;
            for _ in 0..=options.size("halvings") {
                if self.round(t, options.size("steps"), meter)? {
                    // Without an objective any point of both sets will do; without bounds it is the optimum.
                    if !works || !bounded || self.agreeing >= AGREEING {
                        return Ok(StopReason::Converged);
                    }
                    break;
                }
                if self.steps >= self.total {
                    return Ok(self.ended());
                }
                if bounded {
                    t *= 0.5;
                }
            }
        }
        Ok(self.ended())
    }

    fn ended(&self) -> StopReason {
        if self.best.met() { StopReason::IterationLimit } else { StopReason::Stalled }
    }
}

impl Method for DouglasRachford {
    fn card(&self) -> &'static MethodCard {
        &CARD
    }

    fn solve(&self, problem: &Problem, trial: &mut Trial) -> Result<Answer, Halt> {
        let meter = &mut trial.meter;
        meter.check_room(memory_bytes(problem, 16))?;
        let (scaled, scaling) = Scaling::scale(problem);
        let op = Operator::new(&scaled);
        let projector = AffineProjector::new(&scaled, &op, meter)
            .map_err(|error| Halt::Failed(error.to_string()))?;
        let unit = scaling.rhs * scaling.cost;
        let mut run = Run::new(&scaled, &op, projector, unit, trial.options.size("total"));
        let outcome = run.starts(&scaled, &trial.options, &mut trial.stream, meter);
        let stop = stop_of(outcome, &run.best)?;
        let finish = match trial.options.word("polish") {
            "newton" => Finish::Newton,
            _ => Finish::Plain,
        };
        let note = format!(
            "{} starts settled, {} steps, distance of the shadows {:.1e}",
            run.settled, run.steps, run.best.distance
        );
        let Run { mut set, best, .. } = run;
        answer(problem, &mut set, &best, Some(&scaling), finish, (stop, note), meter)
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::problem::{Block, Coefficient, Functional, SparseSymmetric};

    /// On convex sets the operator is firmly nonexpansive, so that steps never grow (Lions and Mercier 1979).
    #[test]
    fn steps_never_grow_without_rank_bounds() {
        let n = 8;
        let mut draw = Stream::named(3, &["douglas-rachford"]);
        let entries = (0..4 * n).map(|_| (draw.index(n), draw.index(n), draw.normal())).collect();
        let cost =
            Functional::on_block(0, Coefficient::Sparse(SparseSymmetric::gather(n, entries)));
        let unit = |i: usize| {
            let matrix = SparseSymmetric::gather(n, vec![(i, i, 1.0)]);
            Functional::on_block(0, Coefficient::Sparse(matrix))
        };
        let steps = |rank: Option<usize>, draw: &mut Stream| {
            let blocks = vec![Block { order: n, rank }];
            let constraints = (0..n).map(unit).collect();
            let problem = Problem::new(blocks, 0, cost.clone(), constraints, vec![1.0; n]).unwrap();
            let op = Operator::new(&problem);
            let mut meter = Meter::unlimited();
            let projector = AffineProjector::new(&problem, &op, &mut meter).unwrap();
            let mut run = Run::new(&problem, &op, projector, 1.0, 1000);
            super::draw(&problem, &op, &mut run.z, draw);
            (0..200).map(|_| run.step(2.0, &mut meter).unwrap()).collect::<Vec<f64>>()
        };
        let grows = |s: &[f64]| s.windows(2).any(|pair| pair[1] > pair[0] * (1.0 + 1e-12) + 1e-12);
        let convex = steps(None, &mut draw);
        assert!(!grows(&convex) && convex[199] < 1e-2 * convex[0], "{convex:?}");
        // With a rank bound they do.
        assert!((0..5).any(|_| grows(&steps(Some(1), &mut draw))));
    }
}
