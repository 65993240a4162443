//! Performance profiles over effort and processor time, and the data profile over effort.
//!
//! The curves are those of `stats::profiles`; here they are only drawn, thinned to one step for each
//! column of pixels.

use super::axes::{Axis, Panel, Spread, shortest};
use super::digest::{Cost, Digest, count, percent};
use super::legend::{self, Sample};
use super::sheet::{self, Fill, Sheet, WIDTH};
use super::style::Pen;
use super::{Figure, keys, tidy};
use crate::stats::profiles::{Curve, data_profile, performance_profile};

/// Least processor time that counts, in seconds: the resolution of the clock.
const CLOCK_S: f64 = 1e-3;
/// Least effort that counts, in flops.
const LEAST_FLOPS: f64 = 1.0;
/// Flops of a symmetric eigendecomposition of order n, over n^3: what the kernels count for one.
const EIGEN: f64 = 9.0;

const TOP: f64 = 16.0;
const BOTTOM: f64 = 316.0;
const LEFT: f64 = 64.0;
const RIGHT: f64 = WIDTH - 24.0;

/// Makes the performance profile over effort.
pub(super) fn over_effort(digest: &Digest<'_>) -> Option<Figure> {
    let words = Words {
        name: "profile-effort",
        title: "Performance profile over effort",
        axis: "effort over the least effort of any method (factor)",
        measure: "effort",
        unit: "Effort is in flops by the operation counts of the kernels, the same on every machine.",
    };
    performance(digest, Cost::Effort, LEAST_FLOPS, &words)
}

/// Makes the performance profile over processor time.
pub(super) fn over_time(digest: &Digest<'_>) -> Option<Figure> {
    let words = Words {
        name: "profile-time",
        title: "Performance profile over processor time",
        axis: "processor time over the least time of any method (factor)",
        measure: "processor time",
        unit: "Time is processor time of the method alone, on one thread; times below the clock \
               resolution of 1 ms count as 1 ms, so that quick instances make ties, not ranks.",
    };
    performance(digest, Cost::Time, CLOCK_S, &words)
}

struct Words {
    name: &'static str,
    title: &'static str,
    axis: &'static str,
    measure: &'static str,
    unit: &'static str,
}

fn performance(digest: &Digest<'_>, cost: Cost, floor: f64, words: &Words) -> Option<Figure> {
    let methods = digest.methods_with(cost);
    let subjects = digest.shared(&methods);
    if methods.len() < 2 || subjects.is_empty() {
        return None;
    }
    let costs = digest.costs(&subjects, &methods, cost);
    let curves = performance_profile(&costs, floor);
    let solvable = costs.iter().filter(|row| row.iter().any(Option::is_some)).count();
    if solvable == 0 {
        return None;
    }
    let warning = if methods.len() > 2 {
        " Caution: with more than two methods only the best curve may be ranked; to rank the others, leave \
         the best method out and draw again (N. Gould, J. Scott, ACM Transactions on Mathematical Software \
         43(2):15, 2016)."
    } else {
        ""
    };
    let caption = format!(
        "How to read: a curve at factor x and height y says that its method solved y percent of the instances \
         with at most x times the {} of the method that needed least on the same instance; higher is \
         better, the left end is how often a method was the cheapest, the right end how much it solves at all. {} \
         {} At least one method solved {solvable} of them; the others stay in the count. {FAILURES} {}{warning}",
        words.measure,
        words.unit,
        sample(digest, &methods, &subjects),
        left_out(digest, &methods),
    );
    let (labels, pens) = keys(digest, &methods);
    let alt = in_words(digest, &methods, &curves, subjects.len(), words.measure);
    let high = curves.iter().filter_map(last).fold(2.0, f64::max);
    let axis = Axis::new(Spread::Log, 1.0, high * 1.1, LEFT, RIGHT);
    let svg = draw(words.name, words.title, &alt, axis, words.axis, &curves, &labels, &pens);
    Some(Figure {
        name: words.name.to_owned(),
        title: words.title.to_owned(),
        caption: tidy(&caption),
        alt: tidy(&alt),
        svg,
    })
}

/// Says the shares of a performance profile at a few factors.
fn in_words(
    digest: &Digest<'_>,
    methods: &[usize],
    curves: &[Curve],
    instances: usize,
    measure: &str,
) -> String {
    let numbers: Vec<String> = methods
        .iter()
        .zip(curves)
        .map(|(&method, curve)| {
            let share = |factor: f64| percent(curve.value(factor));
            format!(
                "{} {} at factor 1, {} at 2, {} at 10, {} in the end",
                digest.methods[method],
                share(1.0),
                share(2.0),
                share(10.0),
                percent(curve.limit)
            )
        })
        .collect();
    format!(
        "Curves of the share of {} solved within a factor of the least {measure}: {}.",
        count(instances, "instance", "instances"),
        numbers.join("; ")
    )
}

/// Makes the data profile over effort, in eigendecompositions.
pub(super) fn data(digest: &Digest<'_>) -> Option<Figure> {
    let methods = digest.methods_with(Cost::Effort);
    let subjects = digest.shared(&methods);
    if methods.is_empty() || subjects.is_empty() {
        return None;
    }
    let units: Vec<f64> = subjects
        .iter()
        .map(|&subject| EIGEN * (digest.subjects[subject].order.max(1) as f64).powi(3))
        .collect();
    let curves = data_profile(&digest.costs(&subjects, &methods, Cost::Effort), &units);
    let high = curves.iter().filter_map(last).fold(0.0, f64::max);
    let low = curves.iter().filter_map(first).fold(f64::INFINITY, f64::min);
    if !(low.is_finite() && high > 0.0) {
        return None;
    }
    let caption = format!(
        "How to read: a curve at x and height y says that its method solved y percent of the instances with at \
         most x units of effort; higher and further left is better. One unit is the effort of one symmetric \
         eigendecomposition of the order of the instance, 9 n^3 flops, so that small and large instances can \
         share the axis; unlike in a performance profile, a curve does not depend on the other methods. {} \
         {FAILURES} {}",
        sample(digest, &methods, &subjects),
        left_out(digest, &methods),
    );
    let numbers: Vec<String> = methods
        .iter()
        .zip(&curves)
        .map(|(&method, curve)| {
            let half = curve.steps.iter().find(|step| step.share >= 0.5);
            let half = half.map_or_else(
                || "never half of them".to_owned(),
                |step| format!("half of them within {}", three_digits(step.at)),
            );
            format!("{} {} in the end, {half}", digest.methods[method], percent(curve.limit))
        })
        .collect();
    let alt = format!(
        "Curves of the share of {} solved against effort in eigendecompositions of order n: {}.",
        count(subjects.len(), "instance", "instances"),
        numbers.join("; ")
    );
    let (labels, pens) = keys(digest, &methods);
    // An effort of nothing has no place on the axis: it stands at its left end.
    let low = low.max(high * 1e-9);
    let axis = Axis::new(Spread::Log, low / 1.1, high * 1.1, LEFT, RIGHT);
    let (name, title) = ("data-profile", "Data profile over effort");
    let along = "effort (eigendecompositions of the order of the instance, 9 n\u{b3} flops)";
    let svg = draw(name, title, &alt, axis, along, &curves, &labels, &pens);
    let (name, title) = (name.to_owned(), title.to_owned());
    Some(Figure { name, title, caption: tidy(&caption), alt: tidy(&alt), svg })
}

const FAILURES: &str = "Failures: an instance that is not solved (verdict solved, in more than half of its \
                        repeats) never counts; with repeats the median cost counts.";

fn sample(digest: &Digest<'_>, methods: &[usize], subjects: &[usize]) -> String {
    let known = digest.subjects.iter().filter(|subject| subject.optimum.is_some()).count();
    format!(
        "Sample: {} with a known optimum ({} of {known}: those that every one of {} ran).",
        count(subjects.len(), "instance", "instances"),
        subjects.len(),
        count(methods.len(), "method", "methods")
    )
}

fn left_out(digest: &Digest<'_>, methods: &[usize]) -> String {
    let absent: Vec<&str> = (0..digest.methods.len())
        .filter(|method| !methods.contains(method))
        .map(|method| digest.methods[method])
        .collect();
    if absent.is_empty() {
        String::new()
    } else {
        format!("Left out because this cost was not recorded: {}.", absent.join(", "))
    }
}

fn first(curve: &Curve) -> Option<f64> {
    curve.steps.iter().map(|step| step.at).find(|at| *at > 0.0)
}

fn last(curve: &Curve) -> Option<f64> {
    curve.steps.last().map(|step| step.at)
}

/// Writes a positive number with three digits.
pub(super) fn three_digits(value: f64) -> String {
    if (1e-3..1e5).contains(&value) {
        let decimals = (2 - value.log10().floor() as i32).max(0) as usize;
        shortest(format!("{value:.decimals$}").parse().unwrap_or(value))
    } else {
        format!("{value:.1e}")
    }
}

fn draw(
    name: &str,
    title: &str,
    alt: &str,
    across: Axis,
    along: &str,
    curves: &[Curve],
    labels: &[String],
    pens: &[Pen],
) -> String {
    let panel = Panel { across, up: Axis::shares(BOTTOM, TOP) };
    let band = BOTTOM + 50.0;
    let height = band + legend::height(labels);
    sheet::draw(name, title, alt, height, pens, |sheet| {
        panel.grid(sheet);
        panel.name_across(sheet, along);
        panel.name_up(sheet, "instances solved (%)", 44.0);
        let stairs: Vec<Vec<(f64, f64)>> =
            curves.iter().map(|curve| stairs(curve, &panel)).collect();
        for (points, pen) in stairs.iter().zip(pens) {
            sheet.curve(points, pen);
        }
        for (at, (points, pen)) in stairs.iter().zip(pens).enumerate() {
            markers(sheet, points, pen, (at as f64 + 0.5) / pens.len() as f64);
        }
        legend::draw(sheet, band, labels, pens, Sample::Curve);
    })
}

/// Turns a step curve into pixels, at most one step for each 1.5 pixels.
fn stairs(curve: &Curve, panel: &Panel) -> Vec<(f64, f64)> {
    let [left, _, right, _] = panel.edges();
    let mut y = panel.up.at(0.0);
    let mut points = vec![(left, y)];
    for step in &curve.steps {
        let (x, next) = panel.at(step.at, step.share);
        let corner = points[points.len() - 1];
        if points.len() > 1 && x - corner.0 < 1.5 || x == left {
            let at = points.len() - 1;
            points[at].1 = next;
        } else {
            points.extend([(x, y), (x, next)]);
        }
        y = next;
    }
    points.push((right, y));
    points
}

/// Puts five markers on a curve, shifted by a share of their distance.
fn markers(sheet: &Sheet<'_>, points: &[(f64, f64)], pen: &Pen, shift: f64) {
    let step = (RIGHT - LEFT) / 5.0;
    for at in 0..5 {
        let x = LEFT + (f64::from(at) + shift) * step;
        let behind = points.partition_point(|point| point.0 <= x);
        if behind > 0 {
            sheet.marker((x, points[behind - 1].1), 4.5, pen, Fill::Full);
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::stats::profiles::Step;

    fn panel() -> Panel {
        Panel {
            across: Axis::new(Spread::Log, 1.0, 100.0, LEFT, RIGHT),
            up: Axis::shares(BOTTOM, TOP),
        }
    }

    #[test]
    fn thinned_stairs_end_where_the_curve_ends() {
        let steps: Vec<Step> = (0..20_000)
            .map(|at| Step {
                at: 1.0 + f64::from(at) * 0.004,
                share: 0.8 * f64::from(at + 1) / 20_000.0,
            })
            .collect();
        let points = stairs(&Curve { steps, limit: 0.8 }, &panel());
        assert!(points.len() < 900, "{}", points.len());
        let end = points[points.len() - 1];
        assert!((end.1 - panel().up.at(0.8)).abs() < 1e-9);
        assert!(points.is_sorted_by(|one, other| one.0 <= other.0 && one.1 >= other.1));
    }

    #[test]
    fn a_step_at_the_left_end_starts_the_curve_there() {
        let curve = Curve { steps: vec![Step { at: 1.0, share: 0.5 }], limit: 0.5 };
        let middle = panel().up.at(0.5);
        assert_eq!(stairs(&curve, &panel()), [(LEFT, middle), (RIGHT, middle)]);
    }

    #[test]
    fn numbers_in_words_have_three_digits() {
        assert_eq!([0.01234, 1.0, 12.345, 123.4].map(three_digits), ["0.0123", "1", "12.3", "123"]);
        assert_eq!(three_digits(1.26e7), "1.3e7");
    }
}
