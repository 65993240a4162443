//! `complementarity-penalty`: X and its complement U by a penalty on <X, U>.

use super::{Method, Trial};
use crate::budget::Halt;
use crate::card::{DefaultSetting, Kind, MethodCard, MethodClass, SettingSpec};
use crate::engines::reweighting::{
    BlockView, Measured, Params, Polish, Stage, WeightRule, Weighted, run, spectral_matrix,
};
use crate::linalg::dense;
use crate::linalg::eigen::SymmetricEigen;
use crate::linalg::{Mat, MatRef};
use crate::problem::{Answer, Problem};

/// The method.
#[derive(Clone, Copy, Debug)]
pub struct ComplementarityPenalty;

static CARD: MethodCard = MethodCard {
    id: "complementarity-penalty",
    title: "Penalty on the complementarity of X and 0 <= U <= I, alternating with momentum",
    class: MethodClass::RankPromoting,
    reference: "X. Shen, J. Mitchell, A penalty method for rank minimization problems in symmetric matrices, \
        Comput. Optim. Appl., 2018, 10.1007/s10589-018-0010-6 (abstract; the algorithm from memory). Published: \
        minimise the rank n - tr U subject to <X,U> = 0, 0 <= U <= I, with <X,U> penalised, proximal alternating steps \
        with momentum. Here F = <C,X> + rho (<X,U> + theta (n - tr U)): X by an exact convex solution, U by a \
        projected gradient step; theta, the eigenvalue above which rank is paid once, is set between eigenvalues r and \
        r + 1 of X at each stage, which uses the target rank as the source does not. All defaults are our own choices, \
        and so are restarts and Newton steps. The objective stays in the cost: <C + rho T, X>, rho growing until the \
        tail vanishes; no cut of the objective is used.",
    needs: "Any blocks, nonnegative part, sparse, dense or rank-one constraints; blocks are held dense. \
        Blocks without a rank bound get no weight; without any bounded block it is the relaxation.",
    cost: "A turn is one interior-point solution (see relax-ipm) and one eigendecomposition of each bounded \
        block. Operator, scaling and the plan of the Schur complement are compiled once; a turn starts from an iterate \
        kept on the way to the last solution, which saves half of the iterations and more while the weight moves \
        little (3 to 7 instead of 13), and next to nothing in turns where the weight grows. Memory about 8 (2 m^2 + 27 \
        n^2) bytes.",
    guarantees: "At fixed rho and theta F never rises: both steps lower it, and extrapolation is dropped when it \
        would not.",
    failures: "Local, as ky-fan-dc: on faces often the wrong end (half of flat-face and sign-trap; with \
        `restarts` = 5 nearly all were solved). Number partitioning (hidden-partition): it ends at another sign \
        vector. Eigenvalues above theta get no weight: where more than r are equal it depends on rounding. U remembers \
        old directions, which costs a few turns more than ky-fan-dc.",
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
            name: "step",
            kind: Kind::Decimal { least: 0.01, most: 100.0 },
            default: DefaultSetting::Decimal(0.5),
            meaning: "Step of U over 1/theta; large steps make U the projector on the eigenvalues below theta.",
        },
        SettingSpec {
            name: "momentum",
            kind: Kind::Word(&["on", "off"]),
            default: DefaultSetting::Word("on"),
            meaning: "on: steps of U extrapolate by (k-1)/(k+2), k the turns since the extrapolation began.",
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

impl Method for ComplementarityPenalty {
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
        let word = options.word("momentum");
        let momentum = if word == "on" { Momentum::On } else { Momentum::Off };
        let rule = ComplementRule::new(options.decimal("step"), momentum);
        let tolerance = options.decimal("tolerance");
        let mut inner = Weighted::new(problem, rule, tolerance, &trial.meter)?;
        let (answer, _) = run(problem, &mut inner, &params, &mut trial.stream, &mut trial.meter)?;
        Ok(answer)
    }
}

/// `p(X) = <X, U> + theta (n - tr U)` with 0 <= U <= I; the minimum over U is the sum of min(lambda_i, theta).
#[derive(Debug)]
pub struct ComplementRule {
    step: f64,
    momentum: Momentum,
    blocks: Vec<Option<Complement>>,
}

/// Whether steps of U extrapolate.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Momentum {
    /// They do not.
    Off,
    /// By Nesterov's factor (k - 1)/(k + 2), dropped when the penalty would rise.
    On,
}

/// U of one block with its last value and work.
#[derive(Debug)]
struct Complement {
    u: Mat<f64>,
    last: Mat<f64>,
    /// Turns since the extrapolation began.
    age: usize,
    theta: f64,
    trial: Mat<f64>,
    eigen: SymmetricEigen,
    work: Mat<f64>,
}

impl ComplementRule {
    /// Makes the rule with the given step of U, in units of 1 over theta.
    pub fn new(step: f64, momentum: Momentum) -> Self {
        ComplementRule { step, momentum, blocks: Vec::new() }
    }
}

impl Complement {
    fn new(n: usize) -> Self {
        let zero = || Mat::zeros(n, n);
        let eigen = SymmetricEigen::new(n);
        let (u, last, trial, work) = (zero(), zero(), zero(), zero());
        Complement { u, last, age: 0, theta: 0.0, trial, eigen, work }
    }

    /// Sets `last` to the clamp of U + beta (U - last) + step (I - X/theta) and swaps it with U; false, with
    /// nothing changed, when an eigendecomposition fails or the penalty would rise.
    fn advance(&mut self, point: MatRef<'_, f64>, beta: f64, step: f64) -> bool {
        let n = point.nrows();
        dense::copy_into(self.u.as_ref(), self.trial.as_mut());
        dense::scale(1.0 + beta, self.trial.as_mut());
        dense::axpy_matrix(-beta, self.last.as_ref(), self.trial.as_mut());
        dense::axpy_matrix(-step / self.theta, point, self.trial.as_mut());
        (0..n).for_each(|i| self.trial[(i, i)] += step);
        if self.eigen.decompose(self.trial.as_ref()).is_err() {
            return false;
        }
        let values = self.eigen.values();
        let clamp = |j: usize| values[j].clamp(0.0, 1.0);
        spectral_matrix(self.eigen.vectors(), clamp, &mut self.work, &mut self.trial);
        if self.value(point, &self.trial) > self.value(point, &self.u) {
            return false;
        }
        std::mem::swap(&mut self.last, &mut self.u);
        std::mem::swap(&mut self.u, &mut self.trial);
        true
    }

    fn value(&self, point: MatRef<'_, f64>, u: &Mat<f64>) -> f64 {
        let n = point.nrows();
        let left: f64 = (0..n).map(|i| 1.0 - u[(i, i)]).sum();
        dense::dot_symmetric(point, u.as_ref()) + self.theta * left
    }
}

impl WeightRule for ComplementRule {
    fn stage(&mut self, stage: Stage, at: &Measured) {
        self.blocks.resize_with(at.ranks.len(), || None);
        for view in at.bounded() {
            let n = view.values.len();
            let block = self.blocks[view.block].get_or_insert_with(|| Complement::new(n));
            let (above, below) = (view.values[n - view.rank], view.values[n - view.rank - 1]);
            block.theta = (0.5 * (above + below)).max(1e-12 * view.values[n - 1]);
            if stage == Stage::First {
                let theta = block.theta;
                let below = |j: usize| if view.values[j] < theta { 1.0 } else { 0.0 };
                spectral_matrix(view.vectors, below, &mut block.work, &mut block.u);
                dense::copy_into(block.u.as_ref(), block.last.as_mut());
                block.age = 0;
            }
        }
    }

    fn weigh(&mut self, at: BlockView<'_>, weight: &mut Mat<f64>) {
        let block = self.blocks[at.block].as_mut().expect("a stage comes before a turn");
        let age = block.age as f64;
        let beta = if age < 1.0 { 0.0 } else { (age - 1.0) / (age + 2.0) };
        let extrapolated =
            self.momentum == Momentum::On && beta > 0.0 && block.advance(at.point, beta, self.step);
        if extrapolated {
            block.age += 1;
        } else {
            // Without extrapolation the step lowers the penalty, which is linear in U.
            block.advance(at.point, 0.0, self.step);
            block.age = if beta > 0.0 { 1 } else { block.age + 1 };
        }
        dense::copy_into(block.u.as_ref(), weight.as_mut());
    }

    fn penalty(&self, at: BlockView<'_>) -> f64 {
        let block = self.blocks[at.block].as_ref().expect("a stage comes before a turn");
        block.value(at.point, &block.u)
    }
}
