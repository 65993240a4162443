//! Tables as LaTeX with the rules of the package booktabs; long ones with the package longtable.

use crate::tables::{Cell, Table};

/// Most rows that stand on one page.
const PAGE_ROWS: usize = 45;

impl Table {
    /// Returns the table as LaTeX: `tabular` in a `table` float, or a `longtable` when it has more
    /// rows than a page. Needs `booktabs`, and `longtable` in the second case.
    pub fn to_latex(&self) -> String {
        let spec: String =
            (0..self.columns.len()).map(|at| if self.is_left(at) { 'l' } else { 'r' }).collect();
        let caption = format!("\\caption{{{}. {}}}", escaped(self.title), escaped(&self.note()));
        let label = format!("\\label{{tab:{}}}", self.name);
        let (head, body) = (self.latex_head(), self.latex_body());
        let long = self.shown_rows().len() > PAGE_ROWS;
        let packages = if long { "booktabs, longtable" } else { "booktabs" };
        let mut out = format!("% Packages: {packages}.\n");
        out += &if long {
            format!(
                "\\begin{{longtable}}{{@{{}}{spec}@{{}}}}\n{caption}{label}\\\\\n\\toprule\n{head}\\midrule\n\
                 \\endfirsthead\n\\toprule\n{head}\\midrule\n\\endhead\n\\bottomrule\n\\endfoot\n{body}\
                 \\end{{longtable}}\n"
            )
        } else {
            format!(
                "\\begin{{table}}\n\\centering\n{caption}\n{label}\n\\begin{{tabular}}{{@{{}}{spec}@{{}}}}\n\
                 \\toprule\n{head}\\midrule\n{body}\\bottomrule\n\\end{{tabular}}\n\\end{{table}}\n"
            )
        };
        out
    }

    fn note(&self) -> String {
        match self.omission() {
            Some(omission) => format!("{} {omission}", self.caption),
            None => self.caption.clone(),
        }
    }

    /// Returns the heading, a line for each line of the longest one; short ones stand at the bottom.
    fn latex_head(&self) -> String {
        let heads: Vec<Vec<&str>> =
            self.columns.iter().map(|column| column.heading.split('\n').collect()).collect();
        let depth = heads.iter().map(Vec::len).max().unwrap_or(1);
        let line = |level: usize| {
            let cells: Vec<String> = heads
                .iter()
                .map(|lines| {
                    let at = (level + lines.len()).checked_sub(depth);
                    at.map_or(String::new(), |at| escaped(lines[at]))
                })
                .collect();
            format!("{} \\\\\n", cells.join(" & "))
        };
        (0..depth).map(line).collect()
    }

    /// Returns the rows; a family's name stands in its first row only, with room above it.
    fn latex_body(&self) -> String {
        let mut out = String::new();
        let mut before: Option<&Cell> = None;
        for row in self.shown_rows() {
            let first = before != Some(&row[0]);
            if first && before.is_some() {
                out += "\\addlinespace\n";
            }
            let cells: Vec<String> = row
                .iter()
                .enumerate()
                .map(|(at, cell)| if at == 0 && !first { String::new() } else { latex_cell(cell) })
                .collect();
            out += &format!("{} \\\\\n", cells.join(" & "));
            before = Some(&row[0]);
        }
        out
    }
}

/// Returns a cell; powers of ten and minus signs are set as mathematics.
fn latex_cell(cell: &Cell) -> String {
    let shown = cell.shown();
    match cell {
        Cell::Missing => "--".to_owned(),
        Cell::Word(_) | Cell::Count(_) => escaped(&shown),
        Cell::Real(..) => match shown.split_once('e') {
            Some((digits, power)) => format!("${digits}\\cdot10^{{{power}}}$"),
            None if shown.starts_with('-') => format!("${shown}$"),
            None => escaped(&shown),
        },
    }
}

/// Escapes what LaTeX would take as a command; line breaks become blanks.
fn escaped(text: &str) -> String {
    let mut out = String::new();
    for sign in text.chars() {
        match sign {
            '\\' => out += "\\textbackslash{}",
            '~' => out += "\\textasciitilde{}",
            '^' => out += "\\textasciicircum{}",
            '<' => out += "\\textless{}",
            '>' => out += "\\textgreater{}",
            '|' => out += "\\textbar{}",
            '"' => out += "\\textquotedbl{}",
            '&' | '%' | '$' | '#' | '_' | '{' | '}' => {
                out.push('\\');
                out.push(sign);
            }
            '\n' | '\r' => out.push(' '),
            sign if sign.is_control() => {}
            sign => out.push(sign),
        }
    }
    // Two hyphens would be set as a dash.
    out.replace("--", "-{}-")
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::tables::Style;

    #[test]
    fn text_is_escaped_and_powers_are_set() {
        assert_eq!(
            escaped("a_b & 50 % {x} <C, X> --opt"),
            "a\\_b \\& 50 \\% \\{x\\} \\textless{}C, X\\textgreater{} -{}-opt"
        );
        assert_eq!(latex_cell(&Cell::Real(2.5e-9, Style::Power)), "$2.5\\cdot10^{-9}$");
        assert_eq!(latex_cell(&Cell::Real(-2.0, Style::Fixed(1))), "$-2.0$");
        assert_eq!(latex_cell(&Cell::Real(0.25, Style::Percent)), "25 \\%");
    }
}
