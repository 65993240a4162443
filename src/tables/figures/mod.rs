//! Figures of a run: SVG texts made from records alone.
//!
//! Each figure has a caption (how to read it, units, sample, what a failure counts) and a text
//! alternative with its main numbers. A figure with nothing to show is left out. The same records
//! give the same bytes. Nothing here touches a file, and nothing here judges a trial.

mod accuracy;
mod axes;
mod descent;
mod digest;
mod grid;
mod knobs;
mod legend;
mod overview;
mod phase;
mod profiles;
mod ranks;
mod sheet;
mod size;
mod style;

use super::Input;
use digest::Digest;
use style::{FONT, Pen, clean, cut, pen};

/// A figure.
#[derive(Clone, Debug, PartialEq)]
pub struct Figure {
    /// Stem of its file name, unique among the figures of a run: lower-case letters, digits, hyphens.
    pub name: String,
    /// Title, plain text.
    pub title: String,
    /// How to read it, units, sample size, rule for failures: whole sentences, plain text.
    pub caption: String,
    /// Text alternative with the main numbers, plain text.
    pub alt: String,
    /// The figure itself, an `svg` element that scales with its surroundings.
    pub svg: String,
}

/// Makes every figure that the records have something to show in: the overview of families and methods, performance profiles over effort
/// and processor time, data profile, solved share against size, phase diagrams, solved share against
/// a parameter, accuracy against time, critical difference, convergence traces.
pub fn all(input: &Input<'_>) -> Vec<Figure> {
    let digest = Digest::new(input);
    let mut figures = Vec::new();
    figures.extend(overview::figure(&digest));
    figures.extend(profiles::over_effort(&digest));
    figures.extend(profiles::over_time(&digest));
    figures.extend(profiles::data(&digest));
    figures.extend(size::figure(&digest));
    figures.extend(phase::figures(&digest));
    figures.extend(knobs::figure(&digest));
    figures.extend(accuracy::figure(input, &digest));
    figures.extend(ranks::figure(&digest));
    figures.extend(descent::figures(input, &digest));
    figures
}

/// Returns labels and pens of some methods, as legends show them: cut to fit, and told apart by a
/// number where cutting made them alike.
fn keys(digest: &Digest<'_>, methods: &[usize]) -> (Vec<String>, Vec<Pen>) {
    let mut labels: Vec<String> = Vec::new();
    for &method in methods {
        let full = clean(digest.methods[method]);
        let mut label = cut(&full, FONT, legend::LABEL);
        let mut copy = 1;
        while labels.contains(&label) {
            copy += 1;
            let mark = format!(" #{copy}");
            let room = legend::LABEL - style::width(&mark, FONT);
            label = format!("{}{mark}", cut(&full, FONT, room));
        }
        labels.push(label);
    }
    (labels, methods.iter().map(|&method| pen(method)).collect())
}

/// Turns a text into part of a figure's name.
fn slug(text: &str) -> String {
    let plain: String = text
        .chars()
        .map(
            |letter| if letter.is_ascii_alphanumeric() { letter.to_ascii_lowercase() } else { '-' },
        )
        .collect();
    let parts: Vec<&str> = plain.split('-').filter(|part| !part.is_empty()).collect();
    parts.join("-").chars().take(60).collect()
}

/// Joins the words of a caption by single blanks, whatever was left out between them.
fn tidy(text: &str) -> String {
    clean(text)
}

/// Returns a family's part of a figure's name, unique among the families.
fn family_slug(digest: &Digest<'_>, family: usize) -> String {
    let own = slug(digest.families[family]);
    let own = if own.is_empty() { "family".to_owned() } else { own };
    let alike = digest.families[..family].iter().any(|other| slug(other) == own);
    if alike || own == "family" { format!("{own}-{family}") } else { own }
}
