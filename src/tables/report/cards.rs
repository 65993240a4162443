//! Cards of methods and families.

use maud::{Markup, html};

use super::CardText;
use super::encode::Ids;
use crate::record::MethodRecord;

/// Writes cards; `taking_part` names the methods of the run made from each card.
pub(super) fn cards(
    cards: &[CardText],
    prefix: &str,
    taking_part: &[MethodRecord],
    ids: &mut Ids,
) -> Markup {
    html! {
        @if cards.is_empty() { p { "None." } }
        @for card in cards { (one(card, &ids.make(prefix, &card.id), taking_part)) }
    }
}

fn one(card: &CardText, id: &str, taking_part: &[MethodRecord]) -> Markup {
    let entrants: Vec<&MethodRecord> =
        taking_part.iter().filter(|method| method.id == card.id).collect();
    html! {
        details.card id=(id) {
            summary { h3 { (card.id) } " " span { (card.title) } }
            dl {
                @for (name, text) in &card.fields {
                    dt { (name) }
                    dd { @for paragraph in text.lines() { p { (paragraph) } } }
                }
                @for method in entrants {
                    dt { "in this run as " (method.label) }
                    dd {
                        @if method.options.is_empty() { p { "without options" } }
                        @else { p { code { (method.options) } } }
                    }
                }
            }
            @if !card.settings.is_empty() {
                h4 { "Settings" }
                dl {
                    @for [name, values, meaning] in &card.settings {
                        dt { code { (name) } " " span.values { (values) } }
                        dd { p { (meaning) } }
                    }
                }
            }
        }
    }
}
