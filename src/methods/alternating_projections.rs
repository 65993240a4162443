//! `alternating-projections`: between matrices of bounded rank and the affine set cut by the objective.

use super::{Method, Trial};
use crate::budget::{Halt, Meter, TracePoint};
use crate::card::{DefaultSetting, Kind, MethodCard, MethodClass, SettingSpec};
use crate::engines::affine::{AffineProjector, Cut};
use crate::engines::anderson::Anderson;
use crate::engines::projections::levels::{Limits, Stage, Staged, descend};
use crate::engines::projections::point::DensePoint;
use crate::engines::projections::{
    Best, CLOSE, Finish, RankSet, answer, draw, memory_bytes, stop_of,
};
use crate::problem::{Answer, Operator, Problem};
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

/// A stage fails early when the distance fell by less than a thousandth over this many steps.
const WINDOW: usize = 50;
/// Differences that the acceleration combines.
const MEMORY: usize = 8;
/// An accelerated point is taken back when its distance is more than this times the last one.
const WORSE: f64 = 1.5;

impl Method for AlternatingProjections {
    fn card(&self) -> &'static MethodCard {
        &CARD
    }

    fn solve(&self, problem: &Problem, trial: &mut Trial) -> Result<Answer, Halt> {
        trial.meter.check_room(memory_bytes(problem, 25))?;
        let op = Operator::new(problem);
        let projector = AffineProjector::new(problem, &op, &mut trial.meter)
            .map_err(|error| Halt::Failed(error.to_string()))?;
        let mut run = Run::new(problem, &op, projector);
        let limits = Limits {
            starts: trial.options.size("starts"),
            stages: trial.options.size("stages"),
            steps: trial.options.size("steps"),
            retries: 0,
        };
        let outcome = descend(&mut run, limits, &mut trial.stream, &mut trial.meter);
        let stop = stop_of(outcome, &run.best)?;
        let finish = match trial.options.word("polish") {
            "newton" => Finish::Newton,
            _ => Finish::Plain,
        };
        let note = format!(
            "{} stages, {} steps, distance of the sets {:.1e}",
            run.stages, run.steps, run.best.distance
        );
        let Run { mut set, best, .. } = run;
        answer(problem, &mut set, &best, None, finish, (stop, note), &mut trial.meter)
    }
}

struct Run<'a> {
    problem: &'a Problem,
    op: &'a Operator,
    projector: AffineProjector<'a>,
    set: RankSet,
    /// Point of the affine set.
    point: DensePoint,
    /// Plain next point.
    plain: DensePoint,
    memory: Anderson,
    flat: Vec<f64>,
    flat_change: Vec<f64>,
    flat_next: Vec<f64>,
    /// Nearest point of bounded rank.
    low: DensePoint,
    best: Best,
    steps: usize,
    stages: usize,
}

impl<'a> Run<'a> {
    fn new(problem: &'a Problem, op: &'a Operator, projector: AffineProjector<'a>) -> Self {
        let zero = DensePoint::zeros(problem);
        Run {
            problem,
            op,
            projector,
            set: RankSet::new(problem),
            point: zero.clone(),
            plain: zero.clone(),
            memory: Anderson::new(zero.length(), MEMORY),
            flat: vec![0.0; zero.length()],
            flat_change: vec![0.0; zero.length()],
            flat_next: vec![0.0; zero.length()],
            low: zero,
            best: Best::new(problem),
            steps: 0,
            stages: 0,
        }
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
        self.set.project(&self.point, &mut self.low, meter)
    }
}

impl Staged for Run<'_> {
    fn draw(&mut self, stream: &mut Stream) {
        draw(self.problem, self.op, &mut self.point, stream);
    }

    fn resume(&mut self) {
        self.point.copy_from(&self.best.point);
    }

    fn value(&self) -> f64 {
        self.best.value
    }

    fn varies(&self) -> bool {
        self.projector.cut() == Cut::Works
    }

    /// Alternates at one value of the cut from `self.point`.
    fn stage(&mut self, gamma: f64, limit: usize, meter: &mut Meter) -> Result<Stage, Halt> {
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
            let close = CLOSE * (1.0 + self.point.norm());
            let (op, low) = (self.op, &self.low);
            self.best.offer(low, distance, close, gamma, || op.cost_dense(&low.blocks, &low.x));
            if distance <= close {
                return Ok(Stage::Met);
            }
            nearest = nearest.min(distance);
            if step % WINDOW == WINDOW - 1 {
                if nearest > 0.999 * marked {
                    return Ok(Stage::Missed);
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
        Ok(Stage::Missed)
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
        let uncut = Limits { starts: 5, stages: 0, steps: 300, retries: 0 };
        descend(&mut run, uncut, &mut stream.clone(), &mut meter).unwrap();
        assert!(run.best.distance <= 1e-8, "{}", run.best.distance);
        let mut cut = super::tests::run(&problem, &op, &mut meter);
        descend(&mut cut, Limits { stages: 40, ..uncut }, &mut stream, &mut meter).unwrap();
        assert!(cut.best.distance <= 1e-8, "{}", cut.best.distance);
        assert!(cut.best.value <= run.best.value, "{} {}", cut.best.value, run.best.value);
        // Every point of the rank set that is feasible is a sign vector, whose objective is at least 0.
        assert!(cut.best.value >= -1e-4, "{}", cut.best.value);
    }
}
