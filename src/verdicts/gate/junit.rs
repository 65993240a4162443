//! The JUnit form of a gate, for CI systems.

use quick_junit::{NonSuccessKind, Report, TestCase, TestCaseStatus, TestSuite};

use super::text::{changes, headline, metric_line, presence_line, whole_lists};
use super::{Gate, MethodGate, Metric, Outcome, Strictness};

/// Renders a gate: one suite a method with a case for its trials and one for each figure, and one suite
/// for the instances. Undecided is skipped, or fails when the terms say so.
pub(super) fn render(gate: &Gate) -> String {
    let mut report = Report::new("rankassay gate");
    report.add_test_suite(instances(gate));
    for method in &gate.methods {
        report.add_test_suite(suite(gate, method));
    }
    // Text to memory; marks that XML does not know were taken out when it was set.
    report.to_string().expect("the report is plain text")
}

fn suite(gate: &Gate, method: &MethodGate) -> TestSuite {
    let mut suite = TestSuite::new(&method.method);
    suite.add_test_case(case(&method.method, "trials", trials(method)));
    for metric in &method.metrics {
        let status = status(metric, gate.terms.strictness);
        let mut case = case(&method.method, metric.kind.word(), status);
        if metric.outcome != Outcome::NotCompared {
            case.set_system_out(format!("{}: {}", metric.outcome.word(), metric_line(metric)));
        }
        suite.add_test_case(case);
    }
    let moved = [("worse", &method.worse), ("better", &method.better)];
    let lines: Vec<String> = moved
        .iter()
        .flat_map(|(word, list)| {
            changes(list).into_iter().map(move |line| format!("{word}: {line}"))
        })
        .collect();
    if !lines.is_empty() {
        suite.set_system_out(lines.join("\n"));
    }
    suite
}

fn case(suite: &str, name: &str, status: TestCaseStatus) -> TestCase {
    let mut case = TestCase::new(name, status);
    case.set_classname(format!("gate.{suite}"));
    case
}

fn failure(kind: &str, message: &str, description: &str) -> TestCaseStatus {
    let mut status = TestCaseStatus::non_success(NonSuccessKind::Failure);
    status.set_type(kind).set_message(message);
    if !description.is_empty() {
        status.set_description(description);
    }
    status
}

fn skipped(message: &str) -> TestCaseStatus {
    let mut status = TestCaseStatus::skipped();
    status.set_message(message);
    status
}

fn trials(method: &MethodGate) -> TestCaseStatus {
    match presence_line(method) {
        None => TestCaseStatus::success(),
        Some(line) => failure("missing", &line, &method.missing.join("\n")),
    }
}

fn status(metric: &Metric, strictness: Strictness) -> TestCaseStatus {
    let line = metric_line(metric);
    match (metric.outcome, strictness) {
        (Outcome::Improved | Outcome::Holds, _) => TestCaseStatus::success(),
        (Outcome::Regressed, _) => failure("regressed", &line, &line),
        (Outcome::Undecided, Strictness::Undecided) => failure("undecided", &line, &line),
        (Outcome::Undecided, Strictness::Regressed) => skipped(&format!("undecided: {line}")),
        (Outcome::NotCompared, _) => skipped(&line),
    }
}

fn instances(gate: &Gate) -> TestSuite {
    let [(title, changed), ..] = whole_lists(gate);
    let status = if changed.is_empty() {
        TestCaseStatus::success()
    } else {
        failure("changed", title, &changed.join("\n"))
    };
    let mut suite = TestSuite::new("instances");
    suite.add_test_case(case("instances", "unchanged", status));
    suite.set_system_out(headline(gate));
    suite
}
