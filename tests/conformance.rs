//! Runs every registered method on every registered family and holds each answer to the contract:
//! shapes, honesty of limits, determinism, and no contradiction with the certificate.

use rankassay::budget::{Budget, Halt, Meter, Tracing};
use rankassay::card::{Setting, Settings};
use rankassay::families::{self, Family};
use rankassay::methods::{self, Method, Trial};
use rankassay::problem::{Answer, BlockPoint, Planted, Uniqueness};
use rankassay::referee::{Known, KnownOptimum, Tolerance, judge};
use rankassay::seed::Stream;
use std::collections::BTreeMap;
use std::sync::Arc;
use std::sync::atomic::AtomicBool;
use std::time::{Duration, Instant};

/// Small orders, so that the suite is quick; families not named use their defaults.
const SMALL: &[(&str, i64)] =
    &[("balanced-graph", 20), ("frustrated-loops", 16), ("ky-fan-gap", 8), ("lattice-tiles", 16)];

fn small(family: &dyn Family) -> Settings {
    let mut given = BTreeMap::new();
    if let Some((_, order)) = SMALL.iter().find(|(id, _)| *id == family.card().id) {
        given.insert("order".to_owned(), Setting::Integer(*order));
    }
    Settings::resolve(family.card().parameters, &given).unwrap()
}

fn plant(family: &dyn Family, index: &str) -> Planted {
    let mut stream = Stream::named(11, &["plant", family.card().id, index]);
    family.plant(&small(family), &mut stream).unwrap()
}

fn trial(method: &dyn Method, wall: Duration) -> Trial {
    let budget = Budget { wall, memory: None };
    let interrupt = Arc::new(AtomicBool::new(false));
    Trial {
        options: Settings::resolve(method.card().options, &BTreeMap::new()).unwrap(),
        meter: Meter::start(budget, interrupt, Tracing::Off),
        stream: Stream::named(11, &["solve", method.card().id]),
    }
}

fn numbers(answer: &Answer) -> Vec<f64> {
    let mut all = answer.point.orthant.clone();
    for block in &answer.point.blocks {
        match block {
            BlockPoint::Factor(factor) => all.extend(&factor.data),
            BlockPoint::Dense(matrix) => {
                for j in 0..matrix.ncols() {
                    all.extend((0..matrix.nrows()).map(|i| matrix[(i, j)]));
                }
            }
        }
    }
    all.extend(answer.multipliers.iter().flatten());
    all
}

fn pairs() -> impl Iterator<Item = (&'static dyn Family, &'static dyn Method)> {
    families::registry()
        .iter()
        .flat_map(|family| methods::registry().iter().map(|method| (*family, *method)))
}

#[test]
fn the_registries_are_sorted_and_not_empty() {
    let families: Vec<&str> = families::registry().iter().map(|f| f.card().id).collect();
    let methods: Vec<&str> = methods::registry().iter().map(|m| m.card().id).collect();
    assert!(families.len() >= 7 && families.is_sorted(), "{families:?}");
    assert!(methods.len() >= 6 && methods.is_sorted(), "{methods:?}");
}

#[test]
fn every_method_answers_every_family_within_the_contract() {
    for (family, method) in pairs() {
        let name = format!("{} on {}", method.card().id, family.card().id);
        let planted = plant(family, "0");
        let problem = &planted.problem;
        let mut trial = trial(method, Duration::from_secs(60));
        let answer = match method.solve(problem, &mut trial) {
            Ok(answer) => answer,
            Err(Halt::Refused(reason)) => {
                assert!(!reason.is_empty(), "{name} refuses without a reason");
                continue;
            }
            Err(other) => panic!("{name}: {other}"),
        };
        assert_eq!(answer.point.blocks.len(), problem.blocks().len(), "{name}");
        for (point, block) in answer.point.blocks.iter().zip(problem.blocks()) {
            assert_eq!(point.order(), block.order, "{name}");
        }
        assert_eq!(answer.point.orthant.len(), problem.orthant(), "{name}");
        assert!(numbers(&answer).iter().all(|value| value.is_finite()), "{name}");
        if let Some(multipliers) = &answer.multipliers {
            assert_eq!(multipliers.len(), problem.rhs().len(), "{name}");
        }
        assert!(trial.meter.effort.flops > 0, "{name} counts no effort");
        let known = Known {
            optimum: KnownOptimum::Certified(planted.optimum),
            dual: planted.dual.as_deref(),
            unique_point: (planted.uniqueness == Uniqueness::Proved)
                .then_some(planted.point.as_slice()),
        };
        let judgement = judge(problem, &answer, &known, &Tolerance::default())
            .unwrap_or_else(|contradiction| panic!("{name}: {contradiction}"));
        if let Some(bound) = judgement.lower_bound {
            let slack = 1e-12 * (1.0 + planted.optimum.abs());
            assert!(bound <= planted.optimum + slack, "{name}: bound {bound} {}", planted.optimum);
        }
    }
}

#[test]
fn the_same_trial_gives_the_same_bits() {
    for (family, method) in pairs() {
        let planted = plant(family, "1");
        let run = || {
            let mut trial = trial(method, Duration::from_secs(60));
            let answer = method.solve(&planted.problem, &mut trial);
            (answer.map(|a| numbers(&a)), trial.meter.effort)
        };
        let (first, effort) = run();
        let (second, again) = run();
        let name = format!("{} on {}", method.card().id, family.card().id);
        match (first, second) {
            (Ok(a), Ok(b)) => {
                let bits = |v: &[f64]| v.iter().map(|x| x.to_bits()).collect::<Vec<_>>();
                assert!(bits(&a) == bits(&b), "{name}");
            }
            (Err(a), Err(b)) => assert_eq!(a, b, "{name}"),
            _ => panic!("{name}: one run answers, the other does not"),
        }
        assert_eq!(effort, again, "{name}");
    }
}

#[test]
fn a_spent_budget_ends_every_method_soon() {
    for (family, method) in pairs() {
        let planted = plant(family, "2");
        let mut trial = trial(method, Duration::ZERO);
        let clock = Instant::now();
        let outcome = method.solve(&planted.problem, &mut trial);
        let name = format!("{} on {}", method.card().id, family.card().id);
        // Generous: one iteration at these sizes takes milliseconds, a whole solve may take longer.
        assert!(clock.elapsed() < Duration::from_secs(5), "{name} ignores its budget");
        match outcome {
            Ok(answer) => assert_eq!(answer.stop.word(), "time-limit", "{name}"),
            Err(halt) => assert!(
                matches!(halt, Halt::TimeLimit | Halt::Refused(_)),
                "{name} ended with {halt:?}"
            ),
        }
    }
}

#[test]
fn an_interrupt_ends_every_method() {
    for (family, method) in pairs() {
        let planted = plant(family, "3");
        let mut trial = trial(method, Duration::from_secs(60));
        let budget = Budget { wall: Duration::from_secs(60), memory: None };
        trial.meter = Meter::start(budget, Arc::new(AtomicBool::new(true)), Tracing::Off);
        let outcome = method.solve(&planted.problem, &mut trial);
        let name = format!("{} on {}", method.card().id, family.card().id);
        assert!(
            matches!(outcome, Err(Halt::Interrupted | Halt::Refused(_))),
            "{name} goes on after an interrupt: {:?}",
            outcome.map(|answer| answer.stop)
        );
    }
}
