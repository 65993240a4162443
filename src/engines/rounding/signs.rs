//! Local search over sign vectors: minimises x'Cx, x in {-1, 1}^n, by flips of single signs.
//!
//! With the fields g_i = sum_{j != i} C_ij x_j a flip of x_i lowers the objective by 4 x_i g_i. [`SignSearch::one_flip`]
//! flips while that is positive. [`SignSearch::variable_depth`] follows B. Kernighan and S. Lin, Bell System Technical
//! Journal 49:291-307, 1970, in the form for quadratic functions of signs of P. Merz and B. Freisleben, Journal of
//! Heuristics 8:197-213, 2002 (k-opt): a pass flips the free sign of greatest gain, be the gain positive or not,
//! holds it, and goes on; it is then taken back to its best prefix, and passes are made while they gain.
//! [`SignSearch::kick`] flips a random patch of neighbours, the disturbance of an iterated local search (H. Lourenco, O.
//! Martin, T. Stutzle, Handbook of Metaheuristics, 2003). (Bibliographic data from memory; the patch is our own.)
//!
//! Objectives are kept by updates: exact for whole costs, else up to rounding, so callers compute the last one anew.

use crate::budget::{Halt, Meter};
use crate::engines::alm::spheres::cost::SphereBlock;
use crate::seed::Stream;

/// A pass of variable depth ends after this many flips without a new best prefix (from memory: Merz and Freisleben
/// name such a limit as the fast variant).
const PATIENCE: usize = 100;
/// A gain counts when it exceeds this share of the mean norm of the cost's rows.
const LEAST_GAIN: f64 = 1e-11;
/// Flips between two looks at the budget.
const CHECK_EVERY: usize = 64;

/// A sign vector with its fields, and the memory of the searches on it.
#[derive(Clone, Debug)]
pub struct SignSearch<'a> {
    block: &'a SphereBlock,
    signs: Vec<f64>,
    fields: Vec<f64>,
    value: f64,
    least_gain: f64,
    held: Vec<bool>,
    order: Vec<usize>,
    patch: Vec<usize>,
}

impl<'a> SignSearch<'a> {
    /// Takes memory for a block; all signs are 1.
    pub fn new(block: &'a SphereBlock) -> Self {
        let n = block.order;
        let mut search = SignSearch {
            block,
            signs: vec![1.0; n],
            fields: vec![0.0; n],
            value: 0.0,
            least_gain: LEAST_GAIN * block.scale() / n as f64,
            held: vec![false; n],
            order: Vec::with_capacity(n),
            patch: Vec::with_capacity(n),
        };
        search.refresh();
        search
    }

    /// Takes other signs, all -1 or 1.
    #[track_caller]
    pub fn load(&mut self, signs: &[f64]) {
        self.signs.copy_from_slice(signs);
        self.refresh();
    }

    /// Returns the signs.
    pub fn signs(&self) -> &[f64] {
        &self.signs
    }

    /// Returns x'Cx without the diagonal of C.
    pub fn value(&self) -> f64 {
        self.value
    }

    /// Returns the fall of x'Cx by a flip of sign i.
    pub fn gain(&self, i: usize) -> f64 {
        4.0 * self.signs[i] * self.fields[i]
    }

    /// Computes fields and objective from their definitions.
    fn refresh(&mut self) {
        self.value = 0.0;
        for i in 0..self.signs.len() {
            let mut field = 0.0;
            self.block.each_in_row(i, |j, value| field += value * self.signs[j]);
            self.fields[i] = field;
            self.value += self.signs[i] * field;
        }
    }

    fn flip(&mut self, i: usize) {
        self.value -= self.gain(i);
        self.signs[i] = -self.signs[i];
        let change = 2.0 * self.signs[i];
        let fields = &mut self.fields;
        self.block.each_in_row(i, |j, value| fields[j] += change * value);
    }

    /// Flips single signs, in rounds over all, until none gains; returns the number of flips.
    ///
    /// # Errors
    /// A limit of the meter; the signs are then the ones reached.
    pub fn one_flip(&mut self, meter: &mut Meter) -> Result<usize, Halt> {
        let mut flips = 0;
        loop {
            meter.check()?;
            let before = flips;
            for i in 0..self.signs.len() {
                if self.gain(i) > self.least_gain {
                    self.flip(i);
                    flips += 1;
                }
            }
            self.count(flips - before, meter);
            if flips == before {
                return Ok(flips);
            }
        }
    }

    /// Makes passes of variable depth until one gains nothing; returns the number of passes.
    ///
    /// # Errors
    /// A limit of the meter; the signs are then the best prefix of the pass that was cut short.
    pub fn variable_depth(&mut self, meter: &mut Meter) -> Result<usize, Halt> {
        let mut passes = 0;
        loop {
            passes += 1;
            let (gained, halt) = self.pass(meter);
            if let Some(halt) = halt {
                return Err(halt);
            }
            if gained <= self.least_gain {
                return Ok(passes);
            }
        }
    }

    /// Makes one pass and returns what its best prefix gained.
    fn pass(&mut self, meter: &mut Meter) -> (f64, Option<Halt>) {
        let n = self.signs.len();
        self.held.fill(false);
        self.order.clear();
        let (mut gained, mut best, mut kept) = (0.0, 0.0, 0);
        let mut halt = meter.check().err();
        while halt.is_none() && self.order.len() < n && self.order.len() - kept < PATIENCE {
            let free = (0..n).filter(|&i| !self.held[i]);
            let Some(next) = free.max_by(|&a, &b| self.gain(a).total_cmp(&self.gain(b))) else {
                break;
            };
            gained += self.gain(next);
            self.flip(next);
            self.held[next] = true;
            self.order.push(next);
            if gained > best + self.least_gain {
                (best, kept) = (gained, self.order.len());
            }
            if self.order.len().is_multiple_of(CHECK_EVERY) {
                halt = meter.check().err();
            }
        }
        let flips = self.order.len();
        while self.order.len() > kept {
            let last = self.order.pop().expect("longer than the best prefix");
            self.flip(last);
        }
        self.count(2 * flips - kept, meter);
        (best, halt)
    }

    /// Flips a patch of `size` signs (at most n) grown at random along nonzero couplings from a random place; where it
    /// cannot grow, it goes on at another random place.
    pub fn kick(&mut self, size: usize, stream: &mut Stream) {
        let n = self.signs.len();
        self.held.fill(false);
        // `patch` holds the places that touch the ones flipped.
        self.patch.clear();
        for _ in 0..size.min(n) {
            let mut place = None;
            while place.is_none() && !self.patch.is_empty() {
                let drawn = self.patch.swap_remove(stream.index(self.patch.len()));
                place = (!self.held[drawn]).then_some(drawn);
            }
            let mut place = place.unwrap_or_else(|| stream.index(n));
            while self.held[place] {
                place = (place + 1) % n;
            }
            self.held[place] = true;
            self.flip(place);
            let (patch, held) = (&mut self.patch, &self.held);
            self.block.each_in_row(place, |j, value| {
                // A place is listed once or a few times; the list is bounded so that it never grows beyond n.
                if value != 0.0 && !held[j] && patch.len() < n {
                    patch.push(j);
                }
            });
        }
    }

    fn count(&self, flips: usize, meter: &mut Meter) {
        let n = self.signs.len() as u64;
        let row = self.block.flops(1) / n.max(1);
        meter.effort.inner_steps += flips as u64;
        meter.effort.flops += n + flips as u64 * (row + n);
    }
}
