//! Numerical engines that methods are composed of. An engine knows problems, budgets and streams; it
//! knows no method, no family and no referee. Each has `Params`, `Info` and an outcome or error.

pub mod admm;
pub mod affine;
pub mod alm;
pub mod anderson;
pub mod ipm;
pub mod lbfgs;
pub mod newton;
pub mod projections;
pub mod reduction;
pub mod reweighting;
pub mod rounding;
