//! Power networks as TOML tables.
//!
//! ```text
//! title     = "free text"                 may be left out
//! source    = "where the data come from"  may be left out
//! base_mva  = 100                         base power, MVA
//! reference = 1                           number of the bus with voltage angle 0
//!
//! [[bus]]                # one a bus
//! number     = 1         # any whole number, each once
//! load_mw    = 110       # active load, MW; 0 when left out
//! load_mvar  = 40        # reactive load, MVAr; 0 when left out
//! shunt_mw   = 0         # active power of a shunt at 1 p.u., MW; 0 when left out
//! shunt_mvar = 0         # reactive power that a shunt gives at 1 p.u., MVAr; 0 when left out
//! v_min      = 0.9       # voltage limits, p.u.
//! v_max      = 1.1
//!
//! [[line]]               # one a line
//! from = 1               # numbers of two buses
//! to   = 3
//! r = 0.065              # series resistance and reactance, total charging susceptance, p.u.
//! x = 0.62
//! b = 0.45               # 0 when left out
//! limit_mva = 60         # apparent power at either end, MVA; no limit when left out
//!
//! [[generator]]          # one a generator; several may share a bus
//! bus = 1
//! p_min_mw   = 0         # active power, MW; 0 when left out
//! p_max_mw   = 1000      # no limit when left out
//! q_min_mvar = -300      # reactive power, MVAr; no limit when left out
//! q_max_mvar = 300
//! cost_squared  = 0.11   # cost per hour: cost_squared P^2 + cost_linear P + cost_constant, P in MW; 0 when left out
//! cost_linear   = 5
//! cost_constant = 0
//! ```
//!
//! What the tables mean is said in `problem::network`, with what the model leaves out. The reader builds the problem with
//! the rank bound 1 on the voltage block; a plan that imports such a file gives no rank. Figures for a network are no
//! advice to operate it: studies of a real network follow the local grid code and are the work of a licensed engineer.

use super::{FormatError, FormatErrorKind as Kind, MAX_TOTAL_ORDER, Source, read_text};
use crate::problem::Problem;
use crate::problem::network::{Network, NetworkError, Table};
use std::ops::Range;
use std::path::Path;
use toml::de::{DeTable, DeValue};

/// Largest file that is read, in bytes.
const MAX_BYTES: u64 = 1 << 24;

/// Largest number of buses that is read.
const MAX_BUSES: usize = MAX_TOTAL_ORDER / 100;

/// What a network file holds.
#[derive(Clone, Debug)]
pub struct Read {
    /// The tables.
    pub network: Network,
    /// The optimal power flow they pose.
    pub problem: Problem,
}

/// Reads a network file.
///
/// # Errors
/// The file is unreadable, or its text is refused; see [`parse`].
pub fn read(path: &Path) -> Result<Read, FormatError> {
    let text = read_text(path, MAX_BYTES)?;
    parse(&text, &path.display().to_string())
}

/// Reads the text of a network file; `file` is the name that errors carry.
///
/// # Errors
/// Text that is not TOML; a key that is missing, unknown (with the nearest valid one) or of the wrong type; a number that
/// cannot be (see [`Network::check`]); more than 10,000 buses.
pub fn parse(text: &str, file: &str) -> Result<Read, FormatError> {
    let source = Source { file, text };
    let network: Network = toml::from_str(text).map_err(|error| translate(source, &error))?;
    if network.bus.len() > MAX_BUSES {
        let span = span_of(text, Table::Bus, MAX_BUSES, "number");
        let expected = format!("at most {MAX_BUSES} buses");
        return Err(source.error(span.start, span.len(), Kind::TooLarge, expected));
    }
    let problem = network.problem().map_err(|error| place(source, error))?;
    Ok(Read { network, problem })
}

/// Turns an error of the TOML reader into one of ours.
fn translate(source: Source<'_>, error: &toml::de::Error) -> FormatError {
    let message = error.message().split_whitespace().collect::<Vec<_>>().join(" ");
    let Some(span) = error.span() else {
        return source.end_error(message);
    };
    let mut words = message.split('`').skip(1).step_by(2);
    if message.starts_with("unknown field") {
        let word = words.next().unwrap_or_default();
        let known: Vec<&str> = words.collect();
        let scored = known.iter().map(|key| (strsim::jaro_winkler(word, key), key));
        let hint = scored
            .filter(|(score, _)| *score >= 0.75)
            .max_by(|a, b| a.0.total_cmp(&b.0))
            .map_or(String::new(), |(_, key)| format!(" (did you mean `{key}`?)"));
        let expected = format!("one of {}{hint}", known.join(", "));
        return source.error(span.start, span.len(), Kind::Unexpected, expected);
    }
    if message.starts_with("missing field") {
        let expected = format!("a line `{} = ...`", words.next().unwrap_or_default());
        // The place is the whole table: its first line is where the key belongs.
        let length = source.text[span.start..].lines().next().unwrap_or_default().len();
        return source.error(span.start, length, Kind::Unexpected, expected);
    }
    let expected = match message.split_once(", expected ") {
        Some((_, expected)) => expected.to_owned(),
        None => format!("TOML that fits this place ({message})"),
    };
    source.error(span.start, span.len(), Kind::Unexpected, expected)
}

/// Gives a mistake of the network its place in the file.
fn place(source: Source<'_>, error: NetworkError) -> FormatError {
    let span = span_of(source.text, error.table, error.row, error.key);
    let kind = if error.found.parse::<f64>().is_ok_and(|value| !value.is_finite()) {
        Kind::NotFinite
    } else {
        Kind::OutOfRange
    };
    source.error(span.start, span.len(), kind, error.expected)
}

/// Finds the value of a key of a text that has been read; the place of its table when the key was left out.
fn span_of(text: &str, table: Table, row: usize, key: &str) -> Range<usize> {
    let Ok(document) = DeTable::parse(text) else {
        return 0..0;
    };
    let (span, keys) = match document.get_ref().get(table.name()).map(|value| value.get_ref()) {
        Some(DeValue::Array(rows)) => match rows.get(row).map(|row| (row.span(), row.get_ref())) {
            Some((span, DeValue::Table(keys))) => (span, keys),
            _ => return 0..0,
        },
        _ => (0..0, document.get_ref()),
    };
    keys.get(key).map_or(span.start..span.start, |value| value.span())
}

#[cfg(test)]
mod tests {
    use super::*;

    const GOOD: &str = "\
base_mva = 100
reference = 1
[[bus]]
number = 1
v_min = 0.9
v_max = 1.1
[[bus]]
number = 2
load_mw = 50
v_min = 0.9
v_max = 1.1
[[line]]
from = 1
to = 2
r = 0.01
x = 0.1
[[generator]]
bus = 1
cost_linear = 4
";

    /// A text with one thing wrong, and line, column, token and a part of what was expected.
    type Case = (&'static str, &'static str, usize, usize, &'static str, &'static str);

    #[test]
    fn each_mistake_is_placed() {
        assert!(parse(GOOD, "good").is_ok());
        let cases: &[Case] = &[
            ("load_mw", "laod_mw", 9, 1, "laod_mw", "did you mean `load_mw`?"),
            ("[[line]]", "[[lines]]", 12, 3, "lines", "did you mean `line`?"),
            ("r = 0.01\n", "", 12, 1, "[[line]]", "a line `r = ...`"),
            ("base_mva = 100\n", "", 1, 1, "reference = 1", "a line `base_mva = ...`"),
            ("r = 0.01", "r = \"low\"", 15, 5, "\"low\"", "f64"),
            ("number = 2", "number = -2", 8, 10, "-2", "u32"),
            ("x = 0.1", "x = inf", 16, 5, "inf", "a finite number"),
            ("v_max = 1.1\n[[line]]", "v_max = 0.8\n[[line]]", 11, 9, "0.8", "at least 0.9"),
            ("to = 2", "to = 3", 14, 6, "3", "the nearest is 2"),
            ("bus = 1", "bus = 1\np_max_mw = -4", 19, 12, "-4", "at least 0"),
            ("x = 0.1", "x = 0.1 0", 16, 5, "0.1 0", "literal string"),
            ("[[bus]]\nnumber = 2", "[bus]\nnumber = 2", 7, 2, "bus", "duplicate key"),
        ];
        for (from, to, line, column, token, expected) in cases {
            assert!(GOOD.contains(from));
            let text = GOOD.replacen(from, to, 1);
            let error = parse(&text, "bad.toml").unwrap_err();
            let found = (error.line, error.column, error.token.as_str());
            assert_eq!(found, (*line, *column, *token), "{error}");
            assert!(error.to_string().contains(expected), "{error}");
        }
    }

    #[test]
    fn a_key_left_out_is_placed_at_its_table() {
        let text =
            GOOD.replace("v_min = 0.9\nv_max = 1.1\n[[line]]", "v_min = 1\nv_max = 1\n[[line]]");
        assert!(parse(&text, "fixed voltage").is_ok());
        // The lower limit is left out, so it is 0, and the mistake stands at the upper one.
        let text = GOOD.replace("cost_linear = 4", "p_max_mw = -1");
        assert_eq!(parse(&text, "t").unwrap_err().line, 19);
    }
}
