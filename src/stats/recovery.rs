//! How many random measurements determine a low-rank positive semidefinite matrix.
//!
//! Dimensions of cones, used as the place of the 50 % success threshold of Gaussian measurements (D. Amelunxen,
//! M. Lotz, M. McCoy, J. Tropp, Information and Inference 3:224-294, 2014). They say nothing about measurements
//! of another kind.

use super::special::normal_cdf;
use std::f64::consts::{LN_10, PI, SQRT_2};

/// Quadrature points on the part of the eigenvalue axis that counts; the rule converges faster than any power there.
const POINTS: usize = 4000;
/// How far beyond the spectrum's edge the eigenvalue density counts; it is below 1e-20 there.
const MARGIN: f64 = 9.0;

/// Panics unless `rank` <= `order`.
#[track_caller]
fn check(order: u64, rank: u64) {
    assert!(rank <= order, "the rank {rank} exceeds the order {order}");
}

/// Computes the statistical dimension of the cone of feasible directions of the positive semidefinite cone at a
/// matrix of `order` n and `rank` r: n(n+1)/2 - (n-r)(n-r+1)/4.
///
/// It is the threshold of recovery by feasibility alone, without an objective.
///
/// # Panics
/// When `rank > order`.
#[track_caller]
pub fn feasibility_dimension(order: u64, rank: u64) -> f64 {
    check(order, rank);
    let (n, rest) = (order as f64, (order - rank) as f64);
    0.5 * n * (n + 1.0) - 0.25 * rest * (rest + 1.0)
}

/// Computes the statistical dimension of the descent cone of the trace over the positive semidefinite cone at a
/// matrix of `order` n and `rank` r: the threshold of recovery by the least trace.
///
/// Derivation. In the eigenbasis of the matrix the subdifferential of (trace + indicator of the cone) is the
/// set of block matrices [[I_r, 0], [0, W]] with W <= I. Let G be a standard Gaussian symmetric matrix
/// (variance 1 on the diagonal, 1/2 off it). The squared distance of G to tau times that set is |G_11 - tau
/// I|^2 + 2 |G_12|^2 + sum_i max(lambda_i - tau, 0)^2 with lambda_i the eigenvalues of G_22, of order n - r.
/// Its mean is r(r+1)/2 + r(n-r) + r tau^2 + integral over x > tau of (x - tau)^2 rho(x) dx with rho the exact
/// eigenvalue density of G_22 (the Gaussian orthogonal ensemble at finite order), and the value is its least
/// over tau >= 0.
///
/// What is approximate: the least of the mean bounds the statistical dimension (the mean of the least) from above.
/// By simulation (6000 draws) it is 0.7 to 1.1 too large for orders 10 to 30 and ranks 1 to 3; at full rank it is
/// 1/2 too large, where the descent cone is a half-space but the value is n(n+1)/2. The error bound of theorem 4.3 of
/// the source does not apply, because this subdifferential is unbounded. The numerical error is below 1e-6 relative
/// up to order 900, the largest one tested. Rank 0 gives 0.
///
/// Source: D. Amelunxen, M. Lotz, M. McCoy, J. Tropp, Information and Inference 3:224-294, 2014; density: M.
/// Mehta, Random Matrices (from memory).
///
/// # Panics
/// When `rank > order`.
#[track_caller]
pub fn statistical_dimension(order: u64, rank: u64) -> f64 {
    check(order, rank);
    if rank == 0 {
        return 0.0;
    }
    let (r, rest) = (rank as f64, (order - rank) as f64);
    let fixed = 0.5 * r * (r + 1.0) + r * rest;
    if rank == order {
        return fixed;
    }
    let density = Density::of(order - rank);
    // The derivative r tau - integral of (x - tau) rho is concave and rises from a negative value: Newton's
    // method climbs to its zero.
    let mut tau = 0.0;
    for _ in 0..60 {
        let [mass, first, _] = density.beyond(tau);
        let step = (first - r * tau) / (r + mass);
        tau += step;
        if step <= 1e-12 * tau {
            break;
        }
    }
    fixed + r * tau * tau + density.beyond(tau)[2]
}

/// The eigenvalue density of the Gaussian orthogonal ensemble of some order (variance 1 on the diagonal, 1/2 off it).
struct Density {
    order: u64,
    edge: f64,
}

impl Density {
    /// Prepares the density of the given order, at least 1.
    fn of(order: u64) -> Self {
        Density { order, edge: (2.0 * order as f64).sqrt() + MARGIN }
    }

    /// Computes the integrals over x > tau of rho, (x - tau) rho and (x - tau)^2 rho by Simpson's rule.
    fn beyond(&self, tau: f64) -> [f64; 3] {
        let width = (self.edge - tau).max(0.0) / POINTS as f64;
        let mut sums = [0.0; 3];
        for point in 0..=POINTS {
            let gap = width * point as f64;
            let weight = match point {
                0 | POINTS => 1.0,
                odd if odd % 2 == 1 => 4.0,
                _ => 2.0,
            };
            let value = weight * width / 3.0 * self.at(tau + gap);
            sums[0] += value;
            sums[1] += value * gap;
            sums[2] += value * gap * gap;
        }
        sums
    }

    /// Computes the density at `x`, of total mass the order N.
    ///
    /// With phi_j the orthonormal Hermite functions of weight exp(-x^2), T_j(x) the integral of phi_j beyond x
    /// and I_j that over the line: rho = sum over j < N of phi_j^2 + sqrt(N/2) phi_(N-1) (I_N/2 - T_N), and for
    /// odd N also + phi_(N-1)/I_(N-1).
    fn at(&self, x: f64) -> f64 {
        let mut wave = Waves::start(x);
        let mut squares = 0.0;
        for _ in 1..self.order {
            squares += wave.now().powi(2);
            wave.step();
        }
        let last = wave.now();
        squares += last * last;
        let whole_last = wave.whole[0];
        wave.step();
        let bend = (0.5 * self.order as f64).sqrt() * (0.5 * wave.whole[0] - wave.beyond[0]);
        let odd = if self.order % 2 == 1 { 1.0 / whole_last } else { 0.0 };
        squares + last * (bend + odd)
    }
}

/// Hermite functions at one place with their integrals beyond it and over the line, by recurrence in the index.
struct Waves {
    x: f64,
    index: f64,
    /// The function of the index and the one before, to be multiplied by exp(logarithm).
    scaled: [f64; 2],
    logarithm: f64,
    scale: f64,
    /// Integrals beyond x: of the index and of the one before.
    beyond: [f64; 2],
    /// Integrals over the line, likewise.
    whole: [f64; 2],
}

impl Waves {
    /// Starts with index 0.
    fn start(x: f64) -> Self {
        let logarithm = -0.5 * x * x - 0.25 * PI.ln();
        let root = PI.powf(0.25);
        Waves {
            x,
            index: 0.0,
            scaled: [1.0, 0.0],
            logarithm,
            scale: logarithm.exp(),
            beyond: [root * SQRT_2 * normal_cdf(-x), 0.0],
            whole: [root * SQRT_2, 0.0],
        }
    }

    /// Returns the function of the index.
    fn now(&self) -> f64 {
        self.scaled[0] * self.scale
    }

    /// Goes to the next index.
    ///
    /// phi_(j+1) = sqrt(2/(j+1)) x phi_j - sqrt(j/(j+1)) phi_(j-1); the integrals follow from
    /// phi_j' = sqrt(j/2) phi_(j-1) - sqrt((j+1)/2) phi_(j+1).
    fn step(&mut self) {
        let ahead = (2.0 / (self.index + 1.0)).sqrt();
        let back = (self.index / (self.index + 1.0)).sqrt();
        self.beyond = [ahead * self.now() + back * self.beyond[1], self.beyond[0]];
        self.whole = [back * self.whole[1], self.whole[0]];
        self.scaled = [ahead * self.x * self.scaled[0] - back * self.scaled[1], self.scaled[0]];
        self.index += 1.0;
        // Far from the centre the first functions underflow though the later ones do not.
        if self.scaled[0].abs() > 1e100 {
            self.scaled = self.scaled.map(|value| value * 1e-100);
            self.logarithm += 100.0 * LN_10;
            self.scale = self.logarithm.exp();
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn density_has_the_moments_of_the_ensemble() {
        for order in [1, 2, 3, 8, 9, 40, 401, 900] {
            let density = Density::of(order);
            let n = order as f64;
            let left = -density.edge;
            let [mass, first, second] = density.beyond(left);
            assert!((mass - n).abs() < 1e-9 * n, "order {order}: mass {mass}");
            // The mean is 0 and E tr G^2 = n(n+1)/2.
            assert!(
                (first + left * n).abs() < 1e-8 * n,
                "order {order}: mean {}",
                first + left * n
            );
            let square = second + 2.0 * left * first + left * left * mass;
            let expected = 0.5 * n * (n + 1.0);
            assert!((square - expected).abs() < 1e-7 * n * n, "order {order}: {square}");
        }
    }
}
