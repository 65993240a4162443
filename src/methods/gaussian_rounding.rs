//! `gaussian-rounding`: Gaussian projections of the relaxation's factor to the target rank.

use super::{Method, Trial};
use crate::budget::Halt;
use crate::card::{DefaultSetting, Kind, MethodCard, MethodClass, SettingSpec};
use crate::engines::alm::{AlmError, AlmParams, Start, refine, stop_of};
use crate::engines::reduction::{RelaxedFactors, relaxed_factors};
use crate::engines::rounding::gaussian::{GaussianParams, Onto, Quality, round};
use crate::engines::rounding::relaxed::UnitRelaxation;
use crate::engines::rounding::restore::RestoreParams;
use crate::problem::{Answer, BlockPoint, Operator, Point, Problem, StopReason};

/// The method.
#[derive(Clone, Copy, Debug)]
pub struct GaussianRounding;

static CARD: MethodCard = MethodCard {
    id: "gaussian-rounding",
    title: "Gaussian projections of the relaxation's factor to the target rank, brought back onto the constraints",
    class: MethodClass::Rounding,
    reference: "After A. So, Y. Ye, J. Zhang, A unified theorem on SDP rank reduction, Mathematics of Operations Research \
33:910-920, 2008, 10.1287/moor.1080.0326, and, with unit rows at rank 1, M. Goemans and D. Williamson, Journal of the ACM \
42:1115-1145, 1995. The return onto the constraints (row lengths, or damped Gauss-Newton steps on the factor), the choice \
among draws and the last descent are our own. Bibliographic data from memory.",
    needs: "Any problem. Blocks without a rank bound, and blocks whose relaxed factor has the target rank, are not projected.",
    cost: "The relaxation: by the factored solver with unit rows at the rank bound (see `factored-alm`) where constraints fix the \
diagonal entry by entry and nothing else, by the interior point to 1e-10 in general, eigenvalues up to 1e-6 of the largest cut. A \
draw: a product with the factor and its return: the length of the rows in the first case, up to 40 Gauss-Newton steps of up to 300 \
products in general. Then a factored descent from the best draw at the target rank.",
    guarantees: "None in general. With unit rows every draw is feasible. The projection keeps <A_i,X> in the mean, and for \
positive semidefinite A_i within known factors with probability 1/4 or more, before the return.",
    failures: "Random guesses: with a gap or a face the chance of a draw in the right basin falls with the order, more \
so for `improve = never`, whose best draw is feasible but hardly ever optimal at rank 2 or more. The Gauss-Newton return may stall where rank-r points that meet the \
constraints are rare (m near or above the dimension n r - r(r-1)/2).",
    options: &[
        SettingSpec {
            name: "draws",
            kind: Kind::Integer { least: 1, most: 1_000_000 },
            default: DefaultSetting::Integer(10),
            meaning: "Random projections. None are made when the relaxation's factors have the target ranks already.",
        },
        SettingSpec {
            name: "improve",
            kind: Kind::Word(&["descent", "never"]),
            default: DefaultSetting::Word("descent"),
            meaning: "Whether the best draw (feasible to 1e-7 before infeasible, then lower objective) is improved by a \
factored descent at its rank, kept when it is better.",
        },
    ],
};

/// Tolerance of the interior point and cut of its eigenvalues, as the card says.
const TOLERANCE: f64 = 1e-10;
/// See [`TOLERANCE`].
const CUT: f64 = 1e-6;

impl Method for GaussianRounding {
    fn card(&self) -> &'static MethodCard {
        &CARD
    }

    fn solve(&self, problem: &Problem, trial: &mut Trial) -> Result<Answer, Halt> {
        let op = Operator::new(problem);
        let (stream, meter) = (&mut trial.stream, &mut trial.meter);
        let draws = trial.options.size("draws");
        // 1. The relaxation, and how draws are brought back.
        let (relaxed, mut found) = match UnitRelaxation::solve(problem, &op, stream, meter) {
            Ok(unit) => {
                let relaxed = RelaxedFactors {
                    factors: unit.factors(),
                    orthant: Vec::new(),
                    objective: unit.objective,
                    multipliers: unit.multipliers,
                    stop: unit.stop,
                };
                let settings = GaussianParams { draws, onto: Onto::Rows(&unit.blocks) };
                let found = round(problem, &op, &relaxed.factors, &[], &settings, stream, meter);
                (relaxed, found)
            }
            Err(Halt::Refused(_)) => {
                let relaxed = relaxed_factors(problem, &op, TOLERANCE, CUT, meter)?;
                let onto = Onto::Constraints(RestoreParams::default());
                let (factors, x) = (&relaxed.factors, &relaxed.orthant);
                let settings = GaussianParams { draws, onto };
                let found = round(problem, &op, factors, x, &settings, stream, meter);
                (relaxed, found)
            }
            Err(halt) => return Err(halt),
        };
        // 2. The descent.
        let ranks: Vec<String> = relaxed.factors.iter().map(|f| f.width.to_string()).collect();
        let mut word = "none kept";
        if trial.options.word("improve") == "descent" && found.draws > 0 && found.halt.is_none() {
            let widths = found.factors.iter().map(|factor| factor.width).collect();
            let start = Start {
                factors: &found.factors,
                orthant: &found.orthant,
                multipliers: &relaxed.multipliers,
            };
            match refine(problem, &op, &start, &AlmParams::with_widths(widths), stream, meter) {
                Ok(refined) => {
                    let info = &refined.info;
                    let (objective, feasibility) = (info.objective, info.feasibility);
                    if (Quality { objective, feasibility }).better_than(&found.quality) {
                        word = "kept";
                        found.factors = refined.factors;
                        found.orthant = refined.orthant;
                    }
                }
                Err(AlmError::Halted(halt)) => found.halt = Some(halt),
                Err(AlmError::Diverged { .. }) => word = "diverged",
            }
        }
        let stop = match found.halt.or_else(|| meter.check().err()) {
            Some(halt) => stop_of(&halt)?,
            None if found.draws == 0 => relaxed.stop,
            None => StopReason::IterationLimit,
        };
        Ok(Answer {
            point: Point {
                blocks: found.factors.into_iter().map(BlockPoint::Factor).collect(),
                orthant: found.orthant,
            },
            multipliers: Some(relaxed.multipliers),
            stop,
            note: format!(
                "relaxation {:.9e} at rank {}; {} draws, descent {word}",
                relaxed.objective,
                ranks.join(", "),
                found.draws
            ),
        })
    }
}
