//! `iterative-rank-minimisation`: the least eigenvalues held below a shrinking bound.

use super::{Method, Trial};
use crate::budget::{Halt, Meter};
use crate::card::{DefaultSetting, Kind, MethodCard, MethodClass, SettingSpec};
use crate::engines::ipm::{self, Solution};
use crate::engines::reweighting::{BlockView, Inner, Measured, Params, Polish, Stage, run};
use crate::linalg::{Mat, dense};
use crate::problem::{
    Answer, Block, Coefficient, Functional, OuterSum, OuterTerm, Problem, SparseSymmetric,
    SparseVector,
};

/// The method.
#[derive(Clone, Copy, Debug)]
pub struct IterativeRankMinimisation;

static CARD: MethodCard = MethodCard {
    id: "iterative-rank-minimisation",
    title: "Iterative rank minimisation: e I - V'XV PSD with a growing weight on e",
    class: MethodClass::RankPromoting,
    reference: "C. Sun, R. Dai, Rank-constrained optimization and its applications, Automatica 82:128-136, 2017; R. Dai, \
        C. Sun, IEEE Conf. Decision and Control 2015 (abstracts; bibliographic data from memory). min <C,X> + w e subject to \
        the constraints, e I - V'XV PSD and e <= its last value; V eigenvectors of the n - r least eigenvalues of the \
        last X, the relaxation's at first; w grows by a fixed factor each turn (1.5 in the authors' public code, which \
        starts at w = 1). The first weight relative to the price, the limit on columns of V, restarts and the finishing \
        Newton steps are our own choices. One e serves all blocks.",
    needs: "Any blocks, nonnegative part, sparse, dense or rank-one constraints. With q columns of V a block it solves \
        problems with q(q+1)/2 further constraints; refuses more than 3000 constraints in all.",
    cost: "A turn is one interior-point solution with a further block of order q and q(q+1)/2 further constraints, m' in all: \
        m'^3/3 and 2 q^4 n flops an iteration, 8 (2 m'^2 + 2 q^4) bytes. V changes the constraints, so that nothing is kept \
        from turn to turn and every solution starts cold.",
    guarantees: "<C,X> + w lambda_{r+1}(X) never rises at a fixed w, and e never rises. Local linear convergence under \
        assumptions on multipliers (the source's claim).",
    failures: "Local: on faces often the wrong end (flat-face, sign-trap); hidden-partition ends at another \
        sign vector. A fast growth of w freezes a poor point. With `columns` far below n - r the bound leaves \
        directions free and the iteration circles (12 of 99 columns solved none of three instances with a gap). The \
        most expensive of its kind: a turn takes seconds at n = 100.",
    options: &[
        SettingSpec {
            name: "share",
            kind: Kind::Decimal { least: 1e-6, most: 1e4 },
            default: DefaultSetting::Decimal(0.1),
            meaning: "First w over the price max(|<C,X0>|/tr X0, 1e-3 ||C||_F) of a unit of trace (1 where C = 0); X0 the \
                relaxation's point, its trace over the blocks with a rank bound.",
        },
        SettingSpec {
            name: "growth",
            kind: Kind::Decimal { least: 1.01, most: 100.0 },
            default: DefaultSetting::Decimal(1.5),
            meaning: "Factor by which w grows each turn.",
        },
        SettingSpec {
            name: "columns",
            kind: Kind::WordOrInteger { words: &["all", "auto"], least: 1, most: 1000 },
            default: DefaultSetting::Word("auto"),
            meaning: "Columns of V: all n - r as published, or the leading ones of them, or auto: as many as keep q(q+1)/2 \
                below 600 in the sum over the blocks.",
        },
        SettingSpec {
            name: "monotone",
            kind: Kind::Word(&["on", "off"]),
            default: DefaultSetting::Word("on"),
            meaning: "on: e may not pass its last value, as published; off: as in the authors' code.",
        },
        SettingSpec {
            name: "tail",
            kind: Kind::Decimal { least: 1e-12, most: 1e-2 },
            default: DefaultSetting::Decimal(1e-6),
            meaning: "An attempt ends when the eigenvalues beyond the target ranks are at most this share of the trace.",
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
            meaning: "Further attempts, whose first V is made at a random point V G G' V' (V V' = X0, G normal of the \
                target width) instead of X0, unless a point meets the relaxation's value. The best end is returned.",
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
            meaning: "newton: the truncated end of an attempt is finished by at most 20 Newton steps on its factors with the \
                given cost alone; off: it is returned as it is.",
        },
    ],
};

/// Most constraints of a turn's problem.
const MOST_CONSTRAINTS: usize = 3000;
/// Further constraints that `columns = auto` allows.
const AUTOMATIC: usize = 600;

impl Method for IterativeRankMinimisation {
    fn card(&self) -> &'static MethodCard {
        &CARD
    }

    fn solve(&self, problem: &Problem, trial: &mut Trial) -> Result<Answer, Halt> {
        let options = &trial.options;
        let params = Params {
            share: options.decimal("share"),
            growth: options.decimal("growth"),
            // The weight grows each turn.
            hold: 0.0,
            tail: options.decimal("tail"),
            turns: options.size("turns"),
            restarts: options.size("restarts"),
            restart_growth: 1.0,
            polish: if options.word("polish") == "newton" { Polish::Newton } else { Polish::Off },
        };
        let columns = match options.get("columns") {
            Some(crate::card::Setting::Integer(_)) => Columns::Most(options.size("columns")),
            _ if options.word("columns") == "all" => Columns::All,
            _ => Columns::Automatic,
        };
        let bound = if options.word("monotone") == "on" { Bound::Falling } else { Bound::Free };
        let mut inner =
            EigenvalueBound::new(problem, columns, bound, options.decimal("tolerance"))?;
        trial.meter.check_room(inner.bytes())?;
        let (answer, _) = run(problem, &mut inner, &params, &mut trial.stream, &mut trial.meter)?;
        Ok(answer)
    }
}

/// How many columns V has.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Columns {
    /// n - r.
    All,
    /// At most this many in a block.
    Most(usize),
    /// As the card says.
    Automatic,
}

/// Whether e is bounded by its last value.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Bound {
    /// It is.
    Falling,
    /// It is not.
    Free,
}

/// The convex problem of a turn: min <C,X> + w e, e I - V'XV PSD.
#[derive(Debug)]
pub struct EigenvalueBound<'a> {
    problem: &'a Problem,
    params: ipm::Params,
    bound: Bound,
    /// Columns of V by block; 0 in blocks without a bound.
    columns: Vec<usize>,
    multipliers: Vec<f64>,
    /// Last value of e; infinite when it bounds nothing.
    last: f64,
    /// e of each turn, and whether the turn was bounded by the one before.
    pub values: Vec<f64>,
}

impl<'a> EigenvalueBound<'a> {
    /// Chooses the columns.
    ///
    /// # Errors
    /// `Refused` when a turn's problem would have too many constraints.
    pub fn new(
        problem: &'a Problem,
        columns: Columns,
        bound: Bound,
        tolerance: f64,
    ) -> Result<Self, Halt> {
        let free = |block: &Block| block.rank.map_or(0, |rank| block.order - rank);
        let most = match columns {
            Columns::All => usize::MAX,
            Columns::Most(most) => most,
            Columns::Automatic => {
                let count = |q: usize| -> usize {
                    problem.blocks().iter().map(|b| free(b).min(q)).map(|q| q * (q + 1) / 2).sum()
                };
                let widest = problem.blocks().iter().map(free).max().unwrap_or(0).max(1);
                (1..=widest).rev().find(|q| count(*q) <= AUTOMATIC).unwrap_or(1)
            }
        };
        let columns: Vec<usize> = problem.blocks().iter().map(|b| free(b).min(most)).collect();
        let inner = EigenvalueBound {
            problem,
            params: ipm::Params { tolerance, ..ipm::Params::default() },
            bound,
            columns,
            multipliers: Vec::new(),
            last: f64::INFINITY,
            values: Vec::new(),
        };
        let constraints = inner.constraints();
        if constraints > MOST_CONSTRAINTS {
            return Err(Halt::Refused(format!(
                "{constraints} constraints in a turn, more than {MOST_CONSTRAINTS}"
            )));
        }
        Ok(inner)
    }

    /// Counts the constraints of a turn's problem.
    fn constraints(&self) -> usize {
        let further: usize = self.columns.iter().map(|q| q * (q + 1) / 2).sum();
        self.problem.rhs().len() + further + 1
    }

    /// Counts the bytes of a turn's largest arrays.
    fn bytes(&self) -> u64 {
        let m = self.constraints() as u64;
        let outer: u64 = self.columns.iter().map(|q| 2 * (*q as u64).pow(4)).sum();
        let blocks: u64 = self.problem.blocks().iter().map(|b| (b.order as u64).pow(2)).sum();
        8 * (2 * m * m + outer + 20 * blocks)
    }

    /// Makes the problem of a turn: a block of order q for each bounded one, then the scalar e, then, when e is
    /// bounded, the scalar `last - e`.
    fn extended(&self, w: f64, at: &Measured) -> Problem {
        let problem = self.problem;
        let mut blocks = problem.blocks().to_vec();
        let place_of_e = problem.orthant() as u32;
        let mut orthant = problem.orthant() + 1;
        let mut cost = problem.cost().clone();
        cost.orthant = with_entry(&cost.orthant, place_of_e, w);
        let mut constraints = problem.constraints().to_vec();
        let mut rhs = problem.rhs().to_vec();
        for view in at.bounded() {
            let q = self.columns[view.block];
            let slack = blocks.len();
            blocks.push(Block { order: q, rank: None });
            for j in 0..q {
                for i in 0..=j {
                    constraints.push(entry_of_slack(view, i, j, q, slack, place_of_e));
                    rhs.push(0.0);
                }
            }
        }
        if self.last.is_finite() {
            let pairs = vec![(place_of_e, 1.0), (place_of_e + 1, 1.0)];
            let row = SparseVector::gather(pairs);
            constraints.push(Functional { parts: Vec::new(), orthant: row });
            rhs.push(self.last);
            orthant += 1;
        }
        Problem::new(blocks, orthant, cost, constraints, rhs)
            .expect("an extension of a problem is one")
    }

    fn solve(&self, problem: &Problem, meter: &mut Meter) -> Result<Solution, Halt> {
        ipm::solve(problem, &self.params, None, meter)
    }
}

/// Returns the constraint `v_i'X v_j + Z_ij - e [i = j] = 0`, v the leading eigenvectors beyond the rank.
fn entry_of_slack(
    view: BlockView<'_>,
    i: usize,
    j: usize,
    q: usize,
    slack: usize,
    place_of_e: u32,
) -> Functional {
    let n = view.values.len();
    let column = |k: usize| dense::column(view.vectors, n - view.rank - 1 - k);
    let term = |weight: f64, sign: f64| {
        let sum = column(i).iter().zip(column(j)).map(|(a, b)| a + sign * b);
        let pairs = sum.enumerate().map(|(k, value)| (k as u32, value)).collect();
        OuterTerm { weight, vector: SparseVector::gather(pairs) }
    };
    let terms = if i == j {
        // (2v)(2v)' / 4.
        vec![term(0.25, 1.0)]
    } else {
        vec![term(0.25, 1.0), term(-0.25, -1.0)]
    };
    let on_slack = if i == j { 1.0 } else { 0.5 };
    let z = SparseSymmetric::gather(q, vec![(i, j, on_slack)]);
    let e = if i == j { vec![(place_of_e, -1.0)] } else { Vec::new() };
    Functional {
        parts: vec![
            (view.block, Coefficient::Outer(OuterSum { order: n, terms })),
            (slack, Coefficient::Sparse(z)),
        ],
        orthant: SparseVector::gather(e),
    }
}

fn with_entry(vector: &SparseVector, index: u32, value: f64) -> SparseVector {
    let mut pairs: Vec<(u32, f64)> = vector.iter().map(|(k, v)| (k as u32, v)).collect();
    pairs.push((index, value));
    SparseVector::gather(pairs)
}

/// Copies the blocks and scalars that a point has from the front of a solution's.
fn take(points: &[Mat<f64>], orthant: &[f64], next: &mut Measured) {
    for (to, from) in next.points.iter_mut().zip(points) {
        dense::copy_into(from.as_ref(), to.as_mut());
    }
    let count = next.orthant.len();
    next.orthant.copy_from_slice(&orthant[..count]);
}

impl Inner for EigenvalueBound<'_> {
    fn relax(&mut self, next: &mut Measured, meter: &mut Meter) -> Result<ipm::Info, Halt> {
        let zero = self.problem.cost().norm() == 0.0;
        let solution = if zero {
            let parts =
                self.problem.blocks().iter().enumerate().filter(|(k, _)| next.ranks[*k].is_some());
            let parts = parts
                .map(|(k, block)| {
                    let ones = (0..block.order).map(|i| (i, i, 1.0)).collect();
                    (k, Coefficient::Sparse(SparseSymmetric::gather(block.order, ones)))
                })
                .collect();
            let cost = Functional { parts, orthant: SparseVector::default() };
            let traced = Problem::new(
                self.problem.blocks().to_vec(),
                self.problem.orthant(),
                cost,
                self.problem.constraints().to_vec(),
                self.problem.rhs().to_vec(),
            )
            .expect("a trace is a cost");
            self.solve(&traced, meter)?
        } else {
            self.solve(self.problem, meter)?
        };
        take(&solution.points, &solution.orthant, next);
        self.multipliers = solution.multipliers;
        if zero {
            // Those of the least trace prove nothing for C = 0, for which y = 0 is optimal.
            self.multipliers.fill(0.0);
        }
        Ok(solution.info)
    }

    fn multipliers(&self) -> Vec<f64> {
        self.multipliers.clone()
    }

    fn stage(&mut self, stage: Stage, _: &Measured) {
        if stage == Stage::First {
            self.last = f64::INFINITY;
        }
    }

    fn turn(
        &mut self,
        rho: f64,
        at: &Measured,
        next: &mut Measured,
        meter: &mut Meter,
    ) -> Result<ipm::Info, Halt> {
        let extended = self.extended(rho, at);
        let solution = self.solve(&extended, meter)?;
        meter.effort.inner_steps += 1;
        take(&solution.points, &solution.orthant, next);
        let e = solution.orthant[self.problem.orthant()];
        self.values.push(e);
        if self.bound == Bound::Falling {
            self.last = e;
        }
        Ok(solution.info)
    }

    fn penalty(&self, at: &Measured) -> f64 {
        at.bounded().map(|view| view.values[view.values.len() - view.rank - 1]).fold(0.0, f64::max)
    }
}
