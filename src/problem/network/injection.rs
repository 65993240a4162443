//! Powers and voltages of a network as quadratic forms of the real lifted voltage vector.
//!
//! The vector is w = (Re V_1, .., Re V_N, Im V_k for every bus k but the reference), of length 2N - 1: the angle of
//! the reference bus is fixed by Im V_ref = 0, which takes the common rotation of all voltages away, so that a
//! rank-one X = ww' determines w up to its sign. For a line from l to m with series admittance y = g + ib and total
//! charging susceptance c (model with half of it at each end; common practice), the power that leaves l is
//! `V_l conj((y + ic/2) V_l - y V_m)`, hence
//!
//! ```text
//! P_lm = g (|V_l|^2 - Re(V_l conj V_m)) - b Im(V_l conj V_m)
//! Q_lm = -(b + c/2) |V_l|^2 + b Re(V_l conj V_m) - g Im(V_l conj V_m)
//! ```
//!
//! with Re(V_l conj V_m) = e_l e_m + f_l f_m and Im(V_l conj V_m) = f_l e_m - e_l f_m for V = e + if. These are the
//! matrices of J. Lavaei, S. Low, IEEE Transactions on Power Systems 27:92-107, 2012 (citation from memory), written
//! by entries. Nothing here rounds unless a given number times 1/2 does.

/// Entries `(i, j, value)` of a symmetric matrix; each unordered pair stands for both triangles, equal positions add.
pub type Terms = Vec<(usize, usize, f64)>;

/// Where the parts of the bus voltages stand in the lifted vector.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Lift {
    buses: usize,
    reference: usize,
}

/// A line between two buses in the per-unit system.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Branch {
    /// Series conductance g.
    pub conductance: f64,
    /// Series susceptance b, negative for an inductive line.
    pub susceptance: f64,
    /// Total charging susceptance c.
    pub charging: f64,
}

/// Active and reactive power as two forms.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct Power {
    /// Active power P.
    pub active: Terms,
    /// Reactive power Q.
    pub reactive: Terms,
}

impl Lift {
    /// Makes the lift of `buses` buses, counted from 0, of which `reference` keeps no imaginary part.
    #[track_caller]
    pub fn new(buses: usize, reference: usize) -> Self {
        assert!(reference < buses, "reference bus {reference} of {buses} buses");
        Lift { buses, reference }
    }

    /// Returns the length 2N - 1 of the lifted vector.
    pub fn order(&self) -> usize {
        2 * self.buses - 1
    }

    /// Returns the place of Re V_k.
    pub fn real(&self, bus: usize) -> usize {
        bus
    }

    /// Returns the place of Im V_k; none for the reference bus, where it is 0.
    pub fn imaginary(&self, bus: usize) -> Option<usize> {
        match bus.cmp(&self.reference) {
            std::cmp::Ordering::Less => Some(self.buses + bus),
            std::cmp::Ordering::Equal => None,
            std::cmp::Ordering::Greater => Some(self.buses + bus - 1),
        }
    }

    /// Adds `weight |V_k|^2`.
    pub fn add_square(&self, bus: usize, weight: f64, terms: &mut Terms) {
        let places = [Some(self.real(bus)), self.imaginary(bus)];
        terms.extend(places.into_iter().flatten().map(|place| (place, place, weight)));
    }

    /// Adds `cosine Re(V_l conj V_m) + sine Im(V_l conj V_m)` for two different buses.
    pub fn add_product(&self, l: usize, m: usize, cosine: f64, sine: f64, terms: &mut Terms) {
        let (e_l, e_m) = (self.real(l), self.real(m));
        let (f_l, f_m) = (self.imaginary(l), self.imaginary(m));
        terms.push((e_l, e_m, 0.5 * cosine));
        if let (Some(f_l), Some(f_m)) = (f_l, f_m) {
            terms.push((f_l, f_m, 0.5 * cosine));
        }
        terms.extend(f_l.map(|f_l| (f_l, e_m, 0.5 * sine)));
        terms.extend(f_m.map(|f_m| (e_l, f_m, -0.5 * sine)));
    }

    /// Adds the power that leaves `from` into the line to `to`.
    pub fn add_flow(&self, from: usize, to: usize, branch: Branch, power: &mut Power) {
        let Branch { conductance: g, susceptance: b, charging } = branch;
        self.add_square(from, g, &mut power.active);
        self.add_product(from, to, -g, -b, &mut power.active);
        self.add_square(from, -(b + 0.5 * charging), &mut power.reactive);
        self.add_product(from, to, b, -g, &mut power.reactive);
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    type Complex = (f64, f64);

    fn times(a: Complex, b: Complex) -> Complex {
        (a.0 * b.0 - a.1 * b.1, a.0 * b.1 + a.1 * b.0)
    }

    fn evaluate(terms: &Terms, w: &[f64]) -> f64 {
        terms.iter().map(|&(i, j, v)| (if i == j { 1.0 } else { 2.0 }) * v * w[i] * w[j]).sum()
    }

    /// Compares the forms with V_l conj(I) computed in complex numbers, for every position of the reference.
    #[test]
    fn forms_equal_complex_arithmetic() {
        for reference in 0..3 {
            let mut voltages: Vec<Complex> = vec![(1.02, -0.11), (0.97, 0.23), (1.05, 0.08)];
            voltages[reference].1 = 0.0;
            let lift = Lift::new(3, reference);
            let mut w = vec![0.0; lift.order()];
            for (k, v) in voltages.iter().enumerate() {
                w[lift.real(k)] = v.0;
                if let Some(place) = lift.imaginary(k) {
                    w[place] = v.1;
                }
            }
            let branch = Branch { conductance: 1.7, susceptance: -4.3, charging: 0.6 };
            for (l, m) in [(0, 1), (1, 0), (1, 2), (2, 0)] {
                let (v, u) = (voltages[l], voltages[m]);
                let own = times((branch.conductance, branch.susceptance + 0.3), v);
                let other = times((branch.conductance, branch.susceptance), u);
                let conjugate = (own.0 - other.0, -(own.1 - other.1));
                let (p, q) = times(v, conjugate);
                let mut power = Power::default();
                lift.add_flow(l, m, branch, &mut power);
                assert!((evaluate(&power.active, &w) - p).abs() < 1e-14);
                assert!((evaluate(&power.reactive, &w) - q).abs() < 1e-14);
                let mut square = Terms::new();
                lift.add_square(l, 2.0, &mut square);
                assert!((evaluate(&square, &w) - 2.0 * (v.0 * v.0 + v.1 * v.1)).abs() < 1e-14);
            }
        }
    }
}
