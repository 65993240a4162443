//! The semidefinite program of a network.
//!
//! Variables, with all powers per unit on the base: block 1 is X = ww' for the lifted voltages w (see `injection`), of
//! order 2N - 1 and rank bound 1; a block Z of order 2 for each generator with a squared cost; two blocks T of
//! order 3 for each limited line, one an end; nonnegative scalars s. Rows:
//!
//! - active power of a bus: <P_k, X> - sum of s_g over its generators = sum of their least powers - load, where s_g is
//!   what generator g gives above its least power, and s_g + s' = largest - least where there is a limit;
//! - reactive power of a bus: <Q_k, X> plus load lies between the sums of the limits of its generators: with one
//!   slack for each limit, an equation where they agree or where there is no generator;
//! - |V_k|^2 between v_min^2 and v_max^2 in the same way;
//! - squared costs: Z = [[1, P_g], [P_g, t]] by Z_11 = 1 and Z_12 - s_g = least power, with the cost
//!   [[cost_constant, c_1/2], [c_1/2, c_2]] on Z: Z PSD says t >= P_g^2, and the least cost takes equality;
//! - limited lines: T = [[L, P, Q], [P, L, 0], [Q, 0, L]] PSD says P^2 + Q^2 <= L^2 at that end.
//!
//! A constant of the cost that belongs to no Z stands on Z_11 of the first Z or, without any, on a scalar that a row
//! fixes to 1, so that objectives are costs per hour. Pairs of slacks that add to a fixed width keep every multiplier set
//! bounded where an interior point exists.

use super::injection::{Branch, Lift, Power, Terms};
use super::{Generator, Network, NetworkError};
use crate::problem::{Block, Coefficient, Functional, Problem, SparseSymmetric, SparseVector};

/// Entries of one block of a functional.
type Part = (usize, Terms);

impl Network {
    /// Builds the optimal power flow with the rank bound 1 on the voltage block.
    ///
    /// # Errors
    /// A number that cannot be; see [`Network::check`].
    pub fn problem(&self) -> Result<Problem, NetworkError> {
        self.check()?;
        let reference = self.position(self.reference).expect("the reference has been checked");
        let lift = Lift::new(self.bus.len(), reference);
        let mut program = Program::new(lift.order());
        let mut constant = 0.0;
        let given: Vec<Given> = self
            .generator
            .iter()
            .map(|generator| program.add_generator(generator, self.base_mva, &mut constant))
            .collect();
        for (k, power) in self.injections(&lift).into_iter().enumerate() {
            self.add_bus(k, power, &lift, &given, &mut program);
        }
        for line in self.line.iter().filter(|line| line.limit_mva.is_some()) {
            let ends = [line.from, line.to].map(|number| self.at(number));
            for (from, to) in [(ends[0], ends[1]), (ends[1], ends[0])] {
                let mut power = Power::default();
                lift.add_flow(from, to, line.branch(), &mut power);
                program.add_limit(power, line.limit_mva.unwrap_or_default() / self.base_mva);
            }
        }
        program.add_constant(constant);
        Ok(program.finish())
    }

    fn at(&self, number: u32) -> usize {
        self.position(number).expect("the numbers of buses have been checked")
    }

    /// Returns the power that each bus gives to lines and its shunt.
    fn injections(&self, lift: &Lift) -> Vec<Power> {
        let mut powers = vec![Power::default(); self.bus.len()];
        for line in &self.line {
            let ends = [line.from, line.to].map(|number| self.at(number));
            lift.add_flow(ends[0], ends[1], line.branch(), &mut powers[ends[0]]);
            lift.add_flow(ends[1], ends[0], line.branch(), &mut powers[ends[1]]);
        }
        for (k, bus) in self.bus.iter().enumerate() {
            lift.add_square(k, bus.shunt_mw / self.base_mva, &mut powers[k].active);
            lift.add_square(k, -bus.shunt_mvar / self.base_mva, &mut powers[k].reactive);
        }
        powers
    }

    /// Adds the rows of one bus.
    fn add_bus(&self, k: usize, power: Power, lift: &Lift, given: &[Given], program: &mut Program) {
        let (bus, base) = (&self.bus[k], self.base_mva);
        let own = || self.generator.iter().zip(given).filter(|(g, _)| g.bus == bus.number);
        let least: f64 = own().map(|(_, given)| given.least).sum();
        let slacks = own().filter_map(|(_, given)| given.slack).map(|slack| (slack, -1.0));
        let slacks: Vec<(u32, f64)> = slacks.collect();
        program.row(vec![(0, power.active)], slacks, least - bus.load_mw / base);
        let sum = |limit: fn(&Generator) -> Option<f64>| {
            own().map(|(g, _)| limit(g)).try_fold(0.0, |sum, value| value.map(|v| sum + v / base))
        };
        let load = bus.load_mvar / base;
        let low = sum(|g| g.q_min_mvar).map(|q| q - load);
        let high = sum(|g| g.q_max_mvar).map(|q| q - load);
        program.between(power.reactive, low, high);
        let mut square = Terms::new();
        lift.add_square(k, 1.0, &mut square);
        program.between(square, Some(bus.v_min * bus.v_min), Some(bus.v_max * bus.v_max));
    }
}

impl super::Line {
    /// Returns the line by admittances: 1/(r + ix) = (r - ix)/(r^2 + x^2).
    fn branch(&self) -> Branch {
        let size = self.r * self.r + self.x * self.x;
        Branch { conductance: self.r / size, susceptance: -self.x / size, charging: self.b }
    }
}

/// How a generator's active power enters: `least` plus a slack, if it is not fixed.
struct Given {
    least: f64,
    slack: Option<u32>,
}

/// A problem under construction.
struct Program {
    blocks: Vec<Block>,
    scalars: u32,
    costs: Vec<Part>,
    scalar_costs: Vec<(u32, f64)>,
    constraints: Vec<Functional>,
    rhs: Vec<f64>,
}

impl Program {
    fn new(order: usize) -> Self {
        Program {
            blocks: vec![Block { order, rank: Some(1) }],
            scalars: 0,
            costs: Vec::new(),
            scalar_costs: Vec::new(),
            constraints: Vec::new(),
            rhs: Vec::new(),
        }
    }

    fn block(&mut self, order: usize) -> usize {
        self.blocks.push(Block { order, rank: None });
        self.blocks.len() - 1
    }

    fn scalar(&mut self) -> u32 {
        self.scalars += 1;
        self.scalars - 1
    }

    fn functional(&self, parts: Vec<Part>, scalars: Vec<(u32, f64)>) -> Functional {
        let parts = parts.into_iter().map(|(block, terms)| {
            let order = self.blocks[block].order;
            (block, Coefficient::Sparse(SparseSymmetric::gather(order, terms)))
        });
        Functional { parts: parts.collect(), orthant: SparseVector::gather(scalars) }
    }

    fn row(&mut self, parts: Vec<Part>, scalars: Vec<(u32, f64)>, rhs: f64) {
        let functional = self.functional(parts, scalars);
        self.constraints.push(functional);
        self.rhs.push(rhs);
    }

    /// Holds a form of the voltage block between two limits.
    fn between(&mut self, terms: Terms, low: Option<f64>, high: Option<f64>) {
        match (low, high) {
            (None, None) => {}
            (Some(low), Some(high)) if low == high => self.row(vec![(0, terms)], Vec::new(), low),
            (Some(low), high) => {
                let slack = self.scalar();
                self.row(vec![(0, terms)], vec![(slack, -1.0)], low);
                if let Some(high) = high {
                    self.width(slack, high - low);
                }
            }
            (None, Some(high)) => {
                let slack = self.scalar();
                self.row(vec![(0, terms)], vec![(slack, 1.0)], high);
            }
        }
    }

    /// Bounds a slack by a second one.
    fn width(&mut self, slack: u32, width: f64) {
        let other = self.scalar();
        self.row(Vec::new(), vec![(slack, 1.0), (other, 1.0)], width);
    }

    fn add_generator(&mut self, generator: &Generator, base: f64, constant: &mut f64) -> Given {
        let least = generator.p_min_mw / base;
        let (squared, linear) =
            (generator.cost_squared * base * base, generator.cost_linear * base);
        if generator.p_max_mw == Some(generator.p_min_mw) {
            *constant += (squared * least + linear) * least + generator.cost_constant;
            return Given { least, slack: None };
        }
        let slack = self.scalar();
        if let Some(most) = generator.p_max_mw {
            self.width(slack, most / base - least);
        }
        if squared == 0.0 {
            *constant += linear * least + generator.cost_constant;
            self.scalar_costs.push((slack, linear));
        } else {
            let block = self.block(2);
            self.row(vec![(block, vec![(0, 0, 1.0)])], Vec::new(), 1.0);
            self.row(vec![(block, vec![(0, 1, 0.5)])], vec![(slack, -1.0)], least);
            let cost = vec![(0, 0, generator.cost_constant), (0, 1, 0.5 * linear), (1, 1, squared)];
            self.costs.push((block, cost));
        }
        Given { least, slack: Some(slack) }
    }

    /// Holds the apparent power of one end of a line below `limit`.
    fn add_limit(&mut self, power: Power, limit: f64) {
        let block = self.block(3);
        for i in 0..3 {
            self.row(vec![(block, vec![(i, i, 1.0)])], Vec::new(), limit);
        }
        self.row(vec![(block, vec![(1, 2, 0.5)])], Vec::new(), 0.0);
        self.row(vec![(0, power.active), (block, vec![(0, 1, -0.5)])], Vec::new(), 0.0);
        self.row(vec![(0, power.reactive), (block, vec![(0, 2, -0.5)])], Vec::new(), 0.0);
    }

    fn add_constant(&mut self, constant: f64) {
        if constant == 0.0 {
            return;
        }
        if let Some((_, cost)) = self.costs.first_mut() {
            cost.push((0, 0, constant));
            return;
        }
        let one = self.scalar();
        self.row(Vec::new(), vec![(one, 1.0)], 1.0);
        self.scalar_costs.push((one, constant));
    }

    fn finish(mut self) -> Problem {
        let (costs, scalar_costs) =
            (std::mem::take(&mut self.costs), std::mem::take(&mut self.scalar_costs));
        let cost = self.functional(costs, scalar_costs);
        Problem::new(self.blocks, self.scalars as usize, cost, self.constraints, self.rhs)
            .expect("a checked network has finite numbers and fitting shapes")
    }
}
