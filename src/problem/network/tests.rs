//! Tests of the tables and of the program they pose.

use super::*;
use crate::problem::Functional;

fn bus(number: u32, load_mw: f64, load_mvar: f64) -> Bus {
    let (v_min, v_max) = (0.9, 1.1);
    Bus { number, load_mw, load_mvar, shunt_mw: 0.0, shunt_mvar: 0.0, v_min, v_max }
}

fn line(from: u32, to: u32, r: f64, x: f64, b: f64) -> Line {
    Line { from, to, r, x, b, limit_mva: None }
}

fn generator(bus: u32, cost_squared: f64) -> Generator {
    Generator {
        bus,
        p_min_mw: 10.0,
        p_max_mw: Some(400.0),
        q_min_mvar: Some(-300.0),
        q_max_mvar: Some(300.0),
        cost_squared,
        cost_linear: 3.0,
        cost_constant: 7.0,
    }
}

/// Two buses; bus 20 is the reference and comes second.
fn pair() -> Network {
    Network {
        title: String::new(),
        source: String::new(),
        base_mva: 50.0,
        reference: 20,
        bus: vec![bus(10, 30.0, 10.0), bus(20, 0.0, 0.0)],
        line: vec![Line { limit_mva: Some(45.0), ..line(10, 20, 0.02, 0.1, 0.06) }],
        generator: vec![generator(20, 0.25)],
    }
}

/// Evaluates a functional at blocks by their dense entries and scalars.
fn evaluate(functional: &Functional, blocks: &[Vec<Vec<f64>>], scalars: &[f64]) -> f64 {
    let mut sum: f64 = functional.orthant.iter().map(|(i, v)| v * scalars[i]).sum();
    for (block, part) in &functional.parts {
        for (i, j, v) in part.to_sparse().iter() {
            sum += (if i == j { 1.0 } else { 2.0 }) * v * blocks[*block][i][j];
        }
    }
    sum
}

/// Builds the whole point by hand from two voltages, checks that every row holds, and compares the cost.
#[test]
fn a_power_flow_by_hand_is_feasible_and_costs_what_it_should() {
    let mut network = pair();
    let (v, u) = ((1.0, -0.02), (1.03, 0.0));
    let (g, b) = (0.02 / 0.0104, -0.1 / 0.0104);
    let leaving = |v: (f64, f64), u: (f64, f64)| {
        let (own, other) = ((g, b + 0.03), (g, b));
        let i = (
            own.0 * v.0 - own.1 * v.1 - (other.0 * u.0 - other.1 * u.1),
            own.0 * v.1 + own.1 * v.0 - (other.0 * u.1 + other.1 * u.0),
        );
        (v.0 * i.0 + v.1 * i.1, v.1 * i.0 - v.0 * i.1)
    };
    let (out, back) = (leaving(v, u), leaving(u, v));
    // The load is what the line brings, so that the voltages solve the power flow.
    network.bus[0].load_mw = -out.0 * 50.0;
    network.bus[0].load_mvar = -out.1 * 50.0;
    assert!(out.0 < -0.1 && back.0 > 0.1, "the flow goes to the load: {out:?} {back:?}");
    let problem = network.problem().unwrap();
    let w = [v.0, u.0, v.1];
    let outer = |w: &[f64]| -> Vec<Vec<f64>> {
        w.iter().map(|a| w.iter().map(|b| a * b).collect()).collect()
    };
    let arrow = |(p, q): (f64, f64)| vec![vec![0.9, p, q], vec![p, 0.9, 0.0], vec![q, 0.0, 0.9]];
    let blocks = vec![outer(&w), outer(&[1.0, back.0]), arrow(out), arrow(back)];
    let squares = [v.0 * v.0 + v.1 * v.1, u.0 * u.0];
    let above = back.0 - 0.2;
    let (low, high) = (0.9 * 0.9, 1.1 * 1.1);
    let scalars = [
        above,
        7.8 - above,
        squares[0] - low,
        high - squares[0],
        back.1 + 6.0,
        6.0 - back.1,
        squares[1] - low,
        high - squares[1],
    ];
    assert_eq!(problem.orthant(), scalars.len());
    for (i, (row, rhs)) in problem.constraints().iter().zip(problem.rhs()).enumerate() {
        let value = evaluate(row, &blocks, &scalars);
        assert!((value - rhs).abs() < 1e-12, "row {}: {value} against {rhs}", i + 1);
    }
    let p = back.0 * 50.0;
    let cost = evaluate(problem.cost(), &blocks, &scalars);
    assert!((cost - (0.25 * p * p + 3.0 * p + 7.0)).abs() < 1e-10);
    assert!(scalars.iter().all(|s| *s > 0.0));
    assert_eq!(problem.blocks()[0].rank, Some(1));
    assert!(problem.blocks()[1..].iter().all(|block| block.rank.is_none()));
}

#[test]
fn fixed_and_linear_generators_keep_their_costs() {
    let mut network = pair();
    network.line[0].limit_mva = None;
    network.generator = vec![
        Generator { p_min_mw: 20.0, p_max_mw: Some(20.0), ..generator(20, 0.5) },
        Generator { p_max_mw: None, q_max_mvar: None, ..generator(20, 0.0) },
    ];
    let problem = network.problem().unwrap();
    // Scalars: the second generator above 10 MW; the voltage pairs; one reactive slack; the constant.
    assert_eq!(problem.blocks().len(), 1);
    assert_eq!(problem.orthant(), 1 + 2 + 2 + 1 + 1);
    let mut scalars = vec![0.0; 7];
    scalars[0] = 0.4;
    scalars[6] = 1.0;
    let cost = evaluate(problem.cost(), &[vec![vec![0.0; 3]; 3]], &scalars);
    // 20 MW at 0.5 P^2 + 3 P + 7 and 10 + 20 MW at 3 P + 7.
    assert!((cost - (200.0 + 60.0 + 7.0 + 90.0 + 7.0)).abs() < 1e-10, "{cost}");
}

#[test]
fn each_number_that_cannot_be_is_named() {
    type Spoil = fn(&mut Network);
    let cases: &[(Spoil, Table, &str)] = &[
        (|n| n.base_mva = 0.0, Table::Network, "base_mva"),
        (|n| n.reference = 12, Table::Network, "reference"),
        (|n| n.bus[1].number = 10, Table::Bus, "number"),
        (|n| n.bus[1].load_mw = f64::NAN, Table::Bus, "load_mw"),
        (|n| n.bus[0].v_min = 0.0, Table::Bus, "v_min"),
        (|n| n.bus[0].v_max = 0.8, Table::Bus, "v_max"),
        (|n| n.bus.push(bus(30, 0.0, 0.0)), Table::Bus, "number"),
        (|n| n.line[0].to = 30, Table::Line, "to"),
        (|n| n.line[0].to = 10, Table::Line, "to"),
        (|n| n.line[0].r = -0.1, Table::Line, "r"),
        (|n| (n.line[0].r, n.line[0].x) = (0.0, 0.0), Table::Line, "x"),
        (|n| n.line[0].limit_mva = Some(-1.0), Table::Line, "limit_mva"),
        (|n| n.generator[0].bus = 1, Table::Generator, "bus"),
        (|n| n.generator[0].p_max_mw = Some(9.0), Table::Generator, "p_max_mw"),
        (|n| n.generator[0].q_max_mvar = Some(-301.0), Table::Generator, "q_max_mvar"),
        (|n| n.generator[0].cost_squared = -1.0, Table::Generator, "cost_squared"),
        (|n| n.generator[0].cost_linear = f64::INFINITY, Table::Generator, "cost_linear"),
    ];
    assert!(pair().check().is_ok());
    for (spoil, table, key) in cases {
        let mut network = pair();
        spoil(&mut network);
        let error = network.problem().unwrap_err();
        assert_eq!((error.table, error.key), (*table, *key), "{error}");
    }
    let mut network = pair();
    network.generator[0].bus = 12;
    assert!(network.check().unwrap_err().to_string().ends_with("the nearest is 10"));
}
