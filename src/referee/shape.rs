//! Whether an answer can be read at all: shapes, finiteness, magnitude.

use crate::problem::{Answer, BlockPoint, Problem};

/// Largest absolute value of a number in an answer. Squares and products of sizes this side of it stay
/// far from overflow, so that what the referee computes is finite.
pub(super) const LARGEST: f64 = 1e100;

/// Checks that `answer` has the shapes of `problem` and that its numbers are finite and at most
/// [`LARGEST`] in magnitude; says what is wrong otherwise.
pub(super) fn check(problem: &Problem, answer: &Answer) -> Result<(), String> {
    let (blocks, expected) = (&answer.point.blocks, problem.blocks());
    if blocks.len() != expected.len() {
        return Err(format!("{} blocks where the problem has {}", blocks.len(), expected.len()));
    }
    for (index, (point, block)) in blocks.iter().zip(expected).enumerate() {
        let place = || format!("block {}", index + 1);
        let (rows, columns) = match point {
            BlockPoint::Factor(factor) => (factor.order, factor.order),
            BlockPoint::Dense(matrix) => (matrix.nrows(), matrix.ncols()),
        };
        if rows != block.order || columns != block.order {
            return Err(format!(
                "{} is {rows} x {columns} where the problem has order {}",
                place(),
                block.order
            ));
        }
        match point {
            BlockPoint::Factor(factor) => {
                if factor.data.len() != factor.order.saturating_mul(factor.width) {
                    let (n, p) = (factor.order, factor.width);
                    return Err(format!(
                        "{} holds {} numbers for a {n} x {p} factor",
                        place(),
                        factor.data.len()
                    ));
                }
                check_numbers(&factor.data, place)?;
            }
            BlockPoint::Dense(matrix) => {
                for j in 0..matrix.ncols() {
                    for i in 0..matrix.nrows() {
                        check_numbers(&[matrix[(i, j)]], place)?;
                    }
                }
            }
        }
    }
    if answer.point.orthant.len() != problem.orthant() {
        let (found, expected) = (answer.point.orthant.len(), problem.orthant());
        return Err(format!("{found} nonnegative scalars where the problem has {expected}"));
    }
    check_numbers(&answer.point.orthant, || "the nonnegative part".to_owned())?;
    if let Some(multipliers) = &answer.multipliers {
        let (found, expected) = (multipliers.len(), problem.constraints().len());
        if found != expected {
            return Err(format!("{found} multipliers for {expected} constraints"));
        }
        check_numbers(multipliers, || "the multipliers".to_owned())?;
    }
    Ok(())
}

fn check_numbers(numbers: &[f64], place: impl Fn() -> String) -> Result<(), String> {
    match numbers.iter().find(|value| value.is_nan() || value.abs() > LARGEST) {
        None => Ok(()),
        Some(value) if value.is_finite() => {
            Err(format!("{} holds {value:e}, beyond {LARGEST:e} in magnitude", place()))
        }
        Some(value) => Err(format!("{} holds {value}", place())),
    }
}
