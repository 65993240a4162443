//! `distance-completion`: points in the plane or in space, up to a rotation, from some of their distances.
//!
//! X is the Gram matrix of n whole points p_i with sum p_i = 0, so V has the rows p_i' and V'1 = 0. The
//! constraints are `<11', X> = 0` and `<(e_i - e_l)(e_i - e_l)', X> = |p_i - p_l|^2` on measured pairs; the
//! cost is 0.
//!
//! Exact stress. Points are placed on cliques as in `localisation`, without anchors. With u_i = e_i each affine
//! dependency w of a clique is a column w with V'w = 0 and 1'w = 0, and w w' is minus a combination of the
//! range constraints. Let S = 11' + sum_K w_K w_K', y = -1 on the first constraint and the summed products
//! w_i w_l on the ranges: A*(y) + S = 0 = C and V'[1, w_K] = 0, so X* is optimal with value 0, as is every
//! feasible point. The n - d - 1 columns w_K are independent because each holds a point that no earlier one
//! holds, and orthogonal to 1, so rank S = n - d. An optimum is therefore V U V', and the ranges of the first
//! clique, whose points span, determine U (checked by a rank modulo 2^61 - 1): the feasible set is one point.
//! S is not zero and `<S, X> = 0` for all feasible X, so the relaxation has no Slater point.
//!
//! Centring. Coordinates lie in -radius..=radius. Before a point with `left` points after it the running sum s obeys
//! |s| <= floor(radius (left + 1)/4), and the coordinate is drawn so that |s + x| <= floor(radius left/4), which is
//! always possible; the last point is what is missing to zero.
//!
//! Source: A. So, Y. Ye, Mathematical Programming 109:367-384, 2007, for exactness by stress (citation from
//! memory); the construction by cliques is our own.

use super::assembly::{IntegerCoefficient, PairDraft, column};
use super::cliques::{Cliques, Placement, draw_start};
use super::{Family, PlantError};
use crate::card::{DefaultSetting, FamilyCard, Kind, Relaxation, Setting, SettingSpec, Settings};
use crate::problem::certificate::{IntegerFactor, Planted};
use crate::seed::Stream;

/// The family `distance-completion`.
#[derive(Clone, Copy, Debug)]
pub struct DistanceCompletion;

/// Draws of a whole instance before the family gives up.
const TRIES: usize = 100;

/// Places of the grid for each point, at least.
const ROOM: usize = 4;

/// Least radius that `auto` takes.
const AUTO_RADIUS: i64 = 10;

static CARD: FamilyCard = FamilyCard {
    id: "distance-completion",
    title: "Gram matrix of centred points from some exact distances",
    formula: "min 0 s.t. <11',X> = 0, (e_i-e_l)(e_i-e_l)'.X = |p_i-p_l|^2 on measured pairs, X PSD, \
        rank X <= d",
    construction: "n different whole points of a square or cube around 0 whose sum is 0; each has distances to \
        d + 1 earlier points that have all distances among themselves and do not lie on one line or plane, \
        and `extra` further distances",
    optimum: "0, attained by X = VV' with the points as rows of V only: the feasible set is one point, so there \
        is no Slater point",
    relaxation: Relaxation::Tight,
    certificate: "dual pair, exact: the stress S = 11' + sum over cliques of w w' for the whole affine dependency \
        w of each, of rank n - d; unique by a rank modulo 2^61 - 1",
    source: "universal rigidity by stress, A. So, Y. Ye, Mathematical Programming 109:367-384, 2007 (citation \
        from memory); construction by cliques: own",
    parameters: &[
        SettingSpec {
            name: "order",
            kind: Kind::Integer { least: 4, most: 1000 },
            default: DefaultSetting::Integer(20),
            meaning: "Number n of points, which is the order of the matrix variable, at least d + 2.",
        },
        SettingSpec {
            name: "rank",
            kind: Kind::Integer { least: 2, most: 3 },
            default: DefaultSetting::Integer(2),
            meaning: "Dimension d of the places, which is the rank of the planted point and the rank bound.",
        },
        SettingSpec {
            name: "radius",
            kind: Kind::WordOrInteger { words: &["auto"], least: 4, most: 100 },
            default: DefaultSetting::Word("auto"),
            meaning: "Places are drawn from {-radius..radius}^d, which must hold 4 places a point; `auto` takes the \
                larger of 10 and the least that does. A larger radius spreads the sizes of the right sides.",
        },
        SettingSpec {
            name: "extra",
            kind: Kind::Integer { least: 0, most: 100 },
            default: DefaultSetting::Integer(1),
            meaning: "Further distances of each point to earlier ones, as far as there are any.",
        },
    ],
};

struct Sizes {
    order: usize,
    dimension: usize,
    radius: i64,
    extra: usize,
}

impl Family for DistanceCompletion {
    fn card(&self) -> &'static FamilyCard {
        &CARD
    }

    fn plant(&self, parameters: &Settings, stream: &mut Stream) -> Result<Planted, PlantError> {
        let sizes = sizes(parameters)?;
        for _ in 0..TRIES {
            if let Some(cliques) = draw(&sizes, stream)? {
                return draft(&sizes, &cliques).plant();
            }
        }
        Err(PlantError::Parameters(format!(
            "{TRIES} draws of distance-completion with order = {} found no general position for a last point \
             that centres the others; a radius above {} is easier to draw",
            sizes.order, sizes.radius
        )))
    }
}

fn sizes(parameters: &Settings) -> Result<Sizes, PlantError> {
    let (order, dimension) = (parameters.size("order"), parameters.size("rank"));
    if order < dimension + 2 {
        return Err(PlantError::Parameters(format!(
            "order = {order} gives no stress for rank = {dimension}; the nearest possible value is {}",
            dimension + 2
        )));
    }
    let holds = |radius: i64| (2 * radius as usize + 1).pow(dimension as u32) >= ROOM * order;
    let least = (1..).find(|&radius| holds(radius)).expect("a large square holds every point");
    let radius = match parameters.get("radius") {
        Some(Setting::Integer(radius)) => *radius,
        _ => least.max(AUTO_RADIUS),
    };
    if radius < least {
        return Err(PlantError::Parameters(format!(
            "radius = {radius} is too narrow for order = {order} and rank = {dimension}; the nearest possible \
             value is {least}"
        )));
    }
    Ok(Sizes { order, dimension, radius, extra: parameters.size("extra") })
}

/// Draws the points; none when some point found no place.
fn draw(sizes: &Sizes, stream: &mut Stream) -> Result<Option<Cliques>, PlantError> {
    let (order, dimension, radius) = (sizes.order, sizes.dimension, sizes.radius);
    let place = |stream: &mut Stream, sum: &[i64], node: usize| -> Vec<i64> {
        let most = radius * (order - 1 - node) as i64 / 4;
        let range = |s: i64| ((-most - s).max(-radius), (most - s).min(radius));
        sum.iter().map(|&s| range(s)).map(|(low, high)| stream.between(low, high)).collect()
    };
    let mut start = |stream: &mut Stream| {
        let mut sum = vec![0; dimension];
        let mut places = Vec::with_capacity(order);
        for node in 0..=dimension {
            let next = place(stream, &sum, node);
            sum.iter_mut().zip(&next).for_each(|(s, x)| *s += x);
            places.push(next);
        }
        places
    };
    let Some(first) = draw_start(stream, &mut start) else {
        return Ok(None);
    };
    let mut sum: Vec<i64> = (0..dimension).map(|p| first.iter().map(|x| x[p]).sum()).collect();
    let mut cliques = Cliques::start(first);
    for node in dimension + 1..order {
        let mut next = |stream: &mut Stream| place(stream, &sum, node);
        if cliques.add(stream, sizes.extra, &mut next)? == Placement::Crowded {
            return Ok(None);
        }
        sum.iter_mut().zip(&cliques.places[node]).for_each(|(s, x)| *s += x);
    }
    debug_assert!(sum.iter().all(|s| *s == 0));
    Ok(Some(cliques))
}

fn draft(sizes: &Sizes, cliques: &Cliques) -> PairDraft {
    let order = sizes.order;
    let ones: Vec<(usize, i64)> = (0..order).map(|i| (i, 1)).collect();
    let mut constraints = vec![IntegerCoefficient::Outer(ones.clone())];
    let mut multipliers = vec![-1];
    for (&(i, l), &stress) in &cliques.stress {
        constraints.push(IntegerCoefficient::Outer(vec![(i, 1), (l, -1)]));
        multipliers.push(stress);
    }
    let dependencies = cliques.dependencies.iter().cloned();
    let slack: Vec<_> = [ones].into_iter().chain(dependencies).map(column).collect();
    PairDraft {
        rank: sizes.dimension,
        factor: IntegerFactor {
            order,
            width: sizes.dimension,
            rows: cliques.places.iter().flatten().copied().collect(),
        },
        weights: vec![1; slack.len()],
        slack,
        constraints,
        multipliers,
    }
}
