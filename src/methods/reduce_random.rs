//! `reduce-random`: rank reduction along random directions of the null space, from several attempts.

use super::{Method, Trial};
use crate::budget::Halt;
use crate::card::{DefaultSetting, Kind, MethodCard, MethodClass, SettingSpec};
use crate::engines::reduction::{Pipeline, Rule, reduce_repeatedly};
use crate::problem::{Answer, Problem};

/// The method.
#[derive(Clone, Copy, Debug)]
pub struct ReduceRandom;

static CARD: MethodCard = MethodCard {
    id: "reduce-random",
    title: "Rank reduction along random directions of the null space, several attempts",
    class: MethodClass::Reduction,
    reference: "Own variant of the rule of A. Lemon, A. So, Y. Ye, Low-rank semidefinite programming: theory and applications, \
Found. Trends Optim. 2(1-2):1-156, 2016, doi:10.1561/2400000009: Gaussian combinations of a null-space basis in the place of one \
direction, both ends of each tried, the lowest total rank taken; the whole way is repeated with other draws. (Bibliographic data \
from memory.)",
    needs: "Any blocks, nonnegative part, sparse, dense or rank-one constraints.",
    cost: "The interior-point solution, then per step the null space of an m x r(r+1)/2 matrix, O(m r^4), r the rank of the \
point, and two eigendecompositions of order r for each combination; all that once per attempt.",
    guarantees: "Keeps the relaxation's value and ends with r(r+1)/2 <= m over all blocks, in exact arithmetic. The truncated result \
is brought back onto A(X) = b by Newton steps on its factor.",
    failures: "Random extreme points: on faces with many of them the chance to meet one of the target rank is small, and a \
random end loses one eigenvalue where a basis direction may lose several. No help against a relaxation gap.",
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
        SettingSpec {
            name: "combinations",
            kind: Kind::Integer { least: 1, most: 100_000 },
            default: DefaultSetting::Integer(20),
            meaning: "Random directions tried in each step.",
        },
        SettingSpec {
            name: "attempts",
            kind: Kind::Integer { least: 1, most: 100_000 },
            default: DefaultSetting::Integer(10),
            meaning: "Most reductions from the relaxation's point while the rank bounds are not met; the one of least excess \
(eigenvalues above 1e-4 of the largest, beyond the bounds) is kept.",
        },
    ],
};

impl Method for ReduceRandom {
    fn card(&self) -> &'static MethodCard {
        &CARD
    }

    fn solve(&self, problem: &Problem, trial: &mut Trial) -> Result<Answer, Halt> {
        let options = &trial.options;
        let combinations = options.size("combinations");
        let pipeline = Pipeline {
            tolerance: options.decimal("tolerance"),
            rule: Rule::Random { combinations, seed: trial.stream.bits() },
            cut: options.decimal("cut"),
            attempts: options.size("attempts"),
        };
        reduce_repeatedly(problem, &pipeline, &mut trial.meter)
    }
}
