//! `reduce-tail`: rank reduction towards the least tail beyond the target rank.

use super::{Method, Trial};
use crate::budget::Halt;
use crate::card::{DefaultSetting, Kind, MethodCard, MethodClass, SettingSpec};
use crate::engines::reduction::{Rule, reduce_relaxation};
use crate::problem::{Answer, Problem};

/// The method.
#[derive(Clone, Copy, Debug)]
pub struct ReduceTail;

static CARD: MethodCard = MethodCard {
    id: "reduce-tail",
    title: "Rank reduction in the direction of the least tail beyond the target rank",
    class: MethodClass::Reduction,
    reference: "Own variant of the rule of A. Lemon, A. So, Y. Ye, Low-rank semidefinite programming: theory and applications, \
Found. Trends Optim. 2(1-2):1-156, 2016, doi:10.1561/2400000009: the direction over the optimal face in which the sum of the \
eigenvalues beyond the rank bound falls fastest, then the directions found by linearising that concave sum at the ends reached, up \
to 8; the end of least sum is taken. (Bibliographic data from memory.)",
    needs: "Any blocks, nonnegative part, sparse, dense or rank-one constraints.",
    cost: "The interior-point solution, then per step the null space of an m x r(r+1)/2 matrix, O(m r^4), r the rank of the \
point, and up to 16 eigendecompositions of order r.",
    guarantees: "Keeps the relaxation's value and ends with r(r+1)/2 <= m over all blocks, in exact arithmetic. The truncated result \
is brought back onto A(X) = b by Newton steps on its factor.",
    failures: "Local: the sum is concave over the face and has many least points at its border. Where it is constant to first \
order the lowest rank decides, as in `reduce-both-ends`. No help against a relaxation gap.",
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

impl Method for ReduceTail {
    fn card(&self) -> &'static MethodCard {
        &CARD
    }

    fn solve(&self, problem: &Problem, trial: &mut Trial) -> Result<Answer, Halt> {
        let tolerance = trial.options.decimal("tolerance");
        let cut = trial.options.decimal("cut");
        reduce_relaxation(problem, tolerance, Rule::Tail, cut, &mut trial.meter)
    }
}
