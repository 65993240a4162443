//! `frustrated-loops`: a sum of random frustrated cycles that share a minimiser.
//!
//! The density moves the relaxation from a gap to tightness. Measured over 50 seeds with the default
//! lengths and weights, by a whole-number vector that proves the gap (`tests/planting.rs`): at order 24
//! all instances have a gap up to density 1000, 35 at 1500, 15 at 2000, 3 at 3000, none was found at
//! 5000; at order 200 all up to 1500, 49 at 2000, 6 at 3000, none was found at 5000.

use super::cycles::{RelativeCycle, plant_cycles};
use super::{Family, PlantError};
use crate::card::{DefaultSetting, FamilyCard, Kind, Relaxation, SettingSpec, Settings};
use crate::problem::certificate::Planted;
use crate::seed::Stream;

/// The family `frustrated-loops`.
#[derive(Clone, Copy, Debug)]
pub struct FrustratedLoops;

static CARD: FamilyCard = FamilyCard {
    id: "frustrated-loops",
    title: "Sum of random frustrated cycles that share a hidden minimiser",
    formula: "min <C,X> s.t. X_ii = 1, X PSD, rank X <= 1; C_ij = -J_ij",
    construction: "cycles through random vertices, every bond satisfied by the hidden signs t but one \
        random bond of each cycle; each of the first cycles joins vertices not yet met to the graph met \
        so far, until it spans all vertices and is connected (couplings of different cycles on one \
        bond add up and may cancel)",
    optimum: "-2 sum w_k (l_k - 2) over the cycles of length l_k and weight w_k, attained by tt' and \
        possibly by others",
    relaxation: Relaxation::GapToTight,
    certificate: "shared minimiser, exact: the cycles sum to C and t attains each minimum",
    source: "I. Hen et al., Physical Review A 92:042325, 2015, here on the complete graph (citation from memory)",
    parameters: &[
        SettingSpec {
            name: "order",
            kind: Kind::Integer { least: 3, most: 100_000 },
            default: DefaultSetting::Integer(24),
            meaning: "Number n of vertices.",
        },
        SettingSpec {
            name: "density",
            kind: Kind::Integer { least: 1, most: 20_000 },
            default: DefaultSetting::Integer(500),
            meaning: "Cycles per thousand vertices: floor(n density / 1000), at least one. Few cycles leave \
                a relaxation gap; many make the relaxation tight.",
        },
        SettingSpec {
            name: "shortest",
            kind: Kind::Integer { least: 3, most: 1000 },
            default: DefaultSetting::Integer(3),
            meaning: "Least length of a cycle.",
        },
        SettingSpec {
            name: "longest",
            kind: Kind::Integer { least: 3, most: 1000 },
            default: DefaultSetting::Integer(6),
            meaning: "Greatest length of a cycle; lengths are drawn uniformly, but lengthened where the \
                cycles left could not reach all vertices otherwise.",
        },
        SettingSpec {
            name: "weight",
            kind: Kind::Integer { least: 1, most: 1000 },
            default: DefaultSetting::Integer(1),
            meaning: "Each cycle has one magnitude on all its bonds, drawn from 1..=weight.",
        },
    ],
};

impl Family for FrustratedLoops {
    fn card(&self) -> &'static FamilyCard {
        &CARD
    }

    fn plant(&self, parameters: &Settings, stream: &mut Stream) -> Result<Planted, PlantError> {
        let order = parameters.size("order");
        let (shortest, longest) = (parameters.size("shortest"), parameters.size("longest"));
        let count = (order * parameters.size("density") / 1000).max(1);
        check(order, count, shortest, longest)?;
        let mut fresh = stream.permutation(order);
        let mut met: Vec<usize> = vec![fresh.pop().expect("the order is positive")];
        let mut cycles = Vec::with_capacity(count);
        for left in (0..count).rev() {
            // What the cycles after this one can reach at most; this one must reach the rest.
            let needed = fresh.len().saturating_sub(left * (longest - 1)) + 1;
            let length = shortest + stream.index(longest - shortest + 1);
            let chosen = choose(stream, order, length.max(needed), &mut met, &mut fresh);
            let weight = stream.between(1, parameters.integer("weight"));
            cycles.push(RelativeCycle {
                magnitudes: vec![weight; chosen.len()],
                violated: stream.index(chosen.len()),
                vertices: chosen.into_iter().map(|i| i as u32).collect(),
            });
        }
        plant_cycles(stream, order, cycles)
    }
}

/// Chooses the vertices of a cycle: one met before, then fresh ones while there are any, then others
/// met before; in random order.
fn choose(
    stream: &mut Stream,
    order: usize,
    length: usize,
    met: &mut Vec<usize>,
    fresh: &mut Vec<usize>,
) -> Vec<usize> {
    if fresh.is_empty() {
        return stream.sample(order, length);
    }
    let taken = (length - 1).min(fresh.len());
    let old: Vec<usize> =
        stream.sample(met.len(), (length - taken).min(met.len())).iter().map(|&i| met[i]).collect();
    let new = fresh.split_off(fresh.len() - taken);
    let mut chosen = old;
    chosen.extend(&new);
    met.extend(&new);
    stream.shuffle(&mut chosen);
    chosen
}

fn check(order: usize, count: usize, shortest: usize, longest: usize) -> Result<(), PlantError> {
    if longest < shortest {
        return Err(PlantError::Parameters(format!(
            "longest = {longest} is below shortest = {shortest}; the nearest possible value is {shortest}"
        )));
    }
    if longest > order {
        return Err(PlantError::Parameters(format!(
            "longest = {longest} exceeds order = {order}; the nearest possible value is {order}"
        )));
    }
    let least = (order - 1).div_ceil(longest - 1);
    if count < least {
        return Err(PlantError::Parameters(format!(
            "{count} cycles of at most {longest} vertices cannot connect {order} vertices; the nearest \
             possible density is {}",
            (least * 1000).div_ceil(order)
        )));
    }
    Ok(())
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_least_density_connects_and_one_less_is_refused() {
        for order in [10, 24, 101] {
            for longest in [3, 6] {
                let least = (order - 1usize).div_ceil(longest - 1);
                let density = (least * 1000).div_ceil(order);
                assert!(check(order, order * density / 1000, 3, longest).is_ok());
                assert!(check(order, least - 1, 3, longest).is_err());
            }
        }
    }

    #[test]
    fn the_cycles_reach_every_vertex() {
        use crate::card::Setting;
        use crate::problem::certificate::Certificate;
        let given = [
            ("order".to_owned(), Setting::Integer(31)),
            ("density".to_owned(), Setting::Integer(500)),
            ("longest".to_owned(), Setting::Integer(3)),
        ];
        let settings = Settings::resolve(CARD.parameters, &given.into()).unwrap();
        let mut stream = Stream::named(1, &["cover"]);
        let planted = FrustratedLoops.plant(&settings, &mut stream).unwrap();
        let Certificate::SharedMinimiser(shared) = &planted.certificate else {
            panic!("another certificate");
        };
        let mut seen = [false; 31];
        for cycle in &shared.cycles {
            assert_eq!(cycle.vertices.len(), 3);
            cycle.vertices.iter().for_each(|&i| seen[i as usize] = true);
        }
        assert_eq!(shared.cycles.len(), 15);
        assert!(seen.iter().all(|met| *met));
    }
}
