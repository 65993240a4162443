//! What the families of signed cycles share: the gauge and the assembly of cost and certificate.

use super::PlantError;
use super::assembly::{TriangleSum, sign_problem};
use crate::problem::certificate::{Certificate, Planted, SharedMinimiser, SignedCycle};
use crate::seed::Stream;

/// A frustrated cycle before the gauge: the planted vector satisfies every bond but one.
#[derive(Clone, Debug)]
pub(super) struct RelativeCycle {
    /// Vertices in the order of the cycle.
    pub vertices: Vec<u32>,
    /// Magnitudes of the bonds; bond k joins vertices k and k + 1.
    pub magnitudes: Vec<i64>,
    /// The violated bond, of least magnitude.
    pub violated: usize,
}

/// Draws the hidden signs t, gauges the cycles by them (`J_ij = t_i t_j` times the relative coupling)
/// and proves the sum.
///
/// # Errors
/// A number beyond 2^53, or a defect of the family.
pub(super) fn plant_cycles(
    stream: &mut Stream,
    order: usize,
    cycles: Vec<RelativeCycle>,
) -> Result<Planted, PlantError> {
    let signs: Vec<i64> = (0..order).map(|_| stream.sign()).collect();
    let mut cost = TriangleSum::new(order);
    let mut gauged = Vec::with_capacity(cycles.len());
    for RelativeCycle { vertices, magnitudes, violated } in cycles {
        let couplings = (0..vertices.len())
            .map(|k| {
                let next = vertices[(k + 1) % vertices.len()];
                let relative = if k == violated { -magnitudes[k] } else { magnitudes[k] };
                relative * signs[vertices[k] as usize] * signs[next as usize]
            })
            .collect();
        let cycle = SignedCycle { vertices, couplings };
        for (i, j, coupling) in cycle.edges() {
            cost.add(i, j, -i128::from(coupling));
        }
        gauged.push(cycle);
    }
    let problem = sign_problem(cost.floats()?)?;
    let certificate = SharedMinimiser { signs, cycles: gauged };
    Ok(Planted::prove(problem, Certificate::SharedMinimiser(certificate))?)
}
