//! Seeded families: each plants instances whose low-rank optimum is known and proved.
//!
//! A family is one file here, one `mod` line and one line in [`registry`].

mod assembly;
mod balance;
mod balanced_graph;
mod clique_cover;
mod cliques;
mod clusters;
mod cycles;
mod distance_completion;
mod enumerated_cut;
mod face;
mod flat_face;
mod frustrated_loops;
mod graphs;
mod hadamard;
mod hidden_partition;
mod high_width_trap;
mod ill_scaled;
mod ky_fan_gap;
mod lattice_tiles;
mod localisation;
mod low_width_trap;
mod measuring;
mod noisy_signs;
mod orthogonal_sync;
mod phase;
mod radial_feeder;
mod sensing;
mod sign_trap;
mod symbol_detection;
mod tight_unique;
mod trust_region;
mod weak_complementarity;

pub use balanced_graph::BalancedGraph;
pub use clique_cover::CliqueCover;
pub use clusters::Clusters;
pub use distance_completion::DistanceCompletion;
pub use enumerated_cut::EnumeratedCuts;
pub use flat_face::FlatFace;
pub use frustrated_loops::FrustratedLoops;
pub use hidden_partition::HiddenPartition;
pub use high_width_trap::HighWidthTrap;
pub use ill_scaled::IllScaled;
pub use ky_fan_gap::KyFanGap;
pub use lattice_tiles::LatticeTiles;
pub use localisation::Localisation;
pub use low_width_trap::LowWidthTrap;
pub use noisy_signs::NoisySigns;
pub use orthogonal_sync::OrthogonalSync;
pub use phase::Phase;
pub use radial_feeder::RadialFeeder;
pub use sensing::Sensing;
pub use sign_trap::SignTrap;
pub use symbol_detection::SymbolDetection;
pub use tight_unique::TightUnique;
pub use trust_region::TrustRegion;
pub use weak_complementarity::WeakComplementarity;

use crate::card::{FamilyCard, Settings};
use crate::problem::certificate::Planted;
use crate::seed::Stream;

/// Says why an instance could not be planted.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
pub enum PlantError {
    /// The parameters exclude one another; the message names the nearest possible value.
    #[error("{0}")]
    Parameters(String),
    /// The certificate does not hold: a defect of the family, never of the user.
    #[error("the certificate does not hold: {0}")]
    Certificate(#[from] crate::problem::certificate::CertificateError),
    /// A number does not fit the exact range.
    #[error("{0}")]
    Range(String),
}

/// A seeded generator of instances with a proved optimum.
pub trait Family: Sync {
    /// Returns the card.
    fn card(&self) -> &'static FamilyCard;

    /// Plants one instance. The certificate has been checked when this returns.
    ///
    /// # Errors
    /// Impossible parameters, or a certificate that does not hold.
    fn plant(&self, parameters: &Settings, stream: &mut Stream) -> Result<Planted, PlantError>;
}

/// Lists every family, in alphabetical order of id.
pub fn registry() -> &'static [&'static dyn Family] {
    &[
        &BalancedGraph,
        &CliqueCover,
        &Clusters,
        &DistanceCompletion,
        &EnumeratedCuts,
        &FlatFace,
        &FrustratedLoops,
        &HiddenPartition,
        &HighWidthTrap,
        &IllScaled,
        &KyFanGap,
        &LatticeTiles,
        &Localisation,
        &LowWidthTrap,
        &NoisySigns,
        &OrthogonalSync,
        &Phase,
        &RadialFeeder,
        &Sensing,
        &SignTrap,
        &SymbolDetection,
        &TightUnique,
        &TrustRegion,
        &WeakComplementarity,
    ]
}

/// Finds a family by its id.
pub fn find(id: &str) -> Option<&'static dyn Family> {
    registry().iter().copied().find(|family| family.card().id == id)
}
