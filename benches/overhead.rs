//! Runs a method that does nothing, each trial in a process of its own, and prints what a trial costs beyond
//! its method and how the memory of the coordinating process moves as trials go by.
//!
//! The number of trials can be given: `cargo bench --bench overhead -- 2000`. This file is its own worker.

#![allow(clippy::print_stdout, reason = "a benchmark prints what it measured")]

use std::collections::BTreeMap;
use std::io::Read;
use std::path::Path;
use std::sync::Arc;
use std::sync::Mutex;
use std::sync::atomic::{AtomicBool, AtomicUsize, Ordering};
use std::time::Instant;

use rankassay::budget::Halt;
use rankassay::budget::memory::CountingAllocator;
use rankassay::card::{MethodCard, MethodClass};
use rankassay::families;
use rankassay::methods::{Method, Trial};
use rankassay::problem::{Answer, BlockPoint, Factor, Point, Problem, StopReason};
use rankassay::record::Record;
use rankassay::runner::{
    self, Isolation, Observer, Placement, Plan, Retiming, Roster, RunOptions, Selection, Target,
    worker,
};

/// As in the program itself.
#[global_allocator]
static ALLOCATOR: CountingAllocator = CountingAllocator;

/// Repeats of each instance.
const REPEATS: usize = 10;

struct Nothing;

static CARD: MethodCard = MethodCard {
    id: "nothing",
    title: "Does nothing",
    class: MethodClass::Factored,
    reference: "own",
    needs: "",
    cost: "",
    guarantees: "",
    failures: "",
    options: &[],
};

impl Method for Nothing {
    fn card(&self) -> &'static MethodCard {
        &CARD
    }

    fn solve(&self, problem: &Problem, _trial: &mut Trial) -> Result<Answer, Halt> {
        let blocks = problem.blocks().iter();
        Ok(Answer {
            point: Point {
                blocks: blocks
                    .map(|block| BlockPoint::Factor(Factor::zeros(block.order, 1)))
                    .collect(),
                orthant: vec![0.0; problem.orthant()],
            },
            multipliers: None,
            stop: StopReason::Converged,
            note: String::new(),
        })
    }
}

/// Reads a figure of this process in KiB, such as `VmRSS`.
fn kibibytes(name: &str) -> Option<u64> {
    let status = std::fs::read_to_string("/proc/self/status").ok()?;
    let line = status.lines().find_map(|line| line.strip_prefix(name)?.strip_prefix(':'))?;
    line.split_whitespace().next()?.parse().ok()
}

/// Reads the memory every so many trials.
struct Sampler {
    every: usize,
    done: AtomicUsize,
    begun: Mutex<Option<Instant>>,
    samples: Mutex<BTreeMap<usize, Option<u64>>>,
}

impl Observer for Sampler {
    fn begin(&self, _pending: usize, _recorded: usize) {
        *self.begun.lock().unwrap() = Some(Instant::now());
    }
    fn notice(&self, _text: &str) {}
    fn finished(&self, _record: &Record) {
        let done = self.done.fetch_add(1, Ordering::Relaxed) + 1;
        if done.is_multiple_of(self.every) {
            self.samples.lock().unwrap().insert(done, kibibytes("VmRSS"));
        }
    }
}

fn measure(isolation: Isolation, name: &str, trials: usize, jobs: usize) {
    let methods: [&dyn Method; 1] = [&Nothing];
    let roster = Roster { families: families::registry(), methods: &methods };
    let text = format!(
        "seed = 1\nrepeats = {REPEATS}\n[[family]]\nname = \"balanced-graph\"\norder = 12\ncount = {}\n\
         [[method]]\nname = \"nothing\"\n",
        trials / REPEATS
    );
    let plan = Plan::parse(&text, "plan.toml", Path::new(""), roster).unwrap();
    let folder = tempfile::tempdir().unwrap();
    let options = RunOptions {
        target: Target::New(folder.path().join("run")),
        jobs: Some(jobs),
        selection: Selection::default(),
        isolation,
        placement: Placement::Free,
        retiming: Retiming::None,
        interrupt: Arc::new(AtomicBool::new(false)),
    };
    let sampler = Sampler {
        every: (trials / 10).max(1),
        done: AtomicUsize::new(0),
        begun: Mutex::new(None),
        samples: Mutex::new(BTreeMap::new()),
    };
    let outcome = runner::run(&plan, &options, &sampler).unwrap();
    let wall = sampler.begun.lock().unwrap().unwrap().elapsed().as_secs_f64();
    let own: f64 = outcome.records.iter().filter_map(|record| record.wall_s).sum();
    let each = 1e3 * (wall * jobs as f64 - own) / outcome.records.len() as f64;
    println!("{name}, {} trials, {jobs} at a time", outcome.records.len());
    println!("  wall time {wall:.2} s; a trial costs {each:.2} ms beyond its method");
    let samples = sampler.samples.lock().unwrap();
    let known: Vec<(usize, u64)> =
        samples.iter().filter_map(|(at, size)| Some((*at, (*size)?))).collect();
    for (at, size) in &known {
        println!("  memory after {at} trials: {size} KiB");
    }
    if let (Some((from, first)), Some((to, last))) = (known.first(), known.last()) {
        let growth = 1024.0 * (*last as f64 - *first as f64) / (to - from).max(1) as f64;
        println!("  growth between the first and the last of these: {growth:.1} bytes a trial");
    }
}

fn main() {
    if std::env::args().nth(1).as_deref() == Some(worker::COMMAND) {
        let mut task = String::new();
        std::io::stdin().read_to_string(&mut task).unwrap();
        let methods: [&dyn Method; 1] = [&Nothing];
        let roster = Roster { families: families::registry(), methods: &methods };
        worker::serve(&task, &mut std::io::stdout(), roster).unwrap();
        return;
    }
    let given = std::env::args().skip(1).find_map(|word| word.parse().ok());
    let trials: usize = given.unwrap_or(10_000);
    let here = std::env::current_exe().unwrap();
    for jobs in [1, 2] {
        measure(Isolation::Processes(here.clone()), "each trial in a process", trials, jobs);
    }
    measure(Isolation::None, "all in one process", trials, 1);
}
