//! `staircase`: second-order points at growing widths until the slack proves one optimal.

use super::{Method, Trial};
use crate::budget::Halt;
use crate::card::{DefaultSetting, Kind, MethodCard, MethodClass, Setting, SettingSpec};
use crate::engines::alm::staircase::{ClimbParams, Decrease, climb};
use crate::engines::alm::{AlmError, AlmParams, InnerSolver, Schedule};
use crate::problem::{Answer, BlockPoint, Operator, Point, Problem};

/// The method.
#[derive(Clone, Copy, Debug)]
pub struct Staircase;

static CARD: MethodCard = MethodCard {
    id: "staircase",
    title: "Factored descent at growing widths, with escapes from saddles, until certified",
    class: MethodClass::Factored,
    reference: "N. Boumal, A Riemannian low-rank method for optimization over semidefinite matrices with block-diagonal \
constraints, arXiv:1506.00575, 2015; N. Boumal, V. Voroninski, A. Bandeira, Deterministic guarantees for Burer-Monteiro \
factorizations of smooth semidefinite programs, Communications on Pure and Applied Mathematics 73:581-608, 2020, \
arXiv:1804.02008. General constraints: the augmented Lagrangian of S. Burer and R. Monteiro, Mathematical Programming \
95:329-357, 2003, in the place of the Riemannian trust region; rank decrease by QR with pivoting after S. Burer and C. Choi, \
Optimization Methods and Software 21:493-512, 2006; truncated Newton steps after R. Dembo and T. Steihaug, Mathematical \
Programming 26:190-212, 1983. Bibliographic data from memory.",
    needs: "Any problem; x >= 0 is handled as squares. A diagonal fixed entry by entry, with no other constraint, takes \
the path with unit rows (row by row descent, then a Riemannian trust region).",
    cost: "A descent at each width (see `factored-alm`) and one Lanczos run or, up to order 160, one eigendecomposition of \
the slack. Memory as `factored-alm` at the last width.",
    guarantees: "Ends with a certificate at a width of at most n when every descent ends at a second-order point of a smooth \
compact feasible set; for almost every cost already at p(p+1)/2 > m. A note 'certified' means |<C,X> - b'y| + tr X \
max(0, -lambda_min(S)) is within 1e-7 of 1 + |<C,X>|, lambda_min from Lanczos.",
    failures: "It solves the relaxation: with a gap, or on a face, the certified point has a rank above the target and \
its truncation fails. General constraints: descents may end at infeasible stationary points, and L-BFGS gives \
first-order points only; `inner = newton` has no preconditioner and is slow without a Slater point (localisation). Slow where the relaxation has no strict complementarity.",
    options: &[
        SettingSpec {
            name: "start",
            kind: Kind::WordOrInteger { words: &["target"], least: 1, most: 100_000 },
            default: DefaultSetting::Word("target"),
            meaning: "First width of each factor: the target rank (1 where the rank is free), or a number; never \
above the block's order.",
        },
        SettingSpec {
            name: "most",
            kind: Kind::WordOrInteger { words: &["bound"], least: 1, most: 100_000 },
            default: DefaultSetting::Word("bound"),
            meaning: "Greatest width: the least p with p(p+1)/2 > m, or a number; never above the order, nor below the \
first width. Equal to `start` it makes the plain factored method with one start.",
        },
        SettingSpec {
            name: "schedule",
            kind: Kind::Word(&["one", "double"]),
            default: DefaultSetting::Word("one"),
            meaning: "Whether an uncertified point is widened by the escape column alone, or to twice its width.",
        },
        SettingSpec {
            name: "inner",
            kind: Kind::Word(&["lbfgs", "newton"]),
            default: DefaultSetting::Word("lbfgs"),
            meaning: "What minimises the augmented Lagrangian of general constraints: limited-memory BFGS with 8 pairs, or \
truncated Newton steps with directions of negative curvature. Unit rows have a second-order method in any case.",
        },
        SettingSpec {
            name: "decrease",
            kind: Kind::Word(&["pivoted-qr", "never"]),
            default: DefaultSetting::Word("pivoted-qr"),
            meaning: "Whether columns beyond the numerical rank (1e-6 of the longest row) of a certified point are taken \
away, with a descent at the lower width.",
        },
    ],
};

impl Method for Staircase {
    fn card(&self) -> &'static MethodCard {
        &CARD
    }

    fn solve(&self, problem: &Problem, trial: &mut Trial) -> Result<Answer, Halt> {
        let op = Operator::new(problem);
        let options = &trial.options;
        let number = |name: &str| match options.get(name) {
            Some(Setting::Integer(value)) => Some(usize::try_from(*value).unwrap_or(1)),
            _ => None,
        };
        let first = number("start");
        let widths = problem
            .blocks()
            .iter()
            .map(|block| first.or(block.rank).unwrap_or(1).clamp(1, block.order))
            .collect();
        let mut params = AlmParams::with_widths(widths);
        params.schedule =
            if options.word("schedule") == "double" { Schedule::Double } else { Schedule::One };
        params.solver = if options.word("inner") == "newton" {
            InnerSolver::Newton
        } else {
            InnerSolver::Lbfgs
        };
        let way = ClimbParams {
            most: number("most"),
            decrease: match options.word("decrease") {
                "never" => Decrease::Never,
                _ => Decrease::PivotedQr,
            },
        };
        let (stream, meter) = (&mut trial.stream, &mut trial.meter);
        let solution =
            climb(problem, &op, &params, &way, stream, meter).map_err(|error| match error {
                AlmError::Halted(halt) => halt,
                other => Halt::Failed(other.to_string()),
            })?;
        let info = &solution.info;
        let ends: Vec<String> = solution.factors.iter().map(|f| f.width.to_string()).collect();
        let ways = format!("widest {}, ends at width {}", info.widest, ends.join(", "));
        let note = match &info.certificate {
            Some(c) if c.gap <= params.certificate && info.feasibility <= 1e-6 => {
                let (least, gap) = (c.least, c.gap);
                format!("certified: lambda_min(S) >= {least:.2e}, relative gap {gap:.1e}; {ways}")
            }
            Some(c) => {
                let (least, gap) = (c.least, c.gap);
                format!("not certified: lambda_min(S) {least:.2e}, relative gap {gap:.1e}; {ways}")
            }
            None => format!("no certificate in time; {ways}"),
        };
        Ok(Answer {
            point: Point {
                blocks: solution.factors.into_iter().map(BlockPoint::Factor).collect(),
                orthant: solution.orthant,
            },
            multipliers: Some(solution.multipliers),
            stop: solution.info.stop,
            note,
        })
    }
}
