//! Positions in JSON texts: serde's errors as ours, and the place of a value named by its path.

use super::{FormatError, FormatErrorKind as Kind, Source};
use serde::de::value::MapAccessDeserializer;
use serde::de::{DeserializeOwned, DeserializeSeed, MapAccess, Visitor};
use serde::{Deserialize, Deserializer};
use std::fmt;
use std::marker::PhantomData;

/// One step from a JSON value to a value inside it.
#[derive(Clone, Copy, Debug)]
pub(super) enum Step<'a> {
    /// The value of a key of an object.
    Key(&'a str),
    /// An element of an array, from 0.
    Item(usize),
}

/// Reads a whole JSON text, an object, into `T`, with errors at their position.
pub(super) fn from_text<T: DeserializeOwned>(source: Source<'_>) -> Result<T, FormatError> {
    let mut deserializer = serde_json::Deserializer::from_str(source.text);
    let read = object(&mut deserializer).and_then(|value| deserializer.end().map(|()| value));
    read.map_err(|error| translate(source, &error))
}

/// Reads a JSON object into `T`; left to itself, serde takes an array in the order of the fields as well.
pub(super) fn object<'de, T: Deserialize<'de>, D: Deserializer<'de>>(
    deserializer: D,
) -> Result<T, D::Error> {
    Object::default().deserialize(deserializer)
}

/// Reads a value that may be left out; left to itself, serde takes a null for one that is.
pub(super) fn given<'de, T: Deserialize<'de>, D: Deserializer<'de>>(
    deserializer: D,
) -> Result<Option<T>, D::Error> {
    T::deserialize(deserializer).map(Some)
}

/// Reads an element that is a JSON object, see [`object`].
pub(super) struct Object<T>(PhantomData<T>);

impl<T> Default for Object<T> {
    fn default() -> Self {
        Object(PhantomData)
    }
}

impl<'de, T: Deserialize<'de>> DeserializeSeed<'de> for Object<T> {
    type Value = T;

    fn deserialize<D: Deserializer<'de>>(self, deserializer: D) -> Result<T, D::Error> {
        deserializer.deserialize_map(self)
    }
}

impl<'de, T: Deserialize<'de>> Visitor<'de> for Object<T> {
    type Value = T;

    fn expecting(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str("an object in braces")
    }

    fn visit_map<A: MapAccess<'de>>(self, map: A) -> Result<T, A::Error> {
        T::deserialize(MapAccessDeserializer::new(map))
    }
}

/// Says in words what serde calls by the name of a type.
fn in_words(expected: &str) -> &str {
    match expected {
        "f64" => "a number",
        "u32" | "u64" | "usize" => "a whole number that is not negative",
        "i64" | "i128" => "a whole number",
        other => other,
    }
}

/// Turns an error of serde into one of ours.
fn translate(source: Source<'_>, error: &serde_json::Error) -> FormatError {
    let message = error.to_string();
    let message = message.split(" at line ").next().unwrap_or_default();
    if error.is_eof() {
        return source.end_error("the rest of the JSON text");
    }
    let (found, expected) = match message.split_once(", expected ") {
        Some((found, expected)) => (Some(found), in_words(expected).to_owned()),
        None => match message.strip_prefix("missing ").or(message.strip_prefix("expected ")) {
            Some(expected) => (None, expected.to_owned()),
            None => (None, format!("JSON that fits this place ({message})")),
        },
    };
    let line_start = source
        .text
        .match_indices('\n')
        .map(|(position, _)| position + 1)
        .take(error.line().saturating_sub(1))
        .last()
        .unwrap_or(0);
    let last = line_start + error.column().saturating_sub(1);
    let start = token_start(source.text.as_bytes(), last, error.is_data());
    let mut out = source.error(start, last + 1 - start, Kind::Unexpected, expected);
    if let Some(found) = found {
        out.token = super::shorten(found);
    }
    out
}

/// Goes back from the last byte of a token, where serde reports, to its first. A quote ends a string
/// when the text was sound so far and only the value did not fit; else it may open one.
fn token_start(bytes: &[u8], last: usize, text_is_sound: bool) -> usize {
    let is_word =
        |byte: u8| byte.is_ascii_alphanumeric() || matches!(byte, b'.' | b'+' | b'-' | b'_');
    let mut start = last;
    match bytes.get(last) {
        Some(b'"') if text_is_sound => {
            let opens = |at: usize| bytes[at] == b'"' && (at == 0 || bytes[at - 1] != b'\\');
            (0..last).rev().find(|at| opens(*at)).unwrap_or(last)
        }
        Some(byte) if is_word(*byte) => {
            while start > 0 && is_word(bytes[start - 1]) {
                start -= 1;
            }
            start
        }
        _ => last,
    }
}

/// Makes an error for the value at `path` of a text that is known to be valid JSON. The position is
/// that of the nearest enclosing value when the path leads nowhere.
pub(super) fn error_at(
    source: Source<'_>,
    path: &[Step<'_>],
    kind: Kind,
    expected: impl Into<String>,
) -> FormatError {
    let mut scanner = Scanner { bytes: source.text.as_bytes(), at: 0 };
    scanner.skip_blanks();
    for step in path {
        let before = scanner.at;
        let found = match step {
            Step::Key(key) => scanner.enter_key(key),
            Step::Item(index) => scanner.enter_item(*index),
        };
        if !found {
            scanner.at = before;
            break;
        }
    }
    let start = scanner.at;
    scanner.skip_value();
    source.error(start, scanner.at - start, kind, expected)
}

/// Walks over valid JSON without building anything; it does not recurse.
struct Scanner<'a> {
    bytes: &'a [u8],
    at: usize,
}

impl Scanner<'_> {
    fn peek(&self) -> Option<u8> {
        self.bytes.get(self.at).copied()
    }

    fn skip_blanks(&mut self) {
        while self.peek().is_some_and(|byte| byte.is_ascii_whitespace()) {
            self.at += 1;
        }
    }

    fn skip_string(&mut self) {
        self.at += 1;
        while let Some(byte) = self.peek() {
            self.at += if byte == b'\\' { 2 } else { 1 };
            if byte == b'"' {
                break;
            }
        }
        self.at = self.at.min(self.bytes.len());
    }

    fn skip_value(&mut self) {
        let mut depth = 0usize;
        while let Some(byte) = self.peek() {
            match byte {
                b'"' => {
                    self.skip_string();
                    if depth == 0 {
                        return;
                    }
                    continue;
                }
                b'[' | b'{' => depth += 1,
                b']' | b'}' if depth == 0 => return,
                b']' | b'}' => {
                    depth -= 1;
                    if depth == 0 {
                        self.at += 1;
                        return;
                    }
                }
                b',' if depth == 0 => return,
                byte if byte.is_ascii_whitespace() && depth == 0 => return,
                _ => {}
            }
            self.at += 1;
        }
    }

    /// Moves from the start of an object to the value of `key`.
    fn enter_key(&mut self, key: &str) -> bool {
        if self.peek() != Some(b'{') {
            return false;
        }
        self.at += 1;
        loop {
            self.skip_blanks();
            if self.peek() != Some(b'"') {
                return false;
            }
            let start = self.at + 1;
            self.skip_string();
            let found = self.bytes.get(start..self.at - 1) == Some(key.as_bytes());
            self.skip_blanks();
            self.at += 1;
            self.skip_blanks();
            if found {
                return true;
            }
            self.skip_value();
            self.skip_blanks();
            if self.peek() != Some(b',') {
                return false;
            }
            self.at += 1;
        }
    }

    /// Moves from the start of an array to its element `index`.
    fn enter_item(&mut self, index: usize) -> bool {
        if self.peek() != Some(b'[') {
            return false;
        }
        self.at += 1;
        for _ in 0..index {
            self.skip_blanks();
            self.skip_value();
            self.skip_blanks();
            if self.peek() != Some(b',') {
                return false;
            }
            self.at += 1;
        }
        self.skip_blanks();
        self.peek().is_some_and(|byte| byte != b']')
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_path_leads_to_its_value() {
        let text = "{ \"a\": [1, \"x]\", {\"b\\\"\": 2, \"c\": [3,\n 44]}], \"d\": 5 }";
        let source = Source { file: "t", text };
        let at = |path: &[Step<'_>]| {
            let error = error_at(source, path, Kind::Unexpected, "x");
            (error.line, error.column, error.token)
        };
        let path = [Step::Key("a"), Step::Item(2), Step::Key("c"), Step::Item(1)];
        assert_eq!(at(&path), (2, 2, "44".to_owned()));
        assert_eq!(at(&[Step::Key("d")]).2, "5");
        assert_eq!(at(&[Step::Key("a"), Step::Item(1)]).2, "\"x]\"");
        assert_eq!(at(&[Step::Key("nowhere")]).1, 1);
    }
}
