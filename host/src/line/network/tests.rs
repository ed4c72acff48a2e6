//! Published bias and termination values, solved as networks.

use super::*;

struct Pair {
    network: Network,
    a: Point,
    b: Point,
    volts: Vec<f64>,
}

impl Pair {
    fn new() -> Self {
        let mut network = Network::new();
        let (a, b) = (network.node(), network.node());
        Self { network, a, b, volts: Vec::new() }
    }

    fn across(mut self, ohm: f64) -> Self {
        self.network.resistor(self.a, self.b, ohm).unwrap();
        self
    }

    fn bias(mut self, supply_v: f64, ohm: f64) -> Self {
        let supply = self.network.emf();
        self.volts.push(supply_v);
        self.network.branch(Point::Reference, self.a, ohm, &[supply]).unwrap();
        self.network.resistor(self.b, Point::Reference, ohm).unwrap();
        self
    }

    fn loads(mut self, ohm: f64) -> Self {
        self.network.resistor(self.a, Point::Reference, ohm).unwrap();
        self.network.resistor(self.b, Point::Reference, ohm).unwrap();
        self
    }

    fn driver(mut self, open_v: f64, ohm: f64) -> Self {
        let (high, low) = (self.network.emf(), self.network.emf());
        self.volts.extend([2.5 + open_v / 2.0, 2.5 - open_v / 2.0]);
        self.network.branch(Point::Reference, self.a, ohm / 2.0, &[high]).unwrap();
        self.network.branch(Point::Reference, self.b, ohm / 2.0, &[low]).unwrap();
        self
    }

    /// VA, VB.
    fn legs(&self) -> (f64, f64) {
        let volts = self.network.voltages(&self.volts).unwrap();
        (volts[0], volts[1])
    }

    fn dm(&self) -> f64 {
        let (a, b) = self.legs();
        a - b
    }

    fn cm(&self) -> f64 {
        let (a, b) = self.legs();
        (a + b) / 2.0
    }
}

fn near(measured: f64, expected: f64, tolerance: f64) {
    assert!(
        (measured - expected).abs() <= tolerance,
        "measured {measured}, expected {expected} ± {tolerance}"
    );
}

/// Bias divider of a Modbus-style pair, nodal arithmetic: 5/(560+60+560) A.
#[test]
fn five_volts_through_560_ohm_idles_at_254_millivolts() {
    let pair = Pair::new().bias(5.0, 560.0).across(60.0);
    near(pair.dm(), 0.254_237, 1e-5);
    near(pair.legs().0, 2.627_12, 1e-5);
    near(pair.legs().1, 2.372_88, 1e-5);
    near(pair.cm(), 2.5, 1e-5);
}

/// 32 unit loads = 375 ohm per leg: TI SLLA272, The RS-485 Design Guide.
#[test]
fn thirty_two_unit_loads_pull_the_idle_level_to_236_millivolts() {
    let pair = Pair::new().bias(5.0, 560.0).across(60.0).loads(375.0);
    near(pair.dm(), 0.236_295, 1e-5);
    near(pair.cm(), 1.0027, 1e-4);
}

/// The 720 ohm of a public RS-485 bias calculator for 200 mV at 5 V and 60 ohm.
#[test]
fn seven_hundred_twenty_ohm_gives_exactly_the_threshold() {
    near(Pair::new().bias(5.0, 720.0).across(60.0).dm(), 0.2, 1e-9);
    // 0.01 ohm of resistance is 2.7 uV here: the value is met to the calculator's last digit.
    near(Pair::new().bias(5.0, 720.01).across(60.0).dm(), 0.2, 3e-6);
}

/// PROFIBUS terminators 390/220/390 at both ends, levels of the felser.ch manual (A about 2 V, B
/// about 3 V, idle about 1 V); here the positive wire is leg A.
#[test]
fn profibus_terminators_idle_at_one_point_one_volts() {
    let one = Pair::new().bias(5.0, 390.0).across(220.0);
    near(one.legs().0, 3.05, 1e-6);
    near(one.legs().1, 1.95, 1e-6);
    near(one.dm(), 1.1, 1e-6);
    let both = Pair::new().bias(5.0, 390.0).across(220.0).bias(5.0, 390.0).across(220.0);
    near(both.dm(), 1.1, 1e-6);
    near(both.cm(), 2.5, 1e-6);
}

/// Nodal arithmetic on the terminators above. The published figure for an open supply pin at the far
/// end, 5*110/(780+110) V, counts of the far terminator only its 220 ohm; with the far pull-down in
/// place as well the B side sees 195 ohm and the pair idles at 5*110/(390+110+195) V = 791 mV.
#[test]
fn unpowered_profibus_end_shifts_both_modes() {
    let across_only = Pair::new().bias(5.0, 390.0).across(220.0).across(220.0);
    near(across_only.dm(), 0.617_98, 1e-4);
    near(across_only.cm(), 2.5, 1e-4);
    let mut pin_open = Pair::new().bias(5.0, 390.0).across(220.0).across(220.0);
    pin_open.network.resistor(pin_open.b, Point::Reference, 390.0).unwrap();
    near(pin_open.dm(), 5.0 * 110.0 / 695.0, 1e-9);
    near(pin_open.cm(), 5.0 * (195.0 + 55.0) / 695.0, 1e-9);
    let collapsed = Pair::new().bias(5.0, 390.0).across(220.0).bias(0.0, 390.0).across(220.0);
    near(collapsed.dm(), 0.550, 1e-4);
    near(collapsed.cm(), 1.25, 1e-4);
}

/// TI SLLA272 bias formula: RB = 4.75/(0.25 (1/375 + 4/120)) = 527.78 ohm. It is exact only with the
/// near terminator raised so that RT || 2RB = Z0; with plain terminators 500 ohm is exact.
#[test]
fn app_note_bias_needs_its_trimmed_terminator() {
    let formula_ohm = 4.75 / (0.25 * (1.0 / 375.0 + 4.0 / 120.0));
    near(formula_ohm, 527.78, 0.05);
    let trimmed_ohm = 1.0 / (1.0 / 120.0 - 1.0 / (2.0 * formula_ohm));
    near(trimmed_ohm, 135.4, 0.05);
    let biased = |ohm: f64, near_end_ohm: f64| {
        Pair::new().bias(4.75, ohm).across(near_end_ohm).across(120.0).loads(375.0).dm()
    };
    near(biased(500.0, 120.0), 0.25, 1e-9);
    near(biased(528.0, 120.0), 0.237_41, 5e-5);
    near(biased(formula_ohm, trimmed_ohm), 0.25, 1e-9);
}

/// A public design review (15 k at 3.3 V, 120 ohm) and a motion-controller manual (1150 ohm, 118 ohm).
#[test]
fn two_published_bias_examples_are_reproduced() {
    near(Pair::new().bias(3.3, 15e3).across(120.0).dm(), 0.013_147, 1e-5);
    near(Pair::new().bias(5.0, 1150.0).across(118.0).dm(), 0.2440, 1e-4);
}

/// Idle table, own arithmetic (textbook divider): bias resistors against terminators. Tolerances are
/// the rounding of the printed figures.
#[test]
fn idle_table_is_reproduced() {
    let rows: [(f64, f64, [f64; 3], f64); 6] = [
        (5.0, 560.0, [0.254, 0.484, 0.172], 4.5),
        (5.0, 680.0, [0.211, 0.405, 0.143], 4.4),
        (5.0, 1e3, [0.146, 0.283, 0.098], 4.2),
        (5.0, 4.7e3, [0.032, 0.063, 0.021], 2.6),
        (5.0, 20e3, [0.007, 0.015, 0.005], 1.0),
        (3.3, 680.0, [0.139, 0.268, 0.094], 2.9),
    ];
    for (supply_v, ohm, terminated, none) in rows {
        for (across_ohm, expected) in [60.0, 120.0, 40.0].into_iter().zip(terminated) {
            near(Pair::new().bias(supply_v, ohm).across(across_ohm).dm(), expected, 0.51e-3);
        }
        near(Pair::new().bias(supply_v, ohm).across(10e3).dm(), none, 0.051);
    }
    near(Pair::new().bias(5.0, 560.0).bias(5.0, 560.0).across(60.0).dm(), 0.484, 0.51e-3);
}

/// Driven table, own arithmetic (textbook divider): 3.6 V open circuit behind 40 ohm.
#[test]
fn driven_table_is_reproduced() {
    for (terminators, expected) in [(1.0, 2.7), (2.0, 2.2), (3.0, 1.8), (4.0, 1.5), (6.0, 1.2)] {
        near(Pair::new().driver(3.6, 40.0).across(120.0 / terminators).dm(), expected, 0.051);
    }
}

/// Superposition: gains times sources equal the solved voltages, on a ladder of unequal resistors.
#[test]
fn gains_and_voltages_agree() {
    let mut network = Network::new();
    let nodes: Vec<Point> = (0..9).map(|_| network.node()).collect();
    let emfs: Vec<Emf> = (0..5).map(|_| network.emf()).collect();
    for (index, pair) in nodes.windows(2).enumerate() {
        network.resistor(pair[0], pair[1], 3.0 + 7.0 * index as f64).unwrap();
    }
    for (index, emf) in emfs.iter().enumerate() {
        network.branch(nodes[index], nodes[8 - index / 2], 90.0 + 31.0 * index as f64, &[*emf]).unwrap();
        network.branch(Point::Reference, nodes[2 * index % 9], 1e3 * (1.0 + index as f64), &[*emf]).unwrap();
    }
    let volts = [1.0, -2.0, 5.0, 0.3, 12.0];
    let solved = network.voltages(&volts).unwrap();
    for (node, expected) in solved.iter().enumerate() {
        let gains = network.gains(Point::Node(node)).unwrap();
        let sum: f64 = gains.iter().zip(&volts).map(|(gain, volt)| gain * volt).sum();
        near(sum, *expected, 1e-9);
    }
}

#[test]
fn impossible_resistances_are_refused() {
    let mut network = Network::new();
    let node = network.node();
    for ohm in [0.0, -1.0, f64::NAN, f64::INFINITY] {
        assert!(matches!(
            network.resistor(Point::Reference, node, ohm),
            Err(NetworkError::Resistance { .. })
        ));
    }
    assert!(NetworkError::Singular.to_string().contains("; try "));
}
