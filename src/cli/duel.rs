//! `rankassay duel`.

use std::collections::BTreeMap;
use std::path::{Path, PathBuf};
use std::process::ExitCode;
use std::sync::Arc;
use std::sync::atomic::AtomicBool;

use clap::{Args, ValueEnum};

use super::output::{say, tell};
use super::progress::{Bar, Progress};
use super::report::Failure;
use super::results::{self, Loaded};
use super::{Ended, INTERRUPTED, Loudness, isolation, listen};
use crate::methods::outside;
use crate::record::MethodRecord;
use crate::runner::{
    self, Ending, Manifest, Placement, Plan, Retiming, Roster, RunOptions, Selection, Target,
    journal, write_files,
};
use crate::verdicts::duel::{self, Basis, Decision, Mode, Terms};
use crate::verdicts::pairing::{self, Pairing};

/// Exit code of a duel that is not won although it is required to be.
const NOT_WON: u8 = 1;

/// Folder of the further rounds inside the run folder.
const ROUNDS: &str = "rounds";

#[derive(Clone, Copy, Debug, PartialEq, Eq, ValueEnum)]
enum Required {
    /// The challenger is to be adopted
    Adopt,
    /// The incumbent is to be kept
    Keep,
    /// Either of the two
    Decided,
}

#[derive(Clone, Copy, Debug, PartialEq, Eq, ValueEnum)]
enum By {
    /// Floating-point operations, the same on every machine
    Effort,
    /// Processor time
    Cpu,
}

#[derive(Debug, Args)]
pub(super) struct Duel {
    /// Run folders
    #[arg(required = true, value_name = "RUN")]
    runs: Vec<PathBuf>,
    /// Label of the method in use today
    #[arg(long, value_name = "METHOD")]
    incumbent: String,
    /// Label of the method that might replace it
    #[arg(long, value_name = "METHOD")]
    challenger: String,
    /// Loss of solved rate that is tolerated, in percentage points, and cost ratio that a cheaper challenger
    /// must reach
    #[arg(long, value_name = "POINTS,RATIO", default_value = "2,0.95", value_parser = margin)]
    margin: (f64, f64),
    /// Largest chance of a wrong decision to adopt when nothing differs
    #[arg(long, value_name = "SHARE", default_value_t = 0.05)]
    alpha: f64,
    /// Difference in solved rate worth detecting, in percentage points
    #[arg(long, value_name = "POINTS", default_value_t = 10.0)]
    detect: f64,
    /// Chance with which it should be detected
    #[arg(long, value_name = "SHARE", default_value_t = 0.8)]
    power: f64,
    /// What costs are compared by
    #[arg(long, value_enum, default_value_t = By::Effort)]
    by: By,
    /// Ends with code 1 unless this is the outcome
    #[arg(long, value_enum, value_name = "OUTCOME")]
    require: Option<Required>,
    /// Runs the plan again with fresh instances, both methods only, until a decision (takes one run folder)
    #[arg(long)]
    until_decided: bool,
    /// Most rounds in all when running until a decision, the run itself included
    #[arg(long, value_name = "N", default_value_t = 20, requires = "until_decided",
          value_parser = clap::value_parser!(u32).range(2..=1000))]
    rounds: u32,
    /// Number of trials at a time in further rounds [default: one for each core]
    #[arg(long, value_name = "N", requires = "until_decided",
          value_parser = clap::value_parser!(u16).range(1..=1024))]
    jobs: Option<u16>,
    /// Folder to write the decision to; left out with one run, that run's folder
    #[arg(long, value_name = "DIR")]
    into: Option<PathBuf>,
    /// Writes JSON
    #[arg(long)]
    json: bool,
}

/// Reads `POINTS,RATIO`.
fn margin(text: &str) -> Result<(f64, f64), String> {
    let expected = "expected POINTS,RATIO such as 2,0.95";
    let (points, ratio) = text.split_once(',').ok_or(expected)?;
    let number = |text: &str| text.trim().parse::<f64>().map_err(|_| expected.to_owned());
    Ok((number(points)?, number(ratio)?))
}

pub(super) fn execute(command: &Duel, loudness: Loudness, bar: Bar) -> Ended {
    let terms = Terms {
        margin_points: command.margin.0,
        margin_ratio: command.margin.1,
        alpha: command.alpha,
        detect_points: command.detect,
        power: command.power,
        basis: match command.by {
            By::Effort => Basis::Effort,
            By::Cpu => Basis::CpuTime,
        },
    };
    terms.check().map_err(Failure::input)?;
    let (loaded, mode) = if command.until_decided {
        match until_decided(command, &terms, loudness, bar)? {
            Some(ended) => ended,
            None => return Ok(ExitCode::from(INTERRUPTED)),
        }
    } else {
        (results::load(&command.runs, loudness)?, Mode::Fixed)
    };
    let pairing = paired(command, &loaded)?;
    let terms = if counts_itself(command, &loaded) && terms.basis == Basis::Effort {
        tell(
            "note: an outside method counts its own effort, so processor time is compared instead (start-up included)",
        );
        Terms { basis: Basis::CpuTime, ..terms }
    } else {
        terms
    };
    let places = places(&loaded);
    let program = results::program();
    let replay = duel::Replay {
        program: &program,
        folder: &|trial| places.get(trial).map(|at| loaded.folders[*at].display().to_string()),
    };
    let duel = duel::duel(&pairing, &terms, mode, &replay).map_err(Failure::input)?;
    let into = match (&command.into, command.runs.as_slice()) {
        (Some(folder), _) => Some(folder.as_path()),
        (None, [only]) => Some(only.as_path()),
        (None, _) => None,
    };
    let text =
        if command.json { format!("{}\n", duel.to_json().trim_end()) } else { duel.to_text() };
    if command.json || loudness != Loudness::Quiet {
        say(&text)?;
    }
    if let Some(folder) = into {
        write(folder, command, &duel, loudness)?;
    }
    let decision = duel.ruling.decision;
    let met = match command.require {
        None => true,
        Some(Required::Adopt) => decision == Decision::Adopt,
        Some(Required::Keep) => decision == Decision::Keep,
        Some(Required::Decided) => decision != Decision::Undecided,
    };
    if met {
        return Ok(ExitCode::SUCCESS);
    }
    tell(&format!("the outcome is {}, which is not what is required", decision.word()));
    Ok(ExitCode::from(NOT_WON))
}

fn paired(command: &Duel, loaded: &Loaded) -> Result<Pairing, Failure> {
    let merged = &loaded.merged;
    pairing::pair(&merged.records, &merged.instances, &command.challenger, &command.incumbent)
        .map_err(Failure::input)
}

/// Returns whether one of the two is an outside method, whose effort nobody but itself has counted.
fn counts_itself(command: &Duel, loaded: &Loaded) -> bool {
    let both = [&command.incumbent, &command.challenger];
    let outside = |method: &MethodRecord| method.id == outside::ID && both.contains(&&method.label);
    loaded.merged.methods.iter().any(outside)
}

/// Tells in which of the folders a trial is recorded.
fn places(loaded: &Loaded) -> BTreeMap<&str, usize> {
    let ids = loaded.merged.records.iter().map(|record| record.trial.as_str());
    ids.zip(loaded.merged.origins.iter().copied()).collect()
}

fn write(
    folder: &Path,
    command: &Duel,
    duel: &duel::Duel,
    loudness: Loudness,
) -> Result<(), Failure> {
    let stem = format!("{}-against-{}", command.challenger, command.incumbent);
    let files = [
        (format!("{stem}.md"), duel.to_markdown()),
        (format!("{stem}.json"), format!("{}\n", duel.to_json().trim_end())),
    ];
    let place = folder.join("duels");
    write_files(&place, &files).map_err(Failure::input)?;
    if loudness != Loudness::Quiet && !command.json {
        say(&format!("Written to {}\n", place.join(&files[0].0).display()))?;
    }
    Ok(())
}

/// Runs round after round until the rule decides or the cap is reached. None when interrupted.
fn until_decided(
    command: &Duel,
    terms: &Terms,
    loudness: Loudness,
    bar: Bar,
) -> Result<Option<(Loaded, Mode)>, Failure> {
    let [run] = command.runs.as_slice() else {
        return Err(Failure::input("--until-decided takes one run folder"));
    };
    let manifest = Manifest::read(run).map_err(Failure::input)?;
    let recorded = journal::read(run).map_err(Failure::input)?;
    let both = [&command.incumbent, &command.challenger];
    let done = recorded.records.iter().filter(|record| both.contains(&&record.method)).count();
    let all = recorded.header.trials / recorded.header.methods.len().max(1) as u64 * 2;
    if (done as u64) < all {
        return Err(Failure::input(format!(
            "{}: {done} of the {all} trials of the two methods are recorded; finish the run first \
             (`rankassay run --resume`)",
            run.display(),
        )));
    }
    drop(recorded);
    let interrupt = Arc::new(AtomicBool::new(false));
    listen(&interrupt)?;
    let mut folders = vec![run.clone()];
    let mut look = 1u64;
    loop {
        let loaded = results::load(&folders, loudness)?;
        let pairing = paired(command, &loaded)?;
        let basis = if counts_itself(command, &loaded) { Basis::CpuTime } else { terms.basis };
        let ruling =
            duel::look(look, &pairing, &Terms { basis, ..*terms }).map_err(Failure::input)?;
        if loudness != Loudness::Quiet {
            tell(&format!(
                "look {look}: {} after {} instances",
                ruling.decision.word(),
                pairing.pairs.len()
            ));
        }
        if ruling.decision != Decision::Undecided || look >= u64::from(command.rounds) {
            return Ok(Some((loaded, Mode::Look(look))));
        }
        drop(loaded);
        let folder = run.join(ROUNDS).join(look.to_string());
        if !add_round(command, &manifest, look, &folder, &interrupt, (loudness, bar))? {
            return Ok(None);
        }
        folders.push(folder);
        look += 1;
    }
}

/// Runs one further round of the plan, or what is missing of it; tells whether it is complete.
fn add_round(
    command: &Duel,
    manifest: &Manifest,
    round: u64,
    folder: &Path,
    interrupt: &Arc<AtomicBool>,
    (loudness, bar): (Loudness, Bar),
) -> Result<bool, Failure> {
    let beside = Path::new(&manifest.plan_file).parent().unwrap_or(Path::new(""));
    let plan = Plan::parse(&manifest.plan, &manifest.plan_file, beside, Roster::built_in())
        .map_err(|error| Failure::from(&error))?
        .in_round(round);
    if plan.sown.is_empty() {
        return Err(Failure::input(
            "the plan has imported instances only; there are no fresh ones to run until a decision",
        ));
    }
    let target = if folder.join(journal::FILE).exists() {
        Target::Resume(folder.to_owned())
    } else {
        Target::New(folder.to_owned())
    };
    let methods = vec![command.incumbent.clone(), command.challenger.clone()];
    let options = RunOptions {
        target,
        jobs: command.jobs.map(usize::from),
        selection: Selection { methods: Some(methods), ..Selection::default() },
        placement: Placement::Free,
        retiming: Retiming::None,
        isolation: isolation(false),
        interrupt: Arc::clone(interrupt),
    };
    let progress = Progress::new(loudness, bar);
    let outcome = runner::run(&plan, &options, &progress);
    progress.end();
    if outcome?.ending == Ending::Interrupted {
        tell("interrupted: what was run is kept; the same command goes on from there");
        return Ok(false);
    }
    Ok(true)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn margins_are_read() {
        assert_eq!(margin("2,0.95"), Ok((2.0, 0.95)));
        assert_eq!(margin(" 0.5 , 0.9"), Ok((0.5, 0.9)));
        for wrong in ["", "2", "2;0.95", "a,b"] {
            assert!(margin(wrong).is_err(), "{wrong}");
        }
    }
}
