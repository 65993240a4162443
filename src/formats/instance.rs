//! Native instance files: a problem with its rank bounds, and its certificate when it has one.
//!
//! The file is JSON, by custom named `*.assay.json`. Indices count from 1, as in sparse SDPA files.
//!
//! ```text
//! { "assay": "instance", "version": 1,
//!   "origin": "family and seed, or any text",
//!   "blocks": [{"order": 5, "rank": 1}, {"order": 3}],          rank left out: free
//!   "nonnegative": 2,
//!   "cost": {"parts": [{"block": 1, "entries": [[1, 2, -0.5]]}], "nonnegative": [[1, 4]]},
//!   "constraints": [
//!     {"parts": [{"block": 1, "outer": [{"weight": 1, "vector": [[1, 1], [2, -1]]}]}]} ],
//!   "rhs": [1],
//!   "digest": "...", "certificate": ... }
//! ```
//!
//! `entries` lists `[row, column, value]` of the upper triangle, each position once; `outer` lists
//! weighted outer products `weight * a a'`. The reader does not prove the certificate: whoever relies
//! on it proves it anew from the problem.

use super::json::{self, Step};
use super::{
    FormatError, FormatErrorKind as Kind, MAX_FILE_BYTES, MAX_TOTAL_ORDER, Source, read_text,
};
use crate::problem::canonical::digest;
use crate::problem::certificate::Certificate;
use crate::problem::{
    Block, Coefficient, Functional, OuterSum, OuterTerm, Problem, SparseSymmetric, SparseVector,
};
use serde::{Deserialize, Serialize};
use std::fmt::Write as _;
use std::path::Path;

/// Version of the layout that this program writes and reads.
pub const VERSION: u32 = 1;

/// What an instance file holds.
#[derive(Clone, Debug)]
pub struct Instance {
    /// The problem, with its rank bounds.
    pub problem: Problem,
    /// The certificate of its optimum, unproved as read.
    pub certificate: Option<Certificate>,
    /// Where the instance comes from; free text, may be empty.
    pub origin: String,
}

#[derive(Deserialize)]
#[serde(deny_unknown_fields)]
struct InstanceText {
    assay: String,
    version: u32,
    #[serde(default)]
    origin: String,
    blocks: Vec<BlockText>,
    #[serde(default)]
    nonnegative: usize,
    cost: FunctionalText,
    constraints: Vec<FunctionalText>,
    rhs: Vec<f64>,
    #[serde(default)]
    digest: Option<String>,
    #[serde(default)]
    certificate: Option<Certificate>,
}

#[derive(Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
struct BlockText {
    order: usize,
    #[serde(default, skip_serializing_if = "Option::is_none")]
    rank: Option<usize>,
}

#[derive(Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
struct FunctionalText {
    #[serde(default, skip_serializing_if = "Vec::is_empty")]
    parts: Vec<PartText>,
    #[serde(default, skip_serializing_if = "Vec::is_empty")]
    nonnegative: Vec<(usize, f64)>,
}

#[derive(Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
struct PartText {
    block: usize,
    #[serde(default, skip_serializing_if = "Option::is_none")]
    entries: Option<Vec<(usize, usize, f64)>>,
    #[serde(default, skip_serializing_if = "Option::is_none")]
    outer: Option<Vec<TermText>>,
}

#[derive(Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
struct TermText {
    weight: f64,
    vector: Vec<(usize, f64)>,
}

/// Reads a native instance file.
///
/// # Errors
/// The file is unreadable, or its text is refused; see [`parse`].
pub fn read(path: &Path) -> Result<Instance, FormatError> {
    let text = read_text(path, MAX_FILE_BYTES)?;
    parse(&text, &path.display().to_string())
}

/// Reads the text of a native instance file; `file` is the name that errors carry.
///
/// # Errors
/// Text that is not JSON, a field that is missing, unknown or of the wrong type, a version other
/// than [`VERSION`], an index or size outside its range, a position given twice, a digest that does
/// not fit.
pub fn parse(text: &str, file: &str) -> Result<Instance, FormatError> {
    let source = Source { file, text };
    let raw: InstanceText = json::from_text(source)?;
    let checker = Checker { source };
    if raw.assay != "instance" {
        return checker.refuse(&[Step::Key("assay")], Kind::Unexpected, "\"instance\"");
    }
    if raw.version != VERSION {
        let expected = format!("layout version {VERSION}");
        return checker.refuse(&[Step::Key("version")], Kind::Unexpected, expected);
    }
    let blocks = checker.blocks(&raw)?;
    let cost = checker.functional(&raw.cost, &blocks, raw.nonnegative, &[Step::Key("cost")])?;
    let mut constraints = Vec::with_capacity(raw.constraints.len());
    for (index, constraint) in raw.constraints.iter().enumerate() {
        let path = [Step::Key("constraints"), Step::Item(index)];
        constraints.push(checker.functional(constraint, &blocks, raw.nonnegative, &path)?);
    }
    if raw.rhs.len() != constraints.len() {
        let expected = format!("{} right sides, one a constraint", constraints.len());
        return checker.refuse(&[Step::Key("rhs")], Kind::OutOfRange, expected);
    }
    let problem = Problem::new(blocks, raw.nonnegative, cost, constraints, raw.rhs)
        .or_else(|error| checker.refuse(&[], Kind::Unexpected, format!("a problem ({error})")))?;
    if let Some(written) = &raw.digest {
        let computed = digest(&problem);
        if computed != *written {
            let expected = format!("the digest of this problem, {computed}");
            return checker.refuse(&[Step::Key("digest")], Kind::Digest, expected);
        }
    }
    Ok(Instance { problem, certificate: raw.certificate, origin: raw.origin })
}

struct Checker<'a> {
    source: Source<'a>,
}

/// Path of a value that is being checked, with the steps of the caller in front.
fn join<'a>(path: &[Step<'a>], steps: &[Step<'a>]) -> Vec<Step<'a>> {
    [path, steps].concat()
}

impl Checker<'_> {
    fn refuse<T>(
        &self,
        path: &[Step<'_>],
        kind: Kind,
        expected: impl Into<String>,
    ) -> Result<T, FormatError> {
        Err(json::error_at(self.source, path, kind, expected))
    }

    fn blocks(&self, raw: &InstanceText) -> Result<Vec<Block>, FormatError> {
        let mut total = raw.nonnegative;
        if total > MAX_TOTAL_ORDER {
            let expected = format!("at most {MAX_TOTAL_ORDER} nonnegative scalars");
            return self.refuse(&[Step::Key("nonnegative")], Kind::TooLarge, expected);
        }
        let mut blocks = Vec::with_capacity(raw.blocks.len());
        for (index, block) in raw.blocks.iter().enumerate() {
            let path = |field| [Step::Key("blocks"), Step::Item(index), Step::Key(field)];
            total = total.saturating_add(block.order);
            if block.order == 0 {
                return self.refuse(&path("order"), Kind::OutOfRange, "an order of at least 1");
            }
            if total > MAX_TOTAL_ORDER {
                let expected = format!("orders that sum to at most {MAX_TOTAL_ORDER}");
                return self.refuse(&path("order"), Kind::TooLarge, expected);
            }
            if block.rank.is_some_and(|rank| rank == 0 || rank > block.order) {
                let expected = format!("a rank bound from 1 to {}", block.order);
                return self.refuse(&path("rank"), Kind::OutOfRange, expected);
            }
            blocks.push(Block { order: block.order, rank: block.rank });
        }
        Ok(blocks)
    }

    fn functional(
        &self,
        raw: &FunctionalText,
        blocks: &[Block],
        orthant: usize,
        path: &[Step<'_>],
    ) -> Result<Functional, FormatError> {
        let mut parts: Vec<(usize, Coefficient)> = Vec::with_capacity(raw.parts.len());
        for (index, part) in raw.parts.iter().enumerate() {
            let path = join(path, &[Step::Key("parts"), Step::Item(index)]);
            if part.block == 0 || part.block > blocks.len() {
                let expected = format!("a block from 1 to {}", blocks.len());
                return self.refuse(
                    &join(&path, &[Step::Key("block")]),
                    Kind::OutOfRange,
                    expected,
                );
            }
            let block = part.block - 1;
            if parts.last().is_some_and(|(last, _)| *last >= block) {
                let expected = "blocks in ascending order, each once";
                return self.refuse(&join(&path, &[Step::Key("block")]), Kind::Duplicate, expected);
            }
            let order = blocks[block].order;
            let coefficient = match (&part.entries, &part.outer) {
                (Some(entries), None) => self.entries(entries, order, &path)?,
                (None, Some(terms)) => self.outer(terms, order, &path)?,
                _ => return self.refuse(&path, Kind::Unexpected, "either `entries` or `outer`"),
            };
            parts.push((block, coefficient));
        }
        let path = join(path, &[Step::Key("nonnegative")]);
        Ok(Functional { parts, orthant: self.vector(&raw.nonnegative, orthant, &path)? })
    }

    fn entries(
        &self,
        entries: &[(usize, usize, f64)],
        order: usize,
        path: &[Step<'_>],
    ) -> Result<Coefficient, FormatError> {
        let at = |index| join(path, &[Step::Key("entries"), Step::Item(index)]);
        let mut positions = Vec::with_capacity(entries.len());
        let mut triples = Vec::with_capacity(entries.len());
        for (index, &(row, column, value)) in entries.iter().enumerate() {
            if row == 0 || column == 0 || row > order || column > order {
                let expected = format!("a row and a column from 1 to {order}");
                return self.refuse(&at(index), Kind::OutOfRange, expected);
            }
            if row > column {
                let expected = "an entry of the upper triangle, with a row of at most its column";
                return self.refuse(&at(index), Kind::LowerTriangle, expected);
            }
            positions.push((column, row, index));
            triples.push((row - 1, column - 1, value));
        }
        positions.sort_unstable();
        let same =
            |pair: &&[(usize, usize, usize)]| (pair[0].0, pair[0].1) == (pair[1].0, pair[1].1);
        if let Some(pair) = positions.windows(2).find(same) {
            let expected = "a position that no earlier entry gives";
            return self.refuse(&at(pair[1].2), Kind::Duplicate, expected);
        }
        Ok(Coefficient::Sparse(SparseSymmetric::gather(order, triples)))
    }

    fn outer(
        &self,
        terms: &[TermText],
        order: usize,
        path: &[Step<'_>],
    ) -> Result<Coefficient, FormatError> {
        let mut out = Vec::with_capacity(terms.len());
        for (index, term) in terms.iter().enumerate() {
            let path = join(path, &[Step::Key("outer"), Step::Item(index), Step::Key("vector")]);
            out.push(OuterTerm {
                weight: term.weight,
                vector: self.vector(&term.vector, order, &path)?,
            });
        }
        Ok(Coefficient::Outer(OuterSum { order, terms: out }))
    }

    fn vector(
        &self,
        pairs: &[(usize, f64)],
        order: usize,
        path: &[Step<'_>],
    ) -> Result<SparseVector, FormatError> {
        let mut vector = SparseVector::default();
        let mut last = 0;
        for (position, &(index, value)) in pairs.iter().enumerate() {
            if index <= last || index > order {
                let expected = format!("ascending indices from 1 to {order}");
                let path = join(path, &[Step::Item(position)]);
                return self.refuse(&path, Kind::OutOfRange, expected);
            }
            last = index;
            vector.indices.push(index as u32 - 1);
            vector.values.push(value);
        }
        Ok(vector)
    }
}

/// Writes an instance as text: one constraint a line, numbers so that they read back to the same bits.
pub fn write(instance: &Instance) -> String {
    let problem = &instance.problem;
    let json = |value: &dyn erased::Json| value.text();
    let blocks: Vec<BlockText> = problem
        .blocks()
        .iter()
        .map(|block| BlockText { order: block.order, rank: block.rank })
        .collect();
    let mut text = String::new();
    let _ = writeln!(text, "{{ \"assay\": \"instance\", \"version\": {VERSION},");
    let _ = writeln!(text, "\"origin\": {},", json(&instance.origin));
    let _ = writeln!(text, "\"blocks\": {},", json(&blocks));
    let _ = writeln!(text, "\"nonnegative\": {},", problem.orthant());
    let _ = writeln!(text, "\"cost\": {},", json(&functional_text(problem.cost())));
    text.push_str("\"constraints\": [");
    for (index, constraint) in problem.constraints().iter().enumerate() {
        text.push_str(if index == 0 { "\n" } else { ",\n" });
        text.push_str(&json(&functional_text(constraint)));
    }
    let _ = write!(text, "],\n\"rhs\": {}", json(&problem.rhs()));
    let _ = write!(text, ",\n\"digest\": {}", json(&digest(problem)));
    if let Some(certificate) = &instance.certificate {
        let _ = write!(text, ",\n\"certificate\": {}", json(certificate));
    }
    text.push_str(" }\n");
    text
}

/// Serialising of plain data, which cannot fail.
mod erased {
    pub(super) trait Json {
        fn text(&self) -> String;
    }

    impl<T: serde::Serialize> Json for T {
        fn text(&self) -> String {
            serde_json::to_string(self).expect("plain data with finite numbers serialise")
        }
    }
}

fn functional_text(functional: &Functional) -> FunctionalText {
    let pairs = |vector: &SparseVector| vector.iter().map(|(i, value)| (i + 1, value)).collect();
    let parts = functional
        .parts
        .iter()
        .map(|(block, coefficient)| match coefficient {
            Coefficient::Sparse(matrix) => PartText {
                block: block + 1,
                entries: Some(matrix.iter().map(|(i, j, value)| (i + 1, j + 1, value)).collect()),
                outer: None,
            },
            Coefficient::Outer(sum) => {
                let term = |t: &OuterTerm| TermText { weight: t.weight, vector: pairs(&t.vector) };
                PartText {
                    block: block + 1,
                    entries: None,
                    outer: Some(sum.terms.iter().map(term).collect()),
                }
            }
        })
        .collect();
    FunctionalText { parts, nonnegative: pairs(&functional.orthant) }
}

/// Writes an instance to a file; see [`write()`].
///
/// # Errors
/// The file cannot be written.
pub fn save(path: &Path, instance: &Instance) -> std::io::Result<()> {
    std::fs::write(path, write(instance))
}
