//! `factored-newton`: Newton's method on (R, y), from a loose factored descent.

use super::{Method, Trial};
use crate::budget::Halt;
use crate::card::{DefaultSetting, Kind, MethodCard, MethodClass, SettingSpec};
use crate::engines::alm::certificate::{Certificate, CertificateParams, certify};
use crate::engines::alm::{AlmError, AlmParams, AlmSolution, Finish, Lift, solve};
use crate::engines::newton::{NewtonEnd, NewtonInfo, NewtonParams, polish};
use crate::problem::{Answer, BlockPoint, Operator, Point, Problem, StopReason};

/// The method.
#[derive(Clone, Copy, Debug)]
pub struct FactoredNewton;

static CARD: MethodCard = MethodCard {
    id: "factored-newton",
    title: "Newton's method on the Lagrangian in (R, y), X = RR', without the cone",
    class: MethodClass::Factored,
    reference: "Own combination of published parts: the factorisation X = RR' of S. Burer and R. Monteiro, \
Mathematical Programming 95:329-357, 2003, 10.1007/s10107-002-0352-8; Newton steps on the saddle system with a \
Levenberg term and inertia control by the augmented Hessian, J. Nocedal and S. Wright, Numerical Optimization, \
2nd ed., Springer 2006, 10.1007/978-0-387-40065-5; MINRES, C. Paige and M. Saunders, SIAM J. Numer. Anal. \
12:617-629, 1975, 10.1137/0712047. Bibliographic data from memory.",
    needs: "Any problem; width = target rank (the least p with p(p+1)/2 > m, at most n, where the rank is free); \
x >= 0 as squares.",
    cost: "Start: the factored augmented Lagrangian (one start with its lift, see `factored-alm`) to a residual of \
`loose`. One Newton step: dense for N = n r + \
m <= 3000, about N^3/3 + N^2 m flops and N^2 memory; MINRES with a diagonal preconditioner beyond, up to 1000 \
products of a gradient's cost each.",
    guarantees: "Quadratic convergence near a point with independent constraint gradients and a positive \
definite Hessian on their null space modulo rotations; the merit (gradient and residual in scaled data) never \
rises.",
    failures: "Local: it ends at the stationary point the loose start is near. No steps at width 1 on fixed \
diagonals, where the set is discrete. Slow (the Levenberg term stays) where the optimum is not unique.",
    options: &[
        SettingSpec {
            name: "starts",
            kind: Kind::Integer { least: 1, most: 1000 },
            default: DefaultSetting::Integer(3),
            meaning: "Random starts made while no point is certified; the feasible one of least objective is \
returned.",
        },
        SettingSpec {
            name: "loose",
            kind: Kind::Decimal { least: 1e-8, most: 0.1 },
            default: DefaultSetting::Decimal(1e-3),
            meaning: "Relative residual and gradient, in scaled data, at which Newton steps take over.",
        },
    ],
};

/// A point is feasible for the choice between starts when its relative residual is at most this.
const FEASIBLE: f64 = 1e-7;
/// Relative gap at which a point counts as certified.
const CERTIFIED: f64 = 1e-7;

struct Candidate {
    solution: AlmSolution,
    newton: NewtonInfo,
    certificate: Option<Certificate>,
}

impl Method for FactoredNewton {
    fn card(&self) -> &'static MethodCard {
        &CARD
    }

    fn solve(&self, problem: &Problem, trial: &mut Trial) -> Result<Answer, Halt> {
        let op = Operator::new(problem);
        let bound = problem.rank_bound() + 1;
        let widths = problem
            .blocks()
            .iter()
            .map(|b| b.rank.unwrap_or(bound.min(b.order)))
            .collect::<Vec<_>>();
        let mut params = AlmParams::with_widths(widths);
        params.starts = 1;
        params.lift = Lift::WhenNeeded;
        params.finish = Finish::Plain;
        params.feasibility = trial.options.decimal("loose");
        params.stationarity = params.feasibility;
        // The loose start need not be certified more sharply than it is solved.
        params.certificate = 10.0 * params.feasibility;
        let mut best: Option<Candidate> = None;
        for _ in 0..trial.options.size("starts") {
            let candidate = match one_start(problem, &op, &params, trial) {
                Ok(candidate) => candidate,
                Err(Halt::Failed(_)) => continue,
                Err(halt) if best.is_none() => return Err(halt),
                Err(_) => break,
            };
            let certified = candidate.certificate.as_ref().is_some_and(|c| c.gap <= CERTIFIED)
                && candidate.newton.feasibility <= FEASIBLE;
            if best.as_ref().is_none_or(|best| better(&candidate, best)) {
                best = Some(candidate);
            }
            if certified || trial.meter.check().is_err() {
                break;
            }
        }
        let best = best.ok_or_else(|| Halt::Failed("every start diverged".to_owned()))?;
        answer(best, trial)
    }
}

fn one_start(
    problem: &Problem,
    op: &Operator,
    params: &AlmParams,
    trial: &mut Trial,
) -> Result<Candidate, Halt> {
    let meter = &mut trial.meter;
    let mut solution =
        solve(problem, op, params, &mut trial.stream, meter).map_err(|error| match error {
            AlmError::Halted(halt) => halt,
            other => Halt::Failed(other.to_string()),
        })?;
    let newton = polish(
        op,
        problem,
        &mut solution.factors,
        &mut solution.orthant,
        &mut solution.multipliers,
        &NewtonParams::default(),
        meter,
    );
    if let NewtonEnd::Halted(Halt::Interrupted) = newton.end {
        return Err(Halt::Interrupted);
    }
    solution.info.objective = op.cost_of_factors(&solution.factors, &solution.orthant);
    let certificate = meter.check().is_ok().then(|| {
        let settings = CertificateParams::default();
        let (factors, x, y) = (&solution.factors, &solution.orthant, &solution.multipliers);
        certify(problem, op, factors, x, y, &settings, meter)
    });
    Ok(Candidate { solution, newton, certificate })
}

fn better(a: &Candidate, b: &Candidate) -> bool {
    match (a.newton.feasibility <= FEASIBLE, b.newton.feasibility <= FEASIBLE) {
        (true, true) => a.solution.info.objective < b.solution.info.objective,
        (true, false) => true,
        (false, true) => false,
        (false, false) => a.newton.feasibility < b.newton.feasibility,
    }
}

fn answer(best: Candidate, trial: &Trial) -> Result<Answer, Halt> {
    let stop = match trial.meter.check() {
        Err(Halt::TimeLimit) => StopReason::TimeLimit,
        Err(Halt::MemoryLimit) => StopReason::MemoryLimit,
        Err(halt) => return Err(halt),
        Ok(()) => match best.newton.end {
            NewtonEnd::Converged => StopReason::Converged,
            NewtonEnd::Limit => StopReason::IterationLimit,
            // A merit at the level of rounding is as far as the arithmetic goes.
            _ if best.newton.merit <= 1e-10 => StopReason::Converged,
            _ => StopReason::Stalled,
        },
    };
    let newton = &best.newton;
    let steps = format!("{} Newton steps, merit {:.1e}", newton.steps, newton.merit);
    let note = match &best.certificate {
        Some(c) if c.gap <= CERTIFIED && newton.feasibility <= FEASIBLE => {
            format!(
                "certified: lambda_min(S) >= {:.2e}, relative gap {:.1e}; {steps}",
                c.least, c.gap
            )
        }
        Some(c) => {
            format!(
                "not certified: lambda_min(S) {:.2e}, relative gap {:.1e}; {steps}",
                c.least, c.gap
            )
        }
        None => format!("no certificate in time; {steps}"),
    };
    Ok(Answer {
        point: Point {
            blocks: best.solution.factors.into_iter().map(BlockPoint::Factor).collect(),
            orthant: best.solution.orthant,
        },
        multipliers: Some(best.solution.multipliers),
        stop,
        note,
    })
}
