//! What the families of places and ranges share: nodes placed one after another on cliques, with the
//! exact stress of each clique. No family lives here.
//!
//! Each node after the first d + 1 has ranges to d + 1 earlier nodes that have all ranges among
//! themselves and span the plane or space. For these d + 2 nodes there is one whole affine dependency w up to
//! its sign, in lowest terms, with sum w = 0 and sum w_i p_i = 0. For any vectors u_i, because sum w = 0,
//! `(sum w_i u_i)(sum w_i u_i)' = -sum_{i<l} w_i w_l (u_i - u_l)(u_i - u_l)'`; the sums of w_i w_l over the
//! cliques are the stress.

use std::collections::BTreeMap;
use std::collections::btree_map::Entry;

use super::PlantError;
use crate::seed::Stream;

/// Draws of a place before [`Cliques`] gives up.
const TRIES: usize = 1000;

/// An affine dependency as a list of (node, weight).
type Dependency = Vec<(usize, i64)>;

/// Whether a node found its place.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(super) enum Placement {
    /// The node has been added.
    Placed,
    /// No draw was both free and in general position; nothing has been added.
    Crowded,
}

/// Nodes at whole places, the measured pairs and their stress.
#[derive(Clone, Debug)]
pub(super) struct Cliques {
    dimension: usize,
    /// Places p_i, each of length d.
    pub places: Vec<Vec<i64>>,
    /// Measured pairs (i, l), i < l, with the stress sum w_i w_l on them (0 on an extra range). Pairs of the
    /// first d + 1 nodes are among them once they share a clique.
    pub stress: BTreeMap<(usize, usize), i64>,
    /// Affine dependencies, no weight zero. Each holds a node that no earlier one
    /// holds.
    pub dependencies: Vec<Dependency>,
    /// Sets of d + 1 nodes that have all ranges among themselves and span.
    bases: Vec<Vec<usize>>,
}

impl Cliques {
    /// Starts from d + 1 places that span; see [`draw_start`].
    #[track_caller]
    pub(super) fn start(places: Vec<Vec<i64>>) -> Self {
        let dimension = places.len() - 1;
        let bases = vec![(0..=dimension).collect()];
        let start =
            Cliques { dimension, places, stress: BTreeMap::new(), dependencies: Vec::new(), bases };
        assert!(start.spans(&start.bases[0]), "the first places lie in a line or plane");
        start
    }

    /// Adds a node at a place that `draw` draws, on a random earlier base, with `extra` further ranges to
    /// earlier nodes as far as there are any.
    ///
    /// # Errors
    /// [`PlantError::Range`] when a stress exceeds 2^53.
    pub(super) fn add(
        &mut self,
        stream: &mut Stream,
        extra: usize,
        draw: &mut dyn FnMut(&mut Stream) -> Vec<i64>,
    ) -> Result<Placement, PlantError> {
        let node = self.places.len();
        let base = self.bases[stream.index(self.bases.len())].clone();
        let Some((place, dependency)) = self.draw_place(stream, &base, draw) else {
            return Ok(Placement::Crowded);
        };
        self.places.push(place);
        for (at, &(i, weight)) in dependency.iter().enumerate() {
            for &(l, other) in &dependency[at + 1..] {
                let sum = self.stress.entry((i, l)).or_insert(0);
                *sum = stress_sum(*sum, weight, other)?;
            }
        }
        for left_out in &base {
            let mut next: Vec<usize> = base.iter().copied().filter(|i| i != left_out).collect();
            next.push(node);
            if self.spans(&next) {
                self.bases.push(next);
            }
        }
        self.dependencies.push(dependency);
        let extra = extra.min(node - base.len());
        let mut added = 0;
        while added < extra {
            if let Entry::Vacant(slot) = self.stress.entry((stream.index(node), node)) {
                slot.insert(0);
                added += 1;
            }
        }
        Ok(Placement::Placed)
    }

    /// Draws a place that no node has, and the dependency of the base and it with no weight zero.
    fn draw_place(
        &self,
        stream: &mut Stream,
        base: &[usize],
        draw: &mut dyn FnMut(&mut Stream) -> Vec<i64>,
    ) -> Option<(Vec<i64>, Dependency)> {
        for _ in 0..TRIES {
            let place = draw(stream);
            if self.places.contains(&place) {
                continue;
            }
            let mut points: Vec<&[i64]> = base.iter().map(|i| self.places[*i].as_slice()).collect();
            points.push(&place);
            let weights = dependency(&points);
            if weights.iter().all(|weight| *weight != 0) {
                let nodes = base.iter().copied().chain([self.places.len()]);
                return Some((place, nodes.zip(weights).collect()));
            }
        }
        None
    }

    /// Returns whether d + 1 nodes lie on no common line (d = 2) or plane (d = 3).
    fn spans(&self, nodes: &[usize]) -> bool {
        let points: Vec<&[i64]> = nodes.iter().map(|i| self.places[*i].as_slice()).collect();
        debug_assert_eq!(points.len(), self.dimension + 1);
        volume(&points) != 0
    }
}

/// Draws d + 1 places that span, all again until they do; none after many draws.
pub(super) fn draw_start(
    stream: &mut Stream,
    draw: &mut dyn FnMut(&mut Stream) -> Vec<Vec<i64>>,
) -> Option<Vec<Vec<i64>>> {
    for _ in 0..TRIES {
        let places = draw(stream);
        let points: Vec<&[i64]> = places.iter().map(Vec::as_slice).collect();
        if volume(&points) != 0 {
            return Some(places);
        }
    }
    None
}

fn stress_sum(sum: i64, weight: i64, other: i64) -> Result<i64, PlantError> {
    let next = i128::from(sum) + i128::from(weight) * i128::from(other);
    if next.unsigned_abs() > 1 << 53 {
        let message = format!("the stress {next} exceeds 2^53; take a smaller range of places");
        return Err(PlantError::Range(message));
    }
    Ok(next as i64)
}

/// Returns the signed volume of d + 1 points, times d!: the determinant of their differences from the
/// first.
fn volume(points: &[&[i64]]) -> i64 {
    let row = |i: usize| -> Vec<i64> {
        points[i + 1].iter().zip(points[0]).map(|(a, b)| a - b).collect()
    };
    match points.len() {
        3 => {
            let (a, b) = (row(0), row(1));
            a[0] * b[1] - a[1] * b[0]
        }
        4 => {
            let (a, b, c) = (row(0), row(1), row(2));
            a[0] * (b[1] * c[2] - b[2] * c[1]) - a[1] * (b[0] * c[2] - b[2] * c[0])
                + a[2] * (b[0] * c[1] - b[1] * c[0])
        }
        other => unreachable!("{other} points span neither plane nor space"),
    }
}

/// Returns the affine dependency of d + 2 points in lowest terms: sum w = 0 and sum w_i p_i = 0, by Cramer's
/// rule w_i = (-1)^i times the volume of the others.
fn dependency(points: &[&[i64]]) -> Vec<i64> {
    let mut weights: Vec<i64> = (0..points.len())
        .map(|left_out| {
            let others: Vec<&[i64]> = points
                .iter()
                .enumerate()
                .filter(|(at, _)| *at != left_out)
                .map(|(_, point)| *point)
                .collect();
            if left_out % 2 == 0 { volume(&others) } else { -volume(&others) }
        })
        .collect();
    let divisor = weights.iter().fold(0, |divisor, weight| gcd(divisor, weight.abs())).max(1);
    for weight in &mut weights {
        *weight /= divisor;
    }
    weights
}

fn gcd(a: i64, b: i64) -> i64 {
    if b == 0 { a } else { gcd(b, a % b) }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn dependencies_vanish_on_places_and_on_ones() {
        let points: [&[i64]; 5] = [&[0, 0, 1], &[3, 1, 4], &[1, 5, 9], &[2, 6, 5], &[3, 5, 8]];
        let weights = dependency(&points);
        assert!(weights.iter().all(|weight| *weight != 0), "{weights:?}");
        assert_eq!(weights.iter().sum::<i64>(), 0);
        for axis in 0..3 {
            let sum: i64 = weights.iter().zip(points).map(|(w, point)| w * point[axis]).sum();
            assert_eq!(sum, 0, "axis {axis}");
        }
    }

    #[test]
    fn a_stress_beyond_the_exact_range_is_refused() {
        assert_eq!(stress_sum(1, -3, 5), Ok(-14));
        assert!(stress_sum(0, 1 << 27, 1 << 26).is_ok());
        assert!(stress_sum(1, 1 << 27, 1 << 26).is_err());
        assert!(stress_sum(0, i64::MAX, i64::MIN).is_err());
    }
}
