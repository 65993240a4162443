//! `reduce-both-ends`: rank reduction that looks at both ends of each step.

use super::{Method, Trial};
use crate::budget::Halt;
use crate::card::{DefaultSetting, Kind, MethodCard, MethodClass, SettingSpec};
use crate::engines::reduction::{Rule, reduce_relaxation};
use crate::problem::{Answer, Problem};

/// The method.
#[derive(Clone, Copy, Debug)]
pub struct ReduceBothEnds;

static CARD: MethodCard = MethodCard {
    id: "reduce-both-ends",
    title: "Rank reduction that looks at both ends of each step",
    class: MethodClass::Reduction,
    reference: "Own variant of the rule of A. Lemon, A. So, Y. Ye, Found. Trends Optim. 2(1-2):1-156, 2016, doi:10.1561/2400000009: \
        both ends of the step along every basis vector of the null space are tried, and the lowest total rank is taken.",
    needs: "Any blocks, nonnegative part, sparse, dense or rank-one constraints.",
    cost: "The interior-point solution, then per step the null space of an m x r(r+1)/2 matrix, O(m r^4), r the rank of the \
        interior-point solution.",
    guarantees: "Keeps the relaxation's value and ends with r(r+1)/2 <= m over all blocks, in exact arithmetic.",
    failures: "Greedy: the lowest rank after one step need not lead to the lowest rank in the end. Extreme points above the target \
        rank exist. No help against a relaxation gap.",
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

impl Method for ReduceBothEnds {
    fn card(&self) -> &'static MethodCard {
        &CARD
    }

    fn solve(&self, problem: &Problem, trial: &mut Trial) -> Result<Answer, Halt> {
        let tolerance = trial.options.decimal("tolerance");
        let cut = trial.options.decimal("cut");
        reduce_relaxation(problem, tolerance, Rule::BothEnds, cut, &mut trial.meter)
    }
}
