//! `reduce-largest`: rank reduction from the interior-point solution, published step rule.

use super::{Method, Trial};
use crate::budget::Halt;
use crate::card::{DefaultSetting, Kind, MethodCard, MethodClass, SettingSpec};
use crate::engines::reduction::{Rule, reduce_relaxation};
use crate::problem::{Answer, Problem};

/// The method.
#[derive(Clone, Copy, Debug)]
pub struct ReduceLargest;

static CARD: MethodCard = MethodCard {
    id: "reduce-largest",
    title: "Rank reduction from the interior-point solution, published step rule",
    class: MethodClass::Reduction,
    reference: "A. Lemon, A. So, Y. Ye, Low-rank semidefinite programming: theory and applications, Found. Trends Optim. 2(1-2):1-156, \
        2016, doi:10.1561/2400000009. Rank bound: A. Barvinok, Discrete Comput. Geom. 13:189-202, 1995; G. Pataki, Math. Oper. \
        Res. 23:339-358, 1998. (Bibliographic data from memory.)",
    needs: "Any blocks, nonnegative part, sparse, dense or rank-one constraints.",
    cost: "The interior-point solution, then per step the null space of an m x r(r+1)/2 matrix, O(m r^4), r the rank of the \
        interior-point solution.",
    guarantees: "Keeps the relaxation's value and ends with r(r+1)/2 <= m over all blocks, in exact arithmetic.",
    failures: "Takes the end of the step nearer to the start: from an analytic centre that is the end at which fewer eigenvalues \
        vanish, so that it can stop at a higher rank than the face offers. Extreme points above the target rank exist. No help \
        against a relaxation gap.",
    options: &[
        SettingSpec {
            name: "tolerance",
            kind: Kind::Decimal { least: 1e-12, most: 1e-2 },
            default: DefaultSetting::Decimal(1e-10),
            meaning: "Stop the interior-point engine when its largest relative residual is below it.",
        },
        SettingSpec {
            name: "cut",
            kind: Kind::Decimal { least: 1e-12, most: 1e-2 },
            default: DefaultSetting::Decimal(1e-6),
            meaning: "Eigenvalues of X up to cut times the largest of their block count as zero.",
        },
    ],
};

impl Method for ReduceLargest {
    fn card(&self) -> &'static MethodCard {
        &CARD
    }

    fn solve(&self, problem: &Problem, trial: &mut Trial) -> Result<Answer, Halt> {
        let tolerance = trial.options.decimal("tolerance");
        let cut = trial.options.decimal("cut");
        reduce_relaxation(problem, tolerance, Rule::Largest, cut, &mut trial.meter)
    }
}
