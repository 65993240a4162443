//! What a table is before it is rendered.

/// Whether a column is the same in two runs of one plan.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Nature {
    /// The same in every run.
    Stable,
    /// A time or a memory figure.
    Measured,
}

/// Whether a column stands in the summary on the terminal.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Reach {
    /// In files and on the terminal.
    Everywhere,
    /// In files only.
    Files,
}

/// A column.
#[derive(Clone, Debug, PartialEq)]
pub struct Column {
    /// Name in CSV files.
    pub name: &'static str,
    /// Heading for people, at most two lines.
    pub heading: &'static str,
    /// What it holds, one sentence with its unit.
    pub help: &'static str,
    /// Whether it is the same in two runs.
    pub nature: Nature,
    /// Whether it stands on the terminal.
    pub reach: Reach,
}

impl Column {
    /// Makes a column that is the same in every run and stands everywhere.
    pub(super) fn stable(name: &'static str, heading: &'static str, help: &'static str) -> Self {
        Column { name, heading, help, nature: Nature::Stable, reach: Reach::Everywhere }
    }

    /// Makes a column of time or memory figures that stands everywhere.
    pub(super) fn measured(name: &'static str, heading: &'static str, help: &'static str) -> Self {
        Column { name, heading, help, nature: Nature::Measured, reach: Reach::Everywhere }
    }

    /// Returns the heading in one line.
    pub fn plain_heading(&self) -> String {
        self.heading.replace("-\n", "").replace('\n', " ")
    }

    /// Leaves the column out of the summary on the terminal.
    pub(super) fn in_files(self) -> Self {
        Column { reach: Reach::Files, ..self }
    }
}

/// How people read a number; CSV files hold its shortest exact form.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Style {
    /// This many decimals.
    Fixed(usize),
    /// Three significant digits, with a power of ten when it is very small or large.
    Significant,
    /// One decimal and a power of ten.
    Power,
    /// A share of one, read in percent without decimals unless it would round to 0 or 100.
    Percent,
}

/// A cell.
#[derive(Clone, Debug, PartialEq)]
pub enum Cell {
    /// Nothing was measured.
    Missing,
    /// A word.
    Word(String),
    /// A count.
    Count(u64),
    /// A number.
    Real(f64, Style),
}

impl Cell {
    /// Makes a number, or a missing cell.
    pub fn real(value: Option<f64>, style: Style) -> Self {
        value
            .filter(|value| value.is_finite())
            .map_or(Cell::Missing, |value| Cell::Real(value, style))
    }

    /// Makes a share, missing when there is nothing to share.
    pub fn share(part: usize, whole: usize) -> Self {
        if whole == 0 {
            Cell::Missing
        } else {
            Cell::Real(part as f64 / whole as f64, Style::Percent)
        }
    }

    /// Makes a word.
    pub fn word(word: &str) -> Self {
        Cell::Word(word.to_owned())
    }

    /// Makes a count.
    pub fn count(count: usize) -> Self {
        Cell::Count(count as u64)
    }
}

/// A table.
#[derive(Clone, Debug, PartialEq)]
pub struct Table {
    /// Stem of its file names.
    pub name: &'static str,
    /// Title.
    pub title: &'static str,
    /// Units, rules and sample size, whole sentences.
    pub caption: String,
    /// Columns.
    pub columns: Vec<Column>,
    /// Rows, each as long as `columns`. The first cell is the family, the second the method.
    pub rows: Vec<Vec<Cell>>,
}

impl Table {
    /// Returns the table without its measured columns.
    pub fn stable(&self) -> Table {
        let keep: Vec<bool> =
            self.columns.iter().map(|column| column.nature == Nature::Stable).collect();
        self.keeping(&keep)
    }

    /// Returns the table with the flagged columns only.
    pub(super) fn keeping(&self, keep: &[bool]) -> Table {
        fn pick<T: Clone>(items: &[T], keep: &[bool]) -> Vec<T> {
            items
                .iter()
                .zip(keep)
                .filter(|(_, keep)| **keep)
                .map(|(item, _)| item.clone())
                .collect()
        }
        Table {
            columns: pick(&self.columns, keep),
            rows: self.rows.iter().map(|row| pick(row, keep)).collect(),
            ..self.clone()
        }
    }
}
