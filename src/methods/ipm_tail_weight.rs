//! `ipm-tail-weight`: interior-point steps whose objective is steered by a weight on the tail of X,
//! finished by Newton steps on the factor.

use super::{Method, Trial};
use crate::budget::Halt;
use crate::card::{DefaultSetting, Kind, MethodCard, MethodClass, SettingSpec};
use crate::engines::ipm::tail::{FirstWeight, TailParams, TailWeight};
use crate::engines::ipm::{self, Outcome};
use crate::engines::newton::{NewtonParams, polish};
use crate::engines::reduction::Spectral;
use crate::linalg::Mat;
use crate::linalg::vector::{axpy, dot, norm2};
use crate::problem::operator::Storage;
use crate::problem::{Answer, BlockPoint, Factor, Operator, Point, Problem, StopReason};

/// The method.
#[derive(Clone, Copy, Debug)]
pub struct IpmTailWeight;

static CARD: MethodCard = MethodCard {
    id: "ipm-tail-weight",
    title: "Interior-point steps steered by a weight on the eigenvalues beyond the target rank",
    class: MethodClass::ProjectedInteriorPoint,
    reference: "Own combination of published parts: the HKM predictor-corrector (see relax-ipm), the truncated-trace penalty \
        (Y. Hu, D. Zhang, J. Ye, X. Li, X. He, IEEE TPAMI 35:2117-2130, 2013; J. Gotoh, A. Takeda, K. Tono, Math. Program. \
        169:141-176, 2018) applied inside the loop, and Newton's method on the factor. Bibliographic data from memory.",
    needs: "Any blocks, nonnegative part, sparse, dense or rank-one constraints; blocks are held dense.",
    cost: "relax-ipm's iteration plus one eigendecomposition of each bounded block, for each attempt. Attempts end when one \
        meets the relaxation's value.",
    guarantees: "None. Without a gap and with a unique optimum of the target rank it is the relaxation's optimum.",
    failures: "Local: the weight picks the rank-r point nearest in tail, which may be suboptimal on faces and with a gap. \
        Graphs with several components leave free signs, so that the tail cannot vanish.",
    options: &[
        SettingSpec {
            name: "start",
            kind: Kind::Word(&["both", "gentle", "firm"]),
            default: DefaultSetting::Word("both"),
            meaning: "gentle: the weight starts late and as small as the duality gap, to stay on the optimal face; \
                firm: it starts at gap 0.1 with 0.02 of |<C,X>|/tr X, to cross a gap; both: gentle, then firm.",
        },
        SettingSpec {
            name: "restarts",
            kind: Kind::Integer { least: 0, most: 100 },
            default: DefaultSetting::Integer(3),
            meaning: "Further gentle attempts, each held for its first 10 steered iterations to the tail outside a random \
                subspace of the relaxation's solution.",
        },
        SettingSpec {
            name: "growth",
            kind: Kind::Decimal { least: 1.01, most: 10.0 },
            default: DefaultSetting::Decimal(1.5),
            meaning: "Factor by which the weight grows when the tail ratio is above 1e-5 and did not fall enough.",
        },
        SettingSpec {
            name: "hold",
            kind: Kind::Decimal { least: 0.0, most: 1.0 },
            default: DefaultSetting::Decimal(0.5),
            meaning: "The weight is held while the tail ratio falls below hold times its last value.",
        },
        SettingSpec {
            name: "gate",
            kind: Kind::Decimal { least: 1e-8, most: 1.0 },
            default: DefaultSetting::Decimal(1e-4),
            meaning: "Relative gap below which the gentle weight starts.",
        },
        SettingSpec {
            name: "share",
            kind: Kind::Decimal { least: 1e-6, most: 1e6 },
            default: DefaultSetting::Decimal(1.0),
            meaning: "First gentle weight as a share of <X,S> over the tail of X.",
        },
    ],
};

/// A finished attempt.
struct Attempt {
    factors: Vec<Factor>,
    orthant: Vec<f64>,
    /// Eigenvalues beyond the target ranks over the trace, before the Newton steps.
    tail: f64,
    steered: usize,
    outcome: Outcome,
    feasibility: f64,
    objective: f64,
}

impl Method for IpmTailWeight {
    fn card(&self) -> &'static MethodCard {
        &CARD
    }

    fn solve(&self, problem: &Problem, trial: &mut Trial) -> Result<Answer, Halt> {
        let growth = trial.options.decimal("growth");
        let gentle = TailParams {
            gate: trial.options.decimal("gate"),
            start: FirstWeight::OfGap(trial.options.decimal("share")),
            growth,
            hold: trial.options.decimal("hold"),
            tolerance: 1e-8,
            patience: 120,
            held: 0,
        };
        let firm = TailParams {
            gate: 0.1,
            start: FirstWeight::OfValue(0.02),
            growth,
            hold: trial.options.decimal("hold"),
            tolerance: 1e-8,
            patience: 80,
            held: 0,
        };
        let mut plans: Vec<(&'static str, TailParams)> = match trial.options.word("start") {
            "gentle" => vec![("gentle start", gentle)],
            "firm" => vec![("firm start", firm)],
            _ => vec![("gentle start", gentle), ("firm start", firm)],
        };
        let restarts = trial.options.size("restarts");
        plans.extend((0..restarts).map(|_| ("random start", TailParams { held: 10, ..gentle })));

        // Step 1: the relaxation; its value tells when an attempt cannot be bettered.
        let op = Operator::with_storage(problem, Storage::Factored);
        let params = ipm::Params::default();
        let relaxed = ipm::solve(problem, &params, None, &mut trial.meter)?;
        if matches!(relaxed.info.outcome, Outcome::PrimalInfeasible | Outcome::DualInfeasible) {
            let word = relaxed.info.outcome.stop_reason().word();
            return Err(Halt::Failed(format!("the relaxation is {word}")));
        }
        let spectral = Spectral::of(&relaxed.points, &relaxed.orthant, 1e-6, &mut trial.meter)?;
        let value = relaxed.info.primal_value;
        // The relaxation's multipliers bound the optimum from below; those of a steered run do not.
        let multipliers = relaxed.multipliers.clone();
        let mut best = ("relaxation", finish(problem, &op, relaxed, 0, trial)?);

        // Step 2: steered attempts, until one meets the relaxation's value.
        for (name, params) in plans {
            if best.1.meets(value) {
                break;
            }
            let first = (params.held > 0).then(|| random_subspaces(problem, &spectral, trial));
            match attempt(problem, &op, params, first, trial) {
                Ok(attempt) if better(&attempt, &best.1) => best = (name, attempt),
                Ok(_) => {}
                Err(Halt::TimeLimit) => break,
                Err(other) => return Err(other),
            }
        }
        let (name, attempt) = best;
        let stop = match (trial.meter.check(), attempt.outcome) {
            (Err(Halt::TimeLimit), _) => StopReason::TimeLimit,
            (Err(halt), _) => return Err(halt),
            // A tail that did not vanish means that the weight did not do its work.
            (Ok(()), Outcome::Optimal) if attempt.tail > 1e-6 => StopReason::Stalled,
            (Ok(()), outcome) => outcome.stop_reason(),
        };
        Ok(Answer {
            point: Point {
                blocks: attempt.factors.into_iter().map(BlockPoint::Factor).collect(),
                orthant: attempt.orthant,
            },
            multipliers: Some(multipliers),
            stop,
            note: format!(
                "{name}, {} steered iterations, tail {:.1e} before the Newton steps",
                attempt.steered, attempt.tail
            ),
        })
    }
}

/// A feasible point beats an infeasible one; then the lower objective wins.
fn better(new: &Attempt, old: &Attempt) -> bool {
    let feasible = |attempt: &Attempt| attempt.feasibility <= 1e-7;
    match (feasible(new), feasible(old)) {
        (true, false) => true,
        (false, true) => false,
        (true, true) => new.objective < old.objective,
        (false, false) => new.feasibility < old.feasibility,
    }
}

impl Attempt {
    /// Whether the point is feasible and has the relaxation's value, so that nothing can be better.
    fn meets(&self, value: f64) -> bool {
        self.feasibility <= 1e-9 && self.objective <= value + 1e-8 * (1.0 + value.abs())
    }
}

/// Draws, for each block, an orthonormal basis of V G with X = V V' and G of independent normal
/// numbers: a random subspace that X favours.
fn random_subspaces(problem: &Problem, spectral: &Spectral, trial: &mut Trial) -> Vec<Mat<f64>> {
    let mut bases = Vec::new();
    for (part, block) in spectral.parts.iter().zip(problem.blocks()) {
        let rank = block.rank.unwrap_or(block.order);
        let mut basis = Mat::zeros(block.order, rank);
        for j in 0..rank {
            for (k, value) in part.values.iter().enumerate() {
                let weight = value.max(0.0).sqrt() * trial.stream.normal();
                let source = part.basis.col_as_slice(k);
                axpy(weight, source, basis.col_as_slice_mut(j));
            }
            orthonormalise(&mut basis, j, trial);
        }
        bases.push(basis);
    }
    bases
}

/// Makes column j orthonormal to the columns before it; a column that depends on them is redrawn.
fn orthonormalise(basis: &mut Mat<f64>, j: usize, trial: &mut Trial) {
    loop {
        let before = norm2(basis.col_as_slice(j));
        for _ in 0..2 {
            for k in 0..j {
                let known = basis.col_as_slice(k).to_vec();
                let overlap = dot(&known, basis.col_as_slice(j));
                axpy(-overlap, &known, basis.col_as_slice_mut(j));
            }
        }
        let size = norm2(basis.col_as_slice(j));
        let column = basis.col_as_slice_mut(j);
        if size > 1e-10 * before.max(f64::MIN_POSITIVE) {
            column.iter_mut().for_each(|value| *value /= size);
            return;
        }
        column.iter_mut().for_each(|value| *value = trial.stream.normal());
    }
}

fn attempt(
    problem: &Problem,
    op: &Operator,
    params: TailParams,
    first: Option<Vec<Mat<f64>>>,
    trial: &mut Trial,
) -> Result<Attempt, Halt> {
    let mut hook = TailWeight::new(problem.blocks(), params, first);
    let ipm_params = ipm::Params { max_iterations: 200, ..ipm::Params::default() };
    let solution = ipm::solve(problem, &ipm_params, Some(&mut hook), &mut trial.meter)?;
    finish(problem, op, solution, hook.info.steered, trial)
}

/// Truncates a solution to the target ranks and finishes it by Newton steps without the weight.
fn finish(
    problem: &Problem,
    op: &Operator,
    solution: ipm::Solution,
    steered: usize,
    trial: &mut Trial,
) -> Result<Attempt, Halt> {
    let meter = &mut trial.meter;
    let spectral = Spectral::of(&solution.points, &solution.orthant, 1e-9, meter)?;
    let mut factors = Vec::new();
    let (mut tail, mut trace) = (0.0, 0.0);
    for (part, block) in spectral.parts.iter().zip(problem.blocks()) {
        let rank = block.rank.unwrap_or(block.order);
        factors.push(part.leading_factor(rank));
        let beyond = part.values.len().saturating_sub(rank);
        tail += part.values[..beyond].iter().sum::<f64>();
        trace += part.values.iter().sum::<f64>();
    }
    let mut orthant = solution.orthant;
    let mut multipliers = solution.multipliers;
    let newton = NewtonParams::default();
    polish(op, problem, &mut factors, &mut orthant, &mut multipliers, &newton, meter);
    let mut image = vec![0.0; op.constraints()];
    op.apply_factors(&factors, &orthant, &mut image);
    let residual: f64 = image.iter().zip(problem.rhs()).map(|(a, b)| (a - b) * (a - b)).sum();
    let b_norm: f64 = problem.rhs().iter().map(|b| b * b).sum::<f64>().sqrt();
    Ok(Attempt {
        objective: op.cost_of_factors(&factors, &orthant),
        feasibility: residual.sqrt() / (1.0 + b_norm),
        factors,
        orthant,
        tail: if trace > 0.0 { tail / trace } else { 0.0 },
        steered,
        outcome: solution.info.outcome,
    })
}
