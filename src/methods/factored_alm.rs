//! `factored-alm`: optimises over X = R R' at a fixed width and certifies by the least eigenvalue of S.

use super::{Method, Trial};
use crate::budget::Halt;
use crate::card::{DefaultSetting, Kind, MethodCard, MethodClass, Setting, SettingSpec};
use crate::engines::alm::{AlmError, AlmInfo, AlmParams, Finish, Lift, Schedule, solve};
use crate::problem::{Answer, BlockPoint, Operator, Point, Problem};

/// The method.
#[derive(Clone, Copy, Debug)]
pub struct FactoredAlm;

static CARD: MethodCard = MethodCard {
    id: "factored-alm",
    title: "Augmented Lagrangian on X = RR' with an exact line search and a certificate",
    class: MethodClass::Factored,
    reference: "S. Burer and R. Monteiro, A nonlinear programming algorithm for solving semidefinite programs \
via low-rank factorization, Mathematical Programming 95:329-357, 2003, 10.1007/s10107-002-0352-8, and Local \
minima and convergence in low-rank semidefinite programming, Mathematical Programming 103:427-444, 2005, \
10.1007/s10107-004-0564-1. Our own: penalty and inner-tolerance rules (first penalty 5 and growth 4 in data \
scaled to norm 1), the finish by Newton steps on (R, y), the lift, and the path for fixed diagonals. That path \
follows A. Javanmard, A. Montanari, F. Ricci-Tersenghi, PNAS 113:E2218-E2223, 2016 (row by row descent) and \
P.-A. Absil, C. Baker, K. Gallivan, Foundations of Computational Mathematics 7:303-330, 2007, \
10.1007/s10208-005-0179-9 (trust region), widened as in N. Boumal, arXiv:1506.00575. Bibliographic data from \
memory.",
    needs: "Any problem; x >= 0 is handled as squares. Blocks whose every diagonal entry is fixed by one \
constraint each, with no other constraint, take the path with unit rows.",
    cost: "One inner step: one product with S and one pass for A(RD'+DR') and A(DD') together, about \
10 (nnz(C) + sum nnz(A_i)) p flops for sparse data, 6 n^2 p for dense; 2 (pairs) + 6 vectors of length n p. \
Newton finish: dense of order n p + m up to 3000, MINRES beyond. Certificate: Lanczos on S, never formed for \
sparse blocks of order above 160. Unit rows: nnz(C) p an inner step, 11 vectors.",
    guarantees: "With p(p+1)/2 > m and a bounded feasible set of smooth rank a second-order point is optimal for \
almost every cost. A note 'certified' means |<C,X> - b'y| + tr X max(0, -lambda_min(S)) is within 1e-7 of \
1 + |<C,X>|, lambda_min from Lanczos (no proof; the referee's bound is one). The rank-constrained optimum of a \
problem with a relaxation gap has no certificate.",
    failures: "Spurious minima below the width bound (Waldspurger and Waters, SIAM J. Optim. 30:2577-2602, 2020), \
rarely at or above it; non-smooth feasible sets; unbounded level sets of R; slow when X* has small nonzero \
eigenvalues or when m exceeds the dimension n r - r(r-1)/2 of the rank-r points, where multipliers are not \
unique and Newton steps converge linearly. At width 1 a fixed diagonal leaves a discrete set: the point comes from rounding a wider one and \
single flips, with no guarantee.",
    options: &[
        SettingSpec {
            name: "width",
            kind: Kind::WordOrInteger { words: &["target", "bound"], least: 1, most: 100_000 },
            default: DefaultSetting::Word("target"),
            meaning: "Width of each factor: the target rank (the least p with p(p+1)/2 > m where the rank is \
free), that bound for all blocks, or a number; never above the block's order. The answer has this width; the \
referee truncates it.",
        },
        SettingSpec {
            name: "starts",
            kind: Kind::Integer { least: 1, most: 1000 },
            default: DefaultSetting::Integer(3),
            meaning: "Random starts made while no point is certified (the first before the lift, the others after \
it); the feasible point of least objective is returned. With a fixed diagonal: points brought down from the lifted one (its leading columns, then random \
projections), 16 times as many at width 1.",
        },
        SettingSpec {
            name: "lift",
            kind: Kind::Word(&["when-needed", "one-by-one", "never"]),
            default: DefaultSetting::Word("when-needed"),
            meaning: "Whether wider factors help on the way. General constraints: after an uncertified first \
start the width doubles up to the bound until certified, and each wide point is truncated to its leading columns \
and solved again at the width. Fixed \
diagonal: the first descent is at width max(3, width + 1, within the bound), doubled with the escape vector of \
S as a new column until certified, then brought down to the width by leading columns and random projections \
with rows normalised, and polished. `one-by-one` lifts as `when-needed` does, but widens by one column at a time in the \
place of doubling. `never` works at the width alone.",
        },
    ],
};

impl Method for FactoredAlm {
    fn card(&self) -> &'static MethodCard {
        &CARD
    }

    fn solve(&self, problem: &Problem, trial: &mut Trial) -> Result<Answer, Halt> {
        let op = Operator::new(problem);
        let mut params = AlmParams::with_widths(widths(problem, trial.options.get("width")));
        params.starts = trial.options.size("starts");
        params.lift = match trial.options.word("lift") {
            "never" => Lift::Never,
            _ => Lift::WhenNeeded,
        };
        if trial.options.word("lift") == "one-by-one" {
            params.schedule = Schedule::One;
        }
        params.finish = Finish::Newton;
        let solution =
            solve(problem, &op, &params, &mut trial.stream, &mut trial.meter).map_err(|error| {
                match error {
                    AlmError::Halted(halt) => halt,
                    other => Halt::Failed(other.to_string()),
                }
            })?;
        let note = describe(&solution.info, params.certificate);
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

/// Returns the width of each block.
fn widths(problem: &Problem, setting: Option<&Setting>) -> Vec<usize> {
    let bound = problem.rank_bound() + 1;
    problem
        .blocks()
        .iter()
        .map(|block| {
            let width = match setting {
                Some(Setting::Integer(width)) => usize::try_from(*width).unwrap_or(1),
                Some(Setting::Word(word)) if word == "bound" => bound,
                _ => block.rank.unwrap_or(bound),
            };
            width.clamp(1, block.order)
        })
        .collect()
}

/// Says in one line what is known of the point.
fn describe(info: &AlmInfo, tolerance: f64) -> String {
    let ways = format!("starts {}, widest {}", info.starts, info.widest);
    match (&info.certificate, info.bound) {
        (Some(c), _) if c.gap <= tolerance && info.feasibility <= 1e-6 => {
            format!(
                "certified: lambda_min(S) >= {:.2e}, relative gap {:.1e}; {ways}",
                c.least, c.gap
            )
        }
        (Some(c), Some(bound)) => format!(
            "not certified: lambda_min(S) {:.2e}, relative gap {:.1e}, relaxation bound {bound:.9e} at the \
point's trace; {ways}",
            c.least, c.gap
        ),
        (None, Some(bound)) => {
            format!("no certificate in time, relaxation bound {bound:.9e}; {ways}")
        }
        _ => format!("no certificate in time; {ways}"),
    }
}
