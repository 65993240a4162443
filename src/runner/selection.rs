//! Which trials of a plan are run.

use std::str::FromStr;

use sha2::{Digest, Sha256};

/// A pattern over the instance's id and the method's label with a blank between them: with `*` or
/// `?` it must match the whole, otherwise it must occur in it.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Pattern(String);

impl Pattern {
    /// Wraps a pattern.
    pub fn new(text: &str) -> Self {
        Pattern(text.to_owned())
    }

    /// Returns whether `text` matches.
    pub fn matches(&self, text: &str) -> bool {
        if self.0.contains(['*', '?']) {
            let (pattern, text): (Vec<char>, Vec<char>) =
                (self.0.chars().collect(), text.chars().collect());
            matches_whole(&pattern, &text)
        } else {
            text.contains(&self.0)
        }
    }
}

/// Matches greedily and goes back to the last star on a mismatch: linear in the text for each star.
fn matches_whole(pattern: &[char], text: &[char]) -> bool {
    let (mut p, mut t) = (0, 0);
    let mut retry: Option<(usize, usize)> = None;
    while t < text.len() {
        if p < pattern.len() && pattern[p] == '*' {
            retry = Some((p, t));
            p += 1;
        } else if p < pattern.len() && (pattern[p] == '?' || pattern[p] == text[t]) {
            p += 1;
            t += 1;
        } else if let Some((star, from)) = retry {
            retry = Some((star, from + 1));
            p = star + 1;
            t = from + 1;
        } else {
            return false;
        }
    }
    pattern[p..].iter().all(|sign| *sign == '*')
}

/// One of several parts of a plan: its instances are dealt out in the order of a hash of their ids, so
/// that all trials of an instance fall into the same part, parts differ by one instance at most, and
/// neighbours of one size do not all fall into one.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Shard {
    part: u64,
    parts: u64,
}

impl Shard {
    /// Returns for each instance of a plan whether it falls into this part.
    pub fn share(&self, instances: &[&str]) -> Vec<bool> {
        let hash = |at: &usize| <[u8; 32]>::from(Sha256::digest(instances[*at].as_bytes()));
        let mut order: Vec<usize> = (0..instances.len()).collect();
        order.sort_by_cached_key(|at| (hash(at), *at));
        let mut takes = vec![false; instances.len()];
        for (turn, at) in order.into_iter().enumerate() {
            takes[at] = turn as u64 % self.parts == self.part - 1;
        }
        takes
    }
}

impl FromStr for Shard {
    type Err = String;

    /// Reads `I/N` with 1 <= I <= N <= 100000.
    fn from_str(text: &str) -> Result<Self, String> {
        let read = || {
            let (part, parts) = text.split_once('/')?;
            let (part, parts) = (part.parse().ok()?, parts.parse().ok()?);
            (1 <= part && part <= parts && parts <= 100_000).then_some(Shard { part, parts })
        };
        read().ok_or_else(|| "expected I/N with 1 <= I <= N <= 100000, such as 2/8".to_owned())
    }
}

/// Which trials of a plan are run: those that pass every test.
#[derive(Clone, Debug, Default, PartialEq, Eq)]
pub struct Selection {
    /// Pattern to match, if any.
    pub only: Option<Pattern>,
    /// Part of the plan, if not the whole.
    pub shard: Option<Shard>,
    /// Labels of the methods, if not all.
    pub methods: Option<Vec<String>>,
}

impl Selection {
    /// Returns whether a trial passes the tests of its own names; the shard is a matter of the whole plan.
    pub(super) fn takes(&self, instance: &str, method: &str) -> bool {
        self.methods.as_ref().is_none_or(|labels| labels.iter().any(|label| label == method))
            && self.only.as_ref().is_none_or(|only| only.matches(&format!("{instance} {method}")))
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn patterns_match_parts_or_the_whole() {
        let text = "tight-unique-order=20-rank=1-0 factored-alm";
        for (pattern, expected) in [
            ("order=20", true),
            ("0 factored", true),
            ("order=21", false),
            ("tight*", true),
            ("*alm", true),
            ("*order=?0*", true),
            ("*order=?", false),
            ("alm*", false),
            ("*a*b*", false),
            ("*", true),
        ] {
            assert_eq!(Pattern::new(pattern).matches(text), expected, "{pattern}");
        }
    }

    #[test]
    fn every_instance_falls_into_one_part() {
        let ids: Vec<String> = (0..301).map(|number| format!("instance-{number}")).collect();
        let ids: Vec<&str> = ids.iter().map(String::as_str).collect();
        let shares: Vec<Vec<bool>> =
            (1..=3).map(|part| format!("{part}/3").parse::<Shard>().unwrap().share(&ids)).collect();
        assert!((0..301).all(|at| shares.iter().filter(|share| share[at]).count() == 1));
        let counts = shares.iter().map(|share| share.iter().filter(|takes| **takes).count());
        assert_eq!(counts.collect::<Vec<_>>(), [101, 100, 100]);
        // Neighbours are spread: 50 of a size would otherwise land in one part of six.
        let first = shares[0][..50].iter().filter(|takes| **takes).count();
        assert!((8..=25).contains(&first), "{first}");
        for bad in ["", "1", "0/3", "4/3", "a/b", "1/0", "1/200000"] {
            assert!(bad.parse::<Shard>().is_err(), "{bad}");
        }
    }
}
