//! The gate: every outcome on synthetic records, every error of a baseline, its forms.

use std::fs;
use std::path::Path;

use proptest::prelude::*;
use quick_junit::{Report, TestCaseStatus};
use rankassay::record::{
    Cost, Figures, Identity, InstanceRecord, MethodRecord, Record, SCHEMA, Verdict, Work,
};
use rankassay::verdicts::gate::{
    Bands, Baseline, BaselineError, Gate, GateError, HEAD, INSTANCES, Kind, Making, Metric,
    Outcome, Passage, Presence, RunView, Strictness, TRIALS, Terms, TimeBasis, gate,
};

/// A run that owns what a view borrows.
#[derive(Clone)]
struct Run {
    title: String,
    plan_digest: String,
    version: String,
    tolerance: [f64; 3],
    wall_limit_s: f64,
    methods: Vec<MethodRecord>,
    records: Vec<Record>,
    instances: Vec<InstanceRecord>,
    calibration_s: Option<f64>,
}

impl Run {
    fn view(&self) -> RunView<'_> {
        RunView {
            title: &self.title,
            plan_digest: &self.plan_digest,
            version: &self.version,
            tolerance: self.tolerance,
            wall_limit_s: self.wall_limit_s,
            methods: &self.methods,
            records: &self.records,
            instances: &self.instances,
            calibration_s: self.calibration_s,
        }
    }

    /// Changes the trials of a method, each with its number.
    fn change(&mut self, method: &str, mut change: impl FnMut(usize, &mut Record)) {
        let of_method = |record: &&mut Record| record.method == method;
        for (at, record) in self.records.iter_mut().filter(of_method).enumerate() {
            change(at, record);
        }
    }
}

fn instance(at: usize, family: &str) -> InstanceRecord {
    InstanceRecord {
        instance: format!("{family}-{at}"),
        family: family.to_owned(),
        parameters: "order=20 rank=2".to_owned(),
        index: at as u64,
        seed: 7,
        blocks: 1,
        orthant: 0,
        order: 20,
        constraints: 21,
        target_rank: 2,
        rank_bound: 5,
        digest: format!("{at:016x}"),
        optimum: Some(-10.0),
        optimum_known: "certified".to_owned(),
        certificate: "dual-pair".to_owned(),
        uniqueness: "proved".to_owned(),
        relaxation: "tight".to_owned(),
        source: String::new(),
    }
}

fn record(row: &InstanceRecord, method: &str, repeat: u64, at: usize) -> Record {
    Record::assemble(
        Identity {
            trial: format!("{}-{method}-{repeat}", row.instance),
            instance: row.instance.clone(),
            family: row.family.clone(),
            parameters: row.parameters.clone(),
            order: 20,
            constraints: 21,
            target_rank: 2,
            method: method.to_owned(),
            options: "tolerance=1e-9".to_owned(),
            seed: 7,
            repeat,
        },
        Verdict::Solved,
        "converged",
        Figures {
            digits: Some(7.0 + (at % 9) as f64 * 0.7),
            optimum: row.optimum,
            ranks: Some([2; 3]),
            ..Figures::default()
        },
        Cost {
            wall_s: Some(0.02 * (1.0 + at as f64)),
            cpu_s: Some(0.018 * (1.0 + at as f64)),
            peak_bytes: Some(1 << 20),
            ..Cost::default()
        },
        Some(Work { flops: 100_000 + 3_111 * at as u64, ..Work::default() }),
        "a message, with a comma and \"quotes\"",
    )
}

/// Makes a run of two methods on this many instances of four families; everything is solved.
fn run(count: usize) -> Run {
    let families = ["cliques", "lattices", "rings", "stars"];
    let instances: Vec<InstanceRecord> =
        (0..count).map(|at| instance(at, families[at % 4])).collect();
    let labels = ["factored", "interior"];
    let records = instances
        .iter()
        .enumerate()
        .flat_map(|(at, row)| labels.map(|label| record(row, label, 1, at)))
        .collect();
    let method = |label: &str| MethodRecord {
        label: label.to_owned(),
        id: label.to_owned(),
        class: "class".to_owned(),
        options: "tolerance=1e-9".to_owned(),
    };
    Run {
        title: "Quick look".to_owned(),
        plan_digest: "5eed".to_owned(),
        version: "0.1.0".to_owned(),
        tolerance: [1e-6; 3],
        wall_limit_s: 20.0,
        methods: labels.map(method).to_vec(),
        records,
        instances,
        calibration_s: Some(0.5),
    }
}

/// Stores a run as a baseline and reads it back, as every gate does.
fn stored(run: &Run) -> Baseline {
    let folder = tempfile::tempdir().unwrap();
    Baseline::write(folder.path(), &run.view()).unwrap();
    Baseline::read(folder.path()).unwrap()
}

fn held(run: &Run, baseline: &Run) -> Gate {
    gate(&run.view(), &stored(baseline), &Terms::default()).unwrap()
}

fn timed(run: &Run, baseline: &Run) -> Result<Gate, GateError> {
    let terms = Terms { time: TimeBasis::Calibrated, ..Terms::default() };
    gate(&run.view(), &stored(baseline), &terms)
}

fn metric(gate: &Gate, method: &str, kind: Kind) -> Metric {
    let method = gate.methods.iter().find(|found| found.method == method).unwrap();
    *method.metrics.iter().find(|metric| metric.kind == kind).unwrap()
}

fn outcome(gate: &Gate, method: &str, kind: Kind) -> Outcome {
    metric(gate, method, kind).outcome
}

/// Asserts that every figure but the named ones holds.
fn assert_others_hold(gate: &Gate, but: &[(&str, Kind)]) {
    for method in &gate.methods {
        for metric in &method.metrics {
            if !but.contains(&(method.method.as_str(), metric.kind)) {
                assert_eq!(metric.outcome, Outcome::Holds, "{} {:?}", method.method, metric);
            }
        }
    }
}

#[test]
fn a_run_holds_against_itself() {
    let base = run(44);
    let result = held(&base, &base);
    assert_eq!(result.passage, Passage::Passes);
    assert_others_hold(&result, &[]);
    let effort = metric(&result, "factored", Kind::Effort);
    let change = effort.change.unwrap();
    assert_eq!((change.low, change.high), (Some(1.0), Some(1.0)));
    assert_eq!(effort.making, Some(Making::Same));
    assert_eq!(effort.instances, 44);
}

#[test]
fn an_effort_of_a_third_more_is_caught_and_named() {
    let base = run(44);
    let mut slow = base.clone();
    slow.change("factored", |_, record| record.flops = record.flops.map(|f| f * 13 / 10));
    let result = held(&slow, &base);
    assert_eq!(result.passage, Passage::Fails);
    assert_eq!(outcome(&result, "factored", Kind::Effort), Outcome::Regressed);
    assert_others_hold(&result, &[("factored", Kind::Effort)]);
    let change = metric(&result, "factored", Kind::Effort).change.unwrap();
    assert!((change.value - 1.3).abs() < 1e-4, "{change:?}");
    // The other way round it is an improvement.
    let result = held(&base, &slow);
    assert_eq!(result.passage, Passage::Passes);
    assert_eq!(outcome(&result, "factored", Kind::Effort), Outcome::Improved);
}

#[test]
fn an_effort_that_strays_both_ways_is_undecided_and_one_within_the_band_holds() {
    let base = run(44);
    let mut scattered = base.clone();
    scattered.change("factored", |at, record| {
        let factor = if at % 2 == 0 { 1.5 } else { 0.75 };
        record.flops = record.flops.map(|f| (f as f64 * factor) as u64);
    });
    let result = held(&scattered, &base);
    assert_eq!(outcome(&result, "factored", Kind::Effort), Outcome::Undecided);
    assert_eq!(result.passage, Passage::Passes);
    let strict = Terms { strictness: Strictness::Undecided, ..Terms::default() };
    let result = gate(&scattered.view(), &stored(&base), &strict).unwrap();
    assert_eq!(result.passage, Passage::Fails);
    let mut near = base.clone();
    near.change("factored", |_, record| record.flops = record.flops.map(|f| f * 104 / 100));
    assert_others_hold(&held(&near, &base), &[]);
    // The band is the user's.
    let bands = Bands { effort_percent: 3.0, ..Bands::default() };
    let narrow = Terms { bands, ..Terms::default() };
    let result = gate(&near.view(), &stored(&base), &narrow).unwrap();
    assert_eq!(outcome(&result, "factored", Kind::Effort), Outcome::Regressed);
}

#[test]
fn an_effort_tenfold_on_a_fifth_of_the_instances_is_caught() {
    let base = run(40);
    let mut slow = base.clone();
    slow.change("interior", |at, record| {
        if at % 5 == 0 {
            record.flops = record.flops.map(|f| 10 * f);
        }
    });
    assert_eq!(outcome(&held(&slow, &base), "interior", Kind::Effort), Outcome::Regressed);
}

#[test]
fn a_handful_of_instances_is_judged_by_its_range() {
    let base = run(4);
    let mut slow = base.clone();
    slow.change("factored", |at, record| {
        record.flops = record.flops.map(|f| f * (12 + at as u64) / 10);
    });
    let effort = metric(&held(&slow, &base), "factored", Kind::Effort);
    assert_eq!((effort.outcome, effort.making), (Outcome::Regressed, Some(Making::Range)));
    let mut mixed = base.clone();
    mixed.change("factored", |at, record| {
        record.flops = record.flops.map(|f| f * (8 + at as u64) / 10);
    });
    assert_eq!(outcome(&held(&mixed, &base), "factored", Kind::Effort), Outcome::Undecided);
    // Times do not repeat themselves: too few of them never regress.
    let mut late = base.clone();
    late.change("factored", |_, record| record.cpu_s = record.cpu_s.map(|s| 4.0 * s));
    let time = metric(&timed(&late, &base).unwrap(), "factored", Kind::Time);
    assert_eq!((time.outcome, time.making), (Outcome::Undecided, Some(Making::TooFew)));
}

/// Loses the first `count` instances of a method.
fn losing(base: &Run, method: &str, count: usize) -> Run {
    let mut worse = base.clone();
    worse.change(method, |at, record| {
        if at < count {
            record.verdict = Verdict::Suboptimal;
        }
    });
    worse
}

#[test]
fn five_of_forty_instances_lost_are_caught() {
    let base = run(40);
    let result = held(&losing(&base, "interior", 5), &base);
    assert_eq!(result.passage, Passage::Fails);
    assert_eq!(outcome(&result, "interior", Kind::Solved), Outcome::Regressed);
    assert_others_hold(&result, &[("interior", Kind::Solved)]);
    let method = result.methods.iter().find(|m| m.method == "interior").unwrap();
    assert_eq!(method.worse.len(), 5);
    assert_eq!(method.worse[0].trial, "cliques-0-interior-1");
    let solved = metric(&result, "interior", Kind::Solved);
    assert_eq!((solved.baseline, solved.run), (Some(1.0), Some(0.875)));
    let result = held(&base, &losing(&base, "interior", 5));
    assert_eq!(outcome(&result, "interior", Kind::Solved), Outcome::Improved);
    assert_eq!(result.methods[1].better.len(), 5);
}

#[test]
fn five_of_four_hundred_lost_are_caught_by_the_exact_test() {
    // The score interval alone does not clear a band of 1 point; p = 2^-5 and -1.25 points do.
    let base = run(400);
    let result = held(&losing(&base, "interior", 5), &base);
    let solved = metric(&result, "interior", Kind::Solved);
    assert!(solved.change.unwrap().high.unwrap() > -0.01, "{solved:?}");
    assert_eq!(solved.outcome, Outcome::Regressed);
    let result = held(&losing(&base, "interior", 4), &base);
    assert_eq!(outcome(&result, "interior", Kind::Solved), Outcome::Undecided);
}

#[test]
fn one_verdict_that_flips_is_listed_and_undecided() {
    let base = run(44);
    let result = held(&losing(&base, "factored", 1), &base);
    assert_eq!(outcome(&result, "factored", Kind::Solved), Outcome::Undecided);
    assert_eq!(result.passage, Passage::Passes);
    assert_eq!(result.methods[0].worse.len(), 1);
    // A few each way: enough pairs bring the interval into a wide band.
    let base = run(400);
    let mut swapped = losing(&base, "factored", 2);
    swapped.change("factored", |at, record| {
        if at == 2 {
            record.verdict = Verdict::Near;
        }
    });
    let mut other = base.clone();
    other.change("factored", |at, record| {
        if (3..6).contains(&at) {
            record.verdict = Verdict::Near;
        }
    });
    let bands = Bands { solved_points: 3.0, ..Bands::default() };
    let result =
        gate(&swapped.view(), &stored(&other), &Terms { bands, ..Terms::default() }).unwrap();
    let solved = metric(&result, "factored", Kind::Solved);
    assert_eq!((solved.outcome, solved.making), (Outcome::Holds, Some(Making::Score)));
}

#[test]
fn digits_and_ranks_have_all_outcomes() {
    let base = run(40);
    let digits = |shift: fn(usize) -> f64| {
        let mut moved = base.clone();
        moved.change("factored", |at, record| record.digits = record.digits.map(|d| d + shift(at)));
        outcome(&held(&moved, &base), "factored", Kind::Digits)
    };
    assert_eq!(digits(|_| -1.0), Outcome::Regressed);
    assert_eq!(digits(|at| -0.7 - 0.1 * (at % 5) as f64), Outcome::Regressed);
    assert_eq!(digits(|_| -0.4), Outcome::Holds);
    assert_eq!(digits(|at| if at % 2 == 0 { 3.0 } else { -3.0 }), Outcome::Undecided);
    // Eight of nine instances have fewer than 12 digits to begin with.
    assert_eq!(digits(|_| 1.5), Outcome::Improved);
    let ranks = |lost: usize, gained: usize| {
        let (mut old, mut new) = (base.clone(), base.clone());
        new.change("factored", |at, record| {
            record.rank_at_1e6 = Some(if at < lost { 3 } else { 1 });
        });
        old.change("factored", |at, record| {
            record.rank_at_1e6 = Some(if at >= lost && at < lost + gained { 4 } else { 2 });
        });
        outcome(&held(&new, &old), "factored", Kind::Rank)
    };
    assert_eq!(ranks(6, 0), Outcome::Regressed);
    assert_eq!(ranks(0, 6), Outcome::Improved);
    assert_eq!(ranks(2, 1), Outcome::Undecided);
    assert_eq!(ranks(0, 0), Outcome::Holds);
}

#[test]
fn digits_beyond_twelve_are_not_told_apart() {
    let mut base = run(40);
    base.change("factored", |_, record| record.digits = Some(15.9));
    let mut lower = base.clone();
    lower.change("factored", |_, record| record.digits = Some(12.1));
    assert_others_hold(&held(&lower, &base), &[]);
}

#[test]
fn what_nobody_solves_is_not_compared_and_does_not_fail() {
    let base = losing(&run(12), "interior", 12);
    let result = held(&base, &base);
    assert_eq!(outcome(&result, "interior", Kind::Solved), Outcome::Holds);
    assert_eq!(outcome(&result, "interior", Kind::Effort), Outcome::NotCompared);
    assert_eq!(outcome(&result, "interior", Kind::Digits), Outcome::NotCompared);
    assert_eq!(result.passage, Passage::Passes);
}

#[test]
fn repeats_count_as_one_instance() {
    let mut base = run(12);
    let repeats: Vec<Record> = (2..=5)
        .flat_map(|repeat| {
            base.records.iter().map(move |record| Record {
                repeat,
                trial: format!("{}+{repeat}", record.trial),
                ..record.clone()
            })
        })
        .collect();
    base.records.extend(repeats);
    let mut worse = base.clone();
    worse.change("factored", |_, record| {
        if record.instance == "cliques-0" {
            record.verdict = Verdict::Infeasible;
        }
    });
    let result = held(&worse, &base);
    // Five trials changed, one instance did: no more than a hint.
    assert_eq!(result.methods[0].worse.len(), 5);
    let solved = metric(&result, "factored", Kind::Solved);
    assert_eq!((solved.instances, solved.outcome), (12, Outcome::Undecided));
}

#[test]
fn a_slower_machine_is_not_a_regression() {
    let base = run(44);
    let slower = |factor: f64, calibration: f64| {
        let mut slow = base.clone();
        for record in &mut slow.records {
            record.cpu_s = record.cpu_s.map(|s| factor * s);
            record.wall_s = record.wall_s.map(|s| factor * s);
        }
        slow.calibration_s = Some(0.5 * calibration);
        slow
    };
    assert_others_hold(&held(&slower(3.0, 1.0), &base), &[]);
    let calibrated = timed(&slower(3.0, 3.0), &base).unwrap();
    assert!(calibrated.notes[0].contains("divided by 3.00"), "{:?}", calibrated.notes);
    assert_others_hold(&calibrated, &[]);
    let result = timed(&slower(1.5, 1.0), &base).unwrap();
    assert_eq!(result.passage, Passage::Fails);
    for method in ["factored", "interior"] {
        assert_eq!(outcome(&result, method, Kind::Time), Outcome::Regressed);
    }
    assert_others_hold(&result, &[("factored", Kind::Time), ("interior", Kind::Time)]);
    let result = timed(&slower(0.5, 1.0), &base).unwrap();
    assert_eq!(outcome(&result, "factored", Kind::Time), Outcome::Improved);
}

#[test]
fn noise_in_late_digits_is_not_a_regression() {
    let base = run(44);
    let mut noisy = losing(&base, "factored", 1);
    noisy.change("factored", |at, record| {
        let sign = if at % 3 == 0 { -1.0 } else { 1.0 };
        record.digits = record.digits.map(|d| d * (1.0 + sign * 1e-9));
    });
    let result = held(&noisy, &base);
    assert_eq!(result.tally().regressed, 0);
    assert_eq!(result.passage, Passage::Passes);
    assert_eq!(outcome(&result, "factored", Kind::Digits), Outcome::Holds);
}

#[test]
fn missing_trials_are_a_regression() {
    let base = run(20);
    let mut part = base.clone();
    part.records.retain(|record| record.trial != "stars-3-interior-1");
    let result = held(&part, &base);
    assert_eq!(result.passage, Passage::Fails);
    assert_eq!(result.methods[1].presence, Presence::Missing);
    assert_eq!(result.methods[1].missing, ["stars-3-interior-1"]);
    assert!(result.to_text().contains("stars-3-interior-1"));
    let mut without = base.clone();
    without.records.retain(|record| record.method != "interior");
    without.methods.retain(|method| method.label != "interior");
    let result = held(&without, &base);
    assert_eq!(result.methods[1].missing.len(), 20);
    assert_eq!(result.passage, Passage::Fails);
}

#[test]
fn what_is_new_is_listed_and_not_judged() {
    let base = run(20);
    let mut more = run(22);
    more.methods.push(MethodRecord { label: "third".to_owned(), ..more.methods[0].clone() });
    let third: Vec<Record> = more.instances.iter().map(|row| record(row, "third", 1, 3)).collect();
    more.records.extend(third);
    more.plan_digest = "other".to_owned();
    let result = held(&more, &base);
    assert_eq!(result.passage, Passage::Passes);
    assert_eq!(result.new_methods, ["third"]);
    assert_eq!(result.new_instances, ["cliques-20", "lattices-21"]);
    assert_others_hold(&result, &[]);
    assert_eq!(metric(&result, "factored", Kind::Solved).instances, 20);
    assert!(result.notes[0].contains("plan differs"));
}

#[test]
fn changed_options_are_another_method() {
    let base = run(20);
    let mut other = base.clone();
    other.methods[0].options = "tolerance=1e-7".to_owned();
    other.change("factored", |_, record| record.options = "tolerance=1e-7".to_owned());
    let result = held(&other, &base);
    assert_eq!(result.passage, Passage::Fails);
    let expected = Presence::ChangedOptions {
        baseline: "factored tolerance=1e-9".to_owned(),
        run: "factored tolerance=1e-7".to_owned(),
    };
    assert_eq!(result.methods[0].presence, expected);
    assert_eq!(result.methods[0].trials, 0);
    assert!(result.methods[0].missing.is_empty());
    let mut renamed = base.clone();
    renamed.methods[0].id = "elsewhere".to_owned();
    assert_eq!(held(&renamed, &base).passage, Passage::Fails);
}

#[test]
fn a_changed_instance_is_a_regression_a_renamed_one_is_not() {
    let base = run(20);
    let mut changed = base.clone();
    changed.instances[2].digest = "another".to_owned();
    let result = held(&changed, &base);
    assert_eq!(result.passage, Passage::Fails);
    assert_eq!(result.changed_instances.len(), 1);
    assert_eq!(result.changed_instances[0].instance, "rings-2");
    assert!(result.methods.iter().all(|method| method.missing.is_empty()));
    assert_eq!(metric(&result, "factored", Kind::Solved).instances, 19);
    assert!(result.new_instances.is_empty());
    // The order of two equal families changed: ids moved, the problems are the same.
    let mut renamed = base.clone();
    for (row, at) in [(0, 4), (4, 0)] {
        let id = format!("cliques-{at}");
        let old = base.instances[row].instance.clone();
        renamed.instances[row].instance.clone_from(&id);
        for (record, stored) in renamed.records.iter_mut().zip(&base.records) {
            if stored.instance == old {
                record.instance.clone_from(&id);
            }
        }
    }
    assert_others_hold(&held(&renamed, &base), &[]);
}

#[test]
fn equal_instances_are_paired_by_their_ids() {
    // A family without chance plants the same problem twice; only the methods' random streams differ.
    let mut base = run(8);
    base.instances[4].digest = base.instances[0].digest.clone();
    base.change("factored", |at, record| {
        if at == 4 {
            record.verdict = Verdict::Infeasible;
        }
    });
    let mut turned = base.clone();
    turned.records.reverse();
    let result = held(&turned, &base);
    assert_others_hold(&result, &[]);
    assert!(result.methods[0].worse.is_empty() && result.methods[0].better.is_empty());
}

#[test]
fn incomparable_runs_are_errors() {
    let base = run(8);
    let baseline = stored(&base);
    let terms = Terms::default();
    let with = |change: fn(&mut Run), terms: &Terms| {
        let mut other = run(8);
        change(&mut other);
        gate(&other.view(), &baseline, terms).unwrap_err()
    };
    let error = with(|run| run.tolerance[1] = 1e-4, &terms);
    assert!(matches!(error, GateError::Tolerance { .. }) && error.to_string().contains("0.0001"));
    let error = with(|run| run.wall_limit_s = 60.0, &terms);
    assert_eq!(
        error.to_string(),
        "not comparable: the wall limit is 60 s in the run and 20 s in the baseline"
    );
    let timed = Terms { time: TimeBasis::Calibrated, ..terms };
    let error = with(|run| run.calibration_s = None, &timed);
    assert_eq!(
        error.to_string(),
        "time cannot be judged: the run has no calibration (none recorded)"
    );
    let error = with(|run| run.calibration_s = Some(0.0), &timed);
    assert!(matches!(error, GateError::NoCalibration { side: "run", .. }));
    let mut bare = run(8);
    bare.calibration_s = None;
    let error = gate(&base.view(), &stored(&bare), &timed).unwrap_err();
    assert!(matches!(error, GateError::NoCalibration { side: "baseline", .. }));
    for band in [-1.0, f64::NAN, f64::INFINITY] {
        let bands = Bands { digits: band, ..Bands::default() };
        let error = gate(&base.view(), &baseline, &Terms { bands, ..terms }).unwrap_err();
        assert!(matches!(error, GateError::Band { name: "digits", .. }), "{error}");
    }
}

#[test]
fn a_baseline_is_read_back_as_it_was_written() {
    let base = run(12);
    let folder = tempfile::tempdir().unwrap();
    let nested = folder.path().join("results/baseline");
    Baseline::write(&nested, &base.view()).unwrap();
    let read = Baseline::read(&nested).unwrap();
    assert_eq!(read.records, base.records);
    assert_eq!(read.instances, base.instances);
    assert_eq!(read.head.methods, base.methods);
    assert_eq!((read.head.schema, read.head.calibration_s), (SCHEMA, Some(0.5)));
    let mut names: Vec<String> = fs::read_dir(&nested)
        .unwrap()
        .map(|entry| entry.unwrap().file_name().into_string().unwrap())
        .collect();
    names.sort();
    assert_eq!(names, [HEAD, INSTANCES, TRIALS]);
    // Renewed: the old one is replaced whole.
    Baseline::write(&nested, &run(5).view()).unwrap();
    assert_eq!(Baseline::read(&nested).unwrap().records.len(), 10);
    // Other line ends are no alteration.
    let trials = nested.join(TRIALS);
    let text = fs::read_to_string(&trials).unwrap();
    fs::write(&trials, text.replace('\n', "\r\n")).unwrap();
    assert_eq!(Baseline::read(&nested).unwrap().records, run(5).records);
}

/// Writes a good baseline, breaks one thing, and returns the error.
fn broken(ruin: impl FnOnce(&Path)) -> BaselineError {
    let folder = tempfile::tempdir().unwrap();
    Baseline::write(folder.path(), &run(6).view()).unwrap();
    ruin(folder.path());
    Baseline::read(folder.path()).unwrap_err()
}

fn edit(folder: &Path, name: &str, edit: impl FnOnce(String) -> String) {
    let path = folder.join(name);
    let text = fs::read_to_string(&path).unwrap();
    fs::write(path, edit(text)).unwrap();
}

#[test]
fn a_missing_baseline_says_how_to_make_one() {
    for name in [HEAD, TRIALS, INSTANCES] {
        let error = broken(|folder| fs::remove_file(folder.join(name)).unwrap());
        let text = error.to_string();
        assert!(matches!(error, BaselineError::Missing { .. }), "{text}");
        assert!(text.contains(name) && text.contains("rankassay gate RUN --baseline"), "{text}");
        assert!(text.ends_with("--accept`"), "{text}");
    }
    let error = Baseline::read(Path::new("no/such/folder")).unwrap_err();
    assert_eq!(
        error.to_string(),
        "there is no baseline: no/such/folder is missing; make one with `rankassay gate RUN --baseline \
         no/such/folder --accept`"
    );
}

#[test]
fn a_broken_head_names_its_place() {
    let error = broken(|folder| edit(folder, HEAD, |text| text.replace("\"title\":", "\"title\"")));
    let BaselineError::Json { line, column, .. } = &error else { panic!("{error}") };
    assert_eq!(*line, 3);
    assert!(*column > 0);
    assert_eq!(error.to_string().matches(" line ").count(), 1, "{error}");
    let error =
        broken(|folder| edit(folder, HEAD, |text| text.replace("\"title\":", "\"titel\":")));
    assert!(error.to_string().contains("unknown field `titel`"), "{error}");
    let error = broken(|folder| edit(folder, HEAD, |text| text[..40].to_owned()));
    assert!(matches!(error, BaselineError::Json { .. }), "{error}");
    let error = broken(|folder| fs::write(folder.join(HEAD), [0xff, 0xfe]).unwrap());
    assert!(matches!(error, BaselineError::Access { action: "read", .. }), "{error}");
}

#[test]
fn another_record_layout_says_both_numbers() {
    let now = format!("\"schema\": {SCHEMA}");
    for (other, age) in [(SCHEMA - 1, "older"), (SCHEMA + 1, "newer")] {
        let error = broken(|folder| {
            // Other layouts have other fields: only the number is common to all.
            edit(folder, HEAD, |text| {
                text.replace(&now, &format!("\"schema\": {other}, \"once\": 1"))
            });
        });
        let text = error.to_string();
        assert!(matches!(error, BaselineError::Schema { .. }), "{text}");
        let phrase = format!("has record layout {other}, which is {age} than layout {SCHEMA}");
        assert!(text.contains(&phrase) && text.contains("--accept"), "{text}");
    }
}

#[test]
fn truncated_and_altered_files_are_told_apart() {
    let cut = |text: String| {
        let end = text.trim_end().rfind('\n').unwrap();
        text[..=end].to_owned()
    };
    let error = broken(|folder| edit(folder, TRIALS, cut));
    assert!(matches!(error, BaselineError::Rows { expected: 12, found: 11, .. }), "{error}");
    let error = broken(|folder| edit(folder, INSTANCES, cut));
    assert!(matches!(error, BaselineError::Rows { expected: 6, found: 5, .. }), "{error}");
    // Cut inside a row.
    let error = broken(|folder| edit(folder, TRIALS, |text| text[..text.len() - 30].to_owned()));
    assert!(matches!(error, BaselineError::Altered { .. }), "{error}");
    let error = broken(|folder| edit(folder, TRIALS, |text| text.replacen("solved", "near", 1)));
    assert!(matches!(error, BaselineError::Altered { .. }), "{error}");
    assert!(error.to_string().contains("trials.csv was altered"), "{error}");
    let error = broken(|folder| fs::write(folder.join(TRIALS), "").unwrap());
    assert!(matches!(error, BaselineError::Rows { found: 0, .. }), "{error}");
}

/// Alters a file of rows and makes its digest agree, as a hand that edits both would.
fn forged(name: &str, change: impl FnOnce(String) -> String) -> BaselineError {
    broken(|folder| {
        edit(folder, name, change);
        let BaselineError::Altered { expected, found, .. } = Baseline::read(folder).unwrap_err()
        else {
            panic!("the change keeps the number of rows")
        };
        edit(folder, HEAD, |text| text.replace(&expected, &found));
    })
}

#[test]
fn a_row_that_does_not_parse_names_line_and_column() {
    let error = forged(TRIALS, |text| text.replacen(",solved,", ",sovled,", 1));
    let BaselineError::Row { line, .. } = &error else { panic!("{error}") };
    assert_eq!(*line, 2);
    assert!(error.to_string().contains("sovled"), "{error}");
    let error = forged(TRIALS, |text| text.replacen(",100000,", ",many,", 1));
    let BaselineError::Row { line, column, .. } = &error else { panic!("{error}") };
    assert_eq!((*line, column.as_str()), (2, "flops"), "{error}");
    let error = forged(INSTANCES, |text| text.replacen("tight,\n", "tight,,extra\n", 1));
    let BaselineError::Row { line, .. } = &error else { panic!("{error}") };
    assert_eq!(*line, 2, "{error}");
    assert!(error.to_string().contains("19 columns where 18 are expected"), "{error}");
}

/// A run in which much has happened.
fn eventful() -> (Run, Run) {
    let base = run(40);
    let mut after = losing(&base, "interior", 6);
    after.change("factored", |at, record| {
        record.flops = record.flops.map(|f| f * 13 / 10);
        if at == 7 {
            record.verdict = Verdict::TimeLimit;
        }
        if at % 2 == 0 {
            record.rank_at_1e6 = Some(2 + (at as u64 % 4) / 2);
        }
    });
    after.records.retain(|record| record.trial != "stars-39-interior-1");
    after.instances[1].digest = "ffffffffffffffff".to_owned();
    after.version = "0.2.0".to_owned();
    after.instances.push(instance(40, "cliques"));
    let extra = record(&after.instances[40], "factored", 1, 40);
    after.records.push(extra);
    (after, base)
}

#[test]
fn the_forms_look_as_they_did() {
    let (after, base) = eventful();
    let result = timed(&after, &base).unwrap();
    let text = result.to_text();
    assert!(text.lines().all(|line| line.chars().count() <= 100), "{text}");
    insta::assert_snapshot!("text", text);
    insta::assert_snapshot!("markdown", result.to_markdown());
    let json: serde_json::Value = serde_json::from_str(&result.to_json()).unwrap();
    assert_eq!(json["passage"], "fails");
    assert_eq!(json["methods"][0]["metrics"][3]["outcome"], "regressed");
}

#[test]
fn junit_is_xml_whose_counts_agree() {
    let (after, mut base) = eventful();
    base.title = "marks <&> \"and\" \u{1b}[1m control".to_owned();
    let result = held(&after, &base);
    let xml = result.to_junit();
    let report = Report::deserialize_from_str(&xml).unwrap();
    assert_eq!(report.test_suites.len(), 1 + result.methods.len());
    let tally = result.tally();
    let (mut failed, mut skipped, mut passed) = (0, 0, 0);
    for suite in &report.test_suites {
        for case in &suite.test_cases {
            match case.status {
                TestCaseStatus::Success { .. } => passed += 1,
                TestCaseStatus::NonSuccess { .. } => failed += 1,
                TestCaseStatus::Skipped { .. } => skipped += 1,
            }
        }
    }
    assert_eq!(failed, tally.regressed);
    assert_eq!(skipped, tally.undecided + tally.not_compared);
    assert_eq!((report.failures, report.tests), (failed, failed + skipped + passed));
    assert_eq!(report.tests, 1 + 2 * 5);
    assert!(xml.contains("stars-39-interior-1"), "{xml}");
    // Undecided fails a strict gate, and its JUnit says so.
    let strict = Terms { strictness: Strictness::Undecided, ..Terms::default() };
    let result = gate(&after.view(), &stored(&base), &strict).unwrap();
    let report = Report::deserialize_from_str(&result.to_junit()).unwrap();
    assert_eq!(report.failures, tally.regressed + tally.undecided);
    assert!(tally.undecided > 0);
}

#[test]
fn long_lists_are_cut_and_the_rest_is_counted() {
    let base = run(40);
    let result = held(&losing(&base, "interior", 30), &base);
    let text = result.to_text();
    assert!(text.contains("Worse (30):") && text.contains("and 10 more"), "{text}");
    assert_eq!(text.matches("solved -> suboptimal").count(), 20);
    assert!(result.to_markdown().contains("- and 10 more"));
}

fn any_record() -> impl Strategy<Value = (Verdict, Option<f64>, Option<u64>, Option<u64>, u64)> {
    (
        prop::sample::select(Verdict::ALL.to_vec()),
        prop::option::of(0.0_f64..16.0),
        prop::option::of(0_u64..10_000_000),
        prop::option::of(0_u64..6),
        1_u64..3,
    )
}

proptest! {
    #![proptest_config(ProptestConfig::with_cases(64))]

    #[test]
    fn no_run_regresses_or_improves_against_itself(
        rows in prop::collection::vec(any_record(), 1..60)
    ) {
        let mut base = run(rows.len());
        base.change("factored", |at, record| {
            let (verdict, digits, flops, rank, repeat) = rows[at];
            record.verdict = verdict;
            record.digits = digits;
            record.flops = flops;
            record.rank_at_1e6 = rank;
            record.repeat = repeat;
        });
        let result = timed(&base, &base).unwrap();
        let tally = result.tally();
        prop_assert_eq!((tally.regressed, tally.improved, tally.undecided), (0, 0, 0));
        prop_assert_eq!(result.passage, Passage::Passes);
    }

    #[test]
    fn what_regressed_one_way_improved_the_other(
        rows in prop::collection::vec((any_record(), any_record()), 1..60)
    ) {
        let (mut old, mut new) = (run(rows.len()), run(rows.len()));
        for (run, side) in [(&mut old, 0), (&mut new, 1)] {
            run.change("factored", |at, record| {
                let (verdict, digits, _, rank, _) = if side == 0 { rows[at].0 } else { rows[at].1 };
                record.verdict = verdict;
                record.digits = digits;
                record.rank_at_1e6 = rank;
            });
        }
        let (forth, back) = (held(&new, &old), held(&old, &new));
        for kind in [Kind::Solved, Kind::Rank] {
            let mirrored = match outcome(&forth, "factored", kind) {
                Outcome::Regressed => Outcome::Improved,
                Outcome::Improved => Outcome::Regressed,
                other => other,
            };
            prop_assert_eq!(outcome(&back, "factored", kind), mirrored);
        }
        prop_assert_eq!(forth.methods[0].worse.len(), back.methods[0].better.len());
    }
}
