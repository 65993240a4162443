//! Tabulates and reports a synthetic run of 100,000 records (5 methods, 20,000 instances, 8 families)
//! through the program, and prints wall time and peak memory of that process.
//!
//! The number of instances can be given: `cargo bench --bench tabulate -- 2000`.

#![allow(clippy::print_stdout, reason = "a benchmark prints what it measured")]

use std::path::Path;
use std::process::{Command, Stdio};
use std::time::{Duration, Instant};

use rankassay::record::{
    Cost, Figures, Identity, InstanceRecord, MethodRecord, Record, RunHeader, SCHEMA, Verdict, Work,
};
use rankassay::seed::Stream;
use serde::Serialize;
use sha2::{Digest, Sha256};

const METHODS: [&str; 5] = ["alpha", "beta", "gamma", "delta", "epsilon"];

/// Appends a line as the journal's writer does.
fn line(kind: &str, value: &impl Serialize, out: &mut String) {
    let value = serde_json::to_string(value).unwrap();
    let payload = format!("\"kind\":\"{kind}\",\"value\":{value}}}");
    let digest: String =
        Sha256::digest(payload.as_bytes()).iter().map(|byte| format!("{byte:02x}")).collect();
    out.push_str(&format!("{{\"check\":\"{}\",{payload}\n", &digest[..16]));
}

fn header(trials: u64) -> RunHeader {
    let method = |label: &&str| MethodRecord {
        label: (*label).to_owned(),
        id: (*label).to_owned(),
        class: "factored".to_owned(),
        options: String::new(),
    };
    RunHeader {
        schema: SCHEMA,
        title: "Synthetic".to_owned(),
        plan_digest: String::new(),
        imports: Vec::new(),
        seed: 1,
        round: 0,
        wall_limit_s: 20.0,
        memory_limit: None,
        tolerance: [1e-6; 3],
        methods: METHODS.iter().map(method).collect(),
        trials,
    }
}

fn instance(number: usize) -> InstanceRecord {
    let (family, order) = (number % 8, 20 + 20 * (number / 8 % 5) as u64);
    InstanceRecord {
        instance: format!("family-{family}-order={order}-{number}"),
        family: format!("family-{family}"),
        parameters: format!("order={order} rank=2"),
        index: number as u64,
        seed: 1,
        blocks: 1,
        orthant: 0,
        order,
        constraints: order,
        target_rank: 2,
        rank_bound: 6,
        digest: format!("{number:064x}"),
        optimum: Some(10.0),
        optimum_known: "certified".to_owned(),
        certificate: "dual-pair".to_owned(),
        uniqueness: "proved".to_owned(),
        relaxation: "tight".to_owned(),
        source: String::new(),
    }
}

fn record(number: usize, instance: &InstanceRecord, at: usize, stream: &mut Stream) -> Record {
    let solved = stream.uniform() < 0.5 + 0.1 * at as f64;
    let seconds = 0.01 * (instance.order as f64 / 20.0).powi(3) * (1.0 + stream.uniform());
    let error = if solved { 1e-8 * stream.uniform() } else { stream.uniform() };
    Record::assemble(
        Identity {
            trial: format!("{number:04}-{}-{}", instance.instance, METHODS[at]),
            instance: instance.instance.clone(),
            family: instance.family.clone(),
            parameters: instance.parameters.clone(),
            order: instance.order,
            constraints: instance.constraints,
            target_rank: 2,
            method: METHODS[at].to_owned(),
            options: String::new(),
            seed: 1,
            repeat: 1,
        },
        if solved { Verdict::Solved } else { Verdict::Suboptimal },
        "converged",
        Figures {
            digits: Some(-(error + 1e-16).log10()),
            feasibility: Some(1e-9),
            optimum: Some(10.0),
            objective: Some(10.0 + 11.0 * error),
            objective_error: Some(error),
            ranks: Some([2; 3]),
            tail_ratio: Some(0.0),
            ..Figures::default()
        },
        Cost {
            wall_s: Some(seconds),
            cpu_s: Some(seconds),
            peak_bytes: Some(1 << 20),
            ..Cost::default()
        },
        Some(Work {
            flops: (seconds * 1e9) as u64,
            eigendecompositions: 10,
            factorisations: 20,
            operator_products: 30,
            inner_steps: 40,
        }),
        if solved { "" } else { "the objective is off by more than the tolerance" },
    )
}

fn write_run(folder: &Path, instances: usize) {
    std::fs::create_dir_all(folder).unwrap();
    let mut text = String::new();
    line("run", &header((instances * METHODS.len()) as u64), &mut text);
    let mut stream = Stream::named(1, &["synthetic"]);
    for number in 0..instances {
        let instance = instance(number);
        line("instance", &instance, &mut text);
        for at in 0..METHODS.len() {
            let record = record(METHODS.len() * number + at + 1, &instance, at, &mut stream);
            line("trial", &record, &mut text);
        }
    }
    std::fs::write(folder.join("journal.jsonl"), text).unwrap();
}

/// Returns the most memory that a process has held so far, in MiB, where the system tells it.
fn peak_mib(process: u32) -> Option<u64> {
    let status = std::fs::read_to_string(format!("/proc/{process}/status")).ok()?;
    let line = status.lines().find_map(|line| line.strip_prefix("VmHWM:"))?;
    line.split_whitespace().next()?.parse::<u64>().ok().map(|kib| kib >> 10)
}

fn main() {
    let given = std::env::args().skip(1).find_map(|word| word.parse::<usize>().ok());
    let instances = given.unwrap_or(20_000);
    let folder = tempfile::tempdir().unwrap();
    let run = folder.path().join("run");
    write_run(&run, instances);
    let started = Instant::now();
    let mut child = Command::new(env!("CARGO_BIN_EXE_rankassay"))
        .args(["tabulate", run.to_str().unwrap(), "--quiet"])
        .stdout(Stdio::null())
        .spawn()
        .unwrap();
    let mut peak = None;
    let status = loop {
        peak = peak.max(peak_mib(child.id()));
        if let Some(status) = child.try_wait().unwrap() {
            break status;
        }
        std::thread::sleep(Duration::from_millis(5));
    };
    let taken = started.elapsed();
    assert!(status.success());
    let size = |name: &str| std::fs::metadata(run.join(name)).map_or(0, |file| file.len() >> 10);
    println!(
        "{} records: {:.2} s, peak {} MiB, journal {} KiB, report {} KiB",
        instances * METHODS.len(),
        taken.as_secs_f64(),
        peak.map_or("unknown".to_owned(), |peak| peak.to_string()),
        size("journal.jsonl"),
        size("report.html"),
    );
}
