//! `clusters`: the relaxation of k-means on separated whole points.
//!
//! n points p_i in k clusters of s = n/k points each, c_a the centre of cluster a, v_i = p_i - c_a; the v_i are whole and
//! sum to zero in each cluster. D_ij = |p_i - p_j|^2. The relaxation (J. Peng, Y. Wei, SIAM Journal on Optimization
//! 18:186-205, 2007, from memory) is stated for s times its usual variable, so that everything is whole:
//! min <D, X> subject to tr X = n, X 1 = s 1, X entrywise nonnegative, X PSD. The planted point is
//! X* = sum_a 1_a 1_a' of rank k, and <D, X*> = 2s sum_i |v_i|^2, which is 2s times the k-means cost of the clusters.
//!
//! Certificate. Take a whole number w (omega below) and, for i in a, j in b,
//! - the multiplier -s w of the trace, |v_i|^2 + w/2 of row sum i (stated as <e_i 1' + 1 e_i', X> = 2s),
//! - N_ij = |c_a - c_b|^2 + 2 (c_a - c_b)'(v_i - v_j) - w for X_ij >= 0 where a != b, and 0 where a = b.
//!
//! With P the projector onto the vectors of zero sum in each cluster and U the n x d matrix of the v_i, expanding
//! D_ij = |c_a - c_b + v_i - v_j|^2 gives the slack S = s w P - 2 U U': within a cluster
//! D_ij + s w [i = j] - |v_i|^2 - |v_j|^2 - w = -2 v_i'v_j + s w [i = j] - w, between clusters
//! D_ij - |v_i|^2 - |v_j|^2 - w - N_ij = -2 v_i'v_j. So S X* = 0, and X* is optimal if S is PSD and N >= 0; the only optimum
//! if S has rank n - k and N > 0 between clusters. Large w helps the first, small w the second.
//!
//! - Exact. Let w = 2k m + 2, m = max(0, the largest -v_i'v_j within a cluster). With u_a^c the coordinate c of U on
//!   cluster a, `k sum_a u_a u_a' - (sum_a u_a)(sum_a u_a)' = sum_{a<b} (u_a - u_b)(u_a - u_b)'`, and since
//!   u_a sums to zero, `u_a u_a' = -sum_{i<j in a} u_i u_j (e_i - e_j)(e_i - e_j)'`. Hence S is
//!
//!   ```text
//!   sum_a sum_{i<j in a} (w + 2k v_i'v_j) (e_i - e_j)(e_i - e_j)'  and  2 sum_c sum_{a<b} (u_a^c - u_b^c)(u_a^c - u_b^c)'
//!   ```
//!
//!   added up, all weights positive: a dual pair in whole numbers of rank n - k. It needs
//!   |c_a - c_b|^2 + 2 (c_a - c_b)'(v_i - v_j) > w.
//! - Verified. For w >= 0, S is PSD exactly when s w I - 2 U'U (d x d) is. The least even w with this is found exactly, and w
//!   is two more, which makes S of rank n - k; if N > 0 for it, the pair is stored without a factor of S and S is proved
//!   PSD by the error-bounded factorisation of `certificate::VerifiedPair`.
//! - Otherwise this construction has no proof. The instance is planted with the certificate `no-proof`: its optimum is not
//!   known, the relaxation may be tight all the same.

use num_bigint::BigInt;

use super::assembly::{column, float, plant_verified, problem_with_orthant};
use super::balance::balanced;
use super::{Family, PlantError};
use crate::card::{DefaultSetting, FamilyCard, Kind, Relaxation, SettingSpec, Settings};
use crate::problem::certificate::{
    BlockPair, Certificate, DualPair, IntegerColumn, IntegerFactor, Planted, PlantedPoint,
    VerifiedPair,
};
use crate::problem::exact::is_positive_semidefinite;
use crate::problem::{Block, Coefficient, Functional, Problem, SparseSymmetric, SparseVector};
use crate::seed::Stream;

/// The family `clusters`.
#[derive(Clone, Copy, Debug)]
pub struct Clusters;

static CARD: FamilyCard = FamilyCard {
    id: "clusters",
    title: "Relaxation of k-means on separated whole points",
    formula: "min <D,X> s.t. tr X = n, X1 = s1, X_ij >= 0, X PSD, rank X <= k; D_ij = |p_i - p_j|^2, s = n/k",
    construction: "centres on a grid of spacing separation * radius / 100, s points about each with offsets in \
        {-radius..radius}^d that sum to zero, in random order; X_ij >= 0 by scalars x_ij = 2 X_ij",
    optimum: "2s sum |v_i|^2 with v_i the offsets, attained by X* = sum 1_a 1_a' only, where proved; not known where the \
        certificate is no-proof",
    relaxation: Relaxation::GapToTight,
    certificate: "dual pair, exact, when the centres are far apart; verified pair (the slack proved PSD by a Cholesky \
        factorisation with a bound of its error) when nearer; no-proof when too near. See `separation`",
    source: "J. Peng, Y. Wei, Approximating k-means-type clustering via semidefinite programming, SIAM Journal on \
        Optimization 18:186-205, 2007, for the relaxation (citation from memory); the certificate: own",
    parameters: &[
        SettingSpec {
            name: "order",
            kind: Kind::Integer { least: 4, most: 200 },
            default: DefaultSetting::Integer(15),
            meaning: "Number n of points, a multiple of `clusters`. There are n(n-1)/2 + n + 1 constraints.",
        },
        SettingSpec {
            name: "clusters",
            kind: Kind::Integer { least: 2, most: 40 },
            default: DefaultSetting::Integer(3),
            meaning: "Number k of clusters, which is the rank bound; each has at least two points.",
        },
        SettingSpec {
            name: "dimension",
            kind: Kind::Integer { least: 1, most: 8 },
            default: DefaultSetting::Integer(2),
            meaning: "Dimension d of the points.",
        },
        SettingSpec {
            name: "radius",
            kind: Kind::Integer { least: 1, most: 1000 },
            default: DefaultSetting::Integer(10),
            meaning: "Offsets from the centres are at most this in each coordinate.",
        },
        SettingSpec {
            name: "separation",
            kind: Kind::Integer { least: 100, most: 10_000 },
            default: DefaultSetting::Integer(800),
            meaning: "Spacing of the grid of centres in percent of the radius. Wide spacing has an exact proof, \
                narrower a verified one, narrow none, although the relaxation stays tight for longer than it is proved to be.",
        },
    ],
};

/// Clusters in whole numbers; point i belongs to cluster `member[i]`.
struct Points {
    dimension: usize,
    centres: Vec<Vec<i64>>,
    member: Vec<usize>,
    offsets: Vec<Vec<i64>>,
}

impl Family for Clusters {
    fn card(&self) -> &'static FamilyCard {
        &CARD
    }

    fn plant(&self, parameters: &Settings, stream: &mut Stream) -> Result<Planted, PlantError> {
        check(parameters)?;
        let points = Points::draw(parameters, stream);
        let problem = points.problem()?;
        let plain = points.plain_omega();
        if points.least_gap() > plain {
            let certificate = Certificate::DualPair(points.dual_pair(plain));
            return Ok(Planted::prove(problem, certificate)?);
        }
        let sharp = points.sharp_omega();
        if points.least_gap() > sharp {
            return plant_verified(problem, points.verified_pair(sharp));
        }
        let point = PlantedPoint { factors: vec![points.factor()], orthant: points.orthant() };
        Ok(Planted::prove(problem, Certificate::NoProof(point))?)
    }
}

/// Refuses numbers of points that do not split evenly.
fn check(parameters: &Settings) -> Result<(), PlantError> {
    let (order, clusters) = (parameters.size("order"), parameters.size("clusters"));
    if 2 * clusters > order {
        return Err(PlantError::Parameters(format!(
            "order = {order} leaves less than two points for each of clusters = {clusters}; the nearest possible value is {}",
            2 * clusters
        )));
    }
    if !order.is_multiple_of(clusters) {
        return Err(PlantError::Parameters(format!(
            "order = {order} is no multiple of clusters = {clusters}; the nearest possible value is {}",
            (order + clusters / 2) / clusters * clusters
        )));
    }
    Ok(())
}

fn dot(left: &[i64], right: &[i64]) -> i64 {
    left.iter().zip(right).map(|(a, b)| a * b).sum()
}

fn difference(left: &[i64], right: &[i64]) -> Vec<i64> {
    left.iter().zip(right).map(|(a, b)| a - b).collect()
}

impl Points {
    fn draw(parameters: &Settings, stream: &mut Stream) -> Self {
        let (order, clusters) = (parameters.size("order"), parameters.size("clusters"));
        let (dimension, radius) = (parameters.size("dimension"), parameters.integer("radius"));
        let spacing = (parameters.integer("separation") * radius + 99) / 100;
        let mut side = 1usize;
        while side.pow(dimension as u32) < clusters {
            side += 1;
        }
        let centre = |cell: usize| {
            let digit = |c: usize| cell / side.pow(c as u32) % side;
            (0..dimension).map(|c| digit(c) as i64 * spacing).collect()
        };
        let cells = stream.sample(side.pow(dimension as u32), clusters);
        let centres: Vec<Vec<i64>> = cells.into_iter().map(centre).collect();
        let size = order / clusters;
        let places = stream.permutation(order);
        let mut member = vec![0; order];
        let mut offsets = vec![Vec::new(); order];
        for (cluster, places) in places.chunks(size).enumerate() {
            let ones = vec![1; size];
            let coordinates: Vec<Vec<i64>> =
                (0..dimension).map(|_| balanced(stream, &ones, radius)).collect();
            for (position, &place) in places.iter().enumerate() {
                member[place] = cluster;
                offsets[place] = coordinates.iter().map(|along| along[position]).collect();
            }
        }
        Points { dimension, centres, member, offsets }
    }

    fn order(&self) -> usize {
        self.member.len()
    }

    fn size(&self) -> usize {
        self.order() / self.centres.len()
    }

    /// Iterates over the pairs i < j in the order of the nonnegative scalars.
    fn pairs(&self) -> impl Iterator<Item = (usize, usize)> {
        (0..self.order()).flat_map(|j| (0..j).map(move |i| (i, j)))
    }

    fn together(&self, i: usize, j: usize) -> bool {
        self.member[i] == self.member[j]
    }

    /// Returns |c_a - c_b|^2 + 2 (c_a - c_b)'(v_i - v_j), which is N_ij + w for points of two clusters.
    fn gap(&self, i: usize, j: usize) -> i64 {
        let centres = difference(&self.centres[self.member[i]], &self.centres[self.member[j]]);
        dot(&centres, &centres) + 2 * dot(&centres, &difference(&self.offsets[i], &self.offsets[j]))
    }

    /// Returns the least gap of points of two clusters.
    fn least_gap(&self) -> i64 {
        let apart = self.pairs().filter(|&(i, j)| !self.together(i, j));
        apart.map(|(i, j)| self.gap(i, j)).min().expect("two clusters")
    }

    /// Returns w = 2k m + 2 of the exact certificate.
    fn plain_omega(&self) -> i64 {
        let within = self.pairs().filter(|&(i, j)| self.together(i, j));
        let most = within.map(|(i, j)| -dot(&self.offsets[i], &self.offsets[j])).max();
        2 * self.centres.len() as i64 * most.unwrap_or(0).max(0) + 2
    }

    /// Returns two more than the least even w >= 0 with s w I - 2 U'U PSD.
    fn sharp_omega(&self) -> i64 {
        let entry = |c: usize, e: usize| self.offsets.iter().map(|v| v[c] * v[e]).sum::<i64>();
        let size = self.size() as i64;
        let is_enough = |half: i64| {
            let row = |c: usize| {
                let diagonal = |e: usize| if c == e { 2 * size * half } else { 0 };
                (0..self.dimension).map(|e| BigInt::from(diagonal(e) - 2 * entry(c, e))).collect()
            };
            is_positive_semidefinite((0..self.dimension).map(row).collect())
        };
        // The trace bounds the largest eigenvalue.
        let trace: i64 = (0..self.dimension).map(|c| entry(c, c)).sum();
        let (mut below, mut enough) = (-1, trace / size + 1);
        while enough - below > 1 {
            let middle = (below + enough).div_euclid(2);
            if is_enough(middle) {
                enough = middle;
            } else {
                below = middle;
            }
        }
        2 * (enough + 1)
    }

    /// Returns V = [1_1 .. 1_k].
    fn factor(&self) -> IntegerFactor {
        let (order, width) = (self.order(), self.centres.len());
        let mut rows = vec![0; order * width];
        for (i, &cluster) in self.member.iter().enumerate() {
            rows[i * width + cluster] = 1;
        }
        IntegerFactor { order, width, rows }
    }

    /// Returns x_ij = 2 X*_ij.
    fn orthant(&self) -> Vec<i64> {
        self.pairs().map(|(i, j)| 2 * i64::from(self.together(i, j))).collect()
    }

    /// Returns N_ij.
    fn orthant_slack(&self, omega: i64) -> Vec<i64> {
        let slack = |(i, j)| if self.together(i, j) { 0 } else { self.gap(i, j) - omega };
        self.pairs().map(slack).collect()
    }

    /// Returns the multipliers of the trace, the row sums and the pairs.
    fn multipliers(&self, omega: i64) -> Vec<i64> {
        let mut all = vec![-(self.size() as i64) * omega];
        all.extend(self.offsets.iter().map(|v| dot(v, v) + omega / 2));
        all.extend(self.orthant_slack(omega));
        all
    }

    fn verified_pair(&self, omega: i64) -> VerifiedPair {
        VerifiedPair {
            factors: vec![self.factor()],
            multipliers: self.multipliers(omega),
            orthant: self.orthant(),
            orthant_slack: self.orthant_slack(omega),
        }
    }

    fn dual_pair(&self, omega: i64) -> DualPair {
        let clusters = self.centres.len();
        let (mut slack, mut weights) = (Vec::new(), Vec::new());
        for (i, j) in self.pairs().filter(|&(i, j)| self.together(i, j)) {
            slack.push(column(vec![(i, 1), (j, -1)]));
            let product = dot(&self.offsets[i], &self.offsets[j]);
            weights.push(omega + 2 * clusters as i64 * product);
        }
        for c in 0..self.dimension {
            for b in 0..clusters {
                for a in 0..b {
                    let difference = self.contrast(a, b, c);
                    if !difference.indices.is_empty() {
                        slack.push(difference);
                        weights.push(2);
                    }
                }
            }
        }
        DualPair {
            blocks: vec![BlockPair { factor: self.factor(), slack, weights }],
            multipliers: self.multipliers(omega),
            orthant: self.orthant(),
            orthant_slack: self.orthant_slack(omega),
        }
    }

    /// Returns u_a^c - u_b^c.
    fn contrast(&self, a: usize, b: usize, c: usize) -> IntegerColumn {
        let sign = |cluster: usize| i64::from(cluster == a) - i64::from(cluster == b);
        let places = self.member.iter().zip(&self.offsets).enumerate();
        let entries = places.map(|(i, (&cluster, v))| (i, sign(cluster) * v[c]));
        column(entries.filter(|entry| entry.1 != 0).collect())
    }

    fn problem(&self) -> Result<Problem, PlantError> {
        let order = self.order();
        let size = self.size() as f64;
        let sparse = |entries| {
            Functional::on_block(0, Coefficient::Sparse(SparseSymmetric::gather(order, entries)))
        };
        let position = |i: usize| {
            let centre = &self.centres[self.member[i]];
            centre.iter().zip(&self.offsets[i]).map(|(c, v)| c + v).collect::<Vec<i64>>()
        };
        let positions: Vec<Vec<i64>> = (0..order).map(position).collect();
        let mut distances = Vec::with_capacity(order * (order - 1) / 2);
        for (i, j) in self.pairs() {
            let apart = difference(&positions[i], &positions[j]);
            distances.push((i, j, float(i128::from(dot(&apart, &apart)))?));
        }
        let mut constraints = vec![sparse((0..order).map(|i| (i, i, 1.0)).collect())];
        let mut rhs = vec![order as f64];
        for i in 0..order {
            let row = (0..order).map(|j| (i, j, if i == j { 2.0 } else { 1.0 }));
            constraints.push(sparse(row.collect()));
            rhs.push(2.0 * size);
        }
        for (scalar, (i, j)) in self.pairs().enumerate() {
            let mut constraint = sparse(vec![(i, j, 1.0)]);
            constraint.orthant = SparseVector::gather(vec![(scalar as u32, -1.0)]);
            constraints.push(constraint);
            rhs.push(0.0);
        }
        let blocks = vec![Block { order, rank: Some(self.centres.len()) }];
        problem_with_orthant(blocks, self.pairs().count(), sparse(distances), constraints, rhs)
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::card::Setting;
    use crate::problem::Uniqueness;
    use crate::problem::certificate::RelaxationFact;
    use std::collections::BTreeMap;

    fn plant(seed: u64, numbers: &[(&str, i64)]) -> Planted {
        let given: BTreeMap<String, Setting> = numbers
            .iter()
            .map(|&(name, value)| (name.to_owned(), Setting::Integer(value)))
            .collect();
        let settings = Settings::resolve(CARD.parameters, &given).unwrap();
        let mut stream = Stream::named(seed, &["clusters", &settings.to_string()]);
        Clusters.plant(&settings, &mut stream).unwrap()
    }

    /// Returns how many of `count` seeds are proved exactly, proved in floating point, and not proved.
    fn kinds(count: u64, numbers: &[(&str, i64)]) -> [usize; 3] {
        let mut found = [0; 3];
        for seed in 0..count {
            let planted = plant(seed, numbers);
            let proved = match &planted.certificate {
                Certificate::DualPair(_) => 0,
                Certificate::VerifiedPair(_) => 1,
                Certificate::NoProof(_) => 2,
                other => panic!("{} is no kind of this family", other.kind()),
            };
            found[proved] += 1;
            assert_eq!(planted.proved_optimum().is_some(), proved < 2);
            let (uniqueness, relaxation) = match proved {
                2 => (Uniqueness::NotProved, RelaxationFact::NotProved),
                _ => (Uniqueness::Proved, RelaxationFact::SameOptimum),
            };
            assert_eq!((planted.uniqueness, planted.proof.relaxation), (uniqueness, relaxation));
        }
        found
    }

    #[test]
    fn a_thousand_seeds_plant_with_their_standing() {
        let small = [("order", 8), ("clusters", 2)];
        assert_eq!(kinds(1000, &small), [1000, 0, 0]);
        for separation in [300, 400, 500] {
            let numbers = [&small[..], &[("separation", separation)]].concat();
            let found = kinds(300, &numbers);
            assert!(found[1] > 0, "{separation}: {found:?}");
        }
        assert_eq!(kinds(100, &[&small[..], &[("separation", 100)]].concat()), [0, 0, 100]);
    }

    /// The optimum is the k-means cost of the planted partition in its pairwise form: the sum of D over pairs in one
    /// cluster, both orders.
    #[test]
    fn the_optimum_is_the_cost_of_the_partition() {
        let planted = plant(3, &[("order", 12), ("clusters", 4), ("dimension", 3)]);
        let factor = &planted.point[0];
        let cluster = |i: usize| factor.row(i).iter().position(|v| *v == 1.0).unwrap();
        let mut sum = 0.0;
        for (i, j, distance) in planted.problem.cost().part(0).unwrap().to_sparse().iter() {
            if cluster(i) == cluster(j) {
                sum += 2.0 * distance;
            }
        }
        assert_eq!(sum, planted.optimum);
    }

    /// The two certificates of one instance prove the same optimum.
    #[test]
    fn both_kinds_of_proof_agree() {
        for seed in 0..40 {
            let mut stream = Stream::named(seed, &["agree"]);
            let settings = Settings::resolve(CARD.parameters, &BTreeMap::new()).unwrap();
            let points = Points::draw(&settings, &mut stream);
            let (plain, sharp) = (points.plain_omega(), points.sharp_omega());
            assert!(sharp <= plain, "{sharp} {plain}");
            let problem = points.problem().unwrap();
            let exact = points.dual_pair(plain).check(&problem).unwrap();
            for omega in [plain, sharp] {
                let verified = points.verified_pair(omega).check(&problem).unwrap();
                assert_eq!(verified.optimum, exact.optimum);
                assert_eq!(verified.uniqueness, Uniqueness::Proved);
            }
            // Two less than the least admissible number, S has a negative eigenvalue.
            assert!(points.verified_pair(sharp - 4).check(&problem).is_err());
        }
    }

    #[test]
    fn sizes_that_do_not_split_are_refused() {
        for (numbers, nearest) in [
            ([("order", 16), ("clusters", 3)], 15),
            ([("order", 17), ("clusters", 3)], 18),
            ([("order", 9), ("clusters", 5)], 10),
        ] {
            let given: BTreeMap<String, Setting> =
                numbers.iter().map(|&(n, v)| (n.to_owned(), Setting::Integer(v))).collect();
            let settings = Settings::resolve(CARD.parameters, &given).unwrap();
            let mut stream = Stream::named(1, &["refused"]);
            let message = Clusters.plant(&settings, &mut stream).unwrap_err().to_string();
            assert!(message.ends_with(&format!("is {nearest}")), "{message}");
        }
    }
}
