//! Accuracy against processor time: one marker a trial, one large marker the median of a method.

use super::super::Input;
use super::axes::{Axis, Panel, Spread};
use super::digest::{Digest, count};
use super::legend::{self, Sample};
use super::profiles::three_digits;
use super::sheet::{self, Fill, Sheet, WIDTH};
use super::style::{INK, PAPER};
use super::{Figure, keys, tidy};
use crate::record::Verdict;
use crate::stats::summary::median;

/// Most markers of trials; of more trials every so-many-th of each method is drawn.
const MARKERS: usize = 1_200;
/// Least processor time with a place on the axis, in seconds.
const LEAST_S: f64 = 1e-5;
/// Most digits on the axis: a double holds no more.
const DIGITS: f64 = 16.0;

struct Dot {
    method: usize,
    seconds: f64,
    digits: f64,
    fill: Fill,
}

/// Makes the figure from all trials with digits and a processor time.
pub(super) fn figure(input: &Input<'_>, digest: &Digest<'_>) -> Option<Figure> {
    let mut dots: Vec<Vec<Dot>> = digest.methods.iter().map(|_| Vec::new()).collect();
    for (record, &method) in input.records.iter().zip(&digest.method_of) {
        if let (Some(digits), Some(seconds)) = (record.digits, record.cpu_s) {
            let fill = if record.verdict == Verdict::Solved { Fill::Full } else { Fill::Hollow };
            let (seconds, digits) = (seconds.max(LEAST_S), digits.clamp(0.0, DIGITS));
            dots[method].push(Dot { method, seconds, digits, fill });
        }
    }
    let total: usize = dots.iter().map(Vec::len).sum();
    if total == 0 {
        return None;
    }
    let medians: Vec<Option<(f64, f64)>> = dots
        .iter()
        .map(|own| {
            let of = |figure: fn(&Dot) -> f64| median(&own.iter().map(figure).collect::<Vec<_>>());
            Some((of(|dot| dot.seconds)?, of(|dot| dot.digits)?))
        })
        .collect();
    let stride = total.div_ceil(MARKERS);
    let thinned = if stride > 1 {
        format!(
            "To keep the figure light only one in {stride} trials of each method is drawn; medians are of all."
        )
    } else {
        String::new()
    };
    let absent = input.records.len() - total;
    let caption = format!(
        "How to read: each small marker is a trial, filled when its verdict is solved, empty otherwise; each large \
         marker with a dark edge is the median time and the median digits of a method. Up is more accurate, left is \
         quicker. Digits: correct digits of the objective at the target rank, against the known optimum; more than \
         {DIGITS} are drawn as {DIGITS}, less than 0 as 0. The thin dark line is the tolerance on the objective. \
         Time: processor seconds of the method alone, on one thread. Sample: {}; {} with no digits or no \
         time (crashed, refused, optimum not known) cannot be shown. Failures: a trial that was not solved is shown \
         where it ended, and counts in the medians. {thinned}",
        count(total, "trial", "trials"),
        count(absent, "trial", "trials"),
    );
    let numbers: Vec<String> = digest
        .methods
        .iter()
        .zip(&medians)
        .filter_map(|(method, median)| {
            let (seconds, digits) = (*median)?;
            Some(format!("{method} {digits:.1} digits in {} s", three_digits(seconds)))
        })
        .collect();
    let alt = format!(
        "Scatter of correct digits against processor time, {}. Medians: {}.",
        count(total, "trial", "trials"),
        numbers.join("; ")
    );
    let (name, title) = ("accuracy-time".to_owned(), "Accuracy against processor time".to_owned());
    let tolerance = -input.tolerance[1].log10();
    let svg = draw(&name, &title, &alt, digest, &dots, &medians, stride, tolerance);
    Some(Figure { name, title, caption: tidy(&caption), alt: tidy(&alt), svg })
}

fn draw(
    name: &str,
    title: &str,
    alt: &str,
    digest: &Digest<'_>,
    dots: &[Vec<Dot>],
    medians: &[Option<(f64, f64)>],
    stride: usize,
    tolerance: f64,
) -> String {
    let shown: Vec<usize> = (0..dots.len()).filter(|&method| !dots[method].is_empty()).collect();
    let (labels, pens) = keys(digest, &shown);
    let seconds = || dots.iter().flatten().map(|dot| dot.seconds);
    let low = seconds().fold(f64::INFINITY, f64::min);
    let high = seconds().fold(0.0, f64::max);
    let (top, bottom) = (16.0, 336.0);
    let panel = Panel {
        across: Axis::new(Spread::Log, low / 1.3, high * 1.3, 58.0, WIDTH - 24.0),
        up: Axis::new(Spread::Linear, -0.6, DIGITS + 0.6, bottom, top),
    };
    let band = bottom + 50.0;
    let height = band + legend::height(&labels);
    sheet::draw(name, title, alt, height, &pens, |sheet| {
        panel.grid(sheet);
        panel.name_across(sheet, "processor time (s)");
        panel.name_up(sheet, "correct digits of the objective", 38.0);
        if (0.0..=DIGITS).contains(&tolerance) {
            let [left, _, right, _] = panel.edges();
            let y = panel.up.at(tolerance);
            sheet.line(&[(left, y), (right, y)], INK, 1.2);
        }
        let most = dots.iter().map(Vec::len).max().unwrap_or(0);
        // Methods take turns, so that none hides another everywhere.
        for at in (0..most).step_by(stride) {
            for dot in dots.iter().filter_map(|own| own.get(at)) {
                let at = panel.at(dot.seconds, dot.digits);
                sheet.marker(at, 3.2, &super::pen(dot.method), dot.fill);
            }
        }
        for (method, median) in medians.iter().enumerate() {
            if let Some((seconds, digits)) = *median {
                large(sheet, panel.at(seconds, digits), method);
            }
        }
        legend::draw(sheet, band, &labels, &pens, Sample::Marker);
    })
}

fn large(sheet: &Sheet<'_>, at: (f64, f64), method: usize) {
    let pen = super::pen(method);
    let halo = super::Pen { colour: PAPER, ..pen };
    sheet.marker(at, 10.5, &halo, Fill::Full);
    sheet.marker(at, 7.5, &pen, Fill::Edged);
}
