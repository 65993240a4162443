//! `manifest.json`: what was run, with what, on what, and when.

use std::path::Path;

use serde::{Deserialize, Serialize};

use super::Placement;
use super::calibration::calibrate;
use super::folder::{FolderError, write_whole};
use super::machine::{self, Machine};
use super::plan::Plan;
use crate::record::{MethodRecord, RunHeader};

const FILE: &str = "manifest.json";

/// One stretch of running: a run that was interrupted and resumed has several.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Stretch {
    /// When it began, as `YYYY-MM-DDThh:mm:ssZ`.
    pub started: String,
    /// When it ended; none when it was killed.
    pub ended: Option<String>,
    /// Version of this program.
    pub version: String,
    /// Commit it was built from, where the build was told.
    pub commit: Option<String>,
    /// Number of trials at a time.
    pub threads: usize,
    /// Whether each of them was tied to a core of its own.
    pub placement: Placement,
    /// Processes that ran or wanted to run on the machine when the stretch began, averaged over the minute
    /// before.
    pub load_before: Option<f64>,
    /// Cores that other programs kept busy on average during the stretch; none while it runs.
    pub others_busy_cores: Option<f64>,
    /// Processor time of the fixed calibration work, in seconds.
    pub calibration_s: Option<f64>,
    /// The machine.
    pub machine: Machine,
}

impl Stretch {
    /// Describes a stretch that begins now, here; the calibration is left out.
    pub(super) fn now(threads: usize, placement: Placement) -> Self {
        Stretch {
            started: machine::now(),
            ended: None,
            version: env!("CARGO_PKG_VERSION").to_owned(),
            // Set by whoever builds from a repository; a plain build does not know its commit.
            commit: option_env!("RANKASSAY_COMMIT").map(str::to_owned),
            threads,
            placement,
            load_before: machine::load_average(),
            others_busy_cores: None,
            calibration_s: None,
            machine: machine::describe(),
        }
    }
}

/// What a manifest says.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Manifest {
    /// Record layout.
    pub schema: u32,
    /// Title of the plan.
    pub title: String,
    /// Plan file, as it was given.
    pub plan_file: String,
    /// SHA-256 of the plan's text, in hexadecimal digits.
    pub plan_digest: String,
    /// The plan's text.
    pub plan: String,
    /// Master seed.
    pub seed: u64,
    /// Which continuation of the plan; 0 for the plan itself.
    pub round: u64,
    /// Number of trials the whole plan has.
    pub trials: u64,
    /// Imported files by their path in the plan and the SHA-256 of their bytes.
    pub imports: Vec<(String, String)>,
    /// Methods in plan order.
    pub methods: Vec<MethodRecord>,
    /// Wall-time limit of a trial, in seconds.
    pub wall_limit_s: f64,
    /// Memory limit of a trial, in bytes.
    pub memory_limit: Option<u64>,
    /// Feasibility, objective and rank tolerance of the referee.
    pub tolerance: [f64; 3],
    /// The stretches of running, in their order.
    pub stretches: Vec<Stretch>,
}

impl Manifest {
    /// Reads the manifest of a run folder.
    ///
    /// # Errors
    /// There is none, or it is not what this program writes.
    pub fn read(folder: &Path) -> Result<Self, FolderError> {
        let path = folder.join(FILE);
        let refused =
            |reason: String| FolderError::System { path: path.display().to_string(), reason };
        let text = std::fs::read_to_string(&path).map_err(|error| refused(error.to_string()))?;
        serde_json::from_str(&text).map_err(|error| refused(format!("not a manifest: {error}")))
    }

    /// Writes the manifest at the start of a run; earlier stretches of the folder are kept.
    pub(super) fn begin(
        folder: &Path,
        plan: &Plan<'_>,
        header: &RunHeader,
        threads: usize,
        placement: Placement,
    ) -> Result<Started, FolderError> {
        let mut stretches =
            Manifest::read(folder).map_or_else(|_| Vec::new(), |before| before.stretches);
        stretches.push(Stretch { calibration_s: calibrate(), ..Stretch::now(threads, placement) });
        let manifest = Manifest {
            schema: header.schema,
            title: header.title.clone(),
            plan_file: plan.file_name.clone(),
            plan_digest: header.plan_digest.clone(),
            plan: plan.text.clone(),
            seed: header.seed,
            round: header.round,
            trials: header.trials,
            imports: header.imports.clone(),
            methods: header.methods.clone(),
            wall_limit_s: header.wall_limit_s,
            memory_limit: header.memory_limit,
            tolerance: header.tolerance,
            stretches,
        };
        manifest.write(folder)?;
        Ok(Started { manifest, busy: machine::Busy::now() })
    }

    fn write(&self, folder: &Path) -> Result<(), FolderError> {
        let text = serde_json::to_string_pretty(self).expect("a manifest is plain data");
        write_whole(&folder.join(FILE), &format!("{text}\n"))
    }
}

/// A stretch that is running.
#[derive(Debug)]
pub(super) struct Started {
    manifest: Manifest,
    busy: Option<machine::Busy>,
}

impl Started {
    /// Writes the end of the stretch.
    pub(super) fn end(mut self, folder: &Path) -> Result<(), FolderError> {
        if let Some(stretch) = self.manifest.stretches.last_mut() {
            stretch.ended = Some(machine::now());
            stretch.others_busy_cores =
                self.busy.and_then(|then| machine::Busy::now()?.others_since(&then));
        }
        self.manifest.write(folder)
    }
}
