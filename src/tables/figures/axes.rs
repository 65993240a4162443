//! Axes and panels: where a value stands, where ticks are, and the frame around them.
//!
//! Not for what is drawn inside a panel.

use super::sheet::{Anchor, Sheet, power_of_ten};
use super::style::{FONT, GRID, SMALL, cut, width};

/// How values are spread along an axis.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(super) enum Spread {
    /// Equal steps are equal differences.
    Linear,
    /// Equal steps are equal ratios.
    Log,
}

/// A tick with its label.
#[derive(Clone, Debug, PartialEq)]
pub(super) struct Tick {
    /// Value.
    pub(super) at: f64,
    /// Label, may hold a raised exponent.
    pub(super) label: String,
}

/// An axis: values from `low` to `high` stand at pixels `from` to `to`.
#[derive(Clone, Debug, PartialEq)]
pub(super) struct Axis {
    spread: Spread,
    low: f64,
    high: f64,
    from: f64,
    to: f64,
    ticks: Vec<Tick>,
}

impl Axis {
    /// Makes an axis over the values, widened to be at least a little long; ticks are placed.
    pub(super) fn new(spread: Spread, low: f64, high: f64, from: f64, to: f64) -> Self {
        let (low, high) = match spread {
            Spread::Linear if high - low > 1e-12 * (1.0 + low.abs()) => (low, high),
            Spread::Linear => (low - 0.5, high + 0.5),
            Spread::Log if high > low * 1.5 => (low, high),
            Spread::Log => (low / 1.5, high * 1.5),
        };
        let room = (to - from).abs();
        let ticks = match spread {
            Spread::Linear => linear_ticks(low, high, (room / 32.0).clamp(2.0, 9.0)),
            Spread::Log => {
                // Upright axes need the height of a label for a tick, level ones its width.
                let each = if to < from { 28.0 } else { 48.0 };
                log_ticks(low, high, (room / each).clamp(2.0, 9.0) as usize)
            }
        };
        Axis { spread, low, high, from, to, ticks }
    }

    /// Puts ticks of the caller's own.
    pub(super) fn with_ticks(self, ticks: Vec<Tick>) -> Self {
        Axis { ticks, ..self }
    }

    /// Leaves the ticks, takes their labels away.
    pub(super) fn without_labels(mut self) -> Self {
        for tick in &mut self.ticks {
            tick.label.clear();
        }
        self
    }

    /// Makes an upright axis of shares from none to all, in percent.
    pub(super) fn shares(bottom: f64, top: f64) -> Self {
        let step = if bottom - top > 150.0 { 20 } else { 50 };
        let ticks = (0..=100)
            .step_by(step)
            .map(|percent| Tick { at: f64::from(percent) / 100.0, label: percent.to_string() })
            .collect();
        // A little more than none and all, so that curves there do not lie on the frame.
        Axis { spread: Spread::Linear, low: -0.025, high: 1.025, from: bottom, to: top, ticks }
    }

    /// Returns the pixel of a value; values beyond the ends stand at the ends.
    pub(super) fn at(&self, value: f64) -> f64 {
        let value = value.clamp(self.low, self.high);
        let share = match self.spread {
            Spread::Linear => (value - self.low) / (self.high - self.low),
            // By differences: the ratio of extreme ends overflows.
            Spread::Log => (value.ln() - self.low.ln()) / (self.high.ln() - self.low.ln()),
        };
        self.from + share * (self.to - self.from)
    }
}

fn linear_ticks(low: f64, high: f64, most: f64) -> Vec<Tick> {
    let rough = (high - low) / most;
    let scale = 10f64.powf(rough.log10().floor());
    let step = scale
        * [1.0, 2.0, 5.0, 10.0].into_iter().find(|step| step * scale >= rough).unwrap_or(10.0);
    let decimals = (-step.log10().floor()).max(0.0) as usize;
    let first = (low / step - 1e-9).ceil() as i64;
    let last = (high / step + 1e-9).floor() as i64;
    (first..=last)
        .map(|count| count as f64 * step)
        .map(|at| Tick { at, label: format!("{:.decimals$}", at + 0.0) })
        .collect()
}

/// Places at most about `most` ticks: at 1, 2 and 5 times powers of ten when they fit, else at powers of
/// ten, every so many. A range within a decade gets 1, 2 and 5 in any case.
fn log_ticks(low: f64, high: f64, most: usize) -> Vec<Tick> {
    let first = (low.log10() - 1e-9).ceil() as i32;
    let last = (high.log10() + 1e-9).floor() as i32;
    let plain = low >= 1e-3 && high < 1e5;
    let mut fine = Vec::new();
    for exponent in (first - 1)..=last.min(first + 5) {
        for lead in [1.0, 2.0, 5.0] {
            let at = lead * 10f64.powi(exponent);
            if at < low * (1.0 - 1e-9) || at > high * (1.0 + 1e-9) {
                continue;
            }
            let label = match (plain, lead == 1.0) {
                (true, _) => shortest(at),
                (false, true) => power_of_ten(exponent),
                (false, false) => format!("{lead}\u{b7}{}", power_of_ten(exponent)),
            };
            fine.push(Tick { at, label });
        }
    }
    let decades = (last - first + 1).max(0) as usize;
    let fits = fine.len() <= most && last <= first + 5 && (plain || decades < 3);
    if decades < 2 || fits {
        return fine;
    }
    let every = decades.div_ceil(most.max(1)).max(1) as i32;
    let plain = first >= -2 && last <= 3;
    (first..=last)
        .filter(|exponent| exponent.rem_euclid(every) == 0)
        .map(|exponent| decade(exponent, plain))
        .collect()
}

fn decade(exponent: i32, plain: bool) -> Tick {
    let at = 10f64.powi(exponent);
    let label = if plain { shortest(at) } else { power_of_ten(exponent) };
    Tick { at, label }
}

/// Writes a number of few digits without noise from the last bit; very small and very large ones with
/// a power of ten.
pub(super) fn shortest(value: f64) -> String {
    if value != 0.0 && !(1e-3..1e7).contains(&value.abs()) {
        return format!("{value:e}");
    }
    let text = format!("{value:.6}");
    let short = text.trim_end_matches('0').trim_end_matches('.');
    if short == "-0" { "0".to_owned() } else { short.to_owned() }
}

/// A plot: two axes and the rectangle between them.
#[derive(Clone, Debug, PartialEq)]
pub(super) struct Panel {
    /// Axis from left to right.
    pub(super) across: Axis,
    /// Axis from bottom to top.
    pub(super) up: Axis,
}

impl Panel {
    /// Returns left, top, right and bottom, in pixels.
    pub(super) fn edges(&self) -> [f64; 4] {
        [self.across.from, self.up.to, self.across.to, self.up.from]
    }

    /// Returns the pixel of a point.
    pub(super) fn at(&self, x: f64, y: f64) -> (f64, f64) {
        (self.across.at(x), self.up.at(y))
    }

    /// Draws grid, frame and tick labels.
    pub(super) fn grid(&self, sheet: &Sheet<'_>) {
        let [left, top, right, bottom] = self.edges();
        let mut free = f64::NEG_INFINITY;
        for tick in &self.across.ticks {
            let x = self.across.at(tick.at);
            sheet.line(&[(x, top), (x, bottom)], GRID, 1.0);
            let half = width(&tick.label, SMALL) / 2.0;
            if x - half > free && !tick.label.is_empty() {
                sheet.text((x, bottom + 13.0), &tick.label, SMALL, Anchor::Middle);
                free = x + half + 4.0;
            }
        }
        for tick in &self.up.ticks {
            let y = self.up.at(tick.at);
            sheet.line(&[(left, y), (right, y)], GRID, 1.0);
            sheet.text((left - 6.0, y), &tick.label, SMALL, Anchor::End);
        }
        sheet.frame(left, top, right, bottom);
    }

    /// Writes the name of the axis below the tick labels.
    pub(super) fn name_across(&self, sheet: &Sheet<'_>, name: &str) {
        let [left, _, right, bottom] = self.edges();
        sheet.text((0.5 * (left + right), bottom + 33.0), name, FONT, Anchor::Middle);
    }

    /// Writes the name of the upright axis this many pixels left of it.
    pub(super) fn name_up(&self, sheet: &Sheet<'_>, name: &str, away: f64) {
        let [left, top, _, bottom] = self.edges();
        sheet.text((left - away, 0.5 * (top + bottom)), name, FONT, Anchor::Upwards);
    }

    /// Writes a heading above the frame, cut to its width.
    pub(super) fn heading(&self, sheet: &Sheet<'_>, heading: &str) {
        let [left, top, right, _] = self.edges();
        let heading = cut(heading, FONT, right - left);
        sheet.text((left, top - 11.0), &heading, FONT, Anchor::Start);
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn labels(ticks: &[Tick]) -> Vec<&str> {
        ticks.iter().map(|tick| tick.label.as_str()).collect()
    }

    #[test]
    fn ticks_are_round_numbers() {
        assert_eq!(
            labels(&linear_ticks(0.0, 16.0, 8.0)),
            ["0", "2", "4", "6", "8", "10", "12", "14", "16"]
        );
        assert_eq!(labels(&log_ticks(0.8, 30.0, 9)), ["1", "2", "5", "10", "20"]);
        assert_eq!(labels(&log_ticks(1.0, 1000.0, 9)), ["1", "10", "100", "1000"]);
        assert_eq!(
            labels(&log_ticks(30.0, 3000.0, 9)),
            ["50", "100", "200", "500", "1000", "2000"]
        );
        assert_eq!(log_ticks(1e-16, 1.0, 5).len(), 5);
    }

    #[test]
    fn numbers_are_short_and_never_lost() {
        let shown = [0.0, -0.0, 0.1 + 0.2, 20.0, 1e-7, 2.5e9].map(shortest);
        assert_eq!(shown, ["0", "0", "0.3", "20", "1e-7", "2.5e9"]);
    }

    #[test]
    fn values_beyond_the_ends_stand_at_the_ends() {
        let axis = Axis::new(Spread::Log, 1.0, 100.0, 50.0, 250.0);
        assert_eq!([axis.at(0.0), axis.at(10.0), axis.at(1e9)], [50.0, 150.0, 250.0]);
    }

    #[test]
    fn one_value_makes_an_axis_too() {
        for spread in [Spread::Linear, Spread::Log] {
            let axis = Axis::new(spread, 3.0, 3.0, 0.0, 100.0);
            assert!((axis.at(3.0) - 50.0).abs() < 1e-9, "{spread:?}");
        }
    }
}
