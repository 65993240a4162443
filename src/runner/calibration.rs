//! The speed of this machine, by the time of fixed work of the kind that trials do.

use std::collections::BTreeMap;
use std::time::Duration;

use cpu_time::ThreadTime;

use super::instance::plant;
use crate::budget::Meter;
use crate::card::{Setting, Settings};
use crate::families;
use crate::methods::{self, Trial};
use crate::seed::Stream;

/// Repeats, of which the fastest counts: what disturbs a measurement only makes it longer.
const REPEATS: usize = 3;

/// Returns the processor time, in seconds, that `relax-ipm` takes on one planted instance of
/// `tight-unique` (order 40, rank 1, master seed 0, index 0): the least of three. None where the
/// system tells no processor time.
pub(super) fn calibrate() -> Option<f64> {
    let family = families::registry().iter().find(|family| family.card().id == "tight-unique")?;
    let method = methods::registry().iter().find(|method| method.card().id == "relax-ipm")?;
    let given = BTreeMap::from(
        [("order", 40), ("rank", 1)]
            .map(|(name, value)| (name.to_owned(), Setting::Integer(value))),
    );
    let parameters = Settings::resolve(family.card().parameters, &given).ok()?;
    let options = Settings::resolve(method.card().options, &BTreeMap::new()).ok()?;
    let planted = plant(*family, &parameters, 0, 0).ok()?;
    let mut least: Option<Duration> = None;
    for _ in 0..REPEATS {
        let mut trial = Trial {
            options: options.clone(),
            meter: Meter::unlimited(),
            stream: Stream::named(0, &["calibration"]),
        };
        let start = ThreadTime::try_now().ok()?;
        method.solve(&planted.problem, &mut trial).ok()?;
        let taken = start.try_elapsed().ok()?;
        least = Some(least.map_or(taken, |least| least.min(taken)));
    }
    least.map(|taken| taken.as_secs_f64())
}
