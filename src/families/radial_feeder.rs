//! `radial-feeder`: power flow on a tree of lines, planted around whole voltages.
//!
//! Buses 0..N-1, bus 0 the reference with Im V_0 = 0; X = ww' for the lifted voltages w of `problem::network::injection`,
//! order n = 2N - 1. Voltages are Gaussian integers (whole real and imaginary parts, in units of which the reference
//! voltage has `resolution`), lines have whole conductances and susceptances, so powers are whole once doubled (the forms
//! have halves off the diagonal) and everything is exact.
//!
//! Slack. For a line between l and m let u = conj(V_m) e_l - conj(V_l) e_m: u^H V = V_m V_l - V_l V_m = 0. Its real and its
//! imaginary part are two whole vectors of the lifted space, orthogonal to w, and S is the sum over the lines of whole
//! weights times their squares: PSD, with the sparsity of the network. S v = 0 says that V'_m / V'_l = V_m / V_l on
//! every line for the voltages V' of v, so along the tree V' = z V for one complex z, and Im V'_0 = 0 makes z real: S
//! has rank n - 1. The multipliers y are drawn and C = S + A*(y): a price on every fixed power and on the reference
//! voltage plus a penalty of changes of voltage ratios. The pair is strictly complementary, so X* = ww' is the only
//! optimum, for any tree, loading and prices; the cost is planted, unlike the generation cost of a real network, and the
//! conditions under which a tree is exact for such costs (S. Bose, D. Gayme, M. Chandy, S. Low, IEEE Transactions on
//! Control of Network Systems 2:278-287, 2015, citation from memory) play no part.
//!
//! Constraints. Always |V_0|^2 and the active power of every other bus. With `limits = none` also every reactive power:
//! 2N - 1 equations, the power-flow equations with bus 0 as slack bus. With `limits = active` about half of the other
//! buses are sources: their reactive power and squared voltage lie between limits (four rows with a nonnegative slack
//! each), at most one of which is active, with a multiplier that is not 0.
//!
//! Measured over five draws each, order 39: the interior-point relaxation has rank 1 and the planted value to 1e-8 relative
//! under either kind of limits, with one long line, and with a reference voltage of 200 units and loading 5.
//!
//! The feeders are synthetic. Nothing computed with them is advice to operate a network: studies of a real network follow
//! the local grid code and are the work of a licensed engineer.

use super::assembly::{IntegerCoefficient, PairDraft, column, draw_nonzero, problem_with_orthant};
use super::{Family, PlantError};
use crate::card::{DefaultSetting, FamilyCard, Kind, Relaxation, SettingSpec, Settings};
use crate::problem::certificate::{Certificate, IntegerColumn, IntegerFactor, Planted};
use crate::problem::network::{Branch, Lift, Power, Terms};
use crate::problem::{Functional, SparseVector};
use crate::seed::Stream;

/// The family `radial-feeder`.
#[derive(Clone, Copy, Debug)]
pub struct RadialFeeder;

/// Largest conductance of a line.
const CONDUCTANCE: i64 = 3;
/// Largest modulus of the (negative) susceptance of a line.
const SUSCEPTANCE: i64 = 6;
/// Prices are drawn from 1..=PRICE times the squared reference voltage, with a random sign.
const PRICE: i64 = 3;

static CARD: FamilyCard = FamilyCard {
    id: "radial-feeder",
    title: "Power flow on a tree of lines, bus injection, planted around whole voltages (synthetic, no operating advice)",
    formula: "min <C,X> s.t. |V_0|^2, P_k and Q_k (k = 1..N-1) given, or Q_k and |V_k|^2 within limits at sources; \
        X = ww' for w = (Re V; Im V without Im V_0), X PSD of order 2N - 1, rank X <= 1",
    construction: "random tree; voltages with whole parts around the reference voltage; whole admittances; prices y; \
        S = sum over lines of weight u u^H with u = conj(V_m)e_l - conj(V_l)e_m, C = S + A*(y); powers are doubled to be \
        whole. Synthetic: figures are no operating advice; studies of a real network follow the local grid code and a \
        licensed engineer",
    optimum: "b'y, attained by X* = ww' only; the multipliers are unique where the power-flow equations are regular",
    relaxation: Relaxation::Tight,
    certificate: "dual pair, exact: S = sum of whole squares, of rank n - 1",
    source: "bus injection: J. Lavaei, S. Low, IEEE Transactions on Power Systems 27:92-107, 2012 (citation from memory); \
        the planted slack: own",
    parameters: &[
        SettingSpec {
            name: "order",
            kind: Kind::Integer { least: 3, most: 1001 },
            default: DefaultSetting::Integer(39),
            meaning: "Order n = 2N - 1 of the matrix variable for N buses; odd.",
        },
        SettingSpec {
            name: "branching",
            kind: Kind::Integer { least: 1, most: 1000 },
            default: DefaultSetting::Integer(3),
            meaning: "Most lines that leave a bus away from the reference. 1 makes one long line, the deepest tree, on which \
                the least nonzero eigenvalue of S falls as 1/N^2.",
        },
        SettingSpec {
            name: "resolution",
            kind: Kind::Integer { least: 10, most: 1000 },
            default: DefaultSetting::Integer(20),
            meaning: "The reference voltage in units of the voltages: a larger one makes finer voltages and larger \
                numbers, X* growing with its square and C with its square.",
        },
        SettingSpec {
            name: "loading",
            kind: Kind::Integer { least: 1, most: 200 },
            default: DefaultSetting::Integer(1),
            meaning: "Most change of the real and of the imaginary part of the voltage along a line, in units; real parts \
                stay within a fifth of the reference voltage around it, imaginary parts within a fifth around 0. A larger one makes \
                larger flows.",
        },
        SettingSpec {
            name: "weight",
            kind: Kind::Integer { least: 1, most: 1000 },
            default: DefaultSetting::Integer(3),
            meaning: "Weights of lines in S are drawn from 1..=weight; a larger one spreads the spectrum of S.",
        },
        SettingSpec {
            name: "limits",
            kind: Kind::Word(&["none", "active"]),
            default: DefaultSetting::Word("none"),
            meaning: "`none`: equations only. `active`: sources with limits of reactive power and voltage, some of them \
                active, so that the problem has a nonnegative part.",
        },
    ],
};

impl Family for RadialFeeder {
    fn card(&self) -> &'static FamilyCard {
        &CARD
    }

    fn plant(&self, parameters: &Settings, stream: &mut Stream) -> Result<Planted, PlantError> {
        let order = parameters.size("order");
        if order.is_multiple_of(2) {
            return Err(PlantError::Parameters(format!(
                "order = {order} is even, but N buses make order 2N - 1; the nearest possible value is {}",
                order - 1
            )));
        }
        let feeder = Feeder::draw(parameters, stream);
        let rows = feeder.rows(parameters.word("limits"), stream);
        let slack = feeder.slack();
        let weights = (0..slack.len() / 2)
            .map(|_| stream.between(1, parameters.integer("weight")))
            .flat_map(|weight| [weight, weight])
            .collect();
        plant(feeder.factor(), slack, weights, rows)
    }
}

/// A line from a bus towards the reference.
struct Upwards {
    parent: usize,
    conductance: i64,
    susceptance: i64,
}

struct Feeder {
    /// The reference voltage.
    resolution: i64,
    /// Real and imaginary parts.
    voltages: Vec<(i64, i64)>,
    /// The line of bus k + 1.
    lines: Vec<Upwards>,
    lift: Lift,
}

/// How a row holds its value.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
enum Hold {
    /// Equal to what the planted point has.
    Equal,
    /// At least that less this slack.
    AtLeast(i64),
    /// At most that plus this slack.
    AtMost(i64),
}

/// A constraint with its multiplier.
struct Row {
    form: IntegerCoefficient,
    multiplier: i64,
    hold: Hold,
}

impl Feeder {
    fn draw(parameters: &Settings, stream: &mut Stream) -> Self {
        let buses = parameters.size("order").div_ceil(2);
        let (resolution, loading) =
            (parameters.integer("resolution"), parameters.integer("loading"));
        let reach = resolution / 5;
        let mut voltages = vec![(resolution, 0)];
        let mut lines = Vec::with_capacity(buses - 1);
        // Buses that may take one more line, with the number of lines they took.
        let mut open = vec![(0, 0)];
        for bus in 1..buses {
            let at = stream.index(open.len());
            let (parent, children) = &mut open[at];
            let parent = *parent;
            *children += 1;
            if *children == parameters.size("branching") {
                open.swap_remove(at);
            }
            open.push((bus, 0));
            let (re, im): (i64, i64) = voltages[parent];
            let mut change = || stream.between(-loading, loading);
            let re = (re + change()).clamp(resolution - reach, resolution + reach);
            let im = (im + change()).clamp(-reach, reach);
            voltages.push((re, im));
            let conductance = stream.between(1, CONDUCTANCE);
            let susceptance = -stream.between(1, SUSCEPTANCE);
            lines.push(Upwards { parent, conductance, susceptance });
        }
        Feeder { resolution, voltages, lines, lift: Lift::new(buses, 0) }
    }

    /// Returns w as a factor.
    fn factor(&self) -> IntegerFactor {
        let order = self.lift.order();
        let mut rows = vec![0; order];
        for (bus, &(re, im)) in self.voltages.iter().enumerate() {
            rows[self.lift.real(bus)] = re;
            if let Some(place) = self.lift.imaginary(bus) {
                rows[place] = im;
            }
        }
        IntegerFactor { order, width: 1, rows }
    }

    /// Returns the real and the imaginary part of u for every line: the coefficients of V'_l V_m - V'_m V_l in the lifted
    /// V'.
    fn slack(&self) -> Vec<IntegerColumn> {
        let mut columns = Vec::with_capacity(2 * self.lines.len());
        for (at, line) in self.lines.iter().enumerate() {
            let (l, m) = (line.parent, at + 1);
            let (own, other) = (self.voltages[l], self.voltages[m]);
            // (bus, its coefficient of the real and of the imaginary part of V').
            let real = [(l, other.0, -other.1), (m, -own.0, own.1)];
            let imaginary = [(l, other.1, other.0), (m, -own.1, -own.0)];
            for part in [real, imaginary] {
                let mut entries = Vec::with_capacity(4);
                for (bus, of_real, of_imaginary) in part {
                    entries.push((self.lift.real(bus), of_real));
                    entries.extend(self.lift.imaginary(bus).map(|place| (place, of_imaginary)));
                }
                entries.retain(|entry| entry.1 != 0);
                columns.push(column(entries));
            }
        }
        columns
    }

    /// Returns the power that each bus gives to its lines, as undoubled forms.
    fn powers(&self) -> Vec<Power> {
        let mut powers = vec![Power::default(); self.voltages.len()];
        for (at, line) in self.lines.iter().enumerate() {
            let branch = Branch {
                conductance: line.conductance as f64,
                susceptance: line.susceptance as f64,
                charging: 0.0,
            };
            let (l, m) = (line.parent, at + 1);
            self.lift.add_flow(l, m, branch, &mut powers[l]);
            self.lift.add_flow(m, l, branch, &mut powers[m]);
        }
        powers
    }

    /// Draws the constraints with their multipliers.
    fn rows(&self, limits: &str, stream: &mut Stream) -> Vec<Row> {
        let unit = self.resolution * self.resolution;
        let square = |bus: usize| {
            let mut terms = Terms::new();
            self.lift.add_square(bus, 1.0, &mut terms);
            whole(&terms, 1.0)
        };
        let price = |stream: &mut Stream| unit * draw_nonzero(stream, PRICE);
        let equal = |form, multiplier| Row { form, multiplier, hold: Hold::Equal };
        let mut rows = vec![equal(square(0), price(stream))];
        for (bus, power) in self.powers().into_iter().enumerate().skip(1) {
            rows.push(equal(whole(&power.active, 2.0), price(stream)));
            let reactive = whole(&power.reactive, 2.0);
            if limits == "none" || stream.sign() < 0 {
                rows.push(equal(reactive, price(stream)));
                continue;
            }
            // 0 to 3 name the active row, 4 stands for none.
            let active = stream.index(5);
            for (row, form) in
                [reactive.clone(), reactive, square(bus), square(bus)].into_iter().enumerate()
            {
                let slack = if row == active { 0 } else { stream.between(1, (unit / 4).max(1)) };
                let size = if row == active { unit * stream.between(1, PRICE) } else { 0 };
                let (multiplier, hold) = match row % 2 {
                    0 => (size, Hold::AtLeast(slack)),
                    _ => (-size, Hold::AtMost(slack)),
                };
                rows.push(Row { form, multiplier, hold });
            }
        }
        rows
    }
}

/// Turns `scale` times a form into whole numbers.
fn whole(terms: &Terms, scale: f64) -> IntegerCoefficient {
    let entries = terms.iter().map(|&(i, j, value)| {
        debug_assert!((scale * value).fract() == 0.0, "{value} times {scale} is not whole");
        (i, j, (scale * value) as i64)
    });
    IntegerCoefficient::gather(entries.collect())
}

/// Proves the pair with all rows as equations, then puts the slacks of the limits in.
///
/// A slack s of a row with coefficient e (-1 for a lower limit, 1 for an upper one) has no cost, so its dual is
/// z = -e y: not negative by the signs of the multipliers, and 0 wherever s is not.
fn plant(
    factor: IntegerFactor,
    slack: Vec<IntegerColumn>,
    weights: Vec<i64>,
    rows: Vec<Row>,
) -> Result<Planted, PlantError> {
    let holds: Vec<Hold> = rows.iter().map(|row| row.hold).collect();
    let multipliers = rows.iter().map(|row| row.multiplier).collect();
    let constraints = rows.into_iter().map(|row| row.form).collect();
    let equations =
        PairDraft { rank: 1, factor, slack, weights, constraints, multipliers }.plant()?;
    let Certificate::DualPair(mut pair) = equations.certificate.clone() else {
        unreachable!("a pair draft makes a dual pair");
    };
    let mut constraints: Vec<Functional> = equations.problem.constraints().to_vec();
    let mut rhs = equations.problem.rhs().to_vec();
    for (i, hold) in holds.into_iter().enumerate() {
        let (sign, slack) = match hold {
            Hold::Equal => continue,
            Hold::AtLeast(slack) => (-1, slack),
            Hold::AtMost(slack) => (1, slack),
        };
        let place = pair.orthant.len() as u32;
        constraints[i].orthant = SparseVector::gather(vec![(place, sign as f64)]);
        rhs[i] += (sign * slack) as f64;
        pair.orthant.push(slack);
        pair.orthant_slack.push(-sign * pair.multipliers[i]);
    }
    if pair.orthant.is_empty() {
        return Ok(equations);
    }
    let (problem, cost) = (&equations.problem, equations.problem.cost().clone());
    let blocks = problem.blocks().to_vec();
    let problem = problem_with_orthant(blocks, pair.orthant.len(), cost, constraints, rhs)?;
    Ok(Planted::prove(problem, Certificate::DualPair(pair))?)
}

#[cfg(test)]
mod tests {
    use super::*;
    use std::collections::BTreeMap;

    use crate::card::Setting;
    use crate::problem::certificate::Uniqueness;

    fn settings(pairs: &[(&str, Setting)]) -> Settings {
        let given: BTreeMap<String, Setting> =
            pairs.iter().map(|(name, value)| ((*name).to_owned(), value.clone())).collect();
        Settings::resolve(CARD.parameters, &given).unwrap()
    }

    fn plant(seed: u64, pairs: &[(&str, Setting)]) -> Planted {
        let mut stream = Stream::named(seed, &["radial-feeder"]);
        RadialFeeder.plant(&settings(pairs), &mut stream).unwrap()
    }

    /// Compares right sides with twice V conj(I), computed in whole complex numbers from the lines.
    #[test]
    fn right_sides_are_twice_the_powers_of_the_voltages() {
        let settings = settings(&[("loading", Setting::Integer(3))]);
        let mut stream = Stream::named(9, &["radial-feeder"]);
        let feeder = Feeder::draw(&settings, &mut stream.clone());
        let planted = RadialFeeder.plant(&settings, &mut stream).unwrap();
        let mut powers = vec![(0i64, 0i64); feeder.voltages.len()];
        for (at, line) in feeder.lines.iter().enumerate() {
            for (own, other) in [(line.parent, at + 1), (at + 1, line.parent)] {
                let (v, u) = (feeder.voltages[own], feeder.voltages[other]);
                let (re, im) = (v.0 - u.0, v.1 - u.1);
                let (g, b) = (line.conductance, line.susceptance);
                let current = (g * re - b * im, g * im + b * re);
                powers[own].0 += v.0 * current.0 + v.1 * current.1;
                powers[own].1 += v.1 * current.0 - v.0 * current.1;
            }
        }
        let mut expected = vec![(feeder.resolution * feeder.resolution) as f64];
        for power in &powers[1..] {
            expected.extend([2.0 * power.0 as f64, 2.0 * power.1 as f64]);
        }
        assert_eq!(planted.problem.rhs(), expected);
        assert!(powers.iter().any(|power| power.0 != 0));
    }

    #[test]
    fn limits_bring_a_nonnegative_part_and_keep_both_proofs() {
        let mut active = 0;
        for seed in 0..20 {
            let planted = plant(seed, &[("limits", Setting::Word("active".to_owned()))]);
            assert!(planted.problem.orthant() > 0);
            assert_eq!(planted.uniqueness, Uniqueness::Proved, "seed {seed}");
            assert_eq!(planted.proof.dual_uniqueness, Uniqueness::Proved, "seed {seed}");
            let Certificate::DualPair(pair) = &planted.certificate else {
                panic!("a dual pair");
            };
            active += pair.orthant_slack.iter().filter(|z| **z > 0).count();
        }
        assert!(active > 50, "{active} active limits");
    }

    #[test]
    fn branching_bounds_the_lines_of_a_bus() {
        for branching in [1, 2, 5] {
            let pairs =
                [("branching", Setting::Integer(branching)), ("order", Setting::Integer(99))];
            let mut stream = Stream::named(3, &["radial-feeder"]);
            let feeder = Feeder::draw(&settings(&pairs), &mut stream);
            let mut children = vec![0; feeder.voltages.len()];
            feeder.lines.iter().for_each(|line| children[line.parent] += 1);
            assert_eq!(children.iter().max(), Some(&branching));
            let planted = plant(3, &pairs);
            // Entries of C stand at the buses' own places and at the ends of lines only.
            let cost = planted.problem.cost().part(0).unwrap().to_sparse();
            assert!(cost.stored() <= 3 * 50 + 4 * 49, "{}", cost.stored());
        }
    }
}
