//! One trial: the method under its budget, the referee on its answer, the record.

use std::sync::Arc;
use std::sync::atomic::{AtomicBool, Ordering};
use std::time::{Duration, Instant};

use cpu_time::ThreadTime;

use super::RunError;
use super::expand::TrialSpec;
use super::instance::Instance;
use super::isolation::guarded;
use super::plan::{Entrant, Plan, Traced};
use crate::budget::{Budget, Counting, Effort, Halt, Meter, TracePoint, Tracing};
use crate::methods::Trial;
use crate::problem::{Answer, StopReason};
use crate::record::{Cost, Figures, Identity, Record, Timing, TraceRow, Verdict, Work, measured};
use crate::referee::{self, Finding, Judgement};
use crate::seed::Stream;

/// How a trial ended.
pub(super) enum TrialEnd {
    /// With a record, and with a trace when the plan asks for one.
    Recorded(Box<Record>, Vec<TraceRow>),
    /// By an interruption of the run: there is nothing to record.
    Interrupted,
}

/// What the method left behind.
struct Played {
    result: Result<Result<Answer, Halt>, String>,
    wall: Duration,
    cost: Cost,
    /// None when nobody counted.
    effort: Option<Effort>,
    trace: Vec<TraceRow>,
}

/// Outcome of a trial before it is put into a record.
struct Outcome {
    verdict: Verdict,
    stop_reason: &'static str,
    figures: Figures,
    message: String,
}

/// Runs one trial; `ended` is called between the method and the referee.
///
/// # Errors
/// The referee found an answer better than a certified optimum allows, or panicked.
pub(super) fn execute(
    plan: &Plan<'_>,
    spec: &TrialSpec,
    instance: &Instance,
    interrupt: &Arc<AtomicBool>,
    ended: &dyn Fn(),
) -> Result<TrialEnd, RunError> {
    let entrant = &plan.entrants[spec.entrant];
    let stream = method_stream(plan, spec, entrant, &instance.record.digest);
    let tracing = tracing(plan, spec, instance);
    let played = play(plan, entrant, instance, stream, interrupt, tracing);
    ended();
    // A method that noticed the interruption may have ended early in any way.
    if interrupt.load(Ordering::Relaxed) {
        return Ok(TrialEnd::Interrupted);
    }
    let blank = Figures { optimum: instance.knowledge.optimum_value(), ..Figures::default() };
    let without_answer = |verdict: Verdict, message: String| Outcome {
        verdict,
        stop_reason: verdict.word(),
        figures: blank,
        message,
    };
    let outcome = match played.result {
        Err(panic) => without_answer(Verdict::Crashed, format!("the method panicked: {panic}")),
        Ok(Err(Halt::Interrupted)) => return Ok(TrialEnd::Interrupted),
        Ok(Err(halt)) => {
            let message = halt.to_string();
            without_answer(
                match halt {
                    Halt::TimeLimit => Verdict::TimeLimit,
                    Halt::MemoryLimit => Verdict::MemoryLimit,
                    Halt::Refused(_) => Verdict::Refused,
                    Halt::Crashed(_) => Verdict::Crashed,
                    Halt::Malformed(_) => Verdict::Malformed,
                    Halt::Failed(_) | Halt::Interrupted => Verdict::Failed,
                },
                message,
            )
        }
        Ok(Ok(answer)) => {
            let judgement = judge(plan, spec, instance, &answer)?;
            weigh(&plan.budget, &answer, &judgement, blank, played.wall, played.cost.peak_bytes)
        }
    };
    let identity = identity(plan, spec, instance);
    let record = Record::assemble(
        identity,
        outcome.verdict,
        outcome.stop_reason,
        outcome.figures,
        played.cost,
        played.effort.as_ref().map(work),
        &outcome.message,
    );
    Ok(TrialEnd::Recorded(Box::new(record), played.trace))
}

/// Makes the record of a trial whose process ended without one.
pub(super) fn unanswered(
    plan: &Plan<'_>,
    spec: &TrialSpec,
    instance: &Instance,
    verdict: Verdict,
    message: &str,
    cost: Cost,
) -> Record {
    let figures = Figures { optimum: instance.knowledge.optimum_value(), ..Figures::default() };
    let identity = identity(plan, spec, instance);
    Record::assemble(identity, verdict, verdict.word(), figures, cost, None, message)
}

/// Opens the method's stream. It depends on the instance's data, the method, its options and the
/// repeat: neither the label nor the rest of the plan moves it.
fn method_stream(plan: &Plan<'_>, spec: &TrialSpec, entrant: &Entrant<'_>, digest: &str) -> Stream {
    let options = entrant.options.to_string();
    let labels = ["solve", digest, entrant.method().card().id, &options, &spec.repeat.to_string()];
    Stream::named(plan.seed, &labels)
}

/// Returns whether the plan asks for a trace of the trial.
fn tracing(plan: &Plan<'_>, spec: &TrialSpec, instance: &Instance) -> Tracing {
    let first = instance.record.index == 0 && spec.repeat == 1;
    match plan.traced {
        Traced::All => Tracing::On,
        Traced::First if first => Tracing::On,
        Traced::First | Traced::Nothing => Tracing::Off,
    }
}

fn trace_row(point: TracePoint) -> TraceRow {
    TraceRow {
        flops: point.flops,
        objective: point.objective.and_then(measured),
        residual: point.residual.and_then(measured),
        tail: point.tail.and_then(measured),
    }
}

/// Runs the method; only the method is timed.
fn play(
    plan: &Plan<'_>,
    entrant: &Entrant<'_>,
    instance: &Instance,
    stream: Stream,
    interrupt: &Arc<AtomicBool>,
    tracing: Tracing,
) -> Played {
    let options = entrant.options.clone();
    let meter = Meter::start(plan.budget.clone(), Arc::clone(interrupt), tracing);
    let mut trial = Trial { options, meter, stream };
    let cpu = ThreadTime::try_now();
    let wall = Instant::now();
    let result = guarded(|| entrant.method().solve(&instance.problem, &mut trial));
    let wall = wall.elapsed();
    let cpu = cpu.and_then(|start| start.try_elapsed());
    let (wall, cpu, peak_bytes) = match trial.meter.charged() {
        Some(charge) => (charge.wall, charge.processor, charge.peak_bytes),
        None => (wall, cpu.ok(), trial.meter.peak_bytes()),
    };
    let cost = Cost {
        wall_s: Some(wall.as_secs_f64()),
        cpu_s: cpu.map(|cpu| cpu.as_secs_f64()),
        peak_bytes,
        timing: Timing::Shared,
    };
    let effort = (trial.meter.counting() == Counting::Counted).then_some(trial.meter.effort);
    let trace = trial.meter.take_trace().into_iter().map(trace_row).collect();
    Played { result, wall, cost, effort, trace }
}

fn judge(
    plan: &Plan<'_>,
    spec: &TrialSpec,
    instance: &Instance,
    answer: &Answer,
) -> Result<Judgement, RunError> {
    let known = instance.knowledge.known();
    let internal = |detail: String| RunError::Internal { trial: spec.id.clone(), detail };
    guarded(|| referee::judge(&instance.problem, answer, &known, &plan.tolerance))
        .map_err(|panic| internal(format!("the referee panicked: {panic}")))?
        .map_err(|contradiction| internal(contradiction.to_string()))
}

/// Returns how far past the limit an answer may come: a tenth of it and a tenth of a second, room for
/// the iteration during which the limit passes.
fn grace(limit: Duration) -> Duration {
    limit + limit / 10 + Duration::from_millis(100)
}

/// Weighs the referee's finding and the way the method stopped into a verdict.
fn weigh(
    budget: &Budget,
    answer: &Answer,
    judgement: &Judgement,
    blank: Figures,
    wall: Duration,
    peak: Option<u64>,
) -> Outcome {
    let found = match judgement.finding {
        Finding::Solved => Verdict::Solved,
        Finding::Near => Verdict::Near,
        Finding::Suboptimal => Verdict::Suboptimal,
        Finding::Feasible => Verdict::Feasible,
        Finding::Infeasible => Verdict::Infeasible,
        Finding::Malformed => Verdict::Malformed,
    };
    let late = wall > grace(budget.wall);
    let large = budget.memory.zip(peak).is_some_and(|(limit, peak)| peak > limit + limit / 10);
    let reached = matches!(found, Verdict::Solved | Verdict::Near);
    let (verdict, remark) = match (found, answer.stop) {
        (Verdict::Malformed, _) => (found, ""),
        _ if late => (Verdict::TimeLimit, "the answer came after the wall-time limit"),
        _ if large => (Verdict::MemoryLimit, "the method took more than the memory limit"),
        (_, StopReason::TimeLimit) if !reached => (Verdict::TimeLimit, ""),
        (_, StopReason::MemoryLimit) if !reached => (Verdict::MemoryLimit, ""),
        (Verdict::Infeasible, StopReason::PrimalInfeasible) => {
            (Verdict::Failed, "the method finds the relaxation primal infeasible")
        }
        (Verdict::Infeasible, StopReason::DualInfeasible) => {
            (Verdict::Failed, "the method finds the relaxation dual infeasible")
        }
        (_, StopReason::PrimalInfeasible) => {
            (found, "the method finds the relaxation primal infeasible")
        }
        (_, StopReason::DualInfeasible) => {
            (found, "the method finds the relaxation dual infeasible (its value unbounded)")
        }
        _ => (found, ""),
    };
    let reason = if verdict == Verdict::Solved { "" } else { judgement.reason.as_str() };
    let parts = [remark, reason, answer.note.as_str()];
    let message = parts.into_iter().filter(|part| !part.is_empty()).collect::<Vec<_>>().join("; ");
    Outcome {
        verdict,
        stop_reason: answer.stop.word(),
        figures: Figures {
            digits: judgement.digits,
            feasibility: judgement.feasibility,
            min_eigenvalue: judgement.min_eigenvalue,
            objective: judgement.objective,
            objective_error: judgement.objective_error,
            distance: judgement.distance,
            ranks: judgement.ranks.map(|ranks| ranks.map(|rank| rank as u64)),
            tail_ratio: judgement.tail_ratio,
            restored_feasibility: judgement.restored_feasibility,
            restored_objective_error: judgement.restored_objective_error,
            raw_feasibility: judgement.raw_feasibility,
            raw_objective: judgement.raw_objective,
            lower_bound: judgement.lower_bound,
            ..blank
        },
        message,
    }
}

fn identity(plan: &Plan<'_>, spec: &TrialSpec, instance: &Instance) -> Identity {
    let entrant = &plan.entrants[spec.entrant];
    let record = &instance.record;
    Identity {
        trial: spec.id.clone(),
        instance: record.instance.clone(),
        family: record.family.clone(),
        parameters: record.parameters.clone(),
        order: record.order,
        constraints: record.constraints,
        target_rank: record.target_rank,
        method: entrant.label.clone(),
        options: entrant.options.to_string(),
        seed: plan.seed,
        repeat: spec.repeat,
    }
}

fn work(effort: &Effort) -> Work {
    Work {
        flops: effort.flops,
        eigendecompositions: effort.eigendecompositions,
        factorisations: effort.factorisations,
        operator_products: effort.operator_products,
        inner_steps: effort.inner_steps,
    }
}
