//! Tables of the page: caption, filter, explained columns, cells with exact values to sort by.

use std::collections::BTreeSet;

use maud::{Markup, Render, html};

use super::MOST_TABLE_ROWS;
use crate::tables::{Cell, Nature, OVERALL, Table};

/// What the cells of a column hold.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(super) enum Kind {
    Words,
    /// Words that need room for a sentence or a long id.
    Prose,
    Numbers,
}

/// A column.
pub(super) struct Head {
    pub(super) name: String,
    pub(super) heading: String,
    pub(super) help: String,
    pub(super) kind: Kind,
}

impl Head {
    /// Makes a column.
    pub(super) fn new(name: &str, heading: &str, help: &str, kind: Kind) -> Self {
        Head { name: name.to_owned(), heading: heading.to_owned(), help: help.to_owned(), kind }
    }
}

/// What the script sorts a cell by.
pub(super) enum Key {
    /// Always last.
    Missing,
    /// The exact number.
    Number(String),
    /// The text of the cell.
    Text,
}

/// A cell.
pub(super) struct Entry {
    pub(super) shown: Markup,
    pub(super) key: Key,
}

impl Entry {
    /// Makes a cell of text.
    pub(super) fn text(text: &str) -> Self {
        if text.is_empty() {
            return Entry { shown: "-".render(), key: Key::Missing };
        }
        Entry { shown: text.render(), key: Key::Text }
    }

    /// Makes a cell from a cell of a table model.
    pub(super) fn of(cell: &Cell) -> Self {
        let key = match cell {
            Cell::Missing => Key::Missing,
            Cell::Word(_) => Key::Text,
            Cell::Count(_) | Cell::Real(..) => Key::Number(cell.exact()),
        };
        Entry { shown: cell.shown().render(), key }
    }
}

/// Whether a table has a line of filters.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(super) enum Filters {
    Offered,
    LeftOut,
}

/// A table. Its first two columns are the family and the method unless filters are left out.
pub(super) struct Grid {
    pub(super) id: String,
    pub(super) title: String,
    pub(super) caption: Markup,
    pub(super) heads: Vec<Head>,
    pub(super) rows: Vec<Row>,
    pub(super) omission: Option<String>,
    /// What stands in the table's place on paper, when it is too long for it.
    pub(super) on_paper: Option<String>,
    pub(super) note: Markup,
    pub(super) filters: Filters,
    pub(super) class: &'static str,
}

/// A row.
pub(super) struct Row {
    pub(super) family: String,
    pub(super) method: String,
    pub(super) entries: Vec<Entry>,
}

/// Rows from which on a table scrolls under its own headings.
const TALL: usize = 24;

/// Rows from which on a table is left out on paper, unless the reader has narrowed it down.
const PAPER_ROWS: usize = 150;

/// Letters from which on a word needs room.
const LONG: usize = 32;

/// Columns from which on a table is printed across the long side of the paper.
const WIDE: usize = 10;

impl Grid {
    /// Makes the table of a table model, at most [`MOST_TABLE_ROWS`] long.
    pub(super) fn of(table: &Table, id: String) -> Self {
        let head = |(at, column): (usize, &crate::tables::Column)| {
            let measured = match column.nature {
                Nature::Stable => "",
                Nature::Measured => " Measured: it differs from run to run.",
            };
            let long = |row: &Vec<Cell>| matches!(&row[at], Cell::Word(word) if word.len() > LONG);
            let kind = match table.is_left(at) {
                false => Kind::Numbers,
                true if at >= 2 && table.rows.iter().any(long) => Kind::Prose,
                true => Kind::Words,
            };
            let help = format!("{}{measured}", column.help);
            Head::new(column.name, &column.plain_heading(), &help, kind)
        };
        let row = |cells: &Vec<Cell>| Row {
            family: cells.first().map(Cell::exact).unwrap_or_default(),
            method: cells.get(1).map(Cell::exact).unwrap_or_default(),
            entries: cells.iter().map(Entry::of).collect(),
        };
        let omission = (table.rows.len() > MOST_TABLE_ROWS).then(|| {
            format!(
                "The first {MOST_TABLE_ROWS} of {} rows; sorting and filtering see these alone. All rows are \
                 in tables/{}.csv.",
                table.rows.len(),
                table.name
            )
        });
        let on_paper = (table.rows.len() > PAPER_ROWS).then(|| {
            format!(
                "On paper this table of {} rows is left out unless it is narrowed down before printing; \
                 tables/{}.csv holds all of it.",
                table.rows.len(),
                table.name
            )
        });
        Grid {
            id,
            title: table.title.to_owned(),
            caption: table.caption.render(),
            heads: table.columns.iter().enumerate().map(head).collect(),
            rows: table.rows.iter().take(MOST_TABLE_ROWS).map(row).collect(),
            omission,
            on_paper,
            note: html! {},
            filters: Filters::Offered,
            class: "",
        }
    }
}

impl Render for Grid {
    fn render(&self) -> Markup {
        let tall = if self.rows.len() > TALL { "tall" } else { "" };
        let wide = if self.heads.len() >= WIDE { "wide" } else { "" };
        let label = format!("{}-title", self.id);
        let long = if self.on_paper.is_some() { "long" } else { "" };
        html! {
            section class=(classes(&["grid", wide, long, self.class])) id=(self.id) aria-labelledby=(label) data-grid {
                h3 id=(label) { (self.title) " " (anchor(&self.id, &self.title)) }
                p.caption { (self.caption) }
                @if let Some(omission) = &self.omission { p.omission { (omission) } }
                @if let Some(said) = &self.on_paper { p.on-paper { (said) } }
                @if self.rows.is_empty() {
                    p.empty { "No rows." }
                } @else {
                    @if self.filters == Filters::Offered { (self.controls()) }
                    div class=(classes(&["scroll", tall])) tabindex="0" role="region" aria-label={ (self.title) ", table" } {
                        (self.table(&label))
                    }
                }
                (self.note)
                (self.explanations())
            }
        }
    }
}

impl Grid {
    fn table(&self, label: &str) -> Markup {
        let pinned = self.filters == Filters::Offered;
        html! {
            table role="table" aria-labelledby=(label) class=[pinned.then_some("pinned")] {
                thead role="rowgroup" {
                    tr role="row" {
                        @for head in &self.heads {
                            th role="columnheader" scope="col" class=[class(head.kind)] title=(head.help) {
                                (head.heading)
                            }
                        }
                    }
                }
                tbody role="rowgroup" {
                    @for row in &self.rows { (self.row(row)) }
                }
            }
        }
    }

    fn row(&self, row: &Row) -> Markup {
        let filtered = self.filters == Filters::Offered;
        let data = |word: &str| filtered.then(|| word.to_owned());
        let heads = if filtered { 2 } else { 1 };
        html! {
            tr role="row" class=[(filtered && row.family == OVERALL).then_some("overall")]
                data-family=[data(&row.family)] data-method=[data(&row.method)] {
                @for (at, (entry, head)) in row.entries.iter().zip(&self.heads).enumerate() {
                    @let (value, class) = match &entry.key {
                        Key::Missing => (None, Some("none")),
                        Key::Number(value) => (Some(value), class(head.kind)),
                        Key::Text => (None, class(head.kind)),
                    };
                    @let label = (!filtered).then_some(&head.heading);
                    @if at < heads {
                        th role="rowheader" scope="row" class=[class] data-v=[value] { (entry.shown) }
                    } @else {
                        td role="cell" class=[class] data-v=[value] data-label=[label] { (entry.shown) }
                    }
                }
            }
        }
    }

    /// Writes the filters; the script shows them.
    fn controls(&self) -> Markup {
        let pick = |what: &str, words: BTreeSet<&str>| {
            html! {
                label {
                    span { (what) }
                    select data-filter=(what) {
                        option value="" { "any" }
                        @for word in words { option value={ "=" (word) } { (word) } }
                    }
                }
            }
        };
        let count = self.rows.len();
        html! {
            form.controls hidden role="search" aria-label={ "Filter of the table " (self.title) } {
                label { span { "contains" } input type="text" data-filter="text" autocomplete="off" spellcheck="false"; }
                (pick("family", self.rows.iter().map(|row| row.family.as_str()).collect()))
                (pick("method", self.rows.iter().map(|row| row.method.as_str()).collect()))
                button type="reset" { "show all" }
                output.count role="status" aria-live="polite" { (count) " of " (count) " rows" }
            }
        }
    }

    fn explanations(&self) -> Markup {
        html! {
            details.columns {
                summary { "Columns explained" span.unseen { ": " (self.title) } }
                dl {
                    @for head in &self.heads {
                        dt { (head.heading) @if head.name != head.heading { " " code { (head.name) } } }
                        dd { (head.help) }
                    }
                }
            }
        }
    }
}

/// Joins the classes that are there.
fn classes(names: &[&str]) -> String {
    names.iter().copied().filter(|name| !name.is_empty()).collect::<Vec<_>>().join(" ")
}

fn class(kind: Kind) -> Option<&'static str> {
    match kind {
        Kind::Words => None,
        Kind::Prose => Some("prose"),
        Kind::Numbers => Some("number"),
    }
}

/// Writes the link to a part of the page that stands behind its heading.
pub(super) fn anchor(id: &str, title: &str) -> Markup {
    html! { a.anchor href={ "#" (id) } aria-label={ "Link to " (title) } { "#" } }
}
