//! `duel --until-decided` through the program: fresh instances round after round, until a decision or a
//! cap; what was run is not run again.

use std::path::Path;

use rankassay::runner::journal;

/// Sixty small instances a round, on which both methods solve everything at different effort: only many
/// instances show that the solved rate is no worse.
const PLAN: &str = "seed = 5\n[[family]]\nname = \"tight-unique\"\norder = 8\ncount = 60\n\
    [[method]]\nname = \"relax-ipm\"\n[[method]]\nname = \"factored-alm\"\n[[method]]\nname = \"reduce-largest\"\n";

struct Ended {
    code: Option<i32>,
    out: String,
    err: String,
}

fn program(folder: &Path, arguments: &[&str]) -> Ended {
    let output = assert_cmd::Command::cargo_bin("rankassay")
        .unwrap()
        .current_dir(folder)
        .args(arguments)
        .output()
        .unwrap();
    Ended {
        code: output.status.code(),
        out: String::from_utf8(output.stdout).unwrap(),
        err: String::from_utf8(output.stderr).unwrap(),
    }
}

fn recorded(plan: &str) -> tempfile::TempDir {
    let folder = tempfile::tempdir().unwrap();
    std::fs::write(folder.path().join("plan.toml"), plan).unwrap();
    std::fs::write(
        folder.path().join("pair.dat-s"),
        "2\n1\n2\n1 1\n0 1 1 2 -1\n1 1 1 1 1\n2 1 2 2 1\n",
    )
    .unwrap();
    let ended = program(folder.path(), &["run", "plan.toml", "--into", "run", "--quiet"]);
    assert_eq!(ended.code, Some(0), "{}", ended.err);
    folder
}

const DUEL: [&str; 6] =
    ["duel", "run", "--incumbent", "reduce-largest", "--challenger", "factored-alm"];

#[test]
fn rounds_are_added_until_the_rule_decides_and_never_run_twice() {
    let folder = recorded(PLAN);
    let fixed = program(folder.path(), &DUEL);
    assert_eq!(fixed.code, Some(0), "{}", fixed.err);
    assert!(fixed.out.contains("Decision: UNDECIDED"), "{}", fixed.out);

    let capped =
        [&DUEL[..], &["--until-decided", "--rounds", "2", "--require", "decided"]].concat();
    let ended = program(folder.path(), &capped);
    assert_eq!(ended.code, Some(1), "{}", ended.out);
    assert!(ended.err.contains("look 2: undecided after 120 instances"), "{}", ended.err);

    let decided = [&DUEL[..], &["--until-decided", "--require", "decided"]].concat();
    let ended = program(folder.path(), &decided);
    assert_eq!(ended.code, Some(0), "{}{}", ended.out, ended.err);
    assert!(ended.err.contains("0 trials to run, 120 are recorded already"), "{}", ended.err);
    assert!(ended.out.contains("ADOPT (clause 2"), "{}", ended.out);
    assert!(ended.out.contains("look"), "{}", ended.out);

    // Rounds hold fresh instances of the two methods alone.
    let mut instances = std::collections::BTreeSet::new();
    let first = journal::read(&folder.path().join("run")).unwrap();
    instances.extend(first.instances.iter().map(|instance| instance.digest.clone()));
    for round in 1..=2 {
        let round = journal::read(&folder.path().join(format!("run/rounds/{round}"))).unwrap();
        assert_eq!(round.records.len(), 120);
        assert!(round.records.iter().all(|record| record.method != "relax-ipm"));
        instances.extend(round.instances.iter().map(|instance| instance.digest.clone()));
    }
    assert_eq!(instances.len(), 180);
    // A trial of a round replays like any other.
    let replay = program(folder.path(), &["replay", "run/rounds/1", "--every", "50"]);
    assert_eq!(replay.code, Some(0), "{}", replay.out);
    let again = program(folder.path(), &decided);
    assert_eq!((again.code, again.out), (Some(0), ended.out));
}

#[test]
fn what_cannot_be_continued_is_said() {
    let imports = "seed = 5\n[[import]]\npath = \"pair.dat-s\"\nrank = 1\noptimum = { value = -2.0, digits = 6, \
        source = \"by hand\" }\n[[method]]\nname = \"relax-ipm\"\n[[method]]\nname = \"factored-alm\"\n";
    let folder = recorded(imports);
    let duel = ["duel", "run", "--incumbent", "relax-ipm", "--challenger", "factored-alm"];
    let ended = program(folder.path(), &[&duel[..], &["--until-decided"]].concat());
    assert_eq!(ended.code, Some(2), "{}", ended.out);
    assert!(ended.err.contains("imported instances only"), "{}", ended.err);
    let unknown = program(
        folder.path(),
        &["duel", "run", "--incumbent", "relax-ipm", "--challenger", "factored-al"],
    );
    assert_eq!(unknown.code, Some(2));
    assert!(
        unknown.err.contains("factored-al") && unknown.err.contains("relax-ipm"),
        "{}",
        unknown.err
    );
    for wrong in [["--margin", "2"], ["--margin", "2,1.5"], ["--alpha", "0"]] {
        let ended = program(folder.path(), &[&duel[..], &wrong[..]].concat());
        assert_eq!(ended.code, Some(2), "{wrong:?}: {}", ended.err);
    }
}
