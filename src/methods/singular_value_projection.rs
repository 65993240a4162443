//! `singular-value-projection`: projected gradient steps on the residual of the constraints.

use super::{Method, Trial};
use crate::budget::{Halt, Meter};
use crate::card::{DefaultSetting, Kind, MethodCard, MethodClass, SettingSpec};
use crate::engines::projections::Finish;
use crate::engines::projections::levels::Limits;
use crate::engines::projections::point::DensePoint;
use crate::engines::projections::search::{Advance, First, Place, SearchParams, run};
use crate::engines::projections::tangent::inner;
use crate::problem::{Answer, Problem};

/// The method.
#[derive(Clone, Copy, Debug)]
pub struct SingularValueProjection;

static CARD: MethodCard = MethodCard {
    id: "singular-value-projection",
    title: "Projected gradient on ||A(X) - b||^2 over the rank set",
    class: MethodClass::Projection,
    reference: "P. Jain, R. Meka, I. Dhillon, Guaranteed rank minimization via singular value projection, Advances in \
Neural Information Processing Systems 23, 2010, here with the projection on PSD matrices. Step length by exact line \
search on the tangent space: T. Blumensath, M. Davies, Normalized iterative hard thresholding, IEEE J. Sel. Top. Signal \
Process. 4:298-309, 2010, 10.1109/JSTSP.2010.2042411, carried over to rank. The objective cut is our own. Bibliographic \
data from memory.",
    needs: "Any problem whose blocks fit in memory densely (about 16 matrices a block). Blocks without a rank bound are \
projected on the cone.",
    cost: "One step: one full eigendecomposition of each block (9 n^3), once more for each halving of the step, and three \
passes over the constraints.",
    guarantees: "The residual never rises. For constraints (rows scaled to equal norm) that keep norms of matrices of \
rank 2r within a factor 1 +- delta, delta < 1/3, and step 1/(1 + delta), it falls geometrically to a point of both sets. \
Nothing is proved of the objective, which enters as the cut <C, X> <= gamma: where the point violates it, \
((<C, X> - gamma)/||C||)^2 is added to the squared residual.",
    failures: "Slow wherever the constraints are badly conditioned on low-rank matrices: graphs, networks, few \
constraints with large common parts. Stops at stationary points of the residual. The objective is only bisected, to a few digits, so that it solves hardly any \
problem that has one.",
    options: &[
        SettingSpec {
            name: "step",
            kind: Kind::Word(&["exact", "constant"]),
            default: DefaultSetting::Word("exact"),
            meaning: "exact: ||g_T||^2/||A g_T||^2, g_T being the gradient projected on the tangent space; constant: \
`length`. Either is halved while the residual would rise.",
        },
        SettingSpec {
            name: "length",
            kind: Kind::Decimal { least: 1e-6, most: 1e6 },
            default: DefaultSetting::Decimal(0.75),
            meaning: "The constant step in the source's normalisation, where the constraints keep norms on average: it \
is multiplied by the largest n (n + 1)/2 of a block over m, rows being scaled to norm 1. 0.75 is 1/(1 + 1/3).",
        },
        SettingSpec {
            name: "steps",
            kind: Kind::Integer { least: 1, most: 1_000_000 },
            default: DefaultSetting::Integer(300),
            meaning: "Most steps for one value of the cut; ten times as many for the first, uncut stage.",
        },
        SettingSpec {
            name: "starts",
            kind: Kind::Integer { least: 1, most: 1000 },
            default: DefaultSetting::Integer(3),
            meaning: "Most starts of the first stage: X = 0 as in the source, then random points of the target rank.",
        },
        SettingSpec {
            name: "stages",
            kind: Kind::Integer { least: 0, most: 1000 },
            default: DefaultSetting::Integer(40),
            meaning: "Most values of the cut, chosen as for `alternating-projections`.",
        },
        SettingSpec {
            name: "retries",
            kind: Kind::Integer { least: 0, most: 1000 },
            default: DefaultSetting::Integer(3),
            meaning: "Random starts made with the cut a thousandth of 1 + |f| below the value f that a descent ended at; one \
that meets both sets begins a new descent and the count anew.",
        },
        SettingSpec {
            name: "total",
            kind: Kind::Integer { least: 1, most: 1_000_000_000 },
            default: DefaultSetting::Integer(4000),
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

/// A stage fails when the residual fell by less than a thousandth over this many steps.
const WINDOW: usize = 50;
/// Most halvings of a step.
const HALVINGS: usize = 40;

/// How long a step is.
#[derive(Clone, Copy, Debug)]
enum Length {
    Exact,
    Constant(f64),
}

struct Gradient {
    length: Length,
    start: DensePoint,
    gradient: DensePoint,
    tangential: DensePoint,
}

impl Advance for Gradient {
    fn advance(&mut self, place: &mut Place<'_>, meter: &mut Meter) -> Result<(), Halt> {
        place.rows.gradient(&mut self.gradient);
        let mut length = match self.length {
            Length::Constant(length) => length,
            Length::Exact => {
                place.tangent.at(&place.set);
                self.tangential.copy_from(&self.gradient);
                place.tangent.project(&mut self.tangential);
                let image = place.rows.image(&self.tangential);
                let size = inner(&self.tangential, &self.tangential);
                if image > 0.0 { size / (image * image) } else { 1.0 }
            }
        };
        meter.effort.operator_products += 2;
        meter.effort.flops += 2 * place.rows.flops() + place.tangent.flops();
        self.start.copy_from(&place.low);
        let before = place.residual;
        for _ in 0..HALVINGS {
            meter.check()?;
            place.point.copy_from(&self.start);
            place.point.add(-length, &self.gradient);
            place.settle(meter)?;
            if place.residual <= before {
                return Ok(());
            }
            length *= 0.5;
        }
        place.point.copy_from(&self.start);
        place.settle(meter)
    }
}

impl Method for SingularValueProjection {
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
            first: First::Zero,
            finish: match options.word("polish") {
                "newton" => Finish::Newton,
                _ => Finish::Plain,
            },
        };
        let length = match options.word("step") {
            "constant" => {
                let unknowns = problem.blocks().iter().map(|b| b.order * (b.order + 1) / 2).max();
                let m = problem.constraints().len().max(1);
                Length::Constant(
                    options.decimal("length") * unknowns.unwrap_or(m) as f64 / m as f64,
                )
            }
            _ => Length::Exact,
        };
        let zero = DensePoint::zeros(problem);
        let (start, gradient, tangential) = (zero.clone(), zero.clone(), zero);
        let method = Gradient { length, start, gradient, tangential };
        run(problem, method, params, &mut trial.stream, &mut trial.meter)
    }
}
