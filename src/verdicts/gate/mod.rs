//! Holds a run against a stored baseline, for CI: has a method become worse?
//!
//! Trials are paired by the digest of their instance, the label of the method and the repeat; the
//! method's id and options must agree. So both runs share their instances and their random streams, and
//! a changed verdict is a changed behaviour of the program or of the processor, not a draw of luck:
//! where no verdict differs nothing has changed, however few the instances. For each method, all
//! families together, some figures are compared ([`Kind`]); the instance is the unit, repeats are put
//! together first. The outcome is three-way with a tolerance band:
//!
//! - *regressed* when the 90 % interval of the change (95 % to each side) lies beyond the band on the
//!   bad side, *improved* when it does so on the good side. For shares (solved, rank) also when the
//!   one-sided exact McNemar p is at most 0.05 and the change itself lies beyond the band.
//! - *holds* when the interval lies inside the band, or the change of every single instance does, or,
//!   for shares, no instance changed.
//! - *undecided* otherwise; *not compared* when there is nothing to compare.
//!
//! Intervals: score interval (Tango) for shares; for digits, effort and time that of the mean change
//! (of the logarithm for ratios), BCa over instances. Below 5 instances there is no interval at 90 %:
//! the range of the changes stands in its place for digits and effort, which repeat themselves on one
//! machine, and time stays open. Band of a ratio: beyond 1 + band it is worse, below 1 / (1 + band)
//! better.
//!
//! Not compared: memory, wall time. Weak points: every method and figure is judged at 95 % to each side
//! without adjustment for their number, because equal programs on equal processors change nothing at
//! all; the score interval is liberal when few instances changed (3 lost of 26, none gained, or 4 of 100
//! clear a band of 1 point, at exact p 0.125 and 0.0625); a BCa interval of few instances is somewhat too narrow; a change in a few instances can cancel
//! in the mean (the list of changed verdicts shows those that matter).

mod baseline;
mod junit;
mod markdown;
mod matching;
mod metric;
mod text;

pub use baseline::{Baseline, BaselineError, FileFacts, HEAD, Head, INSTANCES, RunView, TRIALS};
pub use metric::{Kind, Making, Metric, Outcome};

use serde::Serialize;

use super::text::significant;
use crate::record::Verdict;
use matching::{Matching, MethodMatch, TrialPair, match_runs};

/// Tolerance bands, all settable; each is finite and not negative.
#[derive(Clone, Copy, Debug, PartialEq, Serialize)]
pub struct Bands {
    /// Solved share, in percentage points.
    pub solved_points: f64,
    /// Correct digits of the objective.
    pub digits: f64,
    /// Share of answers at or below the target rank, in percentage points.
    pub rank_points: f64,
    /// Effort, in percent.
    pub effort_percent: f64,
    /// Processor time, in percent.
    pub time_percent: f64,
}

impl Default for Bands {
    fn default() -> Self {
        Bands {
            solved_points: 1.0,
            digits: 0.5,
            rank_points: 1.0,
            effort_percent: 5.0,
            time_percent: 25.0,
        }
    }
}

/// Whether processor time is judged.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum TimeBasis {
    /// It is not.
    Ignore,
    /// It is, divided by the ratio of the calibration times of the two machines.
    Calibrated,
}

/// What fails the gate.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum Strictness {
    /// Only what regressed.
    Regressed,
    /// What regressed and what is undecided.
    Undecided,
}

/// The terms of a gate.
#[derive(Clone, Copy, Debug, PartialEq, Serialize)]
pub struct Terms {
    /// Tolerance bands.
    pub bands: Bands,
    /// Whether processor time is judged.
    pub time: TimeBasis,
    /// What fails the gate.
    pub strictness: Strictness,
}

impl Default for Terms {
    fn default() -> Self {
        Terms {
            bands: Bands::default(),
            time: TimeBasis::Ignore,
            strictness: Strictness::Regressed,
        }
    }
}

/// Says why a run cannot be held against a baseline.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
pub enum GateError {
    /// The referee judged by other tolerances.
    #[error(
        "not comparable: the referee's tolerances (feasibility, objective, rank) are {run:?} in the run and \
         {baseline:?} in the baseline"
    )]
    Tolerance {
        /// Tolerances of the run.
        run: [f64; 3],
        /// Tolerances of the baseline.
        baseline: [f64; 3],
    },
    /// Trials had another wall-time limit.
    #[error(
        "not comparable: the wall limit is {run} s in the run and {baseline} s in the baseline"
    )]
    WallLimit {
        /// Limit of the run, in seconds.
        run: f64,
        /// Limit of the baseline, in seconds.
        baseline: f64,
    },
    /// Time was asked for, but a calibration is missing or not a positive number.
    #[error("time cannot be judged: the {side} has no calibration ({detail})")]
    NoCalibration {
        /// `run` or `baseline`.
        side: &'static str,
        /// What was found.
        detail: String,
    },
    /// A band is negative or not finite.
    #[error("the band of {name} is {value}; it must be finite and not negative")]
    Band {
        /// Which band.
        name: &'static str,
        /// Its value.
        value: f64,
    },
}

/// Where the records come from.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct Origin {
    /// Title of the plan.
    pub title: String,
    /// SHA-256 of the plan's text.
    pub plan_digest: String,
    /// Version of the tool.
    pub version: String,
    /// Number of trials.
    pub trials: u64,
}

/// Whether the trials of a method in the baseline are in the run too.
#[derive(Clone, Debug, PartialEq, Eq, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum Presence {
    /// All are.
    Complete,
    /// Some are not.
    Missing,
    /// The label means another method or other options now, so that none is.
    ChangedOptions {
        /// Id and options in the baseline.
        baseline: String,
        /// Id and options in the run.
        run: String,
    },
}

/// A trial whose verdict changed.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct Change {
    /// Id of the trial in the run.
    pub trial: String,
    /// Id of the instance in the run.
    pub instance: String,
    /// Verdict in the baseline.
    pub baseline: Verdict,
    /// Verdict in the run.
    pub run: Verdict,
}

/// What is said of one method of the baseline.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct MethodGate {
    /// Label of the method.
    pub method: String,
    /// Trials found in both.
    pub trials: u64,
    /// Whether all trials of the baseline are there.
    pub presence: Presence,
    /// Trials of the baseline that are not in the run, ids of the baseline.
    pub missing: Vec<String>,
    /// Figures compared.
    pub metrics: Vec<Metric>,
    /// Trials whose verdict became worse, in the order of `Verdict::ALL`.
    pub worse: Vec<Change>,
    /// Trials whose verdict became better.
    pub better: Vec<Change>,
}

/// An instance that is another one now under its old id.
#[derive(Clone, Debug, PartialEq, Eq, Serialize)]
pub struct ChangedInstance {
    /// Id of the instance.
    pub instance: String,
    /// Digest in the baseline.
    pub baseline: String,
    /// Digest in the run.
    pub run: String,
}

/// Whether the gate is open.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum Passage {
    /// Nothing fails it.
    Passes,
    /// Something does.
    Fails,
}

/// A run held against a baseline.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct Gate {
    /// Whether the gate is open.
    pub passage: Passage,
    /// The baseline.
    pub baseline: Origin,
    /// The run.
    pub run: Origin,
    /// Terms as given.
    pub terms: Terms,
    /// Methods of the baseline, in its order.
    pub methods: Vec<MethodGate>,
    /// Instances that changed under their id: they count as regressed.
    pub changed_instances: Vec<ChangedInstance>,
    /// Methods that the baseline does not have: not judged.
    pub new_methods: Vec<String>,
    /// Instances that the baseline does not have: not judged.
    pub new_instances: Vec<String>,
    /// What the reader must know.
    pub notes: Vec<String>,
}

/// How often each outcome occurs; missing trials, changed options and changed instances count as
/// regressed, once for each method and once for all instances.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub struct Tally {
    /// Figures that regressed.
    pub regressed: usize,
    /// Figures that improved.
    pub improved: usize,
    /// Figures that hold.
    pub holds: usize,
    /// Figures that are undecided.
    pub undecided: usize,
    /// Figures that could not be compared.
    pub not_compared: usize,
}

impl Gate {
    /// Counts outcomes.
    pub fn tally(&self) -> Tally {
        let mut tally = Tally::default();
        for method in &self.methods {
            tally.regressed += usize::from(method.presence != Presence::Complete);
            for metric in &method.metrics {
                *match metric.outcome {
                    Outcome::Regressed => &mut tally.regressed,
                    Outcome::Improved => &mut tally.improved,
                    Outcome::Holds => &mut tally.holds,
                    Outcome::Undecided => &mut tally.undecided,
                    Outcome::NotCompared => &mut tally.not_compared,
                } += 1;
            }
        }
        tally.regressed += usize::from(!self.changed_instances.is_empty());
        tally
    }

    /// Renders the gate as text, at most 100 columns wide but for names.
    pub fn to_text(&self) -> String {
        text::render(self)
    }

    /// Renders the gate as Markdown for a pull request: one line, one table, lists folded away.
    pub fn to_markdown(&self) -> String {
        markdown::render(self)
    }

    /// Renders the gate as JUnit XML: one suite a method, one case a figure.
    pub fn to_junit(&self) -> String {
        junit::render(self)
    }

    /// Renders the gate as JSON.
    pub fn to_json(&self) -> String {
        // Plain data with text keys: serialisation to memory cannot fail.
        serde_json::to_string_pretty(self).expect("plain data") + "\n"
    }
}

/// Holds a run against a baseline.
///
/// # Errors
/// [`GateError`] when the two are not comparable, time was asked for without a calibration, or a band
/// is impossible.
pub fn gate(run: &RunView<'_>, baseline: &Baseline, terms: &Terms) -> Result<Gate, GateError> {
    let stored = baseline.view();
    let slowdown = check(run, &stored, terms)?;
    let Matching { methods, changed_instances, new_methods, new_instances } =
        match_runs(&stored, run);
    let methods: Vec<MethodGate> =
        methods.into_iter().map(|method| judge(method, terms, slowdown)).collect();
    let mut gate = Gate {
        passage: Passage::Passes,
        baseline: origin(&stored),
        run: origin(run),
        terms: *terms,
        methods,
        changed_instances,
        new_methods,
        new_instances,
        notes: notes(run, &stored, slowdown),
    };
    let tally = gate.tally();
    let strict = terms.strictness == Strictness::Undecided;
    if tally.regressed > 0 || (strict && tally.undecided > 0) {
        gate.passage = Passage::Fails;
    }
    Ok(gate)
}

/// Checks that the two are comparable; returns how much slower the run's machine is, when time counts.
fn check(
    run: &RunView<'_>,
    baseline: &RunView<'_>,
    terms: &Terms,
) -> Result<Option<f64>, GateError> {
    let bands = &terms.bands;
    let named = [
        ("the solved share", bands.solved_points),
        ("digits", bands.digits),
        ("rank", bands.rank_points),
        ("effort", bands.effort_percent),
        ("time", bands.time_percent),
    ];
    if let Some(&(name, value)) = named.iter().find(|(_, band)| !(band.is_finite() && *band >= 0.0))
    {
        return Err(GateError::Band { name, value });
    }
    if run.tolerance != baseline.tolerance {
        return Err(GateError::Tolerance { run: run.tolerance, baseline: baseline.tolerance });
    }
    if run.wall_limit_s != baseline.wall_limit_s {
        return Err(GateError::WallLimit {
            run: run.wall_limit_s,
            baseline: baseline.wall_limit_s,
        });
    }
    if terms.time == TimeBasis::Ignore {
        return Ok(None);
    }
    let seconds = |view: &RunView<'_>, side| match view.calibration_s {
        Some(seconds) if seconds.is_finite() && seconds > 0.0 => Ok(seconds),
        Some(seconds) => Err(GateError::NoCalibration { side, detail: format!("{seconds} s") }),
        None => Err(GateError::NoCalibration { side, detail: "none recorded".to_owned() }),
    };
    Ok(Some(seconds(run, "run")? / seconds(baseline, "baseline")?))
}

fn judge(method: MethodMatch<'_>, terms: &Terms, slowdown: Option<f64>) -> MethodGate {
    let change = |pair: &TrialPair<'_>| Change {
        trial: pair.run.trial.clone(),
        instance: pair.run.instance.clone(),
        baseline: pair.baseline.verdict,
        run: pair.run.verdict,
    };
    let changes = |keep: fn(&TrialPair<'_>) -> bool| {
        method.pairs.iter().filter(|pair| keep(pair)).map(change).collect()
    };
    MethodGate {
        method: method.label.to_owned(),
        trials: method.pairs.len() as u64,
        worse: changes(|pair| pair.run.verdict > pair.baseline.verdict),
        better: changes(|pair| pair.run.verdict < pair.baseline.verdict),
        metrics: metric::measure(&method.pairs, &terms.bands, slowdown),
        presence: method.presence,
        missing: method.missing.iter().map(|record| record.trial.clone()).collect(),
    }
}

fn origin(view: &RunView<'_>) -> Origin {
    Origin {
        title: view.title.to_owned(),
        plan_digest: view.plan_digest.to_owned(),
        version: view.version.to_owned(),
        trials: view.records.len() as u64,
    }
}

fn notes(run: &RunView<'_>, baseline: &RunView<'_>, slowdown: Option<f64>) -> Vec<String> {
    let mut notes = Vec::new();
    if run.plan_digest != baseline.plan_digest {
        notes.push(
            "The text of the plan differs from the baseline's; what both have is compared."
                .to_owned(),
        );
    }
    if run.version != baseline.version {
        notes.push(format!(
            "The baseline was made by version {}, the run by version {}.",
            baseline.version, run.version
        ));
    }
    if let (Some(slowdown), Some(now), Some(then)) =
        (slowdown, run.calibration_s, baseline.calibration_s)
    {
        notes.push(format!(
            "Ratios of times are divided by {}: the calibration took {} s for the run and {} s for the baseline.",
            significant(slowdown),
            significant(now),
            significant(then)
        ));
    }
    notes
}
