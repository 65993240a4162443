//! The report: its bytes from synthetic records, and its behaviour in a headless Chromium.
//!
//! The browser tests need `chromium` and `chromedriver`; see [`browser`] for what happens without them.

mod browser;

use std::collections::{BTreeMap, BTreeSet};
use std::fs;
use std::path::PathBuf;

use browser::Browser;
use rankassay::record::{
    Cost, Figures, Identity, InstanceRecord, MethodRecord, Record, Verdict, Work,
};
use rankassay::tables::figures::Figure;
use rankassay::tables::report::{
    CardText, Context, MOST_FAILURES, MOST_TABLE_ROWS, RunFacts, page,
};
use rankassay::tables::{self, Input};

/// Records with what belongs to them.
struct Sample {
    records: Vec<Record>,
    instances: Vec<InstanceRecord>,
    methods: Vec<MethodRecord>,
    figures: Vec<Figure>,
    context: Context,
}

impl Sample {
    fn page(&self) -> String {
        let input = Input {
            records: &self.records,
            instances: &self.instances,
            methods: &self.methods,
            wall_limit_s: 20.0,
            tolerance: [1e-6; 3],
            traces: &[],
        };
        page(&input, &tables::all(&input), &self.figures, &self.context)
    }
}

fn instance(family: &str, index: u64, relaxation: &str, optimum: Option<f64>) -> InstanceRecord {
    InstanceRecord {
        instance: format!("{family}-{index}"),
        family: family.to_owned(),
        parameters: "order=20".to_owned(),
        index,
        seed: 1,
        blocks: 1,
        orthant: 0,
        order: 20,
        constraints: 21,
        target_rank: 1,
        rank_bound: 6,
        digest: String::new(),
        optimum,
        optimum_known: if optimum.is_some() { "certified" } else { "unknown" }.to_owned(),
        certificate: "dual-pair".to_owned(),
        uniqueness: "proved".to_owned(),
        relaxation: relaxation.to_owned(),
        source: String::new(),
    }
}

fn method(label: &str, class: &str) -> MethodRecord {
    MethodRecord {
        label: label.to_owned(),
        id: label.to_owned(),
        class: class.to_owned(),
        options: "width=target".to_owned(),
    }
}

fn record(number: usize, instance: &InstanceRecord, method: &str, verdict: Verdict) -> Record {
    let answered = !matches!(verdict, Verdict::Failed | Verdict::TimeLimit | Verdict::Crashed);
    let error = match verdict {
        Verdict::Solved | Verdict::Near => 1e-9 * (number + 1) as f64,
        _ => 0.125,
    };
    let known = answered && instance.optimum.is_some();
    Record::assemble(
        Identity {
            trial: format!("{number:04}-{}-{method}", instance.instance),
            instance: instance.instance.clone(),
            family: instance.family.clone(),
            parameters: instance.parameters.clone(),
            order: 20,
            constraints: 21,
            target_rank: 1,
            method: method.to_owned(),
            options: String::new(),
            seed: 20_261_201,
            repeat: 1,
        },
        verdict,
        if answered { "converged" } else { "stopped" },
        Figures {
            digits: known.then(|| -error.log10()),
            feasibility: answered.then_some(1e-9),
            optimum: instance.optimum,
            objective: answered.then_some(10.0 + error),
            raw_objective: answered.then_some(10.0 - error),
            objective_error: known.then_some(error),
            ranks: answered.then_some([1; 3]),
            tail_ratio: answered.then_some(0.0),
            ..Figures::default()
        },
        Cost {
            wall_s: Some(0.5 + number as f64),
            cpu_s: Some(0.25 + number as f64),
            peak_bytes: Some(1 << 20),
            ..Cost::default()
        },
        Some(Work { flops: 1_000_000 * (number as u64 + 1), ..Work::default() }),
        if verdict == Verdict::Solved { "" } else { "values 9.9 and 10.1" },
    )
}

fn drawing(name: &str) -> Figure {
    Figure {
        name: name.to_owned(),
        title: format!("Drawing of {name}"),
        caption: "Share against cost.".to_owned(),
        alt: "One curve that rises from none to all.".to_owned(),
        svg: "<svg xmlns=\"http://www.w3.org/2000/svg\" width=\"640\" height=\"400\"><rect width=\"640\" \
              height=\"400\" fill=\"#fff\"/><path d=\"M40 360L600 40\" stroke=\"#000\"/></svg>"
            .to_owned(),
    }
}

fn card(id: &str) -> CardText {
    CardText {
        id: id.to_owned(),
        title: "A title".to_owned(),
        fields: vec![("source".to_owned(), "A paper.\nIts second part.".to_owned())],
        settings: vec![
            ["width", "a whole number; default 1", "Width of the factor."].map(str::to_owned),
        ],
    }
}

/// Two planted families and one imported instance without an optimum, three methods, several verdicts.
fn sample() -> Sample {
    let mut instances: Vec<InstanceRecord> = Vec::new();
    for (family, relaxation) in [("tight-unique", "tight"), ("lattice-tiles", "gap")] {
        instances.extend((0..4).map(|index| instance(family, index, relaxation, Some(10.0))));
    }
    instances.push(instance("imported", 0, "", None));
    let labels = ["relax-ipm", "factored-alm", "late"];
    let mut records = Vec::new();
    for it in &instances {
        for label in labels {
            let verdict = match (it.family.as_str(), label, it.index) {
                ("imported", "late", _) => Verdict::Crashed,
                ("imported", ..) => Verdict::Feasible,
                (_, "late", 0) => Verdict::Failed,
                (_, "late", _) => Verdict::TimeLimit,
                ("lattice-tiles", "relax-ipm", _) => Verdict::Suboptimal,
                ("lattice-tiles", _, 3) => Verdict::Near,
                _ => Verdict::Solved,
            };
            records.push(record(records.len(), it, label, verdict));
        }
    }
    let run = RunFacts {
        folder: "runs/first try".to_owned(),
        plan_file: "plan.toml".to_owned(),
        plan_text: "title = \"A plan\"\n".to_owned(),
        started: "2026-12-01T10:00:00Z".to_owned(),
        ended: "2026-12-01T10:01:00Z".to_owned(),
        facts: vec![("processor".to_owned(), "one with eight cores".to_owned())],
        trials: BTreeSet::new(),
    };
    Sample {
        records,
        instances,
        methods: vec![
            method("relax-ipm", "relaxation"),
            method("factored-alm", "factored"),
            method("late", "factored"),
        ],
        figures: vec![drawing("profile"), drawing("by-size")],
        context: Context {
            title: "Three methods, two families".to_owned(),
            runs: vec![run],
            methods: vec![card("relax-ipm"), card("factored-alm")],
            families: vec![card("tight-unique")],
            cautions: vec!["The runs were made by two versions.".to_owned()],
            program: "rankassay".to_owned(),
        },
    }
}

/// Lists the values of an attribute, escapes undone as far as ids and addresses have them.
fn values<'a>(page: &'a str, attribute: &str) -> Vec<&'a str> {
    let mark = format!(" {attribute}=\"");
    page.split(&mark).skip(1).map(|rest| rest.split('"').next().unwrap()).collect()
}

/// Returns what stands between two marks, for every place where they stand.
fn between<'a>(page: &'a str, from: &str, to: &str) -> Vec<&'a str> {
    page.split(from).skip(1).map(|rest| rest.split(to).next().unwrap()).collect()
}

/// Returns the table or other part of the page with an id, up to the end of its section.
fn part<'a>(page: &'a str, id: &str) -> &'a str {
    let at = page.find(&format!(" id=\"{id}\"")).unwrap_or_else(|| panic!("no part {id}"));
    page[at..].split("</section>").next().unwrap()
}

fn body_rows(table: &str) -> usize {
    table.matches("<tr role=\"row\"").count() - 1
}

/// Checks what holds for every page, whatever is on it.
fn check_structure(page: &str) {
    let ids = values(page, "id");
    let unique: BTreeSet<&str> = ids.iter().copied().collect();
    assert_eq!(ids.len(), unique.len(), "ids are given twice: {ids:?}");
    for link in values(page, "href") {
        let inside = link.strip_prefix('#').is_some_and(|id| unique.contains(id));
        assert!(inside || link == "data:,", "a link leads to {link}");
    }
    for source in values(page, "src") {
        assert!(source.starts_with("data:image/svg+xml;base64,"), "a source is {source}");
    }
    for attribute in ["aria-labelledby", "data-copy", "aria-describedby"] {
        for target in values(page, attribute) {
            assert!(unique.contains(target), "{attribute} names {target}");
        }
    }
    for forbidden in [
        "url(",
        "@import",
        "<link rel=\"stylesheet",
        "<iframe",
        "<object",
        "<embed",
        "srcset",
        "scroll-behavior:",
        "transition:",
        "animation:",
    ] {
        assert!(!page.contains(forbidden), "the page contains {forbidden}");
    }
    assert_eq!(page.matches("<script").count(), 1);
    assert_eq!(page.matches("</script").count(), 1);
    assert_eq!(page.matches("<style").count(), 1);
    for figure in between(page, "<figure", "</figure>") {
        let alternatives = values(figure, "alt");
        assert!(alternatives.len() == 1 && !alternatives[0].trim().is_empty(), "{figure}");
    }
    let grids = between(page, "data-grid>", "</section>");
    assert!(!grids.is_empty());
    for grid in grids {
        let explained = between(grid, "<details class=\"columns\">", "</details>");
        assert_eq!(explained.len(), 1, "{grid}");
        let names = between(explained[0], "<dt>", "</dt>");
        let texts = between(explained[0], "<dd>", "</dd>");
        assert!(names.iter().chain(&texts).all(|text| !text.trim().is_empty()), "{explained:?}");
        assert_eq!(names.len(), texts.len());
        let heads = grid.matches("role=\"columnheader\"").count();
        assert!(heads == names.len() || (heads == 0 && grid.contains("No rows.")), "{grid}");
    }
}

#[test]
fn a_page_is_whole_and_needs_nothing_from_outside() {
    let sample = sample();
    let page = sample.page();
    check_structure(&page);
    assert_eq!(page, sample.page(), "the same input gives other bytes");
    let order = [
        "glance", "tables", "figures", "job", "methods", "families", "failures", "cautions",
        "verdicts", "rules",
    ];
    let places: Vec<usize> = order
        .iter()
        .map(|id| page.find(&format!("<section class=\"part\" id=\"{id}\"")).unwrap())
        .collect();
    assert!(places.is_sorted(), "{places:?}");
    for text in [
        "Three methods, two families",
        "one with eight cores",
        "title = &quot;A plan&quot;",
        "Its second part.",
        "The runs were made by two versions.",
        "default-src 'none'",
    ] {
        assert!(page.contains(text), "the page lacks {text}");
    }
    for table in ["accuracy", "rank", "runtime", "relaxation", "failures", "instances"] {
        assert!(page.contains(&format!(" id=\"table-{table}\"")), "no table {table}");
    }
    for verdict in Verdict::ALL {
        assert!(part(&page, "verdicts").contains(&format!("<dt>{}</dt>", verdict.word())));
    }
}

#[test]
fn an_empty_run_has_a_page() {
    let empty = Sample {
        records: Vec::new(),
        instances: Vec::new(),
        methods: Vec::new(),
        figures: Vec::new(),
        context: Context::default(),
    };
    let page = empty.page();
    check_structure(&page);
    assert!(page.contains("Nothing is recorded"));
    assert!(page.contains("No trial ended with another verdict"));
}

#[test]
fn the_summary_counts_what_the_records_say() {
    let page = sample().page();
    let rows = between(part(&page, "glance-table"), "<tr role=\"row\"", "</tr>");
    let row = rows.iter().find(|row| row.contains("factored-alm")).unwrap();
    // 7 of 8 known optima, one near, one feasible import; Wilson's formula by hand: centre
    // (0.875 + 1.9207 / 8) / (1 + 3.8415 / 8) = 0.7533, half width 0.2244.
    let texts: Vec<String> = between(row, "<td", "</td>")
        .iter()
        .map(|cell| {
            let mut text = String::new();
            let mut inside = true;
            for c in cell.chars() {
                match c {
                    '<' => inside = true,
                    '>' => inside = false,
                    _ if !inside => text.push(c),
                    _ => {}
                }
            }
            text
        })
        .collect();
    assert_eq!(texts[..5], ["88 % (53 to 98 %)", "7 of 8", "1", "1", "0"]);
    let glance = part(&page, "glance-table");
    assert!(glance.contains("Relaxation gap. ") && glance.contains("4 of 9 instances"));
    assert!(glance.contains("No known optimum. ") && glance.contains("For 1 of 9 instances"));
}

#[test]
fn hostile_text_stays_text() {
    let evil = "<script>hit=1</script>";
    let image = "\"'><img src=x onerror=hit=1>";
    let page = hostile().page();
    check_structure(&page);
    for text in [evil, image, "</style>", "<b>bold", "--><!--", "javascript:hit"] {
        assert!(!page[page.find("</style>").unwrap() + 8..].contains(text), "{text} came through");
    }
    assert!(page.contains("&lt;script&gt;hit=1&lt;/script&gt;"));
}

/// A sample whose every free text tries to break out.
fn hostile() -> Sample {
    let evil = "<script>hit=1</script>";
    let image = "\"'><img src=x onerror=hit=1>";
    let mut sample = sample();
    for record in &mut sample.records {
        record.message = format!("{evil}{image}</script></style>--><!--");
        record.stop_reason = image.to_owned();
        record.trial = format!("{}{image}", record.trial);
        record.method = record.method.replace("late", &format!("{evil}{image}"));
        record.family = record.family.replace("lattice-tiles", "\u{202e}</td><b>bold&amp;\"");
    }
    sample.methods[2].label = format!("{evil}{image}");
    sample.methods[2].options = image.to_owned();
    let context = &mut sample.context;
    context.title = format!("</title>{evil}");
    context.program = format!("{evil}/bin");
    context.cautions = vec![image.to_owned()];
    context.runs[0].plan_text = format!("</code></pre></script>{evil}");
    context.runs[0].folder = "it's $(reboot)".to_owned();
    context.runs[0].facts = vec![(evil.to_owned(), image.to_owned())];
    context.methods = vec![CardText {
        id: image.to_owned(),
        title: evil.to_owned(),
        fields: vec![(image.to_owned(), evil.to_owned())],
        settings: vec![[image.to_owned(), evil.to_owned(), image.to_owned()]],
    }];
    for figure in &mut sample.figures {
        figure.name = image.to_owned();
        figure.title = evil.to_owned();
        figure.alt = image.to_owned();
        figure.caption = evil.to_owned();
        figure.svg = figure.svg.replace("</svg>", &format!("{evil}</svg>"));
    }
    sample
}

#[test]
fn commands_name_the_folder_and_are_quoted() {
    let mut sample = sample();
    let commands = |page: &str| -> Vec<String> {
        between(part(page, "failures-list"), "<code class=\"command\"", "</code>")
            .iter()
            .map(|code| code.split('>').next_back().unwrap().to_owned())
            .collect()
    };
    let shown = commands(&sample.page());
    let unsolved = sample.records.iter().filter(|record| record.verdict != Verdict::Solved).count();
    assert_eq!(shown.len(), unsolved);
    assert_eq!(shown[0], "rankassay replay 'runs/first try' 0002-tight-unique-0-late");
    let mut second = sample.context.runs[0].clone();
    second.folder = "-second".to_owned();
    second.trials = sample.records.iter().skip(3).map(|record| record.trial.clone()).collect();
    sample.context.runs.push(second);
    let page = sample.page();
    let shown = commands(&page);
    assert_eq!(shown.len(), unsolved - 1, "a trial of an unknown folder has no command");
    assert_eq!(shown[0], "rankassay replay ./-second 0005-tight-unique-1-late");
    assert!(page.contains("its run folder is not known here"));
}

#[test]
fn power_networks_carry_their_caution() {
    let count = |sample: &Sample| sample.page().matches("are no operating advice").count();
    assert_eq!(count(&sample()), 0);
    let named = |family: &str, name: &str| {
        let mut sample = sample();
        for record in sample.records.iter_mut().filter(|record| record.family == "imported") {
            record.family = family.to_owned();
            record.instance = name.to_owned();
        }
        count(&sample)
    };
    for (family, name) in [
        ("radial-feeder", "x"),
        ("imported", "case118-OPF"),
        ("imported", "ieee30bus"),
        ("imported", "city-grid"),
    ] {
        assert_eq!(named(family, name), 3, "{family} {name}: top, tables, cautions");
    }
    assert_eq!(named("imported", "mcp100"), 0);
    let mut told = sample();
    told.context.cautions.push("These are models of a power network.".to_owned());
    assert_eq!(count(&told), 3);
}

#[test]
fn big_runs_are_cut_and_say_so() {
    let mut sample = sample();
    let (records, count) = (sample.records.clone(), 60);
    for copy in 1..count {
        sample.records.extend(records.iter().map(|record| Record {
            trial: format!("{}-{copy}", record.trial),
            instance: format!("{}-{copy}", record.instance),
            ..record.clone()
        }));
    }
    let total = sample.records.len();
    let unsolved = sample.records.iter().filter(|record| record.verdict != Verdict::Solved).count();
    assert!(total > MOST_TABLE_ROWS && unsolved > MOST_FAILURES);
    let page = sample.page();
    check_structure(&page);
    let instances = part(&page, "table-instances");
    assert_eq!(body_rows(instances), MOST_TABLE_ROWS);
    assert!(instances.contains(&format!("{MOST_TABLE_ROWS} of {total} rows")));
    assert!(instances.contains("tables/instances.csv"));
    let failures = part(&page, "failures-list");
    assert_eq!(body_rows(failures), MOST_FAILURES);
    assert!(failures.contains(&format!("{} are left out", unsolved - MOST_FAILURES)));
    assert!(failures.contains("tables/failures.csv"));
    let mut kinds: BTreeMap<(&str, &str, &str), usize> = BTreeMap::new();
    for record in sample.records.iter().filter(|record| record.verdict != Verdict::Solved) {
        *kinds.entry((&record.family, &record.method, record.verdict.word())).or_default() += 1;
    }
    let rows = between(failures, "<tr role=\"row\"", "</tr>");
    for (family, method, verdict) in kinds.keys() {
        let shown = rows.iter().any(|row| {
            [*family, *method, *verdict].iter().all(|word| row.contains(&format!(">{word}<")))
        });
        assert!(shown, "no row for {family} {method} {verdict}");
    }
}

/// A page on disk, gone when dropped.
struct File {
    _folder: tempfile::TempDir,
    path: PathBuf,
}

fn written(page: &str) -> File {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("report.html");
    fs::write(&path, page).unwrap();
    File { _folder: folder, path }
}

#[test]
fn a_browser_finds_nothing_to_complain_about() {
    let file = written(&sample().page());
    let Some(browser) = browser::open(&file.path) else { return };
    browser::check_all(&browser);
}

#[test]
fn hostile_text_does_nothing_in_a_browser() {
    let file = written(&hostile().page());
    let Some(browser) = browser::open(&file.path) else { return };
    browser::check_quiet(&browser);
    assert_eq!(browser.run("return typeof hit;"), "undefined");
    browser::check_figures(&browser);
    browser::check_widths(&browser);
}

#[test]
fn tables_sort_and_filter_in_a_browser() {
    let file = written(&sample().page());
    let Some(browser) = browser::open(&file.path) else { return };
    browser.resize(1280, 900);
    sorting(&browser);
    filtering(&browser);
    copying(&browser);
    links(&browser, &file);
}

/// Where the column of digits stands in the table of instances.
const DIGITS: &str = "#table-instances thead th:nth-child(9) button";

/// Returns the texts of a column of the table of instances.
fn column(browser: &Browser, at: usize) -> Vec<String> {
    let texts = browser.run(&format!(
        "return [...document.querySelectorAll('#table-instances tbody tr')].map((row) => row.cells[{at}].textContent);"
    ));
    texts.as_array().unwrap().iter().map(|text| text.as_str().unwrap().to_owned()).collect()
}

fn direction(browser: &Browser) -> String {
    let sort =
        browser.run(&format!("return document.querySelector('{DIGITS}').closest('th').ariaSort;"));
    sort.as_str().unwrap().to_owned()
}

fn sorting(browser: &Browser) {
    let head = browser.run(&format!("return document.querySelector('{DIGITS}').textContent;"));
    assert_eq!(head, "digits");
    let first = column(browser, 3);
    assert_eq!(direction(browser), "none");
    let exact = "return [...document.querySelectorAll('#table-instances tbody tr')]
        .map((row) => row.cells[8].dataset.v).map((value) => value === undefined ? null : Number(value));";
    let missing = column(browser, 8).iter().filter(|text| *text == "-").count();
    assert!(missing > 0 && missing < first.len());
    for (step, by) in ["click", "Enter", " "].into_iter().enumerate() {
        match by {
            "click" => browser.click(DIGITS),
            key => {
                browser.run(&format!("document.querySelector('{DIGITS}').focus();"));
                browser.press(&[if key == "Enter" { browser::ENTER } else { key }]);
            }
        }
        assert_eq!(direction(browser), ["ascending", "descending", "none"][step]);
        let values = browser.run(exact);
        let values: Vec<Option<f64>> =
            values.as_array().unwrap().iter().map(serde_json::Value::as_f64).collect();
        let numbers: Vec<f64> = values.iter().copied().flatten().collect();
        match step {
            0 => assert!(numbers.is_sorted(), "{numbers:?}"),
            1 => assert!(numbers.iter().rev().is_sorted(), "{numbers:?}"),
            _ => assert_eq!(column(browser, 3), first, "the third press restores the order"),
        }
        if step < 2 {
            assert_ne!(column(browser, 3), first);
            assert!(
                values[..numbers.len()].iter().all(Option::is_some),
                "missing is not last: {values:?}"
            );
        }
    }
    browser.click("#table-instances thead th:nth-child(2) button");
    assert!(column(browser, 1).is_sorted(), "words sort by their letters");
    let said = browser.run("return document.getElementById('announcer').textContent;");
    assert_eq!(said, "sorted by method, ascending");
}

fn filtering(browser: &Browser) {
    let shown = || {
        let rows = browser.run(
            "return [...document.querySelectorAll('#table-instances tbody tr')]
                .filter((row) => row.checkVisibility()).length;",
        );
        let count =
            browser.run("return document.querySelector('#table-instances output').textContent;");
        (rows.as_u64().unwrap(), count.as_str().unwrap().to_owned())
    };
    let live = browser
        .run("return document.querySelector('#table-instances output').getAttribute('aria-live');");
    assert_eq!(live, "polite");
    assert_eq!(shown(), (27, "27 of 27 rows".to_owned()));
    browser.fill("#table-instances [data-filter=text]", "TIGHT-unique");
    assert_eq!(shown(), (12, "12 of 27 rows".to_owned()));
    browser.fill("#table-instances [data-filter=method]", "late");
    assert_eq!(shown(), (4, "4 of 27 rows".to_owned()));
    browser.fill("#table-instances [data-filter=family]", "imported");
    assert_eq!(shown(), (0, "0 of 27 rows: none fits".to_owned()));
    browser.click("#table-instances button[type=reset]");
    assert_eq!(shown(), (27, "27 of 27 rows".to_owned()));
}

fn copying(browser: &Browser) {
    let button = "#failures-list button.copy";
    // Neither way of copying is allowed: the command stays selected.
    browser.run(
        "Object.defineProperty(navigator, 'clipboard', { value: undefined, configurable: true });
         document.execCommand = () => false;",
    );
    browser.click(button);
    let wait = "const end = Date.now() + 2000;
        const button = document.querySelector('#failures-list button.copy');
        return (async () => {
            while (button.textContent === 'copy' && Date.now() < end) await new Promise((done) => setTimeout(done, 20));
            return [button.textContent, String(getSelection()), document.querySelector('.command').textContent];
        })();";
    let found = browser.run(wait);
    assert_eq!(found[0], "selected");
    assert_eq!(found[1], found[2]);
    // The old command is allowed.
    browser.run(
        "document.execCommand = () => true; document.querySelector('.copy').textContent = 'copy';",
    );
    browser.click(button);
    assert_eq!(browser.run(wait)[0], "copied");
}

fn links(browser: &Browser, file: &File) {
    browser.go_to(&file.path, "method-factored-alm");
    let open = "return document.getElementById('method-factored-alm').open;";
    assert_eq!(browser.run(open), true, "a link into a card unfolds it");
    browser.go_to(&file.path, "table-instances");
    let top = browser
        .run("return document.getElementById('table-instances').getBoundingClientRect().top;");
    assert!(top.as_f64().unwrap().abs() < 900.0, "the table is not in sight: {top}");
}

#[test]
fn without_scripts_everything_reads() {
    let file = written(&sample().page());
    let Some(browser) = browser::open(&file.path) else { return };
    browser.without_scripts();
    browser.go(&file.path);
    let found = browser.run(
        "return [document.querySelectorAll('thead button').length,
                 [...document.querySelectorAll('form, input, select, button')].filter((part) => part.checkVisibility()).length,
                 document.querySelectorAll('#table-instances tbody tr').length,
                 document.querySelector('.command').textContent.length > 0];",
    );
    assert_eq!(found, serde_json::json!([0, 0, 27, true]));
}
