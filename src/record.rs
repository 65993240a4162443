//! The versioned result types: what one trial, one instance and one run leave behind.
//!
//! These are the only types that are written to and read from run folders. They hold plain numbers
//! and words, import nothing, and measure nothing. A figure that was not measured is `None`; an
//! infinity or a NaN never gets in, because [`measured`] stands at every door.

use serde::{Deserialize, Serialize};

/// Version of the record layout. It changes when a column is added, dropped or changes its meaning.
pub const SCHEMA: u32 = 3;

/// Returns the value when it is finite, and nothing otherwise; a negative zero becomes zero.
pub fn measured(value: f64) -> Option<f64> {
    value.is_finite().then_some(value + 0.0)
}

/// The one-word outcome of a trial.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Verdict {
    /// The truncation to the target rank is feasible and optimal to tolerance.
    Solved,
    /// It is after the referee's own restoration.
    Near,
    /// Feasible at the target rank, the objective is off.
    Suboptimal,
    /// Feasible at the target rank; no optimum is known to compare with.
    Feasible,
    /// Not feasible at the target rank.
    Infeasible,
    /// The wall-time limit was reached before a solved or near point was found.
    TimeLimit,
    /// The memory limit was reached before a solved or near point was found.
    MemoryLimit,
    /// The method said that it failed.
    Failed,
    /// The method panicked.
    Crashed,
    /// The answer had a wrong shape or numbers that are not finite.
    Malformed,
    /// The method does not support this constraint type.
    Refused,
}

impl Verdict {
    /// Lists every verdict, best first.
    pub const ALL: [Verdict; 11] = [
        Verdict::Solved,
        Verdict::Near,
        Verdict::Suboptimal,
        Verdict::Feasible,
        Verdict::Infeasible,
        Verdict::TimeLimit,
        Verdict::MemoryLimit,
        Verdict::Failed,
        Verdict::Crashed,
        Verdict::Malformed,
        Verdict::Refused,
    ];

    /// Returns the word written in records and tables.
    pub fn word(self) -> &'static str {
        match self {
            Verdict::Solved => "solved",
            Verdict::Near => "near",
            Verdict::Suboptimal => "suboptimal",
            Verdict::Feasible => "feasible",
            Verdict::Infeasible => "infeasible",
            Verdict::TimeLimit => "time-limit",
            Verdict::MemoryLimit => "memory-limit",
            Verdict::Failed => "failed",
            Verdict::Crashed => "crashed",
            Verdict::Malformed => "malformed",
            Verdict::Refused => "refused",
        }
    }

    /// Returns whether the verdict counts as success: solved, near, or, where no optimum is known,
    /// feasible.
    pub fn is_success(self) -> bool {
        matches!(self, Verdict::Solved | Verdict::Near | Verdict::Feasible)
    }

    /// Returns whether the point was found feasible at the target rank, whatever its objective.
    pub fn is_feasible(self) -> bool {
        self.is_success() || self == Verdict::Suboptimal
    }

    /// Returns whether the trial left nothing that could be judged through a defect of the method.
    pub fn is_unjudged(self) -> bool {
        matches!(self, Verdict::Crashed | Verdict::Malformed)
    }
}

/// Which trial a record is of.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct Identity {
    /// Id of the trial, unique in its run.
    pub trial: String,
    /// Id of the instance.
    pub instance: String,
    /// Family of the instance, or `imported`.
    pub family: String,
    /// Parameters of the instance in canonical spelling.
    pub parameters: String,
    /// Sum of the orders of all blocks and of the nonnegative part.
    pub order: u64,
    /// Number of constraints.
    pub constraints: u64,
    /// Largest rank bound over the blocks that carry one, or the largest block order.
    pub target_rank: u64,
    /// Label of the method.
    pub method: String,
    /// Options of the method in canonical spelling.
    pub options: String,
    /// Master seed of the plan.
    pub seed: u64,
    /// Which repeat, from 1.
    pub repeat: u64,
}

/// What the referee measured. Absent figures are `None`.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct Figures {
    /// Correct digits of the objective at the target rank.
    pub digits: Option<f64>,
    /// `||A(X_r) - b|| / (1 + ||b||)` of the truncated point, in the referee's canonical units.
    pub feasibility: Option<f64>,
    /// Least eigenvalue over the blocks of the returned point.
    pub min_eigenvalue: Option<f64>,
    /// `<C, X_r>` of the truncated point.
    pub objective: Option<f64>,
    /// The known optimum.
    pub optimum: Option<f64>,
    /// `|<C, X_r> - p*| / (1 + |p*|)`, in the referee's canonical units.
    pub objective_error: Option<f64>,
    /// Relative distance to the planted point, where it is the only optimum.
    pub distance: Option<f64>,
    /// Rank at the cut-offs 1e-4, 1e-6 and 1e-8 times the largest eigenvalue.
    pub ranks: Option<[u64; 3]>,
    /// Eigenvalues beyond the target rank over the trace.
    pub tail_ratio: Option<f64>,
    /// Feasibility after the referee's restoration.
    pub restored_feasibility: Option<f64>,
    /// Objective error after the referee's restoration.
    pub restored_objective_error: Option<f64>,
    /// Feasibility of the untruncated answer.
    pub raw_feasibility: Option<f64>,
    /// Objective of the untruncated answer.
    pub raw_objective: Option<f64>,
    /// Rigorous lower bound from the multipliers.
    pub lower_bound: Option<f64>,
}

/// What else the run did while a trial was timed.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Timing {
    /// Trials ran side by side, as many as the run had jobs.
    #[default]
    Shared,
    /// The trial was run again when all others had ended, and its time and memory are of that run.
    Alone,
}

/// Time and memory of a trial.
#[derive(Clone, Copy, Debug, Default, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Cost {
    /// Wall time of the method, in seconds.
    pub wall_s: Option<f64>,
    /// Processor time of the method's thread, in seconds.
    pub cpu_s: Option<f64>,
    /// Most memory held beyond the start, in bytes.
    pub peak_bytes: Option<u64>,
    /// What else the run did meanwhile.
    pub timing: Timing,
}

/// Machine-independent work counts of a trial.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub struct Work {
    /// Floating-point operations by the operation counts of the kernels.
    pub flops: u64,
    /// Symmetric eigendecompositions.
    pub eigendecompositions: u64,
    /// Factorisations.
    pub factorisations: u64,
    /// Applications of the constraint operator, its adjoint or the slack.
    pub operator_products: u64,
    /// Inner steps, as the method's card says.
    pub inner_steps: u64,
}

/// One row of `trials.csv`. Columns are written in the order of the fields.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
#[allow(
    missing_docs,
    reason = "each field is described where it is measured: Identity, Figures, Cost, Work"
)]
pub struct Record {
    pub trial: String,
    pub instance: String,
    pub family: String,
    pub parameters: String,
    pub order: u64,
    pub constraints: u64,
    pub target_rank: u64,
    pub method: String,
    pub options: String,
    pub seed: u64,
    pub repeat: u64,
    pub verdict: Verdict,
    pub stop_reason: String,
    pub digits: Option<f64>,
    pub feasibility: Option<f64>,
    pub min_eigenvalue: Option<f64>,
    pub objective: Option<f64>,
    pub optimum: Option<f64>,
    pub objective_error: Option<f64>,
    pub distance: Option<f64>,
    #[serde(rename = "rank_at_1e-4")]
    pub rank_at_1e4: Option<u64>,
    #[serde(rename = "rank_at_1e-6")]
    pub rank_at_1e6: Option<u64>,
    #[serde(rename = "rank_at_1e-8")]
    pub rank_at_1e8: Option<u64>,
    pub tail_ratio: Option<f64>,
    pub restored_feasibility: Option<f64>,
    pub restored_objective_error: Option<f64>,
    pub raw_feasibility: Option<f64>,
    pub raw_objective: Option<f64>,
    pub lower_bound: Option<f64>,
    pub wall_s: Option<f64>,
    pub cpu_s: Option<f64>,
    pub peak_bytes: Option<u64>,
    pub timing: Timing,
    pub flops: Option<u64>,
    pub eigendecompositions: Option<u64>,
    pub factorisations: Option<u64>,
    pub operator_products: Option<u64>,
    pub inner_steps: Option<u64>,
    pub message: String,
}

impl Record {
    /// Assembles a record; figures that are not finite become `None`, line breaks in the message
    /// become blanks.
    pub fn assemble(
        identity: Identity,
        verdict: Verdict,
        stop_reason: &str,
        figures: Figures,
        cost: Cost,
        work: Option<Work>,
        message: &str,
    ) -> Self {
        let finite = |value: Option<f64>| value.and_then(measured);
        let rank = |at: usize| figures.ranks.map(|ranks| ranks[at]);
        Record {
            trial: identity.trial,
            instance: identity.instance,
            family: identity.family,
            parameters: identity.parameters,
            order: identity.order,
            constraints: identity.constraints,
            target_rank: identity.target_rank,
            method: identity.method,
            options: identity.options,
            seed: identity.seed,
            repeat: identity.repeat,
            verdict,
            stop_reason: stop_reason.to_owned(),
            digits: finite(figures.digits),
            feasibility: finite(figures.feasibility),
            min_eigenvalue: finite(figures.min_eigenvalue),
            objective: finite(figures.objective),
            optimum: finite(figures.optimum),
            objective_error: finite(figures.objective_error),
            distance: finite(figures.distance),
            rank_at_1e4: rank(0),
            rank_at_1e6: rank(1),
            rank_at_1e8: rank(2),
            tail_ratio: finite(figures.tail_ratio),
            restored_feasibility: finite(figures.restored_feasibility),
            restored_objective_error: finite(figures.restored_objective_error),
            raw_feasibility: finite(figures.raw_feasibility),
            raw_objective: finite(figures.raw_objective),
            lower_bound: finite(figures.lower_bound),
            wall_s: finite(cost.wall_s),
            cpu_s: finite(cost.cpu_s),
            peak_bytes: cost.peak_bytes,
            timing: cost.timing,
            flops: work.map(|work| work.flops),
            eigendecompositions: work.map(|work| work.eigendecompositions),
            factorisations: work.map(|work| work.factorisations),
            operator_products: work.map(|work| work.operator_products),
            inner_steps: work.map(|work| work.inner_steps),
            message: message.split_whitespace().collect::<Vec<_>>().join(" "),
        }
    }

    /// Returns the record without its time and memory figures: what two runs of one plan share.
    pub fn without_measurements(&self) -> Self {
        Record {
            wall_s: None,
            cpu_s: None,
            peak_bytes: None,
            timing: Timing::Shared,
            ..self.clone()
        }
    }

    /// Returns the time and memory figures.
    pub fn cost(&self) -> Cost {
        Cost {
            wall_s: self.wall_s,
            cpu_s: self.cpu_s,
            peak_bytes: self.peak_bytes,
            timing: self.timing,
        }
    }

    /// Replaces the time and memory figures.
    pub fn set_cost(&mut self, cost: Cost) {
        let Cost { wall_s, cpu_s, peak_bytes, timing } = cost;
        (self.wall_s, self.cpu_s, self.peak_bytes, self.timing) =
            (wall_s.and_then(measured), cpu_s.and_then(measured), peak_bytes, timing);
    }
}

/// One row of `instances.csv`.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct InstanceRecord {
    /// Id of the instance, unique in its run.
    pub instance: String,
    /// Family, or `imported`.
    pub family: String,
    /// Parameters in canonical spelling.
    pub parameters: String,
    /// Which instance of its combination, from 0.
    pub index: u64,
    /// Master seed of the plan.
    pub seed: u64,
    /// Number of PSD blocks.
    pub blocks: u64,
    /// Number of nonnegative scalars.
    pub orthant: u64,
    /// Sum of the orders of all blocks and of the nonnegative part.
    pub order: u64,
    /// Number of constraints.
    pub constraints: u64,
    /// Largest rank bound over the blocks that carry one, or the largest block order.
    pub target_rank: u64,
    /// Largest r with r(r+1)/2 <= constraints.
    pub rank_bound: u64,
    /// SHA-256 of the canonical bytes of the problem, in hexadecimal digits.
    pub digest: String,
    /// Known optimum.
    pub optimum: Option<f64>,
    /// `certified`, `reported` or `unknown`.
    pub optimum_known: String,
    /// Kind of certificate: `dual-pair`, `shared-minimiser`, `rank-bound`, `enumerated` (exact), `verified-pair` (a
    /// definiteness proved in floating point with a bound of the error), `no-proof` (a planted point whose optimality
    /// is not proved), or `none`.
    pub certificate: String,
    /// `proved`, `not-proved` or `unknown`.
    pub uniqueness: String,
    /// How the relaxation behaves, by the family's card; empty when not known.
    pub relaxation: String,
    /// Where an imported instance and its optimum come from; empty for a planted one.
    pub source: String,
}

/// A method as it took part in a run.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct MethodRecord {
    /// Label, unique in its run.
    pub label: String,
    /// Id of the built-in method.
    pub id: String,
    /// Class of the method.
    pub class: String,
    /// Options in canonical spelling.
    pub options: String,
}

/// What all trials of a run have in common: the first line of its journal.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct RunHeader {
    /// Record layout, [`SCHEMA`] at the time of writing.
    pub schema: u32,
    /// Title of the plan.
    pub title: String,
    /// SHA-256 of the plan's text, in hexadecimal digits.
    pub plan_digest: String,
    /// Imported files by their path in the plan and the SHA-256 of their bytes.
    pub imports: Vec<(String, String)>,
    /// Master seed.
    pub seed: u64,
    /// 0 for the plan itself; round k has the instances k * count, ..., (k + 1) * count - 1 of every
    /// combination, and no imported ones.
    pub round: u64,
    /// Wall-time limit of a trial, in seconds.
    pub wall_limit_s: f64,
    /// Memory limit of a trial, in bytes.
    pub memory_limit: Option<u64>,
    /// Feasibility, objective and rank tolerance of the referee.
    pub tolerance: [f64; 3],
    /// Methods in plan order.
    pub methods: Vec<MethodRecord>,
    /// Number of trials the whole plan has.
    pub trials: u64,
}

/// One point of a convergence trace, as the method saw itself: a row of `traces/TRIAL.csv`.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct TraceRow {
    /// Flops so far.
    pub flops: u64,
    /// Objective of the iterate.
    pub objective: Option<f64>,
    /// Relative primal residual of the iterate.
    pub residual: Option<f64>,
    /// Eigenvalues beyond the target rank over the trace of the iterate.
    pub tail: Option<f64>,
}

/// The convergence trace of one trial.
#[derive(Clone, Debug, PartialEq)]
pub struct Trace {
    /// Id of the trial.
    pub trial: String,
    /// Points, in the order of the iterations.
    pub rows: Vec<TraceRow>,
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn what_is_not_finite_is_not_measured() {
        let figures = Figures {
            digits: Some(f64::NAN),
            objective: Some(f64::NEG_INFINITY),
            feasibility: Some(0.5),
            ranks: Some([1, 2, 3]),
            ..Figures::default()
        };
        let cost = Cost { wall_s: Some(f64::INFINITY), ..Cost::default() };
        let record = Record::assemble(
            Identity::default(),
            Verdict::Malformed,
            "converged",
            figures,
            cost,
            None,
            "two\nlines",
        );
        assert_eq!((record.digits, record.objective, record.wall_s), (None, None, None));
        assert_eq!((record.feasibility, record.rank_at_1e8), (Some(0.5), Some(3)));
        assert_eq!(record.message, "two lines");
    }

    #[test]
    fn columns_are_those_of_the_interface_in_their_order() {
        let record = Record::assemble(
            Identity::default(),
            Verdict::Solved,
            "",
            Figures::default(),
            Cost::default(),
            None,
            "",
        );
        let mut writer = csv::Writer::from_writer(Vec::new());
        writer.serialize(&record).unwrap();
        let text = String::from_utf8(writer.into_inner().unwrap()).unwrap();
        let expected = "trial,instance,family,parameters,order,constraints,target_rank,method,options,seed,\
            repeat,verdict,stop_reason,digits,feasibility,min_eigenvalue,objective,optimum,objective_error,\
            distance,rank_at_1e-4,rank_at_1e-6,rank_at_1e-8,tail_ratio,restored_feasibility,\
            restored_objective_error,raw_feasibility,raw_objective,lower_bound,wall_s,cpu_s,peak_bytes,timing,flops,\
            eigendecompositions,factorisations,operator_products,inner_steps,message";
        assert_eq!(text.lines().next().unwrap(), expected);
    }

    #[test]
    fn words_are_the_serialised_form() {
        for verdict in Verdict::ALL {
            assert_eq!(serde_json::to_string(&verdict).unwrap(), format!("\"{}\"", verdict.word()));
        }
    }
}
