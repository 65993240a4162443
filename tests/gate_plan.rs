//! The gate on the instances of the quick plan, with a real method made worse on purpose: slowed by
//! 30 % in effort, and giving up on five instances; and the gate's errors as a user meets them.

use std::path::Path;
use std::sync::Arc;
use std::sync::atomic::{AtomicBool, AtomicUsize, Ordering};

use rankassay::budget::Halt;
use rankassay::budget::memory::CountingAllocator;
use rankassay::card::MethodCard;
use rankassay::methods::{self, Method, Trial};
use rankassay::problem::{Answer, Problem};
use rankassay::record::{Record, Verdict};
use rankassay::runner::{
    self, Isolation, Observer, Outcome, Placement, Plan, Retiming, Roster, RunOptions, Selection,
    Target, journal,
};
use rankassay::verdicts::gate::{
    Baseline, Gate, Kind, Outcome as Judged, Passage, RunView, Terms, TimeBasis, gate,
};

#[global_allocator]
static ALLOCATOR: CountingAllocator = CountingAllocator;

const METHOD: &str = "factored-alm";

/// How the method is made worse.
enum Harm {
    None,
    /// A third of the work is done for nothing, and counted.
    Slower,
    /// The first five solves give up.
    Forgetful(AtomicUsize),
}

struct Harmed {
    harm: Harm,
}

impl Harmed {
    fn inner() -> &'static dyn Method {
        *methods::registry().iter().find(|method| method.card().id == METHOD).unwrap()
    }
}

impl Method for Harmed {
    fn card(&self) -> &'static MethodCard {
        Harmed::inner().card()
    }

    fn solve(&self, problem: &Problem, trial: &mut Trial) -> Result<Answer, Halt> {
        if let Harm::Forgetful(left) = &self.harm
            && left
                .fetch_update(Ordering::Relaxed, Ordering::Relaxed, |left| left.checked_sub(1))
                .is_ok()
        {
            return Err(Halt::Failed("gave up".to_owned()));
        }
        let answer = Harmed::inner().solve(problem, trial)?;
        if matches!(self.harm, Harm::Slower) {
            let flops = &mut trial.meter.effort.flops;
            *flops += *flops * 3 / 10;
        }
        Ok(answer)
    }
}

struct Silent;

impl Observer for Silent {
    fn begin(&self, _pending: usize, _recorded: usize) {}
    fn notice(&self, _text: &str) {}
    fn finished(&self, _record: &Record) {}
}

/// Runs the families of the quick plan with the one method.
fn run(harm: Harm, into: &Path) -> Outcome {
    let path = concat!(env!("CARGO_MANIFEST_DIR"), "/instances/plans/quick.toml");
    let text = std::fs::read_to_string(path).unwrap();
    let families = text.split("[[method]]").next().unwrap();
    let text = format!("{families}[[method]]\nname = \"{METHOD}\"\n");
    let harmed = Harmed { harm };
    let methods: [&dyn Method; 1] = [&harmed];
    let roster = Roster { families: rankassay::families::registry(), methods: &methods };
    let plan = Plan::parse(&text, "quick.toml", Path::new(""), roster).unwrap();
    let options = RunOptions {
        target: Target::New(into.to_owned()),
        jobs: Some(1),
        selection: Selection::default(),
        isolation: Isolation::None,
        placement: Placement::Free,
        retiming: Retiming::None,
        interrupt: Arc::new(AtomicBool::new(false)),
    };
    runner::run(&plan, &options, &Silent).unwrap()
}

fn view<'a>(outcome: &'a Outcome, records: &'a [Record], calibration_s: f64) -> RunView<'a> {
    RunView {
        title: &outcome.header.title,
        plan_digest: &outcome.header.plan_digest,
        version: "test",
        tolerance: outcome.header.tolerance,
        wall_limit_s: outcome.header.wall_limit_s,
        methods: &outcome.header.methods,
        records,
        instances: &outcome.instances,
        calibration_s: Some(calibration_s),
    }
}

fn outcome_of(gate: &Gate, kind: Kind) -> Judged {
    gate.methods[0].metrics.iter().find(|metric| metric.kind == kind).unwrap().outcome
}

#[test]
fn a_slower_and_a_forgetful_method_are_caught_and_a_slower_machine_is_not() {
    let folder = tempfile::tempdir().unwrap();
    let place = |name: &str| folder.path().join(name);
    let good = run(Harm::None, &place("good"));
    assert!(good.records.len() >= 40, "{}", good.records.len());
    Baseline::write(&place("baseline"), &view(&good, &good.records, 0.02)).unwrap();
    let baseline = Baseline::read(&place("baseline")).unwrap();
    let judge = |outcome: &Outcome| {
        gate(&view(outcome, &outcome.records, 0.02), &baseline, &Terms::default()).unwrap()
    };

    let again = judge(&run(Harm::None, &place("again")));
    assert_eq!(again.passage, Passage::Passes);
    assert_eq!((again.tally().regressed, again.tally().improved), (0, 0));

    let slower = judge(&run(Harm::Slower, &place("slower")));
    assert_eq!(slower.passage, Passage::Fails);
    assert_eq!(outcome_of(&slower, Kind::Effort), Judged::Regressed);
    assert_eq!(outcome_of(&slower, Kind::Solved), Judged::Holds);
    assert_eq!(slower.tally().regressed, 1);

    let forgetful = judge(&run(Harm::Forgetful(AtomicUsize::new(5)), &place("forgetful")));
    assert_eq!(forgetful.passage, Passage::Fails);
    assert_eq!(outcome_of(&forgetful, Kind::Solved), Judged::Regressed);
    assert_eq!(outcome_of(&forgetful, Kind::Effort), Judged::Holds);
    let lost = &forgetful.methods[0].worse;
    assert_eq!(lost.iter().filter(|change| change.run == Verdict::Failed).count(), 5);

    // A machine three times slower, alike in its calibration; then one that only claims to be as fast.
    let slow: Vec<Record> = good
        .records
        .iter()
        .map(|record| Record {
            cpu_s: record.cpu_s.map(|seconds| 3.0 * seconds),
            wall_s: record.wall_s.map(|seconds| 3.0 * seconds),
            ..record.clone()
        })
        .collect();
    let timed = Terms { time: TimeBasis::Calibrated, ..Terms::default() };
    let unasked = gate(&view(&good, &slow, 0.06), &baseline, &Terms::default()).unwrap();
    assert_eq!(unasked.passage, Passage::Passes);
    let calibrated = gate(&view(&good, &slow, 0.06), &baseline, &timed).unwrap();
    assert_eq!(calibrated.passage, Passage::Passes);
    let truly = gate(&view(&good, &slow, 0.02), &baseline, &timed).unwrap();
    assert_eq!(truly.passage, Passage::Fails);
}

fn program(folder: &Path, arguments: &[&str]) -> (Option<i32>, String, String) {
    let output = assert_cmd::Command::cargo_bin("rankassay")
        .unwrap()
        .current_dir(folder)
        .args(arguments)
        .output()
        .unwrap();
    let text = |bytes: Vec<u8>| String::from_utf8(bytes).unwrap();
    (output.status.code(), text(output.stdout), text(output.stderr))
}

/// Two methods on eight small instances.
const SMALL: &str = "seed = 2\n[[family]]\nname = \"tight-unique\"\norder = 10\ncount = 8\n\
    [[method]]\nname = \"relax-ipm\"\n[[method]]\nname = \"factored-alm\"\n";

#[test]
fn baselines_are_made_held_and_refused_through_the_program() {
    let folder = tempfile::tempdir().unwrap();
    let here = folder.path();
    std::fs::write(here.join("small.toml"), SMALL).unwrap();
    assert_eq!(program(here, &["run", "small.toml", "--into", "run", "--quiet"]).0, Some(0));

    let (code, _, err) = program(here, &["gate", "run", "--baseline", "base"]);
    assert_eq!(code, Some(2));
    assert!(err.contains("there is no baseline") && err.contains("--accept"), "{err}");
    assert_eq!(program(here, &["gate", "run", "--baseline", "base", "--accept"]).0, Some(0));
    let (code, out, err) = program(
        here,
        &[
            "gate",
            "run",
            "--baseline",
            "base",
            "--with-time",
            "--markdown",
            "ci/gate.md",
            "--junit",
            "ci/gate.xml",
        ],
    );
    assert_eq!(code, Some(0), "{out}{err}");
    assert!(std::fs::read_to_string(here.join("ci/gate.md")).unwrap().contains("| factored-alm |"));
    assert!(std::fs::read_to_string(here.join("ci/gate.xml")).unwrap().contains("<testsuites"));
    let (_, json, _) = program(here, &["gate", "run", "--baseline", "base", "--json"]);
    let value: serde_json::Value = serde_json::from_str(&json).unwrap();
    assert_eq!(value["passage"], "passes");

    // A run of a part of the plan misses trials, and cannot become a baseline.
    program(here, &["run", "small.toml", "--into", "part", "--only", "*relax-ipm", "--quiet"]);
    let (code, out, _) = program(here, &["gate", "part", "--baseline", "base"]);
    assert_eq!(code, Some(1), "{out}");
    assert!(out.contains("missing"), "{out}");
    let (code, _, err) = program(here, &["gate", "part", "--baseline", "base", "--accept"]);
    assert_eq!(code, Some(2));
    assert!(err.contains("8 of 16 trials"), "{err}");

    let trials = here.join("base/trials.csv");
    let whole = std::fs::read_to_string(&trials).unwrap();
    std::fs::write(&trials, &whole[..whole.len() / 2]).unwrap();
    let (code, _, err) = program(here, &["gate", "run", "--baseline", "base"]);
    assert_eq!(code, Some(2));
    assert!(err.contains("trials.csv"), "{err}");
    std::fs::write(&trials, &whole).unwrap();
    let head = here.join("base/baseline.json");
    let text = std::fs::read_to_string(&head).unwrap();
    let schema = format!("\"schema\": {}", rankassay::record::SCHEMA);
    assert!(text.contains(&schema));
    std::fs::write(&head, text.replace(&schema, "\"schema\": 1")).unwrap();
    let (code, _, err) = program(here, &["gate", "run", "--baseline", "base"]);
    assert_eq!(code, Some(2));
    assert!(err.contains('1') && err.contains("--accept"), "{err}");
    assert_eq!(journal::read(&here.join("run")).unwrap().records.len(), 16);
}
