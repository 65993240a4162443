//! Runs from outside: scripted methods inside the library, the built-in ones through the program.

use std::path::{Path, PathBuf};
use std::process::Output;
use std::sync::atomic::{AtomicBool, AtomicUsize, Ordering};
use std::sync::{Arc, Mutex};
use std::time::{Duration, Instant};

use rankassay::budget::Halt;
use rankassay::budget::memory::CountingAllocator;
use rankassay::card::{FamilyCard, MethodCard, MethodClass, Settings};
use rankassay::families::{self, Family, PlantError};
use rankassay::methods::{Method, Trial};
use rankassay::problem::certificate::Planted;
use rankassay::problem::{Answer, BlockPoint, Factor, Point, Problem, StopReason};
use rankassay::record::{Record, Timing, Verdict};
use rankassay::runner::{
    self, Ending, Isolation, Observer, Outcome, Pattern, Placement, Plan, Retiming, Roster,
    RunError, RunOptions, Selection, Target, journal,
};
use rankassay::seed::Stream;

/// Memory limits are tested, so memory is counted.
#[global_allocator]
static ALLOCATOR: CountingAllocator = CountingAllocator;

/// Minimise 2 X_12 with X_11 = X_22 = 1: the optimum is -2 at (1, -1)(1, -1)'. The format's matrix
/// number 0 is -C.
const PAIR: &str = "2\n1\n2\n1 1\n0 1 1 2 -1\n1 1 1 1 1\n2 1 2 2 1\n";

type Play = fn(&Problem, &mut Trial) -> Result<Answer, Halt>;

struct Scripted {
    card: &'static MethodCard,
    play: Play,
}

impl Method for Scripted {
    fn card(&self) -> &'static MethodCard {
        self.card
    }

    fn solve(&self, problem: &Problem, trial: &mut Trial) -> Result<Answer, Halt> {
        (self.play)(problem, trial)
    }
}

const BLANK: MethodCard = MethodCard {
    id: "blank",
    title: "Scripted",
    class: MethodClass::Factored,
    reference: "own",
    needs: "",
    cost: "",
    guarantees: "",
    failures: "",
    options: &[],
};

macro_rules! scripted {
    ($id:literal, $play:expr) => {{
        static CARD: MethodCard = MethodCard { id: $id, ..BLANK };
        Scripted { card: &CARD, play: $play }
    }};
}

fn answer(order: usize, columns: &[Vec<f64>], stop: StopReason) -> Answer {
    let block = BlockPoint::Factor(Factor::from_columns(order, columns));
    Answer {
        point: Point { blocks: vec![block], orthant: vec![] },
        multipliers: None,
        stop,
        note: String::new(),
    }
}

fn good(stop: StopReason) -> Answer {
    answer(2, &[vec![1.0, -1.0]], stop)
}

fn wait_for_the_limit(trial: &Trial) -> Halt {
    loop {
        if let Err(halt) = trial.meter.check() {
            return halt;
        }
        std::thread::sleep(Duration::from_millis(2));
    }
}

/// Every scripted method and the verdict it must get on [`PAIR`].
fn cast() -> Vec<(Scripted, Verdict)> {
    vec![
        (scripted!("good", |_, _| Ok(good(StopReason::Converged))), Verdict::Solved),
        (
            scripted!("lazy", |_, _| Ok(answer(2, &[vec![1.0, 1.0]], StopReason::Converged))),
            Verdict::Suboptimal,
        ),
        (
            scripted!("panics", |problem, _| {
                assert!(problem.blocks().is_empty(), "a scripted defect");
                Ok(good(StopReason::Converged))
            }),
            Verdict::Crashed,
        ),
        (
            scripted!("not-a-number", |_, _| Ok(answer(
                2,
                &[vec![1.0, f64::NAN]],
                StopReason::Converged
            ))),
            Verdict::Malformed,
        ),
        (
            scripted!("wrong-shape", |_, _| Ok(answer(
                3,
                &[vec![1.0, -1.0, 0.0]],
                StopReason::Converged
            ))),
            Verdict::Malformed,
        ),
        (
            scripted!("no-blocks", |_, _| {
                let point = Point { blocks: vec![], orthant: vec![] };
                let (multipliers, note) = (None, String::new());
                Ok(Answer { point, multipliers, stop: StopReason::Converged, note })
            }),
            Verdict::Malformed,
        ),
        (scripted!("slow", |_, trial| Err(wait_for_the_limit(trial))), Verdict::TimeLimit),
        (
            scripted!("slow-lazy", |_, trial| {
                wait_for_the_limit(trial);
                Ok(answer(2, &[vec![1.0, 1.0]], StopReason::TimeLimit))
            }),
            Verdict::TimeLimit,
        ),
        (
            scripted!("slow-good", |_, trial| {
                wait_for_the_limit(trial);
                Ok(good(StopReason::TimeLimit))
            }),
            Verdict::Solved,
        ),
        (
            scripted!("deaf", |_, _| {
                std::thread::sleep(Duration::from_millis(2600));
                Ok(good(StopReason::Converged))
            }),
            Verdict::TimeLimit,
        ),
        (
            scripted!("greedy", |_, trial| {
                let hoard = vec![1u8; 8 << 20];
                std::hint::black_box(&hoard);
                trial.meter.check()?;
                Ok(good(StopReason::Converged))
            }),
            Verdict::MemoryLimit,
        ),
        (
            scripted!("greedy-deaf", |_, _| {
                let hoard = vec![1u8; 8 << 20];
                std::hint::black_box(&hoard);
                Ok(good(StopReason::Converged))
            }),
            Verdict::MemoryLimit,
        ),
        (scripted!("refuses", |_, _| Err(Halt::Refused("no pairs".to_owned()))), Verdict::Refused),
        (scripted!("fails", |_, _| Err(Halt::Failed("a zero pivot".to_owned()))), Verdict::Failed),
        (
            scripted!("claims-infeasible", |_, _| Ok(answer(
                2,
                &[vec![0.0, 0.0]],
                StopReason::PrimalInfeasible
            ))),
            Verdict::Failed,
        ),
    ]
}

/// Draws from its stream, so that its answer depends on the seed and on nothing else.
const RANDOM: Play = |problem, trial| {
    trial.meter.effort.inner_steps = trial.stream.below(1000);
    let order = problem.blocks()[0].order;
    let column = (0..order).map(|_| trial.stream.uniform()).collect();
    Ok(answer(order, &[column], StopReason::IterationLimit))
};

#[derive(Default)]
struct Silent {
    notices: Mutex<Vec<String>>,
}

impl Observer for Silent {
    fn begin(&self, _pending: usize, _recorded: usize) {}
    fn notice(&self, text: &str) {
        self.notices.lock().unwrap().push(text.to_owned());
    }
    fn finished(&self, _record: &Record) {}
}

fn options(target: Target, jobs: usize) -> RunOptions {
    RunOptions {
        target,
        jobs: Some(jobs),
        selection: Selection::default(),
        isolation: Isolation::None,
        placement: Placement::Free,
        retiming: Retiming::None,
        interrupt: Arc::new(AtomicBool::new(false)),
    }
}

/// A plan that imports [`PAIR`] and takes every method of `methods`.
fn pair_plan<'a>(folder: &Path, methods: &'a [&'a dyn Method], extra: &str) -> Plan<'a> {
    std::fs::write(folder.join("pair.dat-s"), PAIR).unwrap();
    let mut text = format!(
        "seed = 5\n{extra}\n[budget]\nwall = \"2s\"\nmemory = \"2 MiB\"\n[[import]]\npath = \"pair.dat-s\"\n\
         rank = 1\noptimum = {{ value = -2, digits = 9, source = \"by hand\" }}\n"
    );
    for method in methods {
        text += &format!("[[method]]\nname = \"{}\"\n", method.card().id);
    }
    Plan::parse(&text, "pair.toml", folder, Roster { families: families::registry(), methods })
        .unwrap()
}

fn run(plan: &Plan<'_>, options: &RunOptions) -> Outcome {
    runner::run(plan, options, &Silent::default()).unwrap()
}

fn by_method<'a>(outcome: &'a Outcome, method: &str) -> &'a Record {
    outcome.records.iter().find(|record| record.method == method).unwrap()
}

#[test]
fn every_way_a_method_can_end_has_its_verdict() {
    let folder = tempfile::tempdir().unwrap();
    let cast = cast();
    let methods: Vec<&dyn Method> = cast.iter().map(|(method, _)| method as &dyn Method).collect();
    let plan = pair_plan(folder.path(), &methods, "");
    let outcome = run(&plan, &options(Target::New(folder.path().join("out")), 6));
    assert_eq!(outcome.ending, Ending::Complete);
    for (method, verdict) in &cast {
        let record = by_method(&outcome, method.card.id);
        assert_eq!(record.verdict, *verdict, "{record:?}");
        assert_eq!(record.optimum, Some(-2.0));
    }
    let record = by_method(&outcome, "panics");
    assert!(record.message.contains("panicked: a scripted defect (runs.rs:"), "{}", record.message);
    assert!(record.wall_s.is_some() && record.objective.is_none());
    assert!(by_method(&outcome, "fails").message.contains("a zero pivot"));
    assert!(by_method(&outcome, "deaf").message.contains("after the wall-time limit"));
    assert!(by_method(&outcome, "greedy-deaf").message.contains("more than the memory limit"));
    let record = by_method(&outcome, "claims-infeasible");
    assert_eq!(record.stop_reason, "primal-infeasible");
    assert!(record.message.contains("primal infeasible"), "{}", record.message);
    let good = by_method(&outcome, "good");
    assert_eq!((good.objective, good.rank_at_1e6, good.target_rank), (Some(-2.0), Some(1), 1));
    assert!(good.peak_bytes.is_some_and(|bytes| bytes < 1 << 20), "{:?}", good.peak_bytes);
    let text = std::fs::read_to_string(folder.path().join("out/trials.csv")).unwrap();
    for row in csv::Reader::from_reader(text.as_bytes()).records() {
        let not_finite = |cell: &str| cell.parse::<f64>().is_ok_and(|value| !value.is_finite());
        assert!(!row.unwrap().iter().any(not_finite), "{text}");
    }
    assert_eq!(text.lines().count(), cast.len() + 1);
}

#[test]
fn an_answer_of_high_rank_earns_nothing_its_user_could_not_use() {
    let folder = tempfile::tempdir().unwrap();
    let identity = scripted!("identity", |_, _| {
        Ok(answer(2, &[vec![1.0, 0.0], vec![0.0, 1.0]], StopReason::Converged))
    });
    let methods: [&dyn Method; 1] = [&identity];
    let outcome = run(
        &pair_plan(folder.path(), &methods, ""),
        &options(Target::New(folder.path().join("out")), 1),
    );
    let record = &outcome.records[0];
    assert_eq!((record.rank_at_1e6, record.target_rank), (Some(2), 1));
    assert_ne!(record.verdict, Verdict::Solved);
    assert!(
        record.raw_feasibility.unwrap() < 1e-12 && record.feasibility.unwrap() > 0.1,
        "{record:?}"
    );
}

/// Families and repeats with a method that draws from its stream.
fn random_plan<'a>(methods: &'a [&'a dyn Method], seed: u64) -> Plan<'a> {
    let text = format!(
        "seed = {seed}\nrepeats = 2\n[[family]]\nname = \"tight-unique\"\norder = [6, 9]\nrank = [1, 2]\ncount = 3\n\
         [[family]]\nname = \"balanced-graph\"\norder = 12\ncount = 4\n[[method]]\nname = \"random\"\n\
         [[method]]\nname = \"random\"\nlabel = \"twin\"\n"
    );
    let roster = Roster { families: families::registry(), methods };
    Plan::parse(&text, "random.toml", Path::new(""), roster).unwrap()
}

fn unmeasured(records: &[Record]) -> Vec<Record> {
    records.iter().map(Record::without_measurements).collect()
}

#[test]
fn runs_agree_for_any_number_of_jobs_and_differ_for_another_seed() {
    let folder = tempfile::tempdir().unwrap();
    let random = scripted!("random", RANDOM);
    let methods: [&dyn Method; 1] = [&random];
    let plan = random_plan(&methods, 11);
    let outcomes: Vec<Outcome> = [1, 2, 7]
        .iter()
        .map(|&jobs| {
            run(&plan, &options(Target::New(folder.path().join(format!("jobs-{jobs}"))), jobs))
        })
        .collect();
    assert_eq!(outcomes[0].records.len(), (4 * 3 + 4) * 2 * 2);
    for outcome in &outcomes[1..] {
        assert_eq!(unmeasured(&outcome.records), unmeasured(&outcomes[0].records));
        assert_eq!(outcome.instances, outcomes[0].instances);
    }
    let files = |jobs: usize| {
        std::fs::read(folder.path().join(format!("jobs-{jobs}/instances.csv"))).unwrap()
    };
    assert_eq!(files(1), files(7));
    let records = &outcomes[0].records;
    // A label moves nothing, a repeat does.
    let steps = |method: &str, repeat: u64| -> Vec<_> {
        let same =
            records.iter().filter(|record| record.method == method && record.repeat == repeat);
        same.map(|record| record.inner_steps).collect()
    };
    assert_eq!(steps("random", 1), steps("twin", 1));
    assert_ne!(steps("random", 1), steps("random", 2));
    let other =
        run(&random_plan(&methods, 12), &options(Target::New(folder.path().join("other")), 2));
    assert!(other.instances.iter().zip(&outcomes[0].instances).all(|(a, b)| a.digest != b.digest));
    let ids: Vec<_> = records.iter().take(2).map(|record| record.trial.as_str()).collect();
    assert_eq!(
        ids,
        [
            "0001-tight-unique-order=6-rank=1-0-random-1",
            "0002-tight-unique-order=6-rank=1-0-random-2"
        ]
    );
}

#[test]
fn adding_a_method_or_a_family_changes_no_other_record() {
    let folder = tempfile::tempdir().unwrap();
    let random = scripted!("random", RANDOM);
    let methods: [&dyn Method; 1] = [&random];
    let small =
        "seed = 3\n[[family]]\nname = \"tight-unique\"\norder = 8\n[[method]]\nname = \"random\"\n";
    let large = "seed = 3\n[[family]]\nname = \"balanced-graph\"\norder = 9\n[[family]]\nname = \"tight-unique\"\n\
        order = [7, 8]\ncount = 2\n[[method]]\nname = \"random\"\nlabel = \"first\"\n[[method]]\nname = \"random\"\n";
    let roster = Roster { families: families::registry(), methods: &methods };
    let outcome = |text: &str, name: &str| {
        let plan = Plan::parse(text, "plan.toml", Path::new(""), roster).unwrap();
        run(&plan, &options(Target::New(folder.path().join(name)), 1))
    };
    let (small, large) = (outcome(small, "small"), outcome(large, "large"));
    let [alone] = small.records.as_slice() else { panic!("one trial") };
    let same = large
        .records
        .iter()
        .find(|record| record.instance == alone.instance && record.method == "random");
    let expected = Record { trial: same.unwrap().trial.clone(), ..alone.without_measurements() };
    assert_eq!(same.unwrap().without_measurements(), expected);
}

#[test]
fn only_a_selection_runs_and_resuming_adds_the_rest() {
    let folder = tempfile::tempdir().unwrap();
    let random = scripted!("random", RANDOM);
    let methods: [&dyn Method; 1] = [&random];
    let plan = random_plan(&methods, 1);
    let out = folder.path().join("out");
    let selection = Selection { only: Some(Pattern::new("balanced*twin")), ..Selection::default() };
    let first = run(&plan, &RunOptions { selection, ..options(Target::New(out.clone()), 2) });
    assert_eq!(first.records.len(), 4 * 2);
    assert!(
        first
            .records
            .iter()
            .all(|record| record.family == "balanced-graph" && record.method == "twin")
    );
    let nothing = Selection { only: Some(Pattern::new("nowhere")), ..Selection::default() };
    let options_of_none =
        RunOptions { selection: nothing, ..options(Target::Resume(out.clone()), 2) };
    let error = runner::run(&plan, &options_of_none, &Silent::default()).unwrap_err();
    assert!(error.to_string().contains("no trial of the plan is selected"), "{error}");
    let whole = run(&plan, &options(Target::Resume(out), 2));
    let fresh = run(&plan, &options(Target::New(folder.path().join("fresh")), 1));
    assert_eq!(unmeasured(&whole.records), unmeasured(&fresh.records));
    assert_eq!(whole.instances, fresh.instances);
}

#[test]
fn shards_make_up_the_plan() {
    let folder = tempfile::tempdir().unwrap();
    let random = scripted!("random", RANDOM);
    let methods: [&dyn Method; 1] = [&random];
    let plan = random_plan(&methods, 1);
    let mut runs = Vec::new();
    for part in 1..=3 {
        let out = folder.path().join(format!("part-{part}"));
        let selection =
            Selection { shard: Some(format!("{part}/3").parse().unwrap()), ..Selection::default() };
        run(&plan, &RunOptions { selection, ..options(Target::New(out.clone()), 1) });
        runs.push((out.display().to_string(), journal::read(&out).unwrap()));
    }
    runs.reverse();
    let merged = runner::merge(runs.clone()).unwrap();
    let fresh = run(&plan, &options(Target::New(folder.path().join("fresh")), 1));
    assert_eq!(unmeasured(&merged.records), unmeasured(&fresh.records));
    assert_eq!(merged.instances, fresh.instances);
    assert_eq!((merged.copies, merged.disagreements.len(), merged.missing.len()), (0, 0, 0));

    // A part that ran twice: copies that agree but for time collapse.
    let mut twice = runs.clone();
    let mut again = runs[0].clone();
    again.0 = "again".to_owned();
    for record in &mut again.1.records {
        record.wall_s = Some(123.0);
    }
    let copies = again.1.records.len() as u64;
    twice.push(again.clone());
    let collapsed = runner::merge(twice.clone()).unwrap();
    assert_eq!(collapsed.records, merged.records);
    assert_eq!((collapsed.copies, collapsed.disagreements.len()), (copies, 0));

    // A copy that says otherwise is told, and the first one is kept.
    let record = &mut twice.last_mut().unwrap().1.records[0];
    record.objective = record.objective.map(|objective| objective + 1e-9);
    let (trial, column) = (record.trial.clone(), "objective");
    let disagreeing = runner::merge(twice).unwrap();
    assert_eq!(disagreeing.records, merged.records);
    assert_eq!(disagreeing.copies, copies - 1);
    let [found] = disagreeing.disagreements.as_slice() else {
        panic!("{:?}", disagreeing.disagreements)
    };
    assert_eq!((found.kept.as_str(), found.other.as_str()), (runs[0].0.as_str(), "again"));
    assert_eq!(found.columns.len(), 1);
    assert_eq!(found.columns[0][0], column);
    let instance = trial.split_once('-').unwrap().1;
    assert!(instance.starts_with(found.trial.split(' ').next().unwrap()), "{trial}: {found:?}");

    // What no part recorded is missing, by its place in the plan.
    let lost = runs.remove(1);
    let partial = runner::merge(runs).unwrap();
    let [missing] = partial.missing.as_slice() else { panic!("{:?}", partial.missing) };
    assert_eq!(missing.of, fresh.records.len() as u64);
    let ids = runner::trial_ids(&plan);
    let named: Vec<&str> = missing.places.iter().map(|at| ids[*at as usize].as_str()).collect();
    let mut expected: Vec<&str> =
        lost.1.records.iter().map(|record| record.trial.as_str()).collect();
    expected.sort_unstable();
    assert_eq!(named, expected);
}

#[test]
fn methods_of_an_instance_come_in_an_order_drawn_from_the_seed() {
    let folder = tempfile::tempdir().unwrap();
    let random = scripted!("random", RANDOM);
    let methods: [&dyn Method; 1] = [&random];
    let plan = random_plan(&methods, 1);
    let order = |name: &str| -> Vec<String> {
        let out = folder.path().join(name);
        run(&plan, &options(Target::New(out.clone()), 1));
        journal_records(&out).into_iter().map(|record| record.trial).collect()
    };
    let (first, second) = (order("first"), order("second"));
    assert_eq!(first, second);
    let ids = runner::trial_ids(&plan);
    assert_ne!(first, ids, "the order of the plan is not the order of running");
    // Instances stay in plan order, so that each is planted once and dropped soon.
    let each = 4;
    assert_eq!(ids.len() % each, 0);
    let place = |id: &String| ids.iter().position(|other| other == id).unwrap() / each;
    assert!(first.windows(2).all(|pair| place(&pair[0]) <= place(&pair[1])));
    let leaders: std::collections::BTreeSet<usize> = (0..ids.len() / each)
        .map(|at| ids.iter().position(|id| *id == first[each * at]).unwrap() % each)
        .collect();
    assert!(leaders.len() > 1, "the same trial always comes first: {leaders:?}");
}

#[test]
fn solved_trials_are_timed_once_more_alone() {
    static CALLS: AtomicUsize = AtomicUsize::new(0);
    static RUNNING: AtomicUsize = AtomicUsize::new(0);
    static BESIDE: AtomicUsize = AtomicUsize::new(0);
    const SLEEPY: Play = |problem, trial| {
        if RUNNING.fetch_add(1, Ordering::SeqCst) > 0 {
            BESIDE.fetch_add(1, Ordering::SeqCst);
        }
        std::thread::sleep(Duration::from_millis(20));
        RUNNING.fetch_sub(1, Ordering::SeqCst);
        CALLS.fetch_add(1, Ordering::SeqCst);
        let _ = trial;
        Ok(answer(problem.blocks()[0].order, &[vec![1.0, -1.0]], StopReason::Converged))
    };
    let fickle_count: Play = |problem, _| {
        static TURN: AtomicUsize = AtomicUsize::new(0);
        let turn = TURN.fetch_add(1, Ordering::SeqCst);
        let mut given =
            answer(problem.blocks()[0].order, &[vec![1.0, -1.0]], StopReason::Converged);
        given.note = format!("turn {turn}");
        Ok(given)
    };
    let wrong: Play = |problem, _| {
        Ok(answer(problem.blocks()[0].order, &[vec![1.0, 1.0]], StopReason::Converged))
    };
    let sleepy = scripted!("sleepy", SLEEPY);
    let fickle = scripted!("fickle", fickle_count);
    let wrong = scripted!("wrong", wrong);
    let methods: [&dyn Method; 3] = [&sleepy, &fickle, &wrong];
    let folder = tempfile::tempdir().unwrap();
    let plan = pair_plan(folder.path(), &methods, "repeats = 4\n");
    let out = folder.path().join("out");
    let silent = Silent::default();
    let plain = options(Target::New(out.clone()), 2);
    let timed = RunOptions { retiming: Retiming::Solved, ..plain };
    let outcome = runner::run(&plan, &timed, &silent).unwrap();
    let of = |label: &str| -> Vec<&Record> {
        outcome.records.iter().filter(|record| record.method == label).collect()
    };
    assert!(of("sleepy").iter().all(|record| record.timing == Timing::Alone));
    assert!(of("wrong").iter().all(|record| record.timing == Timing::Shared));
    // What does not end as before keeps its first time, and says so.
    assert!(of("fickle").iter().all(|record| record.timing == Timing::Shared));
    let notices = silent.notices.lock().unwrap();
    assert_eq!(
        notices.iter().filter(|text| text.contains("did not end alone as it did")).count(),
        4
    );
    assert_eq!(CALLS.load(Ordering::SeqCst), 8);
    let before = BESIDE.load(Ordering::SeqCst);
    // Only the first four may have had a neighbour.
    assert!(before <= 3, "{before}");
    drop(notices);
    // The journal holds the second times: resuming runs nothing again.
    let again =
        RunOptions { retiming: Retiming::Solved, ..options(Target::Resume(out.clone()), 2) };
    let resumed = run(&plan, &again);
    assert_eq!(CALLS.load(Ordering::SeqCst), 8);
    assert_eq!(
        resumed.records.iter().map(|record| record.timing).collect::<Vec<_>>(),
        outcome.records.iter().map(|record| record.timing).collect::<Vec<_>>()
    );
}

#[test]
#[cfg(target_os = "linux")]
fn pinned_trials_run_on_one_core_each() {
    const WHERE: Play = |problem, _| {
        let status = std::fs::read_to_string("/proc/thread-self/status").unwrap();
        let allowed = status.lines().find_map(|line| line.strip_prefix("Cpus_allowed_list:"));
        let mut given =
            answer(problem.blocks()[0].order, &[vec![1.0, -1.0]], StopReason::Converged);
        given.note = format!("cores {}", allowed.unwrap().trim());
        Ok(given)
    };
    let method = scripted!("where", WHERE);
    let methods: [&dyn Method; 1] = [&method];
    let folder = tempfile::tempdir().unwrap();
    let plan = pair_plan(folder.path(), &methods, "repeats = 6\n");
    let out = folder.path().join("out");
    let pinned =
        RunOptions { placement: Placement::Pinned, ..options(Target::New(out.clone()), 2) };
    let outcome = run(&plan, &pinned);
    for record in &outcome.records {
        let cores = record.message.split("cores ").nth(1).unwrap();
        assert!(cores.parse::<usize>().is_ok(), "one core, not {cores}");
    }
    let manifest = runner::Manifest::read(&out).unwrap();
    let stretch = manifest.stretches.last().unwrap();
    assert_eq!(stretch.placement, Placement::Pinned);
    assert!(stretch.load_before.unwrap() >= 0.0 && stretch.others_busy_cores.unwrap() >= 0.0);
}

/// Runs the random plan whole and returns the folder and its journal's text.
fn recorded(folder: &Path, plan: &Plan<'_>) -> (PathBuf, String) {
    let out = folder.join("out");
    run(plan, &options(Target::New(out.clone()), 2));
    let text = std::fs::read_to_string(out.join(journal::FILE)).unwrap();
    (out, text)
}

#[test]
fn a_torn_tail_is_cut_and_its_trial_runs_again() {
    let folder = tempfile::tempdir().unwrap();
    let random = scripted!("random", RANDOM);
    let methods: [&dyn Method; 1] = [&random];
    let plan = random_plan(&methods, 2);
    let (out, text) = recorded(folder.path(), &plan);
    let fresh = unmeasured(&journal_records(&out));
    let lines = text.lines().count();
    // In the middle of the last line, of a line halfway, of the second and of the first line.
    for kept in [text.len() - 5, text.len() / 2, text.find('\n').unwrap() + 9, 20] {
        std::fs::write(out.join(journal::FILE), &text[..kept]).unwrap();
        let silent = Silent::default();
        let resumed =
            runner::run(&plan, &options(Target::Resume(out.clone()), 2), &silent).unwrap();
        assert_eq!(sorted(unmeasured(&resumed.records)), sorted(fresh.clone()), "cut at {kept}");
        if kept > text.find('\n').unwrap() {
            assert!(silent.notices.lock().unwrap()[0].contains("cut off in the middle"));
        }
        let now = std::fs::read_to_string(out.join(journal::FILE)).unwrap();
        assert_eq!(now.lines().count(), lines);
    }
}

fn journal_records(out: &Path) -> Vec<Record> {
    journal::read(out).unwrap().records
}

fn sorted(mut records: Vec<Record>) -> Vec<Record> {
    records.sort_by(|a, b| a.trial.cmp(&b.trial));
    records
}

#[test]
fn an_altered_journal_and_a_changed_plan_are_refused() {
    let folder = tempfile::tempdir().unwrap();
    let random = scripted!("random", RANDOM);
    let methods: [&dyn Method; 1] = [&random];
    let plan = random_plan(&methods, 2);
    let (out, text) = recorded(folder.path(), &plan);
    let refusal = |text: &str, plan: &Plan<'_>| {
        std::fs::write(out.join(journal::FILE), text).unwrap();
        let error = runner::run(plan, &options(Target::Resume(out.clone()), 2), &Silent::default())
            .unwrap_err();
        assert_eq!(
            std::fs::read_to_string(out.join(journal::FILE)).unwrap(),
            text,
            "the journal was touched"
        );
        error.to_string()
    };
    let altered = text.replacen("\"verdict\":\"", "\"verdict\":\"x", 1);
    assert!(refusal(&altered, &plan).contains("does not agree with its checksum"));
    // A digit of a figure in the last line.
    let at = text.rfind("\"objective\":").unwrap() + "\"objective\":".len() + 3;
    let digit = if &text[at..=at] == "1" { "2" } else { "1" };
    let altered = format!("{}{digit}{}", &text[..at], &text[at + 1..]);
    assert!(
        refusal(&altered, &plan)
            .contains(&format!(":{}: the line does not agree", text.lines().count()))
    );
    let last = text.lines().last().unwrap();
    assert!(refusal(&format!("{text}{last}\n"), &plan).contains("is recorded twice"));
    let head = text.lines().next().unwrap();
    assert!(refusal(&format!("{text}{head}\n"), &plan).contains("the first line, and no other"));
    assert!(refusal(&text, &random_plan(&methods, 3)).contains("the plan has changed"));
}

#[test]
fn an_interrupted_run_keeps_its_records_and_goes_on() {
    /// Interrupts after the fifth trial.
    struct Impatient {
        interrupt: Arc<AtomicBool>,
        seen: Mutex<usize>,
    }
    impl Observer for Impatient {
        fn begin(&self, _pending: usize, _recorded: usize) {}
        fn notice(&self, _text: &str) {}
        fn finished(&self, _record: &Record) {
            let mut seen = self.seen.lock().unwrap();
            *seen += 1;
            if *seen == 5 {
                self.interrupt.store(true, Ordering::Relaxed);
            }
        }
    }
    let folder = tempfile::tempdir().unwrap();
    let random = scripted!("random", RANDOM);
    let methods: [&dyn Method; 1] = [&random];
    let plan = random_plan(&methods, 4);
    let out = folder.path().join("out");
    let options_now = options(Target::New(out.clone()), 1);
    let impatient =
        Impatient { interrupt: Arc::clone(&options_now.interrupt), seen: Mutex::new(0) };
    let first = runner::run(&plan, &options_now, &impatient).unwrap();
    assert_eq!((first.ending, first.records.len()), (Ending::Interrupted, 5));
    let resumed = run(&plan, &options(Target::Resume(out), 2));
    let fresh = run(&plan, &options(Target::New(folder.path().join("fresh")), 1));
    assert_eq!(resumed.ending, Ending::Complete);
    assert_eq!(unmeasured(&resumed.records), unmeasured(&fresh.records));
    assert_eq!(resumed.instances, fresh.instances);
}

/// Plants as the family it wraps but claims an optimum that is too high by one.
struct Liar {
    card: FamilyCard,
}

impl Family for Liar {
    fn card(&self) -> &'static FamilyCard {
        Box::leak(Box::new(self.card))
    }

    fn plant(&self, parameters: &Settings, stream: &mut Stream) -> Result<Planted, PlantError> {
        let mut planted = families::find("balanced-graph").unwrap().plant(parameters, stream)?;
        planted.optimum += 1.0;
        Ok(planted)
    }
}

#[test]
fn an_answer_better_than_a_certified_optimum_stops_the_run() {
    let honest = families::find("balanced-graph").unwrap().card();
    let liar = Liar { card: FamilyCard { id: "liar", ..*honest } };
    let families: [&dyn Family; 2] = [families::find("balanced-graph").unwrap(), &liar];
    let solver = rankassay::methods::find("relax-ipm").unwrap();
    let methods: [&dyn Method; 1] = [solver];
    let text = "seed = 1\n[[family]]\nname = \"balanced-graph\"\norder = 8\n[[family]]\nname = \"liar\"\norder = 8\n\
        [[method]]\nname = \"relax-ipm\"\n";
    let folder = tempfile::tempdir().unwrap();
    let out = folder.path().join("out");
    let roster = Roster { families: &families, methods: &methods };
    let plan = Plan::parse(text, "plan.toml", Path::new(""), roster).unwrap();
    let error =
        runner::run(&plan, &options(Target::New(out.clone()), 1), &Silent::default()).unwrap_err();
    let RunError::Internal { trial, detail } = &error else { panic!("{error}") };
    assert!(trial.starts_with("0002-liar-"), "{trial}");
    assert!(detail.contains("contradicts the certified optimum"), "{detail}");
    assert_eq!(journal_records(&out).len(), 1);
}

fn program(folder: &Path, arguments: &[&str]) -> Output {
    assert_cmd::Command::cargo_bin("rankassay")
        .unwrap()
        .current_dir(folder)
        .args(arguments)
        .output()
        .unwrap()
}

/// Enough work that an interruption falls into its middle on any machine of today.
const LONG: &str = "seed = 9\n[[family]]\nname = \"tight-unique\"\norder = 60\nrank = 2\ncount = 60\n\
    [[family]]\nname = \"balanced-graph\"\norder = [60, 120]\ncount = 20\n[[method]]\nname = \"relax-ipm\"\n";

#[test]
#[cfg(unix)]
fn ctrl_c_keeps_every_record_and_says_how_to_go_on() {
    let folder = tempfile::tempdir().unwrap();
    std::fs::write(folder.path().join("long.toml"), LONG).unwrap();
    let binary = assert_cmd::cargo::cargo_bin("rankassay");
    let child = std::process::Command::new(&binary)
        .current_dir(folder.path())
        .args(["run", "long.toml", "--jobs", "2"])
        .stdout(std::process::Stdio::piped())
        .stderr(std::process::Stdio::piped())
        .spawn()
        .unwrap();
    let journal_file = folder.path().join("runs/long-1").join(journal::FILE);
    let started = Instant::now();
    loop {
        let text = std::fs::read_to_string(&journal_file).unwrap_or_default();
        if text.matches("\"kind\":\"trial\"").count() >= 3 {
            break;
        }
        assert!(started.elapsed() < Duration::from_secs(120), "no trial in two minutes");
        std::thread::sleep(Duration::from_millis(5));
    }
    let sent = std::process::Command::new("kill")
        .args(["-INT", &child.id().to_string()])
        .status()
        .unwrap();
    assert!(sent.success());
    let output = child.wait_with_output().unwrap();
    let told = String::from_utf8_lossy(&output.stderr).into_owned();
    assert_eq!(output.status.code(), Some(130), "{told}");
    let command = told.lines().last().unwrap().trim();
    assert!(command.ends_with(" run long.toml --into runs/long-1 --resume --jobs 2"), "{told}");
    let kept = journal::read(&folder.path().join("runs/long-1")).unwrap().records.len();
    assert!((3..100).contains(&kept), "{kept} records");
    // The command as it was printed.
    let resumed = std::process::Command::new("sh")
        .arg("-c")
        .arg(command)
        .current_dir(folder.path())
        .output()
        .unwrap();
    assert_eq!(resumed.status.code(), Some(0), "{}", String::from_utf8_lossy(&resumed.stderr));
    assert!(
        String::from_utf8_lossy(&resumed.stderr).contains(&format!("{kept} are recorded already"))
    );
    assert_eq!(
        program(folder.path(), &["run", "long.toml", "--jobs", "1", "--quiet"]).status.code(),
        Some(0)
    );
    for name in ["accuracy", "rank", "runtime", "failures", "relaxation"] {
        let read = |run: &str| {
            std::fs::read_to_string(
                folder.path().join(format!("runs/{run}/tables/{name}-stable.csv")),
            )
            .unwrap()
        };
        assert_eq!(read("long-1"), read("long-2"), "{name}");
    }
}

#[test]
fn tabulate_makes_the_tables_of_the_run_again() {
    let folder = tempfile::tempdir().unwrap();
    let plan = "seed = 9\n[[family]]\nname = \"tight-unique\"\norder = 8\ncount = 3\n[[method]]\nname = \"relax-ipm\"\n";
    std::fs::write(folder.path().join("plan.toml"), plan).unwrap();
    let shard = |part: &str, into: &str| {
        let output = program(
            folder.path(),
            &["run", "plan.toml", "--quiet", "--into", into, "--shard", part],
        );
        assert!(output.status.success() || output.status.code() == Some(2), "{output:?}");
        output.status.success()
    };
    assert_eq!(
        program(folder.path(), &["run", "plan.toml", "--into", "whole"]).status.code(),
        Some(0)
    );
    assert!(shard("1/2", "a") && shard("2/2", "b") && shard("2/2", "again"));
    // One part alone is not the plan, and says what it lacks.
    let output = program(folder.path(), &["tabulate", "a", "--require", "complete"]);
    let message = String::from_utf8_lossy(&output.stderr).into_owned();
    assert_eq!(output.status.code(), Some(1), "{message}");
    assert!(message.contains("of the 3 trials of the plan of a are missing: 000"), "{message}");
    // An attempt that was ended before its first line was out holds nothing.
    std::fs::create_dir(folder.path().join("blank")).unwrap();
    let arguments =
        ["tabulate", "--into", "merged", "--require", "complete", "a", "blank", "b", "again"];
    let output = program(folder.path(), &arguments);
    let message = String::from_utf8_lossy(&output.stderr).into_owned();
    assert_eq!(output.status.code(), Some(0), "{message}");
    assert!(message.contains("blank: nothing is recorded there"), "{message}");
    assert!(message.contains("recorded more than once with the same outcome"), "{message}");
    for name in ["accuracy", "rank", "runtime", "failures", "relaxation"] {
        let read = |run: &str| {
            std::fs::read_to_string(folder.path().join(format!("{run}/tables/{name}-stable.csv")))
                .unwrap()
        };
        assert_eq!(read("whole"), read("merged"), "{name}");
    }
    let output = program(folder.path(), &["tabulate", "nowhere"]);
    assert_eq!(output.status.code(), Some(2));
    assert!(String::from_utf8_lossy(&output.stderr).contains("no run was started there"));
}

#[test]
fn what_plant_writes_inspect_reads_and_a_plan_imports() {
    let folder = tempfile::tempdir().unwrap();
    let plant =
        ["plant", "tight-unique", "order=7", "rank=2", "--seed", "5", "--to", "one.assay.json"];
    for _ in 0..2 {
        assert_eq!(program(folder.path(), &plant).status.code(), Some(0));
    }
    let other = ["plant", "tight-unique", "order=8", "--seed", "5", "--to", "one.assay.json"];
    let output = program(folder.path(), &other);
    assert_eq!(output.status.code(), Some(2));
    assert!(String::from_utf8_lossy(&output.stderr).contains("nothing is written over"));
    let output = program(folder.path(), &["inspect", "one.assay.json", "--json"]);
    let facts: serde_json::Value = serde_json::from_slice(&output.stdout).unwrap();
    assert_eq!(
        (facts["order"].as_u64(), facts["certificate"].as_str()),
        (Some(7), Some("dual-pair"))
    );
    let plan = "seed = 5\n[[import]]\npath = \"one.assay.json\"\n[[family]]\nname = \"tight-unique\"\norder = 7\n\
        rank = 2\n[[method]]\nname = \"relax-ipm\"\n";
    std::fs::write(folder.path().join("plan.toml"), plan).unwrap();
    assert_eq!(
        program(folder.path(), &["run", "plan.toml", "--into", "out", "--quiet"]).status.code(),
        Some(0)
    );
    let contents = journal::read(&folder.path().join("out")).unwrap();
    let digest = |family: &str| {
        let instance =
            contents.instances.iter().find(|instance| instance.family == family).unwrap();
        assert_eq!(instance.optimum_known, "certified");
        instance.digest.clone()
    };
    assert_eq!(digest("imported"), digest("tight-unique"));
    assert_eq!(facts["digest"].as_str(), Some(digest("imported").as_str()));
    assert!(contents.records.iter().all(|record| record.verdict == Verdict::Solved));
    // A certificate that was tampered with proves nothing.
    let text = std::fs::read_to_string(folder.path().join("one.assay.json")).unwrap();
    let at = text.find("\"multipliers\"").unwrap();
    let digit = at + text[at..].find(|c: char| c.is_ascii_digit()).unwrap();
    let number = if &text[digit..=digit] == "1" { "2" } else { "1" };
    let altered = format!("{}{number}{}", &text[..digit], &text[digit + 1..]);
    std::fs::write(folder.path().join("two.assay.json"), altered).unwrap();
    let output = program(folder.path(), &["inspect", "two.assay.json"]);
    assert_eq!(output.status.code(), Some(2));
    assert!(String::from_utf8_lossy(&output.stderr).contains("the certificate does not hold"));
}

#[test]
fn a_point_from_a_file_is_refereed() {
    let folder = tempfile::tempdir().unwrap();
    let plant =
        ["plant", "balanced-graph", "order=3", "degree=2", "--seed", "5", "--to", "one.assay.json"];
    assert_eq!(program(folder.path(), &plant).status.code(), Some(0));
    let referee = |signs: &str| {
        let text = format!("{{\"version\": 1, \"blocks\": [{{\"factor\": {signs}}}]}}");
        std::fs::write(folder.path().join("point.json"), text).unwrap();
        program(folder.path(), &["referee", "one.assay.json", "point.json", "--json"])
    };
    // Of the four sign vectors up to a common sign exactly one is planted.
    let mut verdicts = Vec::new();
    for signs in ["[[1],[1],[1]]", "[[1],[1],[-1]]", "[[1],[-1],[1]]", "[[-1],[1],[1]]"] {
        let output = referee(signs);
        assert_eq!(output.status.code(), Some(0), "{}", String::from_utf8_lossy(&output.stderr));
        let judged: serde_json::Value = serde_json::from_slice(&output.stdout).unwrap();
        assert_eq!(
            (judged["rank_at_1e-6"].as_u64(), judged["optimum"].as_f64()),
            (Some(1), Some(0.0))
        );
        verdicts.push(judged["verdict"].as_str().unwrap().to_owned());
    }
    verdicts.sort();
    assert_eq!(verdicts, ["solved", "suboptimal", "suboptimal", "suboptimal"]);
    let output = referee("[[1],[1]]");
    assert_eq!(output.status.code(), Some(2));
    assert!(String::from_utf8_lossy(&output.stderr).contains("point.json:1:"), "{output:?}");
}

#[test]
fn the_roster_lists_what_the_registries_hold() {
    let folder = tempfile::tempdir().unwrap();
    let output = program(folder.path(), &["roster", "--json"]);
    let cards: serde_json::Value = serde_json::from_slice(&output.stdout).unwrap();
    let ids: Vec<&str> =
        cards.as_array().unwrap().iter().map(|card| card["id"].as_str().unwrap()).collect();
    let mut expected: Vec<&str> =
        families::registry().iter().map(|family| family.card().id).collect();
    expected.extend(rankassay::methods::registry().iter().map(|method| method.card().id));
    assert_eq!(ids, expected);
    for card in cards.as_array().unwrap() {
        for field in ["title", "class", "source"] {
            assert!(card[field].as_str().is_some_and(|text| !text.is_empty()), "{card}");
        }
    }
    let output = program(folder.path(), &["roster", "families", "tight-unique"]);
    assert!(String::from_utf8_lossy(&output.stdout).contains("parameters:\n  order ("));
    let output = program(folder.path(), &["roster", "families", "tight-uniqe"]);
    assert_eq!(output.status.code(), Some(2));
    assert!(String::from_utf8_lossy(&output.stderr).contains("did you mean `tight-unique`?"));
}

#[test]
#[cfg(unix)]
fn a_reader_that_goes_away_is_no_error() {
    let folder = tempfile::tempdir().unwrap();
    let binary = assert_cmd::cargo::cargo_bin("rankassay");
    let script = format!("'{}' roster families tight-unique; echo $? >&2", binary.display());
    let output = std::process::Command::new("sh")
        .arg("-c")
        .arg(format!("{{ {script}; }} | true"))
        .current_dir(folder.path())
        .output()
        .unwrap();
    assert_eq!(String::from_utf8_lossy(&output.stderr).trim(), "0");
}

#[test]
fn completions_and_the_manual_name_every_command() {
    let folder = tempfile::tempdir().unwrap();
    let text = |arguments: &[&str]| {
        let output = program(folder.path(), arguments);
        assert_eq!(output.status.code(), Some(0));
        String::from_utf8(output.stdout).unwrap()
    };
    let manual = text(&["manual"]);
    assert!(manual.contains(".TH rankassay 1"), "{}", &manual[..200]);
    for shell in ["bash", "zsh", "fish"] {
        let script = text(&["completions", shell]);
        for command in ["run", "tabulate", "duel", "gate", "replay", "scatter", "roster"] {
            assert!(script.contains(command), "{shell} {command}");
            assert!(manual.contains(&format!("RANKASSAY {}", command.to_uppercase())), "{command}");
        }
    }
}
