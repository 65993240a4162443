//! The canonical byte form of a problem and its SHA-256 digest: two machines that plant the same
//! instance can compare one line of text.
//!
//! The form is versioned and little-endian: the header `rankassay problem 1` and a newline; the
//! number of blocks, and for each block its order and its rank bound (0 when the rank is free); the
//! number of nonnegative scalars; the cost; the number of constraints; each constraint followed by
//! its right side. A functional is the number of its parts, each part as block, kind (0 sparse, 1
//! outer products) and entries, then its orthant vector. Counts and indices are 64-bit, numbers are
//! the bits of their `f64` with minus zero written as zero. The certificate and the planted point
//! are not part of it. The same matrix stored sparse and as outer products has two digests: a method
//! sees the difference.

use sha2::{Digest, Sha256};

use super::symmetric::{Coefficient, SparseVector};
use super::{Functional, Problem};

const HEADER: &[u8] = b"rankassay problem 1\n";

/// Returns the SHA-256 digest of the canonical bytes, 64 lower-case hexadecimal digits. The bytes
/// are streamed: no copy of the problem is built.
pub fn digest(problem: &Problem) -> String {
    let mut hash = Sha256::new();
    feed(problem, &mut |bytes| hash.update(bytes));
    let mut text = String::with_capacity(64);
    for byte in hash.finalize() {
        for nibble in [byte >> 4, byte & 15] {
            text.push(char::from_digit(u32::from(nibble), 16).expect("a nibble is a digit"));
        }
    }
    text
}

/// Writes the canonical bytes of `problem` piece by piece into `sink`.
pub fn feed(problem: &Problem, sink: &mut dyn FnMut(&[u8])) {
    let mut writer = Writer { sink, buffer: Vec::with_capacity(BUFFER) };
    writer.bytes(HEADER);
    writer.count(problem.blocks().len());
    for block in problem.blocks() {
        writer.count(block.order);
        writer.count(block.rank.unwrap_or(0));
    }
    writer.count(problem.orthant());
    writer.functional(problem.cost());
    writer.count(problem.constraints().len());
    for (constraint, rhs) in problem.constraints().iter().zip(problem.rhs()) {
        writer.functional(constraint);
        writer.number(*rhs);
    }
    (writer.sink)(&writer.buffer);
}

const BUFFER: usize = 1 << 13;

/// Gathers small pieces, so that the hash sees blocks of some thousand bytes.
struct Writer<'a> {
    sink: &'a mut dyn FnMut(&[u8]),
    buffer: Vec<u8>,
}

impl Writer<'_> {
    fn bytes(&mut self, bytes: &[u8]) {
        if self.buffer.len() + bytes.len() > BUFFER {
            (self.sink)(&self.buffer);
            self.buffer.clear();
        }
        self.buffer.extend_from_slice(bytes);
    }

    fn count(&mut self, count: usize) {
        self.bytes(&(count as u64).to_le_bytes());
    }

    fn number(&mut self, value: f64) {
        // Adding zero turns minus zero into zero and changes nothing else.
        self.bytes(&(value + 0.0).to_bits().to_le_bytes());
    }

    fn vector(&mut self, vector: &SparseVector) {
        self.count(vector.len());
        for (index, value) in vector.iter() {
            self.count(index);
            self.number(value);
        }
    }

    fn functional(&mut self, functional: &Functional) {
        self.count(functional.parts.len());
        for (block, part) in &functional.parts {
            self.count(*block);
            match part {
                Coefficient::Sparse(matrix) => {
                    self.count(0);
                    self.count(matrix.stored());
                    for (i, j, value) in matrix.iter() {
                        self.count(i);
                        self.count(j);
                        self.number(value);
                    }
                }
                Coefficient::Outer(sum) => {
                    self.count(1);
                    self.count(sum.terms.len());
                    for term in &sum.terms {
                        self.number(term.weight);
                        self.vector(&term.vector);
                    }
                }
            }
        }
        self.vector(&functional.orthant);
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::problem::{Block, OuterSum, OuterTerm, SparseSymmetric};

    fn small(weight: f64, rhs: f64, rank: Option<usize>) -> Problem {
        let cost =
            Coefficient::Sparse(SparseSymmetric::gather(2, vec![(0, 1, 3.0), (1, 1, weight)]));
        let vector = SparseVector::gather(vec![(0, 1.0), (1, -2.0)]);
        let outer = Coefficient::Outer(OuterSum {
            order: 2,
            terms: vec![OuterTerm { weight: 1.0, vector }],
        });
        let mut constraint = Functional::on_block(0, outer);
        constraint.orthant = SparseVector::gather(vec![(0, 5.0)]);
        let blocks = vec![Block { order: 2, rank }];
        Problem::new(blocks, 1, Functional::on_block(0, cost), vec![constraint], vec![rhs]).unwrap()
    }

    #[test]
    fn the_bytes_are_the_documented_form() {
        let mut bytes = Vec::new();
        feed(&small(4.0, -0.0, None), &mut |piece| bytes.extend_from_slice(piece));
        let mut expected = b"rankassay problem 1\n".to_vec();
        let words = |words: &[u64]| words.iter().flat_map(|w| w.to_le_bytes()).collect::<Vec<u8>>();
        let number = |value: f64| value.to_bits();
        expected.extend(words(&[1, 2, 0, 1]));
        expected.extend(words(&[1, 0, 0, 2, 0, 1, number(3.0), 1, 1, number(4.0), 0]));
        expected.extend(words(&[1, 1, 0, 1, 1, number(1.0), 2, 0, number(1.0), 1, number(-2.0)]));
        expected.extend(words(&[1, 0, number(5.0), number(0.0)]));
        assert_eq!(bytes, expected);
    }

    #[test]
    fn every_number_moves_the_digest() {
        let base = digest(&small(4.0, 1.0, None));
        assert_eq!(base, digest(&small(4.0, 1.0, None)));
        assert_eq!(base.len(), 64);
        for other in [small(5.0, 1.0, None), small(4.0, 2.0, None), small(4.0, 1.0, Some(2))] {
            assert_ne!(base, digest(&other));
        }
    }

    #[test]
    fn the_buffer_changes_no_byte() {
        let entries = (0..2000).map(|i| (i, i, i as f64)).collect();
        let cost = Coefficient::Sparse(SparseSymmetric::gather(2000, entries));
        let blocks = vec![Block { order: 2000, rank: None }];
        let cost = Functional::on_block(0, cost);
        let problem = Problem::new(blocks, 0, cost, Vec::new(), Vec::new()).unwrap();
        let (mut pieces, mut length) = (0, 0);
        feed(&problem, &mut |piece| {
            pieces += 1;
            length += piece.len();
        });
        // Header, 6 counts before the entries, 1999 entries of 24 bytes (zero is not stored), the
        // orthant count and the constraint count.
        assert_eq!(length, 20 + 8 * (4 + 4 + 2) + 1999 * 24);
        assert!(pieces > 1);
    }
}
