//! Tables as aligned text for a terminal.

use crate::tables::model::Reach;
use crate::tables::{Cell, Table};

impl Table {
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
