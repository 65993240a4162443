//! Run folders in, tables, figures and report out: what several commands share.

use std::collections::BTreeSet;
use std::path::{Path, PathBuf};

use super::output::tell;
use super::report::Failure;
use super::{Loudness, roster};
use crate::record::Trace;
use crate::runner::{
    self, JournalError, Manifest, Merged, Placement, Plan, Roster, journal, read_traces,
    write_files,
};
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
    let mut read = Vec::new();
    for folder in folders {
        let contents = match journal::read(folder) {
            Ok(contents) => contents,
            // Of several attempts at a task, one may have been ended before its first line was out.
            Err(JournalError::Missing { .. }) if folders.len() > 1 && folder.is_dir() => {
                tell(&format!("note: {}: nothing is recorded there", folder.display()));
                continue;
            }
            Err(error) => return Err(Failure::input(error)),
        };
        if let Some(notice) = contents.torn_notice(folder)
            && loudness != Loudness::Quiet
        {
            tell(&format!("note: {notice}"));
        }
        runs.push((folder.display().to_string(), contents));
        let known: BTreeSet<String> =
            traces.iter().map(|trace: &Trace| trace.trial.clone()).collect();
        let new = read_traces(folder).map_err(Failure::input)?;
        traces.extend(new.into_iter().filter(|trace| !known.contains(&trace.trial)));
        manifests.push(Manifest::read(folder).ok());
        read.push(folder.clone());
    }
    let merged = runner::merge(runs).map_err(Failure::input)?;
    tell_copies(&merged, loudness);
    if merged.records.is_empty() {
        return Err(Failure::input("nothing is recorded in the given runs"));
    }
    Ok(Loaded { merged, traces, folders: read, manifests })
}

/// Most trials that are named one by one in a message.
const NAMED: usize = 20;

/// Whether several runs make up their plans, each trial once.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(super) enum Completeness {
    /// Every trial is recorded, and copies of one agree.
    Whole,
    /// Trials are missing, or copies disagree.
    Wanting,
}

/// Tells which copies of a trial were left out, and which disagree.
fn tell_copies(merged: &Merged, loudness: Loudness) {
    if merged.copies > 0 && loudness != Loudness::Quiet {
        tell(&format!(
            "note: {} trials were recorded more than once with the same outcome; one copy of each is kept",
            merged.copies
        ));
    }
    for found in merged.disagreements.iter().take(NAMED) {
        let columns: Vec<String> = found
            .columns
            .iter()
            .map(|[column, kept, other]| format!("{column} {kept:?} and {other:?}"))
            .collect();
        tell(&format!(
            "warning: two copies of {} disagree: {} in {} (kept) and {}",
            found.trial,
            columns.join(", "),
            found.kept,
            found.other
        ));
    }
    let more = merged.disagreements.len().saturating_sub(NAMED);
    if more > 0 {
        tell(&format!("warning: the copies of {more} more trials disagree"));
    }
}

/// Tells which trials of the plans are missing.
pub(super) fn tell_missing(loaded: &Loaded) -> Completeness {
    let merged = &loaded.merged;
    for missing in &merged.missing {
        let names = missing_trials(loaded, missing);
        let listed: Vec<&str> = names.iter().take(NAMED).map(String::as_str).collect();
        let more = names.len() - listed.len();
        let more = if more > 0 { format!(" and {more} more") } else { String::new() };
        tell(&format!(
            "warning: {} of the {} trials of the plan of {} are missing: {}{more}",
            names.len(),
            missing.of,
            loaded.folders[missing.run].display(),
            listed.join(", ")
        ));
    }
    if merged.missing.is_empty() && merged.disagreements.is_empty() {
        Completeness::Whole
    } else {
        Completeness::Wanting
    }
}

/// Names missing trials by the plan in the manifest, or by their places in the plan where there is none.
fn missing_trials(loaded: &Loaded, missing: &runner::Missing) -> Vec<String> {
    let ids = loaded.manifests[missing.run].as_ref().and_then(|manifest| {
        let roster = Roster::built_in();
        let plan = Plan::parse(&manifest.plan, &manifest.plan_file, Path::new(""), roster).ok()?;
        Some(runner::trial_ids(&plan.in_round(manifest.round)))
    });
    let name = |place: &u64| {
        let id = ids.as_ref().and_then(|ids| ids.get(*place as usize)).cloned();
        id.unwrap_or_else(|| format!("number {}", place + 1))
    };
    missing.places.iter().map(name).collect()
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
        cautions: cautions(loaded),
        program: program(),
    }
}

/// Names the power networks of a run, which makes the report say that figures for them are no operating advice.
fn cautions(loaded: &Loaded) -> Vec<String> {
    let is_table = |parameters: &str| {
        let path = parameters.strip_prefix("path=").and_then(|rest| rest.split(" rank=").next());
        path.is_some_and(|path| path.ends_with(".toml"))
    };
    let mut networks = BTreeSet::new();
    for record in &loaded.merged.records {
        match record.family.as_str() {
            "radial-feeder" => networks.insert("synthetic feeders (radial-feeder)"),
            "imported" if is_table(&record.parameters) => networks.insert(&record.instance),
            _ => false,
        };
    }
    if networks.is_empty() {
        return Vec::new();
    }
    let names: Vec<&str> = networks.into_iter().collect();
    vec![format!(
        "Power networks in these figures: {}. The model behind them leaves out what a study of operation needs.",
        names.join(", ")
    )]
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
            (
                name("Trials at a time"),
                match stretch.placement {
                    Placement::Free => stretch.threads.to_string(),
                    Placement::Pinned => format!("{}, each on a core of its own", stretch.threads),
                },
            ),
            (
                name("Load by other programs"),
                stretch
                    .others_busy_cores
                    .map_or_else(unknown, |cores| format!("{cores:.1} cores busy on average")),
            ),
            (
                name("Load average before"),
                stretch.load_before.map_or_else(unknown, |load| format!("{load:.2}")),
            ),
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
