//! The small change of the renderers: numbers for people, wrapped and aligned text.

use super::Estimate;

/// Width of the text form, in characters; only commands and names may be longer.
pub(super) const WIDTH: usize = 100;

/// Most names listed in text; the rest is counted.
pub(super) const LISTED: usize = 20;

/// Shows a share as signed percentage points.
pub(super) fn points(share: f64) -> String {
    format!("{:+.1}", 100.0 * share + 0.0)
}

/// Shows a share in percent.
pub(super) fn percent(share: f64) -> String {
    format!("{:.1} %", 100.0 * share)
}

/// Shows a confidence in percent, with as many decimals as it has, at most three.
pub(super) fn confidence(value: f64) -> String {
    // Rounded down, so that a confidence is never overstated; the small term takes up rounding.
    format!("{} %", plain((1e5 * value + 1e-6).floor() / 1e3))
}

/// Shows a number of the user as it was given.
pub(super) fn plain(value: f64) -> String {
    let rounded = (value * 1e9).round() / 1e9;
    format!("{rounded}")
}

/// Shows a probability.
pub(super) fn probability(p: f64) -> String {
    if p < 1e-4 { "< 0.0001".to_owned() } else { format!("{p:.4}") }
}

/// Shows three significant digits; very small and large numbers with a power of ten.
pub(super) fn significant(value: f64) -> String {
    let size = value.abs();
    if size == 0.0 {
        return "0".to_owned();
    }
    if !(1e-3..1e5).contains(&size) {
        return format!("{value:.2e}");
    }
    let decimals = (2 - size.log10().floor() as i32).max(0) as usize;
    format!("{value:.decimals$}")
}

/// Shows both ends of an interval; an unbounded end says so.
pub(super) fn ends(estimate: &Estimate, show: impl Fn(f64) -> String) -> String {
    let end = |end: Option<f64>| end.map_or("unbounded".to_owned(), &show);
    format!("[{}, {}]", end(estimate.low), end(estimate.high))
}

/// Shows a count and its noun.
pub(super) fn counted(count: usize, one: &str, many: &str) -> String {
    if count == 1 { format!("1 {one}") } else { format!("{count} {many}") }
}

/// Wraps words to [`WIDTH`]; the first line starts with `first`, the others with `rest`.
pub(super) fn wrapped(text: &str, first: &str, rest: &str) -> String {
    let mut out = String::new();
    let mut line = first.to_owned();
    let mut blank = true;
    for word in text.split_whitespace() {
        if !blank && line.chars().count() + 1 + word.chars().count() > WIDTH {
            out += &format!("{}\n", line.trim_end());
            rest.clone_into(&mut line);
            blank = true;
        }
        if !blank {
            line.push(' ');
        }
        line += word;
        blank = false;
    }
    out + line.trim_end() + "\n"
}

/// Underlines a heading.
pub(super) fn heading(text: &str, mark: char) -> String {
    let rule: String = std::iter::repeat_n(mark, text.chars().count()).collect();
    format!("{text}\n{rule}\n")
}

/// Aligns rows: the first column to the left, cut so that a line fits; the others to the right.
pub(super) fn aligned(rows: &[Vec<String>]) -> String {
    let columns = rows.iter().map(Vec::len).max().unwrap_or(0);
    let mut widths: Vec<usize> = (0..columns)
        .map(|at| {
            let cells = rows.iter().filter_map(|row| row.get(at));
            cells.map(|cell| cell.chars().count()).max().unwrap_or(0)
        })
        .collect();
    if columns > 0 {
        let others: usize = widths[1..].iter().map(|width| width + 2).sum();
        widths[0] = widths[0].min(WIDTH.saturating_sub(others + 2)).max(8);
    }
    let mut out = String::new();
    for row in rows {
        let mut line = String::from("  ");
        for (at, cell) in row.iter().enumerate() {
            let width = widths[at];
            line += &if at == 0 {
                format!("{:<width$}", cut(cell, width))
            } else {
                format!("  {cell:>width$}")
            };
        }
        out += &format!("{}\n", line.trim_end());
    }
    out
}

/// Cuts a name that is too long, with a tilde.
fn cut(name: &str, width: usize) -> String {
    if name.chars().count() <= width {
        return name.to_owned();
    }
    let kept: String = name.chars().take(width.saturating_sub(1)).collect();
    format!("{kept}~")
}

/// Makes a word of plain text safe inside Markdown tables, lists and the HTML around them.
pub(super) fn escaped(text: &str) -> String {
    let mut out = String::new();
    for letter in text.chars() {
        match letter {
            '&' => out += "&amp;",
            '<' => out += "&lt;",
            '>' => out += "&gt;",
            '\\' | '|' | '*' | '_' | '`' | '[' | ']' => {
                out.push('\\');
                out.push(letter);
            }
            '\n' | '\r' => out.push(' '),
            _ => out.push(letter),
        }
    }
    out
}

/// Makes a Markdown row.
pub(super) fn row(cells: &[String]) -> String {
    format!("| {} |\n", cells.join(" | "))
}

/// Makes the rule below a Markdown head: the first columns to the left, the others to the right.
pub(super) fn rule(lefts: usize, columns: usize) -> String {
    let marks = (0..columns).map(|at| if at < lefts { "---" } else { "---:" });
    format!("|{}|\n", marks.collect::<Vec<_>>().join("|"))
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn numbers_read_well() {
        assert_eq!([0.1, -0.025, 0.0, -0.0].map(points), ["+10.0", "-2.5", "+0.0", "+0.0"]);
        assert_eq!([0.95, 0.9, 0.99848].map(confidence), ["95 %", "90 %", "99.848 %"]);
        assert_eq!([0.0312, 0.00001, 1.0].map(probability), ["0.0312", "< 0.0001", "1.0000"]);
        assert_eq!(
            [0.0, 0.83456, 12.34, 1234.0, 2e6].map(significant),
            ["0", "0.835", "12.3", "1234", "2.00e6"]
        );
        assert_eq!([2.0, 0.95, 0.05 / 2.0].map(plain), ["2", "0.95", "0.025"]);
    }

    #[test]
    fn lines_are_wrapped_and_names_cut() {
        let text = wrapped(&"word ".repeat(60), "1. ", "   ");
        assert!(text.lines().all(|line| line.chars().count() <= WIDTH));
        assert!(text.starts_with("1. word") && text.lines().nth(1).unwrap().starts_with("   word"));
        let rows = [vec!["n".repeat(200), "1".to_owned()], vec!["m".to_owned(), "22".to_owned()]];
        assert!(aligned(&rows).lines().all(|line| line.chars().count() <= WIDTH));
    }

    #[test]
    fn marks_are_escaped() {
        assert_eq!(escaped("a|b<c>_d"), "a\\|b&lt;c&gt;\\_d");
    }
}
