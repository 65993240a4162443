//! Overview: the share of each family's instances that each method solved, one cell a pair.

use super::digest::{Digest, percent};
use super::phase::{number, shade};
use super::sheet::{self, Anchor, Sheet, WIDTH};
use super::size::Tally;
use super::style::{INK, PAPER, SMALL, clean, cut, width};
use super::{Figure, keys, tidy};

/// Most families (columns) and methods (rows) of a figure.
const MOST_FAMILIES: usize = 30;
const MOST_METHODS: usize = 60;

/// Room for the names of methods, and the greatest length of a family's name.
const LEFT: f64 = 168.0;
const LONGEST: f64 = 150.0;
const ROW: f64 = 20.0;

/// Makes the figure; none with fewer than two families or methods.
pub(super) fn figure(digest: &Digest<'_>) -> Option<Figure> {
    let families = digest.families.len().min(MOST_FAMILIES);
    let methods: Vec<usize> = (0..digest.methods.len().min(MOST_METHODS)).collect();
    if families < 2 || methods.len() < 2 {
        return None;
    }
    let rows: Vec<Vec<Tally>> = methods
        .iter()
        .map(|&method| (0..families).map(|family| tally(digest, family, method)).collect())
        .collect();
    if rows.iter().flatten().all(|tally| tally.run == 0) {
        return None;
    }
    let left_out = if families < digest.families.len() || methods.len() < digest.methods.len() {
        format!("Only the first {families} families and {} methods are drawn.", methods.len())
    } else {
        String::new()
    };
    let caption = format!(
        "How to read: each cell is the share, in percent, of a family's instances (column) that a method (row) solved; \
         the darker the more, and a dash where nothing was run. A dark row is a method for many problems, a dark \
         column an easy family; a light cell in a dark row is where that method fails. Sample: {} instances of {} \
         families. Failures: whatever is not solved (verdict solved, or feasible where no optimum of the family is \
         known, in more than half of its repeats) counts as not solved, as does an instance planted without proof \
         among proved ones. {left_out}",
        (0..families).map(|family| digest.scored(family).len()).sum::<usize>(),
        families
    );
    let (name, title) = ("overview", "Solved share by family and method");
    let alt = alt(digest, &rows);
    let svg = draw(name, title, &alt, digest, &methods, &rows);
    let (name, title) = (name.to_owned(), title.to_owned());
    Some(Figure { name, title, caption: tidy(&caption), alt: tidy(&alt), svg })
}

fn tally(digest: &Digest<'_>, family: usize, method: usize) -> Tally {
    let mut tally = Tally::default();
    for subject in digest.scored(family) {
        if let Some(success) = digest.success(subject, method) {
            tally.run += 1;
            tally.solved += u64::from(success);
        }
    }
    tally
}

/// Sums every method up: over all families, and in how many of them it solved none.
fn alt(digest: &Digest<'_>, rows: &[Vec<Tally>]) -> String {
    let lines: Vec<String> = rows
        .iter()
        .enumerate()
        .map(|(method, tallies)| {
            let (solved, run) =
                tallies.iter().fold((0, 0), |sum, one| (sum.0 + one.solved, sum.1 + one.run));
            let none = tallies.iter().filter(|one| one.run > 0 && one.solved == 0).count();
            let share =
                if run > 0 { percent(solved as f64 / run as f64) } else { "no trial".to_owned() };
            format!("{}: {share}, none solved in {none} families", clean(digest.methods[method]))
        })
        .collect();
    format!("Grid of solved shares, methods by families. Over all families: {}.", lines.join("; "))
}

fn draw(
    name: &str,
    title: &str,
    alt: &str,
    digest: &Digest<'_>,
    methods: &[usize],
    rows: &[Vec<Tally>],
) -> String {
    let (labels, _) = keys(digest, methods);
    let families: Vec<String> = digest.families[..rows[0].len()]
        .iter()
        .map(|family| cut(&clean(family), SMALL, LONGEST))
        .collect();
    let head = families.iter().map(|name| width(name, SMALL)).fold(0.0, f64::max) + 12.0;
    let cell = ((WIDTH - LEFT - 8.0) / families.len() as f64).min(72.0);
    let height = head + ROW * rows.len() as f64 + 6.0;
    sheet::draw(name, title, alt, height, &[], |sheet| {
        for (column, family) in families.iter().enumerate() {
            let x = LEFT + cell * (column as f64 + 0.5);
            sheet.text(
                (x, head - 6.0 - 0.5 * width(family, SMALL)),
                family,
                SMALL,
                Anchor::Upwards,
            );
        }
        for (row, (label, tallies)) in labels.iter().zip(rows).enumerate() {
            let top = head + ROW * row as f64;
            let name = cut(label, SMALL, LEFT - 10.0);
            sheet.text((LEFT - 6.0, top + 0.5 * ROW), &name, SMALL, Anchor::End);
            for (column, tally) in tallies.iter().enumerate() {
                one(sheet, *tally, (LEFT + cell * column as f64, top), cell);
            }
        }
        let bottom = head + ROW * rows.len() as f64;
        sheet.frame(LEFT, head, LEFT + cell * families.len() as f64, bottom);
    })
}

fn one(sheet: &Sheet<'_>, tally: Tally, (x, y): (f64, f64), cell: f64) {
    let middle = (x + 0.5 * cell, y + 0.5 * ROW);
    let Some(share) = tally.share() else {
        sheet.text(middle, "\u{2013}", SMALL, Anchor::Middle);
        return;
    };
    sheet.rect(x + 0.6, y + 0.6, x + cell - 0.6, y + ROW - 0.6, shade(share));
    let colour = if share > 0.45 { PAPER } else { INK };
    // A narrow cell shows its colour only.
    let text = number(share);
    if width(&text, SMALL) <= cell {
        sheet.coloured_text(middle, &text, SMALL, Anchor::Middle, colour);
    }
}
