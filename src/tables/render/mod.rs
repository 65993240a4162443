//! Renderers: a table as CSV, Markdown, LaTeX, HTML and aligned text. They return text and touch no file.

mod csv;
mod html;
mod latex;
mod markdown;
mod text;

use super::{Cell, Style, Table};

/// Most rows of a table in the forms for people; the CSV form holds all.
pub const MOST_ROWS: usize = 2000;

impl Cell {
    /// Returns the form for people.
    pub fn shown(&self) -> String {
        match self {
            Cell::Missing => "-".to_owned(),
            Cell::Word(word) => word.clone(),
            Cell::Count(count) => count.to_string(),
            Cell::Real(value, style) => show(*value, *style),
        }
    }

    /// Returns the exact form for machines; missing is empty.
    pub fn exact(&self) -> String {
        match self {
            Cell::Missing => String::new(),
            Cell::Word(word) => word.clone(),
            Cell::Count(count) => count.to_string(),
            Cell::Real(value, _) => format!("{value:?}"),
        }
    }

    fn is_word(&self) -> bool {
        matches!(self, Cell::Word(_))
    }
}

fn show(value: f64, style: Style) -> String {
    match style {
        Style::Fixed(decimals) => format!("{value:.decimals$}"),
        Style::Power if value == 0.0 => "0".to_owned(),
        Style::Power => format!("{value:.1e}"),
        Style::Percent => percent(value),
        Style::Significant => significant(value),
    }
}

/// Shows a share in whole percent; what is neither none nor all never reads so.
fn percent(share: f64) -> String {
    let rounded = (100.0 * share).round();
    if rounded == 0.0 && share > 0.0 {
        "<1 %".to_owned()
    } else if rounded == 100.0 && share < 1.0 {
        ">99 %".to_owned()
    } else {
        format!("{rounded:.0} %")
    }
}

/// Shows three significant digits; whole numbers below 100,000 as they are.
fn significant(value: f64) -> String {
    let size = value.abs();
    if size < 1e5 && value.fract() == 0.0 {
        return format!("{value:.0}");
    }
    if !(1e-3..1e5).contains(&size) {
        return format!("{value:.1e}");
    }
    let decimals = (2 - size.log10().floor() as i32).max(0) as usize;
    format!("{value:.decimals$}")
}

impl Table {
    /// Returns the rows that the forms for people show.
    fn shown_rows(&self) -> &[Vec<Cell>] {
        &self.rows[..self.rows.len().min(MOST_ROWS)]
    }

    /// Says how many rows are left out in the forms for people; nothing when all are there.
    pub fn omission(&self) -> Option<String> {
        (self.rows.len() > MOST_ROWS).then(|| {
            format!(
                "The first {MOST_ROWS} of {} rows; all are in {}.csv.",
                self.rows.len(),
                self.name
            )
        })
    }

    /// Returns whether a column is set to the left: the first two and columns of words.
    pub fn is_left(&self, at: usize) -> bool {
        let words = |row: &Vec<Cell>| row[at].is_word() || row[at] == Cell::Missing;
        at < 2 || (self.rows.iter().any(|row| row[at].is_word()) && self.rows.iter().all(words))
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn numbers_read_well() {
        let texts = [0.0, 3.0, 0.0123456, 12.3456, 1234.56, 123456.0, 1e-5].map(significant);
        assert_eq!(texts, ["0", "3", "0.0123", "12.3", "1235", "1.2e5", "1.0e-5"]);
    }

    #[test]
    fn shares_never_round_to_none_or_all() {
        let texts = [0.0, 0.001, 0.5, 0.999, 1.0].map(percent);
        assert_eq!(texts, ["0 %", "<1 %", "50 %", ">99 %", "100 %"]);
    }
}
