//! `hyperplane-rounding`: signs from the relaxation by random hyperplanes and local search.

use super::{Method, Trial};
use crate::budget::Halt;
use crate::card::{DefaultSetting, Kind, MethodCard, MethodClass, SettingSpec};
use crate::engines::alm::stop_of;
use crate::engines::rounding::hyperplane::{HyperplaneParams, Improve, round};
use crate::engines::rounding::relaxed::UnitRelaxation;
use crate::problem::{Answer, BlockPoint, Factor, Operator, Point, Problem, StopReason};

/// The method.
#[derive(Clone, Copy, Debug)]
pub struct HyperplaneRounding;

static CARD: MethodCard = MethodCard {
    id: "hyperplane-rounding",
    title: "Signs from the relaxation by random hyperplanes, improved by local search",
    class: MethodClass::Rounding,
    reference: "M. Goemans and D. Williamson, Improved approximation algorithms for maximum cut and satisfiability problems \
using semidefinite programming, Journal of the ACM 42:1115-1145, 1995, 10.1145/227683.227684. Variable depth: B. Kernighan \
and S. Lin, Bell System Technical Journal 49:291-307, 1970, in the form of P. Merz and B. Freisleben, Journal of Heuristics \
8:197-213, 2002. Kicks: iterated local search, H. Lourenco, O. Martin, T. Stutzle, Handbook of Metaheuristics, 2003; the \
connected patch is our own. Bibliographic data from memory.",
    needs: "Every diagonal entry of every block fixed by one constraint each, no other constraint, no nonnegative part, rank \
bound 1 on every block; refuses anything else.",
    cost: "The relaxation by the factored solver with unit rows at the rank bound (see `factored-alm`; no interior point). A \
draw: one product with the factor; one-flip: a product's cost a round; a pass of variable depth: up to n flips of n \
comparisons each, ended after 100 without gain. Memory: the factor and a few vectors.",
    guarantees: "Always feasible. For max-cut with nonnegative weights the expected cut of each draw is at least 0.87856 of the \
relaxation's value; improvement never makes a draw worse. 'certified' in the note: the objective meets the relaxation's \
bound b'y + tr X min(0, lambda_min(S)) to 1e-7, lambda_min from Lanczos.",
    failures: "Local search: the result is a local minimum when the relaxation has a gap. On faces of balanced sign vectors \
(hidden-partition) the objective says nothing on the way to the optimum, and draws are random guesses. The rounding needs the relaxation \
solved: where that takes the whole budget, one draw is made.",
    options: &[
        SettingSpec {
            name: "draws",
            kind: Kind::Integer { least: 1, most: 1_000_000 },
            default: DefaultSetting::Integer(100),
            meaning: "Random hyperplanes; fewer when the relaxation's bound is met.",
        },
        SettingSpec {
            name: "improve",
            kind: Kind::Word(&["never", "one-flip", "variable-depth"]),
            default: DefaultSetting::Word("one-flip"),
            meaning: "Local search on each draw: none; flips of single signs while they gain; passes of variable depth \
(the free sign of greatest gain is flipped and held, for better or worse, and the pass taken back to its best prefix) while \
they gain.",
        },
        SettingSpec {
            name: "kicks",
            kind: Kind::Integer { least: 0, most: 10_000_000 },
            default: DefaultSetting::Integer(0),
            meaning: "After the draws: flips of a random connected patch of 2 to n/5 + 1 signs (at least up to 4) of the best point, each \
improved as a draw; what is not worse is kept.",
        },
    ],
};

impl Method for HyperplaneRounding {
    fn card(&self) -> &'static MethodCard {
        &CARD
    }

    fn solve(&self, problem: &Problem, trial: &mut Trial) -> Result<Answer, Halt> {
        if let Some(block) = problem.blocks().iter().position(|block| block.rank != Some(1)) {
            let rank = problem.blocks()[block].rank;
            let found =
                rank.map_or("no rank bound".to_owned(), |rank| format!("rank bound {rank}"));
            return Err(Halt::Refused(format!(
                "rounds to signs only: block {} has {found}, expected rank bound 1",
                block + 1
            )));
        }
        let params = HyperplaneParams {
            draws: trial.options.size("draws"),
            improve: match trial.options.word("improve") {
                "never" => Improve::Never,
                "variable-depth" => Improve::VariableDepth,
                _ => Improve::OneFlip,
            },
            kicks: trial.options.size("kicks"),
            certificate: 1e-7,
        };
        let op = Operator::new(problem);
        let relaxed = UnitRelaxation::solve(problem, &op, &mut trial.stream, &mut trial.meter)?;
        let mut factors = Vec::new();
        let (mut draws, mut kicks, mut certified, mut halt) = (0, 0, true, None);
        for (k, block) in relaxed.blocks.iter().enumerate() {
            let (rows, bound) = (&relaxed.rows[k], relaxed.bounds[k]);
            let whole = relaxed.whole();
            let (stream, meter) = (&mut trial.stream, &mut trial.meter);
            let found = round(block, rows, bound, &params, whole, stream, meter);
            (draws, kicks) = (draws + found.draws, kicks + found.kicks);
            certified &= found.certified;
            halt = halt.or(found.halt);
            let data = found.signs.iter().zip(&block.radii).map(|(x, s)| x * s).collect();
            factors.push(BlockPoint::Factor(Factor { order: block.order, width: 1, data }));
        }
        let stop = match halt {
            Some(halt) => stop_of(&halt)?,
            None if certified => StopReason::Converged,
            None => StopReason::IterationLimit,
        };
        let word = if certified { "certified" } else { "not certified" };
        Ok(Answer {
            point: Point { blocks: factors, orthant: Vec::new() },
            multipliers: Some(relaxed.multipliers),
            stop,
            note: format!(
                "{word}; relaxation {:.9e} at width {}; {draws} draws, {kicks} kicks",
                relaxed.objective, relaxed.widest
            ),
        })
    }
}
