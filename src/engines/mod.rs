//! Numerical engines that methods are composed of. An engine knows nothing of methods, families or
//! the referee; each has `Params`, `Info` and an error or outcome of its own.

pub mod ipm;
pub mod reduction;
