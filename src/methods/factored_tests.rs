//! Checks of the factored methods and of the projections on planted families.

use super::{Method, Trial, find};
use crate::budget::Meter;
use crate::card::{Setting, Settings};
use crate::families;
use crate::problem::certificate::Planted;
use crate::problem::{Answer, BlockPoint, Operator, StopReason};
use crate::seed::Stream;

fn plant(family: &str, given: &[(&str, i64)], seed: u64) -> Planted {
    let family = families::find(family).expect("a family of this name");
    let given = given.iter().map(|(n, v)| ((*n).to_owned(), Setting::Integer(*v))).collect();
    let settings = Settings::resolve(family.card().parameters, &given).unwrap();
    family.plant(&settings, &mut Stream::named(seed, &["plant"])).unwrap()
}

fn trial(method: &dyn Method, given: &[(&str, Setting)], seed: u64) -> Trial {
    let given = given.iter().map(|(n, v)| ((*n).to_owned(), v.clone())).collect();
    Trial {
        options: Settings::resolve(method.card().options, &given).unwrap(),
        meter: Meter::unlimited(),
        stream: Stream::named(seed, &["solve"]),
    }
}

/// Relative objective error and relative residual of an answer in factor form.
fn errors(planted: &Planted, answer: &Answer) -> (f64, f64) {
    let op = Operator::new(&planted.problem);
    let factors: Vec<_> = answer
        .point
        .blocks
        .iter()
        .map(|block| match block {
            BlockPoint::Factor(factor) => factor.clone(),
            BlockPoint::Dense(_) => panic!("these methods answer with factors"),
        })
        .collect();
    let mut values = vec![0.0; op.constraints()];
    op.apply_factors(&factors, &answer.point.orthant, &mut values);
    let rhs = planted.problem.rhs();
    let residual = crate::linalg::vector::distance(&values, rhs);
    let scale = 1.0 + crate::linalg::vector::norm2(rhs);
    let value = op.cost_of_factors(&factors, &answer.point.orthant);
    ((value - planted.optimum).abs() / (1.0 + planted.optimum.abs()), residual / scale)
}

fn solved(planted: &Planted, answer: &Answer) -> bool {
    let (objective, residual) = errors(planted, answer);
    objective <= 1e-8 && residual <= 1e-8
}

#[test]
fn factored_alm_solves_tight_unique_at_the_target_rank() {
    let method = find("factored-alm").unwrap();
    let mut failures = Vec::new();
    for seed in 0..20 {
        let rank = 1 + (seed % 3) as i64;
        let planted =
            plant("tight-unique", &[("order", 20 + 10 * (seed % 2) as i64), ("rank", rank)], seed);
        let answer = method.solve(&planted.problem, &mut trial(method, &[], seed)).unwrap();
        if !solved(&planted, &answer) {
            failures.push((seed, errors(&planted, &answer), answer.note.clone()));
            continue;
        }
        assert!(answer.note.starts_with("certified"), "{seed}: {}", answer.note);
        let y = answer.multipliers.as_ref().unwrap();
        let dual: f64 = planted.problem.rhs().iter().zip(y).map(|(b, y)| b * y).sum();
        assert!((dual - planted.optimum).abs() <= 1e-6 * (1.0 + planted.optimum.abs()));
    }
    // The issue asks for at least 95 %.
    assert!(failures.len() <= 1, "{failures:?}");
}

#[test]
fn factored_newton_solves_most_of_tight_unique() {
    let method = find("factored-newton").unwrap();
    let mut solved_count = 0;
    for seed in 0..10 {
        let planted = plant("tight-unique", &[("order", 20), ("rank", 2)], seed);
        let answer = method.solve(&planted.problem, &mut trial(method, &[], seed)).unwrap();
        solved_count += usize::from(solved(&planted, &answer));
    }
    assert!(solved_count >= 6, "{solved_count} of 10");
}

#[test]
fn a_balanced_graph_is_solved_and_certified_at_every_width() {
    let method = find("factored-alm").unwrap();
    let planted = plant("balanced-graph", &[("order", 300)], 4);
    for width in ["target", "bound"] {
        let options = [("width", Setting::Word(width.to_owned()))];
        let answer = method.solve(&planted.problem, &mut trial(method, &options, 1)).unwrap();
        assert!(solved(&planted, &answer), "{width}: {:?}", errors(&planted, &answer));
        assert!(answer.note.starts_with("certified"), "{width}: {}", answer.note);
        assert_eq!(answer.stop, StopReason::Converged);
    }
}

#[test]
fn alternating_projections_meets_the_sets_on_a_small_planted_problem() {
    let method = find("alternating-projections").unwrap();
    let planted = plant("tight-unique", &[("order", 12), ("rank", 2)], 3);
    let plain = method.solve(&planted.problem, &mut trial(method, &[], 1)).unwrap();
    let (objective, residual) = errors(&planted, &plain);
    assert!(residual < 1e-6, "{residual}, {}", plain.note);
    assert!(objective < 0.5, "{objective}, {}", plain.note);
    let options = [("polish", Setting::Word("newton".to_owned()))];
    let polished = method.solve(&planted.problem, &mut trial(method, &options, 1)).unwrap();
    let (_, after) = errors(&planted, &polished);
    assert!(after <= residual.max(1e-9), "{after}, {}", polished.note);
}
