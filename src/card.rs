//! What a family or a method says of itself, and the settings it takes.
//!
//! A card is the single source of the roster, the docs and the report. Settings (a family's
//! parameters, a method's options) are declared on the card with kind, default and meaning, and a
//! user's values are resolved against that declaration here and nowhere else.

use std::collections::BTreeMap;
use std::fmt;

/// One value of a setting.
#[derive(Clone, Debug, PartialEq, Eq, PartialOrd, Ord)]
pub enum Setting {
    /// A whole number.
    Integer(i64),
    /// A word out of a closed list.
    Word(String),
    /// A finite decimal number, kept as the text that `f64` prints, so that it has one spelling.
    Decimal(String),
}

impl Setting {
    /// Wraps a decimal number in its shortest spelling.
    pub fn decimal(value: f64) -> Self {
        Setting::Decimal(format!("{value:?}"))
    }
}

impl fmt::Display for Setting {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        match self {
            Setting::Integer(value) => write!(f, "{value}"),
            Setting::Word(word) => f.write_str(word),
            Setting::Decimal(text) => f.write_str(text),
        }
    }
}

/// What values a setting takes.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum Kind {
    /// Whole numbers `least..=most`.
    Integer {
        /// Smallest allowed value.
        least: i64,
        /// Largest allowed value.
        most: i64,
    },
    /// One of the listed words.
    Word(&'static [&'static str]),
    /// One of the listed words, or a whole number `least..=most`.
    WordOrInteger {
        /// Allowed words.
        words: &'static [&'static str],
        /// Smallest allowed value.
        least: i64,
        /// Largest allowed value.
        most: i64,
    },
    /// Decimal numbers with `least <= value <= most`.
    Decimal {
        /// Smallest allowed value.
        least: f64,
        /// Largest allowed value.
        most: f64,
    },
}

impl fmt::Display for Kind {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        match self {
            Kind::Integer { least, most } => write!(f, "a whole number from {least} to {most}"),
            Kind::Word(words) => write!(f, "one of {}", words.join(", ")),
            Kind::WordOrInteger { words, least, most } => {
                write!(f, "one of {}, or a whole number from {least} to {most}", words.join(", "))
            }
            Kind::Decimal { least, most } => write!(f, "a number from {least} to {most}"),
        }
    }
}

/// The default of a setting, in a form that can stand in a static card.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum DefaultSetting {
    /// A whole number.
    Integer(i64),
    /// A word.
    Word(&'static str),
    /// A decimal number.
    Decimal(f64),
}

impl DefaultSetting {
    /// Turns the default into a setting.
    pub fn setting(self) -> Setting {
        match self {
            DefaultSetting::Integer(value) => Setting::Integer(value),
            DefaultSetting::Word(word) => Setting::Word(word.to_owned()),
            DefaultSetting::Decimal(value) => Setting::decimal(value),
        }
    }
}

/// Declares one setting.
#[derive(Clone, Copy, Debug)]
pub struct SettingSpec {
    /// Name as written in plans.
    pub name: &'static str,
    /// Allowed values.
    pub kind: Kind,
    /// Value taken when the user gives none.
    pub default: DefaultSetting,
    /// Exact meaning, a sentence.
    pub meaning: &'static str,
}

/// Settings resolved against their declaration: every declared name has a value.
#[derive(Clone, Debug, Default, PartialEq, Eq, PartialOrd, Ord)]
pub struct Settings {
    values: BTreeMap<String, Setting>,
}

/// Says why a user's settings do not fit their declaration.
#[derive(Clone, Debug, PartialEq, Eq, thiserror::Error)]
pub enum SettingError {
    /// The name is not declared.
    #[error("unknown setting `{name}`{}; it takes {}", hint(.nearest), .known.join(", "))]
    Unknown {
        /// Name the user gave.
        name: String,
        /// Nearest declared name, if one is near.
        nearest: Option<String>,
        /// All declared names.
        known: Vec<String>,
    },
    /// The value is not allowed.
    #[error("`{name}` is {value}, expected {expected}{}", hint(.nearest))]
    Value {
        /// Name of the setting.
        name: String,
        /// Value the user gave.
        value: String,
        /// What is allowed.
        expected: String,
        /// Nearest allowed word, if one is near.
        nearest: Option<String>,
    },
}

impl SettingError {
    /// Returns the name of the setting that is wrong.
    pub fn name(&self) -> &str {
        match self {
            SettingError::Unknown { name, .. } | SettingError::Value { name, .. } => name,
        }
    }
}

fn hint(nearest: &Option<String>) -> String {
    nearest.as_ref().map(|word| format!(" (did you mean `{word}`?)")).unwrap_or_default()
}

/// Returns the word of `known` nearest to `word`, when it is near enough to be a slip of the pen:
/// a Jaro-Winkler similarity of at least 0.75.
pub fn nearest_word<'a>(word: &str, known: impl IntoIterator<Item = &'a str>) -> Option<&'a str> {
    known
        .into_iter()
        .map(|candidate| (strsim::jaro_winkler(word, candidate), candidate))
        .filter(|(score, _)| *score >= 0.75)
        .max_by(|a, b| a.0.total_cmp(&b.0))
        .map(|(_, candidate)| candidate)
}

impl Settings {
    /// Resolves `given` against `specs`, filling defaults.
    ///
    /// # Errors
    /// An undeclared name, a value of the wrong kind or outside its range.
    pub fn resolve(
        specs: &[SettingSpec],
        given: &BTreeMap<String, Setting>,
    ) -> Result<Self, SettingError> {
        let mut values = BTreeMap::new();
        for (name, value) in given {
            let Some(spec) = specs.iter().find(|spec| spec.name == name) else {
                return Err(SettingError::Unknown {
                    name: name.clone(),
                    nearest: nearest_word(name, specs.iter().map(|s| s.name)).map(str::to_owned),
                    known: specs.iter().map(|s| s.name.to_owned()).collect(),
                });
            };
            values.insert(name.clone(), admit(spec, value)?);
        }
        for spec in specs {
            values.entry(spec.name.to_owned()).or_insert_with(|| spec.default.setting());
        }
        Ok(Settings { values })
    }

    /// Makes settings of one word that no card declares, such as the command of an outside method.
    pub fn of_word(name: &str, word: &str) -> Self {
        let values = BTreeMap::from([(name.to_owned(), Setting::Word(word.to_owned()))]);
        Settings { values }
    }

    /// Returns the whole number under `name`. Panics when the card declares no such integer.
    #[track_caller]
    pub fn integer(&self, name: &str) -> i64 {
        match self.values.get(name) {
            Some(Setting::Integer(value)) => *value,
            other => panic!("setting `{name}` is {other:?}, not a whole number"),
        }
    }

    /// Returns the whole number under `name` as a size.
    #[track_caller]
    pub fn size(&self, name: &str) -> usize {
        usize::try_from(self.integer(name)).expect("a size is not negative")
    }

    /// Returns the word under `name`. Panics when the card declares no such word.
    #[track_caller]
    pub fn word(&self, name: &str) -> &str {
        match self.values.get(name) {
            Some(Setting::Word(word)) => word,
            other => panic!("setting `{name}` is {other:?}, not a word"),
        }
    }

    /// Returns the decimal number under `name`.
    #[track_caller]
    pub fn decimal(&self, name: &str) -> f64 {
        match self.values.get(name) {
            Some(Setting::Decimal(text)) => text.parse().expect("a decimal prints as a number"),
            other => panic!("setting `{name}` is {other:?}, not a decimal"),
        }
    }

    /// Returns the value under `name`, if declared.
    pub fn get(&self, name: &str) -> Option<&Setting> {
        self.values.get(name)
    }

    /// Iterates over names and values in alphabetical order.
    pub fn iter(&self) -> impl Iterator<Item = (&str, &Setting)> {
        self.values.iter().map(|(name, value)| (name.as_str(), value))
    }
}

impl fmt::Display for Settings {
    /// Writes the canonical spelling `name=value name=value`, names in alphabetical order.
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        for (position, (name, value)) in self.values.iter().enumerate() {
            let gap = if position == 0 { "" } else { " " };
            write!(f, "{gap}{name}={value}")?;
        }
        Ok(())
    }
}

fn admit(spec: &SettingSpec, value: &Setting) -> Result<Setting, SettingError> {
    let refuse = |nearest: Option<&str>| SettingError::Value {
        name: spec.name.to_owned(),
        value: value.to_string(),
        expected: spec.kind.to_string(),
        nearest: nearest.map(str::to_owned),
    };
    let integer_in = |value: i64, least: i64, most: i64| {
        if (least..=most).contains(&value) {
            Ok(Setting::Integer(value))
        } else {
            Err(refuse(None))
        }
    };
    match (spec.kind, value) {
        (Kind::Integer { least, most }, Setting::Integer(v)) => integer_in(*v, least, most),
        (Kind::WordOrInteger { least, most, .. }, Setting::Integer(v)) => {
            integer_in(*v, least, most)
        }
        (Kind::Word(words) | Kind::WordOrInteger { words, .. }, Setting::Word(word)) => {
            if words.contains(&word.as_str()) {
                Ok(value.clone())
            } else {
                Err(refuse(nearest_word(word, words.iter().copied())))
            }
        }
        (Kind::Decimal { least, most }, Setting::Decimal(text)) => match text.parse::<f64>() {
            Ok(v) if (least..=most).contains(&v) => Ok(Setting::decimal(v)),
            _ => Err(refuse(None)),
        },
        (Kind::Decimal { least, most }, Setting::Integer(v)) => {
            let v = *v as f64;
            if (least..=most).contains(&v) { Ok(Setting::decimal(v)) } else { Err(refuse(None)) }
        }
        _ => Err(refuse(None)),
    }
}

/// How the convex relaxation of a family behaves.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Relaxation {
    /// The relaxation has the planted point as its only optimum.
    Tight,
    /// The planted point lies on an optimal face of higher rank.
    Face,
    /// The relaxation's optimum is strictly below the rank-constrained optimum.
    Gap,
    /// A knob of the family moves it from a gap to tightness.
    GapToTight,
}

impl Relaxation {
    /// Returns the word used in tables and on cards.
    pub fn word(self) -> &'static str {
        match self {
            Relaxation::Tight => "tight",
            Relaxation::Face => "face",
            Relaxation::Gap => "gap",
            Relaxation::GapToTight => "gap to tight",
        }
    }
}

/// What a family says of itself.
#[derive(Clone, Copy, Debug)]
pub struct FamilyCard {
    /// Name in plans, lower case with hyphens.
    pub id: &'static str,
    /// One line.
    pub title: &'static str,
    /// The problem in formulas: cost, constraints, domain.
    pub formula: &'static str,
    /// What is planted and how it is hidden.
    pub construction: &'static str,
    /// The known optimum and its rank.
    pub optimum: &'static str,
    /// How the relaxation behaves.
    pub relaxation: Relaxation,
    /// Kind of certificate and how it is checked.
    pub certificate: &'static str,
    /// Published source of the construction, or "own construction" with what it rests on.
    pub source: &'static str,
    /// Parameters.
    pub parameters: &'static [SettingSpec],
}

/// The class of a method.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum MethodClass {
    /// Solves the convex relaxation and truncates.
    Relaxation,
    /// Solves relaxations again and again with a cost that grows dearer for the eigenvalues beyond the target
    /// rank.
    RankPromoting,
    /// Moves along the optimal face of the relaxation to lower rank.
    Reduction,
    /// Draws points of the target rank from the relaxation's solution.
    Rounding,
    /// Optimises over X = V V'.
    Factored,
    /// Projects alternately on simple sets.
    Projection,
    /// Interior-point steps with a projection inside.
    ProjectedInteriorPoint,
    /// Another program; what it does is its own business.
    Outside,
}

impl MethodClass {
    /// Returns the word used in tables and on cards.
    pub fn word(self) -> &'static str {
        match self {
            MethodClass::Relaxation => "relaxation",
            MethodClass::RankPromoting => "rank promoting",
            MethodClass::Reduction => "reduction",
            MethodClass::Rounding => "rounding",
            MethodClass::Factored => "factored",
            MethodClass::Projection => "projection",
            MethodClass::ProjectedInteriorPoint => "projected interior point",
            MethodClass::Outside => "outside",
        }
    }
}

/// What a method says of itself.
#[derive(Clone, Copy, Debug)]
pub struct MethodCard {
    /// Name in plans, lower case with hyphens.
    pub id: &'static str,
    /// One line.
    pub title: &'static str,
    /// Class.
    pub class: MethodClass,
    /// Authors, title, journal, year, DOI; "own combination" with what it is built from otherwise.
    pub reference: &'static str,
    /// Constraint types and sizes it supports.
    pub needs: &'static str,
    /// Cost of one iteration and memory.
    pub cost: &'static str,
    /// What is proved about it.
    pub guarantees: &'static str,
    /// Where it is known to fail.
    pub failures: &'static str,
    /// Options.
    pub options: &'static [SettingSpec],
}

#[cfg(test)]
mod tests {
    use super::*;

    const SPECS: &[SettingSpec] = &[
        SettingSpec {
            name: "order",
            kind: Kind::Integer { least: 2, most: 50 },
            default: DefaultSetting::Integer(20),
            meaning: "Order of the matrix variable.",
        },
        SettingSpec {
            name: "width",
            kind: Kind::WordOrInteger { words: &["target", "bound"], least: 1, most: 9 },
            default: DefaultSetting::Word("target"),
            meaning: "Width of the factor.",
        },
    ];

    fn given(pairs: &[(&str, Setting)]) -> BTreeMap<String, Setting> {
        pairs.iter().map(|(n, v)| ((*n).to_owned(), v.clone())).collect()
    }

    #[test]
    fn defaults_fill_what_is_not_given() {
        let settings = Settings::resolve(SPECS, &given(&[("order", Setting::Integer(7))])).unwrap();
        assert_eq!(settings.to_string(), "order=7 width=target");
    }

    #[test]
    fn unknown_names_and_words_get_the_nearest_one() {
        let error = Settings::resolve(SPECS, &given(&[("ordr", Setting::Integer(7))])).unwrap_err();
        assert!(error.to_string().contains("did you mean `order`"), "{error}");
        let word = Setting::Word("taget".to_owned());
        let error = Settings::resolve(SPECS, &given(&[("width", word)])).unwrap_err();
        assert!(error.to_string().contains("did you mean `target`"), "{error}");
    }

    #[test]
    fn values_out_of_range_are_refused() {
        for value in [1, 51, -3] {
            let given = given(&[("order", Setting::Integer(value))]);
            assert!(Settings::resolve(SPECS, &given).is_err());
        }
    }
}
