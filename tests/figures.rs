//! Figures from synthetic records: sound XML, nothing outside, no two texts on each other, and
//! curves that agree with what is counted here anew.

use std::collections::{BTreeMap, BTreeSet};

use rankassay::record::{
    Cost, Figures, Identity, InstanceRecord, MethodRecord, Record, Trace, TraceRow, Verdict, Work,
};
use rankassay::stats::friedman::friedman;
use rankassay::stats::proportion::wilson;
use rankassay::stats::recovery::statistical_dimension;
use rankassay::tables::Input;
use rankassay::tables::figures::{self, Figure};

/// A run as figures see it.
#[derive(Clone, Debug, Default)]
struct Run {
    records: Vec<Record>,
    instances: Vec<InstanceRecord>,
    methods: Vec<MethodRecord>,
    traces: Vec<Trace>,
}

impl Run {
    fn figures(&self) -> Vec<Figure> {
        figures::all(&Input {
            records: &self.records,
            instances: &self.instances,
            methods: &self.methods,
            wall_limit_s: 20.0,
            tolerance: [1e-6; 3],
            traces: &self.traces,
        })
    }

    fn figure(&self, name: &str) -> Figure {
        let figures = self.figures();
        let names: Vec<String> = figures.iter().map(|figure| figure.name.clone()).collect();
        figures
            .into_iter()
            .find(|figure| figure.name == name)
            .unwrap_or_else(|| panic!("no figure {name} among {names:?}"))
    }
}

/// An instance in few words.
#[derive(Clone, Debug)]
struct Place {
    family: String,
    parameters: String,
    order: u64,
    constraints: u64,
    rank: u64,
}

fn place(family: &str, parameters: &str, order: u64, constraints: u64, rank: u64) -> Place {
    let (family, parameters) = (family.to_owned(), parameters.to_owned());
    Place { family, parameters, order, constraints, rank }
}

/// A reproducible number in [0, 1): the fractional part of a multiple of the golden ratio, stirred.
fn dice(seed: u64) -> f64 {
    let mut word = seed.wrapping_add(0x9E37_79B9_7F4A_7C15);
    word = (word ^ (word >> 30)).wrapping_mul(0xBF58_476D_1CE4_E5B9);
    word = (word ^ (word >> 27)).wrapping_mul(0x94D0_49BB_1331_11EB);
    ((word ^ (word >> 31)) >> 11) as f64 / (1_u64 << 53) as f64
}

fn instance(id: &str, place: &Place) -> InstanceRecord {
    InstanceRecord {
        instance: id.to_owned(),
        family: place.family.clone(),
        parameters: place.parameters.clone(),
        index: 0,
        seed: 1,
        blocks: 1,
        orthant: 0,
        order: place.order,
        constraints: place.constraints,
        target_rank: place.rank,
        rank_bound: 6,
        digest: String::new(),
        optimum: Some(10.0),
        optimum_known: "certified".to_owned(),
        certificate: "dual-pair".to_owned(),
        uniqueness: "proved".to_owned(),
        relaxation: String::new(),
        source: String::new(),
    }
}

fn record(id: &str, place: &Place, method: &str, repeat: u64, solved: bool, dice: f64) -> Record {
    let error = if solved { 1e-15 * 10f64.powf(8.0 * dice) } else { 0.3 * (0.1 + dice) };
    let seconds = 1e-3 * (place.order as f64 / 10.0).powi(2) * 10f64.powf(2.0 * dice);
    let identity = Identity {
        trial: format!("{id}-{method}-{repeat}"),
        instance: id.to_owned(),
        family: place.family.clone(),
        parameters: place.parameters.clone(),
        order: place.order,
        constraints: place.constraints,
        target_rank: place.rank,
        method: method.to_owned(),
        options: String::new(),
        seed: 1,
        repeat,
    };
    let figures = Figures {
        digits: Some(-error.log10()),
        optimum: Some(10.0),
        objective: Some(10.0 + error * 11.0),
        objective_error: Some(error),
        ..Figures::default()
    };
    let cost = Cost {
        wall_s: Some(1.1 * seconds),
        cpu_s: Some(seconds),
        peak_bytes: Some(1 << 20),
        ..Cost::default()
    };
    let work = Work { flops: (seconds * 1e9) as u64, ..Work::default() };
    let verdict = if solved { Verdict::Solved } else { Verdict::Infeasible };
    Record::assemble(identity, verdict, "converged", figures, cost, Some(work), "")
}

/// Makes a run in which method k solves with the given chance.
fn run(
    places: &[Place],
    each: u64,
    labels: &[String],
    chance: impl Fn(&Place, usize) -> f64,
) -> Run {
    let mut run = Run::default();
    for label in labels {
        run.methods.push(MethodRecord {
            label: label.clone(),
            id: label.clone(),
            class: String::new(),
            options: String::new(),
        });
    }
    let mut seed = 0;
    for (at, place) in places.iter().enumerate() {
        for index in 0..each {
            let id = format!("{}-{at}-{index}", place.family);
            run.instances.push(instance(&id, place));
            for (method, label) in labels.iter().enumerate() {
                seed += 2;
                let solved = dice(seed) < chance(place, method);
                let speed = (dice(seed + 1) + method as f64 / labels.len() as f64) / 2.0;
                run.records.push(record(&id, place, label, 1, solved, speed));
            }
        }
    }
    run
}

fn labels(count: usize, long: bool) -> Vec<String> {
    let tail = if long { "+starts=12+width=bound+tolerance=1e-9+growth=1.5+hold" } else { "" };
    (1..=count).map(|at| format!("method-{at:02}{tail}")).collect()
}

fn trace(trial: &str, method: usize, points: u64) -> Trace {
    let rows = (0..points)
        .map(|at| {
            let along = at as f64 / points as f64;
            let wave = 10f64.powf(0.4 * (at as f64 * 0.7).sin());
            TraceRow {
                flops: (at * at) * 40_000 * (method as u64 + 1),
                objective: Some(10.0 + wave * 10f64.powf(-9.0 * along)),
                residual: Some(wave * 10f64.powf(1.0 - (6.0 + method as f64 / 2.0) * along)),
                tail: (method != 1).then(|| 0.5 * (1.0 - along).powi(8)),
            }
        })
        .collect();
    Trace { trial: trial.to_owned(), rows }
}

/// Families of every kind: sizes, a grid with a threshold, a knob, one of a single point; and traces.
fn full(methods: usize, long: bool) -> Run {
    let mut places = Vec::new();
    for order in [10, 20, 40, 80] {
        places.push(place("tight", &format!("order={order} rank=1"), order, order, 1));
    }
    for constraints in [10, 20, 30, 40, 60, 80] {
        for rank in [1, 2, 3, 4] {
            let parameters = format!("constraints={constraints} order=20 rank={rank}");
            places.push(place("sensing", &parameters, 20, constraints, rank));
        }
    }
    for noise in ["0.01", "0.1", "0.5", "1"] {
        places.push(place("knob", &format!("noise={noise} order=24"), 24, 24, 1));
    }
    places.push(place("single", "order=12", 12, 12, 2));
    let mut run = run(&places, 4, &labels(methods, long), |place, method| {
        let ease = match place.family.as_str() {
            "sensing" => place.constraints as f64 / (40.0 * place.rank as f64),
            "tight" => 1.3 - place.order as f64 / 80.0,
            _ => 0.8,
        };
        ease - 0.06 * method as f64
    });
    let traced = [0, methods * 16, methods * 112, methods * 128];
    for start in traced {
        for method in 0..methods {
            run.traces.push(trace(&run.records[start + method].trial, method, 700));
        }
    }
    run
}

// Reading SVG.

#[derive(Clone, Debug, Default)]
struct Element {
    tag: String,
    attributes: BTreeMap<String, String>,
    text: String,
}

impl Element {
    fn number(&self, name: &str) -> f64 {
        let text = &self.attributes[name];
        text.parse().unwrap_or_else(|_| panic!("{name}=\"{text}\" of {} is no number", self.tag))
    }

    fn points(&self) -> Vec<(f64, f64)> {
        let pair = |pair: &str| {
            let (x, y) = pair.split_once(',').unwrap();
            (x.parse().unwrap(), y.parse().unwrap())
        };
        self.attributes["points"].split(' ').map(pair).collect()
    }
}

fn unescape(text: &str) -> String {
    let mut out = String::new();
    let mut rest = text;
    while let Some(at) = rest.find('&') {
        let end = at + rest[at..].find(';').unwrap_or_else(|| panic!("bare & in {text:?}"));
        out += &rest[..at];
        out += match &rest[at..=end] {
            "&amp;" => "&",
            "&lt;" => "<",
            "&gt;" => ">",
            "&quot;" => "\"",
            "&apos;" => "'",
            other => panic!("unknown entity {other}"),
        };
        rest = &rest[end + 1..];
    }
    out + rest
}

/// Reads an SVG text and panics when it is not well-formed. A `tspan` gives its text to its parent.
fn parse(svg: &str) -> Vec<Element> {
    assert!(!svg.chars().any(|letter| letter.is_control() && letter != '\n'), "control character");
    let mut elements: Vec<Element> = Vec::new();
    let mut open: Vec<(String, usize)> = Vec::new();
    let mut rest = svg;
    while let Some(at) = rest.find('<') {
        let text = &rest[..at];
        assert!(!text.contains('>'), "bare > in {text:?}");
        if let Some((_, own)) = open.last() {
            elements[*own].text += &unescape(text);
        } else {
            assert!(text.trim().is_empty(), "text outside the root: {text:?}");
        }
        let end = at + rest[at..].find('>').expect("a tag ends");
        let inside = &rest[at + 1..end];
        rest = &rest[end + 1..];
        if let Some(tag) = inside.strip_prefix('/') {
            let (opened, _) = open.pop().expect("an open element");
            assert_eq!(opened, tag);
            continue;
        }
        let (inside, closed) = match inside.strip_suffix('/') {
            Some(inside) => (inside, true),
            None => (inside, false),
        };
        let element = element(inside);
        let tag = element.tag.clone();
        assert!(elements.is_empty() || !open.is_empty(), "a second root <{tag}>");
        let own = if tag == "tspan" { open.last().unwrap().1 } else { elements.len() };
        if tag != "tspan" {
            elements.push(element);
        }
        if !closed {
            open.push((tag, own));
        }
    }
    assert!(open.is_empty() && rest.trim().is_empty(), "unclosed {open:?}, left {rest:?}");
    elements
}

fn element(inside: &str) -> Element {
    let (tag, mut rest) = inside.split_once(' ').unwrap_or((inside, ""));
    let mut element = Element { tag: tag.to_owned(), ..Element::default() };
    while !rest.trim().is_empty() {
        let (name, after) = rest.split_once("=\"").unwrap_or_else(|| panic!("in <{inside}>"));
        let (value, after) = after.split_once('"').unwrap_or_else(|| panic!("in <{inside}>"));
        assert!(!value.contains('<'), "< in an attribute of <{inside}>");
        let before = element.attributes.insert(name.trim().to_owned(), unescape(value));
        assert!(before.is_none(), "{name} twice in <{inside}>");
        rest = after;
    }
    element
}

/// Left, top, right, bottom.
type Box4 = [f64; 4];

/// Estimates the box of a text: 0.56 em a letter (about the mean of DejaVu Sans, a wide face, from
/// memory), one em high.
fn text_box(element: &Element) -> Box4 {
    let size = element.number("font-size");
    let (x, y) = (element.number("x"), element.number("y"));
    let long = 0.56 * size * element.text.trim().chars().count() as f64;
    let start = match element.attributes["text-anchor"].as_str() {
        "start" => 0.0,
        "middle" => -0.5 * long,
        "end" => -long,
        other => panic!("anchor {other}"),
    };
    match element.attributes.get("transform") {
        None => [x + start, y - 0.5 * size, x + start + long, y + 0.5 * size],
        Some(turn) => {
            assert!(turn.starts_with("rotate(270,"), "{turn}");
            [x - 0.5 * size, y - start - long, x + 0.5 * size, y - start]
        }
    }
}

fn shape_box(element: &Element) -> Option<Box4> {
    match element.tag.as_str() {
        "text" => Some(text_box(element)),
        "rect" => {
            let [x, y] = ["x", "y"].map(|name| element.number(name));
            Some([x, y, x + element.number("width"), y + element.number("height")])
        }
        "polyline" | "polygon" => {
            let points = element.points();
            assert!(points.iter().all(|(x, y)| x.is_finite() && y.is_finite()));
            let over = |pick: fn(&(f64, f64)) -> f64, fold: fn(f64, f64) -> f64, start: f64| {
                points.iter().map(pick).fold(start, fold)
            };
            Some([
                over(|point| point.0, f64::min, f64::INFINITY),
                over(|point| point.1, f64::min, f64::INFINITY),
                over(|point| point.0, f64::max, f64::NEG_INFINITY),
                over(|point| point.1, f64::max, f64::NEG_INFINITY),
            ])
        }
        "svg" | "title" | "desc" => None,
        other => panic!("unexpected element {other}"),
    }
}

/// Checks everything that holds for every figure.
fn check(figure: &Figure) {
    let svg = &figure.svg;
    let name = &figure.name;
    assert!(
        name.chars().all(|c| c.is_ascii_lowercase() || c.is_ascii_digit() || c == '-'),
        "{name}"
    );
    assert!(svg.len() < 300_000, "{name} has {} bytes", svg.len());
    for word in ["NaN", "inf", "<script", "href", "url(", "http"] {
        let body = svg.replace("xmlns=\"http://www.w3.org/2000/svg\"", "");
        let shapes: String =
            body.lines().filter(|line| !line.starts_with("<desc")).collect::<Vec<_>>().join("\n");
        assert!(!shapes.contains(word), "{name} contains {word}");
    }
    let elements = parse(svg);
    let root = &elements[0];
    assert_eq!((root.tag.as_str(), root.attributes["role"].as_str()), ("svg", "img"));
    assert!(!root.attributes.contains_key("width") && !root.attributes.contains_key("height"));
    assert_eq!((elements[1].tag.as_str(), elements[2].tag.as_str()), ("title", "desc"));
    let ids = format!("{} {}", elements[1].attributes["id"], elements[2].attributes["id"]);
    assert_eq!(root.attributes["aria-labelledby"], ids);
    let view: Vec<f64> =
        root.attributes["viewBox"].split(' ').map(|part| part.parse().unwrap()).collect();
    let mut texts: Vec<(Box4, &str)> = Vec::new();
    for element in &elements {
        let Some([left, top, right, bottom]) = shape_box(element) else { continue };
        assert!(
            left >= 0.0 && top >= 0.0 && right <= view[2] && bottom <= view[3],
            "{name}: {element:?} leaves the sheet"
        );
        if element.tag == "text" {
            // 680 pixels are the width of the view, so 700 pixels show it a little larger.
            let size = element.number("font-size") * 680.0 / view[2];
            assert!(size >= 13.0 - 1e-9, "{name}: {:?} is {size} px", element.text);
            for (other, text) in &texts {
                let apart =
                    right <= other[0] || left >= other[2] || bottom <= other[1] || top >= other[3];
                assert!(apart, "{name}: {:?} and {text:?} overlap", element.text);
            }
            texts.push(([left, top, right, bottom], element.text.trim()));
        }
    }
    assert!(figure.caption.starts_with("How to read: "), "{name}");
    for part in ["Sample: ", "Failures: "] {
        assert!(figure.caption.contains(part), "{name}: no {part}in {}", figure.caption);
    }
    for text in [&figure.caption, &figure.alt, &figure.title] {
        assert!(!text.chars().any(char::is_control), "{name}: {text:?}");
    }
    assert!(!figure.caption.contains("  ") && figure.caption.ends_with('.'), "{name}");
    assert!(figure.alt.len() > 40 && figure.alt.ends_with('.'), "{name}: {}", figure.alt);
}

fn names(figures: &[Figure]) -> Vec<&str> {
    figures.iter().map(|figure| figure.name.as_str()).collect()
}

#[test]
fn every_kind_of_figure_is_sound() {
    for (methods, long) in [(1, false), (2, true), (4, false), (10, true), (12, true), (14, false)]
    {
        let run = full(methods, long);
        let figures = run.figures();
        let mut expected = vec![
            "data-profile",
            "solved-by-order",
            "phase-sensing",
            "solved-by-parameter",
            "accuracy-time",
            "trace-tight",
            "trace-sensing",
            "trace-knob",
            "trace-single",
        ];
        if methods >= 2 {
            expected.splice(0..0, ["overview", "profile-effort", "profile-time"]);
        }
        if (3..=10).contains(&methods) {
            expected.push("critical-difference");
        }
        let mut found = names(&figures);
        found.sort_unstable();
        expected.sort_unstable();
        assert_eq!(found, expected, "{methods} methods");
        figures.iter().for_each(check);
    }
}

#[test]
fn one_run_gives_one_drawing() {
    assert_eq!(full(5, true).figures(), full(5, true).figures());
}

#[test]
fn nothing_recorded_and_nothing_solved_draw_nothing_empty() {
    assert_eq!(Run::default().figures(), []);
    let places = [place("tight", "order=10", 10, 10, 1)];
    let hopeless = run(&places, 3, &labels(2, false), |_, _| 0.0);
    let figures = hopeless.figures();
    assert_eq!(names(&figures), ["accuracy-time"]);
    figures.iter().for_each(check);
}

#[test]
fn unknown_optimum_and_absent_figures_leave_figures_out() {
    let mut run = full(3, false);
    for instance in &mut run.instances {
        instance.optimum = None;
    }
    for record in &mut run.records {
        record.optimum = None;
        record.digits = None;
        record.verdict = Verdict::Feasible;
    }
    let figures = run.figures();
    assert_eq!(names(&figures), ["trace-tight", "trace-sensing", "trace-knob", "trace-single"]);
    figures.iter().for_each(check);
}

#[test]
fn a_method_without_counted_effort_is_left_out_by_name() {
    let mut run = full(3, false);
    for record in run.records.iter_mut().filter(|record| record.method == "method-02") {
        record.flops = None;
    }
    let figure = run.figure("profile-effort");
    assert!(figure.caption.contains("Left out because this cost was not recorded: method-02."));
    assert!(!figure.svg.contains("method-02"));
    assert!(run.figure("profile-time").svg.contains("method-02"));
    // Two curves are left: both may be ranked.
    assert!(!figure.caption.contains("Caution"));
    assert!(run.figure("profile-time").caption.contains("43(2):15, 2016"));
}

#[test]
fn hostile_labels_are_text_and_nothing_else() {
    let hostile = "<script>alert('x')</script>&\"\u{202E}\u{E000}\u{0}";
    let mut run = full(3, false);
    for record in &mut run.records {
        if record.method == "method-02" {
            record.method = hostile.to_owned();
        }
        if record.family == "knob" {
            record.family = format!("<b>{hostile}");
        }
        if record.family == "single" {
            record.family = "\u{6f22}&\u{5b57}".to_owned();
        }
    }
    let figures = run.figures();
    assert_eq!(figures.len(), 13);
    figures.iter().for_each(check);
    let unique: BTreeSet<&str> = names(&figures).into_iter().collect();
    assert_eq!(unique.len(), figures.len());
    let shown = parse(&run.figure("profile-effort").svg);
    assert!(shown.iter().any(|element| element.text.contains("<script>alert('x')</script>&\"")));
}

#[test]
fn every_method_has_its_own_colour_and_dashes() {
    let elements = parse(&full(12, false).figure("profile-effort").svg);
    let lines = elements
        .iter()
        .filter(|element| element.tag == "polyline" && element.attributes["stroke-width"] == "22");
    let looks: Vec<(&str, &str)> = lines
        .map(|line| {
            let dashes = line.attributes.get("stroke-dasharray").map_or("", String::as_str);
            (line.attributes["stroke"].as_str(), dashes)
        })
        .collect();
    // Twelve curves and, in the same order, their samples in the legend.
    assert_eq!(looks.len(), 24);
    assert_eq!(looks[..12], looks[12..]);
    let colours: BTreeSet<&str> = looks.iter().map(|look| look.0).collect();
    let dashes: BTreeSet<&str> = looks.iter().map(|look| look.1).collect();
    assert_eq!((colours.len(), dashes.len()), (12, 12));
}

#[test]
fn labels_that_look_alike_when_cut_are_told_apart() {
    let alike: Vec<String> = ["aaa", "bbb"]
        .iter()
        .map(|mid| format!("{}{mid}{}", "x".repeat(40), "y".repeat(40)))
        .collect();
    let run = run(&[place("tight", "order=10", 10, 10, 1)], 5, &alike, |_, _| 1.0);
    let figure = run.figure("data-profile");
    check(&figure);
    let texts: Vec<String> = parse(&figure.svg)
        .into_iter()
        .filter(|element| element.text.contains('\u{2026}') && element.tag == "text")
        .map(|element| element.text.trim().to_owned())
        .collect();
    assert_eq!(texts.len(), 2);
    assert!(texts[0] != texts[1] && texts[1].ends_with("#2"), "{texts:?}");
}

/// Returns the frame of a figure of one panel.
fn frame(elements: &[Element]) -> Box4 {
    let frame = elements.iter().find(|element| {
        element.tag == "polyline"
            && element.attributes["stroke"] == "#2B2B2B"
            && element.points().len() == 6
    });
    shape_box(frame.expect("a frame")).unwrap()
}

/// Returns the curves inside the frame, in drawing order: the first so many of a curve's width.
fn curves(elements: &[Element], count: usize) -> Vec<Vec<(f64, f64)>> {
    elements
        .iter()
        .filter(|element| element.tag == "polyline" && element.attributes["stroke-width"] == "22")
        .take(count)
        .map(Element::points)
        .collect()
}

/// Reads a height as a share: the axis runs from -2.5 % to 102.5 %.
fn share(frame: Box4, y: f64) -> f64 {
    -0.025 + 1.05 * (frame[3] - y) / (frame[3] - frame[1])
}

#[test]
fn profiles_end_at_the_solved_share_and_start_at_the_wins() {
    let run = full(4, false);
    let mut solved = [0.0; 4];
    let mut wins = [0.0; 4];
    let rows: Vec<&[Record]> = run.records.chunks(4).collect();
    for row in &rows {
        let cost = |record: &Record| {
            let flops = record.flops.unwrap() as f64;
            if record.verdict == Verdict::Solved { flops } else { f64::INFINITY }
        };
        let best = row.iter().map(cost).fold(f64::INFINITY, f64::min);
        for (method, record) in row.iter().enumerate() {
            solved[method] += f64::from(u8::from(record.verdict == Verdict::Solved));
            wins[method] += f64::from(u8::from(cost(record) == best && best.is_finite()));
        }
    }
    let total = rows.len() as f64;
    for name in ["data-profile", "profile-effort", "profile-time"] {
        let elements = parse(&run.figure(name).svg);
        let frame = frame(&elements);
        for (method, curve) in curves(&elements, 4).iter().enumerate() {
            let end = curve.last().unwrap();
            assert_eq!(end.0, frame[2]);
            // Pixels are tenths: a share is drawn to 1.05 / 3000 at best.
            let drawn = share(frame, end.1);
            assert!((drawn - solved[method] / total).abs() < 4e-4, "{name} {method}: {drawn}");
        }
    }
    let figure = run.figure("profile-effort");
    let elements = parse(&figure.svg);
    let frame = frame(&elements);
    for (method, curve) in curves(&elements, 4).iter().enumerate() {
        // Steps closer to the left edge than 1.5 pixels are drawn there.
        let start = curve.iter().rfind(|point| point.0 == frame[0]).unwrap();
        let drawn = share(frame, start.1);
        assert!(drawn >= wins[method] / total - 4e-4, "{method}: {drawn}");
        let words =
            format!("method-{:02} {:.0} % at factor 1", method + 1, 100.0 * wins[method] / total);
        assert!(figure.alt.contains(&words), "{words} not in {}", figure.alt);
    }
}

#[test]
fn bars_are_intervals_of_wilson() {
    let places: Vec<Place> =
        [10, 20].map(|order| place("tight", &format!("order={order}"), order, order, 1)).to_vec();
    let run =
        run(&places, 12, &labels(1, false), |place, _| if place.order == 10 { 0.6 } else { 0.4 });
    let elements = parse(&run.figure("solved-by-order").svg);
    let frame = frame(&elements);
    let bars: Vec<Box4> = elements
        .iter()
        .filter(|element| element.tag == "polyline" && element.attributes.contains_key("opacity"))
        .map(|element| shape_box(element).unwrap())
        .collect();
    let curve = &curves(&elements, 1)[0];
    assert_eq!((bars.len(), curve.len()), (2, 2));
    for (at, records) in run.records.chunks(12).enumerate() {
        let solved = records.iter().filter(|record| record.verdict == Verdict::Solved).count();
        assert!((1..12).contains(&solved));
        let interval = wilson(solved as u64, 12, 0.95);
        let [_, top, _, bottom] = bars[at];
        let drawn = [curve[at].1, bottom, top].map(|y| share(frame, y));
        let expected = [solved as f64 / 12.0, interval.low, interval.high];
        for (drawn, expected) in drawn.into_iter().zip(expected) {
            assert!((drawn - expected).abs() < 5e-4, "{drawn} {expected}");
        }
    }
}

#[test]
fn orders_of_different_families_are_drawn_together_with_a_caution() {
    let places = [place("one", "order=10", 10, 10, 1), place("two", "order=30", 30, 30, 1)];
    let figure = run(&places, 4, &labels(2, false), |_, _| 0.5).figure("solved-by-order");
    check(&figure);
    assert!(figure.caption.contains("Sample: all families together 8 instances"));
    assert!(figure.caption.contains("Caution: no family has two orders"));
    assert!(!full(2, false).figure("solved-by-order").caption.contains("Caution"));
}

#[test]
fn repeats_count_once_and_half_is_not_enough() {
    let place = place("tight", "order=10", 10, 10, 1);
    let mut run = run(std::slice::from_ref(&place), 2, &labels(2, false), |_, _| 1.0);
    run.records.clear();
    for (id, solved) in [("tight-0-0", [true, true, false]), ("tight-0-1", [true, false, false])] {
        for (repeat, solved) in (1..).zip(solved) {
            for method in ["method-01", "method-02"] {
                let solved = solved || method == "method-02";
                run.records.push(record(id, &place, method, repeat, solved, 0.1 * repeat as f64));
            }
        }
    }
    let alt = run.figure("data-profile").alt;
    assert!(alt.contains("share of 2 instances"), "{alt}");
    assert!(alt.contains("method-01 50 % in the end") && alt.contains("method-02 100 %"), "{alt}");
}

#[test]
fn instances_that_a_method_did_not_run_are_not_held_against_it() {
    let mut run = full(3, false);
    run.records.retain(|record| record.method != "method-03" || record.family == "tight");
    let figure = run.figure("data-profile");
    assert!(
        figure.caption.contains("16 instances with a known optimum (16 of 132:"),
        "{}",
        figure.caption
    );
}

#[test]
fn cells_hold_the_counted_shares_and_the_threshold_is_drawn() {
    let run = full(2, false);
    let figure = run.figure("phase-sensing");
    let elements = parse(&figure.svg);
    let mut expected = Vec::new();
    for method in ["method-01", "method-02"] {
        for rank in [1, 2, 3, 4] {
            for constraints in [10, 20, 30, 40, 60, 80] {
                let own = run.records.iter().filter(|record| {
                    record.family == "sensing"
                        && record.method == method
                        && (record.target_rank, record.constraints) == (rank, constraints)
                });
                let solved = own.filter(|record| record.verdict == Verdict::Solved).count();
                expected.push((25 * solved).to_string());
            }
        }
    }
    // Numbers stand white on dark or dark on light at the middle of cells.
    let rows: BTreeSet<i64> = cells(&elements).iter().map(|(_, y)| *y).collect();
    assert_eq!(rows.len(), 4);
    let drawn: Vec<String> = texts_at(&elements, &cells(&elements));
    assert_eq!(sorted(drawn), sorted(expected));
    let line = elements
        .iter()
        .find(|element| element.tag == "polyline" && element.attributes["stroke"] == "#D55E00")
        .expect("a threshold");
    // Order 20: 38.6 measurements for rank 1, 65.7 for rank 2 (checks.md, "Recovery thresholds", from
    // Amelunxen and others, 2014): between the columns of 30 and 40, and of 60 and 80.
    let dimensions = [statistical_dimension(20, 1), statistical_dimension(20, 2)];
    assert!((dimensions[0] - 38.6).abs() < 0.1 && (dimensions[1] - 65.7).abs() < 0.1);
    let columns: BTreeSet<i64> = cells(&elements).iter().map(|(x, _)| *x).collect();
    let columns: Vec<f64> = columns.into_iter().take(6).map(|x| x as f64).collect();
    let [first, second] = [0.5 * (columns[2] + columns[3]), 0.5 * (columns[4] + columns[5])];
    let points = line.points();
    assert!((points[0].0 - first).abs() < 2.0, "{points:?} {first}");
    assert!((points[2].0 - second).abs() < 2.0, "{points:?} {second}");
    assert!(figure.caption.contains("statistical dimension"));
    let other = parse(&run.figure("solved-by-order").svg);
    assert!(
        !other
            .iter()
            .any(|element| element.attributes.get("stroke-width").is_some_and(|w| w == "30"))
    );
}

fn sorted(mut items: Vec<String>) -> Vec<String> {
    items.sort_unstable();
    items
}

/// Returns the middles of the filled cells, the sheet itself aside.
fn cells(elements: &[Element]) -> Vec<(i64, i64)> {
    elements
        .iter()
        .filter(|element| element.tag == "rect" && element.attributes["fill"] != "#FFFFFF")
        .map(|element| {
            let [left, top, right, bottom] = shape_box(element).unwrap();
            ((0.5 * (left + right)).round() as i64, (0.5 * (top + bottom)).round() as i64)
        })
        .collect()
}

fn texts_at(elements: &[Element], places: &[(i64, i64)]) -> Vec<String> {
    let near = |element: &&Element| {
        let (x, y) = (element.number("x"), element.number("y"));
        places
            .iter()
            .any(|place| (x - place.0 as f64).abs() < 3.0 && (y - place.1 as f64).abs() < 3.0)
    };
    elements
        .iter()
        .filter(|element| element.tag == "text")
        .filter(near)
        .map(|element| element.text.trim().to_owned())
        .collect()
}

#[test]
fn average_ranks_are_those_of_the_friedman_test() {
    let run = full(4, false);
    let blocks: Vec<Vec<f64>> = run
        .records
        .chunks(4)
        .map(|row| {
            row.iter()
                .map(|record| match record.verdict {
                    Verdict::Solved => record.flops.unwrap() as f64,
                    _ => f64::INFINITY,
                })
                .collect()
        })
        .collect();
    let test = friedman(&blocks).unwrap();
    let figure = run.figure("critical-difference");
    for (method, rank) in test.mean_ranks.iter().enumerate() {
        let words = format!("method-{:02} {rank:.2}", method + 1);
        assert!(figure.alt.contains(&words), "{words} not in {}", figure.alt);
    }
    assert!(figure.caption.contains(&format!("chi-square {:.2}", test.chi_square)));
}

#[test]
fn critical_differences_need_ten_instances_and_three_methods() {
    let places = [place("tight", "order=10", 10, 10, 1)];
    let found = |instances, methods| {
        let run = run(&places, instances, &labels(methods, false), |_, _| 0.9);
        names(&run.figures()).contains(&"critical-difference")
    };
    assert!(found(10, 3) && !found(9, 3) && !found(10, 2) && !found(10, 11));
}

/// Long names, many values, large and tiny numbers.
fn crowded() -> Run {
    let mut places = Vec::new();
    for at in 0..16 {
        for rank in [1, 2, 30_000] {
            let constraints = 12_345 + 1_111 * at;
            let parameters = format!("constraints={constraints} order=20000 rank={rank}");
            places.push(place("wide-family", &parameters, 20_000, constraints, rank));
        }
        let noise = format!("a-parameter-of-a-name-much-too-long-for-an-axis={at}e-9 order=10");
        places.push(place(
            "a family of a name much too long for the heading of a panel",
            &noise,
            10,
            10,
            1,
        ));
        for order in [10_000, 11_000, 12_000, 13_000, 14_000, 15_000, 16_000] {
            let parameters = format!("order={order} noise=0.0000{at}");
            places.push(place(&format!("family-{at}"), &parameters, order, order, 1));
        }
    }
    run(&places, 1, &labels(7, true), |_, method| 0.9 - 0.1 * method as f64)
}

#[test]
fn crowded_axes_stay_readable() {
    let run = crowded();
    let figures = run.figures();
    figures.iter().for_each(check);
    let phase = parse(&run.figure("phase-wide-family").svg);
    assert!(phase.iter().any(|element| element.text.trim() == "30000"));
    let size = run.figure("solved-by-order");
    assert!(size.caption.contains("4 more families of more than one order are not shown."));
    let knob = run.figure("solved-by-parameter");
    assert!(knob.alt.contains("0 to 1.5e-8"), "{}", knob.alt);
}

#[test]
fn a_large_run_makes_light_figures() {
    let places: Vec<Place> = (0..200)
        .map(|at| {
            let order = 10 + 2 * (at % 50);
            place("tight", &format!("draw={at} order={order}"), order, order, 1 + at % 3)
        })
        .collect();
    let run = run(&places, 20, &labels(5, false), |place, method| {
        1.2 - place.order as f64 / 200.0 - 0.1 * method as f64
    });
    let figures = run.figures();
    figures.iter().for_each(check);
    let scatter = run.figure("accuracy-time");
    assert!(scatter.caption.contains("only one in 17 trials"), "{}", scatter.caption);
}

#[test]
fn extreme_numbers_stay_on_the_sheet() {
    let mut run = full(3, false);
    for (at, record) in run.records.iter_mut().enumerate() {
        match at % 5 {
            0 => (record.cpu_s, record.flops) = (Some(0.0), Some(0)),
            1 => (record.cpu_s, record.flops) = (Some(1e300), Some(u64::MAX)),
            2 => record.digits = Some(-4.0),
            3 => record.cpu_s = Some(-1.0),
            _ => record.digits = Some(40.0),
        }
    }
    for (at, trace) in run.traces.iter_mut().enumerate() {
        trace.rows.truncate(if at % 2 == 0 { 1 } else { 0 });
    }
    run.traces[2].rows =
        vec![TraceRow { flops: 0, objective: Some(1e308), residual: Some(0.0), tail: Some(-1.0) }];
    run.figures().iter().for_each(check);
}
