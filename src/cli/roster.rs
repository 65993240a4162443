//! `rankassay roster`.

use std::collections::BTreeSet;

use clap::Args;
use serde_json::{Value, json};

use super::Ended;
use super::measured::{self, Measured};
use super::output::say_and_end;
use super::report::Failure;
use crate::card::{FamilyCard, MethodCard, SettingSpec, nearest_word};
use crate::tables::report::CardText;
use crate::{families, methods};

#[derive(Clone, Copy, Debug, PartialEq, Eq)]
enum Kind {
    Families,
    Methods,
}

#[derive(Debug, Args)]
pub(super) struct RosterCommand {
    /// `families` or `methods` to list only these, a name to show its whole card, or both
    #[arg(value_name = "families|methods|NAME", num_args = 0..=2)]
    words: Vec<String>,
    /// Writes JSON
    #[arg(long)]
    json: bool,
}

impl RosterCommand {
    /// Splits the words into what to list and whose card to show.
    fn wanted(&self) -> (Option<Kind>, Option<&str>) {
        let words: Vec<&str> = self.words.iter().map(String::as_str).collect();
        match words.as_slice() {
            [] => (None, None),
            ["families", rest @ ..] => (Some(Kind::Families), rest.first().copied()),
            ["methods", rest @ ..] => (Some(Kind::Methods), rest.first().copied()),
            [.., name] => (None, Some(name)),
        }
    }
}

enum Card {
    Family(&'static FamilyCard),
    Method(&'static MethodCard),
}

pub(super) fn execute(command: &RosterCommand) -> Ended {
    let (kind, name) = command.wanted();
    let mut cards = Vec::new();
    if kind != Some(Kind::Methods) {
        cards.extend(families::registry().iter().map(|family| Card::Family(family.card())));
    }
    if kind != Some(Kind::Families) {
        cards.extend(methods::registry().iter().map(|method| Card::Method(method.card())));
    }
    if let Some(name) = name {
        let known: Vec<&str> = cards.iter().map(Card::id).collect();
        let Some(card) = cards.iter().find(|card| card.id() == name) else {
            let hint = nearest_word(name, known.iter().copied());
            let hint = hint.map_or(String::new(), |word| format!(" (did you mean `{word}`?)"));
            return Err(Failure::input(format!(
                "unknown name `{name}`, expected one of {}{hint}",
                known.join(", ")
            )));
        };
        return if command.json { say_json(&card.json()) } else { say_and_end(&card.text()) };
    }
    if command.json {
        return say_json(&Value::Array(cards.iter().map(Card::json).collect()));
    }
    say_and_end(&list(&cards))
}

fn say_json(value: &Value) -> Ended {
    let text = serde_json::to_string_pretty(value).expect("cards are plain data");
    say_and_end(&format!("{text}\n"))
}

fn list(cards: &[Card]) -> String {
    let width = cards.iter().map(|card| card.id().len()).max().unwrap_or(0);
    let mut out = String::new();
    for (heading, wanted) in [("Families", true), ("Methods", false)] {
        let group: Vec<_> =
            cards.iter().filter(|card| matches!(card, Card::Family(_)) == wanted).collect();
        if !group.is_empty() {
            out += &format!("{heading}\n");
            for card in group {
                out += &format!("  {:<width$}  {} ({})\n", card.id(), card.title(), card.class());
            }
        }
    }
    out
}

impl Card {
    fn id(&self) -> &'static str {
        match self {
            Card::Family(card) => card.id,
            Card::Method(card) => card.id,
        }
    }

    fn title(&self) -> &'static str {
        match self {
            Card::Family(card) => card.title,
            Card::Method(card) => card.title,
        }
    }

    fn class(&self) -> &'static str {
        match self {
            Card::Family(card) => card.relaxation.word(),
            Card::Method(card) => card.class.word(),
        }
    }

    /// Lists what the card says, name and sentence.
    fn lines(&self) -> Vec<(&'static str, &'static str)> {
        match self {
            Card::Family(card) => vec![
                ("kind", "family"),
                ("id", card.id),
                ("title", card.title),
                ("class", card.relaxation.word()),
                ("source", card.source),
                ("formula", card.formula),
                ("construction", card.construction),
                ("optimum", card.optimum),
                ("certificate", card.certificate),
            ],
            Card::Method(card) => vec![
                ("kind", "method"),
                ("id", card.id),
                ("title", card.title),
                ("class", card.class.word()),
                ("source", card.reference),
                ("needs", card.needs),
                ("cost", card.cost),
                ("guarantees", card.guarantees),
                ("failures", card.failures),
            ],
        }
    }

    fn settings(&self) -> (&'static str, &'static [SettingSpec]) {
        match self {
            Card::Family(card) => ("parameters", card.parameters),
            Card::Method(card) => ("options", card.options),
        }
    }

    /// Lists what was measured over the knobs of a family.
    fn measured(&self) -> Vec<Measured> {
        match self {
            Card::Family(card) => measured::of_family(card.id),
            Card::Method(_) => Vec::new(),
        }
    }

    fn json(&self) -> Value {
        let mut object: serde_json::Map<String, Value> =
            self.lines().into_iter().map(|(name, text)| (name.to_owned(), json!(text))).collect();
        let (name, specs) = self.settings();
        let specs: Vec<Value> = specs
            .iter()
            .map(|spec| {
                json!({
                    "name": spec.name,
                    "values": spec.kind.to_string(),
                    "default": spec.default.setting().to_string(),
                    "meaning": spec.meaning,
                })
            })
            .collect();
        object.insert(name.to_owned(), Value::Array(specs));
        if matches!(self, Card::Family(_)) {
            let measured = self.measured().iter().map(Measured::json).collect();
            object.insert("measured".to_owned(), Value::Array(measured));
        }
        Value::Object(object)
    }

    fn for_report(&self) -> CardText {
        let lines = self.lines().into_iter().skip(3);
        let settings = self.settings().1.iter().map(|spec| {
            let values = format!("{}; default {}", spec.kind, spec.default.setting());
            [spec.name.to_owned(), values, spec.meaning.to_owned()]
        });
        CardText {
            id: self.id().to_owned(),
            title: self.title().to_owned(),
            fields: lines
                .map(|(name, text)| (name.to_owned(), text.to_owned()))
                .chain(self.measured().iter().map(|row| ("measured".to_owned(), row.line())))
                .collect(),
            settings: settings.collect(),
        }
    }

    fn text(&self) -> String {
        let mut out = format!("{}: {}\n\n", self.id(), self.title());
        for (name, text) in self.lines().into_iter().skip(3) {
            out += &format!("{name}:\n{}", indented(text));
        }
        let (name, specs) = self.settings();
        out += &format!("{name}:\n");
        for spec in specs {
            let head = format!("{} ({}; default {})", spec.name, spec.kind, spec.default.setting());
            out += &format!("  {head}\n{}", indented(spec.meaning).replace("  ", "    "));
        }
        if specs.is_empty() {
            out += "  none\n";
        }
        let measured = self.measured();
        if !measured.is_empty() {
            out += "measured (medians over instances; instances/plans/knobs.toml):\n";
            for row in &measured {
                out += &format!("  {}\n", row.line());
            }
        }
        out
    }
}

/// Lists the cards of the families with the given ids, for the report.
pub(super) fn family_cards(ids: &BTreeSet<&str>) -> Vec<CardText> {
    let cards = crate::families::registry().iter().map(|family| Card::Family(family.card()));
    cards.filter(|card| ids.contains(card.id())).map(|card| card.for_report()).collect()
}

/// Lists the cards of the methods with the given ids, for the report.
pub(super) fn method_cards(ids: &BTreeSet<&str>) -> Vec<CardText> {
    let listed = crate::methods::registry().iter().map(|method| Card::Method(method.card()));
    let cards = listed.chain([Card::Method(&crate::methods::outside::CARD)]);
    cards.filter(|card| ids.contains(card.id())).map(|card| card.for_report()).collect()
}

/// Wraps a text to lines of at most 100 characters, indented by two.
fn indented(text: &str) -> String {
    let mut out = String::new();
    for paragraph in text.lines() {
        let mut line = String::from(" ");
        for word in paragraph.split_whitespace() {
            if line.len() > 1 && line.chars().count() + 1 + word.chars().count() > 98 {
                out += &format!("{line}\n");
                line = String::from(" ");
            }
            line.push(' ');
            line.push_str(word);
        }
        out += &format!("{line}\n");
    }
    out
}
