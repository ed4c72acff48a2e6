//! Resistive network of a pair by nodal analysis: what each leg rests at for given sources.
//!
//! A branch runs between two points through a resistance and may hold sources in series:
//! `i = (v_from + sum of sources - v_to) / ohm`. Kirchhoff's current law at every node gives
//! `G v = s` with a symmetric conductance matrix `G` (any textbook on circuits). Because `G` is
//! symmetric, one solution `G y = e_k` yields the share of *every* source in the voltage of node
//! `k`: `gain = sum over branches of (y_to - y_from) / ohm`. The simulated pair uses that once per
//! bus state and then needs only multiply-adds.
//!
//! Dense Gaussian elimination with partial pivoting: a bus has a few dozen nodes at most.

use std::fmt;

#[cfg(test)]
mod tests;

/// Conductance from every node to the reference, siemens: keeps a node that nothing else ties down
/// solvable (1 TOhm; its error is far below a microvolt beside any real resistor).
const LEAK_S: f64 = 1e-12;

/// One end of a branch.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Point {
    /// The monitor's reference clip, 0 V by definition.
    Reference,
    /// A node, numbered as [`Network::node`] handed it out.
    Node(usize),
}

/// A source in a branch, numbered as [`Network::emf`] handed it out.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Emf(usize);

impl Emf {
    /// Its place in the slice [`Network::voltages`] takes and [`Network::gains`] returns.
    pub const fn index(self) -> usize {
        self.0
    }
}

#[derive(Clone, Debug)]
struct Branch {
    from: Point,
    to: Point,
    conductance_s: f64,
    emfs: Vec<Emf>,
}

/// Why a network has no solution.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum NetworkError {
    /// A resistance is zero, negative, infinite or not a number.
    Resistance {
        /// The value given, ohm.
        ohm: f64,
    },
    /// The equations have no single solution in double precision.
    Singular,
}

impl fmt::Display for NetworkError {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        match self {
            Self::Resistance { ohm } => {
                write!(f, "could not use a resistance of {ohm} ohm; try a value between 1e-3 and 1e12 ohm")
            }
            Self::Singular => {
                write!(
                    f,
                    "could not solve the pair as a network; try resistances closer to each other in size"
                )
            }
        }
    }
}

impl std::error::Error for NetworkError {}

/// A network under construction.
#[derive(Clone, Debug, Default)]
pub struct Network {
    nodes: usize,
    emfs: usize,
    branches: Vec<Branch>,
}

impl Network {
    /// A network with only its reference.
    pub fn new() -> Self {
        Self::default()
    }

    /// A new node.
    pub fn node(&mut self) -> Point {
        self.nodes += 1;
        Point::Node(self.nodes - 1)
    }

    /// A new source, to be placed in any number of branches.
    pub fn emf(&mut self) -> Emf {
        self.emfs += 1;
        Emf(self.emfs - 1)
    }

    /// Joins two points by a resistor.
    ///
    /// # Errors
    /// When `ohm` is not a positive finite number.
    pub fn resistor(&mut self, from: Point, to: Point, ohm: f64) -> Result<(), NetworkError> {
        self.branch(from, to, ohm, &[])
    }

    /// Joins two points by a resistor with `emfs` in series; each raises `to` against `from`.
    ///
    /// # Errors
    /// When `ohm` is not a positive finite number.
    pub fn branch(&mut self, from: Point, to: Point, ohm: f64, emfs: &[Emf]) -> Result<(), NetworkError> {
        if !(ohm.is_finite() && ohm > 0.0) {
            return Err(NetworkError::Resistance { ohm });
        }
        self.branches.push(Branch { from, to, conductance_s: ohm.recip(), emfs: emfs.to_vec() });
        Ok(())
    }

    /// Volts at every node, in node order, for `emf_volts` in source order (missing ones count 0 V).
    ///
    /// # Errors
    /// When the equations have no single solution.
    pub fn voltages(&self, emf_volts: &[f64]) -> Result<Vec<f64>, NetworkError> {
        let mut currents = vec![0.0; self.nodes];
        for branch in &self.branches {
            let volts: f64 = branch.emfs.iter().map(|emf| emf_volts.get(emf.0).copied().unwrap_or(0.0)).sum();
            if let Point::Node(node) = branch.to {
                currents[node] += volts * branch.conductance_s;
            }
            if let Point::Node(node) = branch.from {
                currents[node] -= volts * branch.conductance_s;
            }
        }
        solve(self.conductances(), currents)
    }

    /// Volts at `point` per volt of each source, in source order.
    ///
    /// # Errors
    /// When the equations have no single solution.
    pub fn gains(&self, point: Point) -> Result<Vec<f64>, NetworkError> {
        let mut gains = vec![0.0; self.emfs];
        let Point::Node(observed) = point else {
            return Ok(gains);
        };
        let mut unit = vec![0.0; self.nodes];
        unit[observed] = 1.0;
        let adjoint = solve(self.conductances(), unit)?;
        let at = |point: Point| match point {
            Point::Reference => 0.0,
            Point::Node(node) => adjoint[node],
        };
        for branch in &self.branches {
            let share = (at(branch.to) - at(branch.from)) * branch.conductance_s;
            for emf in &branch.emfs {
                gains[emf.0] += share;
            }
        }
        Ok(gains)
    }

    /// The conductance matrix, row by row.
    fn conductances(&self) -> Vec<Vec<f64>> {
        let mut matrix = vec![vec![0.0; self.nodes]; self.nodes];
        for (node, row) in matrix.iter_mut().enumerate() {
            row[node] = LEAK_S;
        }
        for branch in &self.branches {
            let conductance = branch.conductance_s;
            for end in [branch.from, branch.to] {
                if let Point::Node(node) = end {
                    matrix[node][node] += conductance;
                }
            }
            if let (Point::Node(one), Point::Node(other)) = (branch.from, branch.to) {
                matrix[one][other] -= conductance;
                matrix[other][one] -= conductance;
            }
        }
        matrix
    }
}

/// Solves `matrix x = right` by Gaussian elimination with partial pivoting.
fn solve(mut matrix: Vec<Vec<f64>>, mut right: Vec<f64>) -> Result<Vec<f64>, NetworkError> {
    let size = right.len();
    for column in 0..size {
        let pivot = (column..size)
            .max_by(|&one, &other| matrix[one][column].abs().total_cmp(&matrix[other][column].abs()))
            .unwrap_or(column);
        if matrix[pivot][column].abs() < f64::MIN_POSITIVE {
            return Err(NetworkError::Singular);
        }
        matrix.swap(column, pivot);
        right.swap(column, pivot);
        let pivot_row = matrix[column].clone();
        for row in column + 1..size {
            let factor = matrix[row][column] / pivot_row[column];
            if factor != 0.0 {
                for (target, source) in matrix[row].iter_mut().zip(&pivot_row).skip(column) {
                    *target -= factor * source;
                }
                right[row] -= factor * right[column];
            }
        }
    }
    for row in (0..size).rev() {
        let known: f64 = (row + 1..size).map(|column| matrix[row][column] * right[column]).sum();
        right[row] = (right[row] - known) / matrix[row][row];
    }
    if right.iter().all(|value| value.is_finite()) { Ok(right) } else { Err(NetworkError::Singular) }
}
