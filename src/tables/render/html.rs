//! Tables as HTML.

use maud::{DOCTYPE, Markup, html};

use crate::tables::Table;

/// Layout of a table that stands alone.
const STYLE: &str = "body{font:16px/1.5 system-ui,sans-serif;margin:2rem;color:#111;background:#fff}\
table{border-collapse:collapse;font-size:14px;font-variant-numeric:tabular-nums}\
caption{caption-side:top;text-align:left;max-width:48rem;margin-bottom:1rem}\
th,td{padding:.25rem .6rem;border-bottom:1px solid #ccc;vertical-align:bottom}\
th{text-align:left;border-bottom:2px solid #111}.n{text-align:right}.w{overflow-x:auto}";

impl Table {
    /// Returns the table as an HTML page of its own, without scripts.
    pub fn to_html(&self) -> String {
        let page = html! {
            (DOCTYPE)
            html lang="en" {
                head {
                    meta charset="utf-8";
                    meta name="viewport" content="width=device-width, initial-scale=1";
                    title { (self.title) }
                    style { (maud::PreEscaped(STYLE)) }
                }
                body {
                    main {
                        h1 { (self.title) }
                        div class="w" tabindex="0" role="region" aria-label=(self.title) {
                            (self.html_table())
                        }
                        (self.html_columns())
                    }
                }
            }
        };
        page.into_string()
    }

    fn html_table(&self) -> Markup {
        let classes: Vec<&str> =
            (0..self.columns.len()).map(|at| if self.is_left(at) { "" } else { "n" }).collect();
        html! {
            table {
                caption {
                    (self.caption)
                    @if let Some(omission) = self.omission() { " " (omission) }
                }
                thead {
                    tr {
                        @for (at, column) in self.columns.iter().enumerate() {
                            th scope="col" class=(classes[at]) title=(column.help) { (column.plain_heading()) }
                        }
                    }
                }
                tbody {
                    @for row in self.shown_rows() {
                        tr {
                            @for (at, cell) in row.iter().enumerate() {
                                td class=(classes[at]) { (cell.shown()) }
                            }
                        }
                    }
                }
            }
        }
    }

    fn html_columns(&self) -> Markup {
        html! {
            h2 { "Columns" }
            dl {
                @for column in &self.columns {
                    dt { (column.plain_heading()) }
                    dd { (column.help) }
                }
            }
        }
    }
}
