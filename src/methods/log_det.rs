//! `log-det`: majorisation of the log-determinant.

use super::{Method, Trial};
use crate::budget::Halt;
use crate::card::{DefaultSetting, Kind, MethodCard, MethodClass, SettingSpec};
use crate::engines::reweighting::{
    BlockView, Measured, Params, Polish, Stage, WeightRule, Weighted, largest_eigenvalues, run,
    spectral_matrix,
};
use crate::linalg::Mat;
use crate::problem::{Answer, Problem};

/// The method.
#[derive(Clone, Copy, Debug)]
pub struct LogDet;

static CARD: MethodCard = MethodCard {
    id: "log-det",
    title: "Log-determinant heuristic by repeated weighted traces",
    class: MethodClass::RankPromoting,
    reference: "M. Fazel, H. Hindi, S. Boyd, Log-det heuristic for matrix rank minimization, American Control \
        Conference 2003, 2156-2162. From memory; T = delta (X/s + delta I)^-1 with s the largest eigenvalue of X0 is \
        the published (X + delta I)^-1 in relative units. The weight's growth, delta's fall, restarts, the finishing \
        Newton steps and all defaults are our own choices; the target rank only tells when to stop. The objective \
        stays in the cost: <C + rho T, X>, rho growing until the tail vanishes; no cut of the objective is used.",
    needs: "Any blocks, nonnegative part, sparse, dense or rank-one constraints; blocks are held dense. \
        Blocks without a rank bound get no weight; without any bounded block it is the relaxation.",
    cost: "A turn is one interior-point solution (see relax-ipm) and one eigendecomposition of each bounded \
        block. Operator, scaling and the plan of the Schur complement are compiled once; a turn starts from an iterate \
        kept on the way to the last solution, which saves half of the iterations and more while the weight moves \
        little (3 to 7 instead of 13), and next to nothing in turns where the weight grows. Memory about 8 (2 m^2 + 27 \
        n^2) bytes.",
    guarantees: "At fixed rho and delta <C,X> + rho delta s log det(I + X/(delta s)) never rises (majorisation of \
        a concave function).",
    failures: "Never uses the target rank but to stop: with a gap it may end at another rank and is truncated \
        then (lattice-tiles, about half). Weighs the range too, so that the end is biased until the Newton steps. A \
        small delta freezes the first pattern of eigenvalues. Local: on faces often the wrong end (flat-face, \
        sign-trap), which restarts cure; hidden-partition ends at another sign vector.",
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
            name: "delta",
            kind: Kind::Decimal { least: 1e-6, most: 10.0 },
            default: DefaultSetting::Decimal(0.3),
            meaning: "First delta, relative to the largest eigenvalue of X0.",
        },
        SettingSpec {
            name: "shrink",
            kind: Kind::Decimal { least: 0.01, most: 1.0 },
            default: DefaultSetting::Decimal(1.0),
            meaning: "Factor on delta whenever the weight grows.",
        },
        SettingSpec {
            name: "least",
            kind: Kind::Decimal { least: 1e-6, most: 10.0 },
            default: DefaultSetting::Decimal(0.05),
            meaning: "Least delta.",
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

impl Method for LogDet {
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
        let (delta, shrink) = (options.decimal("delta"), options.decimal("shrink"));
        let rule = LogDetRule::new(delta, shrink, options.decimal("least"));
        let tolerance = options.decimal("tolerance");
        let mut inner = Weighted::new(problem, rule, tolerance, &trial.meter)?;
        let (answer, _) = run(problem, &mut inner, &params, &mut trial.stream, &mut trial.meter)?;
        Ok(answer)
    }
}

/// `p(X) = delta s sum log(1 + lambda_i / (delta s))`, of gradient `delta (X/s + delta I)^-1`.
#[derive(Debug)]
pub struct LogDetRule {
    delta: f64,
    shrink: f64,
    least: f64,
    /// Largest eigenvalue of each block when the attempt began: the unit s.
    scales: Vec<f64>,
    work: Mat<f64>,
    first: f64,
}

impl LogDetRule {
    /// Makes the rule; `delta` is multiplied by `shrink` at each stage, down to `least`.
    pub fn new(delta: f64, shrink: f64, least: f64) -> Self {
        LogDetRule { delta, shrink, least, scales: Vec::new(), work: Mat::new(), first: delta }
    }
}

impl WeightRule for LogDetRule {
    fn stage(&mut self, stage: Stage, at: &Measured) {
        if stage == Stage::Next {
            self.delta = (self.delta * self.shrink).max(self.least.min(self.first));
            return;
        }
        self.delta = self.first;
        self.scales = largest_eigenvalues(at);
    }

    fn weigh(&mut self, at: BlockView<'_>, weight: &mut Mat<f64>) {
        let (delta, scale) = (self.delta, self.scales[at.block]);
        let profile = |j: usize| delta / (at.values[j].max(0.0) / scale + delta);
        spectral_matrix(at.vectors, profile, &mut self.work, weight);
    }

    fn penalty(&self, at: BlockView<'_>) -> f64 {
        let unit = self.delta * self.scales[at.block];
        unit * at.values.iter().map(|value| (value.max(0.0) / unit).ln_1p()).sum::<f64>()
    }
}
