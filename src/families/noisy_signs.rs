//! `noisy-signs`: hidden signs seen through noise on every pair, or on the edges of a graph.
//!
//! Let x be hidden signs and A symmetric whole couplings with zero diagonal. For C = -A and unit diagonal, put
//! `y_i = -x_i (A x)_i` and `S = C - Diag(y) = Diag(x * (A x)) - A`. Then S x = 0 for whatever A, and the sum of y is
//! -x'A x = <C, x x'>; so x x' is optimal as soon as S is PSD, and the only optimum when S has rank n - 1. All of this
//! is in whole numbers. Whether S is PSD depends on the noise; it is tested by the error-bounded factorisation of
//! `certificate::VerifiedPair`. Where the test fails the instance is planted all the same, with the certificate
//! `no-proof`: x is then a feasible point and the optimum is not known.
//!
//! Noise in whole numbers (`model = gaussian`). With K = 8, `A_ij = K x_i x_j + e_ij`, e_ij the number of heads in 2N fair
//! tosses less N, N = floor(K^2 noise^2 n / ln n + 1/2). Its mean is 0, its variance N/2, which is (K sigma)^2 up to
//! the rounding of N for sigma = noise * (n / (2 ln n))^(1/2); its kurtosis is 3 - 1/N against 3 of the normal law (the
//! sum of 2N independent signs over 2), where N = 174 for noise = 0.5 and n = 40. The logarithm is summed here from basic arithmetic, so that N is the same on every machine.
//!
//! Noise as wrong signs (`model = flips`). `A_ij = x_i x_j` on the edges of a graph, with the sign wrong on each edge with
//! chance flips/1000. On the complete graph the mean is 1 - 2p and the variance 4p(1 - p), like noise of
//! sigma = 2 (p(1 - p))^(1/2) / (1 - 2p).

use super::assembly::{TriangleSum, plant_verified, sign_problem};
use super::graphs::random_graph;
use super::{Family, PlantError};
use crate::card::{DefaultSetting, FamilyCard, Kind, Relaxation, Setting, SettingSpec, Settings};
use crate::problem::certificate::{IntegerFactor, Planted, VerifiedPair};
use crate::seed::Stream;

/// What the signal x_i x_j is multiplied by, so that noise has a fine grid.
const SCALE: i64 = 8;

/// The family `noisy-signs`.
#[derive(Clone, Copy, Debug)]
pub struct NoisySigns;

static CARD: FamilyCard = FamilyCard {
    id: "noisy-signs",
    title: "Sign synchronisation from noisy pairs, tight below a threshold of the noise",
    formula: "min <-A,X> s.t. X_ii = 1, X PSD, rank X <= 1",
    construction: "hidden signs x; gaussian: A_ij = 8 x_i x_j + e_ij with e_ij a centred binomial number of the \
        variance 64 sigma^2, sigma = noise * sqrt(n / (2 ln n)); flips: A_ij = x_i x_j on the edges of a graph, the sign \
        wrong with chance flips/1000",
    optimum: "-x'Ax, attained by xx' only, where the proof goes through; not known where it does not (kind no-proof)",
    relaxation: Relaxation::GapToTight,
    certificate: "verified pair: S = Diag(x*(Ax)) - A in whole numbers with Sx = 0; that S is PSD of rank n - 1 is proved by a \
        Cholesky factorisation with a bound of its error. Without proof the instance is labelled no-proof and has no \
        known optimum",
    source: "A. Bandeira, Random Laplacian matrices and convex relaxations, Foundations of Computational Mathematics \
        18:345-379, 2018, for the threshold (citation from memory); binomial noise: own",
    parameters: &[
        SettingSpec {
            name: "order",
            kind: Kind::Integer { least: 3, most: 1000 },
            default: DefaultSetting::Integer(40),
            meaning: "Number n of signs.",
        },
        SettingSpec {
            name: "model",
            kind: Kind::Word(&["gaussian", "flips"]),
            default: DefaultSetting::Word("gaussian"),
            meaning: "`gaussian`: noise on all pairs, set by `noise`. `flips`: wrong signs on the edges of a graph, set by \
                `flips` and `degree`.",
        },
        SettingSpec {
            name: "noise",
            kind: Kind::Decimal { least: 0.0, most: 2.0 },
            default: DefaultSetting::Decimal(0.5),
            meaning: "For gaussian: standard deviation of the noise over the threshold sqrt(n / (2 ln n)). Well below 1 nearly \
                every draw has its proof, around 1 about half, well above hardly any; the larger n, the sharper.",
        },
        SettingSpec {
            name: "flips",
            kind: Kind::Integer { least: 0, most: 500 },
            default: DefaultSetting::Integer(50),
            meaning: "For flips: chance of a wrong sign in thousandths. The denser the graph, the more \
                flips it bears.",
        },
        SettingSpec {
            name: "degree",
            kind: Kind::WordOrInteger { words: &["complete"], least: 2, most: 1000 },
            default: DefaultSetting::Word("complete"),
            meaning: "For flips: mean degree d of a random connected graph with max(n - 1, floor(n d / 2)) edges, or the \
                complete graph. A vertex with half of its signs wrong ends the proof, so sparse graphs bear fewer flips.",
        },
    ],
};

impl Family for NoisySigns {
    fn card(&self) -> &'static FamilyCard {
        &CARD
    }

    fn plant(&self, parameters: &Settings, stream: &mut Stream) -> Result<Planted, PlantError> {
        let order = parameters.size("order");
        let edges = edges(parameters, stream)?;
        let noise = Noise::of(parameters);
        let signs: Vec<i64> = (0..order).map(|_| stream.sign()).collect();
        let mut cost = TriangleSum::new(order);
        let mut multipliers = vec![0i64; order];
        for (i, j) in edges {
            let aligned = noise.draw(stream);
            cost.add(i, j, -i128::from(aligned * signs[i] * signs[j]));
            multipliers[i] -= aligned;
            multipliers[j] -= aligned;
        }
        let pair = VerifiedPair {
            factors: vec![IntegerFactor { order, width: 1, rows: signs }],
            multipliers,
            orthant: Vec::new(),
            orthant_slack: Vec::new(),
        };
        plant_verified(sign_problem(cost.floats()?)?, pair)
    }
}

/// Returns the pairs that are seen: all of them, or the edges of a random graph.
fn edges(parameters: &Settings, stream: &mut Stream) -> Result<Vec<(usize, usize)>, PlantError> {
    let order = parameters.size("order");
    match (parameters.word("model"), parameters.get("degree")) {
        ("flips", Some(Setting::Integer(_))) => {
            let degree = parameters.size("degree");
            if degree >= order {
                return Err(PlantError::Parameters(format!(
                    "degree = {degree} is not below order = {order}; the nearest possible value is {}",
                    order - 1
                )));
            }
            Ok(random_graph(stream, order, (order * degree / 2).max(order - 1)))
        }
        _ => Ok((0..order).flat_map(|j| (0..j).map(move |i| (i, j))).collect()),
    }
}

/// How x_i x_j A_ij is drawn.
#[derive(Clone, Copy, Debug)]
enum Noise {
    /// [`SCALE`] and the heads of twice so many tosses, less their mean.
    Gaussian { half: u64 },
    /// 1, or -1 with so many chances in 1000.
    Flips { chance: u64 },
}

impl Noise {
    fn of(parameters: &Settings) -> Self {
        match parameters.word("model") {
            "gaussian" => Noise::Gaussian {
                half: half_tosses(parameters.size("order"), parameters.decimal("noise")),
            },
            _ => Noise::Flips { chance: parameters.integer("flips").unsigned_abs() },
        }
    }

    fn draw(self, stream: &mut Stream) -> i64 {
        match self {
            Noise::Gaussian { half } => SCALE + centred_binomial(stream, half),
            Noise::Flips { chance } if stream.below(1000) < chance => -1,
            Noise::Flips { .. } => 1,
        }
    }
}

/// Returns N = floor(K^2 noise^2 n / ln n + 1/2), half the number of tosses.
fn half_tosses(order: usize, noise: f64) -> u64 {
    let scale = SCALE as f64;
    (scale * scale * noise * noise * order as f64 / natural_logarithm(order) + 0.5) as u64
}

/// Returns ln n for n >= 2 from basic arithmetic alone: with n = 2^e m, 1 <= m < 2 and t = (m - 1)/(m + 1) <= 1/3,
/// ln m = 2 (t + t^3/3 + t^5/5 + ...), of which 20 terms leave less than 2^-64.
fn natural_logarithm(n: usize) -> f64 {
    const LN_2: f64 = std::f64::consts::LN_2;
    let exponent = n.ilog2();
    let mantissa = n as f64 / (1u64 << exponent) as f64;
    let t = (mantissa - 1.0) / (mantissa + 1.0);
    let mut sum = 0.0;
    for k in (0..20u32).rev() {
        sum = sum * t * t + 1.0 / f64::from(2 * k + 1);
    }
    f64::from(exponent) * LN_2 + 2.0 * t * sum
}

/// Draws the number of heads in 2 `half` fair tosses, less `half`.
fn centred_binomial(stream: &mut Stream, half: u64) -> i64 {
    let tosses = 2 * half;
    let mut heads = 0;
    for _ in 0..tosses / 64 {
        heads += u64::from(stream.bits().count_ones());
    }
    if !tosses.is_multiple_of(64) {
        heads += u64::from((stream.bits() >> (64 - tosses % 64)).count_ones());
    }
    heads as i64 - half as i64
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::problem::Uniqueness;
    use crate::problem::certificate::{Certificate, RelaxationFact, Standing};
    use std::collections::BTreeMap;

    fn settings(pairs: &[(&str, Setting)]) -> Settings {
        let given: BTreeMap<String, Setting> =
            pairs.iter().map(|(name, value)| ((*name).to_owned(), value.clone())).collect();
        Settings::resolve(CARD.parameters, &given).unwrap()
    }

    fn plant(settings: &Settings, seed: u64) -> Planted {
        let mut stream = Stream::named(seed, &["noisy-signs", &settings.to_string()]);
        NoisySigns.plant(settings, &mut stream).unwrap()
    }

    /// Returns how many of `draws` instances are proved, and checks what each says of itself.
    fn proved(pairs: &[(&str, Setting)], draws: u64) -> u64 {
        let settings = settings(pairs);
        let check = |seed: &u64| {
            let planted = plant(&settings, *seed);
            match &planted.certificate {
                Certificate::VerifiedPair(pair) => {
                    assert_eq!(planted.certificate.standing(), Standing::Verified);
                    assert_eq!(planted.proved_optimum(), Some(planted.optimum));
                    assert_eq!(planted.optimum, pair.multipliers.iter().sum::<i64>() as f64);
                    assert_eq!(planted.uniqueness, Uniqueness::Proved);
                    assert_eq!(planted.proof.relaxation, RelaxationFact::SameOptimum);
                    true
                }
                Certificate::NoProof(_) => {
                    assert_eq!(planted.certificate.standing(), Standing::Unproved);
                    assert_eq!(planted.proved_optimum(), None);
                    assert_eq!(planted.uniqueness, Uniqueness::NotProved);
                    assert_eq!(planted.proof.relaxation, RelaxationFact::NotProved);
                    assert!(planted.dual.is_none());
                    assert!(planted.proof.statement.starts_with("no proof"));
                    false
                }
                other => panic!("{} is no kind of this family", other.kind()),
            }
        };
        (0..draws).filter(check).count() as u64
    }

    /// Success of the certificate over 200 draws at n = 100: reference notes, recovery thresholds (measured there with real
    /// normal noise; the scale after A. Bandeira 2018). Two samples of 200 and 400 draws differ by at most four of
    /// their joint standard deviations.
    #[test]
    fn the_share_of_proofs_falls_at_the_known_threshold() {
        let draws = 400;
        for (noise, share) in [(0.7, 1.0), (0.9, 0.87), (1.0, 0.55), (1.1, 0.23), (1.2, 0.04)] {
            let pairs = [("order", Setting::Integer(100)), ("noise", Setting::decimal(noise))];
            let found = proved(&pairs, draws) as f64 / draws as f64;
            // A share of 1 in 200 draws is compatible with 0.985 (Clopper-Pearson, 95 %).
            let spread = f64::max(share * (1.0 - share), 0.015 * 0.985);
            let allowance = 4.0 * (spread * (1.0 / 200.0 + 1.0 / draws as f64)).sqrt();
            assert!((found - share).abs() <= allowance, "{noise}: {found} against {share}");
        }
    }

    #[test]
    fn a_thousand_seeds_are_proved_or_labelled() {
        let order = ("order", Setting::Integer(12));
        let word = |text: &str| Setting::Word(text.to_owned());
        assert_eq!(proved(&[order.clone(), ("noise", Setting::decimal(0.0))], 50), 50);
        let both = 1..1000;
        assert!(both.contains(&proved(&[order.clone(), ("noise", Setting::decimal(1.0))], 1000)));
        let flips = [order.clone(), ("model", word("flips")), ("flips", Setting::Integer(150))];
        assert!(both.contains(&proved(&flips, 1000)));
        let sparse = [&flips[..], &[("degree", Setting::Integer(4))]].concat();
        assert!(both.contains(&proved(&sparse, 1000)));
    }

    #[test]
    fn the_logarithm_is_the_logarithm() {
        for n in 2..3000 {
            let (found, expected) = (natural_logarithm(n), (n as f64).ln());
            assert!((found - expected).abs() <= 4.0 * f64::EPSILON * expected, "ln {n}: {found}");
        }
    }

    /// The moments of the noise: mean 0, variance N/2, fourth moment (3 - 1/N) times its square, each within five
    /// standard deviations of its sample mean.
    #[test]
    fn the_noise_has_the_stated_moments() {
        let mut stream = Stream::named(1, &["noise"]);
        for half in [1u64, 5, 40, 333] {
            let count = 40_000;
            let draws: Vec<f64> =
                (0..count).map(|_| centred_binomial(&mut stream, half) as f64).collect();
            let moment =
                |power: i32| draws.iter().map(|e| e.powi(power)).sum::<f64>() / count as f64;
            let within = |power: i32, expected: f64| {
                let variance = moment(2 * power) - moment(power).powi(2);
                let spread = (variance / count as f64).sqrt();
                let found = moment(power);
                assert!((found - expected).abs() <= 5.0 * spread, "N = {half}, {power}: {found}");
            };
            let variance = half as f64 / 2.0;
            within(1, 0.0);
            within(2, variance);
            within(4, (3.0 - 1.0 / half as f64) * variance * variance);
        }
    }

    #[test]
    fn a_degree_beyond_the_order_is_refused() {
        let word = Setting::Word("flips".to_owned());
        let pairs =
            [("order", Setting::Integer(9)), ("model", word), ("degree", Setting::Integer(9))];
        let mut stream = Stream::named(1, &["refused"]);
        let error = NoisySigns.plant(&settings(&pairs), &mut stream).unwrap_err();
        assert!(error.to_string().ends_with("the nearest possible value is 8"), "{error}");
    }
}
