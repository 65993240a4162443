//! x
pub mod linalg;
