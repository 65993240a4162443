//! Trials in processes of their own: a method may panic, abort, overflow its stack, take all memory, leave
//! the process or never end, and only its own trial is touched. This file is its own worker, so it has a
//! `main` and no test harness.

#[cfg(unix)]
mod scripted {
    use std::collections::BTreeMap;
    use std::io::Read;
    use std::path::Path;
    use std::sync::Arc;
    use std::sync::atomic::{AtomicBool, Ordering};
    use std::time::{Duration, Instant};

    use rankassay::budget::Halt;
    use rankassay::card::{MethodCard, MethodClass};
    use rankassay::families;
    use rankassay::methods::{self, Method, Trial};
    use rankassay::problem::{Answer, Problem};
    use rankassay::record::{Record, Verdict};
    use rankassay::runner::{
        self, Ending, Isolation, Observer, Outcome, Placement, Plan, Retiming, Roster, RunOptions,
        Selection, Target, worker,
    };

    type Play = fn(&Problem, &mut Trial) -> Result<Answer, Halt>;

    struct Scripted {
        card: &'static MethodCard,
        play: Play,
    }

    impl Method for Scripted {
        fn card(&self) -> &'static MethodCard {
            self.card
        }

        fn solve(&self, problem: &Problem, trial: &mut Trial) -> Result<Answer, Halt> {
            (self.play)(problem, trial)
        }
    }

    const BLANK: MethodCard = MethodCard {
        id: "blank",
        title: "Scripted",
        class: MethodClass::Factored,
        reference: "own",
        needs: "",
        cost: "",
        guarantees: "",
        failures: "",
        options: &[],
    };

    macro_rules! scripted {
        ($id:literal, $play:expr) => {{
            static CARD: MethodCard = MethodCard { id: $id, ..BLANK };
            static METHOD: Scripted = Scripted { card: &CARD, play: $play };
            &METHOD as &'static dyn Method
        }};
    }

    fn good(problem: &Problem, trial: &mut Trial) -> Result<Answer, Halt> {
        let method = methods::find("factored-alm").unwrap();
        trial.options =
            rankassay::card::Settings::resolve(method.card().options, &BTreeMap::new()).unwrap();
        method.solve(problem, trial)
    }

    #[allow(unconditional_recursion, reason = "that is the fault")]
    fn dig(depth: u64) -> u64 {
        let room = std::hint::black_box([depth; 512]);
        dig(depth + 1) + room[(depth % 512) as usize]
    }

    /// Every fault, its verdict, and words of its reason.
    fn cast() -> Vec<(&'static dyn Method, Verdict, &'static str)> {
        vec![
            (scripted!("good", good), Verdict::Solved, ""),
            (
                scripted!("panics", |_, _| panic!("a scripted defect")),
                Verdict::Crashed,
                "a scripted defect",
            ),
            (scripted!("aborts", |_, _| std::process::abort()), Verdict::Crashed, "signal 6"),
            (scripted!("leaves", |_, _| std::process::exit(7)), Verdict::Crashed, "exit code 7"),
            (
                scripted!("digs", |_, _| Err(Halt::Failed(dig(0).to_string()))),
                Verdict::Crashed,
                "stack overflow",
            ),
            (
                scripted!("hoards", |_, _| {
                    let mut hoard = Vec::new();
                    loop {
                        hoard.push(vec![0u8; 1 << 27]);
                        std::hint::black_box(&hoard);
                    }
                }),
                Verdict::MemoryLimit,
                "refused more memory",
            ),
            (
                scripted!("sleeps", |_, _| loop {
                    std::thread::sleep(Duration::from_secs(3600));
                }),
                Verdict::TimeLimit,
                "did not end at the wall-time limit",
            ),
            (
                scripted!("spins", |_, _| loop {
                    std::hint::black_box(0);
                }),
                Verdict::TimeLimit,
                "did not end at the wall-time limit",
            ),
            (
                scripted!("refuses", |_, _| Err(Halt::Refused("not this".to_owned()))),
                Verdict::Refused,
                "not this",
            ),
            (scripted!("good-again", good), Verdict::Solved, ""),
        ]
    }

    struct Silent;

    impl Observer for Silent {
        fn begin(&self, _pending: usize, _recorded: usize) {}
        fn notice(&self, _text: &str) {}
        fn finished(&self, _record: &Record) {}
    }

    fn plan_text() -> String {
        let mut text = "seed = 3\n[budget]\nwall = \"1s\"\nmemory = \"64 MiB\"\n[[family]]\n\
            name = \"tight-unique\"\norder = 8\ncount = 2\n"
            .to_owned();
        for (method, _, _) in cast() {
            text += &format!("[[method]]\nname = \"{}\"\n", method.card().id);
        }
        text
    }

    fn run(isolation: Isolation, into: &Path, only: Option<Vec<String>>) -> Outcome {
        let methods: Vec<&dyn Method> = cast().iter().map(|(method, _, _)| *method).collect();
        let roster = Roster { families: families::registry(), methods: &methods };
        let plan = Plan::parse(&plan_text(), "plan.toml", Path::new(""), roster).unwrap();
        let options = RunOptions {
            target: Target::New(into.to_owned()),
            jobs: Some(2),
            selection: Selection { methods: only, ..Selection::default() },
            isolation,
            placement: Placement::Free,
            retiming: Retiming::None,
            interrupt: Arc::new(AtomicBool::new(false)),
        };
        runner::run(&plan, &options, &Silent).unwrap()
    }

    fn here() -> Isolation {
        Isolation::Processes(std::env::current_exe().unwrap())
    }

    fn every_fault_is_a_verdict_and_touches_nothing_else() {
        let folder = tempfile::tempdir().unwrap();
        let started = Instant::now();
        let outcome = run(here(), &folder.path().join("run"), None);
        assert_eq!(outcome.ending, Ending::Complete);
        assert!(started.elapsed() < Duration::from_secs(60), "something was waited for");
        assert_eq!(outcome.records.len(), 2 * cast().len());
        for (method, verdict, words) in cast() {
            let id = method.card().id;
            for record in outcome.records.iter().filter(|record| record.method == id) {
                assert_eq!(record.verdict, verdict, "{id}: {}", record.message);
                assert!(record.message.contains(words), "{id}: {}", record.message);
            }
        }
    }

    fn a_process_of_its_own_changes_no_figure() {
        let folder = tempfile::tempdir().unwrap();
        let only = || Some(vec!["good".to_owned(), "good-again".to_owned(), "panics".to_owned()]);
        let apart = run(here(), &folder.path().join("apart"), only());
        let within = run(Isolation::None, &folder.path().join("within"), only());
        let bare = |outcome: &Outcome| -> Vec<Record> {
            outcome.records.iter().map(Record::without_measurements).collect()
        };
        assert_eq!(bare(&apart), bare(&within));
        assert!(apart.records.iter().all(|record| record.cpu_s.is_some()));
    }

    fn an_interrupt_ends_the_processes() {
        let folder = tempfile::tempdir().unwrap();
        let methods: Vec<&dyn Method> = cast().iter().map(|(method, _, _)| *method).collect();
        let roster = Roster { families: families::registry(), methods: &methods };
        let text = plan_text().replace("wall = \"1s\"", "wall = \"10min\"");
        let plan = Plan::parse(&text, "plan.toml", Path::new(""), roster).unwrap();
        let interrupt = Arc::new(AtomicBool::new(false));
        let options = RunOptions {
            target: Target::New(folder.path().join("run")),
            jobs: Some(1),
            selection: Selection {
                methods: Some(vec!["sleeps".to_owned()]),
                ..Selection::default()
            },
            isolation: here(),
            placement: Placement::Free,
            retiming: Retiming::None,
            interrupt: Arc::clone(&interrupt),
        };
        let started = Instant::now();
        std::thread::spawn(move || {
            std::thread::sleep(Duration::from_millis(500));
            interrupt.store(true, Ordering::Relaxed);
        });
        let outcome = runner::run(&plan, &options, &Silent).unwrap();
        assert_eq!(outcome.ending, Ending::Interrupted);
        assert!(outcome.records.is_empty());
        assert!(started.elapsed() < Duration::from_secs(30));
    }

    #[allow(clippy::print_stdout, reason = "a test without a harness says what it did")]
    fn tell(name: &str) {
        println!("test {name} ... ok");
    }

    pub fn main() {
        if std::env::args().nth(1).as_deref() == Some(worker::COMMAND) {
            let mut task = String::new();
            std::io::stdin().read_to_string(&mut task).unwrap();
            let methods: Vec<&dyn Method> = cast().iter().map(|(method, _, _)| *method).collect();
            let roster = Roster { families: families::registry(), methods: &methods };
            worker::serve(&task, &mut std::io::stdout(), roster).unwrap();
            return;
        }
        let tests: [(&str, fn()); 3] = [
            (
                "every_fault_is_a_verdict_and_touches_nothing_else",
                every_fault_is_a_verdict_and_touches_nothing_else,
            ),
            ("a_process_of_its_own_changes_no_figure", a_process_of_its_own_changes_no_figure),
            ("an_interrupt_ends_the_processes", an_interrupt_ends_the_processes),
        ];
        for (name, test) in tests {
            test();
            tell(name);
        }
    }
}

#[cfg(unix)]
use rankassay::budget::memory::CountingAllocator;

/// As in the program itself.
#[cfg(unix)]
#[global_allocator]
static ALLOCATOR: CountingAllocator = CountingAllocator;

fn main() {
    #[cfg(unix)]
    scripted::main();
}
