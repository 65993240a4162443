//! Performance and data profiles: the share of instances a method solves within a multiple of a cost.
//!
//! With more than two methods only the best curve of a performance profile may be interpreted (N. Gould, J.
//! Scott, ACM TOMS 43(2):15, 2016, from memory): draw the others pairwise.

/// A jump of a curve.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Step {
    /// Where the jump is.
    pub at: f64,
    /// The share from there on, the jump included.
    pub share: f64,
}

/// A right-continuous step curve that starts at share 0 and never falls.
#[derive(Clone, Debug, PartialEq)]
pub struct Curve {
    /// Jumps with rising places and rising shares.
    pub steps: Vec<Step>,
    /// The share of solved instances, the last height.
    pub limit: f64,
}

impl Curve {
    /// Reads the share at the place `at`.
    pub fn value(&self, at: f64) -> f64 {
        let passed = self.steps.partition_point(|step| step.at <= at);
        if passed == 0 { 0.0 } else { self.steps[passed - 1].share }
    }

    /// Builds the curve of the places at which instances become solved, out of `total` instances.
    fn of(mut places: Vec<f64>, total: usize) -> Self {
        places.sort_by(f64::total_cmp);
        let mut steps: Vec<Step> = Vec::new();
        for (before, &at) in places.iter().enumerate() {
            let share = (before + 1) as f64 / total as f64;
            match steps.last_mut() {
                Some(step) if step.at == at => step.share = share,
                _ => steps.push(Step { at, share }),
            }
        }
        Curve { limit: steps.last().map_or(0.0, |step| step.share), steps }
    }
}

/// Panics unless all rows have one length and every cost is a finite number >= 0; returns the number of columns.
#[track_caller]
fn check(costs: &[Vec<Option<f64>>]) -> usize {
    let methods = costs.first().map_or(0, Vec::len);
    for (row, line) in costs.iter().enumerate() {
        assert!(line.len() == methods, "row {row} has {} costs, row 0 has {methods}", line.len());
        for (column, cost) in line.iter().enumerate() {
            if let Some(value) = cost {
                assert!(
                    *value >= 0.0 && value.is_finite(),
                    "the cost {value} in row {row}, column {column} is not a finite number >= 0"
                );
            }
        }
    }
    methods
}

/// Computes the performance profile of each method: rho(x) is the share of instances it solves at a cost of at
/// most x times the best.
///
/// Rows are instances, columns methods, `None` a failure. Costs below `floor` (the resolution of the clock)
/// count as `floor`. The best is over the methods that solve the instance; instances none solves stay in the
/// denominator. The value at 1 is the share of wins, ties counted for all; the limit is the solve rate. No row
/// gives no curve.
///
/// Source: E. Dolan, J. More, Mathematical Programming 91:201-213, 2002.
///
/// # Panics
/// When rows differ in length, a cost is negative or not finite, or `floor` is not a finite number > 0.
#[track_caller]
pub fn performance_profile(costs: &[Vec<Option<f64>>], floor: f64) -> Vec<Curve> {
    assert!(floor > 0.0 && floor.is_finite(), "the floor {floor} is not a finite number > 0");
    let methods = check(costs);
    let mut ratios = vec![Vec::new(); methods];
    for line in costs {
        let best =
            line.iter().flatten().fold(f64::INFINITY, |best, cost| best.min(cost.max(floor)));
        for (ratio, cost) in ratios.iter_mut().zip(line) {
            ratio.extend(cost.map(|cost| cost.max(floor) / best));
        }
    }
    ratios.into_iter().map(|places| Curve::of(places, costs.len())).collect()
}

/// Computes the data profile of each method: the share of instances it solves at a cost of at most x units of
/// the instance.
///
/// Rows are instances, columns methods, `None` a failure; `units` holds one positive unit an instance (for
/// example the cost of an eigendecomposition). The limit is the solve rate. No row gives no curve.
///
/// Source: J. More, S. Wild, SIAM J. Optim. 20:172-191, 2009.
///
/// # Panics
/// When rows differ in length, a cost is negative or not finite, there is not one unit a row, or a unit is not
/// a finite number > 0.
#[track_caller]
pub fn data_profile(costs: &[Vec<Option<f64>>], units: &[f64]) -> Vec<Curve> {
    let methods = check(costs);
    assert!(units.len() == costs.len(), "{} units for {} rows", units.len(), costs.len());
    let mut places = vec![Vec::new(); methods];
    for (row, (line, unit)) in costs.iter().zip(units).enumerate() {
        assert!(
            *unit > 0.0 && unit.is_finite(),
            "the unit {unit} of row {row} is not a finite number > 0"
        );
        for (place, cost) in places.iter_mut().zip(line) {
            place.extend(cost.map(|cost| cost / unit));
        }
    }
    places.into_iter().map(|places| Curve::of(places, costs.len())).collect()
}
