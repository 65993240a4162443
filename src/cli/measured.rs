//! What was measured of each family over its knobs: the table `results/knobs/knobs-stable.csv`, made by the plan
//! `instances/plans/knobs.toml`, as it was when this program was built. A test makes it again and compares.

use std::collections::BTreeMap;

use serde::Deserialize;
use serde_json::{Value, json};

/// The table.
const TABLE: &str = include_str!("../../results/knobs/knobs-stable.csv");

/// One combination of parameters.
#[derive(Clone, Debug, Deserialize)]
pub(super) struct Measured {
    family: String,
    parameters: String,
    method: String,
    trials: u64,
    unproved: u64,
    solved: u64,
    median_gap: Option<f64>,
    target: String,
    median_rank: Option<f64>,
    largest_rank: Option<u64>,
}

/// Lists what was measured of a family, parameters shortened to those that vary.
pub(super) fn of_family(id: &str) -> Vec<Measured> {
    let mut reader = csv::Reader::from_reader(TABLE.as_bytes());
    let rows = reader.deserialize::<Measured>().filter_map(Result::ok);
    let mut rows: Vec<Measured> = rows.filter(|row| row.family == id).collect();
    let mut values: BTreeMap<&str, Vec<&str>> = BTreeMap::new();
    for row in &rows {
        for (name, value) in row.parameters.split(' ').filter_map(|pair| pair.split_once('=')) {
            let known = values.entry(name).or_default();
            if !known.contains(&value) {
                known.push(value);
            }
        }
    }
    let varied: Vec<String> = values
        .into_iter()
        .filter(|(_, values)| values.len() > 1)
        .map(|(name, _)| name.to_owned())
        .collect();
    for row in &mut rows {
        let pairs = row.parameters.split(' ');
        let kept: Vec<&str> = pairs
            .filter(|pair| {
                pair.split_once('=')
                    .is_some_and(|(name, _)| varied.iter().any(|known| known == name))
            })
            .collect();
        if !kept.is_empty() {
            row.parameters = kept.join(" ");
        }
    }
    rows
}

impl Measured {
    /// Writes one line of a card.
    pub(super) fn line(&self) -> String {
        let gap = match (self.median_gap, self.unproved == self.trials) {
            (Some(gap), _) if gap.abs() < 5e-8 => "no gap".to_owned(),
            (Some(gap), _) => format!("gap {:.2} %", 100.0 * gap),
            (None, true) => "optimum not known".to_owned(),
            (None, false) => "gap not measured".to_owned(),
        };
        let rank = self.median_rank.map_or("no".to_owned(), |rank| format!("{rank}"));
        let unproved = match self.unproved {
            0 => String::new(),
            count => format!(", {count} without proof"),
        };
        format!(
            "{}: {gap}, rank {rank} for target {}, {} of {} solved by {}{unproved}",
            self.parameters, self.target, self.solved, self.trials, self.method
        )
    }

    /// Returns the line's figures.
    pub(super) fn json(&self) -> Value {
        json!({
            "parameters": self.parameters,
            "method": self.method,
            "trials": self.trials,
            "unproved": self.unproved,
            "solved": self.solved,
            "median_gap": self.median_gap,
            "target_rank": self.target,
            "median_rank": self.median_rank,
            "largest_rank": self.largest_rank,
        })
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn every_row_of_the_table_is_read() {
        let mut reader = csv::Reader::from_reader(TABLE.as_bytes());
        let rows: Vec<Result<Measured, _>> = reader.deserialize().collect();
        assert!(rows.iter().all(Result::is_ok), "{rows:?}");
        assert_eq!(rows.len() + 1, TABLE.lines().count());
    }
}
