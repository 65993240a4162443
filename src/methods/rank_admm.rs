//! `rank-admm`: the alternating direction method with the rank set in the place of a convex one, restarted and polished.

use super::{Method, Trial};
use crate::budget::{Halt, Meter, TracePoint};
use crate::card::{DefaultSetting, Kind, MethodCard, MethodClass, SettingSpec};
use crate::engines::affine::maps::DenseMaps;
use crate::engines::affine::{AffineProjector, Cut};
use crate::engines::ipm::scaling::Scaling;
use crate::engines::projections::point::DensePoint;
use crate::engines::projections::restrict::solve_restricted;
use crate::engines::projections::{Best, CLOSE, Finish, RankSet, answer, memory_bytes, stop_of};
use crate::linalg::vector::norm2;
use crate::problem::{Answer, Operator, Problem, StopReason};
use crate::seed::Stream;

/// The method.
#[derive(Clone, Copy, Debug)]
pub struct RankAdmm;

static CARD: MethodCard = MethodCard {
    id: "rank-admm",
    title: "Nonconvex alternating direction method with projection on the rank set, restarts and polish",
    class: MethodClass::Projection,
    reference: "S. Diamond, R. Takapoui, S. Boyd, A general system for heuristic minimization of convex functions over \
non-convex sets, Optimization Methods and Software 33:165-193, 2018, 10.1080/10556788.2017.1304548. The source draws rho \
uniformly from (0, 1), makes 5 starts of 50 iterations with over-relaxation 1.8 from z = 0 or N(0, 1), keeps the point of \
least merit and polishes it. Ours, because its 50 iterations leave three digits and its unit of rho is that of its data: \
rho in units of the data and from a wider range, 500 iterations, over-relaxation 1.4. Bibliographic data and the source's numbers \
from memory.",
    needs: "Any problem whose blocks fit in memory densely (about 18 matrices a block). Blocks without a rank bound are \
projected on the cone. The subspace polish is left out where m > 1500.",
    cost: "One iteration: one full eigendecomposition of each block (9 n^3) and one solve with AA*. One polish: an \
interior-point run on blocks of order r with m constraints and 2 m more scalars (m^3 an iteration).",
    guarantees: "None with rank bounds: it may cycle. Without them it is the convex method, which converges for \
over-relaxation below 2 in its usual form.",
    failures: "Very sensitive to rho: too small and it wanders, too large and it settles at the first feasible point. Its merit prefers the smaller violation, so that of two points of different value the \
better one may be dropped (lattice-tiles, frustrated-loops). A \
polish cannot leave the subspace it is given. Certifies nothing.",
    options: &[
        SettingSpec {
            name: "iterations",
            kind: Kind::Integer { least: 1, most: 1_000_000 },
            default: DefaultSetting::Integer(500),
            meaning: "Most iterations of one start; it ends early when x and z differ by at most 1e-9 (1 + ||z||).",
        },
        SettingSpec {
            name: "starts",
            kind: Kind::Integer { least: 1, most: 10_000 },
            default: DefaultSetting::Integer(5),
            meaning: "Starts, each with its own rho and z; u = 0.",
        },
        SettingSpec {
            name: "least-rho",
            kind: Kind::Decimal { least: 1e-6, most: 1e6 },
            default: DefaultSetting::Decimal(0.2),
            meaning: "Least rho, in units of ||C'|| over the norm of the least-norm point of the affine set, C' being the \
cost projected on the null space of A. The objective enters the affine step as x = P_aff(z - u) - C'/rho.",
        },
        SettingSpec {
            name: "most-rho",
            kind: Kind::Decimal { least: 1e-6, most: 1e6 },
            default: DefaultSetting::Decimal(20.0),
            meaning: "Most rho; log rho is drawn uniformly between the two.",
        },
        SettingSpec {
            name: "over",
            kind: Kind::Decimal { least: 0.1, most: 2.0 },
            default: DefaultSetting::Decimal(1.4),
            meaning: "Over-relaxation alpha, x^ = alpha x + (1 - alpha) times the point `against` names. At the source's 1.8 the \
last digits come slowly on discrete sets.",
        },
        SettingSpec {
            name: "against",
            kind: Kind::Word(&["split", "previous"]),
            default: DefaultSetting::Word("split"),
            meaning: "split: z, the usual form; previous: the last x, as in the source's program.",
        },
        SettingSpec {
            name: "sigma",
            kind: Kind::Decimal { least: 0.0, most: 1e6 },
            default: DefaultSetting::Decimal(1.0),
            meaning: "Standard deviation of the entries of the starting z, in units of the norm of the least-norm point \
of the affine set over the total order; 0 starts at z = 0.",
        },
        SettingSpec {
            name: "polish",
            kind: Kind::Word(&["off", "subspace", "newton"]),
            default: DefaultSetting::Word("subspace"),
            meaning: "subspace: the best point is replaced by the minimiser of the merit <C, X> + 1e6 ||A(X) - b||_1 over \
X = U Z U', Z PSD, U its leading r eigenvectors, up to 5 times while the merit falls by a thousandth; newton: that, then \
Newton steps on the Lagrangian in factor form.",
        },
    ],
};

/// Weight of the sum of absolute violations in the merit, in scaled data.
const PENALTY: f64 = 1e6;
/// Most polishes, and the relative fall of the merit that calls for one more.
const POLISHES: usize = 5;
const WORTHWHILE: f64 = 1e-3;
/// Most constraints of a subspace polish.
const POLISH_LIMIT: usize = 1500;

/// What x^ is extrapolated against.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
enum Against {
    Split,
    Previous,
}

struct Run<'a> {
    problem: &'a Problem,
    op: &'a Operator,
    projector: AffineProjector<'a>,
    maps: DenseMaps<'a>,
    set: RankSet,
    x: DensePoint,
    previous: DensePoint,
    z: DensePoint,
    u: DensePoint,
    image: Vec<f64>,
    best: Best,
    merit: f64,
    unit: f64,
    steps: usize,
    settled: usize,
    polishes: usize,
}

impl Run<'_> {
    /// Does one iteration and returns ||x - z||.
    fn step(
        &mut self,
        t: f64,
        alpha: f64,
        against: Against,
        meter: &mut Meter,
    ) -> Result<f64, Halt> {
        self.previous.copy_from(if against == Against::Split { &self.z } else { &self.x });
        self.x.copy_from(&self.z);
        self.x.add(-1.0, &self.u);
        self.projector.project_tilted(&mut self.x.blocks, &mut self.x.x, t, meter);
        // u becomes x^ + u, which is projected, and then x^ + u - z.
        self.u.add(alpha, &self.x);
        self.u.add(1.0 - alpha, &self.previous);
        self.set.project(&self.u, &mut self.z, meter)?;
        self.u.add(-1.0, &self.z);
        self.steps += 1;
        meter.effort.inner_steps += 1;
        Ok(self.x.distance(&self.z))
    }

    /// Returns <C, X> + 1e6 ||A(X) - b||_1 of a point, with its objective and ||A(X) - b||_2.
    fn merit_of(&mut self, z: &DensePoint) -> (f64, f64, f64) {
        self.maps.apply(&z.blocks, &z.x, &mut self.image);
        self.image.iter_mut().zip(self.problem.rhs()).for_each(|(a, b)| *a -= b);
        let value = self.op.cost_dense(&z.blocks, &z.x);
        let violation: f64 = self.image.iter().map(|v| v.abs()).sum();
        (value + PENALTY * violation, value, norm2(&self.image))
    }

    /// Takes z when its merit is the best so far.
    fn keep(&mut self) {
        let z = std::mem::replace(&mut self.z, DensePoint { blocks: Vec::new(), x: Vec::new() });
        let (merit, value, residual) = self.merit_of(&z);
        if merit < self.merit {
            self.merit = merit;
            self.best.value = value;
            self.best.distance = residual;
            self.best.point.copy_from(&z);
        }
        self.z = z;
    }

    /// Runs one start.
    fn start(
        &mut self,
        t: f64,
        (alpha, against): (f64, Against),
        limit: usize,
        meter: &mut Meter,
    ) -> Result<(), Halt> {
        self.u.clear();
        self.x.copy_from(&self.z);
        for step in 0..limit {
            meter.check()?;
            let distance = self.step(t, alpha, against, meter)?;
            if !distance.is_finite() {
                return Ok(());
            }
            self.keep();
            if step % 10 == 0 {
                meter.trace(TracePoint {
                    flops: 0,
                    objective: Some(self.unit * self.op.cost_dense(&self.z.blocks, &self.z.x)),
                    residual: Some(norm2(&self.image) / (1.0 + norm2(self.problem.rhs()))),
                    tail: None,
                });
            }
            if distance <= CLOSE * (1.0 + self.z.norm()) {
                self.settled += 1;
                return Ok(());
            }
        }
        Ok(())
    }

    /// Makes all starts.
    fn starts(
        &mut self,
        options: &crate::card::Settings,
        stream: &mut Stream,
        meter: &mut Meter,
    ) -> Result<StopReason, Halt> {
        self.x.clear();
        self.projector.project(&mut self.x.blocks, &mut self.x.x, meter);
        let scale = self.x.norm().max(f64::MIN_POSITIVE);
        let works = self.projector.cut() == Cut::Works;
        let sigma = options.decimal("sigma") * scale / self.problem.total_order() as f64;
        let (least, most) = (options.decimal("least-rho").ln(), options.decimal("most-rho").ln());
        let against = match options.word("against") {
            "previous" => Against::Previous,
            _ => Against::Split,
        };
        for _ in 0..options.size("starts") {
            let rho = (least + (most - least) * stream.uniform()).exp();
            let t = if works { scale / (rho * self.projector.cost_norm()) } else { 0.0 };
            for block in &mut self.z.blocks {
                for j in 0..block.ncols() {
                    for i in j..block.nrows() {
                        let value = sigma * stream.normal();
                        block[(i, j)] = value;
                        block[(j, i)] = value;
                    }
                }
            }
            self.z.x.iter_mut().for_each(|value| *value = sigma * stream.normal());
            self.start(t, (options.decimal("over"), against), options.size("iterations"), meter)?;
            if self.settled > 0 && !works {
                break;
            }
        }
        Ok(if self.settled > 0 { StopReason::IterationLimit } else { StopReason::Stalled })
    }

    /// Polishes the best point in its subspace.
    fn polish(&mut self, meter: &mut Meter) -> Result<(), Halt> {
        for _ in 0..POLISHES {
            let before = self.merit;
            self.x.copy_from(&self.best.point);
            self.set.project(&self.x, &mut self.previous, meter)?;
            if !solve_restricted(self.problem, &self.set, PENALTY, &mut self.z, meter)? {
                return Ok(());
            }
            self.polishes += 1;
            self.keep();
            if before - self.merit <= WORTHWHILE * before.abs() {
                return Ok(());
            }
        }
        Ok(())
    }
}

impl Method for RankAdmm {
    fn card(&self) -> &'static MethodCard {
        &CARD
    }

    fn solve(&self, problem: &Problem, trial: &mut Trial) -> Result<Answer, Halt> {
        let meter = &mut trial.meter;
        meter.check_room(memory_bytes(problem, 18))?;
        let (scaled, scaling) = Scaling::scale(problem);
        let op = Operator::new(&scaled);
        let projector = AffineProjector::new(&scaled, &op, meter)
            .map_err(|error| Halt::Failed(error.to_string()))?;
        let zero = DensePoint::zeros(problem);
        let mut run = Run {
            problem: &scaled,
            op: &op,
            projector,
            maps: DenseMaps::new(&op),
            set: RankSet::new(problem),
            x: zero.clone(),
            previous: zero.clone(),
            z: zero.clone(),
            u: zero,
            image: vec![0.0; op.constraints()],
            best: Best::new(problem),
            merit: f64::INFINITY,
            unit: scaling.rhs * scaling.cost,
            steps: 0,
            settled: 0,
            polishes: 0,
        };
        let mut outcome = run.starts(&trial.options, &mut trial.stream, meter);
        let (subspace, finish) = match trial.options.word("polish") {
            "off" => (false, Finish::Plain),
            "subspace" => (true, Finish::Plain),
            _ => (true, Finish::Newton),
        };
        if subspace && outcome.is_ok() && op.constraints() <= POLISH_LIMIT {
            outcome = run.polish(meter).and(outcome);
        }
        let stop = stop_of(outcome, &run.best)?;
        let note = format!(
            "{} starts settled, {} steps, {} polishes, residual {:.1e}",
            run.settled, run.steps, run.polishes, run.best.distance
        );
        let Run { mut set, best, .. } = run;
        answer(problem, &mut set, &best, Some(&scaling), finish, (stop, note), meter)
    }
}
