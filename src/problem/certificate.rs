//! Exact certificates: whole numbers from which the optimum of a planted problem is proved.
//!
//! A certificate is checked in `i128` with every overflow caught, or in big integers after an
//! overflow; nothing rounds but one definiteness test of [`VerifiedPair`], whose error is bounded. The checks read the problem itself, so they hold for the very floats a
//! method receives. What is not here: making certificates (that is `families`) and judging points
//! (that is `referee`).
//!
//! Ranks are taken modulo the prime 2^61 - 1. They are lower bounds of the rational ranks, which is
//! the direction every proof below needs.

mod cholesky;
mod dual_pair;
mod entries;
mod enumerated;
mod no_proof;
mod nondegeneracy;
mod rank_bound;
mod shared_minimiser;
mod verified;

use num_bigint::BigInt;
use serde::{Deserialize, Serialize};

pub use dual_pair::{BlockPair, DualPair, IntegerColumn, IntegerFactor};
pub use enumerated::{CutPart, EnumeratedCut, LargestCut, MOST_VERTICES, largest_cut};
pub use no_proof::PlantedPoint;
pub use nondegeneracy::{compressed_rank, image_rank};
pub use rank_bound::RankBound;
pub use shared_minimiser::{SharedMinimiser, SignedCycle};
pub use verified::VerifiedPair;

use super::exact::{Overflow, Whole, f64_of_i128};
use super::{Factor, Problem};

/// A proof, in whole numbers, that a problem has a certain rank-constrained optimum.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case", tag = "kind")]
pub enum Certificate {
    /// A primal point, multipliers and a slack that prove each other optimal.
    DualPair(DualPair),
    /// A sign vector that minimises every one of the cycles whose sum is the cost.
    SharedMinimiser(SharedMinimiser),
    /// A rank-r point that attains the Ky Fan bound over 0 <= X <= nI.
    RankBound(RankBound),
    /// A point and multipliers whose slack is proved PSD in floating point with a bound of the error.
    VerifiedPair(VerifiedPair),
    /// A direct sum of small cut problems that are enumerated.
    Enumerated(EnumeratedCut),
    /// No certificate: a feasible point of which no optimality is proved.
    NoProof(PlantedPoint),
}

/// How firmly a certificate proves its optimum.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Standing {
    /// Everything is proved in whole numbers.
    Exact,
    /// Everything is proved, a definiteness in floating point with a bound of its error.
    Verified,
    /// The planted point is feasible; its optimality is not proved, the optimum is not known.
    Unproved,
}

/// Whether a fact is proved. `NotProved` says nothing of its contrary.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Uniqueness {
    /// The optimum is proved to be the only one.
    Proved,
    /// There is no proof; there may be other optima.
    NotProved,
}

/// What a checked certificate proves.
#[derive(Clone, Debug, PartialEq)]
pub struct Proof {
    /// The rank-constrained optimum; for [`Standing::Unproved`] the value of the planted point, which only bounds it.
    pub optimum: i128,
    /// Whether the planted point is the only optimum of the rank-constrained problem.
    pub uniqueness: Uniqueness,
    /// Whether the multipliers of a dual pair are the only optimal ones of the relaxation (the
    /// planted point is primal nondegenerate).
    pub dual_uniqueness: Uniqueness,
    /// How the relaxation's optimum compares with the rank-constrained one.
    pub relaxation: RelaxationFact,
    /// The proved statement in words.
    pub statement: String,
}

/// What a certificate proves of the convex relaxation (the same problem without rank bounds).
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum RelaxationFact {
    /// The relaxation has the same optimum.
    SameOptimum,
    /// The relaxation's optimum is strictly lower.
    StrictlyLower,
    /// Nothing is proved.
    NotProved,
}

/// Says which identity of a certificate fails, and where.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
pub enum CertificateError {
    /// A part of the certificate does not have the size the problem asks for.
    #[error("{what} has size {found}, the problem asks for {expected}")]
    Shape {
        /// The part.
        what: String,
        /// The size the problem asks for.
        expected: usize,
        /// The size found.
        found: usize,
    },
    /// The problem is not of the form the certificate is about.
    #[error("the problem is not of the certificate's form: {0}")]
    Form(String),
    /// A number of the problem is not a whole number.
    #[error("{place} holds {value}, which is no whole number")]
    NotWhole {
        /// Where.
        place: String,
        /// The number.
        value: f64,
    },
    /// Two sides that must be equal differ.
    #[error("{identity} fails at {place}: {left} against {right}")]
    Identity {
        /// The identity in formulas.
        identity: &'static str,
        /// Block, constraint, entry; counted from 1.
        place: String,
        /// Left side.
        left: String,
        /// Right side.
        right: String,
    },
    /// A number violates a condition that is no equation.
    #[error("{place} is {value}, but {condition}")]
    Condition {
        /// The condition in words.
        condition: &'static str,
        /// Where, counted from 1.
        place: String,
        /// The number.
        value: String,
    },
    /// Every identity holds, but the slack is not proved PSD.
    #[error(
        "the slack of block {block} is not proved PSD: the factorisation with its error bound stops at column {column}"
    )]
    Definiteness {
        /// The block, from 1.
        block: usize,
        /// Where the factorisation stopped, from 1.
        column: usize,
    },
    /// A result has no exact float or leaves 128 bits.
    #[error("{what} has no exact 64-bit float")]
    Range {
        /// The result.
        what: String,
    },
}

/// Why a check stopped: an overflow, after which it is repeated in big integers, or a failure.
enum Stop {
    Overflow,
    Fails(CertificateError),
}

impl From<Overflow> for Stop {
    fn from(_: Overflow) -> Self {
        Stop::Overflow
    }
}

impl From<CertificateError> for Stop {
    fn from(error: CertificateError) -> Self {
        Stop::Fails(error)
    }
}

/// Takes the optimum of a check in `i128`, or of the check in big integers when the first overflowed.
///
/// # Errors
/// The identity that fails, or an optimum beyond `i128`.
fn settle(
    narrow: Result<i128, Stop>,
    wide: impl FnOnce() -> Result<BigInt, Stop>,
) -> Result<i128, CertificateError> {
    match narrow {
        Ok(value) => Ok(value),
        Err(Stop::Fails(error)) => Err(error),
        Err(Stop::Overflow) => {
            let value = wide().map_err(Stop::into_error)?;
            value.narrow().ok_or(CertificateError::Range { what: "the optimum".to_owned() })
        }
    }
}

impl Stop {
    /// Turns the stop of a big-integer check, which cannot overflow, into an error.
    fn into_error(self) -> CertificateError {
        match self {
            Stop::Fails(error) => error,
            Stop::Overflow => CertificateError::Range { what: "an intermediate number".to_owned() },
        }
    }
}

impl Certificate {
    /// Checks every identity and condition of the certificate against `problem`.
    ///
    /// # Errors
    /// The first identity or condition that fails, with its place.
    pub fn check(&self, problem: &Problem) -> Result<Proof, CertificateError> {
        match self {
            Certificate::DualPair(pair) => pair.check(problem),
            Certificate::SharedMinimiser(shared) => shared.check(problem),
            Certificate::RankBound(bound) => bound.check(problem),
            Certificate::VerifiedPair(pair) => pair.check(problem),
            Certificate::Enumerated(enumerated) => enumerated.check(problem),
            Certificate::NoProof(point) => point.check(problem),
        }
    }

    /// Returns the kind as one word with hyphens.
    pub fn kind(&self) -> &'static str {
        match self {
            Certificate::DualPair(_) => "dual-pair",
            Certificate::SharedMinimiser(_) => "shared-minimiser",
            Certificate::RankBound(_) => "rank-bound",
            Certificate::VerifiedPair(_) => "verified-pair",
            Certificate::Enumerated(_) => "enumerated",
            Certificate::NoProof(_) => "no-proof",
        }
    }

    /// Returns how firmly a certificate of this kind proves its optimum once it has been checked.
    pub fn standing(&self) -> Standing {
        match self {
            Certificate::DualPair(_)
            | Certificate::SharedMinimiser(_)
            | Certificate::RankBound(_)
            | Certificate::Enumerated(_) => Standing::Exact,
            Certificate::VerifiedPair(_) => Standing::Verified,
            Certificate::NoProof(_) => Standing::Unproved,
        }
    }
}

/// A problem with a planted point and what is proved of it. It is made only by [`Planted::prove`].
#[derive(Clone, Debug)]
pub struct Planted {
    /// The problem.
    pub problem: Problem,
    /// The certificate, checked.
    pub certificate: Certificate,
    /// The value of the planted point, a whole number: the rank-constrained optimum unless the certificate's standing is
    /// [`Standing::Unproved`]; see [`Planted::proved_optimum`].
    pub optimum: f64,
    /// The planted point X* = V V' by one factor V a block.
    pub point: Vec<Factor>,
    /// The planted nonnegative part.
    pub orthant_point: Vec<f64>,
    /// Whether the planted point is proved to be the only optimum.
    pub uniqueness: Uniqueness,
    /// The multipliers y of an exact dual certificate, when the certificate has them.
    pub dual: Option<Vec<f64>>,
    /// Everything that was proved.
    pub proof: Proof,
}

impl Planted {
    /// Checks `certificate` against `problem` and joins them.
    ///
    /// # Errors
    /// The identity that fails, or a planted number that no `f64` holds exactly.
    pub fn prove(problem: Problem, certificate: Certificate) -> Result<Self, CertificateError> {
        let proof = certificate.check(&problem)?;
        let optimum = exact_float(proof.optimum, || "the optimum".to_owned())?;
        let (point, orthant_point, dual) = match &certificate {
            Certificate::DualPair(pair) => {
                (pair.point()?, floats(&pair.orthant, "x")?, Some(floats(&pair.multipliers, "y")?))
            }
            Certificate::SharedMinimiser(shared) => (vec![shared.point()], Vec::new(), None),
            Certificate::RankBound(bound) => (bound.point(), Vec::new(), None),
            Certificate::VerifiedPair(pair) => {
                (pair.point()?, floats(&pair.orthant, "x")?, Some(floats(&pair.multipliers, "y")?))
            }
            Certificate::Enumerated(enumerated) => (vec![enumerated.point()], Vec::new(), None),
            Certificate::NoProof(point) => (point.point()?, floats(&point.orthant, "x")?, None),
        };
        let uniqueness = proof.uniqueness;
        Ok(Planted { problem, certificate, optimum, point, orthant_point, uniqueness, dual, proof })
    }

    /// Returns the rank-constrained optimum where it is proved, and nothing otherwise.
    pub fn proved_optimum(&self) -> Option<f64> {
        (self.certificate.standing() != Standing::Unproved).then_some(self.optimum)
    }
}

fn exact_float(value: i128, what: impl Fn() -> String) -> Result<f64, CertificateError> {
    f64_of_i128(value).ok_or_else(|| CertificateError::Range { what: what() })
}

fn floats(values: &[i64], name: &str) -> Result<Vec<f64>, CertificateError> {
    let convert = |(i, value): (usize, &i64)| {
        exact_float(i128::from(*value), || format!("entry {} of {name}", i + 1))
    };
    values.iter().enumerate().map(convert).collect()
}

fn expect_size(what: &str, expected: usize, found: usize) -> Result<(), CertificateError> {
    if expected == found {
        return Ok(());
    }
    Err(CertificateError::Shape { what: what.to_owned(), expected, found })
}
