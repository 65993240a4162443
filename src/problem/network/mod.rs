//! Power networks: tables of buses, lines and generators, and the optimal power flow they pose.
//!
//! The model is bus injection with constant-power loads, lines with series impedance and charging, generators with
//! limits and convex quadratic costs: voltages V, powers per bus, `min sum of costs` (see `program` for the
//! semidefinite program). The rank bound 1 stands on the voltage block alone; without it the program is the
//! relaxation of J. Lavaei, S. Low, IEEE Transactions on Power Systems 27:92-107, 2012 (citation from memory).
//!
//! Units: powers in MW, MVAr and MVA; impedances, admittances and voltages per unit on `base_mva` and the nominal
//! voltages; costs in a currency per hour with P in MW.
//!
//! What it is not for: transformers with taps or phase shifts, angle limits, dispatch in time, contingencies, unbalanced
//! networks. Nothing computed with it is advice to operate a network: studies of a real network follow the local grid
//! code and are the work of a licensed engineer. Reading files is `formats::network`.

pub mod injection;
mod program;

use serde::Deserialize;

pub use injection::{Branch, Lift, Power, Terms};

/// A power network. The field names are the keys of its file.
#[derive(Clone, Debug, PartialEq, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Network {
    /// Free text.
    #[serde(default)]
    pub title: String,
    /// Where the data come from; free text.
    #[serde(default)]
    pub source: String,
    /// Base power in MVA; positive.
    pub base_mva: f64,
    /// Number of the reference bus, whose voltage has the angle 0.
    pub reference: u32,
    /// Buses.
    pub bus: Vec<Bus>,
    /// Lines.
    pub line: Vec<Line>,
    /// Generators.
    pub generator: Vec<Generator>,
}

/// A bus with its load, shunt and voltage limits.
#[derive(Clone, Debug, PartialEq, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Bus {
    /// Number by which lines and generators name the bus; any, each once.
    pub number: u32,
    /// Active load in MW.
    #[serde(default)]
    pub load_mw: f64,
    /// Reactive load in MVAr.
    #[serde(default)]
    pub load_mvar: f64,
    /// Active power that a shunt takes at 1 p.u., in MW.
    #[serde(default)]
    pub shunt_mw: f64,
    /// Reactive power that a shunt gives at 1 p.u. (a capacitor is positive), in MVAr.
    #[serde(default)]
    pub shunt_mvar: f64,
    /// Least voltage magnitude, p.u.
    pub v_min: f64,
    /// Largest voltage magnitude, p.u.
    pub v_max: f64,
}

/// A line between two buses.
#[derive(Clone, Debug, PartialEq, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Line {
    /// Number of a bus.
    pub from: u32,
    /// Number of another bus.
    pub to: u32,
    /// Series resistance, p.u.
    pub r: f64,
    /// Series reactance, p.u.
    pub x: f64,
    /// Total charging susceptance, p.u.
    #[serde(default)]
    pub b: f64,
    /// Largest apparent power at either end, in MVA; none when left out.
    #[serde(default)]
    pub limit_mva: Option<f64>,
}

/// A generator: cost `cost_squared P^2 + cost_linear P + cost_constant` per hour for P in MW.
#[derive(Clone, Debug, PartialEq, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Generator {
    /// Number of its bus.
    pub bus: u32,
    /// Least active power, in MW.
    #[serde(default)]
    pub p_min_mw: f64,
    /// Largest active power, in MW; no limit when left out.
    #[serde(default)]
    pub p_max_mw: Option<f64>,
    /// Least reactive power, in MVAr; no limit when left out.
    #[serde(default)]
    pub q_min_mvar: Option<f64>,
    /// Largest reactive power, in MVAr; no limit when left out.
    #[serde(default)]
    pub q_max_mvar: Option<f64>,
    /// Cost per MW^2 and hour; not negative.
    #[serde(default)]
    pub cost_squared: f64,
    /// Cost per MW and hour.
    #[serde(default)]
    pub cost_linear: f64,
    /// Cost per hour.
    #[serde(default)]
    pub cost_constant: f64,
}

/// A table of a network.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Table {
    /// The keys of the network itself.
    Network,
    /// The buses.
    Bus,
    /// The lines.
    Line,
    /// The generators.
    Generator,
}

impl Table {
    /// Returns the name of the table in a file; empty for the network itself.
    pub fn name(self) -> &'static str {
        match self {
            Table::Network => "",
            Table::Bus => "bus",
            Table::Line => "line",
            Table::Generator => "generator",
        }
    }
}

/// Says which number of a network cannot be.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
#[error("{}`{key}` is {found}, expected {expected}", self.place())]
pub struct NetworkError {
    /// Table.
    pub table: Table,
    /// Row of the table, from 0.
    pub row: usize,
    /// Key.
    pub key: &'static str,
    /// The value found.
    pub found: String,
    /// What is possible.
    pub expected: String,
}

impl NetworkError {
    fn place(&self) -> String {
        match self.table {
            Table::Network => String::new(),
            table => format!("{} {}: ", table.name(), self.row + 1),
        }
    }
}

impl Network {
    /// Checks the network: every number finite, limits in order, costs convex, names known, the graph connected.
    ///
    /// # Errors
    /// The first number that cannot be.
    pub fn check(&self) -> Result<(), NetworkError> {
        positive((Table::Network, 0), "base_mva", self.base_mva)?;
        for (row, bus) in self.bus.iter().enumerate() {
            self.check_bus(row, bus)?;
        }
        if self.position(self.reference).is_none() {
            return Err(self.unknown((Table::Network, 0), "reference", self.reference));
        }
        for (row, line) in self.line.iter().enumerate() {
            self.check_line(row, line)?;
        }
        for (row, generator) in self.generator.iter().enumerate() {
            self.check_generator(row, generator)?;
        }
        self.check_connection()
    }

    /// Returns the position of the bus with this number.
    pub fn position(&self, number: u32) -> Option<usize> {
        self.bus.iter().position(|bus| bus.number == number)
    }

    fn check_bus(&self, row: usize, bus: &Bus) -> Result<(), NetworkError> {
        let place = (Table::Bus, row);
        if self.bus[..row].iter().any(|before| before.number == bus.number) {
            return Err(error(place, "number", bus.number, "a number that no other bus has"));
        }
        for (key, value) in [
            ("load_mw", bus.load_mw),
            ("load_mvar", bus.load_mvar),
            ("shunt_mw", bus.shunt_mw),
            ("shunt_mvar", bus.shunt_mvar),
        ] {
            finite(place, key, value)?;
        }
        positive(place, "v_min", bus.v_min)?;
        finite(place, "v_max", bus.v_max)?;
        ordered(place, "v_max", bus.v_min, Some(bus.v_max))
    }

    fn check_line(&self, row: usize, line: &Line) -> Result<(), NetworkError> {
        let place = (Table::Line, row);
        for (key, number) in [("from", line.from), ("to", line.to)] {
            if self.position(number).is_none() {
                return Err(self.unknown(place, key, number));
            }
        }
        if line.from == line.to {
            return Err(error(place, "to", line.to, "another bus than `from`"));
        }
        for (key, value) in [("r", line.r), ("x", line.x), ("b", line.b)] {
            finite(place, key, value)?;
        }
        if line.r < 0.0 {
            return Err(error(place, "r", line.r, "a resistance that is not negative"));
        }
        if line.r == 0.0 && line.x == 0.0 {
            return Err(error(place, "x", line.x, "an impedance that is not zero"));
        }
        line.limit_mva.map_or(Ok(()), |limit| positive(place, "limit_mva", limit))
    }

    fn check_generator(&self, row: usize, generator: &Generator) -> Result<(), NetworkError> {
        let place = (Table::Generator, row);
        if self.position(generator.bus).is_none() {
            return Err(self.unknown(place, "bus", generator.bus));
        }
        for (key, value) in [
            ("p_min_mw", Some(generator.p_min_mw)),
            ("p_max_mw", generator.p_max_mw),
            ("q_min_mvar", generator.q_min_mvar),
            ("q_max_mvar", generator.q_max_mvar),
            ("cost_squared", Some(generator.cost_squared)),
            ("cost_linear", Some(generator.cost_linear)),
            ("cost_constant", Some(generator.cost_constant)),
        ] {
            value.map_or(Ok(()), |value| finite(place, key, value))?;
        }
        ordered(place, "p_max_mw", generator.p_min_mw, generator.p_max_mw)?;
        if let Some(least) = generator.q_min_mvar {
            ordered(place, "q_max_mvar", least, generator.q_max_mvar)?;
        }
        if generator.cost_squared < 0.0 {
            let expected = "a cost that is not negative (the cost must be convex)";
            return Err(error(place, "cost_squared", generator.cost_squared, expected));
        }
        Ok(())
    }

    /// Refuses a bus that no path of lines joins with the reference: its angle would be free.
    fn check_connection(&self) -> Result<(), NetworkError> {
        let mut reached = vec![false; self.bus.len()];
        let start = self.position(self.reference).expect("the reference has been checked");
        reached[start] = true;
        let mut grows = true;
        while grows {
            grows = false;
            for line in &self.line {
                let ends = [line.from, line.to].map(|number| {
                    self.position(number).expect("the ends of lines have been checked")
                });
                if reached[ends[0]] != reached[ends[1]] {
                    reached[ends[0]] = true;
                    reached[ends[1]] = true;
                    grows = true;
                }
            }
        }
        match reached.iter().position(|reached| !reached) {
            None => Ok(()),
            Some(row) => {
                let expected = format!("a bus that lines join with bus {}", self.reference);
                Err(error((Table::Bus, row), "number", self.bus[row].number, &expected))
            }
        }
    }

    fn unknown(&self, place: (Table, usize), key: &'static str, number: u32) -> NetworkError {
        let nearest = self.bus.iter().map(|bus| bus.number).min_by_key(|n| n.abs_diff(number));
        let hint = nearest.map_or(String::new(), |nearest| format!("; the nearest is {nearest}"));
        error(place, key, number, &format!("the number of a bus{hint}"))
    }
}

fn error(
    (table, row): (Table, usize),
    key: &'static str,
    found: impl std::fmt::Display,
    expected: &str,
) -> NetworkError {
    NetworkError { table, row, key, found: found.to_string(), expected: expected.to_owned() }
}

fn finite(place: (Table, usize), key: &'static str, value: f64) -> Result<(), NetworkError> {
    if value.is_finite() { Ok(()) } else { Err(error(place, key, value, "a finite number")) }
}

fn positive(place: (Table, usize), key: &'static str, value: f64) -> Result<(), NetworkError> {
    finite(place, key, value)?;
    if value > 0.0 { Ok(()) } else { Err(error(place, key, value, "a positive number")) }
}

fn ordered(
    place: (Table, usize),
    key: &'static str,
    least: f64,
    most: Option<f64>,
) -> Result<(), NetworkError> {
    match most {
        Some(most) if most < least => {
            Err(error(place, key, most, &format!("at least {least}, the lower limit")))
        }
        _ => Ok(()),
    }
}

#[cfg(test)]
mod tests;
