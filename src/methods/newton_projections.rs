//! `newton-projections`: the rank set is replaced by its tangent space at the projected point.

use super::{Method, Trial};
use crate::budget::{Halt, Meter};
use crate::card::{DefaultSetting, Kind, MethodCard, MethodClass, SettingSpec};
use crate::engines::projections::Finish;
use crate::engines::projections::levels::Limits;
use crate::engines::projections::search::{Advance, First, Place, SearchParams, run};
use crate::engines::projections::tangent::TangentStep;
use crate::linalg::cg;
use crate::problem::{Answer, Problem};

/// The method.
#[derive(Clone, Copy, Debug)]
pub struct NewtonProjections;

static CARD: MethodCard = MethodCard {
    id: "newton-projections",
    title: "Newton-like projections: the affine set meets the tangent space of the rank set",
    class: MethodClass::Projection,
    reference: "R. Orsi, U. Helmke, J. Moore, A Newton-like method for solving rank constrained linear matrix \
inequalities, Automatica 42:1875-1882, 2006, 10.1016/j.automatica.2006.05.026. Our own: the objective cut and its \
bisection, the solution of the step by conjugate gradients on the normal equations (relative 1e-10, a stated number of \
steps), random starts in the place of a trace solution. Bibliographic data from memory.",
    needs: "Any problem whose blocks fit in memory densely (about 16 matrices a block). Blocks without a rank bound and \
x >= 0 are convex: they are projected on, not linearised.",
    cost: "One step: one full eigendecomposition of each block (9 n^3) and up to `inner` steps of conjugate gradients, \
each with two passes over the constraints and one projection on the tangent space (4 n^2 r).",
    guarantees: "Quadratic convergence to a point of both sets where they meet transversally (the vectors \
(Q1'A_iQ1, Q1'A_iQ2) independent) and no convex part is at its boundary; linear with a convex part at its boundary. None globally. The objective enters as the cut <C, X> <= gamma only: \
where the current point violates it, <C, X> = gamma is one more equation of the step.",
    failures: "Local: the cut descends along the rank set to a local minimum of the factored problem. No steps across a \
discrete set (rank 1 with a fixed diagonal): stages that ask for another point of it mostly stall. Fails to find a first point when random \
starts do not lead to one. Certifies nothing.",
    options: &[
        SettingSpec {
            name: "steps",
            kind: Kind::Integer { least: 1, most: 1_000_000 },
            default: DefaultSetting::Integer(60),
            meaning: "Most steps for one value of the cut; ten times as many for the first, uncut stage.",
        },
        SettingSpec {
            name: "inner",
            kind: Kind::Integer { least: 1, most: 1_000_000 },
            default: DefaultSetting::Integer(300),
            meaning: "Most steps of conjugate gradients in one step.",
        },
        SettingSpec {
            name: "starts",
            kind: Kind::Integer { least: 1, most: 1000 },
            default: DefaultSetting::Integer(10),
            meaning: "Most random starting points of the first stage: X = GG' with G Gaussian of the target width (the \
order, where the rank is free), scaled to the right side.",
        },
        SettingSpec {
            name: "stages",
            kind: Kind::Integer { least: 0, most: 1000 },
            default: DefaultSetting::Integer(60),
            meaning: "Most values of the cut, chosen as for `alternating-projections`.",
        },
        SettingSpec {
            name: "retries",
            kind: Kind::Integer { least: 0, most: 1000 },
            default: DefaultSetting::Integer(10),
            meaning: "Random starts made with the cut a thousandth of 1 + |f| below the value f that a descent ended at; one \
that meets both sets begins a new descent and the count anew.",
        },
        SettingSpec {
            name: "total",
            kind: Kind::Integer { least: 1, most: 1_000_000_000 },
            default: DefaultSetting::Integer(800),
            meaning: "Most points projected in all stages together.",
        },
        SettingSpec {
            name: "polish",
            kind: Kind::Word(&["off", "newton"]),
            default: DefaultSetting::Word("off"),
            meaning: "Whether the last point is improved by Newton steps on the Lagrangian in factor form.",
        },
    ],
};

/// Relative residual of the normal equations at which conjugate gradients stop.
const INNER_TOLERANCE: f64 = 1e-10;
/// A stage fails when the residual fell by less than a thousandth over this many steps.
const WINDOW: usize = 15;

struct Newton {
    step: TangentStep,
    params: cg::Params,
}

impl Advance for Newton {
    fn advance(&mut self, place: &mut Place<'_>, meter: &mut Meter) -> Result<(), Halt> {
        place.tangent.at(&place.set);
        place.point.copy_from(&place.low);
        let (tangent, rows) = (&mut place.tangent, &mut place.rows);
        let steps = self.step.take(tangent, rows, &self.params, &mut place.point) as u64 + 1;
        meter.effort.operator_products += 2 * steps;
        meter.effort.flops += steps * (2 * place.rows.flops() + place.tangent.flops());
        place.settle(meter)
    }
}

impl Method for NewtonProjections {
    fn card(&self) -> &'static MethodCard {
        &CARD
    }

    fn solve(&self, problem: &Problem, trial: &mut Trial) -> Result<Answer, Halt> {
        let options = &trial.options;
        let params = SearchParams {
            limits: Limits {
                starts: options.size("starts"),
                stages: options.size("stages"),
                steps: options.size("steps"),
                retries: options.size("retries"),
            },
            window: WINDOW,
            total: options.size("total"),
            first: First::Drawn,
            finish: match options.word("polish") {
                "newton" => Finish::Newton,
                _ => Finish::Plain,
            },
        };
        let inner = cg::Params { tolerance: INNER_TOLERANCE, max_steps: options.size("inner") };
        let newton = Newton { step: TangentStep::new(problem), params: inner };
        run(problem, newton, params, &mut trial.stream, &mut trial.meter)
    }
}
