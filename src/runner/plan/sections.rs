//! The sections of a plan, one function each: from placed values to checked ones.

use std::collections::{BTreeMap, BTreeSet};
use std::path::Path;
use std::time::Duration;

use super::quantity::{self, DURATION, SIZE};
use super::reader::{Document, Placed, Section, setting, settings};
use super::{
    Entrant, Imported, MOST_COMBINATIONS, PlanError, Player, ReportedOptimum, Sown, Span, Traced,
};
use crate::budget::Budget;
use crate::card::{Setting, SettingError, SettingSpec, Settings, nearest_word};
use crate::families::Family;
use crate::methods::Method;
use crate::methods::outside::Outside;
use crate::referee::Tolerance;

/// Where values stand, by the names of their settings.
type Places = BTreeMap<String, Span>;

/// Wall time of a trial when the plan gives none.
const DEFAULT_WALL: Duration = Duration::from_secs(60);

pub(super) fn seed(top: &Section<'_, '_>) -> Result<u64, PlanError> {
    const MOST: u64 = i64::MAX as u64;
    match top.whole("seed", 0, MOST)? {
        Some(seed) => Ok(seed.value),
        None => {
            Err(top.lacks("seed", "a line such as `seed = 1`: every random draw comes from it"))
        }
    }
}

pub(super) fn traced(top: &Section<'_, '_>) -> Result<Traced, PlanError> {
    let Some(entry) = top.get("traces") else {
        return Ok(Traced::Nothing);
    };
    match entry.value.get_ref().as_str() {
        Some("none") => Ok(Traced::Nothing),
        Some("first") => Ok(Traced::First),
        Some("all") => Ok(Traced::All),
        _ => Err(top.wrong(&entry, "one of \"none\", \"first\", \"all\"")),
    }
}

pub(super) fn budget(top: &Section<'_, '_>) -> Result<Budget, PlanError> {
    let mut budget = Budget { wall: DEFAULT_WALL, memory: None };
    let Some(section) = top.table("budget", "[budget]")? else {
        return Ok(budget);
    };
    section.only(&["wall", "memory"])?;
    if let Some(entry) = section.get("wall") {
        let read = entry.value.get_ref().as_str().and_then(quantity::duration);
        budget.wall = read.ok_or_else(|| section.wrong(&entry, DURATION))?;
    }
    if let Some(entry) = section.get("memory") {
        let read = entry.value.get_ref().as_str().and_then(quantity::size);
        budget.memory = Some(read.ok_or_else(|| section.wrong(&entry, SIZE))?);
    }
    Ok(budget)
}

pub(super) fn tolerance(top: &Section<'_, '_>) -> Result<Tolerance, PlanError> {
    const EXPECTED: &str = "a number above 0 and below 1, such as 1e-6";
    let mut tolerance = Tolerance::default();
    let Some(section) = top.table("tolerance", "[tolerance]")? else {
        return Ok(tolerance);
    };
    section.only(&["feasibility", "objective", "rank"])?;
    for (key, place) in [
        ("feasibility", &mut tolerance.feasibility),
        ("objective", &mut tolerance.objective),
        ("rank", &mut tolerance.rank),
    ] {
        if let Some(read) = section.number(key, EXPECTED)? {
            if !(read.value > 0.0 && read.value < 1.0) {
                let message = format!("`{key}` is out of range");
                return Err(section.document.error(read.span, &message, EXPECTED, None));
            }
            *place = read.value;
        }
    }
    Ok(tolerance)
}

/// Finds `named` among `known`, by id.
fn look_up<T: Copy>(
    document: &Document<'_>,
    what: &str,
    named: &Placed<String>,
    known: &[T],
    id: impl Fn(T) -> &'static str,
) -> Result<T, PlanError> {
    known.iter().copied().find(|candidate| id(*candidate) == named.value).ok_or_else(|| {
        let ids: Vec<_> = known.iter().map(|candidate| id(*candidate)).collect();
        document.error(
            named.span.clone(),
            &format!("unknown {what}"),
            &format!("one of {}", ids.join(", ")),
            nearest_word(&named.value, ids.iter().copied()),
        )
    })
}

/// Places a setting error: at the key when it is unknown, at the value otherwise.
fn place_setting_error(
    document: &Document<'_>,
    what: &str,
    error: &SettingError,
    places: &BTreeMap<String, (Span, Span)>,
) -> PlanError {
    let (key_span, value_span) = places.get(error.name()).cloned().unwrap_or((0..0, 0..0));
    match error {
        SettingError::Unknown { nearest, known, .. } => document.error(
            key_span,
            &format!("unknown {what}"),
            &if known.is_empty() {
                "none: it takes none".to_owned()
            } else {
                format!("one of {}", known.join(", "))
            },
            nearest.as_deref(),
        ),
        SettingError::Value { name, expected, nearest, .. } => document.error(
            value_span,
            &format!("`{name}` has an impossible value"),
            expected,
            nearest.as_deref(),
        ),
    }
}

pub(super) fn families<'a>(
    top: &Section<'_, '_>,
    known: &[&'a dyn Family],
) -> Result<Vec<Sown<'a>>, PlanError> {
    let mut sown: Vec<Sown<'a>> = Vec::new();
    let mut seen = BTreeSet::new();
    for section in top.tables("family", "[[family]]")? {
        let document = section.document;
        let named = section
            .text("name")?
            .ok_or_else(|| section.lacks("name", "a line such as `name = \"tight-unique\"`"))?;
        let family = look_up(document, "family", &named, known, |family| family.card().id)?;
        let count = section.whole("count", 1, 1_000_000)?.map_or(1, |count| count.value);
        let room = MOST_COMBINATIONS - sown.len();
        for (parameters, places) in combinations(&section, family.card().parameters, room)? {
            if !seen.insert((family.card().id, parameters.clone())) {
                let message =
                    format!("family with the parameters {parameters} stands in the plan twice");
                return Err(document.error(named.span, &message, "each combination once", None));
            }
            sown.push(Sown { family, parameters, count, span: named.span.clone(), places });
        }
    }
    Ok(sown)
}

/// Crosses the lists of a family's parameters, at most `room` combinations; the first parameter of the file
/// varies slowest.
fn combinations(
    section: &Section<'_, '_>,
    specs: &[SettingSpec],
    room: usize,
) -> Result<Vec<(Settings, Places)>, PlanError> {
    let document = section.document;
    let mut axes: Vec<(String, Span, Vec<Placed<Setting>>)> = Vec::new();
    for entry in section.entries() {
        if entry.key != "name" && entry.key != "count" {
            if !specs.iter().any(|spec| spec.name == entry.key) {
                let mut known = vec!["name", "count"];
                known.extend(specs.iter().map(|spec| spec.name));
                return Err(document.error(
                    entry.key_span,
                    "unknown parameter",
                    &format!("one of {}", known.join(", ")),
                    nearest_word(entry.key, known.iter().copied()),
                ));
            }
            let values = settings(document, entry.key, entry.value)?;
            axes.push((entry.key.to_owned(), entry.key_span, values));
        }
    }
    let total = axes.iter().try_fold(1usize, |product, axis| product.checked_mul(axis.2.len()));
    let Some(total) = total.filter(|total| *total <= room) else {
        let expected = format!("at most {MOST_COMBINATIONS} combinations in a plan");
        return Err(section.beginning("too many combinations of parameters", &expected));
    };
    let mut resolved = Vec::with_capacity(total);
    for number in 0..total {
        let mut rest = number;
        let mut given = BTreeMap::new();
        let mut places = BTreeMap::new();
        for (key, key_span, values) in axes.iter().rev() {
            let value = &values[rest % values.len()];
            rest /= values.len();
            given.insert(key.clone(), value.value.clone());
            places.insert(key.clone(), (key_span.clone(), value.span.clone()));
        }
        let settings = Settings::resolve(specs, &given)
            .map_err(|error| place_setting_error(document, "parameter", &error, &places))?;
        resolved
            .push((settings, places.into_iter().map(|(name, (_, span))| (name, span)).collect()));
    }
    Ok(resolved)
}

pub(super) fn imports(top: &Section<'_, '_>, folder: &Path) -> Result<Vec<Imported>, PlanError> {
    let mut imported: Vec<Imported> = Vec::new();
    let mut seen = BTreeSet::new();
    for section in top.tables("import", "[[import]]")? {
        section.only(&["path", "rank", "optimum"])?;
        let path = section
            .text("path")?
            .ok_or_else(|| section.lacks("path", "a line such as `path = \"example.dat-s\"`"))?;
        let rank = section.whole("rank", 1, u64::from(u32::MAX))?.map(|rank| rank.value as usize);
        if !seen.insert((path.value.clone(), rank)) {
            let message = "file with this rank stands in the plan twice";
            return Err(section.document.error(
                path.span,
                message,
                "each file once for each rank",
                None,
            ));
        }
        imported.push(Imported {
            resolved: folder.join(&path.value),
            path: path.value,
            rank,
            optimum: optimum(&section)?,
            span: path.span,
        });
    }
    Ok(imported)
}

fn optimum(import: &Section<'_, '_>) -> Result<Option<ReportedOptimum>, PlanError> {
    const EXPECTED: &str = "optimum = { value = 226.157, digits = 6, source = \"who reports it\" }";
    let Some(section) = import.table("optimum", "`optimum`")? else {
        return Ok(None);
    };
    section.only(&["value", "digits", "source"])?;
    let value = section
        .number("value", "a finite number")?
        .ok_or_else(|| section.lacks("value", EXPECTED))?;
    let digits =
        section.whole("digits", 1, 15)?.ok_or_else(|| section.lacks("digits", EXPECTED))?;
    let source = section.text("source")?.ok_or_else(|| section.lacks("source", EXPECTED))?;
    Ok(Some(ReportedOptimum {
        value: value.value,
        digits: digits.value as u32,
        source: source.value,
    }))
}

pub(super) fn methods<'a>(
    top: &Section<'_, '_>,
    known: &[&'a dyn Method],
    folder: &Path,
) -> Result<Vec<Entrant<'a>>, PlanError> {
    let mut entrants: Vec<Entrant<'a>> = Vec::new();
    let mut labels = BTreeSet::new();
    for section in top.tables("method", "[[method]]")? {
        let document = section.document;
        if section.get("command").is_some() {
            let entrant = outside(&section, folder)?;
            refuse_twin(document, &mut labels, &entrant.label)?;
            let (label, method) = (entrant.label.value, entrant.method);
            let options = Settings::of_word("command", &method.command.join(" "));
            entrants.push(Entrant { label, player: Player::Outside(method), options });
            continue;
        }
        section.only(&["name", "label", "options"])?;
        let named = section
            .text("name")?
            .ok_or_else(|| section.lacks("name", "a line such as `name = \"factored-alm\"`"))?;
        let method = look_up(document, "method", &named, known, |method| method.card().id)?;
        let options = options(&section, method.card().options)?;
        let label = match section.text("label")? {
            Some(label) => checked_label(document, label)?,
            None => Placed { value: default_label(method, &options), span: named.span },
        };
        refuse_twin(document, &mut labels, &label)?;
        entrants.push(Entrant { label: label.value, player: Player::Listed(method), options });
    }
    Ok(entrants)
}

/// Refuses a label that a method before has.
fn refuse_twin(
    document: &Document<'_>,
    before: &mut BTreeSet<String>,
    label: &Placed<String>,
) -> Result<(), PlanError> {
    if !before.insert(label.value.clone()) {
        let message = format!("label {} stands in the plan twice", label.value);
        let expected = "another `label` for each method with the same name and options";
        return Err(document.error(label.span.clone(), &message, expected, None));
    }
    Ok(())
}

/// An outside method and its label.
struct Labelled {
    label: Placed<String>,
    method: Outside,
}

/// Reads a method that is another program: `label` and `command`.
fn outside(section: &Section<'_, '_>, folder: &Path) -> Result<Labelled, PlanError> {
    const EXPECTED: &str = "a list of words such as [\"python3\", \"mine.py\"]";
    section.only(&["label", "command"])?;
    let label = section
        .text("label")?
        .ok_or_else(|| section.lacks("label", "a line such as `label = \"mine\"`"))?;
    let label = checked_label(section.document, label)?;
    let entry = section.get("command").expect("the caller saw the key");
    let words = entry.value.get_ref().as_array().ok_or_else(|| section.wrong(&entry, EXPECTED))?;
    let mut command = Vec::new();
    for word in words {
        match word.get_ref().as_str() {
            Some(word) if !word.is_empty() && !word.contains('\0') => command.push(word.to_owned()),
            _ => return Err(section.wrong(&entry, EXPECTED)),
        }
    }
    if command.is_empty() {
        return Err(section.wrong(&entry, EXPECTED));
    }
    Ok(Labelled { label, method: Outside { command, folder: folder.to_owned() } })
}

fn options(method: &Section<'_, '_>, specs: &[SettingSpec]) -> Result<Settings, PlanError> {
    let mut given = BTreeMap::new();
    let mut places = BTreeMap::new();
    if let Some(section) = method.table("options", "`options`")? {
        for entry in section.entries() {
            let value = if specs.iter().any(|spec| spec.name == entry.key) {
                setting(method.document, entry.key, entry.value)?
            } else {
                // The name is wrong already; resolving says so.
                Placed { value: Setting::Integer(0), span: entry.value.span() }
            };
            places.insert(entry.key.to_owned(), (entry.key_span, value.span));
            given.insert(entry.key.to_owned(), value.value);
        }
    }
    Settings::resolve(specs, &given)
        .map_err(|error| place_setting_error(method.document, "option", &error, &places))
}

/// Names a method by its id and the options that differ from their defaults.
fn default_label(method: &dyn Method, options: &Settings) -> String {
    let card = method.card();
    let mut label = card.id.to_owned();
    for spec in card.options {
        if let Some(value) = options.get(spec.name)
            && *value != spec.default.setting()
        {
            label.push_str(&format!("+{}={value}", spec.name));
        }
    }
    label
}

/// Refuses a label that could not stand in a file name.
fn checked_label(
    document: &Document<'_>,
    label: Placed<String>,
) -> Result<Placed<String>, PlanError> {
    let fits = |c: char| c.is_ascii_alphanumeric() || "-_.+=".contains(c);
    if label.value.len() > 60 || !label.value.chars().all(fits) {
        let expected = "at most 60 letters, digits and the signs - _ . + =";
        return Err(document.error(
            label.span,
            "`label` cannot stand in a file name",
            expected,
            None,
        ));
    }
    Ok(label)
}
