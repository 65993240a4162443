//! Numerical engines that methods are composed of. An engine knows problems, budgets and streams; it
//! knows no method and judges nothing.

pub mod affine;
pub mod alm;
pub mod anderson;
pub mod lbfgs;
pub mod newton;
