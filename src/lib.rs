//! Plants semidefinite programs with a rank constraint whose low-rank optimum is proved, runs
//! pluggable heuristics on them under equal budgets, judges every answer with an independent
//! referee, and tabulates accuracy, rank and runtime.
//!
//! The problem throughout is
//!
//! ```text
//! minimise   <C, X> + c'x
//! subject to <A_i, X> + a_i'x = b_i   (i = 1..m),   X = diag(X_1, ..., X_p) PSD,   x >= 0,
//!            rank X_k <= r_k on the blocks that carry a bound,
//! ```
//!
//! which is nonconvex through its last line. See `DEVELOPERS.md` for the map of the modules.

pub mod budget;
pub mod card;
pub mod cli;
pub mod engines;
pub mod families;
pub mod formats;
pub mod linalg;
pub mod methods;
pub mod problem;
pub mod record;
pub mod referee;
pub mod runner;
pub mod seed;
pub mod stats;
pub mod tables;
pub mod verdicts;
