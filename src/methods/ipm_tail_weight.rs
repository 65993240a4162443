//! `ipm-tail-weight`: interior-point steps whose objective is steered by a weight on the tail of X,
//! finished by Newton steps on the factor.

use super::{Method, Trial};
use crate::budget::{Halt, Meter};
use crate::card::{DefaultSetting, Kind, MethodCard, MethodClass, SettingSpec};
use crate::engines::ipm::tail::{FirstWeight, TailInfo, TailParams, TailWeight};
use crate::engines::ipm::{self, Outcome};
use crate::engines::newton::{NewtonParams, polish};
use crate::engines::reduction::Spectral;
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
    cost: "relax-ipm's iteration plus one eigendecomposition of each bounded block; the gentle and the firm start are two runs.",
    guarantees: "None. Without a gap and with a unique optimum of the target rank it is the relaxation's optimum.",
    failures: "Local: the weight picks the rank-r point nearest in tail, which may be suboptimal on faces and with a gap. \
        Graphs with several components leave free signs, so that the tail cannot vanish.",
    options: &[
        SettingSpec {
            name: "start",
            kind: Kind::Word(&["both", "gentle", "firm"]),
            default: DefaultSetting::Word("both"),
            meaning: "gentle: the weight starts late and as small as the duality gap, to stay on the optimal face; \
                firm: it starts at gap 0.1 with 0.02 of it, to cross a gap; both: gentle, then firm unless the first point \
                meets the relaxation's value; the better point is returned.",
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
    multipliers: Vec<f64>,
    tail: TailInfo,
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
        };
        let firm = TailParams {
            gate: 0.1,
            start: FirstWeight::OfValue(0.02),
            growth,
            hold: trial.options.decimal("hold"),
            tolerance: 1e-8,
            patience: 80,
        };
        let plans = match trial.options.word("start") {
            "gentle" => vec![("gentle", gentle)],
            "firm" => vec![("firm", firm)],
            _ => vec![("gentle", gentle), ("firm", firm)],
        };
        let op = Operator::with_storage(problem, Storage::Factored);
        let mut best: Option<(&str, Attempt)> = None;
        for (name, params) in plans {
            let attempt = match attempt(problem, &op, params, &mut trial.meter) {
                Ok(attempt) => attempt,
                Err(Halt::TimeLimit) if best.is_some() => break,
                Err(other) => return Err(other),
            };
            if best.as_ref().is_none_or(|(_, old)| better(&attempt, old)) {
                best = Some((name, attempt));
            }
        }
        let (name, attempt) = best.expect("at least one attempt was made");
        let stop = match (trial.meter.check(), attempt.outcome) {
            (Err(Halt::TimeLimit), _) => StopReason::TimeLimit,
            (Err(halt), _) => return Err(halt),
            (Ok(()), outcome) => outcome.stop_reason(),
        };
        Ok(Answer {
            point: Point {
                blocks: attempt.factors.into_iter().map(BlockPoint::Factor).collect(),
                orthant: attempt.orthant,
            },
            multipliers: Some(attempt.multipliers),
            stop,
            note: format!(
                "{name} start, {} steered iterations, tail {:.1e} before the Newton steps",
                attempt.tail.steered, attempt.tail.tail
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

fn attempt(
    problem: &Problem,
    op: &Operator,
    params: TailParams,
    meter: &mut Meter,
) -> Result<Attempt, Halt> {
    let mut hook = TailWeight::new(problem.blocks(), params);
    let ipm_params = ipm::Params { tolerance: 1e-9, max_iterations: 200 };
    let solution = ipm::solve(problem, &ipm_params, Some(&mut hook), meter)?;
    let spectral = Spectral::of(&solution.points, &solution.orthant, 1e-9, meter)?;
    let mut factors = Vec::new();
    for (part, block) in spectral.parts.iter().zip(problem.blocks()) {
        factors.push(part.leading_factor(block.rank.unwrap_or(block.order)));
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
        multipliers,
        tail: hook.info,
        outcome: solution.info.outcome,
    })
}
