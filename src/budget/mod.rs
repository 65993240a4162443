//! What a running method may see of its trial: the clock, the limits, the effort meter and the
//! trace sink. The clock is read here and in the runner only.

pub mod memory;
mod trace;

pub use trace::TracePoint;

use std::sync::Arc;
use std::sync::atomic::{AtomicBool, Ordering};
use std::time::{Duration, Instant};

/// Limits of one trial.
#[derive(Clone, Debug)]
pub struct Budget {
    /// Wall time.
    pub wall: Duration,
    /// Memory taken beyond the start of the trial, in bytes.
    pub memory: Option<u64>,
}

/// Machine-independent work counts of a trial and the flops they stand for.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub struct Effort {
    /// Floating-point operations, by the operation counts in `linalg::flops`.
    pub flops: u64,
    /// Symmetric eigendecompositions of a block (a Lanczos run counts its products instead).
    pub eigendecompositions: u64,
    /// Cholesky (or similar) factorisations.
    pub factorisations: u64,
    /// Applications of the constraint operator, its adjoint or the slack to a point or factor.
    pub operator_products: u64,
    /// Inner steps: Newton steps, quasi-Newton steps, projections, as the method's card says.
    pub inner_steps: u64,
}

/// Why a method ends without an answer.
#[derive(Clone, Debug, PartialEq, Eq, thiserror::Error)]
pub enum Halt {
    /// The wall-time limit was reached before there was a point to return.
    #[error("the wall-time limit was reached")]
    TimeLimit,
    /// The memory limit was reached before there was a point to return.
    #[error("the memory limit was reached")]
    MemoryLimit,
    /// The user interrupted the run.
    #[error("interrupted")]
    Interrupted,
    /// The method does not support this problem.
    #[error("{0}")]
    Refused(String),
    /// The method gave up.
    #[error("{0}")]
    Failed(String),
    /// The method died without an answer (another program; a built-in method panics instead).
    #[error("{0}")]
    Crashed(String),
    /// The method left something that is no answer (another program).
    #[error("{0}")]
    Malformed(String),
}

/// Measures wall time from its start.
#[derive(Clone, Copy, Debug)]
pub struct Stopwatch(Instant);

impl Stopwatch {
    /// Starts.
    pub fn start() -> Self {
        Stopwatch(Instant::now())
    }

    /// Returns the wall time since the start.
    pub fn elapsed(&self) -> Duration {
        self.0.elapsed()
    }
}

/// What the system accounts to another program that did the work of a trial.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Charge {
    /// Wall time from its start to its end.
    pub wall: Duration,
    /// Processor time, where the system tells it.
    pub processor: Option<Duration>,
    /// Most memory, in bytes, where the system tells it.
    pub peak_bytes: Option<u64>,
}

/// Whether the effort of a trial is known.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Counting {
    /// It was counted.
    Counted,
    /// It was not: the zeros in the meter mean nothing.
    Missing,
}

/// Clock, limits, effort and trace of one running trial.
#[derive(Debug)]
pub struct Meter {
    started: Instant,
    budget: Budget,
    interrupt: Arc<AtomicBool>,
    memory_at_start: i64,
    /// Work counts; engines add to them.
    pub effort: Effort,
    trace: Option<trace::Trace>,
    charge: Option<Charge>,
    counting: Counting,
}

/// Whether a trial keeps its convergence trace.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Tracing {
    /// Keep it.
    On,
    /// Drop it.
    Off,
}

impl Meter {
    /// Starts the clock.
    pub fn start(budget: Budget, interrupt: Arc<AtomicBool>, tracing: Tracing) -> Self {
        Meter {
            started: Instant::now(),
            budget,
            interrupt,
            memory_at_start: memory::begin(),
            effort: Effort::default(),
            trace: (tracing == Tracing::On).then(trace::Trace::new),
            charge: None,
            counting: Counting::Counted,
        }
    }

    /// Starts a meter without limits, for tests and direct use of the engines.
    pub fn unlimited() -> Self {
        let budget = Budget { wall: Duration::from_secs(u64::MAX / 4), memory: None };
        Meter::start(budget, Arc::new(AtomicBool::new(false)), Tracing::Off)
    }

    /// Returns an error when a limit is reached or the run is interrupted. Methods call it at least
    /// once an iteration.
    ///
    /// # Errors
    /// `TimeLimit`, `MemoryLimit` or `Interrupted`.
    pub fn check(&self) -> Result<(), Halt> {
        if self.interrupt.load(Ordering::Relaxed) {
            return Err(Halt::Interrupted);
        }
        if self.started.elapsed() > self.budget.wall {
            return Err(Halt::TimeLimit);
        }
        if let Some(limit) = self.budget.memory
            && self.peak_bytes().is_some_and(|peak| peak > limit)
        {
            return Err(Halt::MemoryLimit);
        }
        Ok(())
    }

    /// Returns an error when `bytes` more would pass the memory limit. Methods call it before they
    /// take a large array.
    ///
    /// # Errors
    /// `MemoryLimit`.
    pub fn check_room(&self, bytes: u64) -> Result<(), Halt> {
        match self.budget.memory {
            Some(limit) if bytes > limit => Err(Halt::MemoryLimit),
            _ => Ok(()),
        }
    }

    /// Returns the limits of the trial.
    pub fn budget(&self) -> &Budget {
        &self.budget
    }

    /// Puts the cost of another program in the place of what this thread took.
    pub fn charge(&mut self, charge: Charge) {
        self.charge = Some(charge);
    }

    /// Returns the cost of another program, if one did the work.
    pub fn charged(&self) -> Option<Charge> {
        self.charge
    }

    /// Says whether the effort is known.
    pub fn set_counting(&mut self, counting: Counting) {
        self.counting = counting;
    }

    /// Returns whether the effort is known.
    pub fn counting(&self) -> Counting {
        self.counting
    }

    /// Returns the wall time since the start.
    pub fn elapsed(&self) -> Duration {
        self.started.elapsed()
    }

    /// Returns the most memory this thread held beyond the start of the trial, in bytes, or none
    /// when the counting allocator is not installed.
    pub fn peak_bytes(&self) -> Option<u64> {
        memory::peak_since(self.memory_at_start)
    }

    /// Records a trace point, when traces are kept.
    pub fn trace(&mut self, mut point: TracePoint) {
        point.flops = self.effort.flops;
        if let Some(trace) = &mut self.trace {
            trace.push(point);
        }
    }

    /// Takes the trace out: at most about a thousand points, evenly thinned, the last always among them.
    pub fn take_trace(&mut self) -> Vec<TracePoint> {
        self.trace.take().map(trace::Trace::into_points).unwrap_or_default()
    }
}
