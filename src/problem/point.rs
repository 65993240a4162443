//! Points: dense blocks, factored blocks, and the answer a method returns.

use crate::linalg::Mat;

/// A factor V of order x width, stored by rows: X = V V', row i is the vector of index i.
#[derive(Clone, Debug, PartialEq)]
pub struct Factor {
    /// Number of rows n.
    pub order: usize,
    /// Number of columns p.
    pub width: usize,
    /// Rows one after another, `order * width` numbers.
    pub data: Vec<f64>,
}

impl Factor {
    /// Makes a zero factor.
    pub fn zeros(order: usize, width: usize) -> Self {
        Factor { order, width, data: vec![0.0; order * width] }
    }

    /// Makes a factor from its columns, each of length `order`.
    #[track_caller]
    pub fn from_columns(order: usize, columns: &[Vec<f64>]) -> Self {
        let mut factor = Factor::zeros(order, columns.len());
        for (j, column) in columns.iter().enumerate() {
            assert_eq!(column.len(), order, "column {j} has the wrong length");
            for (i, value) in column.iter().enumerate() {
                factor.data[i * columns.len() + j] = *value;
            }
        }
        factor
    }

    /// Returns row i.
    pub fn row(&self, i: usize) -> &[f64] {
        &self.data[i * self.width..(i + 1) * self.width]
    }

    /// Returns row i for writing.
    pub fn row_mut(&mut self, i: usize) -> &mut [f64] {
        &mut self.data[i * self.width..(i + 1) * self.width]
    }
}

/// One block of a point.
#[derive(Clone, Debug)]
pub enum BlockPoint {
    /// X = V V'.
    Factor(Factor),
    /// X itself, order x order; the referee symmetrises it.
    Dense(Mat<f64>),
}

impl BlockPoint {
    /// Returns the order.
    pub fn order(&self) -> usize {
        match self {
            BlockPoint::Factor(factor) => factor.order,
            BlockPoint::Dense(matrix) => matrix.nrows(),
        }
    }
}

/// A point: one entry per PSD block, and the nonnegative part.
#[derive(Clone, Debug)]
pub struct Point {
    /// PSD blocks.
    pub blocks: Vec<BlockPoint>,
    /// Nonnegative part x.
    pub orthant: Vec<f64>,
}

/// Why a method stopped. It says nothing of quality: that is the referee's.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum StopReason {
    /// The method's own stopping test was met.
    Converged,
    /// The method's own iteration limit was reached.
    IterationLimit,
    /// No further progress was possible in the arithmetic.
    Stalled,
    /// The wall-time limit was reached; the answer is the best point so far.
    TimeLimit,
    /// The memory limit was reached; the answer is the best point so far.
    MemoryLimit,
    /// The method found the relaxation primal infeasible.
    PrimalInfeasible,
    /// The method found the relaxation dual infeasible (its value unbounded).
    DualInfeasible,
}

impl StopReason {
    /// Returns the word written in records.
    pub fn word(self) -> &'static str {
        match self {
            StopReason::Converged => "converged",
            StopReason::IterationLimit => "iteration-limit",
            StopReason::Stalled => "stalled",
            StopReason::TimeLimit => "time-limit",
            StopReason::MemoryLimit => "memory-limit",
            StopReason::PrimalInfeasible => "primal-infeasible",
            StopReason::DualInfeasible => "dual-infeasible",
        }
    }
}

/// What a method returns: a point and why it stopped, no quality figures.
#[derive(Clone, Debug)]
pub struct Answer {
    /// The point.
    pub point: Point,
    /// Multipliers y of length m, when the method has them; `S = C - A*(y)`.
    pub multipliers: Option<Vec<f64>>,
    /// Why the method stopped.
    pub stop: StopReason,
    /// What the method wants a reader to know (rank steps, bounds), one line, may be empty.
    pub note: String,
}
