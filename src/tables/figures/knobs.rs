//! Solved share against the one parameter of a family that was varied, with intervals.

use super::digest::Digest;
use super::size::{Plot, alt, draw, sizes, tally};
use super::style::clean;
use super::{Figure, grid, phase, tidy};

/// Most panels of a figure.
const PANELS: usize = 12;

/// Makes the figure: a panel for each family in which a parameter varies and no phase diagram is drawn.
pub(super) fn figure(digest: &Digest<'_>) -> Option<Figure> {
    let plots: Vec<Plot> = (0..digest.families.len())
        .filter(|&family| phase::phases(digest, family).is_empty())
        .filter_map(|family| plot(digest, family))
        .collect();
    if plots.is_empty() {
        return None;
    }
    let left_out = if plots.len() > PANELS {
        format!("{} more families are not shown.", plots.len() - PANELS)
    } else {
        String::new()
    };
    let plots = &plots[..plots.len().min(PANELS)];
    let caption = format!(
        "How to read: each point is the share of instances at one value of the parameter below the panel that a \
         method solved; the bar through it is the 95 % interval of Wilson. A line that falls shows where the \
         parameter makes the method fail. Points of one value are moved apart sideways to be seen; \
         values over a wide range stand by their ratios, or in equal steps when they begin at zero. Sample: \
         {}; each method counts on the instances that it ran. Failures: whatever is not solved (verdict solved, or \
         feasible where no optimum of the family is known, in more than half of the repeats) counts as not solved, as \
         does an instance planted without proof among proved ones. {left_out}",
        sizes(plots)
    );
    let alt = alt(digest, plots);
    let (name, title) = ("solved-by-parameter", "Solved share against a parameter");
    let svg = draw(name, title, &alt, plots, digest);
    let (name, title) = (name.to_owned(), title.to_owned());
    Some(Figure { name, title, caption: tidy(&caption), alt: tidy(&alt), svg })
}

fn plot(digest: &Digest<'_>, family: usize) -> Option<Plot> {
    let own = digest.scored(family);
    let quantity = grid::varied(digest, &own).into_iter().next()?;
    let places: Vec<Option<usize>> = (0..own.len()).map(|at| quantity.place(at)).collect();
    let mut next = places.iter();
    let rows = tally(digest, &own, &quantity.values, |_| next.next().copied().flatten());
    let instances = places.iter().flatten().count();
    let heading = clean(digest.families[family]);
    Some(Plot { heading, along: quantity.name, values: quantity.values, rows, instances })
}
