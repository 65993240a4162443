//! `reweighted-trace`: iteratively reweighted trace, X PSD.

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
pub struct ReweightedTrace;

static CARD: MethodCard = MethodCard {
    id: "reweighted-trace",
    title: "Iteratively reweighted trace of exponent e",
    class: MethodClass::RankPromoting,
    reference: "K. Mohan, M. Fazel, Iterative reweighted algorithms for matrix rank minimization, J. Mach. \
        Learn. Res. 13:3441-3473, 2012, in its form for PSD variables: T = (X + gamma I)^(e-1), here ((X/s + gamma \
        I)/gamma)^(e-1) with s the largest eigenvalue of X0; gamma falls by eta each turn. From memory, eta too; the \
        weight's growth, restarts, the finishing Newton steps and all defaults are our own choices; the target rank \
        only tells when to stop. The objective stays in the cost: <C + rho T, X>, rho growing until the tail vanishes; \
        no cut of the objective is used.",
    needs: "Any blocks, nonnegative part, sparse, dense or rank-one constraints; blocks are held dense. \
        Blocks without a rank bound get no weight; without any bounded block it is the relaxation.",
    cost: "A turn is one interior-point solution (see relax-ipm) and one eigendecomposition of each bounded \
        block. Operator, scaling and the plan of the Schur complement are compiled once; a turn starts from an iterate \
        kept on the way to the last solution, which saves half of the iterations and more while the weight moves \
        little (3 to 7 instead of 13), and next to nothing in turns where the weight grows. Memory about 8 (2 m^2 + 27 \
        n^2) bytes.",
    guarantees: "At fixed rho and gamma <C,X> + rho (s/e) gamma^(1-e) sum ((lambda/s + gamma)^e - gamma^e) never \
        rises. Recovery without objective under null-space conditions for e = 1 (the published algorithm).",
    failures: "Never uses the target rank but to stop: with a gap it may end at another rank and is truncated \
        then (some of lattice-tiles). Weighs the range too, so that the end is biased until the Newton steps. Small \
        exponents and a small gamma freeze the first pattern. Local: on faces often the wrong end (flat-face, \
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
            name: "exponent",
            kind: Kind::Decimal { least: 0.01, most: 1.0 },
            default: DefaultSetting::Decimal(0.5),
            meaning: "Exponent e; towards 0 it is log-det, 1 is the trace.",
        },
        SettingSpec {
            name: "gamma",
            kind: Kind::Decimal { least: 1e-6, most: 10.0 },
            default: DefaultSetting::Decimal(0.3),
            meaning: "First gamma, relative to the largest eigenvalue of X0.",
        },
        SettingSpec {
            name: "eta",
            kind: Kind::Decimal { least: 1.0, most: 100.0 },
            default: DefaultSetting::Decimal(1.05),
            meaning: "Divisor of gamma after each turn.",
        },
        SettingSpec {
            name: "least",
            kind: Kind::Decimal { least: 1e-8, most: 10.0 },
            default: DefaultSetting::Decimal(0.05),
            meaning: "Least gamma.",
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

impl Method for ReweightedTrace {
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
        let (exponent, gamma) = (options.decimal("exponent"), options.decimal("gamma"));
        let rule =
            PowerRule::new(exponent, gamma, options.decimal("eta"), options.decimal("least"));
        let tolerance = options.decimal("tolerance");
        let mut inner = Weighted::new(problem, rule, tolerance, &trial.meter)?;
        let (answer, _) = run(problem, &mut inner, &params, &mut trial.stream, &mut trial.meter)?;
        Ok(answer)
    }
}

/// `p(X) = (s/e) gamma^(1-e) sum ((lambda_i/s + gamma)^e - gamma^e)`, of gradient
/// `((X/s + gamma I)/gamma)^(e-1)`, e the exponent.
#[derive(Debug)]
pub struct PowerRule {
    exponent: f64,
    gamma: f64,
    eta: f64,
    least: f64,
    first: f64,
    /// Largest eigenvalue of each block when the attempt began: the unit s.
    scales: Vec<f64>,
    work: Mat<f64>,
}

impl PowerRule {
    /// Makes the rule; `gamma` is divided by `eta` after each turn, down to `least`.
    pub fn new(exponent: f64, gamma: f64, eta: f64, least: f64) -> Self {
        let (scales, work) = (Vec::new(), Mat::new());
        PowerRule { exponent, gamma, eta, least, first: gamma, scales, work }
    }
}

impl WeightRule for PowerRule {
    fn stage(&mut self, stage: Stage, at: &Measured) {
        if stage == Stage::First {
            self.gamma = self.first;
            self.scales = largest_eigenvalues(at);
        }
    }

    fn weigh(&mut self, at: BlockView<'_>, weight: &mut Mat<f64>) {
        let (gamma, scale, power) = (self.gamma, self.scales[at.block], self.exponent - 1.0);
        let profile = |j: usize| (1.0 + at.values[j].max(0.0) / (scale * gamma)).powf(power);
        spectral_matrix(at.vectors, profile, &mut self.work, weight);
    }

    fn penalty(&self, at: BlockView<'_>) -> f64 {
        let unit = self.gamma * self.scales[at.block];
        let e = self.exponent;
        let sum: f64 = at.values.iter().map(|v| (e * (v.max(0.0) / unit).ln_1p()).exp_m1()).sum();
        unit * sum / e
    }

    fn turned(&mut self) {
        self.gamma = (self.gamma / self.eta).max(self.least.min(self.first));
    }
}
