//! Critical difference: average ranks of the methods by effort to solve, and which of them differ.
//!
//! The test is that of `stats::friedman`; the layout is our own: a row a method, upright bars at the
//! right over rows that do not differ.

use super::axes::{Axis, Panel, Spread, Tick};
use super::digest::{Cost, Digest, count};
use super::legend::LABEL;
use super::sheet::{self, Anchor, Fill, WIDTH};
use super::style::{FONT, GRID, INK, width};
use super::{Figure, keys, tidy};
use crate::stats::friedman::{Friedman, Level, critical_difference, friedman};

/// Fewest instances: below, the approximations of the test are poor.
const INSTANCES: usize = 10;
const ROW: f64 = 28.0;
const TOP: f64 = 48.0;

/// Makes the figure for three to ten methods on at least ten shared instances.
pub(super) fn figure(digest: &Digest<'_>) -> Option<Figure> {
    let methods = digest.methods_with(Cost::Effort);
    let subjects = digest.shared(&methods);
    if !(3..=10).contains(&methods.len()) || subjects.len() < INSTANCES {
        return None;
    }
    let blocks: Vec<Vec<f64>> = digest
        .costs(&subjects, &methods, Cost::Effort)
        .into_iter()
        .map(|row| row.into_iter().map(|cost| cost.unwrap_or(f64::INFINITY)).collect())
        .collect();
    let test = friedman(&blocks)?;
    let difference = critical_difference(methods.len(), test.blocks, Level::FivePercent)?;
    let mut order: Vec<usize> = (0..methods.len()).collect();
    order.sort_by(|one, other| test.mean_ranks[*one].total_cmp(&test.mean_ranks[*other]));
    let ranks: Vec<f64> = order.iter().map(|&at| test.mean_ranks[at]).collect();
    let groups = groups(&ranks, difference);
    let sorted: Vec<usize> = order.iter().map(|&at| methods[at]).collect();
    let numbers: Vec<String> = sorted
        .iter()
        .zip(&ranks)
        .map(|(&method, rank)| format!("{} {rank:.2}", digest.methods[method]))
        .collect();
    let joined: Vec<String> = groups
        .iter()
        .map(|&(first, last)| {
            let names: Vec<&str> =
                sorted[first..=last].iter().map(|&method| digest.methods[method]).collect();
            names.join(" with ")
        })
        .collect();
    let joined = if joined.is_empty() {
        "all of them differ".to_owned()
    } else {
        format!("not different: {}", joined.join("; "))
    };
    let alt = format!(
        "Average ranks by effort to solve over {}, least first: {}. Critical difference {difference:.2}; {joined}.",
        count(subjects.len(), "instance", "instances"),
        numbers.join(", ")
    );
    let (name, title) =
        ("critical-difference".to_owned(), "Average ranks and critical difference".to_owned());
    let svg = draw(&name, &title, &alt, digest, &sorted, &ranks, difference, &groups);
    let caption = caption(&test, difference, &subjects, methods.len());
    Some(Figure { name, title, caption, alt: tidy(&alt), svg })
}

fn caption(test: &Friedman, difference: f64, subjects: &[usize], methods: usize) -> String {
    let doubt = if test.f_p >= 0.05 {
        "The test does not reject that all methods are alike: read no order into this figure."
    } else {
        ""
    };
    tidy(&format!(
        "How to read: on each instance the methods are ranked by the effort (flops) they needed to solve it, the least \
         first; the marker is the average rank, further left is better. An upright bar at the right joins methods whose \
         average ranks differ by less than the critical difference, drawn to scale at the top: between them the data do \
         not decide at 5 percent (Nemenyi). Friedman test that all are alike: chi-square {:.2}, {}; F {}, {}; \
         critical difference {difference:.3} (J. Demsar, Journal of Machine Learning Research 7:1-30, 2006). {doubt} Ranks \
         say how often, not by how much. Sample: {} with a known optimum that all {methods} methods ran. Failures: a \
         method that did not solve the instance (verdict solved, in more than half of its repeats) ranks last there; \
         ties share their average rank.",
        test.chi_square,
        p_value(test.chi_square_p),
        if test.f.is_finite() { format!("{:.2}", test.f) } else { "infinite".to_owned() },
        p_value(test.f_p),
        count(subjects.len(), "instance", "instances"),
    ))
}

fn p_value(p: f64) -> String {
    if p < 1e-4 { "p below 0.0001".to_owned() } else { format!("p = {p:.4}") }
}

/// Lists the largest runs of neighbours, in the order of the ranks, whose ends differ by less than
/// the critical difference.
fn groups(ranks: &[f64], difference: f64) -> Vec<(usize, usize)> {
    let mut groups: Vec<(usize, usize)> = Vec::new();
    for first in 0..ranks.len() {
        let last = ranks.partition_point(|rank| rank - ranks[first] < difference) - 1;
        let inside = groups.last().is_some_and(|group| group.1 >= last);
        if last > first && !inside {
            groups.push((first, last));
        }
    }
    groups
}

fn draw(
    name: &str,
    title: &str,
    alt: &str,
    digest: &Digest<'_>,
    sorted: &[usize],
    ranks: &[f64],
    difference: f64,
    groups: &[(usize, usize)],
) -> String {
    let (labels, pens) = keys(digest, sorted);
    let widest = labels.iter().map(|label| width(label, FONT)).fold(0.0, f64::max).min(LABEL);
    let left = (widest + 24.0).max(64.0);
    let right = WIDTH - 30.0 - 14.0 * groups.len() as f64;
    let bottom = TOP + ROW * labels.len() as f64;
    let ticks =
        (1..=labels.len()).map(|at| Tick { at: at as f64, label: at.to_string() }).collect();
    let rows = labels.len() as f64;
    let panel = Panel {
        across: Axis::new(Spread::Linear, 0.8, rows + 0.2, left, right).with_ticks(ticks),
        up: Axis::new(Spread::Linear, 0.0, rows, bottom, TOP).with_ticks(Vec::new()),
    };
    sheet::draw(name, title, alt, bottom + 48.0, &pens, |sheet| {
        panel.grid(sheet);
        panel.name_across(sheet, "average rank by effort to solve (1 = always the least)");
        let (from, to) = (panel.across.at(1.0), panel.across.at(1.0 + difference));
        let y = TOP - 14.0;
        sheet.line(&[(from, y), (to, y)], INK, 3.0);
        for x in [from, to] {
            sheet.line(&[(x, y - 5.0), (x, y + 5.0)], INK, 1.6);
        }
        let text = format!("critical difference {difference:.2}");
        let room = to + 10.0 + width(&text, FONT) < right - 30.0;
        let (at, anchor) =
            if room { ((to + 10.0, y), Anchor::Start) } else { ((from, y - 16.0), Anchor::Start) };
        sheet.text(at, &text, FONT, anchor);
        for (row, (label, pen)) in labels.iter().zip(&pens).enumerate() {
            let y = TOP + ROW * (row as f64 + 0.5);
            let x = panel.across.at(ranks[row]);
            sheet.line(&[(left, y), (x, y)], GRID, 2.0);
            sheet.marker((x, y), 6.0, pen, Fill::Full);
            sheet.text((left - 10.0, y), label, FONT, Anchor::End);
        }
        if !groups.is_empty() {
            sheet.text((WIDTH - 8.0, y), "alike", FONT, Anchor::End);
        }
        for (at, &(first, last)) in groups.iter().enumerate() {
            let x = right + 16.0 + 14.0 * at as f64;
            let end = |row: usize| TOP + ROW * (row as f64 + 0.5);
            sheet.line(&[(x, end(first) - 8.0), (x, end(last) + 8.0)], INK, 4.0);
        }
    })
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn groups_are_largest_and_not_nested() {
        assert_eq!(groups(&[1.0, 1.5, 2.2, 4.0], 1.0), [(0, 1), (1, 2)]);
        assert_eq!(groups(&[1.0, 1.5, 1.9, 4.0], 1.0), [(0, 2)]);
        assert_eq!(groups(&[1.0, 2.0, 3.0], 1.0), []);
    }
}
