//! The frame of the page: head, contents, and the order of its parts.

use maud::{DOCTYPE, Markup, PreEscaped, html};
use sha2::{Digest, Sha256};

use super::encode::{Ids, base64};
use super::grid::Grid;
use super::pictures::picture;
use super::{Context, cards, failures, glance, job, notes};
use crate::tables::figures::Figure;
use crate::tables::group::in_order;
use crate::tables::{Input, Table};

const STYLE: &str = include_str!("style.css");
const SCRIPT: &str = include_str!("script.js");

/// A part of the page with its heading and what stands in it.
struct Part {
    id: &'static str,
    title: String,
    entries: Vec<(String, String)>,
    body: Markup,
}

/// Writes the whole document.
pub(super) fn document(
    input: &Input<'_>,
    tables: &[Table],
    figures: &[Figure],
    context: &Context,
) -> Markup {
    let parts = parts(input, tables, figures, context);
    let title = title(context);
    html! {
        (DOCTYPE)
        html lang="en" {
            head {
                meta charset="utf-8";
                meta http-equiv="Content-Security-Policy" content=(policy());
                meta name="viewport" content="width=device-width, initial-scale=1";
                meta name="color-scheme" content="light dark";
                meta name="referrer" content="no-referrer";
                link rel="icon" href="data:,";
                title { (title) }
                style { (PreEscaped(STYLE)) }
            }
            body {
                a.skip href="#main" { "Skip to the content" }
                header.masthead {
                    p.kicker { "rankassay report" }
                    h1 { (title) }
                    p.question { (question(input)) }
                    @if notes::suggests_power_network(input, context) {
                        p.warning role="note" { strong { "Power network. " } (notes::POWER_NETWORK) }
                    }
                    @if !context.cautions.is_empty() {
                        p { a href="#cautions" { "Cautions about this run: " (context.cautions.len()) } }
                    }
                }
                div.columns-of-page {
                    (contents(&parts))
                    main id="main" tabindex="-1" {
                        @for part in &parts {
                            @let label = format!("{}-title", part.id);
                            section.part id=(part.id) aria-labelledby=(label) {
                                h2 id=(label) { (part.title) }
                                (part.body)
                            }
                        }
                    }
                }
                footer.foot { p { "Written by rankassay from the records of the run; this file needs no network." } }
                p.unseen #announcer role="status" aria-live="polite" {}
                script { (PreEscaped(SCRIPT)) }
            }
        }
    }
}

/// Allows this page its own style, its own script and embedded images, and nothing from outside.
fn policy() -> String {
    let digest = |text: &str| base64(&Sha256::digest(text.as_bytes()));
    format!(
        "default-src 'none'; style-src 'sha256-{}'; script-src 'sha256-{}'; img-src data:; base-uri 'none'; \
         form-action 'none'",
        digest(STYLE),
        digest(SCRIPT)
    )
}

fn title(context: &Context) -> &str {
    if context.title.trim().is_empty() { "Which heuristic to adopt?" } else { &context.title }
}

fn question(input: &Input<'_>) -> String {
    let noun = |count: usize, one: &str, many: &str| {
        if count == 1 { format!("1 {one}") } else { format!("{count} {many}") }
    };
    let records = input.records;
    if records.is_empty() {
        return "Nothing is recorded yet: this page has no figures to decide from.".to_owned();
    }
    let methods = in_order(records.iter().map(|record| record.method.as_str())).len();
    let families = in_order(records.iter().map(|record| record.family.as_str())).len();
    let instances = in_order(records.iter().map(|record| record.instance.as_str())).len();
    format!(
        "Which heuristic should be adopted to minimise <C, X> subject to A(X) = b, X positive semidefinite, rank X at most r? \
         {} on {} of {}, {} in all, each with the same limit of {} s. An independent referee judged every answer.",
        noun(methods, "method was run", "methods were run"),
        noun(instances, "instance", "instances"),
        noun(families, "family", "families"),
        noun(records.len(), "trial", "trials"),
        input.wall_limit_s
    )
}

fn contents(parts: &[Part]) -> Markup {
    html! {
        nav.contents aria-label="Contents" {
            details open data-contents {
                summary { "Contents" }
                ul {
                    @for part in parts {
                        li {
                            a href={ "#" (part.id) } { (part.title) }
                            @if !part.entries.is_empty() {
                                ul {
                                    @for (id, title) in &part.entries {
                                        li { a href={ "#" (id) } { (title) } }
                                    }
                                }
                            }
                        }
                    }
                }
            }
        }
    }
}

fn parts(input: &Input<'_>, tables: &[Table], figures: &[Figure], context: &Context) -> Vec<Part> {
    let mut ids = Ids::default();
    let mut parts = vec![
        plain("glance", "At a glance", html! { (glance::grid(input)) }),
        tables_part(input, tables, context, &mut ids),
        figures_part(figures, &mut ids),
        plain("job", "The job", job::job(input, context)),
        plain(
            "methods",
            "Methods",
            cards::cards(&context.methods, "method-", input.methods, &mut ids),
        ),
        plain("families", "Families", cards::cards(&context.families, "family-", &[], &mut ids)),
    ];
    let count = failures::unsolved(input).len();
    parts.push(plain(
        "failures",
        &format!("Failures ({count})"),
        failures_body(input, context, count),
    ));
    parts.push(plain("cautions", "Cautions", notes::cautions(input, context)));
    parts.push(plain("verdicts", "What the verdicts mean", notes::verdicts(input)));
    parts.push(plain("rules", "Ties, limits and repeats", notes::rules(input)));
    parts
}

fn plain(id: &'static str, title: &str, body: Markup) -> Part {
    Part { id, title: title.to_owned(), entries: Vec::new(), body }
}

fn failures_body(input: &Input<'_>, context: &Context, count: usize) -> Markup {
    html! {
        @if count == 0 {
            p { "No trial ended with another verdict than solved." }
        } @else {
            @if context.runs.len() > 1 {
                p {
                    "The records come from several run folders; each command names the one its trial was recorded in, where \
                     that is known."
                }
            }
            (failures::grid(input, context))
        }
    }
}

fn tables_part(input: &Input<'_>, tables: &[Table], context: &Context, ids: &mut Ids) -> Part {
    let grids: Vec<Grid> =
        tables.iter().map(|table| Grid::of(table, ids.make("table-", table.name))).collect();
    Part {
        id: "tables",
        title: "Tables".to_owned(),
        entries: grids.iter().map(|grid| (grid.id.clone(), grid.title.clone())).collect(),
        body: html! {
            @if notes::suggests_power_network(input, context) { p.warning { (notes::POWER_NETWORK) } }
            @if grids.is_empty() { p { "None." } }
            @for grid in &grids { (grid) }
        },
    }
}

fn figures_part(figures: &[Figure], ids: &mut Ids) -> Part {
    let named: Vec<(String, &Figure)> =
        figures.iter().map(|figure| (ids.make("figure-", &figure.name), figure)).collect();
    Part {
        id: "figures",
        title: "Figures".to_owned(),
        entries: named.iter().map(|(id, figure)| (id.clone(), figure.title.clone())).collect(),
        body: html! {
            @if named.is_empty() { p { "None." } }
            @for (id, figure) in &named { (picture(figure, id)) }
        },
    }
}
