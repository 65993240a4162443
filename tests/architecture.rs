//! Holds the code against the map in `DEVELOPERS.md`: who may import whom, what only some modules
//! may touch, and what stands at the top level.

use std::collections::BTreeMap;
use std::fs;
use std::path::{Path, PathBuf};

/// Module, and what it may import. `*` stands for everything.
const IMPORTS: &[(&str, &str)] = &[
    ("linalg", "-"),
    ("seed", "-"),
    ("card", "-"),
    ("record", "-"),
    ("stats", "-"),
    ("budget", "-"),
    ("problem", "linalg"),
    ("families", "problem, linalg, seed, card"),
    ("formats", "problem"),
    ("engines", "problem, linalg, budget, seed"),
    ("methods", "engines, problem, linalg, budget, seed, card; outside/ also formats"),
    (
        "referee",
        "problem, linalg::eigen, linalg::norms, linalg::compensated, linalg::Mat, linalg::MatRef",
    ),
    ("runner", "families, formats, methods, referee, problem, seed, budget, record, card"),
    ("tables", "record, stats"),
    ("verdicts", "record, stats"),
    ("cli", "*"),
];

/// Text that only the named modules may contain outside tests.
const RESERVED: &[(&str, &[&str])] = &[
    ("println!", &["cli"]),
    ("print!(", &["cli"]),
    ("process::exit", &["cli"]),
    ("std::fs", &["formats", "methods/outside", "runner", "verdicts", "cli"]),
    ("std::env", &["methods/outside", "runner", "cli"]),
    ("std::process", &["methods/outside", "runner", "cli"]),
    ("Instant::now", &["budget", "runner"]),
    ("SystemTime", &["runner"]),
    ("HashMap", &[]),
    ("HashSet", &[]),
    ("faer::Par::rayon", &[]),
];

/// What the top level holds, dot-files and build output aside.
const TOP_LEVEL: &[&str] = &[
    "Cargo.lock",
    "Cargo.toml",
    "DEVELOPERS.md",
    "LICENSE",
    "README.md",
    "benches",
    "instances",
    "results",
    "src",
    "tests",
];

fn root() -> PathBuf {
    PathBuf::from(env!("CARGO_MANIFEST_DIR"))
}

fn sources(folder: &Path, found: &mut Vec<PathBuf>) {
    let mut entries: Vec<PathBuf> =
        fs::read_dir(folder).unwrap().map(|entry| entry.unwrap().path()).collect();
    entries.sort();
    for path in entries {
        if path.is_dir() {
            sources(&path, found);
        } else if path.extension().is_some_and(|extension| extension == "rs") {
            found.push(path);
        }
    }
}

/// Returns each module's files with their text before the first test module, comments dropped.
fn modules() -> BTreeMap<String, Vec<(String, String)>> {
    let src = root().join("src");
    let mut files = Vec::new();
    sources(&src, &mut files);
    let mut modules: BTreeMap<String, Vec<(String, String)>> = BTreeMap::new();
    for file in files {
        let relative = file.strip_prefix(&src).unwrap().to_str().unwrap().replace('\\', "/");
        let module = relative.split('/').next().unwrap().trim_end_matches(".rs").to_owned();
        if module == "lib" || module == "main" || is_test_file(&relative) {
            continue;
        }
        let text = fs::read_to_string(&file).unwrap();
        let code = text.split("#[cfg(test)]\nmod tests {").next().unwrap();
        let code: Vec<&str> =
            code.lines().filter(|line| !line.trim_start().starts_with("//")).collect();
        modules.entry(module).or_default().push((relative, code.join("\n")));
    }
    modules
}

fn is_test_file(relative: &str) -> bool {
    relative.ends_with("/tests.rs")
        || relative.contains("/tests/")
        || relative.ends_with("_tests.rs")
}

/// Returns every `crate::a::b` path of a text; braces are expanded one level.
fn crate_paths(code: &str) -> Vec<String> {
    let mut paths = Vec::new();
    for (position, _) in code.match_indices("crate::") {
        if position > 0 && code.as_bytes()[position - 1] == b'$' {
            continue;
        }
        let rest = &code[position + "crate::".len()..];
        let head: String =
            rest.chars().take_while(|c| c.is_alphanumeric() || *c == '_' || *c == ':').collect();
        let after = &rest[head.len()..];
        if after.starts_with('{') && head.ends_with("::") {
            let inside = &after[1..after.find('}').unwrap_or(after.len())];
            for item in inside.split(',') {
                let item = item.trim().split([' ', ':']).next().unwrap_or("");
                if !item.is_empty() && item != "self" {
                    paths.push(format!("{head}{item}"));
                }
            }
        } else {
            paths.push(head.trim_end_matches(':').to_owned());
        }
    }
    paths
}

/// Returns what the whole module may import, without what one folder of it may besides.
fn own(list: &str) -> &str {
    list.split("; ").next().unwrap()
}

#[test]
fn imports_follow_the_table() {
    let table: BTreeMap<&str, Vec<&str>> =
        IMPORTS.iter().map(|(module, list)| (*module, own(list).split(", ").collect())).collect();
    let mut wrong = Vec::new();
    for (module, files) in modules() {
        let Some(allowed) = table.get(module.as_str()) else {
            wrong.push(format!("module `{module}` is not in the import table"));
            continue;
        };
        for (file, code) in files {
            for path in crate_paths(&code) {
                let first = path.split("::").next().unwrap();
                let fits = first == module
                    || (file.starts_with("methods/outside/") && first == "formats")
                    || allowed.contains(&"*")
                    || allowed.iter().any(|entry| {
                        path == *entry || path.starts_with(&format!("{entry}::")) || first == *entry
                    });
                if !fits {
                    wrong.push(format!("src/{file} imports crate::{path}"));
                }
            }
        }
    }
    assert!(wrong.is_empty(), "imports that the table does not allow:\n{}", wrong.join("\n"));
}

#[test]
fn methods_and_families_do_not_import_each_other() {
    let mut wrong = Vec::new();
    for (module, names) in [
        ("methods", rankassay::methods::registry().iter().map(|m| m.card().id).collect::<Vec<_>>()),
        ("families", rankassay::families::registry().iter().map(|f| f.card().id).collect()),
    ] {
        for (file, code) in &modules()[module] {
            for name in &names {
                let name = name.replace('-', "_");
                let own = file.contains(&format!("/{name}")) || file.ends_with("/mod.rs");
                let path = [format!("{module}::{name}"), format!("super::{name}")];
                if !own && path.iter().any(|path| code.contains(path.as_str())) {
                    wrong.push(format!("src/{file} imports {name}"));
                }
            }
        }
    }
    assert!(wrong.is_empty(), "{}", wrong.join("\n"));
}

#[test]
fn reserved_words_stay_in_their_rooms() {
    let mut wrong = Vec::new();
    for (module, files) in modules() {
        for (file, code) in files {
            for (word, rooms) in RESERVED {
                let inside =
                    |room: &&str| *room == module.as_str() || file.starts_with(&format!("{room}/"));
                if code.contains(word) && !rooms.iter().any(inside) {
                    wrong.push(format!("src/{file} contains {word}"));
                }
            }
        }
    }
    assert!(wrong.is_empty(), "{}", wrong.join("\n"));
}

#[test]
fn the_map_shows_the_same_table() {
    let map = fs::read_to_string(root().join("DEVELOPERS.md")).unwrap();
    for (module, list) in IMPORTS {
        let row = map
            .lines()
            .find(|line| line.starts_with(&format!("| `{module}` |")))
            .unwrap_or_else(|| panic!("DEVELOPERS.md has no row for `{module}`"));
        let shown = row.trim_end_matches(" |").rsplit(" | ").next().unwrap().trim();
        let expected = if *list == "*" { "everything" } else { list };
        assert_eq!(shown, expected, "row of `{module}` in DEVELOPERS.md");
    }
}

#[test]
fn every_file_is_short_and_opens_with_its_purpose() {
    let src = root().join("src");
    let mut files = Vec::new();
    sources(&src, &mut files);
    let mut wrong = Vec::new();
    for file in files {
        let text = fs::read_to_string(&file).unwrap();
        let name = file.strip_prefix(&src).unwrap().display().to_string();
        if !text.starts_with("//!") {
            wrong.push(format!("src/{name} does not open with a module comment"));
        }
        let lines = text.lines().take_while(|line| !line.starts_with("#[cfg(test)]")).count();
        if lines > 500 {
            wrong.push(format!("src/{name} has {lines} lines before its tests"));
        }
    }
    assert!(wrong.is_empty(), "{}", wrong.join("\n"));
}

#[test]
fn the_top_level_holds_what_the_map_lists() {
    for entry in fs::read_dir(root()).unwrap() {
        let name = entry.unwrap().file_name().into_string().unwrap();
        let local =
            name.starts_with('.') || name == "target" || name == "runs" || name == "examples";
        assert!(local || TOP_LEVEL.contains(&name.as_str()), "{name} at the top level");
    }
}

#[test]
fn cards_are_complete_and_unique() {
    let mut ids = Vec::new();
    for method in rankassay::methods::registry() {
        let card = method.card();
        ids.push(card.id);
        for text in
            [card.title, card.reference, card.needs, card.cost, card.guarantees, card.failures]
        {
            assert!(text.len() > 4, "{}: an empty field", card.id);
        }
        check_settings(card.id, card.options);
    }
    for family in rankassay::families::registry() {
        let card = family.card();
        ids.push(card.id);
        for text in [
            card.title,
            card.formula,
            card.construction,
            card.optimum,
            card.certificate,
            card.source,
        ] {
            assert!(text.len() > 4, "{}: an empty field", card.id);
        }
        check_settings(card.id, card.parameters);
    }
    for id in &ids {
        assert!(
            id.chars().all(|c| c.is_ascii_lowercase() || c.is_ascii_digit() || c == '-'),
            "{id}"
        );
    }
    let count = ids.len();
    ids.sort_unstable();
    ids.dedup();
    assert_eq!(ids.len(), count, "two cards share an id");
}

fn check_settings(id: &str, specs: &[rankassay::card::SettingSpec]) {
    let given: BTreeMap<_, _> =
        specs.iter().map(|spec| (spec.name.to_owned(), spec.default.setting())).collect();
    assert_eq!(given.len(), specs.len(), "{id}: two settings share a name");
    rankassay::card::Settings::resolve(specs, &given)
        .unwrap_or_else(|error| panic!("{id}: a default is refused: {error}"));
    for spec in specs {
        assert!(spec.meaning.ends_with('.'), "{id}: the meaning of {} is no sentence", spec.name);
    }
}
