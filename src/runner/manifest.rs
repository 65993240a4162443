//! `manifest.json`: what was run, with what, on what, and when.

use std::path::Path;

use serde::Serialize;
use serde_json::{Value, json};

use super::folder::{FolderError, write_whole};
use super::machine::{self, Machine};
use super::plan::Plan;
use crate::record::RunHeader;

const FILE: &str = "manifest.json";

/// One stretch of running: a run that was interrupted and resumed has several.
#[derive(Clone, Debug, Serialize)]
struct Stretch {
    started: String,
    ended: Option<String>,
    version: &'static str,
    commit: Option<&'static str>,
    threads: usize,
    machine: Machine,
}

/// A manifest that is being kept.
#[derive(Debug)]
pub(super) struct Manifest {
    head: Value,
    earlier: Vec<Value>,
    stretch: Stretch,
}

impl Manifest {
    /// Writes the manifest at the start of a run; earlier stretches of the folder are kept.
    pub(super) fn begin(
        folder: &Path,
        plan: &Plan<'_>,
        header: &RunHeader,
        threads: usize,
    ) -> Result<Self, FolderError> {
        let earlier = std::fs::read_to_string(folder.join(FILE))
            .ok()
            .and_then(|text| serde_json::from_str::<Value>(&text).ok())
            .and_then(|manifest| manifest.get("stretches")?.as_array().cloned())
            .unwrap_or_default();
        let head = json!({
            "schema": header.schema,
            "title": header.title,
            "plan_file": plan.file_name,
            "plan_digest": header.plan_digest,
            "plan": plan.text,
            "seed": header.seed,
            "trials": header.trials,
            "imports": header.imports,
            "methods": header.methods,
            "wall_limit_s": header.wall_limit_s,
            "memory_limit": header.memory_limit,
            "tolerance": header.tolerance,
        });
        let stretch = Stretch {
            started: machine::now(),
            ended: None,
            version: env!("CARGO_PKG_VERSION"),
            // Set by whoever builds from a repository; a plain build does not know its commit.
            commit: option_env!("RANKASSAY_COMMIT"),
            threads,
            machine: machine::describe(),
        };
        let manifest = Manifest { head, earlier, stretch };
        manifest.write(folder)?;
        Ok(manifest)
    }

    /// Writes the end of the run.
    pub(super) fn end(mut self, folder: &Path) -> Result<(), FolderError> {
        self.stretch.ended = Some(machine::now());
        self.write(folder)
    }

    fn write(&self, folder: &Path) -> Result<(), FolderError> {
        let mut whole = self.head.clone();
        let mut stretches = self.earlier.clone();
        stretches.push(json!(self.stretch));
        whole["stretches"] = Value::Array(stretches);
        let text = serde_json::to_string_pretty(&whole).expect("a manifest is plain data");
        write_whole(&folder.join(FILE), &format!("{text}\n"))
    }
}
