//! The plan: what a run is made of, read from a TOML file.
//!
//! Reading has two phases. The reader walks the parsed document with the position of every key and
//! value at hand; the sections make a [`Plan`] of it, in which every name, option and number has
//! been resolved and checked. Every error says where it is, what stands there, what was expected,
//! and the nearest valid word. Files named by the plan are not read here, see `runner::instance`.

mod error;
mod quantity;
mod reader;
mod sections;

pub use error::{Located, PlanError};

use std::collections::BTreeMap;
use std::path::PathBuf;

use crate::budget::Budget;
use crate::card::Settings;
use crate::families::Family;
use crate::methods::Method;
use crate::methods::outside::Outside;
use crate::record::MethodRecord;
use crate::referee::Tolerance;

use reader::{Document, Section};

/// The families and methods that a plan may name.
#[derive(Clone, Copy)]
pub struct Roster<'a> {
    /// Families.
    pub families: &'a [&'a dyn Family],
    /// Methods.
    pub methods: &'a [&'a dyn Method],
}

impl Roster<'static> {
    /// Returns the built-in families and methods.
    pub fn built_in() -> Self {
        Roster { families: crate::families::registry(), methods: crate::methods::registry() }
    }
}

impl std::fmt::Debug for Roster<'_> {
    fn fmt(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        let families: Vec<_> = self.families.iter().map(|family| family.card().id).collect();
        let methods: Vec<_> = self.methods.iter().map(|method| method.card().id).collect();
        f.debug_struct("Roster").field("families", &families).field("methods", &methods).finish()
    }
}

/// Longest plan that is read, in bytes.
pub const MOST_BYTES: usize = 1 << 20;

/// Most combinations of families and parameters in a plan.
const MOST_COMBINATIONS: usize = 100_000;

/// A place in the plan's text, as byte offsets.
pub type Span = std::ops::Range<usize>;

/// One combination of a family and its parameters.
#[derive(Clone)]
pub struct Sown<'a> {
    /// The family.
    pub family: &'a dyn Family,
    /// Resolved parameters.
    pub parameters: Settings,
    /// Number of instances.
    pub count: u64,
    /// Where the combination's section names its family.
    pub span: Span,
    /// Where the values of the parameters that the section gives stand, by name.
    pub places: BTreeMap<String, Span>,
}

impl Sown<'_> {
    /// Returns the place of the first parameter that `reason` speaks of, or of the family's name.
    pub(super) fn place_of(&self, reason: &str) -> Span {
        let word = |c: char| !(c.is_alphanumeric() || c == '-' || c == '_');
        let spoken = reason.split(word).find_map(|name| self.places.get(name));
        spoken.unwrap_or(&self.span).clone()
    }
}

/// A published or computed optimum of an imported instance.
#[derive(Clone, Debug, PartialEq)]
pub struct ReportedOptimum {
    /// The value.
    pub value: f64,
    /// Number of significant digits that are right.
    pub digits: u32,
    /// Who reports it.
    pub source: String,
}

impl ReportedOptimum {
    /// Returns the relative accuracy that the digits stand for, `0.5 * 10^(1 - digits)`: the largest
    /// relative error of rounding to that many significant digits.
    pub fn accuracy(&self) -> f64 {
        0.5 * 10f64.powi(1 - self.digits as i32)
    }
}

/// One imported file.
#[derive(Clone, Debug)]
pub struct Imported {
    /// Path as written in the plan.
    pub path: String,
    /// The same path, from the plan's folder.
    pub resolved: PathBuf,
    /// Rank bound put on every PSD block, none to keep the file's own.
    pub rank: Option<usize>,
    /// Optimum, if the plan gives one.
    pub optimum: Option<ReportedOptimum>,
    /// Where the plan names the path.
    pub span: Span,
}

/// A method with its options, as it takes part in a run.
#[derive(Clone)]
pub struct Entrant<'a> {
    /// Label, unique in the plan.
    pub label: String,
    /// The method.
    pub player: Player<'a>,
    /// Resolved options.
    pub options: Settings,
}

/// A method that takes part: one of the roster, or another program.
#[derive(Clone)]
pub enum Player<'a> {
    /// One of the roster.
    Listed(&'a dyn Method),
    /// Another program.
    Outside(Outside),
}

impl Entrant<'_> {
    /// Returns the method.
    pub fn method(&self) -> &dyn Method {
        match &self.player {
            Player::Listed(method) => *method,
            Player::Outside(outside) => outside,
        }
    }

    /// Describes the entrant for the journal and the tables.
    pub fn record(&self) -> MethodRecord {
        let card = self.method().card();
        MethodRecord {
            label: self.label.clone(),
            id: card.id.to_owned(),
            class: card.class.word().to_owned(),
            options: self.options.to_string(),
        }
    }
}

/// A checked plan.
#[derive(Clone)]
pub struct Plan<'a> {
    /// Title.
    pub title: String,
    /// File name, for messages.
    pub file_name: String,
    /// Folder that paths in the plan start from.
    pub folder: PathBuf,
    /// The whole text.
    pub text: String,
    /// SHA-256 of the text, in hexadecimal digits.
    pub digest: String,
    /// Master seed.
    pub seed: u64,
    /// Timed repeats of each trial.
    pub repeats: u64,
    /// Limits of each trial.
    pub budget: Budget,
    /// The referee's tolerances.
    pub tolerance: Tolerance,
    /// Combinations of families and parameters, in plan order.
    pub sown: Vec<Sown<'a>>,
    /// Imported files, in plan order.
    pub imported: Vec<Imported>,
    /// Methods, in plan order.
    pub entrants: Vec<Entrant<'a>>,
    /// Which trials leave a convergence trace.
    pub traced: Traced,
    /// 0 for the plan itself, k for its k-th continuation with fresh instances.
    pub round: u64,
}

/// Which trials leave a convergence trace.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Traced {
    /// None.
    Nothing,
    /// Those on the first instance of every combination and on imported ones, first repeat.
    First,
    /// All of them.
    All,
}

impl std::fmt::Debug for Plan<'_> {
    fn fmt(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        let labels: Vec<_> = self.entrants.iter().map(|entrant| &entrant.label).collect();
        f.debug_struct("Plan")
            .field("file_name", &self.file_name)
            .field("methods", &labels)
            .finish_non_exhaustive()
    }
}

impl<'a> Plan<'a> {
    /// Reads a plan from its text. `file_name` is used in messages; paths in the plan start from
    /// `folder`.
    ///
    /// # Errors
    /// The first thing, from the top of the file, that is not as it must be.
    pub fn parse(
        text: &str,
        file_name: &str,
        folder: &std::path::Path,
        roster: Roster<'a>,
    ) -> Result<Self, PlanError> {
        let document = Document::new(text, file_name);
        if text.len() > MOST_BYTES {
            let message = format!("a plan of {} bytes", text.len());
            return Err(document.missing(&message, &format!("at most {MOST_BYTES} bytes")));
        }
        let table = document.parse()?;
        let top = Section::top(&document, &table);
        top.only(&[
            "title",
            "seed",
            "repeats",
            "traces",
            "budget",
            "tolerance",
            "family",
            "import",
            "method",
        ])?;
        let stem = file_name.strip_suffix(".toml").unwrap_or(file_name);
        let plan = Plan {
            title: top.text("title")?.map_or_else(|| stem.to_owned(), |title| title.value),
            file_name: file_name.to_owned(),
            folder: folder.to_owned(),
            text: text.to_owned(),
            digest: super::hexadecimal_digest(text.as_bytes()),
            seed: sections::seed(&top)?,
            repeats: top.whole("repeats", 1, 1000)?.map_or(1, |repeats| repeats.value),
            budget: sections::budget(&top)?,
            tolerance: sections::tolerance(&top)?,
            sown: sections::families(&top, roster.families)?,
            imported: sections::imports(&top, folder)?,
            entrants: sections::methods(&top, roster.methods, folder)?,
            traced: sections::traced(&top)?,
            round: 0,
        };
        if plan.sown.is_empty() && plan.imported.is_empty() {
            return Err(document
                .missing("a plan without instances", "at least one [[family]] or [[import]]"));
        }
        if plan.entrants.is_empty() {
            return Err(document.missing("a plan without methods", "at least one [[method]]"));
        }
        plan.check_size(&document)?;
        Ok(plan)
    }

    /// Returns the plan's continuation: the same combinations with fresh instances, numbered on from those of
    /// the rounds before, without imported files.
    pub fn in_round(self, round: u64) -> Self {
        let imported = if round == 0 { self.imported } else { Vec::new() };
        Plan { imported, round, ..self }
    }

    /// Returns an error at a place in the plan's text; the message says what was expected.
    pub fn error_at(&self, span: Span, message: &str) -> PlanError {
        Document::new(&self.text, &self.file_name).error(span, message, "", None)
    }

    /// Returns the number of trials of the whole plan.
    pub fn trial_count(&self) -> u64 {
        let sown: u64 = self.sown.iter().map(|sown| sown.count).sum();
        (sown + self.imported.len() as u64) * self.entrants.len() as u64 * self.repeats
    }

    fn check_size(&self, document: &Document<'_>) -> Result<(), PlanError> {
        const MOST: u128 = 10_000_000;
        let instances: u128 = self.sown.iter().map(|sown| u128::from(sown.count)).sum::<u128>()
            + self.imported.len() as u128;
        let trials = instances * self.entrants.len() as u128 * u128::from(self.repeats);
        if trials > MOST {
            let message = format!("a plan of {trials} trials");
            return Err(document.missing(&message, &format!("at most {MOST} trials")));
        }
        Ok(())
    }
}
