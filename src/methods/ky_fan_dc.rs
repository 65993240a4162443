//! `ky-fan-dc`: the truncated trace as an exact penalty, by differences of convex functions.

use super::{Method, Trial};
use crate::budget::Halt;
use crate::card::{DefaultSetting, Kind, MethodCard, MethodClass, SettingSpec};
use crate::engines::reweighting::{Params, Polish, TailProjector, Weighted, run};
use crate::problem::{Answer, Problem};

/// The method.
#[derive(Clone, Copy, Debug)]
pub struct KyFanDc;

static CARD: MethodCard = MethodCard {
    id: "ky-fan-dc",
    title: "Truncated-trace (Ky Fan) penalty by the convex-concave procedure",
    class: MethodClass::RankPromoting,
    reference: "Truncated nuclear norm: Y. Hu, D. Zhang, J. Ye, X. Li, X. He, IEEE TPAMI 35:2117-2130, 2013; DC \
        form and exact penalty: J. Gotoh, A. Takeda, K. Tono, Math. Program. 169:141-176, 2018. Bibliographic data, \
        and the schedule of the weight, from memory; restarts, the finishing Newton steps and all defaults are our own \
        choices. The objective stays in the cost: <C + rho T, X>, rho growing until the tail vanishes; no cut of the \
        objective is used.",
    needs: "Any blocks, nonnegative part, sparse, dense or rank-one constraints; blocks are held dense. \
        Blocks without a rank bound get no weight; without any bounded block it is the relaxation.",
    cost: "A turn is one interior-point solution (see relax-ipm) and one eigendecomposition of each bounded \
        block. Operator, scaling and the plan of the Schur complement are compiled once; a turn starts from an iterate \
        kept on the way to the last solution, which saves half of the iterations and more while the weight moves \
        little (3 to 7 instead of 13), and next to nothing in turns where the weight grows. Memory about 8 (2 m^2 + 27 \
        n^2) bytes.",
    guarantees: "At a fixed weight <C,X> + rho tail_r(X) never rises (tail_r is concave and I - UU' a \
        supergradient). A point whose tail is zero is stationary for the rank-constrained problem; the penalty is \
        exact for large rho under an error bound.",
    failures: "Local: it ends at a stationary point near the relaxation's leading eigenspace, on faces often \
        the wrong end (half of flat-face and sign-trap; with `restarts` = 5 nearly all were solved). Number \
        partitioning (hidden-partition): it ends at another sign vector. Ties at the target rank leave the choice to \
        rounding. Weights that start large freeze the first subspace.",
    options: &[
        SettingSpec {
            name: "share",
            kind: Kind::Decimal { least: 1e-6, most: 1e4 },
            default: DefaultSetting::Decimal(0.01),
            meaning: "First weight over the price max(|<C,X0>|/tr X0, 1e-3 ||C||_F) of a unit of trace (1 \
                where C = 0); X0 the relaxation's point, its trace over the blocks with a rank bound.",
        },
        SettingSpec {
            name: "growth",
            kind: Kind::Decimal { least: 1.01, most: 100.0 },
            default: DefaultSetting::Decimal(2.0),
            meaning: "Factor by which the weight grows after a turn in which the tail ratio did not fall below \
                `hold` times its last value.",
        },
        SettingSpec {
            name: "hold",
            kind: Kind::Decimal { least: 0.0, most: 1.0 },
            default: DefaultSetting::Decimal(0.7),
            meaning: "See `growth`.",
        },
        SettingSpec {
            name: "tail",
            kind: Kind::Decimal { least: 1e-12, most: 1e-2 },
            default: DefaultSetting::Decimal(1e-6),
            meaning: "An attempt ends when the eigenvalues beyond the target ranks are at most this share of \
                the trace.",
        },
        SettingSpec {
            name: "turns",
            kind: Kind::Integer { least: 1, most: 10000 },
            default: DefaultSetting::Integer(100),
            meaning: "Most convex problems in an attempt.",
        },
        SettingSpec {
            name: "restarts",
            kind: Kind::Integer { least: 0, most: 1000 },
            default: DefaultSetting::Integer(0),
            meaning: "Further attempts, whose first weight is made at a random point V G G' V' (V V' = X0, G \
                normal of the target width) instead of X0, unless a point meets the relaxation's value. The best end \
                is returned.",
        },
        SettingSpec {
            name: "tolerance",
            kind: Kind::Decimal { least: 1e-12, most: 1e-3 },
            default: DefaultSetting::Decimal(1e-8),
            meaning: "Relative accuracy of the interior-point engine (residuals and gap, see relax-ipm).",
        },
        SettingSpec {
            name: "polish",
            kind: Kind::Word(&["newton", "off"]),
            default: DefaultSetting::Word("newton"),
            meaning: "newton: the truncated end of an attempt is finished by at most 20 Newton steps on its \
                factors with the given cost alone, which removes the weight's bias; off: it is returned as it is.",
        },
    ],
};

impl Method for KyFanDc {
    fn card(&self) -> &'static MethodCard {
        &CARD
    }

    fn solve(&self, problem: &Problem, trial: &mut Trial) -> Result<Answer, Halt> {
        let options = &trial.options;
        let params = Params {
            share: options.decimal("share"),
            growth: options.decimal("growth"),
            hold: options.decimal("hold"),
            tail: options.decimal("tail"),
            turns: options.size("turns"),
            restarts: options.size("restarts"),
            restart_growth: 1.0,
            polish: if options.word("polish") == "newton" { Polish::Newton } else { Polish::Off },
        };
        let rule = TailProjector;
        let tolerance = options.decimal("tolerance");
        let mut inner = Weighted::new(problem, rule, tolerance, &trial.meter)?;
        let (answer, _) = run(problem, &mut inner, &params, &mut trial.stream, &mut trial.meter)?;
        Ok(answer)
    }
}
