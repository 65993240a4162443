//! The duel: its rule on built cases, its error rates by simulation, its forms on one snapshot.

use proptest::prelude::*;
use rand_chacha::ChaCha20Rng;
use rand_chacha::rand_core::{Rng, SeedableRng};
use rankassay::record::{Cost, Figures, Identity, InstanceRecord, Record, Verdict, Work};
use rankassay::stats::paired::Discordance;
use rankassay::verdicts::duel::{
    Basis, Decision, Duel, DuelError, Mode, Outlook, Reason, Replay, Sample, Terms, decide, duel,
    look, recommended_pairs, rule_lines,
};
use rankassay::verdicts::pairing::{Pairing, PairingError, pair};

fn instance(id: &str, family: &str, optimum: Option<f64>) -> InstanceRecord {
    InstanceRecord {
        instance: id.to_owned(),
        family: family.to_owned(),
        parameters: "order=20".to_owned(),
        index: 0,
        seed: 1,
        blocks: 1,
        orthant: 0,
        order: 20,
        constraints: 21,
        target_rank: 1,
        rank_bound: 6,
        digest: format!("digest of {id}"),
        optimum,
        optimum_known: if optimum.is_some() { "certified" } else { "unknown" }.to_owned(),
        certificate: "dual-pair".to_owned(),
        uniqueness: "proved".to_owned(),
        relaxation: "tight".to_owned(),
        source: String::new(),
    }
}

fn record(
    instance: &InstanceRecord,
    method: &str,
    repeat: u64,
    verdict: Verdict,
    flops: Option<u64>,
    cpu_s: f64,
) -> Record {
    Record::assemble(
        Identity {
            trial: format!("{}-{method}-{repeat}", instance.instance),
            instance: instance.instance.clone(),
            family: instance.family.clone(),
            parameters: instance.parameters.clone(),
            order: 20,
            constraints: 21,
            target_rank: 1,
            method: method.to_owned(),
            options: String::new(),
            seed: 1,
            repeat,
        },
        verdict,
        "converged",
        Figures { optimum: instance.optimum, ..Figures::default() },
        Cost { wall_s: Some(cpu_s), cpu_s: Some(cpu_s), peak_bytes: None, ..Cost::default() },
        flops.map(|flops| Work { flops, ..Work::default() }),
        "",
    )
}

/// An instance: its family, whether the new and the old method solve it, and the flops of both.
type Row<'a> = (&'a str, bool, bool, Option<u64>, Option<u64>);

/// Makes records of two methods.
fn records(rows: &[Row<'_>]) -> (Vec<Record>, Vec<InstanceRecord>) {
    let mut records = Vec::new();
    let mut instances = Vec::new();
    let verdict = |solved| if solved { Verdict::Solved } else { Verdict::Infeasible };
    for (at, (family, new, old, new_flops, old_flops)) in rows.iter().enumerate() {
        let row = instance(&format!("{family}-{at}"), family, Some(1.0));
        let seconds = |flops: &Option<u64>| flops.unwrap_or(1000) as f64 * 1e-5;
        records.push(record(&row, "old", 1, verdict(*old), *old_flops, seconds(old_flops)));
        records.push(record(&row, "new", 1, verdict(*new), *new_flops, seconds(new_flops)));
        instances.push(row);
    }
    (records, instances)
}

fn paired(rows: &[Row<'_>]) -> Pairing {
    let (records, instances) = records(rows);
    pair(&records, &instances, "new", "old").unwrap()
}

const NO_REPLAY: Replay<'_> = Replay { program: "rankassay", folder: &|_| None };

fn held(pairing: &Pairing) -> Duel {
    duel(pairing, &Terms::default(), Mode::Fixed, &NO_REPLAY).unwrap()
}

fn sample(pairs: u64, gained: u64, lost: u64, log_ratios: Vec<f64>) -> Sample {
    Sample { counts: Discordance { pairs, gained, lost }, log_ratios, basis: Basis::Effort }
}

fn reason(sample: &Sample) -> Reason {
    decide(sample, &Terms::default(), Mode::Fixed).reason
}

/// Log ratios spread evenly around a centre.
fn spread(count: usize, ratio: f64, half_width: f64) -> Vec<f64> {
    let place = |at: usize| 2.0 * at as f64 / (count - 1) as f64 - 1.0;
    (0..count).map(|at| ratio.ln() + half_width * place(at)).collect()
}

#[test]
fn each_clause_applies_where_it_should() {
    // Exact one-sided p of 6 of 6: 1/64 < 0.025; of 5 of 5: 1/32 > 0.025.
    assert_eq!(reason(&sample(40, 6, 0, spread(30, 1.0, 0.5))), Reason::SolvesMore);
    assert_eq!(reason(&sample(40, 5, 0, spread(30, 1.0, 0.5))), Reason::Open);
    assert_eq!(reason(&sample(40, 0, 6, spread(30, 1.0, 0.5))), Reason::SolvesFewer);
    // Without discordant pairs the interval of d reaches +-2 points from 189 pairs on.
    assert_eq!(reason(&sample(400, 0, 0, spread(300, 0.8, 0.1))), Reason::NoWorseAndCheaper);
    assert_eq!(reason(&sample(400, 0, 0, spread(300, 1.0, 0.01))), Reason::NothingGained);
    assert_eq!(reason(&sample(40, 0, 0, spread(40, 0.8, 0.1))), Reason::Open);
    assert_eq!(reason(&sample(400, 0, 0, spread(300, 0.95, 0.1))), Reason::Open);
    // More solved wins over dearer, fewer solved over cheaper.
    assert_eq!(reason(&sample(400, 20, 0, spread(300, 3.0, 0.1))), Reason::SolvesMore);
    assert_eq!(reason(&sample(400, 0, 30, spread(300, 0.3, 0.1))), Reason::SolvesFewer);
    // Nothing solved by both: no ratio, no clause on costs.
    assert_eq!(reason(&sample(400, 0, 0, Vec::new())), Reason::Open);
}

#[test]
fn a_look_decides_by_its_e_value() {
    let at = |gained, lost| {
        decide(&sample(400, gained, lost, Vec::new()), &Terms::default(), Mode::Look(2))
    };
    // With no pair lost E = C(2w, w) / 2^w: 924 / 64 for 6, 3432 / 128 for 7; 1 / alpha is 20.
    assert!((at(6, 0).e_value.unwrap() - 924.0 / 64.0).abs() < 1e-9);
    assert!((at(7, 0).e_value.unwrap() - 3432.0 / 128.0).abs() < 1e-9);
    assert_eq!((at(6, 0).reason, at(7, 0).reason), (Reason::Open, Reason::SolvesMore));
    assert_eq!((at(0, 6).reason, at(0, 7).reason), (Reason::Open, Reason::SolvesFewer));
    // Later looks have wider intervals.
    let costs = sample(4000, 0, 0, spread(40, 0.8, 0.4));
    let width = |mode| {
        let cost = decide(&costs, &Terms::default(), mode).cost.unwrap();
        cost.high.unwrap() - cost.low.unwrap()
    };
    assert!(width(Mode::Fixed) < width(Mode::Look(1)));
    assert!(width(Mode::Look(1)) < width(Mode::Look(9)));
}

#[test]
fn a_clause_follows_its_terms() {
    let cheaper = sample(400, 0, 0, spread(300, 0.8, 0.1));
    let with = |terms: Terms| decide(&cheaper, &terms, Mode::Fixed).reason;
    let strict = Terms { margin_ratio: 0.7, ..Terms::default() };
    assert_eq!(with(strict), Reason::NothingGained);
    let narrow = Terms { margin_points: 0.5, ..Terms::default() };
    assert_eq!(with(narrow), Reason::Open);
    let gain = sample(40, 5, 0, Vec::new());
    let lenient = Terms { alpha: 0.1, ..Terms::default() };
    assert_eq!(decide(&gain, &lenient, Mode::Fixed).reason, Reason::SolvesMore);
}

#[test]
fn impossible_terms_are_refused() {
    let good = Terms::default();
    assert_eq!(good.check(), Ok(()));
    let bad = [
        Terms { margin_points: -1.0, ..good },
        Terms { margin_points: 100.0, ..good },
        Terms { margin_ratio: 1.0, ..good },
        Terms { margin_ratio: 0.0, ..good },
        Terms { alpha: 0.0, ..good },
        Terms { alpha: 0.6, ..good },
        Terms { detect_points: 0.0, ..good },
        Terms { power: 1.0, ..good },
        Terms { margin_points: f64::NAN, ..good },
    ];
    for terms in bad {
        assert!(matches!(terms.check(), Err(DuelError::Term { .. })), "{terms:?}");
    }
}

#[test]
fn the_rule_shows_the_users_numbers() {
    let terms = Terms { margin_points: 3.5, margin_ratio: 0.9, alpha: 0.1, ..Terms::default() };
    let lines = rule_lines(&terms, Mode::Fixed, Basis::CpuTime);
    assert_eq!(lines.len(), 5);
    for (line, word) in
        [(0, "0.05"), (1, "-3.5 points"), (1, "90 %"), (1, "0.9"), (3, "+3.5 points")]
    {
        assert!(lines[line].contains(word), "{:?} lacks {word}", lines[line]);
    }
    assert!(lines[1].contains("processor time ratio"));
    let lines = rule_lines(&terms, Mode::Look(2), Basis::Effort);
    // Level of look 2: 0.1 * 6 / (4 pi^2) = 0.015199.
    assert!(lines[0].contains("at least 10") && lines[1].contains("98.48 %"), "{lines:?}");
}

#[test]
fn repeats_are_put_together() {
    let row = instance("a", "f", Some(1.0));
    let solved = [Verdict::Solved, Verdict::Infeasible, Verdict::Solved];
    let half = [Verdict::Near, Verdict::Solved];
    let mut list = Vec::new();
    for (at, verdict) in solved.into_iter().enumerate() {
        list.push(record(&row, "new", at as u64 + 1, verdict, Some(10 * (at as u64 + 1)), 0.5));
    }
    for (at, verdict) in half.into_iter().enumerate() {
        list.push(record(&row, "old", at as u64 + 1, verdict, Some(30), 1.0));
    }
    let pairing = pair(&list, &[row], "new", "old").unwrap();
    let pair = &pairing.pairs[0];
    assert!(pair.challenger.is_solved());
    assert_eq!((pair.challenger.solved_repeats, pair.challenger.repeats), (2, 3));
    assert_eq!(
        (pair.challenger.trial.as_str(), pair.challenger.verdict),
        ("a-new-1", Verdict::Solved)
    );
    assert_eq!(pair.challenger.flops, Some(20.0));
    // One of two is not more than half, and near is not solved.
    assert!(!pair.incumbent.is_solved());
    assert_eq!((pair.incumbent.trial.as_str(), pair.incumbent.verdict), ("a-old-1", Verdict::Near));
    assert_eq!(pairing.discordance(), Discordance { pairs: 1, gained: 1, lost: 0 });
}

#[test]
fn what_cannot_be_paired_is_counted_with_its_reason() {
    let rows = [
        instance("both", "f", Some(1.0)),
        instance("unknown", "imported", None),
        instance("alone", "f", Some(1.0)),
        instance("idle", "f", Some(1.0)),
    ];
    let mut list = Vec::new();
    for row in &rows[..2] {
        list.push(record(row, "new", 1, Verdict::Solved, Some(1), 1.0));
        list.push(record(row, "old", 1, Verdict::Solved, Some(1), 1.0));
    }
    list.push(record(&rows[2], "old", 1, Verdict::Solved, Some(1), 1.0));
    let pairing = pair(&list, &rows, "new", "old").unwrap();
    assert_eq!(pairing.pairs.len(), 1);
    assert_eq!(
        pairing.left_out.sentence(),
        "1 without a known optimum, 1 run by the incumbent only, 1 run by neither"
    );
    assert_eq!(pairing.left_out.count(), 3);
    let imports = pair(&list[2..4], &rows[1..2], "new", "old").unwrap();
    let error = duel(&imports, &Terms::default(), Mode::Fixed, &NO_REPLAY).unwrap_err();
    assert_eq!(
        error.to_string(),
        "`new` and `old` share no instance whose optimum is known: 1 without a known optimum"
    );
    assert!(look(1, &imports, &Terms::default()).is_err());
    assert!(matches!(pair(&list, &rows, "new", "new"), Err(PairingError::SameMethod(_))));
    let error = pair(&list, &rows, "nwe", "old").unwrap_err();
    assert_eq!(
        error.to_string(),
        "no record of a method labelled `nwe`; the records are of new, old"
    );
}

#[test]
fn without_effort_counts_processor_time_is_compared_and_said() {
    let rows: Vec<_> = (0..8).map(|_| ("f", true, true, None, Some(1000))).collect();
    let result = held(&paired(&rows));
    assert_eq!(result.ruling.basis, Basis::CpuTime);
    assert!(result.effort.is_none() && result.time.is_some());
    assert!(result.notes.iter().any(|note| note.contains("processor times instead")));
    assert!(result.rule[1].contains("processor time ratio"));
    let mut rows: Vec<_> = (0..8).map(|_| ("f", true, true, Some(500), Some(1000))).collect();
    rows[3].3 = None;
    let result = held(&paired(&rows));
    assert_eq!(result.ruling.basis, Basis::Effort);
    let effort = result.effort.unwrap();
    assert_eq!((effort.instances, effort.without_figures), (7, 1));
    assert!((effort.shift.value - 0.5).abs() < 1e-12);
    assert!(
        result.notes.iter().any(|note| note.starts_with("1 jointly solved instance is without"))
    );
}

#[test]
fn swapped_roles_mirror_what_they_must() {
    let rows: Vec<_> = (0..60)
        .map(|at| ("f", at % 4 != 0, at % 5 != 0, Some(1000 + 37 * at), Some(1500 - 11 * at)))
        .collect();
    let (records, instances) = records(&rows);
    let forth = held(&pair(&records, &instances, "new", "old").unwrap());
    let back = held(&pair(&records, &instances, "old", "new").unwrap());
    assert_eq!((forth.gained, forth.lost), (back.lost, back.gained));
    assert!((forth.ruling.difference.value + back.ruling.difference.value).abs() < 1e-12);
    let (here, there) = (forth.effort.unwrap().shift, back.effort.unwrap().shift);
    assert!((here.value * there.value - 1.0).abs() < 1e-12);
    assert!((here.low.unwrap() * there.high.unwrap() - 1.0).abs() < 1e-12);
    for lost in 0..12 {
        let (win, lose) = (sample(60, 3, lost, Vec::new()), sample(60, lost, 3, Vec::new()));
        let mirrored = match reason(&win) {
            Reason::SolvesMore => Reason::SolvesFewer,
            Reason::SolvesFewer => Reason::SolvesMore,
            other => other,
        };
        assert_eq!(reason(&lose), mirrored);
    }
}

/// The random streams of the simulations: seeds chosen once.
struct Chance(ChaCha20Rng);

impl Chance {
    fn new(stream: u64) -> Self {
        Chance(ChaCha20Rng::seed_from_u64(20_261_201 + stream))
    }

    fn uniform(&mut self) -> f64 {
        ((self.0.next_u64() >> 11) as f64 + 0.5) / (1_u64 << 53) as f64
    }

    /// Draws a normal number (Box and Muller).
    fn normal(&mut self) -> f64 {
        let radius = (-2.0 * self.uniform().ln()).sqrt();
        radius * (std::f64::consts::TAU * self.uniform()).cos()
    }
}

/// A world that comparisons are drawn from.
#[derive(Clone, Copy, Debug)]
struct World {
    gained: f64,
    lost: f64,
    neither: f64,
    deviation: f64,
    ties: f64,
}

impl World {
    /// Draws `count` more pairs into the sample.
    fn draw(&self, chance: &mut Chance, count: u64, sample: &mut Sample) {
        for _ in 0..count {
            sample.counts.pairs += 1;
            let outcome = chance.uniform();
            if outcome < self.gained {
                sample.counts.gained += 1;
            } else if outcome < self.gained + self.lost {
                sample.counts.lost += 1;
            } else if outcome >= self.gained + self.lost + self.neither {
                let tied = chance.uniform() < self.ties;
                let shift = if tied { 0.0 } else { self.deviation * chance.normal() };
                sample.log_ratios.push(shift);
            }
        }
    }
}

const COMPARISONS: usize = 1000;

/// Counts the decisions of 1,000 comparisons.
fn decisions(world: World, pairs: u64, stream: u64, wanted: Decision) -> usize {
    let mut chance = Chance::new(stream);
    let decided = |_: &usize| {
        let mut drawn = sample(0, 0, 0, Vec::new());
        world.draw(&mut chance, pairs, &mut drawn);
        decide(&drawn, &Terms::default(), Mode::Fixed).decision == wanted
    };
    (0..COMPARISONS).filter(decided).count()
}

/// Worlds without any difference: discordant shares, spreads of the cost ratio, ties.
fn equal_worlds() -> Vec<World> {
    let mut worlds = Vec::new();
    for discordant in [0.0, 0.1, 0.3] {
        for (deviation, ties) in [(0.02, 0.0), (0.3, 0.0), (1.0, 0.0), (0.3, 0.5), (0.0, 1.0)] {
            let half = discordant / 2.0;
            worlds.push(World { gained: half, lost: half, neither: 0.2, deviation, ties });
        }
    }
    worlds
}

#[test]
fn equal_methods_are_adopted_in_at_most_one_of_twenty_comparisons() {
    for (at, world) in equal_worlds().into_iter().enumerate() {
        for pairs in [20, 44, 155] {
            let adopted = decisions(world, pairs, 1000 * at as u64 + pairs, Decision::Adopt);
            assert!(adopted <= 50, "{adopted} of 1000 adopted: {world:?}, {pairs} pairs");
        }
    }
}

#[test]
fn a_cost_margin_close_to_one_adopts_equal_costs_no_more_often_than_its_half_of_alpha_allows() {
    // Nearly the bare interval of the cost ratio: the least favourable terms for clause 2.
    let terms = Terms { margin_points: 60.0, margin_ratio: 0.999_999, ..Terms::default() };
    for (at, pairs) in [20, 44, 155].into_iter().enumerate() {
        let world = World { gained: 0.05, lost: 0.05, neither: 0.2, deviation: 0.3, ties: 0.0 };
        let mut chance = Chance::new(70_000 + at as u64);
        let mut adopted = 0;
        for _ in 0..COMPARISONS {
            let mut drawn = sample(0, 0, 0, Vec::new());
            world.draw(&mut chance, pairs, &mut drawn);
            let ruling = decide(&drawn, &terms, Mode::Fixed);
            adopted += usize::from(ruling.decision == Decision::Adopt);
        }
        // Both clauses together are bounded by alpha; clause 2 alone must be seen to act.
        assert!((5..=50).contains(&adopted), "{adopted} of 1000 adopted at {pairs} pairs");
    }
}

/// Counts the adoptions of 1,000 comparisons that are looked at after each of up to 12 batches.
fn adopted_in_sequence(world: World, terms: &Terms, stream: u64) -> usize {
    let mut chance = Chance::new(stream);
    let ends_in_adoption = |_: &usize| {
        let mut drawn = sample(0, 0, 0, Vec::new());
        for batch in 1..=12 {
            world.draw(&mut chance, 20, &mut drawn);
            let ruling = decide(&drawn, terms, Mode::Look(batch));
            if ruling.decision != Decision::Undecided {
                return ruling.decision == Decision::Adopt;
            }
        }
        false
    };
    (0..COMPARISONS).filter(ends_in_adoption).count()
}

#[test]
fn a_run_until_decided_adopts_equal_methods_at_most_once_in_twenty() {
    let worlds = equal_worlds().into_iter().filter(|w| w.deviation < 1.0 && w.ties < 1.0);
    for (at, world) in worlds.enumerate() {
        let adopted = adopted_in_sequence(world, &Terms::default(), 50_000 + at as u64);
        assert!(adopted <= 50, "{adopted} of 1000 adopted: {world:?}");
    }
    // Nearly the bare intervals of the cost ratio, look after look: the least favourable terms.
    let terms = Terms { margin_points: 60.0, margin_ratio: 0.999_999, ..Terms::default() };
    let world = World { gained: 0.1, lost: 0.1, neither: 0.2, deviation: 0.3, ties: 0.0 };
    let adopted = adopted_in_sequence(world, &terms, 60_000);
    assert!((5..=50).contains(&adopted), "{adopted} of 1000 adopted: {world:?}");
}

#[test]
fn a_true_difference_is_found_at_the_recommended_size() {
    let terms = Terms::default();
    let pairs = recommended_pairs(&terms, 0.2).unwrap();
    // Connor's formula gives 155 (Biometrics 43:207-211, 1987); the exact test needs more.
    assert!((155..=200).contains(&pairs), "{pairs}");
    let better = World { gained: 0.15, lost: 0.05, neither: 0.2, deviation: 0.3, ties: 0.0 };
    let worse = World { gained: 0.05, lost: 0.15, ..better };
    let adopted = decisions(better, pairs, 90_001, Decision::Adopt);
    let kept = decisions(worse, pairs, 90_002, Decision::Keep);
    assert!(adopted >= 800, "{adopted} of 1000 adopted at {pairs} pairs");
    assert!(kept >= 800, "{kept} of 1000 kept at {pairs} pairs");
}

#[test]
fn recommended_sizes_follow_the_terms() {
    let terms = Terms::default();
    let at = |discordant| recommended_pairs(&terms, discordant).unwrap();
    assert!(at(0.1) < at(0.2) && at(0.2) < at(0.4));
    // Less discordance than the difference itself is impossible.
    assert_eq!(at(0.0), at(0.1));
    let finer = Terms { detect_points: 5.0, ..terms };
    assert!(recommended_pairs(&finer, 0.2).unwrap() > 3 * at(0.2));
    let hopeless = Terms { detect_points: 0.001, ..terms };
    assert_eq!(recommended_pairs(&hopeless, 0.5), None);
}

#[test]
fn an_open_duel_says_how_many_more_would_decide() {
    let mut rows: Vec<_> = (0..40).map(|_| ("f", true, true, Some(1000), Some(1000))).collect();
    for row in rows.iter_mut().take(3) {
        row.2 = false;
    }
    let result = held(&paired(&rows));
    assert_eq!(result.ruling.decision, Decision::Undecided);
    let forecast = result.forecast.unwrap();
    assert!((forecast.discordant - 0.1_f64.max(3.5 / 41.0)).abs() < 1e-12);
    // 3 of 40 gained, none lost: 6 of 6 gained decide, from 74 pairs on (5.5 round to 6).
    assert_eq!(forecast.outlook, Outlook::At { pairs: 74, decision: Decision::Adopt });
    // Costs that stay just at the margin never decide.
    let rows: Vec<_> = (0..40).map(|_| ("f", true, true, Some(950), Some(1000))).collect();
    let mut spread = paired(&rows);
    for (at, pair) in spread.pairs.iter_mut().enumerate() {
        let shift = 0.05 * (2.0 * at as f64 / 39.0 - 1.0);
        pair.challenger.flops = Some(950.0 * shift.exp());
    }
    let result = held(&spread);
    assert_eq!(result.forecast.unwrap().outlook, Outlook::NotWithinMillion);
    let decided = held(&paired(&[("f", true, false, None, None); 10]));
    assert_eq!((decided.ruling.decision, decided.forecast), (Decision::Adopt, None));
}

#[test]
fn families_are_adjusted_and_flagged() {
    let mut rows = Vec::new();
    for at in 0..24 {
        let apart = at < 12;
        rows.push((if apart { "apart" } else { "alike" }, true, !apart, Some(10), Some(20)));
    }
    let result = held(&paired(&rows));
    let apart = result.families.iter().find(|row| row.family == "apart").unwrap();
    let alike = result.families.iter().find(|row| row.family == "alike").unwrap();
    // 2 * 2^-12 and twice that over two families.
    assert!((apart.p - 2.0_f64.powi(-11)).abs() < 1e-15);
    assert!((apart.adjusted_p - 2.0_f64.powi(-10)).abs() < 1e-15);
    assert_eq!(alike.adjusted_p, 1.0);
    let text = result.to_text();
    assert_eq!(text.matches("differs").count(), 1, "{text}");
}

#[test]
fn long_lists_are_cut_and_the_rest_is_counted() {
    let rows = [("f", true, false, Some(1), Some(1)); 25];
    let text = held(&paired(&rows)).to_text();
    assert!(text.contains("Only new solves (25)") && text.contains("and 5 more"), "{text}");
    assert_eq!(text.matches("the other is infeasible").count(), 20);
    assert_eq!(held(&paired(&rows)).challenger_only.len(), 25);
}

/// A duel of 44 instances over six families with a bit of everything.
fn showcase() -> (Vec<Record>, Vec<InstanceRecord>) {
    let families = ["cliques", "drifting-buoys", "lattices", "paths", "rings", "stars"];
    let rows: Vec<_> = (0..44_u64)
        .map(|at| {
            let (new, old) = (at % 11 != 3, at % 9 != 4 && at % 13 != 5);
            (
                families[at as usize % 6],
                new,
                old,
                Some(9000 + 531 * (at % 7)),
                Some(10_000 + 777 * (at % 5)),
            )
        })
        .collect();
    records(&rows)
}

#[test]
fn the_forms_look_as_they_did() {
    let (records, instances) = showcase();
    let pairing = pair(&records, &instances, "new", "old").unwrap();
    let folder = |_: &str| Some("runs/first look".to_owned());
    let replay = Replay { program: "rankassay", folder: &folder };
    let result = duel(&pairing, &Terms::default(), Mode::Fixed, &replay).unwrap();
    let text = result.to_text();
    assert!(
        text.lines()
            .filter(|line| !line.contains(" replay "))
            .all(|line| line.chars().count() <= 100)
    );
    insta::assert_snapshot!("text", text);
    insta::assert_snapshot!("markdown", result.to_markdown());
    let json: serde_json::Value = serde_json::from_str(&result.to_json()).unwrap();
    assert_eq!(json["ruling"]["decision"], "undecided");
    assert_eq!(json["pairs"], 44);
    let look = duel(&pairing, &Terms::default(), Mode::Look(3), &replay).unwrap();
    assert!(look.to_text().contains("e-value"), "{}", look.to_text());
}

proptest! {
    #[test]
    fn equal_records_are_never_adopted(
        rows in prop::collection::vec((any::<bool>(), 0_u64..1_000_000), 1..60),
        look_number in 1_u64..20,
    ) {
        let rows: Vec<_> =
            rows.iter().map(|&(solved, flops)| ("f", solved, solved, Some(flops), Some(flops))).collect();
        let pairing = paired(&rows);
        let fixed = decide(
            &rankassay::verdicts::duel::sample(&pairing, Basis::Effort),
            &Terms::default(),
            Mode::Fixed,
        );
        prop_assert_ne!(fixed.decision, Decision::Adopt);
        let ruling = look(look_number, &pairing, &Terms::default()).unwrap();
        prop_assert_ne!(ruling.decision, Decision::Adopt);
        prop_assert_eq!(ruling.difference.value, 0.0);
    }

    #[test]
    fn a_further_win_never_turns_adopt_into_keep(
        others in 1_u64..400, gained in 0_u64..60, lost in 0_u64..60,
        ratio in 0.2_f64..3.0,
    ) {
        let pairs = gained + lost + others;
        let logs = spread(30, ratio, 0.2);
        let before = decide(&sample(pairs, gained, lost, logs.clone()), &Terms::default(), Mode::Fixed);
        let after = decide(&sample(pairs, gained + 1, lost, logs), &Terms::default(), Mode::Fixed);
        prop_assert!(before.decision != Decision::Adopt || after.decision == Decision::Adopt);
    }

    #[test]
    fn counts_add_up(rows in prop::collection::vec((any::<bool>(), any::<bool>(), 0_usize..3), 1..80)) {
        let names = ["a", "b", "c"];
        let rows: Vec<_> = rows.iter().map(|&(new, old, f)| (names[f], new, old, Some(5), Some(6))).collect();
        let result = held(&paired(&rows));
        prop_assert_eq!(result.both + result.gained + result.lost + result.neither, result.pairs);
        prop_assert_eq!(result.families.iter().map(|row| row.pairs).sum::<u64>(), result.pairs);
        prop_assert_eq!(result.families.iter().map(|row| row.gained).sum::<u64>(), result.gained);
        prop_assert_eq!(result.challenger_only.len() as u64, result.gained);
        prop_assert_eq!(result.incumbent_only.len() as u64, result.lost);
        let difference = result.challenger_rate - result.incumbent_rate;
        prop_assert!((result.ruling.difference.value - difference).abs() < 1e-12);
    }
}
