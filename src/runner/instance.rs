//! Instances: planted from a named stream or read from a file, with what is known of their optimum.

use std::path::Path;

use crate::card::Settings;
use crate::families::{Family, PlantError};
use crate::formats::{self, FormatError};
use crate::problem::certificate::{Planted, Standing, Uniqueness};
use crate::problem::{Factor, Problem, canonical};
use crate::record::InstanceRecord;
use crate::referee::{Known, KnownOptimum};
use crate::seed::Stream;

/// What is known of an instance, apart from the problem itself, so that methods never see it.
#[derive(Clone, Debug)]
pub struct Knowledge {
    /// The rank-constrained optimum.
    pub optimum: KnownOptimum,
    /// Multipliers of a proved dual certificate.
    pub dual: Option<Vec<f64>>,
    /// The only optimal point, by factors.
    pub unique_point: Option<Vec<Factor>>,
}

impl Knowledge {
    /// Knows nothing.
    pub fn none() -> Self {
        Knowledge { optimum: KnownOptimum::Unknown, dual: None, unique_point: None }
    }

    /// Lends the knowledge to the referee.
    pub fn known(&self) -> Known<'_> {
        Known {
            optimum: self.optimum,
            dual: self.dual.as_deref(),
            unique_point: self.unique_point.as_deref(),
        }
    }

    /// Returns the optimum's value, however it is known.
    pub fn optimum_value(&self) -> Option<f64> {
        match self.optimum {
            KnownOptimum::Certified(value) | KnownOptimum::Reported { value, .. } => Some(value),
            KnownOptimum::Unknown => None,
        }
    }
}

/// An instance: its problem, what is known of it, and what its record says.
#[derive(Clone, Debug)]
pub struct Instance {
    /// The problem.
    pub problem: Problem,
    /// What is known.
    pub knowledge: Knowledge,
    /// What `instances.csv` says; ids and parameters are the caller's to fill in.
    pub record: InstanceRecord,
}

/// Says why an instance file cannot be used.
#[derive(Debug, thiserror::Error)]
pub enum InputError {
    /// The file is not in its format.
    #[error("{0}")]
    Format(#[from] FormatError),
    /// The rank bound does not fit the file's blocks.
    #[error("{file}: rank {rank} does not fit: {reason}")]
    Rank {
        /// The file.
        file: String,
        /// The rank bound.
        rank: usize,
        /// What does not fit.
        reason: String,
    },
    /// The optimum that the plan reports is not the one that the file's certificate proves.
    #[error("{file}: its certificate proves the optimum {certified:?}, not {reported:?}")]
    Optimum {
        /// The file.
        file: String,
        /// The certified optimum.
        certified: f64,
        /// The reported one.
        reported: f64,
    },
    /// The certificate in the file does not prove its optimum.
    #[error("{file}: the certificate does not hold: {reason}")]
    Certificate {
        /// The file.
        file: String,
        /// What does not hold.
        reason: String,
    },
}

/// Describes a problem for its record.
fn describe(problem: &Problem) -> InstanceRecord {
    let bounded = problem.blocks().iter().filter_map(|block| block.rank).max();
    let largest = problem.blocks().iter().map(|block| block.order).max().unwrap_or(0);
    InstanceRecord {
        instance: String::new(),
        family: String::new(),
        parameters: String::new(),
        index: 0,
        seed: 0,
        blocks: problem.blocks().len() as u64,
        orthant: problem.orthant() as u64,
        order: problem.total_order() as u64,
        constraints: problem.constraints().len() as u64,
        target_rank: bounded.unwrap_or(largest) as u64,
        rank_bound: problem.rank_bound() as u64,
        digest: canonical::digest(problem),
        optimum: None,
        optimum_known: "unknown".to_owned(),
        certificate: "none".to_owned(),
        uniqueness: "unknown".to_owned(),
        relaxation: String::new(),
        source: String::new(),
    }
}

impl Instance {
    /// Wraps a planted instance. One without a proof has no known optimum, like a problem read from a file; its kind of
    /// certificate, `no-proof`, says so in the record.
    pub fn from_planted(planted: Planted) -> Self {
        if planted.certificate.standing() == Standing::Unproved {
            let record = InstanceRecord {
                certificate: planted.certificate.kind().to_owned(),
                uniqueness: "not-proved".to_owned(),
                ..describe(&planted.problem)
            };
            return Instance { problem: planted.problem, knowledge: Knowledge::none(), record };
        }
        let (uniqueness, unique) = match planted.uniqueness {
            Uniqueness::Proved => ("proved", true),
            Uniqueness::NotProved => ("not-proved", false),
        };
        let record = InstanceRecord {
            optimum: crate::record::measured(planted.optimum),
            optimum_known: "certified".to_owned(),
            certificate: planted.certificate.kind().to_owned(),
            uniqueness: uniqueness.to_owned(),
            ..describe(&planted.problem)
        };
        let knowledge = Knowledge {
            optimum: KnownOptimum::Certified(planted.optimum),
            dual: planted.dual,
            unique_point: unique.then_some(planted.point),
        };
        Instance { problem: planted.problem, knowledge, record }
    }

    /// Wraps a problem of which nothing is known.
    pub fn from_problem(problem: Problem) -> Self {
        let record = describe(&problem);
        Instance { problem, knowledge: Knowledge::none(), record }
    }

    /// Puts a rank bound on every PSD block that is not smaller than it. A certificate was proved for
    /// the bounds of the file, so changing them drops what is known.
    ///
    /// # Errors
    /// The rank does not fit.
    pub fn with_rank(self, rank: usize, file: &str) -> Result<Self, InputError> {
        let refuse = |reason: String| InputError::Rank { file: file.to_owned(), rank, reason };
        if self.problem.blocks().iter().all(|block| block.order < rank) {
            return Err(refuse("every block is smaller".to_owned()));
        }
        let problem =
            formats::with_ranks(&self.problem, rank).map_err(|error| refuse(error.to_string()))?;
        if problem == self.problem { Ok(self) } else { Ok(Instance::from_problem(problem)) }
    }

    /// Adds an optimum that somebody reports; where one is certified, the two must agree and the
    /// certified one stays.
    ///
    /// # Errors
    /// The reported value is farther from the certified one than its digits allow.
    pub(super) fn with_reported(
        mut self,
        reported: &super::ReportedOptimum,
        file: &str,
    ) -> Result<Self, InputError> {
        let (value, accuracy) = (reported.value, reported.accuracy());
        match self.knowledge.optimum {
            KnownOptimum::Certified(certified) => {
                if (certified - value).abs() > accuracy * (1.0 + value.abs()) {
                    let file = file.to_owned();
                    return Err(InputError::Optimum { file, certified, reported: value });
                }
            }
            _ => {
                self.knowledge.optimum = KnownOptimum::Reported { value, accuracy };
                self.record.optimum = crate::record::measured(value);
                self.record.optimum_known = "reported".to_owned();
                self.record.source = format!("{} digits: {}", reported.digits, reported.source);
            }
        }
        Ok(self)
    }
}

/// Plants the instance of a family that the master seed, the parameters and the index name.
///
/// # Errors
/// See [`PlantError`].
pub fn plant(
    family: &dyn Family,
    parameters: &Settings,
    seed: u64,
    index: u64,
) -> Result<Planted, PlantError> {
    let labels = ["plant", family.card().id, &parameters.to_string(), &index.to_string()];
    family.plant(parameters, &mut Stream::named(seed, &labels))
}

/// Reads an instance file: sparse SDPA when its name ends in `.dat-s`, the tables of a power network when it ends in
/// `.toml`, the native format otherwise.
///
/// # Errors
/// The file is unreadable or not in its format, or its certificate does not hold.
pub fn read_instance(path: &Path) -> Result<Instance, InputError> {
    if path.extension().is_some_and(|extension| extension == "dat-s") {
        return Ok(Instance::from_problem(formats::sdpa::read(path)?.problem));
    }
    if path.extension().is_some_and(|extension| extension == "toml") {
        return Ok(Instance::from_problem(formats::network::read(path)?.problem));
    }
    let read = formats::instance::read(path)?;
    let Some(certificate) = read.certificate else {
        return Ok(Instance::from_problem(read.problem));
    };
    // A file proves nothing by itself: its certificate is checked anew.
    let planted = Planted::prove(read.problem, certificate).map_err(|error| {
        InputError::Certificate { file: path.display().to_string(), reason: error.to_string() }
    })?;
    Ok(Instance::from_planted(planted))
}
