//! Randomised rounding of a relaxation's factor: to signs, to a lower rank, and back onto the constraints.
//!
//! [`hyperplane`] draws sign vectors from a factor with unit rows and improves them by local search ([`signs`]);
//! [`gaussian`] multiplies a factor by a random matrix of fewer columns; [`restore`] moves factors onto A(X) = b
//! by Gauss-Newton steps. Nothing here solves a relaxation, and nothing here knows an optimum: objective values
//! choose between points, and a lower bound, when the caller has one, ends a search early.

pub mod gaussian;
pub mod hyperplane;
pub mod relaxed;
pub mod restore;
pub mod signs;
