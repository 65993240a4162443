//! Tables from synthetic records, held against snapshots.

use rankassay::record::{
    Cost, Figures, Identity, InstanceRecord, MethodRecord, Record, Verdict, Work,
};
use rankassay::tables::{self, Input};

fn instance(id: &str, family: &str, relaxation: &str) -> InstanceRecord {
    InstanceRecord {
        instance: id.to_owned(),
        family: family.to_owned(),
        parameters: "order=20".to_owned(),
        index: 0,
        seed: 1,
        blocks: 1,
        orthant: 0,
        order: 20,
        constraints: 21,
        target_rank: 1,
        rank_bound: 6,
        digest: String::new(),
        optimum: Some(10.0),
        optimum_known: "certified".to_owned(),
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
        options: String::new(),
    }
}

struct Sketch {
    instance: usize,
    method: &'static str,
    verdict: Verdict,
    stop: &'static str,
    objective: Option<f64>,
    rank: Option<u64>,
    seconds: f64,
    message: &'static str,
}

fn record(number: usize, instance: &InstanceRecord, sketch: &Sketch) -> Record {
    let error = sketch.objective.map(|objective| (objective - 10.0_f64).abs() / 11.0);
    Record::assemble(
        Identity {
            trial: format!("{number:04}-{}-{}", instance.instance, sketch.method),
            instance: instance.instance.clone(),
            family: instance.family.clone(),
            parameters: instance.parameters.clone(),
            order: 20,
            constraints: 21,
            target_rank: 1,
            method: sketch.method.to_owned(),
            options: String::new(),
            seed: 1,
            repeat: 1,
        },
        sketch.verdict,
        sketch.stop,
        Figures {
            digits: error.map(|error| -error.max(1e-16).log10()),
            optimum: instance.optimum,
            objective: sketch.objective,
            raw_objective: sketch.objective,
            objective_error: error,
            ranks: sketch.rank.map(|rank| [rank; 3]),
            tail_ratio: sketch.rank.map(|rank| (rank - 1) as f64 / 8.0),
            ..Figures::default()
        },
        Cost {
            wall_s: Some(sketch.seconds * 1.25),
            cpu_s: Some(sketch.seconds),
            peak_bytes: Some(3 << 20),
            ..Cost::default()
        },
        Some(Work {
            flops: (sketch.seconds * 1e9) as u64,
            eigendecompositions: 4,
            factorisations: 30,
            operator_products: 60,
            inner_steps: 15,
        }),
        sketch.message,
    )
}

fn scene() -> (Vec<Record>, Vec<InstanceRecord>, Vec<MethodRecord>) {
    let instances = vec![
        instance("tight-0", "tight-unique", "tight"),
        instance("tight-1", "tight-unique", "tight"),
        instance("tiles-0", "lattice-tiles", "gap"),
    ];
    let methods =
        vec![method("relax-ipm", "relaxation"), method("factored-alm+width=bound", "factored")];
    let relax = |instance, verdict, objective, rank, seconds| Sketch {
        instance,
        method: "relax-ipm",
        verdict,
        stop: "converged",
        objective: Some(objective),
        rank: Some(rank),
        seconds,
        message: "",
    };
    let factored = |instance, verdict, stop, objective, rank, seconds, message| Sketch {
        instance,
        method: "factored-alm+width=bound",
        verdict,
        stop,
        objective,
        rank,
        seconds,
        message,
    };
    let sketches = [
        relax(0, Verdict::Solved, 10.0 + 2e-9, 1, 0.0123),
        factored(0, Verdict::Solved, "converged", Some(10.0), Some(1), 0.5, ""),
        relax(1, Verdict::Near, 10.0 - 3e-8, 1, 0.02),
        factored(
            1,
            Verdict::Crashed,
            "crashed",
            None,
            None,
            0.001,
            "the method panicked: a | pivot, \"zero\"",
        ),
        relax(2, Verdict::Infeasible, 6.2, 5, 0.3),
        factored(2, Verdict::TimeLimit, "time-limit", Some(10.7), Some(1), 20.01, ""),
    ];
    let records = sketches
        .iter()
        .enumerate()
        .map(|(number, sketch)| record(number + 1, &instances[sketch.instance], sketch))
        .collect();
    (records, instances, methods)
}

fn with_input<T>(make: impl Fn(&Input<'_>) -> T) -> T {
    let (records, instances, methods) = scene();
    make(&Input {
        records: &records,
        instances: &instances,
        methods: &methods,
        wall_limit_s: 20.0,
        tolerance: [1e-6; 3],
        traces: &[],
    })
}

#[test]
fn the_summary_is_aligned_and_fits() {
    let text = with_input(tables::summary);
    assert!(text.lines().all(|line| line.chars().count() <= tables::TEXT_WIDTH));
    insta::assert_snapshot!("summary", text);
}

#[test]
fn tables_as_markdown() {
    let text = with_input(|input| {
        tables::all(input).iter().map(tables::Table::to_markdown).collect::<Vec<_>>().join("\n")
    });
    insta::assert_snapshot!("markdown", text);
}

#[test]
fn tables_as_csv() {
    let text = with_input(|input| {
        let texts = tables::all(input)
            .into_iter()
            .map(|table| format!("{}\n{}", table.name, table.to_csv()));
        texts.collect::<Vec<_>>().join("\n")
    });
    insta::assert_snapshot!("csv", text);
}

#[test]
fn tables_as_latex() {
    let text = with_input(|input| {
        tables::all(input).iter().map(tables::Table::to_latex).collect::<Vec<_>>().join("\n")
    });
    for line in text.lines().filter(|line| line.ends_with("\\\\")) {
        assert!(!line.contains(['<', '>', '|', '"']), "unescaped: {line}");
    }
    insta::assert_snapshot!("latex", text);
}

#[test]
fn tables_as_html() {
    let text = with_input(|input| tables::all(input)[0].to_html());
    insta::assert_snapshot!("html", text.replace("><", ">\n<"));
}

#[test]
fn every_column_is_explained_and_every_caption_says_its_sample() {
    with_input(|input| {
        for table in tables::all(input) {
            assert!(table.caption.contains("Sample: 6 trials on 3 instances."), "{}", table.name);
            let mut names: Vec<_> = table.columns.iter().map(|column| column.name).collect();
            names.sort_unstable();
            names.dedup();
            assert_eq!(names.len(), table.columns.len(), "{}: a name twice", table.name);
            for column in &table.columns {
                assert!(column.help.len() > 8 && column.help.ends_with('.'), "{}", column.name);
                // Times and memory say their unit where people read them.
                let unit = ["seconds", "MiB"].iter().any(|unit| column.help.contains(unit));
                assert!(column.nature == tables::Nature::Stable || unit, "{}", column.name);
            }
        }
    });
}

#[test]
fn long_tables_are_cut_for_people_and_whole_in_csv() {
    let (records, instances, methods) = scene();
    let many: Vec<Record> = (0..2500)
        .map(|number| Record { trial: format!("{number:04}-x"), ..records[number % 6].clone() })
        .collect();
    let input = Input {
        records: &many,
        instances: &instances,
        methods: &methods,
        wall_limit_s: 20.0,
        tolerance: [1e-6; 3],
        traces: &[],
    };
    let table = tables::all(&input).pop().unwrap();
    assert_eq!(table.to_csv().lines().count(), 2501);
    let said = "The first 2000 of 2500 rows; all are in instances.csv.";
    for text in [table.to_markdown(), table.to_latex(), table.to_html()] {
        assert!(text.contains(said));
    }
    assert_eq!(table.to_html().matches("<tr>").count(), 2001);
}

#[test]
fn stable_tables_hold_no_time_and_no_memory() {
    let (records, instances, methods) = scene();
    let slower: Vec<Record> = records
        .iter()
        .map(|record| Record {
            wall_s: record.wall_s.map(|seconds| seconds * 3.0),
            cpu_s: record.cpu_s.map(|seconds| seconds * 2.0),
            peak_bytes: record.peak_bytes.map(|bytes| bytes * 2),
            ..record.clone()
        })
        .collect();
    let stable = |records: &[Record]| {
        let input = Input {
            records,
            instances: &instances,
            methods: &methods,
            wall_limit_s: 20.0,
            tolerance: [1e-6; 3],
            traces: &[],
        };
        tables::all(&input).iter().map(|table| table.stable().to_csv()).collect::<Vec<_>>()
    };
    assert_eq!(stable(&records), stable(&slower));
}

#[test]
fn long_names_are_cut_on_the_terminal_and_kept_in_files() {
    let (mut records, instances, mut methods) = scene();
    let long = "m".repeat(90);
    for record in &mut records {
        if record.method != "relax-ipm" {
            record.method.clone_from(&long);
        }
    }
    methods[1].label.clone_from(&long);
    let input = Input {
        records: &records,
        instances: &instances,
        methods: &methods,
        wall_limit_s: 20.0,
        tolerance: [1e-6; 3],
        traces: &[],
    };
    let text = tables::summary(&input);
    assert!(text.lines().all(|line| line.chars().count() <= tables::TEXT_WIDTH), "{text}");
    assert!(tables::all(&input)[0].to_csv().contains(&long));
}

#[test]
fn nothing_recorded_makes_empty_tables() {
    let input = Input {
        records: &[],
        instances: &[],
        methods: &[],
        wall_limit_s: 1.0,
        tolerance: [1e-6; 3],
        traces: &[],
    };
    for table in tables::all(&input) {
        assert!(table.rows.is_empty());
        assert_eq!(table.to_csv().lines().count(), 1);
    }
    assert!(tables::summary(&input).contains("Sample: 0 trials on 0 instances."));
}
