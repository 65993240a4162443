//! `reduce-gaussian`: randomised projection of the interior-point solution to the target rank.

use super::{Method, Trial};
use crate::budget::Halt;
use crate::card::{DefaultSetting, Kind, MethodCard, MethodClass, SettingSpec};
use crate::engines::reduction::{GaussianReduction, project_relaxation};
use crate::problem::{Answer, Problem};

/// The method.
#[derive(Clone, Copy, Debug)]
pub struct ReduceGaussian;

static CARD: MethodCard = MethodCard {
    id: "reduce-gaussian",
    title: "Randomised projection of the interior-point solution to the target rank",
    class: MethodClass::Reduction,
    reference: "A. So, Y. Ye, J. Zhang, A unified theorem on SDP rank reduction, Mathematics of Operations Research 33:910-920, 2008, \
10.1287/moor.1080.0326 (bibliographic data and constants of the bounds from memory; the bounds were derived anew). The source ends \
with constraints met within factors; the return onto A(X) = b by damped Gauss-Newton steps on the factor is our own.",
    needs: "Any blocks, nonnegative part, sparse, dense or rank-one constraints. Blocks without a rank bound, and blocks at the \
target rank already, are not projected. Constraints that are not positive semidefinite are not refused: the bounds then say \
nothing, and the note counts them.",
    cost: "The interior-point solution; a draw: a product of the n x k factor with k x r random numbers and up to 40 Gauss-Newton \
steps of up to 300 products with the factor.",
    guarantees: "Before the return, for positive semidefinite A_i: b_i beta <= <A_i,X> <= b_i alpha for all i with probability at least \
1/4 a draw, alpha = 1 + 12 ln(4mn)/d (1 + its root part when that is below 1), beta = 1/(e (2m)^(2/d)) (1 - sqrt(4 ln(2m)/d) when \
greater), d the target rank. The objective is not bounded after the return.",
    failures: "An approximation: where the relaxation's solution has a higher rank than the target, a draw meets the constraints \
but hardly ever the optimum. The return may stall where rank-r feasible points are rare.",
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
            name: "draws",
            kind: Kind::Integer { least: 1, most: 1_000_000 },
            default: DefaultSetting::Integer(20),
            meaning: "Random projections; the feasible one (relative residual at most 1e-7 after the return) of least objective is kept, \
or the one of least residual.",
        },
    ],
};

impl Method for ReduceGaussian {
    fn card(&self) -> &'static MethodCard {
        &CARD
    }

    fn solve(&self, problem: &Problem, trial: &mut Trial) -> Result<Answer, Halt> {
        let options = &trial.options;
        let params = GaussianReduction {
            tolerance: options.decimal("tolerance"),
            cut: options.decimal("cut"),
            draws: options.size("draws"),
        };
        project_relaxation(problem, &params, &mut trial.stream, &mut trial.meter)
    }
}
