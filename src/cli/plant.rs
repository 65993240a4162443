//! `rankassay plant`.

use std::collections::BTreeMap;
use std::path::PathBuf;

use clap::Args;

use super::output::{say_and_end, tell};
use super::report::Failure;
use super::{Ended, Loudness};
use crate::card::{Setting, Settings, nearest_word};
use crate::families::{self, Family, PlantError};
use crate::formats;
use crate::problem::certificate::{Planted, Standing};
use crate::runner::{plant, write_files};

#[derive(Debug, Args)]
pub(super) struct Plant {
    /// Family
    family: String,
    /// Parameters, the others take their defaults
    #[arg(value_name = "KEY=VALUE")]
    parameters: Vec<String>,
    /// Master seed
    #[arg(long, value_name = "S", value_parser = clap::value_parser!(u64).range(0..=i64::MAX as u64))]
    seed: u64,
    /// Which instance of the seed; a plan with this seed numbers its instances alike, from 0
    #[arg(long, value_name = "I", default_value_t = 0)]
    index: u64,
    /// File to write; left out, standard output
    #[arg(long, value_name = "FILE")]
    to: Option<PathBuf>,
}

pub(super) fn execute(command: &Plant, loudness: Loudness) -> Ended {
    let (family, parameters) = resolved(&command.family, &command.parameters)?;
    let planted = planted(&command.family, &command.parameters, command.seed, command.index)?;
    if planted.certificate.standing() == Standing::Unproved && loudness != Loudness::Quiet {
        tell(&format!("{} {parameters}: {}", family.card().id, planted.proof.statement));
    }
    let origin =
        format!("{} {parameters} seed={} index={}", family.card().id, command.seed, command.index);
    let text = formats::instance::write(&formats::instance::Instance {
        problem: planted.problem,
        certificate: Some(planted.certificate),
        origin,
    });
    let Some(path) = &command.to else {
        return say_and_end(&text);
    };
    write_once(path, text)?;
    if loudness != Loudness::Quiet {
        tell(&format!("{} {parameters} written to {}", family.card().id, path.display()));
    }
    say_and_end("")
}

/// Plants the instance that the words of a command line name.
pub(super) fn planted(
    family: &str,
    parameters: &[String],
    seed: u64,
    index: u64,
) -> Result<Planted, Failure> {
    let (family, parameters) = resolved(family, parameters)?;
    plant(family, &parameters, seed, index).map_err(|error| match error {
        PlantError::Certificate(_) => Failure::defect(format!("internal error: {error}")),
        other => Failure::input(format!("{} {parameters}: {other}", family.card().id)),
    })
}

/// Finds the family and resolves its parameters.
fn resolved(
    family: &str,
    parameters: &[String],
) -> Result<(&'static dyn Family, Settings), Failure> {
    let found = families::find(family).ok_or_else(|| {
        let known: Vec<_> = families::registry().iter().map(|family| family.card().id).collect();
        let hint = nearest_word(family, known.iter().copied());
        let hint = hint.map_or(String::new(), |word| format!(" (did you mean `{word}`?)"));
        let known = known.join(", ");
        Failure::input(format!("unknown family `{family}`, expected one of {known}{hint}"))
    })?;
    let mut given = BTreeMap::new();
    for text in parameters {
        let (name, value) = text.split_once('=').ok_or_else(|| {
            Failure::input(format!("parameter `{text}`: expected NAME=VALUE, such as order=20"))
        })?;
        if given.insert(name.to_owned(), setting(value)).is_some() {
            return Err(Failure::input(format!("parameter `{name}` is given twice")));
        }
    }
    let settings = Settings::resolve(found.card().parameters, &given).map_err(Failure::input)?;
    Ok((found, settings))
}

/// Writes a file unless another one stands there; the same file again is fine.
fn write_once(path: &std::path::Path, text: String) -> Result<(), Failure> {
    match std::fs::read(path) {
        Ok(bytes) if bytes == text.as_bytes() => return Ok(()),
        Ok(_) => {
            let message = format!(
                "{} exists and holds something else; nothing is written over",
                path.display()
            );
            return Err(Failure::input(message));
        }
        Err(error) if error.kind() == std::io::ErrorKind::NotFound => {}
        Err(error) => return Err(Failure::input(format!("{}: {error}", path.display()))),
    }
    let (Some(folder), Some(name)) = (path.parent(), path.file_name()) else {
        return Err(Failure::input(format!("{} is no file name", path.display())));
    };
    write_files(folder, &[(name.to_string_lossy().into_owned(), text)]).map_err(Failure::input)
}

/// Reads a value as a whole number, a decimal number or a word, whichever fits first.
fn setting(text: &str) -> Setting {
    if let Ok(value) = text.parse::<i64>() {
        Setting::Integer(value)
    } else {
        match text.parse::<f64>() {
            Ok(value) if value.is_finite() => Setting::decimal(value),
            _ => Setting::Word(text.to_owned()),
        }
    }
}
