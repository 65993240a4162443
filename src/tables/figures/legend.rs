//! The legend: a band of its own below the plot, where nothing else is drawn.

use super::sheet::{Anchor, Fill, Sheet, WIDTH};
use super::style::{FONT, Pen, cut, width};

/// Length of a sample line, in pixels.
const SAMPLE: f64 = 46.0;
/// Room between a sample and its label, and after a label.
const GAP: f64 = 8.0;
/// Height of a row.
const ROW: f64 = 21.0;
/// Margin at the left and right of the band.
const MARGIN: f64 = 16.0;
/// Widest a label may be, in pixels: two columns always fit.
pub(super) const LABEL: f64 = 0.5 * (WIDTH - 2.0 * MARGIN) - SAMPLE - 2.0 * GAP;

/// What stands before a label.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(super) enum Sample {
    /// A piece of the curve with a marker on it.
    Curve,
    /// A marker alone.
    Marker,
}

/// Returns the height of the legend of so many labels, in pixels.
pub(super) fn height(labels: &[String]) -> f64 {
    labels.len().div_ceil(columns(labels)) as f64 * ROW + 8.0
}

fn columns(labels: &[String]) -> usize {
    let widest = labels.iter().map(|label| width(label, FONT)).fold(0.0, f64::max).min(LABEL);
    ((WIDTH - 2.0 * MARGIN) / (widest + SAMPLE + 2.0 * GAP)).floor().clamp(1.0, 4.0) as usize
}

/// Draws the legend with its upper edge at `top`.
pub(super) fn draw(sheet: &Sheet<'_>, top: f64, labels: &[String], pens: &[Pen], sample: Sample) {
    let columns = columns(labels);
    let step = (WIDTH - 2.0 * MARGIN) / columns as f64;
    for (at, (label, pen)) in labels.iter().zip(pens).enumerate() {
        let left = MARGIN + (at % columns) as f64 * step;
        let y = top + ROW * ((at / columns) as f64 + 0.5);
        if sample == Sample::Curve {
            sheet.curve(&[(left, y), (left + SAMPLE, y)], pen);
        }
        sheet.marker((left + 0.5 * SAMPLE, y), 4.5, pen, Fill::Full);
        let text = cut(label, FONT, LABEL);
        sheet.text((left + SAMPLE + GAP, y), &text, FONT, Anchor::Start);
    }
}
