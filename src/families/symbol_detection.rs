//! `symbol-detection`: signs sent through a whole channel with noise, y = H x + v.
//!
//! The lift of min |y - H x|^2 over sign vectors has C = [[H'H, -H'y], [-y'H, y'y]] and unit diagonal, order k + 1.
//! Let u = H'v at the sent x and T = [I, -x]. Then
//! `C = T'(H'H + Diag(x * u)) T + Diag(-x * u, v'y)`: the upper block is plain, the last column is
//! -H'Hx - u = -H'y, and the corner is x'H'Hx + x'u + v'y = y'y because y'v = x'u + v'v. So with the
//! multipliers (-x * u, v'y) the slack is S = T'(H'H + Diag(x * u)) T, S (x; 1) = 0, and x is optimal with the
//! value v'v as soon as H'H + Diag(x * u) is PSD (J. Jalden, C. Martin, B. Ottersten, ICASSP 2003, from memory).
//!
//! Here H = [g I; G] with G drawn at random and g the least positive number with g^2 + x_i u_i > 0 for all i (u
//! depends on g through the noise of the first k rows). Then `H'H + Diag(x * u) = G'G + sum_i (g^2 + x_i u_i) e_i
//! e_i'` is positive definite by whole numbers on sight, rank S = k and (x; 1)(x; 1)' is the only optimum. The
//! rows g I are a floor of the channel's gain: they stand for the part g^2 I that any H'H with least eigenvalue g^2
//! contains, and make it whole.

use super::assembly::{PairDraft, column, unit_diagonal};
use super::{Family, PlantError};
use crate::card::{DefaultSetting, FamilyCard, Kind, Relaxation, Setting, SettingSpec, Settings};
use crate::problem::certificate::{IntegerFactor, Planted};
use crate::seed::Stream;

/// The family `symbol-detection`.
#[derive(Clone, Copy, Debug)]
pub struct SymbolDetection;

static CARD: FamilyCard = FamilyCard {
    id: "symbol-detection",
    title: "Signs detected from whole linear measurements with noise",
    formula: "min <C,X> s.t. X_ii = 1, X PSD, rank X <= 1; C = [[H'H, -H'y], [-y'H, y'y]], y = Hx + v",
    construction: "signs x in {-1,1}^{n-1}, H = [gI; G] with G in {-gain..gain}, v in {-noise..noise}, \
        g >= 1 the least with g^2 + x_i (H'v)_i > 0 for all i",
    optimum: "v'v, attained by (x;1)(x;1)' only",
    relaxation: Relaxation::Tight,
    certificate: "dual pair, exact: S = T'(G'G + Diag(g^2 + x * (H'v)))T with T = [I, -x], of rank n - 1",
    source: "the optimality condition of J. Jalden, C. Martin, B. Ottersten, Semidefinite programming for detection in \
        linear systems, ICASSP 2003 (citation from memory); the channel with a floor: own",
    parameters: &[
        SettingSpec {
            name: "order",
            kind: Kind::Integer { least: 3, most: 500 },
            default: DefaultSetting::Integer(20),
            meaning: "Order n = k + 1 of the matrix variable for k symbols.",
        },
        SettingSpec {
            name: "antennas",
            kind: Kind::WordOrInteger { words: &["auto"], least: 1, most: 1000 },
            default: DefaultSetting::Word("auto"),
            meaning: "Rows of G; `auto` takes as many as symbols. Fewer rows leave more to the floor g.",
        },
        SettingSpec {
            name: "gain",
            kind: Kind::Integer { least: 1, most: 100 },
            default: DefaultSetting::Integer(3),
            meaning: "Entries of G are at most this in modulus.",
        },
        SettingSpec {
            name: "noise",
            kind: Kind::Integer { least: 0, most: 100 },
            default: DefaultSetting::Integer(2),
            meaning: "Entries of the noise v are at most this in modulus; g grows with it.",
        },
    ],
};

/// A channel and what was sent through it.
struct Channel {
    symbols: Vec<i64>,
    /// Rows of G.
    rows: Vec<Vec<i64>>,
    /// The number g.
    floor: i64,
    /// Noise of the k rows of g I.
    floor_noise: Vec<i64>,
    /// Noise of the rows of G.
    noise: Vec<i64>,
}

impl Family for SymbolDetection {
    fn card(&self) -> &'static FamilyCard {
        &CARD
    }

    fn plant(&self, parameters: &Settings, stream: &mut Stream) -> Result<Planted, PlantError> {
        Channel::draw(parameters, stream).draft().plant()
    }
}

impl Channel {
    fn draw(parameters: &Settings, stream: &mut Stream) -> Self {
        let count = parameters.size("order") - 1;
        let antennas = match parameters.get("antennas") {
            Some(Setting::Integer(_)) => parameters.size("antennas"),
            _ => count,
        };
        let (gain, most) = (parameters.integer("gain"), parameters.integer("noise"));
        let symbols: Vec<i64> = (0..count).map(|_| stream.sign()).collect();
        let rows: Vec<Vec<i64>> = (0..antennas)
            .map(|_| (0..count).map(|_| stream.between(-gain, gain)).collect())
            .collect();
        let floor_noise: Vec<i64> = (0..count).map(|_| stream.between(-most, most)).collect();
        let noise: Vec<i64> = rows.iter().map(|_| stream.between(-most, most)).collect();
        let mut channel = Channel { symbols, rows, floor: 1, floor_noise, noise };
        while channel.margins().iter().any(|margin| *margin <= 0) {
            channel.floor += 1;
        }
        channel
    }

    /// Returns u = H'v.
    fn correlation(&self) -> Vec<i64> {
        let mut sums: Vec<i64> = self.floor_noise.iter().map(|v| self.floor * v).collect();
        for (row, v) in self.rows.iter().zip(&self.noise) {
            sums.iter_mut().zip(row).for_each(|(sum, h)| *sum += v * h);
        }
        sums
    }

    /// Returns g^2 + x_i u_i.
    fn margins(&self) -> Vec<i64> {
        let square = self.floor * self.floor;
        self.correlation().iter().zip(&self.symbols).map(|(u, x)| square + x * u).collect()
    }

    fn draft(&self) -> PairDraft {
        let count = self.symbols.len();
        let order = count + 1;
        let mut slack = Vec::with_capacity(count + self.rows.len());
        // T'h = (h; -x'h).
        let mut push = |row: Vec<(usize, i64)>| {
            let last: i64 = row.iter().map(|&(i, h)| -h * self.symbols[i]).sum();
            let entries = row.into_iter().chain([(count, last)]);
            slack.push(column(entries.filter(|entry| entry.1 != 0).collect()));
        };
        for i in 0..count {
            push(vec![(i, 1)]);
        }
        for row in &self.rows {
            push(row.iter().copied().enumerate().collect());
        }
        let mut weights = self.margins();
        weights.resize(slack.len(), 1);
        let correlation = self.correlation();
        let signed = |(u, x): (&i64, &i64)| -u * x;
        let mut multipliers: Vec<i64> = correlation.iter().zip(&self.symbols).map(signed).collect();
        let squares: i64 = self.floor_noise.iter().chain(&self.noise).map(|v| v * v).sum();
        // v'y = x'H'v + v'v.
        multipliers.push(squares - multipliers.iter().sum::<i64>());
        let rows: Vec<i64> = self.symbols.iter().copied().chain([1]).collect();
        PairDraft {
            rank: 1,
            factor: IntegerFactor { order, width: 1, rows },
            slack,
            weights,
            constraints: unit_diagonal(order),
            multipliers,
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use std::collections::BTreeMap;

    /// Compares the planted cost with [H, -y]'[H, -y] entry by entry.
    #[test]
    fn the_cost_is_the_lifted_square_of_the_residual() {
        let mut stream = Stream::named(8, &["symbol-detection"]);
        let settings = Settings::resolve(CARD.parameters, &BTreeMap::new()).unwrap();
        let channel = Channel::draw(&settings, &mut stream);
        let count = channel.symbols.len();
        let mut rows: Vec<Vec<i64>> = (0..count)
            .map(|i| (0..count).map(|j| if i == j { channel.floor } else { 0 }).collect())
            .collect();
        rows.extend(channel.rows.clone());
        let noise: Vec<i64> = channel.floor_noise.iter().chain(&channel.noise).copied().collect();
        for (row, v) in rows.iter_mut().zip(&noise) {
            let y: i64 = row.iter().zip(&channel.symbols).map(|(h, x)| h * x).sum::<i64>() + v;
            row.push(-y);
        }
        let planted = channel.draft().plant().unwrap();
        let mut cost = vec![vec![0i64; count + 1]; count + 1];
        for (i, j, value) in planted.problem.cost().part(0).unwrap().to_sparse().iter() {
            cost[i][j] = value as i64;
            cost[j][i] = value as i64;
        }
        for (i, line) in cost.iter().enumerate() {
            for (j, &value) in line.iter().enumerate() {
                assert_eq!(value, rows.iter().map(|row| row[i] * row[j]).sum::<i64>());
            }
        }
        assert_eq!(planted.optimum as i64, noise.iter().map(|v| v * v).sum::<i64>());
        assert!(channel.floor == 1 || channel.margins().iter().all(|margin| *margin > 0));
    }
}
