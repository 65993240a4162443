//! Journals for tests, in a spelling that a person and a fuzzer can edit.
//!
//! A text whose first line is `seal` stands for the journal whose lines are the following ones, each with
//! the checksum that the program would have written. Of these lines `@run`, `@instance NAME` and
//! `@trial NAME` stand for whole records of the present layout.

use rankassay::record::{
    Cost, Figures, Identity, InstanceRecord, Record, RunHeader, SCHEMA, Verdict, Work,
};
use serde::Serialize;
use sha2::{Digest, Sha256};

/// Returns the bytes of the journal that a text stands for: itself when its first line is not `seal`.
pub fn journal(text: &[u8]) -> Vec<u8> {
    let Some(lines) = text.strip_prefix(b"seal\n") else {
        return text.to_owned();
    };
    let mut bytes = Vec::new();
    for line in lines.split_inclusive(|byte| *byte == b'\n') {
        let (line, end) = line.split_at(line.len() - usize::from(line.ends_with(b"\n")));
        let payload = record(line).unwrap_or_else(|| line.to_owned());
        let digest = Sha256::digest(&payload);
        let check: String = digest.iter().take(8).map(|byte| format!("{byte:02x}")).collect();
        bytes.extend_from_slice(format!("{{\"check\":\"{check}\",").as_bytes());
        bytes.extend_from_slice(&payload);
        bytes.extend_from_slice(end);
    }
    bytes
}

/// Returns the payload that an abbreviated line stands for.
fn record(line: &[u8]) -> Option<Vec<u8>> {
    let line = std::str::from_utf8(line).ok()?;
    if line == "@run" {
        return Some(payload("run", &header()));
    }
    if let Some(name) = line.strip_prefix("@instance ") {
        return Some(payload("instance", &instance(name)));
    }
    line.strip_prefix("@trial ").map(|name| payload("trial", &trial(name)))
}

fn payload(kind: &str, value: &impl Serialize) -> Vec<u8> {
    let value = serde_json::to_string(value).expect("records are plain data");
    format!("\"kind\":\"{kind}\",\"value\":{value}}}").into_bytes()
}

fn header() -> RunHeader {
    RunHeader {
        schema: SCHEMA,
        title: "a run".to_owned(),
        plan_digest: "0".repeat(64),
        imports: vec![("a.dat-s".to_owned(), "1".repeat(64))],
        seed: 1,
        round: 0,
        wall_limit_s: 20.0,
        memory_limit: Some(1 << 30),
        tolerance: [1e-6; 3],
        methods: Vec::new(),
        trials: 2,
    }
}

fn instance(name: &str) -> InstanceRecord {
    InstanceRecord {
        instance: name.to_owned(),
        family: "imported".to_owned(),
        parameters: String::new(),
        index: 0,
        seed: 1,
        blocks: 1,
        orthant: 0,
        order: 2,
        constraints: 2,
        target_rank: 1,
        rank_bound: 1,
        digest: "2".repeat(64),
        optimum: Some(-2.0),
        optimum_known: "reported".to_owned(),
        certificate: "none".to_owned(),
        uniqueness: "unknown".to_owned(),
        relaxation: String::new(),
        source: "by hand".to_owned(),
    }
}

fn trial(name: &str) -> Record {
    let identity = Identity { trial: name.to_owned(), ..Identity::default() };
    let figures = Figures { digits: Some(9.5), ranks: Some([1, 1, 2]), ..Figures::default() };
    let cost = Cost { wall_s: Some(0.25), ..Cost::default() };
    let work = Some(Work::default());
    Record::assemble(identity, Verdict::Solved, "converged", figures, cost, work, "a \"word\"")
}
