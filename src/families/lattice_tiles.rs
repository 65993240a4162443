//! `lattice-tiles`: a periodic square lattice covered by frustrated plaquettes that share a minimiser.

use super::cycles::{RelativeCycle, plant_cycles};
use super::{Family, PlantError};
use crate::card::{DefaultSetting, FamilyCard, Kind, Relaxation, SettingSpec, Settings};
use crate::problem::certificate::Planted;
use crate::seed::Stream;

/// The family `lattice-tiles`.
#[derive(Clone, Copy, Debug)]
pub struct LatticeTiles;

static CARD: FamilyCard = FamilyCard {
    id: "lattice-tiles",
    title: "Periodic square lattice with one violated bond in every checkerboard plaquette",
    formula: "min <C,X> s.t. X_ii = 1, X PSD, rank X <= 1; C_ij = -J_ij",
    construction: "on an even square torus every bond lies in exactly one plaquette of the checkerboard; \
        each such 4-cycle is frustrated with one bond of least magnitude violated by the hidden signs t",
    optimum: "2 sum over plaquettes of (-sum |J| + 2 min |J|), attained by tt' and possibly by others",
    relaxation: Relaxation::Gap,
    certificate: "shared minimiser, exact: the plaquettes sum to C and t attains each minimum",
    source: "tile planting, F. Hamze et al., Physical Review E 97:043303, 2018 (citation from memory)",
    parameters: &[
        SettingSpec {
            name: "order",
            kind: Kind::Integer { least: 16, most: 1_000_000 },
            default: DefaultSetting::Integer(36),
            meaning: "Number of vertices, the square of an even side of at least 4.",
        },
        SettingSpec {
            name: "weights",
            kind: Kind::Word(&["equal", "mixed"]),
            default: DefaultSetting::Word("equal"),
            meaning: "`equal`: every bond has magnitude 1. `mixed`: in each plaquette one to four bonds, the \
                violated one among them, have magnitude 1 and the others 2.",
        },
    ],
};

impl Family for LatticeTiles {
    fn card(&self) -> &'static FamilyCard {
        &CARD
    }

    fn plant(&self, parameters: &Settings, stream: &mut Stream) -> Result<Planted, PlantError> {
        let order = parameters.size("order");
        let side = side(order)?;
        let vertex = |x: usize, y: usize| ((y % side) * side + x % side) as u32;
        let mut cycles = Vec::with_capacity(order / 2);
        for y in 0..side {
            for x in (0..side).filter(|x| (x + y) % 2 == 0) {
                let vertices =
                    vec![vertex(x, y), vertex(x + 1, y), vertex(x + 1, y + 1), vertex(x, y + 1)];
                let magnitudes = match parameters.word("weights") {
                    "mixed" => mixed(stream),
                    _ => vec![1; 4],
                };
                let least: Vec<usize> = (0..4).filter(|&k| magnitudes[k] == 1).collect();
                let violated = least[stream.index(least.len())];
                cycles.push(RelativeCycle { vertices, magnitudes, violated });
            }
        }
        plant_cycles(stream, order, cycles)
    }
}

/// Draws the magnitudes of a plaquette: a uniform number of bonds of magnitude 1 at uniform places.
fn mixed(stream: &mut Stream) -> Vec<i64> {
    let count = stream.index(4) + 1;
    let mut magnitudes = vec![2; 4];
    for place in stream.sample(4, count) {
        magnitudes[place] = 1;
    }
    magnitudes
}

/// Returns the side of an even square, or names the nearest possible order.
fn side(order: usize) -> Result<usize, PlantError> {
    let root = order.isqrt();
    if root * root == order && root.is_multiple_of(2) {
        return Ok(root);
    }
    let below = root / 2 * 2;
    let above = below + 2;
    let nearest = [below, above]
        .into_iter()
        .filter(|side| *side >= 4)
        .map(|side| side * side)
        .min_by_key(|square| square.abs_diff(order))
        .expect("one of two neighbouring even sides is at least 4");
    Err(PlantError::Parameters(format!(
        "order = {order} is not the square of an even side; the nearest possible value is {nearest}"
    )))
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn other_orders_are_refused_with_the_nearest_square() {
        for (order, nearest) in [(17, 16), (25, 16), (30, 36), (49, 36), (52, 64)] {
            let message = side(order).unwrap_err().to_string();
            assert!(message.ends_with(&format!(" {nearest}")), "{message}");
        }
        assert_eq!(side(144), Ok(12));
    }
}
