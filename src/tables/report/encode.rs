//! Encodings: words of a shell, base64, ids of a page.

use std::collections::BTreeSet;

/// Quotes a word for a POSIX shell; a word without special characters stays as it is.
pub(super) fn shell_word(word: &str) -> String {
    let plain = |c: char| c.is_ascii_alphanumeric() || "_@%+=:,./-".contains(c);
    if !word.is_empty() && word.chars().all(plain) {
        word.to_owned()
    } else {
        format!("'{}'", word.replace('\'', r"'\''"))
    }
}

/// Quotes a path for a POSIX shell, so that no program takes it for an option.
pub(super) fn shell_path(path: &str) -> String {
    if path.starts_with('-') { shell_word(&format!("./{path}")) } else { shell_word(path) }
}

/// Encodes bytes in base64 with padding (RFC 4648, section 4).
pub(super) fn base64(bytes: &[u8]) -> String {
    const DIGITS: &[u8; 64] = b"ABCDEFGHIJKLMNOPQRSTUVWXYZabcdefghijklmnopqrstuvwxyz0123456789+/";
    let mut out = String::with_capacity(bytes.len().div_ceil(3) * 4);
    for chunk in bytes.chunks(3) {
        let byte = |at: usize| u32::from(chunk.get(at).copied().unwrap_or(0));
        let word = byte(0) << 16 | byte(1) << 8 | byte(2);
        for place in 0..4 {
            if place <= chunk.len() {
                let digit = (word >> (18 - 6 * place)) & 63;
                out.push(char::from(DIGITS[digit as usize]));
            } else {
                out.push('=');
            }
        }
    }
    out
}

/// Hands out the ids of one page, each once.
#[derive(Default)]
pub(super) struct Ids {
    given: BTreeSet<String>,
}

impl Ids {
    /// Returns an id made from a prefix and a name, in lower-case ASCII letters, digits and hyphens; a
    /// number is added when it was given before.
    pub(super) fn make(&mut self, prefix: &str, name: &str) -> String {
        let mut stem = prefix.to_owned();
        for c in name.chars() {
            let c = if c.is_ascii_alphanumeric() { c.to_ascii_lowercase() } else { '-' };
            if c != '-' || !stem.ends_with('-') {
                stem.push(c);
            }
        }
        let stem = stem.trim_end_matches('-');
        let mut id = stem.to_owned();
        let mut number = 2;
        while !self.given.insert(id.clone()) {
            id = format!("{stem}-{number}");
            number += 1;
        }
        id
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn words_survive_a_shell() {
        assert_eq!(shell_word("runs/quick-1"), "runs/quick-1");
        assert_eq!(shell_word("my run"), "'my run'");
        assert_eq!(shell_word("it's $HOME"), r"'it'\''s $HOME'");
        assert_eq!(shell_word(""), "''");
        assert_eq!(shell_path("-rf"), "./-rf");
    }

    #[test]
    fn base64_is_that_of_the_standard() {
        // RFC 4648, section 10.
        for (text, expected) in [
            ("", ""),
            ("f", "Zg=="),
            ("fo", "Zm8="),
            ("foo", "Zm9v"),
            ("foob", "Zm9vYg=="),
            ("fooba", "Zm9vYmE="),
            ("foobar", "Zm9vYmFy"),
        ] {
            assert_eq!(base64(text.as_bytes()), expected);
        }
    }

    #[test]
    fn ids_are_given_once() {
        let mut ids = Ids::default();
        assert_eq!(ids.make("table-", "Rank \"at\" target"), "table-rank-at-target");
        assert_eq!(ids.make("table-", "rank at target"), "table-rank-at-target-2");
        assert_eq!(ids.make("table-", ""), "table");
    }
}
