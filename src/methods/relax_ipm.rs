//! `relax-ipm`: the interior-point solution of the relaxation, truncated to the target rank.

use super::{Method, Trial};
use crate::budget::Halt;
use crate::card::{DefaultSetting, Kind, MethodCard, MethodClass, SettingSpec};
use crate::engines::ipm::{self, NewtonDirection};
use crate::problem::{Answer, BlockPoint, Point, Problem};

/// The method.
#[derive(Clone, Copy, Debug)]
pub struct RelaxIpm;

/// Option that all methods built on the interior-point engine share in meaning.
const TOLERANCE: SettingSpec = SettingSpec {
    name: "tolerance",
    kind: Kind::Decimal { least: 1e-12, most: 1e-2 },
    default: DefaultSetting::Decimal(1e-9),
    meaning: "Stop when max(||r_p||/(1+||b||), ||R_d||_F/(1+||C||_F), <X,S>/(1+|<C,X>|+|b'y|)) is below it.",
};

const DIRECTION: SettingSpec = SettingSpec {
    name: "direction",
    kind: Kind::Word(&["hkm", "nt"]),
    default: DefaultSetting::Word("hkm"),
    meaning: "Newton direction: hkm linearises X S = mu I as dX + sym(X dS S^-1) = mu S^-1 - X; nt as dX + W dS W = mu \
        S^-1 - X with W S W = X, at the price of one eigendecomposition of each block an iteration.",
};

static CARD: MethodCard = MethodCard {
    id: "relax-ipm",
    title: "Interior-point solution of the relaxation, truncated to the target rank",
    class: MethodClass::Relaxation,
    reference: "HKM direction: C. Helmberg, F. Rendl, R. Vanderbei, H. Wolkowicz, An interior-point method for \
        semidefinite programming, SIAM J. Optim. 6:342-361, 1996, doi:10.1137/0806020; M. Kojima, S. Shindoh, S. Hara, \
        SIAM J. Optim. 7:86-125, 1997; R. Monteiro, SIAM J. Optim. 7:663-678, 1997. NT direction: Y. Nesterov, M. Todd, Math. \
        Oper. Res. 22:1-42, 1997, and SIAM J. Optim. 8:324-364, 1998. Predictor-corrector: S. Mehrotra, \
        SIAM J. Optim. 2:575-601, 1992. Schur formation in the spirit of K. Fujisawa, M. Kojima, K. Nakata, Math. Program. \
        79:235-253, 1997. (Bibliographic data from memory.)",
    needs: "Any blocks, nonnegative part, sparse, dense or rank-one constraints.",
    cost: "An iteration forms and factors an m x m system and multiplies n x n matrices a handful of times; \
        memory 8 (2 m^2 + 9 n^2) bytes. With nt one eigendecomposition and eleven products more, and 9 n^2 more numbers.",
    guarantees: "Solves the relaxation; the truncation is optimal when the relaxation has a unique optimum of the target rank.",
    failures: "Ends near the analytic centre of the optimal face, hence at maximal rank: truncation fails on faces and with a \
        relaxation gap. Slow to full accuracy without an interior point or strict complementarity.",
    options: &[DIRECTION, TOLERANCE],
};

impl Method for RelaxIpm {
    fn card(&self) -> &'static MethodCard {
        &CARD
    }

    fn solve(&self, problem: &Problem, trial: &mut Trial) -> Result<Answer, Halt> {
        let tolerance = trial.options.decimal("tolerance");
        let newton = match trial.options.word("direction") {
            "nt" => NewtonDirection::Nt,
            _ => NewtonDirection::Hkm,
        };
        let params = ipm::Params { tolerance, newton, ..ipm::Params::default() };
        let solution = ipm::solve(problem, &params, None, &mut trial.meter)?;
        let info = solution.info;
        Ok(Answer {
            point: Point {
                blocks: solution.points.into_iter().map(BlockPoint::Dense).collect(),
                orthant: solution.orthant,
            },
            multipliers: Some(solution.multipliers),
            stop: info.outcome.stop_reason(),
            note: format!(
                "{} iterations, relative gap {:.1e}, values {:.9e} and {:.9e}",
                info.iterations, info.residuals.gap, info.primal_value, info.dual_value
            ),
        })
    }
}
