//! Convergence traces: residual, objective error and tail against effort, as the methods saw themselves.

use std::collections::BTreeMap;

use super::super::Input;
use super::axes::{Axis, Panel, Spread};
use super::digest::{Digest, count};
use super::legend::{self, Sample};
use super::sheet::{self, Fill, WIDTH};
use super::style::clean;
use super::{Figure, family_slug, keys, tidy};
use crate::record::TraceRow;

/// Most figures.
const FIGURES: usize = 6;
/// Least value with a place on an axis: well below what doubles resolve.
const LEAST: f64 = 1e-17;
/// Columns into which a long trace is put before it is drawn, two points each.
const COLUMNS: f64 = 180.0;

const LEFT: f64 = 78.0;
const RIGHT: f64 = WIDTH - 24.0;
const TALL: f64 = 132.0;

/// One method on the traced instance.
struct Path<'a> {
    method: usize,
    rows: &'a [TraceRow],
}

/// Makes a figure for the first traced instance of each family, of six families at most.
pub(super) fn figures(input: &Input<'_>, digest: &Digest<'_>) -> Vec<Figure> {
    let numbers: BTreeMap<&str, usize> =
        input.traces.iter().enumerate().map(|(at, trace)| (trace.trial.as_str(), at)).collect();
    if numbers.is_empty() {
        return Vec::new();
    }
    // One instance for each family, in record order, with the first repeat of every method.
    let mut chosen: Vec<(usize, Vec<Path<'_>>)> = Vec::new();
    for (at, record) in input.records.iter().enumerate() {
        let Some(&trace) = numbers.get(record.trial.as_str()) else { continue };
        let rows = input.traces[trace].rows.as_slice();
        if rows.is_empty() {
            continue;
        }
        let (subject, method) = (digest.subject_of[at], digest.method_of[at]);
        let family = digest.subjects[subject].family;
        let own = chosen.iter().position(|(other, _)| digest.subjects[*other].family == family);
        match own {
            Some(place) if chosen[place].0 == subject => {
                let paths = &mut chosen[place].1;
                if paths.iter().all(|path| path.method != method) {
                    paths.push(Path { method, rows });
                }
            }
            None if chosen.len() < FIGURES => chosen.push((subject, vec![Path { method, rows }])),
            _ => {}
        }
    }
    for (_, paths) in &mut chosen {
        paths.sort_by_key(|path| path.method);
    }
    chosen.iter().filter_map(|(subject, paths)| figure(digest, *subject, paths)).collect()
}

/// Values of one method against flops.
type Line = Vec<(f64, f64)>;

/// A panel: one line a method.
type Strip = (&'static Course, Vec<Line>);

/// A figure of an iterate over the course of a trial.
struct Course {
    /// Name on the axis.
    axis: &'static str,
    /// Name in the text alternative.
    word: &'static str,
    of: fn(&TraceRow, Option<f64>) -> Option<f64>,
}

static COURSES: [Course; 3] = [
    Course { axis: "residual", word: "residual", of: |row, _| row.residual },
    Course {
        axis: "objective error",
        word: "objective error",
        of: |row, optimum| Some((row.objective? - optimum?).abs() / (1.0 + optimum?.abs())),
    },
    Course { axis: "tail ratio", word: "tail", of: |row, _| row.tail },
];

fn figure(digest: &Digest<'_>, subject: usize, paths: &[Path<'_>]) -> Option<Figure> {
    let about = &digest.subjects[subject];
    let values = |course: &Course, path: &Path<'_>| -> Line {
        path.rows
            .iter()
            .filter_map(|row| Some((row.flops as f64, (course.of)(row, about.optimum)?)))
            .filter(|(_, value)| value.is_finite())
            .collect()
    };
    let courses: Vec<Strip> = COURSES
        .iter()
        .map(|course| (course, paths.iter().map(|path| values(course, path)).collect::<Vec<_>>()))
        .filter(|(_, lines)| lines.iter().any(|line| !line.is_empty()))
        .collect();
    if courses.is_empty() {
        return None;
    }
    let instance = clean(about.id);
    let caption = format!(
        "How to read: each line follows one trial from its start (left) to its end (the marker); lower is better. \
         Residual: relative primal residual of the iterate. Objective error: |objective - optimum| / (1 + |optimum|). \
         Tail ratio: eigenvalues beyond the target rank over the trace; a method may close the tail before or after \
         the residual. All axes are logarithmic; values below {LEAST:e} stand at the lower edge. Effort: flops by the \
         operation counts of the kernels. These are the iterates as each method saw itself, before truncation to the \
         target rank: the verdict is the referee's and stands in the tables. Sample: one instance, {instance} (order \
         {}, {} constraints, target rank {}), {}, the first repeat of each. Failures: trials that were not solved are \
         drawn like the others, as far as they went.",
        about.order,
        about.constraints,
        about.target_rank,
        count(paths.len(), "method", "methods"),
    );
    let ends: Vec<String> = paths
        .iter()
        .enumerate()
        .map(|(at, path)| {
            let parts: Vec<String> = courses
                .iter()
                .filter_map(|(course, lines)| {
                    let (_, value) = lines[at].last()?;
                    Some(format!("{} {value:.1e}", course.word))
                })
                .collect();
            let flops = path.rows.last().map_or(0, |row| row.flops) as f64;
            format!("{} after {flops:.1e} flops: {}", digest.methods[path.method], parts.join(", "))
        })
        .collect();
    let alt = format!("Convergence on {instance}. {}.", ends.join("; "));
    let name = format!("trace-{}", family_slug(digest, about.family));
    let title = format!("Convergence on {instance}");
    let svg = draw(&name, &title, &alt, digest, paths, &courses);
    Some(Figure { name, title, caption: tidy(&caption), alt: tidy(&alt), svg })
}

fn draw(
    name: &str,
    title: &str,
    alt: &str,
    digest: &Digest<'_>,
    paths: &[Path<'_>],
    courses: &[Strip],
) -> String {
    let methods: Vec<usize> = paths.iter().map(|path| path.method).collect();
    let (labels, pens) = keys(digest, &methods);
    let flops =
        || courses.iter().flat_map(|(_, lines)| lines.iter().flatten().map(|point| point.0));
    let high = flops().fold(1.0, f64::max);
    let low = flops().filter(|flops| *flops > 0.0).fold(high, f64::min);
    let step = TALL + 18.0;
    let bottom = 14.0 + step * courses.len() as f64 - 18.0;
    let band = bottom + 50.0;
    let height = band + legend::height(&labels);
    sheet::draw(name, title, alt, height, &pens, |sheet| {
        for (at, (course, lines)) in courses.iter().enumerate() {
            let top = 14.0 + step * at as f64;
            let across = Axis::new(Spread::Log, low / 1.1, high * 1.2, LEFT, RIGHT);
            let last = at + 1 == courses.len();
            let across = if last { across } else { across.without_labels() };
            let values = || lines.iter().flatten().map(|point| point.1);
            let most = values().fold(LEAST, f64::max);
            let least = values().filter(|value| *value > LEAST).fold(most, f64::min);
            let up = Axis::new(Spread::Log, least / 1.6, most * 1.6, top + TALL, top);
            let panel = Panel { across, up };
            panel.grid(sheet);
            panel.name_up(sheet, course.axis, 60.0);
            if last {
                panel.name_across(sheet, "effort (flops)");
            }
            let drawn: Vec<Vec<(f64, f64)>> = lines.iter().map(|line| thin(line, &panel)).collect();
            for (points, pen) in drawn.iter().zip(&pens) {
                sheet.curve(points, pen);
            }
            for (points, pen) in drawn.iter().zip(&pens) {
                if let Some(&end) = points.last() {
                    sheet.marker(end, 4.5, pen, Fill::Full);
                }
            }
        }
        legend::draw(sheet, band, &labels, &pens, Sample::Curve);
    })
}

/// Turns a trace into pixels; of a long one the least and the largest of each column and both ends.
fn thin(line: &[(f64, f64)], panel: &Panel) -> Vec<(f64, f64)> {
    let points: Vec<(f64, f64)> = line.iter().map(|point| panel.at(point.0, point.1)).collect();
    if points.len() as f64 <= 2.0 * COLUMNS {
        return points;
    }
    let column = |point: &(f64, f64)| ((point.0 - LEFT) / (RIGHT - LEFT) * COLUMNS) as i64;
    let mut kept = vec![points[0]];
    for run in points.chunk_by(|one, other| column(one) == column(other)) {
        let by_height = |one: &&(f64, f64), other: &&(f64, f64)| one.1.total_cmp(&other.1);
        let (Some(&least), Some(&most)) =
            (run.iter().min_by(by_height), run.iter().max_by(by_height))
        else {
            continue;
        };
        kept.extend(if least.0 <= most.0 { [least, most] } else { [most, least] });
    }
    kept.push(points[points.len() - 1]);
    kept
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn long_traces_keep_their_ends_and_extremes() {
        let line: Vec<(f64, f64)> = (1..50_000)
            .map(|at| {
                let flops = f64::from(at) * 1e3;
                (flops, if at == 30_000 { 1e-12 } else { 1.0 / flops })
            })
            .collect();
        let panel = Panel {
            across: Axis::new(Spread::Log, 1e3, 5e7, LEFT, RIGHT),
            up: Axis::new(Spread::Log, 1e-12, 1.0, 200.0, 14.0),
        };
        let thinned = thin(&line, &panel);
        assert!(thinned.len() <= 400, "{}", thinned.len());
        assert_eq!(thinned[0], panel.at(line[0].0, line[0].1));
        let end = line[line.len() - 1];
        assert_eq!(thinned[thinned.len() - 1], panel.at(end.0, end.1));
        assert!(thinned.iter().any(|point| (point.1 - 200.0).abs() < 1e-9));
    }
}
