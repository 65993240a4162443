//! Named, reproducible random streams.
//!
//! A seed names a stream, not a position: a stream is ChaCha20 keyed by the SHA-256 hash of a master
//! seed and a list of labels (purpose, family, parameters, index). Adding a family, a size or a
//! method therefore changes no other stream. Everything here is integer arithmetic, so that the
//! same stream gives the same draws on every machine; the one exception, [`Stream::normal`], is for
//! methods and says so.

use rand_chacha::ChaCha20Rng;
use rand_chacha::rand_core::{Rng, SeedableRng};
use sha2::{Digest, Sha256};

/// A reproducible stream of integer draws.
#[derive(Clone, Debug)]
pub struct Stream {
    generator: ChaCha20Rng,
}

impl Stream {
    /// Opens the stream that `master` and `labels` name.
    ///
    /// Each label enters the hash with its length, so that `["ab", "c"]` and `["a", "bc"]` differ.
    pub fn named(master: u64, labels: &[&str]) -> Self {
        let mut hash = Sha256::new();
        hash.update(b"rankassay stream 1");
        hash.update(master.to_le_bytes());
        for label in labels {
            hash.update((label.len() as u64).to_le_bytes());
            hash.update(label.as_bytes());
        }
        Stream { generator: ChaCha20Rng::from_seed(hash.finalize().into()) }
    }

    /// Draws 64 uniform bits.
    pub fn bits(&mut self) -> u64 {
        self.generator.next_u64()
    }

    /// Draws a uniform integer in `0..bound` without bias, by rejection.
    #[track_caller]
    pub fn below(&mut self, bound: u64) -> u64 {
        assert!(bound > 0, "a draw below zero does not exist");
        let zone = u64::MAX - (u64::MAX % bound + 1) % bound;
        loop {
            let draw = self.bits();
            if draw <= zone {
                return draw % bound;
            }
        }
    }

    /// Draws a uniform index in `0..bound`.
    #[track_caller]
    pub fn index(&mut self, bound: usize) -> usize {
        self.below(bound as u64) as usize
    }

    /// Draws a uniform integer in the closed range `low..=high`.
    #[track_caller]
    pub fn between(&mut self, low: i64, high: i64) -> i64 {
        assert!(low <= high, "an empty range {low}..={high} has no draw");
        low + self.below((high - low) as u64 + 1) as i64
    }

    /// Draws -1 or 1 with equal chance.
    pub fn sign(&mut self) -> i64 {
        if self.bits() & 1 == 0 { 1 } else { -1 }
    }

    /// Draws a uniform number in the open interval (0, 1) with 53 bits.
    pub fn uniform(&mut self) -> f64 {
        ((self.bits() >> 11) as f64 + 0.5) * (1.0 / 9_007_199_254_740_992.0)
    }

    /// Draws a standard normal number (Marsaglia's polar method). It uses the platform's `ln`, so it
    /// may differ in the last bit between machines: methods may use it, families may not.
    pub fn normal(&mut self) -> f64 {
        loop {
            let u = 2.0 * self.uniform() - 1.0;
            let v = 2.0 * self.uniform() - 1.0;
            let s = u * u + v * v;
            if s > 0.0 && s < 1.0 {
                return u * (-2.0 * s.ln() / s).sqrt();
            }
        }
    }

    /// Shuffles `items` uniformly (Fisher and Yates).
    pub fn shuffle<T>(&mut self, items: &mut [T]) {
        for i in (1..items.len()).rev() {
            let j = self.index(i + 1);
            items.swap(i, j);
        }
    }

    /// Draws a uniform permutation of `0..length`.
    pub fn permutation(&mut self, length: usize) -> Vec<usize> {
        let mut order: Vec<usize> = (0..length).collect();
        self.shuffle(&mut order);
        order
    }

    /// Draws `count` different indices of `0..bound`, in random order.
    #[track_caller]
    pub fn sample(&mut self, bound: usize, count: usize) -> Vec<usize> {
        assert!(count <= bound, "{count} different indices below {bound} do not exist");
        if 3 * count > bound {
            let mut order = self.permutation(bound);
            order.truncate(count);
            return order;
        }
        let mut chosen: Vec<usize> = Vec::with_capacity(count);
        while chosen.len() < count {
            let draw = self.index(bound);
            if !chosen.contains(&draw) {
                chosen.push(draw);
            }
        }
        chosen
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_stream_depends_on_every_label_and_nothing_else() {
        let first = Stream::named(1, &["plant", "a"]).bits();
        assert_eq!(first, Stream::named(1, &["plant", "a"]).bits());
        assert_ne!(first, Stream::named(2, &["plant", "a"]).bits());
        assert_ne!(first, Stream::named(1, &["planta"]).bits());
        assert_ne!(first, Stream::named(1, &["plan", "ta"]).bits());
    }

    #[test]
    fn draws_below_a_bound_cover_it_evenly() {
        let mut stream = Stream::named(7, &["cover"]);
        let mut counts = [0usize; 7];
        for _ in 0..70_000 {
            counts[stream.index(7)] += 1;
        }
        for count in counts {
            // Six standard deviations of a binomial count with mean 10,000.
            assert!((count as f64 - 10_000.0).abs() < 6.0 * 92.6, "{counts:?}");
        }
    }

    #[test]
    fn samples_are_distinct_and_permutations_complete() {
        let mut stream = Stream::named(3, &["sample"]);
        for count in [0, 1, 5, 40, 100] {
            let mut drawn = stream.sample(100, count);
            drawn.sort_unstable();
            drawn.dedup();
            assert_eq!(drawn.len(), count);
        }
        let mut order = stream.permutation(50);
        order.sort_unstable();
        assert_eq!(order, (0..50).collect::<Vec<_>>());
    }
}
