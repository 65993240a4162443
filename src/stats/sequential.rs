//! Looking at the data more than once: an anytime-valid test, levels for repeated looks, and Wald's sequential test.
//!
//! All of it concerns discordant pairs only: `gained` pairs that only the challenger solves and `lost` pairs
//! that only the incumbent solves; under the null hypothesis each discordant pair is gained with chance 1/2.

use statrs::function::gamma::ln_gamma;
use std::f64::consts::{LN_2, PI};

/// Computes the natural logarithm of [`e_value`], which never overflows.
pub fn log_e_value(gained: u64, lost: u64) -> f64 {
    let (w, l) = (gained as f64, lost as f64);
    if gained == 0 && lost == 0 {
        return 0.0;
    }
    (w + l) * LN_2 + ln_gamma(w + 0.5) + ln_gamma(l + 0.5) - ln_gamma(w + l + 1.0) - PI.ln()
}

/// Computes the e-value 2^N B(w+1/2, l+1/2) / pi of w `gained` and l `lost` pairs, N = w + l.
///
/// It is the likelihood ratio of a Beta(1/2, 1/2) mixture against chance 1/2, a martingale of mean 1 under the null
/// hypothesis; by Ville's inequality it ever reaches 1/alpha with chance at most alpha, however often one looks. No
/// discordant pair gives 1. Overflows to infinity beyond about 1e308 (see [`log_e_value`]).
///
/// Source: J. Ville 1939 for the inequality (from memory); the mixture is derived in the design notes of this
/// project.
pub fn e_value(gained: u64, lost: u64) -> f64 {
    log_e_value(gained, lost).exp()
}

/// Computes the level of look number `look` (from 1), alpha 6 / (pi^2 look^2): the levels of all looks sum to
/// `alpha`.
///
/// # Panics
/// When `look` is 0 or `alpha` is not in (0, 1).
#[track_caller]
pub fn look_level(look: u64, alpha: f64) -> f64 {
    assert!(look > 0, "looks are counted from 1");
    assert!(alpha > 0.0 && alpha < 1.0, "the level {alpha} is not in (0, 1)");
    let look = look as f64;
    alpha * 6.0 / (PI * PI * look * look)
}

/// What the sequential probability ratio test says.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum SprtState {
    /// More pairs are needed.
    Continue,
    /// The null hypothesis (chance 1/2) is accepted.
    AcceptNull,
    /// The null hypothesis is rejected for the alternative.
    Reject,
}

/// Runs Wald's sequential probability ratio test of chance 1/2 against `alternative` on the discordant pairs so far.
///
/// The log likelihood ratio is w ln(2 p1) + l ln(2 (1-p1)); `Reject` when it is >= ln((1-beta)/alpha),
/// `AcceptNull` when it is <= ln(beta/(1-alpha)), else `Continue`. The test must be asked after every pair;
/// asked later it sees an overshoot.
///
/// Source: A. Wald, Annals of Mathematical Statistics 16:117-186, 1945 (from memory).
///
/// # Panics
/// When `alternative` is not in (0, 1) or is 1/2, when `alpha` or `beta` is not in (0, 1), or when `alpha +
/// beta >= 1`.
#[track_caller]
pub fn sprt(gained: u64, lost: u64, alternative: f64, alpha: f64, beta: f64) -> SprtState {
    assert!(
        alternative > 0.0 && alternative < 1.0 && alternative != 0.5,
        "the alternative {alternative} is not in (0, 1) without 1/2"
    );
    assert!(
        alpha > 0.0 && beta > 0.0 && alpha + beta < 1.0,
        "the error rates {alpha} and {beta} are not positive with a sum below 1"
    );
    let ratio =
        gained as f64 * (2.0 * alternative).ln() + lost as f64 * (2.0 * (1.0 - alternative)).ln();
    if ratio >= ((1.0 - beta) / alpha).ln() {
        SprtState::Reject
    } else if ratio <= (beta / (1.0 - alpha)).ln() {
        SprtState::AcceptNull
    } else {
        SprtState::Continue
    }
}
