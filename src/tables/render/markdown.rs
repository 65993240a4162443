//! Tables as Markdown.

use crate::tables::Table;

impl Table {
    /// Returns the table as Markdown: title, caption, rows.
    pub fn to_markdown(&self) -> String {
        let cell = |text: &str| text.replace('\\', "\\\\").replace('|', "\\|");
        let line = |cells: Vec<String>| format!("| {} |\n", cells.join(" | "));
        let mut out = format!("## {}\n\n{}\n\n", self.title, self.caption);
        out += &line(self.columns.iter().map(|column| cell(&column.plain_heading())).collect());
        let rule = (0..self.columns.len()).map(|at| if self.is_left(at) { "---" } else { "---:" });
        out += &format!("|{}|\n", rule.collect::<Vec<_>>().join("|"));
        for row in self.shown_rows() {
            out += &line(row.iter().map(|value| cell(&value.shown())).collect());
        }
        if let Some(omission) = self.omission() {
            out += &format!("\n{omission}\n");
        }
        out
    }
}
