//! Planting: every family at small sizes, with its certificate, its digest and its structure.

use std::collections::{BTreeMap, BTreeSet};

use rankassay::card::{Setting, Settings};
use rankassay::families::{find, registry};
use rankassay::formats::{self, instance::Instance};
use rankassay::problem::certificate::{Certificate, IntegerFactor, RelaxationFact, Standing};
use rankassay::problem::exact::f64_of_i128;
use rankassay::problem::{Coefficient, Functional, Planted, Problem, SparseSymmetric, Uniqueness};
use rankassay::problem::{Factor, canonical};
use rankassay::seed::Stream;

type Pairs<'a> = &'a [(&'a str, Setting)];

fn settings(id: &str, pairs: Pairs<'_>) -> Settings {
    let given: BTreeMap<String, Setting> =
        pairs.iter().map(|(name, value)| ((*name).to_owned(), value.clone())).collect();
    Settings::resolve(find(id).unwrap().card().parameters, &given).unwrap()
}

fn try_plant(id: &str, seed: u64, pairs: Pairs<'_>) -> Result<Planted, String> {
    let settings = settings(id, pairs);
    let mut stream = Stream::named(seed, &["test", id, &settings.to_string()]);
    find(id).unwrap().plant(&settings, &mut stream).map_err(|error| error.to_string())
}

fn plant(id: &str, seed: u64, pairs: Pairs<'_>) -> Planted {
    try_plant(id, seed, pairs).unwrap_or_else(|error| panic!("{id}, seed {seed}: {error}"))
}

fn integer(value: i64) -> Setting {
    Setting::Integer(value)
}

fn word(value: &str) -> Setting {
    Setting::Word(value.to_owned())
}

/// Three sizes of every family.
fn sizes() -> Vec<(&'static str, Vec<(&'static str, Setting)>)> {
    let mut all = Vec::new();
    let mut put = |id: &'static str, pairs: &[(&'static str, i64)]| {
        all.push((id, pairs.iter().map(|&(name, value)| (name, integer(value))).collect()));
    };
    for (id, orders) in [
        ("balanced-graph", [10, 100, 2000]),
        ("frustrated-loops", [12, 24, 200]),
        ("high-width-trap", [8, 20, 60]),
        ("lattice-tiles", [16, 36, 400]),
        ("noisy-signs", [10, 40, 150]),
        ("phase", [6, 20, 60]),
        ("radial-feeder", [9, 39, 201]),
        ("symbol-detection", [6, 20, 80]),
    ] {
        for n in orders {
            put(id, &[("order", n)]);
        }
    }
    for (id, cases) in [
        ("distance-completion", [(8, 2), (20, 2), (100, 3)]),
        ("ill-scaled", [(8, 1), (20, 2), (60, 3)]),
        ("ky-fan-gap", [(8, 1), (12, 2), (28, 3)]),
        ("localisation", [(8, 2), (22, 2), (103, 3)]),
        ("orthogonal-sync", [(10, 1), (60, 3), (2000, 4)]),
        ("sensing", [(8, 1), (20, 2), (30, 3)]),
        ("weak-complementarity", [(8, 1), (20, 2), (60, 3)]),
    ] {
        for (n, rank) in cases {
            put(id, &[("order", n), ("rank", rank)]);
        }
    }
    for (n, cliques) in [(8, 3), (20, 5), (60, 12)] {
        put("clique-cover", &[("order", n), ("cliques", cliques)]);
    }
    for (n, clusters) in [(8, 2), (15, 3), (40, 5)] {
        put("clusters", &[("order", n), ("clusters", clusters)]);
    }
    for (n, block) in [(7, 7), (20, 10), (300, 12)] {
        put("enumerated-cut", &[("order", n), ("block", block)]);
    }
    for (n, face, rank) in [(8, 3, 1), (20, 4, 2), (50, 7, 3)] {
        put("flat-face", &[("order", n), ("face", face), ("rank", rank)]);
    }
    for (n, columns) in [(10, 1), (20, 4), (60, 20)] {
        put("hidden-partition", &[("order", n), ("columns", columns)]);
    }
    for (n, width) in [(6, 2), (20, 4), (44, 5)] {
        put("low-width-trap", &[("order", n), ("width", width)]);
    }
    for (n, face) in [(6, 3), (20, 4), (60, 6)] {
        put("sign-trap", &[("order", n), ("face", face)]);
    }
    for (n, rank, form) in [(10, 1, "rank-one"), (20, 2, "sparse"), (40, 3, "dense")] {
        let mut pairs = vec![("order", integer(n)), ("rank", integer(rank))];
        pairs.push(("measurements", word(form)));
        all.push(("tight-unique", pairs));
    }
    for (n, case) in [(6, "easy"), (20, "hard"), (80, "easy")] {
        all.push(("trust-region", vec![("order", integer(n)), ("case", word(case))]));
    }
    all.sort_by_key(|(id, _)| *id);
    all
}

#[test]
fn the_registry_is_sorted_and_every_family_plants_without_parameters() {
    let ids: Vec<&str> = registry().iter().map(|family| family.card().id).collect();
    assert!(ids.windows(2).all(|pair| pair[0] < pair[1]), "{ids:?}");
    assert_eq!(ids.len(), 24);
    for id in ids {
        let planted = plant(id, 1, &[]);
        assert_eq!(planted.certificate.check(&planted.problem).unwrap(), planted.proof);
    }
}

#[test]
fn two_hundred_seeds_plant_at_default_size() {
    for id in registry().iter().map(|family| family.card().id) {
        let mut digests: Vec<String> =
            (0..200).map(|seed| canonical::digest(&plant(id, seed, &[]).problem)).collect();
        digests.sort_unstable();
        digests.dedup();
        assert_eq!(digests.len(), 200, "{id}: seeds must give different instances");
    }
}

#[test]
fn a_thousand_seeds_of_every_family_plant_small() {
    let sizes = sizes();
    for id in registry().iter().map(|family| family.card().id) {
        let (_, least) = sizes.iter().find(|(family, _)| *family == id).unwrap();
        for seed in 0..1000 {
            // Planting checks the certificate; what was proved is checked here once more, from what is kept.
            let planted = plant(id, seed, least);
            let proof = planted.certificate.check(&planted.problem);
            assert_eq!(proof.as_ref().ok(), Some(&planted.proof), "{id} {seed}: {proof:?}");
        }
    }
}

/// Compares the digests of three sizes of every family with `golden/digests.csv`. Run with
/// `RANKASSAY_WRITE_GOLDEN=1` to write the table anew after a deliberate change of a generator.
#[test]
fn digests_are_golden_and_certificates_exact() {
    let path = concat!(env!("CARGO_MANIFEST_DIR"), "/tests/golden/digests.csv");
    let mut table = String::from("family,parameters,seed,optimum,digest\n");
    for (id, pairs) in sizes() {
        let parameters = settings(id, &pairs).to_string();
        let planted = plant(id, 1, &pairs);
        let proof = planted.certificate.check(&planted.problem).unwrap();
        assert_eq!(f64_of_i128(proof.optimum), Some(planted.optimum));
        let digest = canonical::digest(&planted.problem);
        table.push_str(&format!("{id},{parameters},1,{},{digest}\n", proof.optimum));
    }
    if std::env::var_os("RANKASSAY_WRITE_GOLDEN").is_some() {
        std::fs::write(path, &table).unwrap();
    }
    let golden = std::fs::read_to_string(path).unwrap();
    for (found, expected) in table.lines().zip(golden.lines()) {
        assert_eq!(found, expected);
    }
    assert_eq!(table.lines().count(), golden.lines().count());
}

/// Evaluates `<F, V V'> + f'x` over all blocks in floats; exact here, since all partial sums are whole and
/// below 2^53.
fn value(functional: &Functional, point: &[Factor], orthant: &[f64]) -> f64 {
    let mut sum = functional.orthant.iter().map(|(i, entry)| entry * orthant[i]).sum::<f64>();
    for (block, part) in &functional.parts {
        let factor = &point[*block];
        for (i, j, entry) in part.to_sparse().iter() {
            let dot: f64 = factor.row(i).iter().zip(factor.row(j)).map(|(a, b)| a * b).sum();
            sum += if i == j { entry * dot } else { 2.0 * entry * dot };
        }
    }
    sum
}

#[test]
fn planted_points_are_feasible_and_attain_the_optimum() {
    for (id, pairs) in sizes() {
        let planted = plant(id, 2, &pairs);
        let problem = &planted.problem;
        for (constraint, rhs) in problem.constraints().iter().zip(problem.rhs()) {
            assert_eq!(value(constraint, &planted.point, &planted.orthant_point), *rhs, "{id}");
        }
        assert_eq!(
            value(problem.cost(), &planted.point, &planted.orthant_point),
            planted.optimum,
            "{id}"
        );
        for (block, factor) in problem.blocks().iter().zip(&planted.point) {
            assert_eq!(factor.order, block.order);
            assert!(block.rank.is_none_or(|rank| factor.width == rank), "{id}");
        }
    }
}

#[test]
fn certificates_survive_being_written_and_read() {
    let unproved = ("noisy-signs", vec![("noise", Setting::decimal(2.0))]);
    for (id, pairs) in sizes().into_iter().chain([unproved]) {
        let planted = plant(id, 3, &pairs);
        let text = serde_json::to_string(&planted.certificate).unwrap();
        let read: Certificate = serde_json::from_str(&text).unwrap();
        assert_eq!(read, planted.certificate, "{id}");
        assert!(text.contains(planted.certificate.kind()));
        let written = Instance {
            problem: planted.problem,
            certificate: Some(planted.certificate),
            origin: id.to_owned(),
        };
        let read = formats::instance::parse(&formats::instance::write(&written), id).unwrap();
        assert_eq!(read.problem, written.problem, "{id}");
        assert_eq!(read.certificate, written.certificate, "{id}");
    }
}

#[test]
fn what_each_family_promises_is_proved() {
    let unique = [
        "balanced-graph",
        "high-width-trap",
        "ill-scaled",
        "low-width-trap",
        "orthogonal-sync",
        "radial-feeder",
        "symbol-detection",
        "tight-unique",
        "trust-region",
    ];
    for seed in 0..20 {
        for id in unique {
            let planted = plant(id, seed, &[]);
            assert_eq!(planted.uniqueness, Uniqueness::Proved, "{id}");
            assert_eq!(planted.proof.dual_uniqueness, Uniqueness::Proved, "{id}");
            assert_eq!(planted.proof.relaxation, RelaxationFact::SameOptimum, "{id}");
            assert_eq!(planted.dual.as_ref().unwrap().len(), planted.problem.constraints().len());
        }
        for rank in [2, 3] {
            for id in ["distance-completion", "localisation"] {
                let planted = plant(id, seed, &[("rank", integer(rank))]);
                assert_eq!(planted.uniqueness, Uniqueness::Proved, "{id}, rank {rank}");
                assert_eq!(planted.proof.relaxation, RelaxationFact::SameOptimum);
                assert_eq!((planted.optimum, planted.point[0].width), (0.0, rank as usize));
            }
        }
        for (id, pairs) in [
            ("clique-cover", vec![]),
            ("flat-face", vec![]),
            ("hidden-partition", vec![]),
            ("sign-trap", vec![]),
            ("trust-region", vec![("case", word("hard"))]),
            ("weak-complementarity", vec![]),
        ] {
            let planted = plant(id, seed, &pairs);
            assert_eq!(planted.uniqueness, Uniqueness::NotProved, "{id}");
            assert_eq!(planted.proof.relaxation, RelaxationFact::SameOptimum, "{id}");
        }
        let planted = plant("clusters", seed, &[]);
        assert_eq!(planted.certificate.standing(), Standing::Exact);
        assert_eq!(planted.uniqueness, Uniqueness::Proved);
        assert_eq!(planted.proof.relaxation, RelaxationFact::SameOptimum);
        for id in ["phase", "sensing"] {
            let planted = plant(id, seed, &[]);
            assert_eq!(planted.certificate.standing(), Standing::Exact);
            assert_eq!(planted.uniqueness, Uniqueness::Proved, "{id}");
            let planted = plant(id, seed, &[("objective", word("zero"))]);
            assert_eq!(planted.proved_optimum(), Some(0.0), "{id}");
            assert_eq!(planted.uniqueness, Uniqueness::NotProved, "{id}");
        }
        let planted = plant("noisy-signs", seed, &[]);
        assert_eq!(planted.certificate.standing(), Standing::Verified);
        assert_eq!(planted.uniqueness, Uniqueness::Proved);
        assert_eq!(planted.proof.relaxation, RelaxationFact::SameOptimum);
        let planted = plant("enumerated-cut", seed, &[("graph", word("complete"))]);
        assert_eq!(planted.proof.relaxation, RelaxationFact::StrictlyLower);
        let planted = plant("weak-complementarity", seed, &[]);
        assert_eq!(planted.proof.dual_uniqueness, Uniqueness::Proved);
        let planted = plant("ky-fan-gap", seed, &[]);
        assert_eq!(planted.uniqueness, Uniqueness::Proved);
        assert_eq!(planted.proof.relaxation, RelaxationFact::StrictlyLower);
    }
}

/// The optima that the families' modules state in closed form.
#[test]
fn optima_have_their_closed_forms() {
    for seed in 0..5 {
        for n in [8, 14, 30] {
            let planted = plant("high-width-trap", seed, &[("order", integer(n))]);
            assert_eq!(planted.optimum, -2.0 * n as f64);
        }
        for (n, cliques) in [(6, 2), (20, 7), (30, 30)] {
            let pairs = [("order", integer(n)), ("cliques", integer(cliques))];
            assert_eq!(plant("clique-cover", seed, &pairs).optimum, -(cliques.pow(2) as f64));
        }
        for id in ["hidden-partition", "low-width-trap", "orthogonal-sync"] {
            assert_eq!(plant(id, seed, &[]).optimum, 0.0, "{id}");
        }
    }
}

/// Returns every certificate that differs from `certificate` by one unit in one number.
fn corruptions(certificate: &Certificate) -> Vec<(String, Certificate)> {
    let mut out = Vec::new();
    let mut spoil = |field: String, change: &mut dyn FnMut(&mut Certificate, i64)| {
        for step in [-1, 1] {
            let mut copy = certificate.clone();
            change(&mut copy, step);
            out.push((format!("{field} {step:+}"), copy));
        }
    };
    macro_rules! pick {
        ($variant:ident, $copy:ident) => {
            match $copy {
                Certificate::$variant(inner) => inner,
                _ => unreachable!("the copy is of the same kind"),
            }
        };
    }
    match certificate {
        Certificate::DualPair(pair) => {
            for (k, block) in pair.blocks.iter().enumerate() {
                for e in 0..block.factor.rows.len() {
                    spoil(format!("V {e}"), &mut |c, s| {
                        pick!(DualPair, c).blocks[k].factor.rows[e] += s
                    });
                }
                for (j, column) in block.slack.iter().enumerate() {
                    spoil(format!("D {j}"), &mut |c, s| {
                        pick!(DualPair, c).blocks[k].weights[j] += s
                    });
                    for e in 0..column.values.len() {
                        spoil(format!("W {j} {e}"), &mut |c, s| {
                            pick!(DualPair, c).blocks[k].slack[j].values[e] += s;
                        });
                        spoil(format!("W index {j} {e}"), &mut |c, s| {
                            let index = &mut pick!(DualPair, c).blocks[k].slack[j].indices[e];
                            *index = index.wrapping_add_signed(s as i32);
                        });
                    }
                }
                spoil(format!("width {k}"), &mut |c, s| {
                    let width = &mut pick!(DualPair, c).blocks[k].factor.width;
                    *width = width.wrapping_add_signed(s as isize);
                });
            }
            for i in 0..pair.multipliers.len() {
                spoil(format!("y {i}"), &mut |c, s| pick!(DualPair, c).multipliers[i] += s);
            }
            for i in 0..pair.orthant.len() {
                spoil(format!("x {i}"), &mut |c, s| pick!(DualPair, c).orthant[i] += s);
                spoil(format!("z {i}"), &mut |c, s| pick!(DualPair, c).orthant_slack[i] += s);
            }
        }
        Certificate::SharedMinimiser(shared) => {
            for i in 0..shared.signs.len() {
                spoil(format!("t {i}"), &mut |c, s| pick!(SharedMinimiser, c).signs[i] += s);
            }
            for (k, cycle) in shared.cycles.iter().enumerate() {
                for e in 0..cycle.vertices.len() {
                    spoil(format!("J {k} {e}"), &mut |c, s| {
                        pick!(SharedMinimiser, c).cycles[k].couplings[e] += s;
                    });
                    spoil(format!("vertex {k} {e}"), &mut |c, s| {
                        let vertex = &mut pick!(SharedMinimiser, c).cycles[k].vertices[e];
                        *vertex = vertex.wrapping_add_signed(s as i32);
                    });
                }
            }
        }
        Certificate::RankBound(bound) => {
            for j in 0..bound.columns.len() {
                spoil(format!("l {j}"), &mut |c, s| pick!(RankBound, c).spectrum[j] += s);
                for e in 0..bound.columns[j].len() {
                    spoil(format!("H {j} {e}"), &mut |c, s| pick!(RankBound, c).columns[j][e] += s);
                }
            }
            for i in 0..bound.multipliers.len() {
                spoil(format!("y {i}"), &mut |c, s| pick!(RankBound, c).multipliers[i] += s);
            }
            spoil("rank".to_owned(), &mut |c, s| {
                let rank = &mut pick!(RankBound, c).rank;
                *rank = rank.wrapping_add_signed(s as isize);
            });
        }
        Certificate::VerifiedPair(pair) => {
            for (k, factor) in pair.factors.iter().enumerate() {
                for (field, change) in factor_changes(factor) {
                    spoil(field, &mut |c, s| change(&mut pick!(VerifiedPair, c).factors[k], s));
                }
            }
            for i in 0..pair.multipliers.len() {
                spoil(format!("y {i}"), &mut |c, s| pick!(VerifiedPair, c).multipliers[i] += s);
            }
            for i in 0..pair.orthant.len() {
                spoil(format!("x {i}"), &mut |c, s| pick!(VerifiedPair, c).orthant[i] += s);
                spoil(format!("z {i}"), &mut |c, s| pick!(VerifiedPair, c).orthant_slack[i] += s);
            }
        }
        Certificate::Enumerated(cut) => {
            for i in 0..cut.signs.len() {
                spoil(format!("t {i}"), &mut |c, s| pick!(Enumerated, c).signs[i] += s);
            }
            for (k, part) in cut.parts.iter().enumerate() {
                for i in 0..part.vertices.len() {
                    spoil(format!("vertex {k} {i}"), &mut |c, s| {
                        let vertex = &mut pick!(Enumerated, c).parts[k].vertices[i];
                        *vertex = vertex.wrapping_add_signed(s as i32);
                    });
                    spoil(format!("gauge {k} {i}"), &mut |c, s| {
                        pick!(Enumerated, c).parts[k].gauge[i] += s;
                    });
                }
                for e in 0..part.weights.len() {
                    spoil(format!("weight {k} {e}"), &mut |c, s| {
                        pick!(Enumerated, c).parts[k].weights[e] += s;
                    });
                }
                spoil(format!("largest cut {k}"), &mut |c, s| {
                    pick!(Enumerated, c).parts[k].largest_cut += s;
                });
            }
        }
        Certificate::NoProof(point) => {
            for (k, factor) in point.factors.iter().enumerate() {
                for (field, change) in factor_changes(factor) {
                    spoil(field, &mut |c, s| change(&mut pick!(NoProof, c).factors[k], s));
                }
            }
            for i in 0..point.orthant.len() {
                spoil(format!("x {i}"), &mut |c, s| pick!(NoProof, c).orthant[i] += s);
            }
        }
    }
    out
}

type FactorChange = Box<dyn Fn(&mut IntegerFactor, i64)>;

/// Returns a change of every number of a factor by a given step.
fn factor_changes(factor: &IntegerFactor) -> Vec<(String, FactorChange)> {
    let mut out: Vec<(String, FactorChange)> = Vec::new();
    for e in 0..factor.rows.len() {
        let change = move |copy: &mut IntegerFactor, step: i64| copy.rows[e] += step;
        out.push((format!("V {e}"), Box::new(change)));
    }
    let resize = |size: usize, step: i64| size.wrapping_add_signed(step as isize);
    out.push((
        "width".to_owned(),
        Box::new(move |copy, step| copy.width = resize(copy.width, step)),
    ));
    out.push((
        "order".to_owned(),
        Box::new(move |copy, step| copy.order = resize(copy.order, step)),
    ));
    out
}

/// Block, row and column of a number.
type Place = (usize, usize, usize);

/// Returns every functional that differs by one unit in one stored number, with the place of that number when it
/// is one of a block.
fn changed(functional: &Functional) -> Vec<(Option<Place>, Functional)> {
    let mut out = Vec::new();
    for (position, (block, part)) in functional.parts.iter().enumerate() {
        let entries: Vec<(usize, usize, f64)> = part.to_sparse().iter().collect();
        for spot in 0..entries.len() {
            let mut copy = entries.clone();
            copy[spot].2 += 1.0;
            let matrix = Coefficient::Sparse(SparseSymmetric::gather(part.order(), copy));
            let mut other = functional.clone();
            other.parts[position] = (*block, matrix);
            out.push((Some((*block, entries[spot].0, entries[spot].1)), other));
        }
    }
    for spot in 0..functional.orthant.values.len() {
        let mut other = functional.clone();
        other.orthant.values[spot] += 1.0;
        out.push((None, other));
    }
    out
}

/// Whether a certificate must reject a changed problem, or whether the change leaves every identity true.
#[derive(Clone, Copy, PartialEq)]
enum Change {
    Rejected,
    Harmless,
}

/// Returns every problem that differs by one unit in one number of C, A or b.
///
/// An entry of A_i meets the identities of a dual pair in `y_i A_i` and `<A_i, X*>` only. With y_i = 0 and a zero of X*
/// there, the changed problem has the same certificate and the same proved optimum: a harmless change.
fn changed_problems(planted: &Planted) -> Vec<(Change, Problem)> {
    let problem = &planted.problem;
    let make = |cost: Functional, constraints: Vec<Functional>, rhs: Vec<f64>| {
        Problem::new(problem.blocks().to_vec(), problem.orthant(), cost, constraints, rhs).unwrap()
    };
    let harmless = |i: usize, (block, row, column): Place| {
        let factor = &planted.point[block];
        let dot: f64 = factor.row(row).iter().zip(factor.row(column)).map(|(a, b)| a * b).sum();
        let kind = &planted.certificate;
        let is_pair = matches!(kind, Certificate::DualPair(_) | Certificate::VerifiedPair(_));
        is_pair && dot == 0.0 && planted.dual.as_ref().is_some_and(|y| y[i] == 0.0)
    };
    let mut out = Vec::new();
    let (cost, constraints, rhs) =
        (problem.cost().clone(), problem.constraints().to_vec(), problem.rhs().to_vec());
    for (_, other) in changed(&cost) {
        out.push((Change::Rejected, make(other, constraints.clone(), rhs.clone())));
    }
    for i in 0..constraints.len() {
        for (place, other) in changed(&constraints[i]) {
            let mut copy = constraints.clone();
            copy[i] = other;
            let change = match place {
                Some(place) if harmless(i, place) => Change::Harmless,
                _ => Change::Rejected,
            };
            out.push((change, make(cost.clone(), copy, rhs.clone())));
        }
        let mut copy = rhs.clone();
        copy[i] += 1.0;
        out.push((Change::Rejected, make(cost.clone(), constraints.clone(), copy)));
    }
    out
}

#[test]
fn a_change_of_one_unit_anywhere_is_rejected() {
    let order = |n: i64| ("order", integer(n));
    let cases: Vec<(&str, Vec<(&str, Setting)>)> = vec![
        ("balanced-graph", vec![order(9)]),
        ("balanced-graph", vec![order(9), ("cost", word("adjacency"))]),
        ("clique-cover", vec![order(9), ("cliques", integer(3))]),
        ("clusters", vec![order(8), ("clusters", integer(2))]),
        ("clusters", vec![order(8), ("clusters", integer(2)), ("separation", integer(350))]),
        ("distance-completion", vec![order(7)]),
        ("distance-completion", vec![order(8), ("rank", integer(3)), ("extra", integer(2))]),
        ("enumerated-cut", vec![order(12), ("block", integer(6))]),
        ("enumerated-cut", vec![order(10), ("graph", word("petersen"))]),
        ("flat-face", vec![order(8), ("face", integer(3)), ("rank", integer(2))]),
        ("frustrated-loops", vec![order(9), ("weight", integer(3))]),
        ("hidden-partition", vec![order(8), ("columns", integer(1))]),
        ("hidden-partition", vec![order(8), ("columns", integer(3))]),
        ("high-width-trap", vec![order(8)]),
        ("ill-scaled", vec![order(7)]),
        ("ill-scaled", vec![order(7), ("dependence", integer(5))]),
        ("ky-fan-gap", vec![order(8)]),
        ("lattice-tiles", vec![order(16)]),
        ("lattice-tiles", vec![order(16), ("weights", word("mixed"))]),
        ("localisation", vec![order(7)]),
        ("localisation", vec![order(8), ("rank", integer(3)), ("extra", integer(2))]),
        ("low-width-trap", vec![order(6)]),
        ("noisy-signs", vec![order(14)]),
        ("noisy-signs", vec![order(14), ("model", word("flips")), ("degree", integer(8))]),
        ("orthogonal-sync", vec![order(8), ("rank", integer(2))]),
        ("orthogonal-sync", vec![order(9), ("cost", word("adjacency")), ("degree", integer(2))]),
        ("phase", vec![order(5)]),
        ("phase", vec![order(5), ("objective", word("zero"))]),
        ("radial-feeder", vec![order(9)]),
        ("radial-feeder", vec![order(9), ("limits", word("active"))]),
        ("sensing", vec![order(6)]),
        ("sensing", vec![order(6), ("rank", integer(2)), ("model", word("rank-one"))]),
        ("sensing", vec![order(6), ("objective", word("zero"))]),
        ("sign-trap", vec![order(8)]),
        ("symbol-detection", vec![order(6)]),
        ("tight-unique", vec![order(7)]),
        ("tight-unique", vec![order(6), ("measurements", word("dense"))]),
        ("tight-unique", vec![order(6), ("measurements", word("rank-one"))]),
        ("trust-region", vec![order(6)]),
        ("trust-region", vec![order(6), ("case", word("hard"))]),
        ("weak-complementarity", vec![order(7), ("excess", integer(1))]),
    ];
    let named: BTreeSet<&str> = cases.iter().map(|case| case.0).collect();
    assert_eq!(named.len(), registry().len(), "every family has a case");
    for (id, pairs) in cases {
        let planted = plant(id, 4, &pairs);
        let spoiled = corruptions(&planted.certificate);
        assert!(spoiled.len() > 40, "{id}: only {} corruptions", spoiled.len());
        for (field, certificate) in spoiled {
            assert!(certificate.check(&planted.problem).is_err(), "{id}: {field} went through");
        }
        for (position, (change, problem)) in changed_problems(&planted).iter().enumerate() {
            match (planted.certificate.check(problem), change) {
                (Err(_), Change::Rejected) => {}
                (Ok(proof), Change::Harmless) => assert_eq!(proof.optimum, planted.proof.optimum),
                (found, _) => panic!("{id}: change {position} of the problem gave {found:?}"),
            }
        }
    }
}

/// Instances that no proof covers say so, and what they state of their point is checked.
#[test]
fn instances_without_a_proof_are_labelled_and_their_point_is_checked() {
    for (id, pairs) in [
        (
            "clusters",
            vec![("order", integer(8)), ("clusters", integer(2)), ("separation", integer(100))],
        ),
        ("noisy-signs", vec![("order", integer(20)), ("noise", Setting::decimal(2.0))]),
        ("phase", vec![("objective", word("trace"))]),
        ("sensing", vec![("objective", word("trace")), ("rank", integer(2))]),
    ] {
        let planted = plant(id, 1, &pairs);
        assert_eq!(planted.certificate.kind(), "no-proof", "{id}");
        assert_eq!(planted.certificate.standing(), Standing::Unproved);
        assert_eq!((planted.proved_optimum(), &planted.dual), (None, &None));
        assert_eq!(planted.uniqueness, Uniqueness::NotProved);
        assert_eq!(planted.proof.relaxation, RelaxationFact::NotProved);
        let found = value(planted.problem.cost(), &planted.point, &planted.orthant_point);
        assert_eq!(found, planted.optimum, "{id}: the value of the point");
        for (field, certificate) in corruptions(&planted.certificate) {
            assert!(certificate.check(&planted.problem).is_err(), "{id}: {field} went through");
        }
    }
}

#[test]
fn enumerated_cuts_agree_with_enumerating_the_whole() {
    for seed in 0..6 {
        for (n, block) in [(9, 9), (16, 8), (15, 5)] {
            for density in [30, 60, 100] {
                let pairs = [("order", n), ("block", block), ("density", density)];
                let pairs = pairs.map(|(name, value)| (name, integer(value)));
                let planted = plant("enumerated-cut", seed, &pairs);
                assert_eq!(least_energy(&planted.problem), planted.optimum);
                let gap = descent(&planted).is_some();
                assert_eq!(gap, planted.proof.relaxation == RelaxationFact::StrictlyLower);
            }
        }
    }
}

/// Returns the least `<C, x x'>` over all sign vectors, by a Gray code over 2^(n-1) vectors.
fn least_energy(problem: &Problem) -> f64 {
    let n = problem.blocks()[0].order;
    let mut matrix = vec![vec![0.0; n]; n];
    for (i, j, entry) in problem.cost().part(0).unwrap().to_sparse().iter() {
        matrix[i][j] = entry;
        matrix[j][i] = entry;
    }
    let mut x = vec![1.0; n];
    let mut energy: f64 = matrix.iter().flatten().sum();
    let mut least = energy;
    for step in 1u64..1 << (n - 1) {
        let flip = step.trailing_zeros() as usize;
        let field: f64 = (0..n).filter(|&j| j != flip).map(|j| matrix[flip][j] * x[j]).sum();
        energy -= 4.0 * x[flip] * field;
        x[flip] = -x[flip];
        least = least.min(energy);
    }
    least
}

#[test]
fn shared_minimisers_agree_with_enumeration() {
    for seed in 0..6 {
        for n in [5, 9, 13, 16] {
            for density in [500, 1000, 3000] {
                let pairs = [
                    ("order", integer(n)),
                    ("density", integer(density)),
                    ("longest", integer(5)),
                    ("weight", integer(3)),
                ];
                let planted = plant("frustrated-loops", seed, &pairs);
                assert_eq!(least_energy(&planted.problem), planted.optimum);
            }
        }
        for weights in ["equal", "mixed"] {
            let pairs = [("order", integer(16)), ("weights", word(weights))];
            let planted = plant("lattice-tiles", seed, &pairs);
            assert_eq!(least_energy(&planted.problem), planted.optimum);
        }
    }
}

/// A single frustrated cycle of length l has the spin minimum -(l - 2): reference notes, closed forms.
#[test]
fn a_single_frustrated_cycle_has_the_known_minimum() {
    for length in [3, 5, 7] {
        let pairs = [
            ("order", integer(length)),
            ("density", integer(1)),
            ("shortest", integer(length)),
            ("longest", integer(length)),
        ];
        let planted = plant("frustrated-loops", 1, &pairs);
        assert_eq!(planted.optimum, -2.0 * (length as f64 - 2.0));
        assert_eq!(least_energy(&planted.problem), planted.optimum);
    }
}

/// Returns `-z'Sz > 0` for a whole vector z if 3000 power steps find one, with S the only slack that could prove
/// t t' optimal for the relaxation: S_ij = C_ij, S t = 0. If z'Sz < 0, the relaxation's optimum is
/// strictly lower, since X_ii = 1 has a Slater point and S t = 0 determines the multipliers.
fn descent(planted: &Planted) -> Option<i128> {
    let n = planted.problem.blocks()[0].order;
    let t: Vec<i64> = planted.point[0].data.iter().map(|value| *value as i64).collect();
    let entries: Vec<(usize, usize, i64)> = planted
        .problem
        .cost()
        .part(0)
        .unwrap()
        .to_sparse()
        .iter()
        .map(|(i, j, entry)| (i, j, entry as i64))
        .collect();
    let mut diagonal = vec![0i64; n];
    for &(i, j, entry) in &entries {
        diagonal[i] -= entry * t[i] * t[j];
        diagonal[j] -= entry * t[i] * t[j];
    }
    let shift = 2.0 * diagonal.iter().map(|d| d.abs()).max().unwrap() as f64 + 20.0;
    let mut z: Vec<f64> = (0..n).map(|i| ((i * i + 3 * i) % 7) as f64 - 3.0).collect();
    for _ in 0..3000 {
        let mut image: Vec<f64> = (0..n).map(|i| (shift - diagonal[i] as f64) * z[i]).collect();
        for &(i, j, entry) in &entries {
            image[i] -= entry as f64 * z[j];
            image[j] -= entry as f64 * z[i];
        }
        let norm = image.iter().map(|v| v * v).sum::<f64>().sqrt();
        z = image.into_iter().map(|v| v / norm).collect();
    }
    let whole: Vec<i128> = z.iter().map(|v| (v * 1e6).round() as i128).collect();
    let mut form: i128 = (0..n).map(|i| i128::from(diagonal[i]) * whole[i] * whole[i]).sum();
    for &(i, j, entry) in &entries {
        form += 2 * i128::from(entry) * whole[i] * whole[j];
    }
    (form < 0).then_some(-form)
}

#[test]
fn the_gap_families_have_a_strictly_lower_relaxation() {
    for seed in 0..10 {
        for (id, pairs) in [
            ("lattice-tiles", vec![]),
            ("lattice-tiles", vec![("weights", word("mixed"))]),
            ("frustrated-loops", vec![]),
        ] {
            let planted = plant(id, seed, &pairs);
            assert!(descent(&planted).is_some(), "{id}, seed {seed}");
        }
    }
}

#[test]
fn many_loops_close_the_gap() {
    let closed = (0..10)
        .filter(|&seed| {
            let planted = plant("frustrated-loops", seed, &[("density", integer(20_000))]);
            descent(&planted).is_none()
        })
        .count();
    assert_eq!(closed, 10);
}

#[test]
fn balanced_graph_plants_twenty_thousand_vertices() {
    let start = std::time::Instant::now();
    let planted = plant("balanced-graph", 1, &[("order", integer(20_000))]);
    assert_eq!(planted.uniqueness, Uniqueness::Proved);
    let cost = planted.problem.cost().part(0).unwrap().to_sparse();
    // Edges and diagonal only: nothing of size n x n.
    assert_eq!(cost.stored(), 30_000 + 20_000);
    // Every planting test together takes seconds; this bound only catches a quadratic algorithm.
    assert!(start.elapsed().as_secs_f64() < 20.0);
}

#[test]
fn orthogonal_sync_stores_edges_and_diagonal_only() {
    let pairs = [("order", integer(12_000)), ("rank", integer(3))];
    let planted = plant("orthogonal-sync", 1, &pairs);
    assert_eq!(planted.uniqueness, Uniqueness::Proved);
    assert_eq!(planted.proof.dual_uniqueness, Uniqueness::Proved);
    // 4,000 vertices of mean degree 3: 6,000 edges of 3 entries, nothing of size n x n.
    let cost = planted.problem.cost().part(0).unwrap().to_sparse();
    assert_eq!(cost.stored(), 3 * 6_000 + 12_000);
}

#[test]
fn the_whole_window_of_constraints_plants() {
    for (n, r) in [(8, 1), (12, 2), (10, 4)] {
        let most = n * r - r * (r - 1) / 2;
        for m in [r * (r + 1) / 2, most] {
            for form in ["sparse", "dense", "rank-one"] {
                let pairs = [
                    ("order", integer(n)),
                    ("rank", integer(r)),
                    ("constraints", integer(m)),
                    ("measurements", word(form)),
                ];
                let planted = plant("tight-unique", 1, &pairs);
                assert_eq!(planted.problem.constraints().len(), m as usize);
            }
        }
    }
}

/// Family, impossible parameters, the parameter the message names, its nearest possible value.
type Refusal = (&'static str, Vec<(&'static str, Setting)>, &'static str, i64);

#[test]
fn impossible_parameters_are_refused_with_the_nearest_possible_value() {
    let n = |value: i64| ("order", integer(value));
    let cases: Vec<Refusal> = vec![
        ("tight-unique", vec![n(6), ("rank", integer(6))], "rank", 5),
        ("tight-unique", vec![n(20), ("constraints", integer(2))], "constraints", 3),
        ("tight-unique", vec![n(20), ("constraints", integer(99))], "constraints", 39),
        ("flat-face", vec![n(6), ("face", integer(9))], "face", 5),
        ("flat-face", vec![n(9), ("rank", integer(5))], "rank", 3),
        ("flat-face", vec![n(9), ("constraints", integer(500))], "constraints", 29),
        ("sign-trap", vec![n(9), ("face", integer(9))], "face", 5),
        ("sign-trap", vec![n(4), ("face", integer(4))], "face", 3),
        ("balanced-graph", vec![n(5), ("degree", integer(9))], "degree", 4),
        ("clique-cover", vec![n(4), ("cliques", integer(9))], "cliques", 4),
        ("distance-completion", vec![n(4), ("rank", integer(3))], "order", 5),
        ("distance-completion", vec![n(100), ("radius", integer(4))], "radius", 10),
        ("clusters", vec![n(9), ("clusters", integer(5))], "order", 10),
        ("clusters", vec![n(16)], "order", 15),
        ("enumerated-cut", vec![n(13)], "order", 10),
        (
            "enumerated-cut",
            vec![n(26), ("block", integer(11)), ("graph", word("paley"))],
            "block",
            13,
        ),
        ("hidden-partition", vec![n(8), ("columns", integer(7))], "columns", 6),
        ("high-width-trap", vec![n(9)], "order", 8),
        ("ill-scaled", vec![n(6), ("rank", integer(6))], "rank", 5),
        ("localisation", vec![n(3), ("rank", integer(3))], "order", 4),
        ("low-width-trap", vec![n(7)], "order", 6),
        ("low-width-trap", vec![n(10), ("width", integer(3))], "width", 2),
        ("noisy-signs", vec![n(9), ("model", word("flips")), ("degree", integer(9))], "degree", 8),
        ("orthogonal-sync", vec![n(7)], "order", 6),
        ("orthogonal-sync", vec![n(3)], "order", 6),
        ("orthogonal-sync", vec![n(15), ("degree", integer(9))], "degree", 4),
        ("phase", vec![n(4), ("measurements", integer(11))], "measurements", 10),
        ("radial-feeder", vec![n(20)], "order", 19),
        ("sensing", vec![n(6), ("rank", integer(6))], "rank", 5),
        (
            "sensing",
            vec![n(6), ("rank", integer(3)), ("measurements", integer(5))],
            "measurements",
            6,
        ),
        ("sensing", vec![n(200), ("measurements", integer(300))], "measurements", 208),
        ("trust-region", vec![n(5), ("case", word("hard")), ("nullity", integer(9))], "nullity", 3),
        (
            "weak-complementarity",
            vec![n(6), ("rank", integer(5)), ("excess", integer(1))],
            "rank",
            4,
        ),
        (
            "weak-complementarity",
            vec![n(12), ("rank", integer(1)), ("excess", integer(9))],
            "excess",
            3,
        ),
        ("weak-complementarity", vec![n(12), ("constraints", integer(5))], "constraints", 10),
        ("frustrated-loops", vec![n(24), ("density", integer(1))], "density", 209),
        ("frustrated-loops", vec![n(8), ("longest", integer(9))], "longest", 8),
        ("frustrated-loops", vec![("shortest", integer(9))], "longest", 9),
        ("lattice-tiles", vec![n(30)], "order", 36),
        ("ky-fan-gap", vec![n(13)], "order", 12),
        ("ky-fan-gap", vec![n(8), ("rank", integer(9))], "rank", 6),
        ("ky-fan-gap", vec![n(8), ("negatives", integer(9))], "negatives", 6),
        ("ky-fan-gap", vec![n(8), ("couplings", integer(99))], "couplings", 12),
    ];
    for (id, mut pairs, name, nearest) in cases {
        let message = try_plant(id, 1, &pairs).unwrap_err();
        assert!(message.ends_with(&format!(" is {nearest}")), "{id}: {message}");
        assert!(message.contains(name), "{id}: {message}");
        // The named value is possible.
        pairs.retain(|pair| pair.0 != name);
        pairs.push((name, integer(nearest)));
        try_plant(id, 1, &pairs).unwrap_or_else(|error| panic!("{id}, {name}: {error}"));
    }
}

#[test]
fn a_dense_instance_too_large_names_the_sparse_form() {
    let pairs = [("order", integer(2000)), ("rank", integer(9)), ("measurements", word("dense"))];
    let message = try_plant("tight-unique", 1, &pairs).unwrap_err();
    assert!(message.ends_with("the nearest possible value is sparse"), "{message}");
}
