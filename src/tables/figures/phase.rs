//! Phase diagrams: the solved share over two quantities of a family, one panel a method.

use plotters::style::RGBColor;

use super::axes::shortest;
use super::digest::{Digest, distinct, percent};
use super::grid::{self, Quantity};
use super::sheet::{self, Anchor, Sheet, WIDTH};
use super::size::Tally;
use super::style::{FONT, INK, PAPER, SMALL, clean, cut, width};
use super::{Figure, family_slug, keys, tidy};
use crate::stats::recovery::statistical_dimension;

/// Most orders of one family that get a figure of their own.
const ORDERS: usize = 4;
/// Family whose recovery threshold is known.
const SENSING: &str = "sensing";
/// Largest order for which the threshold is computed: its cost grows with the order.
const THRESHOLD_ORDER: u64 = 200;
/// Colour of the threshold.
const THRESHOLD: RGBColor = RGBColor(0xD5, 0x5E, 0x00);

const LEFT: f64 = 76.0;
/// Least height of a row.
const ROW: f64 = 27.0;

/// A family's instances, of one order or of all, over two quantities.
pub(super) struct Phase {
    family: usize,
    order: Option<u64>,
    subjects: Vec<usize>,
    across: Quantity,
    up: Quantity,
}

/// Lists a family's phase diagrams: one for each order in which two quantities vary, or else one of
/// order and one more quantity.
pub(super) fn phases(digest: &Digest<'_>, family: usize) -> Vec<Phase> {
    let own = digest.scored(family);
    let order = |at: usize| digest.subjects[at].order;
    let mut found = Vec::new();
    let orders = distinct(own.iter().map(|&at| order(at) as f64));
    if orders.len() <= grid::MOST {
        for value in &orders {
            let subjects: Vec<usize> =
                own.iter().copied().filter(|&at| order(at) as f64 == *value).collect();
            let varied = grid::varied(digest, &subjects);
            if let Some((across, up)) = first_pair(&varied) {
                let order = Some(*value as u64);
                found.push(Phase { family, order, subjects, across, up });
            }
        }
    }
    if found.is_empty() {
        let across = grid::order(digest, &own);
        let varied = grid::varied(digest, &own);
        let up = varied.into_iter().find(|up| across.spans_with(up));
        if let (Some(up), true) = (up, (2..=grid::MOST).contains(&across.values.len())) {
            found.push(Phase { family, order: None, subjects: own, across, up });
        }
    }
    found
}

fn first_pair(varied: &[Quantity]) -> Option<(Quantity, Quantity)> {
    varied.iter().enumerate().find_map(|(at, across)| {
        let up = varied[at + 1..].iter().find(|up| across.spans_with(up))?;
        Some((across.clone(), up.clone()))
    })
}

/// Makes the phase diagrams of every family.
pub(super) fn figures(digest: &Digest<'_>) -> Vec<Figure> {
    let mut figures = Vec::new();
    for family in 0..digest.families.len() {
        let phases = phases(digest, family);
        for phase in phases.iter().take(ORDERS) {
            figures.push(figure(digest, phase, phases.len()));
        }
    }
    figures
}

fn figure(digest: &Digest<'_>, phase: &Phase, orders: usize) -> Figure {
    let family = clean(digest.families[phase.family]);
    let threshold = threshold(digest, phase);
    let cells = cells(digest, phase);
    let mut runs: Vec<u64> =
        cells.iter().flatten().flatten().map(|cell| cell.run).filter(|run| *run > 0).collect();
    runs.sort_unstable();
    let per_cell = match (runs.first(), runs.last()) {
        (Some(least), Some(most)) if least == most => format!("{least}"),
        (Some(least), Some(most)) => format!("{least} to {most}"),
        _ => "0".to_owned(),
    };
    let of_order = phase.order.map_or_else(String::new, |order| format!(" of order {order}"));
    let line = if threshold.is_some() {
        "The orange line parts numbers of constraints below the statistical dimension of recovering a positive \
         semidefinite matrix of that rank by its trace from those above: there a convex method solves about half of \
         Gaussian instances (D. Amelunxen, M. Lotz, M. McCoy, J. Tropp, Information and Inference 3:224-294, \
         2014), so a heuristic is worth most to the left of it."
    } else {
        ""
    };
    let cut_off = if phase.order.is_some() && orders > ORDERS {
        format!("Only the {ORDERS} least of {orders} orders are drawn.")
    } else {
        String::new()
    };
    let caption = format!(
        "How to read: each cell is the share of instances, in percent, that the method solved at this {} (across) and \
         {} (up); the darker the more, and a dash where nothing was run. Look for the border between dark and light: \
         the method whose dark region reaches further is the stronger one. {line} Other parameters that vary are \
         averaged over. Sample: {} instances of {family}{of_order}, {per_cell} in a cell; cells of few instances are \
         rough. Failures: whatever is not solved (verdict solved, or feasible where no optimum of the family is \
         known, in more than half of its repeats) counts as not solved, as does an instance planted without proof \
         among proved ones. {cut_off}",
        phase.across.name,
        phase.up.name,
        phase.subjects.len()
    );
    let alt = alt(digest, phase, &cells, &format!("{family}{of_order}"));
    let mut name = format!("phase-{}", family_slug(digest, phase.family));
    if let Some(order) = phase.order.filter(|_| orders > 1) {
        name += &format!("-order-{order}");
    }
    let title = format!(
        "Solved share of {family}{of_order} by {} and {}",
        phase.across.name, phase.up.name
    );
    let svg = draw(&name, &title, &alt, digest, phase, &cells, threshold.as_deref());
    Figure { name, title, caption: tidy(&caption), alt: tidy(&alt), svg }
}

/// Counts, by method, row from the bottom and column.
fn cells(digest: &Digest<'_>, phase: &Phase) -> Vec<Vec<Vec<Tally>>> {
    let empty = vec![vec![Tally::default(); phase.across.values.len()]; phase.up.values.len()];
    let mut cells = vec![empty; digest.methods.len()];
    for (at, &subject) in phase.subjects.iter().enumerate() {
        let (Some(column), Some(row)) = (phase.across.place(at), phase.up.place(at)) else {
            continue;
        };
        for (method, rows) in cells.iter_mut().enumerate() {
            if let Some(success) = digest.success(subject, method) {
                rows[row][column].run += 1;
                rows[row][column].solved += u64::from(success);
            }
        }
    }
    cells
}

/// Returns the threshold of every row as a number of constraints, where the family has one.
fn threshold(digest: &Digest<'_>, phase: &Phase) -> Option<Vec<f64>> {
    let order = phase.order?;
    let by_trace = |subject: &usize| {
        let pairs = digest.subjects[*subject].parameters.split(' ');
        pairs.filter_map(|pair| pair.strip_prefix("objective=")).all(|word| word == "trace")
    };
    let known = digest.families[phase.family] == SENSING
        && phase.subjects.iter().all(by_trace)
        && order <= THRESHOLD_ORDER
        && phase.across.name == "constraints"
        && phase.up.name == "target rank"
        && phase.up.values.iter().all(|rank| (1.0..=order as f64).contains(rank));
    known.then(|| {
        phase.up.values.iter().map(|rank| statistical_dimension(order, *rank as u64)).collect()
    })
}

fn alt(digest: &Digest<'_>, phase: &Phase, cells: &[Vec<Vec<Tally>>], what: &str) -> String {
    let methods: Vec<String> = digest
        .methods
        .iter()
        .zip(cells)
        .map(|(method, rows)| {
            let mut all = Tally::default();
            let (mut full, mut none, mut filled) = (0, 0, 0);
            for cell in rows.iter().flatten().filter(|cell| cell.run > 0) {
                all.run += cell.run;
                all.solved += cell.solved;
                filled += 1;
                full += usize::from(cell.solved == cell.run);
                none += usize::from(cell.solved == 0);
            }
            let share = all.share().map_or_else(|| "not run".to_owned(), percent);
            format!("{method} {share} over all, {full} of {filled} cells full, {none} empty")
        })
        .collect();
    let range = |quantity: &Quantity| {
        let last = quantity.values.len() - 1;
        {
            let ends = [quantity.values[0], quantity.values[last]].map(shortest);
            format!("{} {} to {}", quantity.name, ends[0], ends[1])
        }
    };
    format!(
        "Solved share of {what} over {} and {}: {}.",
        range(&phase.across),
        range(&phase.up),
        methods.join("; ")
    )
}

fn draw(
    name: &str,
    title: &str,
    alt: &str,
    digest: &Digest<'_>,
    phase: &Phase,
    cells: &[Vec<Vec<Tally>>],
    threshold: Option<&[f64]>,
) -> String {
    let methods: Vec<usize> = (0..digest.methods.len()).collect();
    let (labels, _) = keys(digest, &methods);
    let count = phase.across.values.len() as f64;
    let fits = |columns: f64| (WIDTH / columns - LEFT - 14.0) / count >= 36.0;
    let columns = if fits(3.0) {
        3
    } else if fits(2.0) {
        2
    } else {
        1
    }
    .min(labels.len().max(1));
    let slot = WIDTH / columns as f64;
    let cell = ((slot - LEFT - 14.0) / count).min(72.0);
    let rows = phase.up.values.len() as f64;
    // High enough for the name of the upright axis.
    let row = ROW.max((width(&phase.up.name, FONT).min(130.0) + 4.0) / rows);
    let tall = 30.0 + row * rows + 52.0;
    let band = tall * labels.len().div_ceil(columns) as f64;
    let height = band + if threshold.is_some() { 28.0 } else { 2.0 };
    sheet::draw(name, title, alt, height, &[], |sheet| {
        for (at, (label, rows)) in labels.iter().zip(cells).enumerate() {
            let left = (at % columns) as f64 * slot + LEFT;
            let top = (at / columns) as f64 * tall + 30.0;
            let heading = cut(label, FONT, slot - 24.0);
            sheet.text((left - LEFT + 12.0, top - 14.0), &heading, FONT, Anchor::Start);
            panel(sheet, phase, rows, (left, top), (cell, row), threshold);
        }
        if threshold.is_some() {
            let y = band + 10.0;
            sheet.line(&[(LEFT, y), (LEFT + 40.0, y)], THRESHOLD, 3.0);
            let text = "statistical dimension: left of it convex methods mostly fail";
            sheet.text((LEFT + 50.0, y), text, FONT, Anchor::Start);
        }
    })
}

fn panel(
    sheet: &Sheet<'_>,
    phase: &Phase,
    rows: &[Vec<Tally>],
    (left, top): (f64, f64),
    (cell, tall): (f64, f64),
    threshold: Option<&[f64]>,
) {
    let bottom = top + tall * rows.len() as f64;
    let right = left + cell * phase.across.values.len() as f64;
    let middle = |row: usize| bottom - tall * (row as f64 + 0.5);
    for (row, tallies) in rows.iter().enumerate() {
        for (column, tally) in tallies.iter().enumerate() {
            if let Some(share) = tally.share() {
                let x = left + cell * column as f64;
                let y = middle(row);
                let half = 0.5 * tall;
                sheet.rect(x + 0.6, y - half + 0.6, x + cell - 0.6, y + half - 0.6, shade(share));
            }
        }
    }
    if let Some(threshold) = threshold {
        border(sheet, phase, threshold, (left, bottom), (cell, tall));
    }
    for (row, tallies) in rows.iter().enumerate() {
        for (column, tally) in tallies.iter().enumerate() {
            let at = (left + cell * (column as f64 + 0.5), middle(row));
            let (text, colour) = match tally.share() {
                Some(share) => (number(share), if share > 0.45 { PAPER } else { INK }),
                None => ("\u{2013}".to_owned(), INK),
            };
            sheet.coloured_text(at, &text, SMALL, Anchor::Middle, colour);
        }
        let label = cut(&shortest(phase.up.values[row]), SMALL, LEFT - 30.0);
        sheet.text((left - 6.0, middle(row)), &label, SMALL, Anchor::End);
    }
    sheet.frame(left, top, right, bottom);
    let mut free = f64::NEG_INFINITY;
    for (column, value) in phase.across.values.iter().enumerate() {
        let label = shortest(*value);
        let x = left + cell * (column as f64 + 0.5);
        let half = 0.5 * width(&label, SMALL);
        if x - half > free {
            sheet.text((x, bottom + 13.0), &label, SMALL, Anchor::Middle);
            free = x + half + 3.0;
        }
    }
    let across = cut(&phase.across.name, FONT, right - left + 2.0 * 12.0);
    sheet.text((0.5 * (left + right), bottom + 32.0), &across, FONT, Anchor::Middle);
    let up = cut(&phase.up.name, FONT, bottom - top);
    sheet.text((left - LEFT + 14.0, 0.5 * (top + bottom)), &up, FONT, Anchor::Upwards);
}

/// Draws the threshold between the columns of fewer constraints and those of at least as many, so that
/// it crosses no number: one upright piece in every row, joined from row to row.
fn border(
    sheet: &Sheet<'_>,
    phase: &Phase,
    threshold: &[f64],
    (left, bottom): (f64, f64),
    (cell, tall): (f64, f64),
) {
    let values = &phase.across.values;
    let mut points = Vec::new();
    for (row, count) in threshold.iter().enumerate() {
        let x = left + cell * values.partition_point(|value| value < count) as f64;
        let foot = bottom - tall * row as f64;
        points.extend([(x, foot), (x, foot - tall)]);
    }
    sheet.line(&points, PAPER, 5.0);
    sheet.line(&points, THRESHOLD, 3.0);
}

/// Mixes paper and a dark blue, so that grey print keeps the order.
pub(super) fn shade(share: f64) -> RGBColor {
    let mix =
        |light: f64, dark: f64| (light + (dark - light) * share.clamp(0.0, 1.0)).round() as u8;
    RGBColor(mix(244.0, 10.0), mix(247.0, 58.0), mix(251.0, 110.0))
}

/// Writes percent without the sign; what is neither none nor all never reads so.
pub(super) fn number(share: f64) -> String {
    percent(share).replace(" %", "")
}
