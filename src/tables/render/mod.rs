//! Renderers: a table as CSV, as Markdown and as aligned text. They return text and touch no file.

use super::model::Reach;
use super::{Cell, Style, Table};

impl Cell {
    /// Returns the form for people.
    fn shown(&self) -> String {
        match self {
            Cell::Missing => "-".to_owned(),
            Cell::Word(word) => word.clone(),
            Cell::Count(count) => count.to_string(),
            Cell::Real(value, style) => show(*value, *style),
        }
    }

    /// Returns the exact form for machines; missing is empty.
    fn exact(&self) -> String {
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
    /// Returns the table as CSV: a row of column names, then exact numbers; shares are of one.
    pub fn to_csv(&self) -> String {
        let mut writer = csv::Writer::from_writer(Vec::new());
        // Writing to memory cannot fail, and rows are as long as the columns.
        writer
            .write_record(self.columns.iter().map(|column| column.name))
            .expect("memory takes the row");
        for row in &self.rows {
            writer.write_record(row.iter().map(Cell::exact)).expect("memory takes the row");
        }
        let bytes = writer.into_inner().expect("memory takes the rows");
        String::from_utf8(bytes).expect("cells are text")
    }

    /// Returns the table as Markdown: title, caption, rows.
    pub fn to_markdown(&self) -> String {
        let cell = |text: &str| text.replace('\\', "\\\\").replace('|', "\\|");
        let line = |cells: Vec<String>| format!("| {} |\n", cells.join(" | "));
        let mut out = format!("## {}\n\n{}\n\n", self.title, self.caption);
        out += &line(
            self.columns
                .iter()
                .map(|column| cell(&column.heading.replace("-\n", "").replace('\n', " ")))
                .collect(),
        );
        let rule = (0..self.columns.len()).map(|at| if self.is_left(at) { "---" } else { "---:" });
        out += &format!("|{}|\n", rule.collect::<Vec<_>>().join("|"));
        for row in &self.rows {
            out += &line(row.iter().map(|value| cell(&value.shown())).collect());
        }
        out
    }

    /// Returns the table as aligned text of at most `width` characters a line: rows under the name
    /// of their family, files-only columns left out. The method's column is cut when it must be.
    pub fn to_text(&self, width: usize) -> String {
        let keep: Vec<bool> =
            self.columns.iter().map(|column| column.reach == Reach::Everywhere).collect();
        let table = self.keeping(&keep);
        let lefts: Vec<bool> = (0..table.columns.len()).map(|at| table.is_left(at)).collect();
        let widths = table.widths(width);
        let mut out = format!("{}\n{}\n", self.title, "=".repeat(self.title.len()));
        out += &wrapped(&self.caption, width);
        let heads: Vec<Vec<&str>> =
            table.columns.iter().map(|column| column.heading.split('\n').collect()).collect();
        let depth = heads.iter().map(Vec::len).max().unwrap_or(1);
        for level in 0..depth {
            let cells: Vec<String> = heads
                .iter()
                .map(|lines| {
                    // Short headings stand at the bottom, next to their numbers.
                    let skip = depth - lines.len();
                    level.checked_sub(skip).map_or(String::new(), |at| lines[at].to_owned())
                })
                .collect();
            out += &aligned(&cells[1..], &lefts[1..], &widths[1..]);
        }
        let mut family = String::new();
        for row in &table.rows {
            let shown: Vec<String> = row.iter().map(Cell::shown).collect();
            if shown[0] != family {
                family.clone_from(&shown[0]);
                out += &format!("{}\n", cut(&family, width));
            }
            out += &aligned(&shown[1..], &lefts[1..], &widths[1..]);
        }
        out
    }

    /// Returns whether a column is set to the left: the first two and columns of words.
    fn is_left(&self, at: usize) -> bool {
        at < 2 || (!self.rows.is_empty() && self.rows.iter().all(|row| row[at].is_word()))
    }

    /// Returns the width of each column; the method's gives way so that a line fits into `width`.
    fn widths(&self, width: usize) -> Vec<usize> {
        let mut widths: Vec<usize> = (0..self.columns.len())
            .map(|at| {
                let head = self.columns[at].heading.split('\n').map(str::len).max().unwrap_or(0);
                let body =
                    self.rows.iter().map(|row| row[at].shown().chars().count()).max().unwrap_or(0);
                head.max(body)
            })
            .collect();
        let others: usize = widths[2..].iter().map(|column| column + GAP).sum();
        widths[1] = widths[1].min(width.saturating_sub(INDENT + others)).max(8);
        widths
    }
}

const INDENT: usize = 2;
const GAP: usize = 1;

fn cut(text: &str, width: usize) -> String {
    if text.chars().count() <= width {
        return text.to_owned();
    }
    let kept: String = text.chars().take(width.saturating_sub(1)).collect();
    format!("{kept}~")
}

fn aligned(cells: &[String], lefts: &[bool], widths: &[usize]) -> String {
    let mut line = " ".repeat(INDENT);
    for (at, cell) in cells.iter().enumerate() {
        if at > 0 {
            line += &" ".repeat(GAP);
        }
        let (cell, width) = (cut(cell, widths[at]), widths[at]);
        line += &if lefts[at] { format!("{cell:<width$}") } else { format!("{cell:>width$}") };
    }
    format!("{}\n", line.trim_end())
}

fn wrapped(text: &str, width: usize) -> String {
    let mut out = String::new();
    let mut line = String::new();
    for word in text.split_whitespace() {
        if !line.is_empty() && line.len() + 1 + word.len() > width {
            out += &format!("{line}\n");
            line.clear();
        }
        if !line.is_empty() {
            line.push(' ');
        }
        line += word;
    }
    out + &format!("{line}\n\n")
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
