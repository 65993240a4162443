//! Dense and iterative linear algebra kernels over `faer`, in `f64`, single-threaded and without allocation once warm.
//!
//! Vectors are `&[f64]`, dense matrices are column-major [`Mat`], [`MatRef`] and [`MatMut`]. Symmetric input is read from its
//! lower triangle. Every kernel takes its scratch from a [`workspace::Workspace`] or owns it. A wrong shape is a mistake of the
//! caller and panics; bad data (a NaN, a matrix that is not positive definite) is an error that names the place.
//!
//! This module is not for sparse storage, and it knows nothing of semidefinite programs.

pub mod cg;
pub mod cholesky;
pub mod compensated;
pub mod dense;
pub mod eigen;
pub mod lanczos;
pub mod norms;
pub mod null_space;
pub mod packed;
pub mod project;
pub mod vector;
pub mod workspace;

#[cfg(test)]
mod tests;

pub use faer::{Mat, MatMut, MatRef};
