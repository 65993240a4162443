//! Run folders in, tables, figures and report out: what several commands share.

use std::collections::BTreeSet;
use std::path::{Path, PathBuf};

use super::output::tell;
use super::report::Failure;
use super::{Loudness, roster};
use crate::record::Trace;
use crate::runner::{self, Manifest, Merged, journal, read_traces, write_files};
use crate::tables::report::{Context, RunFacts};
use crate::tables::{self, Input, figures, report};

/// Run folders that were read and merged.
pub(super) struct Loaded {
    pub(super) merged: Merged,
    pub(super) traces: Vec<Trace>,
    /// The folders, in the order of `merged.origins`.
    pub(super) folders: Vec<PathBuf>,
    /// Their manifests, where there are any.
    pub(super) manifests: Vec<Option<Manifest>>,
}

impl Loaded {
    /// Lends the records to the tables.
    pub(super) fn input(&self) -> Input<'_> {
        Input {
            records: &self.merged.records,
            instances: &self.merged.instances,
            methods: &self.merged.methods,
            wall_limit_s: self.merged.wall_limit_s,
            tolerance: self.merged.tolerance,
            traces: &self.traces,
        }
    }
}

/// Reads and merges run folders.
pub(super) fn load(folders: &[PathBuf], loudness: Loudness) -> Result<Loaded, Failure> {
    let mut runs = Vec::new();
    let mut traces = Vec::new();
    let mut manifests = Vec::new();
    for folder in folders {
        let contents = journal::read(folder).map_err(Failure::input)?;
        if let Some(notice) = contents.torn_notice(folder)
            && loudness != Loudness::Quiet
        {
            tell(&format!("note: {notice}"));
        }
        runs.push((folder.display().to_string(), contents));
        traces.extend(read_traces(folder).map_err(Failure::input)?);
        manifests.push(Manifest::read(folder).ok());
    }
    let merged = runner::merge(runs).map_err(Failure::input)?;
    if merged.records.is_empty() {
        return Err(Failure::input("nothing is recorded in the given runs"));
    }
    Ok(Loaded { merged, traces, folders: folders.to_vec(), manifests })
}

/// Says which command replays trials: the program as the user would start it.
pub(super) fn program() -> String {
    std::env::args().next().unwrap_or_else(|| "rankassay".to_owned())
}

/// Writes tables, figures and report into `into`.
pub(super) fn write(loaded: &Loaded, into: &Path) -> Result<(), Failure> {
    let input = loaded.input();
    let made = tables::all(&input);
    let mut files = Vec::new();
    for table in &made {
        files.push((format!("{}.csv", table.name), table.to_csv()));
        files.push((format!("{}-stable.csv", table.name), table.stable().to_csv()));
        files.push((format!("{}.md", table.name), table.to_markdown()));
        files.push((format!("{}.tex", table.name), table.to_latex()));
        files.push((format!("{}.html", table.name), table.to_html()));
    }
    write_files(&into.join("tables"), &files).map_err(Failure::input)?;
    let drawn = figures::all(&input);
    let files: Vec<(String, String)> =
        drawn.iter().map(|figure| (format!("{}.svg", figure.name), figure.svg.clone())).collect();
    write_files(&into.join("figures"), &files).map_err(Failure::input)?;
    let page = report::page(&input, &made, &drawn, &context(loaded));
    write_files(into, &[("report.html".to_owned(), page)]).map_err(Failure::input)
}

fn context(loaded: &Loaded) -> Context {
    let families: BTreeSet<&str> =
        loaded.merged.records.iter().map(|record| record.family.as_str()).collect();
    let methods: BTreeSet<&str> =
        loaded.merged.methods.iter().map(|method| method.id.as_str()).collect();
    let title = loaded.manifests.iter().flatten().next().map(|manifest| manifest.title.clone());
    Context {
        title: title.unwrap_or_else(|| "Run".to_owned()),
        runs: (0..loaded.folders.len()).map(|at| facts(loaded, at)).collect(),
        methods: roster::method_cards(&methods),
        families: roster::family_cards(&families),
        cautions: Vec::new(),
        program: program(),
    }
}

/// Lists what is known of one run.
fn facts(loaded: &Loaded, at: usize) -> RunFacts {
    let folder = loaded.folders[at].display().to_string();
    let trials = if loaded.folders.len() > 1 {
        let pairs = loaded.merged.records.iter().zip(&loaded.merged.origins);
        pairs.filter(|(_, origin)| **origin == at).map(|(record, _)| record.trial.clone()).collect()
    } else {
        BTreeSet::new()
    };
    let Some(manifest) = &loaded.manifests[at] else {
        return RunFacts { folder, trials, ..RunFacts::default() };
    };
    let mut facts = vec![
        ("Round of the plan".to_owned(), manifest.round.to_string()),
        (
            "Memory limit of a trial".to_owned(),
            manifest.memory_limit.map_or("none".to_owned(), mebibytes),
        ),
    ];
    let unknown = || "unknown".to_owned();
    for (number, stretch) in manifest.stretches.iter().enumerate() {
        let name = |what: &str| match manifest.stretches.len() {
            1 => what.to_owned(),
            _ => format!("{what}, stretch {}", number + 1),
        };
        let machine = &stretch.machine;
        let commit = stretch.commit.as_ref().map_or(String::new(), |id| format!(" ({id})"));
        facts.extend([
            (name("Version"), format!("rankassay {}{commit}", stretch.version)),
            (name("Trials at a time"), stretch.threads.to_string()),
            (name("System"), format!("{} {}", machine.system, machine.architecture)),
            (name("Processor"), machine.processor.clone().unwrap_or_else(unknown)),
            (name("Vector instructions"), machine.features.join(", ")),
            (name("Cores"), machine.cores.to_string()),
            (name("Memory"), machine.memory_bytes.map_or_else(unknown, mebibytes)),
            (
                name("Calibration"),
                stretch.calibration_s.map_or_else(unknown, |seconds| {
                    format!("{:.1} ms of processor time for the fixed work", 1e3 * seconds)
                }),
            ),
        ]);
    }
    let first = manifest.stretches.first();
    let last = manifest.stretches.last();
    RunFacts {
        folder,
        plan_file: manifest.plan_file.clone(),
        plan_text: manifest.plan.clone(),
        started: first.map_or_else(unknown, |stretch| stretch.started.clone()),
        ended: last.and_then(|stretch| stretch.ended.clone()).unwrap_or_else(unknown),
        facts,
        trials,
    }
}

fn mebibytes(bytes: u64) -> String {
    format!("{} MiB", bytes >> 20)
}

/// Says where things were written.
pub(super) fn written(into: &Path) -> String {
    let place = |name: &str| into.join(name).display().to_string();
    format!(
        "Report:  {}\nTables:  {}\nFigures: {}\n",
        place("report.html"),
        place("tables"),
        place("figures")
    )
}
