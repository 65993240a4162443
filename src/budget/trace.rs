//! Convergence traces of bounded length.

/// One point of a convergence trace. Absent figures are `None`.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct TracePoint {
    /// Flops so far.
    pub flops: u64,
    /// Objective of the iterate.
    pub objective: Option<f64>,
    /// Relative primal residual of the iterate, as the method measures it.
    pub residual: Option<f64>,
    /// Tail ratio of the iterate: eigenvalues beyond the target rank over the trace.
    pub tail: Option<f64>,
}

/// Most points that are kept; a longer trace is thinned.
const MOST: usize = 1024;

/// Keeps every point of a short trace and every 2nd, 4th, 8th, ... of a longer one, and always the
/// last, so that a long trial neither grows nor slows by being traced.
#[derive(Clone, Debug, Default)]
pub(super) struct Trace {
    points: Vec<TracePoint>,
    /// Points left out after each that is kept, plus one, as a power of two.
    stride: u64,
    seen: u64,
    last: Option<TracePoint>,
}

impl Trace {
    pub(super) fn new() -> Self {
        Trace { points: Vec::with_capacity(MOST), stride: 1, seen: 0, last: None }
    }

    pub(super) fn push(&mut self, point: TracePoint) {
        if self.seen.is_multiple_of(self.stride) {
            if self.points.len() == MOST {
                let mut at = 0;
                self.points.retain(|_| {
                    at += 1;
                    at % 2 == 1
                });
                self.stride *= 2;
            }
            if self.seen.is_multiple_of(self.stride) {
                self.points.push(point);
            }
        }
        self.seen += 1;
        self.last = Some(point);
    }

    pub(super) fn into_points(mut self) -> Vec<TracePoint> {
        if let Some(last) = self.last
            && self.points.last() != Some(&last)
        {
            self.points.push(last);
        }
        self.points
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn long_traces_are_thinned_evenly_and_keep_their_ends() {
        for length in [1u64, 5, 1024, 1025, 5000, 100_000] {
            let mut trace = Trace::new();
            for flops in 0..length {
                trace.push(TracePoint { flops, ..TracePoint::default() });
            }
            let points = trace.into_points();
            assert!(points.len() <= MOST + 1, "{}", points.len());
            assert!(points.len() as u64 >= length.min(MOST as u64 / 2));
            assert_eq!(points[0].flops, 0);
            assert_eq!(points[points.len() - 1].flops, length - 1);
            let inner = &points[..points.len() - 1];
            let steps: Vec<u64> =
                inner.windows(2).map(|pair| pair[1].flops - pair[0].flops).collect();
            assert!(steps.iter().all(|step| *step == steps[0]), "uneven at {length}");
        }
    }
}
