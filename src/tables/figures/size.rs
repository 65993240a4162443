//! Solved share against the order of the instances, with intervals.

use super::axes::{Axis, Panel, Spread, Tick, shortest};
use super::digest::{Digest, count, distinct, percent};
use super::legend::{self, Sample};
use super::sheet::{self, Fill, Sheet, WIDTH};
use super::style::{Pen, clean};
use super::{Figure, keys, tidy};
use crate::stats::proportion::wilson;

/// Most panels.
const PANELS: usize = 12;
/// Most different values along a panel; more are put together.
const VALUES: usize = 12;

/// Solved instances of one method at one value.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub(super) struct Tally {
    pub(super) solved: u64,
    pub(super) run: u64,
}

impl Tally {
    pub(super) fn share(self) -> Option<f64> {
        (self.run > 0).then(|| self.solved as f64 / self.run as f64)
    }
}

/// A panel of shares against a value: one row of tallies a method.
pub(super) struct Plot {
    pub(super) heading: String,
    /// What the values are of.
    pub(super) along: String,
    pub(super) values: Vec<f64>,
    pub(super) rows: Vec<Vec<Tally>>,
    pub(super) instances: usize,
}

/// Counts solved instances by method and value; instances without a value are left out.
pub(super) fn tally(
    digest: &Digest<'_>,
    subjects: &[usize],
    values: &[f64],
    mut place: impl FnMut(usize) -> Option<usize>,
) -> Vec<Vec<Tally>> {
    let mut rows = vec![vec![Tally::default(); values.len()]; digest.methods.len()];
    for &subject in subjects {
        let Some(at) = place(subject) else { continue };
        for (method, row) in rows.iter_mut().enumerate() {
            if let Some(success) = digest.success(subject, method) {
                row[at].run += 1;
                row[at].solved += u64::from(success);
            }
        }
    }
    rows
}

/// Makes the figure: a panel for each family of at least two orders, or one of all families.
pub(super) fn figure(digest: &Digest<'_>) -> Option<Figure> {
    let known: Vec<usize> = (0..digest.subjects.len())
        .filter(|&subject| digest.subjects[subject].optimum.is_some())
        .collect();
    let mut plots: Vec<Plot> = Vec::new();
    let mut more = 0;
    for (family, name) in digest.families.iter().enumerate() {
        let own: Vec<usize> = known
            .iter()
            .copied()
            .filter(|&subject| digest.subjects[subject].family == family)
            .collect();
        match plot(digest, &own, clean(name)) {
            Some(_) if plots.len() == PANELS => more += 1,
            found => plots.extend(found),
        }
    }
    let mixed = plots.is_empty();
    if mixed {
        plots.extend(plot(digest, &known, "all families together".to_owned()));
    }
    if plots.is_empty() {
        return None;
    }
    let note = if more > 0 {
        let families = count(more, "more family", "more families");
        format!("{families} of more than one order are not shown.")
    } else if mixed {
        "Caution: no family has two orders, so a slope here may be that of the families, not of the order."
            .to_owned()
    } else {
        String::new()
    };
    let caption = format!(
        "How to read: each point is the share of instances of one order that a method solved; the bar through it \
         is the 95 % interval of Wilson, so bars that overlap widely say little. A line that falls to the right does \
         not scale. The order is the sum of the orders of all blocks; more than {VALUES} orders are put together in \
         groups, shown at the middle of their ends. Points of one order are moved apart sideways to be seen. \
         Sample: {}; each method counts on the instances that it ran. Failures: whatever is not solved (verdict \
         solved, in more than half of the repeats) counts as not solved. {note}",
        sizes(&plots)
    );
    let alt = alt(digest, &plots);
    let (name, title) = ("solved-by-order", "Solved share against order");
    let svg = draw(name, title, &alt, &plots, digest);
    let (name, title) = (name.to_owned(), title.to_owned());
    Some(Figure { name, title, caption: tidy(&caption), alt: tidy(&alt), svg })
}

/// Names the panels with their numbers of instances.
pub(super) fn sizes(plots: &[Plot]) -> String {
    let parts: Vec<String> = plots
        .iter()
        .map(|plot| format!("{} {}", plot.heading, count(plot.instances, "instance", "instances")))
        .collect();
    parts.join(", ")
}

fn plot(digest: &Digest<'_>, subjects: &[usize], heading: String) -> Option<Plot> {
    let order = |subject: usize| digest.subjects[subject].order as f64;
    let orders = distinct(subjects.iter().map(|&subject| order(subject)));
    if orders.len() < 2 {
        return None;
    }
    let groups: Vec<&[f64]> = orders.chunks(orders.len().div_ceil(VALUES)).collect();
    let values: Vec<f64> =
        groups.iter().map(|group| 0.5 * (group[0] + group[group.len() - 1])).collect();
    let place =
        |subject| Some(groups.partition_point(|group| group[group.len() - 1] < order(subject)));
    let rows = tally(digest, subjects, &values, place);
    let along = "order n".to_owned();
    Some(Plot { heading, along, values, rows, instances: subjects.len() })
}

/// Says the shares at the two ends of every panel.
pub(super) fn alt(digest: &Digest<'_>, plots: &[Plot]) -> String {
    let panels: Vec<String> = plots
        .iter()
        .map(|plot| {
            let last = plot.values.len() - 1;
            let methods: Vec<String> = plot
                .rows
                .iter()
                .zip(&digest.methods)
                .filter_map(|(row, method)| {
                    let (low, high) = (row[0].share()?, row[last].share()?);
                    Some(format!("{method} from {} to {}", percent(low), percent(high)))
                })
                .collect();
            let ends = format!(
                "{} {} to {}",
                plot.along,
                shortest(plot.values[0]),
                shortest(plot.values[last])
            );
            format!("{}, {ends}: {}", plot.heading, methods.join(", "))
        })
        .collect();
    format!("Lines of the solved share, at the two ends of each panel. {}.", panels.join(". "))
}

/// Draws the panels, two beside each other when there are several.
pub(super) fn draw(
    name: &str,
    title: &str,
    alt: &str,
    plots: &[Plot],
    digest: &Digest<'_>,
) -> String {
    let methods: Vec<usize> = (0..digest.methods.len()).collect();
    let (labels, pens) = keys(digest, &methods);
    let columns = plots.len().min(2);
    let tall = if columns == 1 { 260.0 } else { 140.0 };
    let cell = (WIDTH / columns as f64, tall + 76.0);
    let band = cell.1 * plots.len().div_ceil(columns) as f64 + 4.0;
    let height = band + legend::height(&labels);
    sheet::draw(name, title, alt, height, &pens, |sheet| {
        for (at, plot) in plots.iter().enumerate() {
            let left = (at % columns) as f64 * cell.0 + 60.0;
            let top = (at / columns) as f64 * cell.1 + 28.0;
            let right = left + cell.0 - 60.0 - 18.0;
            draw_panel(sheet, plot, [left, top, right, top + tall], &pens);
        }
        legend::draw(sheet, band, &labels, &pens, Sample::Curve);
    })
}

fn draw_panel(sheet: &Sheet<'_>, plot: &Plot, [left, top, right, bottom]: [f64; 4], pens: &[Pen]) {
    let (spread, along) = spread(&plot.values);
    let (low, high) = (along[0], along[along.len() - 1]);
    // Room at both ends for points that are moved apart.
    let (low, high) = match spread {
        Spread::Log => {
            let room = (high / low).powf(0.07);
            (low / room, high * room)
        }
        Spread::Linear => {
            let room = 0.07 * (high - low);
            (low - room, high + room)
        }
    };
    let label = |(&at, value): (&f64, &f64)| Tick { at, label: shortest(*value) };
    let ticks = along.iter().zip(&plot.values).map(label).collect();
    let across = Axis::new(spread, low, high, left, right).with_ticks(ticks);
    let panel = Panel { across, up: Axis::shares(bottom, top) };
    panel.grid(sheet);
    panel.heading(sheet, &plot.heading);
    panel.name_across(sheet, &plot.along);
    panel.name_up(sheet, "solved (%)", 42.0);
    let places: Vec<f64> = along.iter().map(|&value| panel.across.at(value)).collect();
    let closest = places.windows(2).map(|pair| pair[1] - pair[0]).fold(f64::INFINITY, f64::min);
    let count = pens.len() as f64;
    let step = (closest * 0.7 / count).min(7.0).min(0.06 * (right - left) * 2.0 / count);
    let mut curves = Vec::new();
    for (at, (row, pen)) in plot.rows.iter().zip(pens).enumerate() {
        let shift = (at as f64 - 0.5 * (count - 1.0)) * step;
        let mut points = Vec::new();
        for (tally, x) in row.iter().zip(&places) {
            let Some(share) = tally.share() else { continue };
            let bar = wilson(tally.solved, tally.run, 0.95);
            let ends = [bar.low, bar.high].map(|end| (x + shift, panel.up.at(end)));
            sheet.faint_line(&ends, pen.colour, 1.4);
            points.push((x + shift, panel.up.at(share)));
        }
        curves.push(points);
    }
    for (points, pen) in curves.iter().zip(pens) {
        sheet.curve(points, pen);
    }
    for (points, pen) in curves.iter().zip(pens) {
        for &point in points {
            sheet.marker(point, 4.0, pen, Fill::Full);
        }
    }
}

/// Says how values are spread along a panel and where they stand: wide ranges by ratio, wide ranges
/// that begin at or below zero in equal steps.
fn spread(values: &[f64]) -> (Spread, Vec<f64>) {
    let (low, high) = (values[0], values[values.len() - 1]);
    if low > 0.0 && high / low >= 8.0 {
        return (Spread::Log, values.to_vec());
    }
    let second = values[1];
    if low <= 0.0 && second > 0.0 && values.len() > 2 && high / second >= 8.0 {
        return (Spread::Linear, (0..values.len()).map(|at| at as f64).collect());
    }
    (Spread::Linear, values.to_vec())
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn wide_ranges_are_spread_out() {
        assert_eq!(spread(&[10.0, 80.0]), (Spread::Log, vec![10.0, 80.0]));
        assert_eq!(spread(&[0.0, 0.5, 1.0]), (Spread::Linear, vec![0.0, 0.5, 1.0]));
        assert_eq!(spread(&[0.0, 1e-4, 1.0]), (Spread::Linear, vec![0.0, 1.0, 2.0]));
    }
}
