//! Levels and gains of small pairs, by hand arithmetic and the published tables.

use super::*;

fn scenario(nodes: &str, rest: &str) -> Scenario {
    let text = format!(
        "title = \"t\"\ndescription = \"d\"\nreceiver = \"tia485a\"\n\
         [monitor.front_end]\ninput_ohm = 1e9\n{nodes}\n{rest}"
    );
    Scenario::from_toml(&text).unwrap()
}

const TWO_NODES: &str = r#"
[[nodes]]
name = "panel"
input_ohm = 1e9
terminator_ohm = 120.0
bias = { supply_v = 5.0, pull_up_ohm = 560.0, pull_down_ohm = 560.0 }
driver = {}
[[nodes]]
name = "press"
input_ohm = 1e9
terminator_ohm = 120.0
driver = {}
"#;

fn near(measured: f64, expected: f64, tolerance: f64) {
    assert!(
        (measured - expected).abs() <= tolerance,
        "measured {measured}, expected {expected} ± {tolerance}"
    );
}

/// Idle: 5 V through 560 ohm and two 120 ohm terminators, 254.2 mV (nodal arithmetic). Driven: 3.6 V
/// behind 40 ohm into 60 ohm, 2.16 V, before the bias adds its share (own arithmetic).
#[test]
fn idle_and_driven_levels_are_those_of_the_tables() {
    let responses = Responses::new(&scenario(TWO_NODES, "")).unwrap();
    near(responses.modes(IDLE).0, 0.254_237, 1e-5);
    near(responses.modes(IDLE).1, 2.5, 1e-5);
    let share = 1.0 / 40.0 + 1.0 / 60.0 + 1.0 / 1120.0;
    near(responses.modes(state_of(1, true)).0, (3.6 / 40.0 + 5.0 / 1120.0) / share, 1e-4);
    near(responses.modes(state_of(1, false)).0, (-3.6 / 40.0 + 5.0 / 1120.0) / share, 1e-4);
}

/// A talker carries the pair to its own ground; a listener with one unit load hardly moves it.
#[test]
fn pair_follows_the_ground_of_whoever_drives() {
    let nodes = TWO_NODES.replace("input_ohm = 1e9", "input_ohm = 12e3");
    let rest = r#"
[[disturbances]]
name = "shift"
coupling.ground = { node = "press" }
source.ground-shift = { volts = 7.0 }
"#;
    let responses = Responses::new(&scenario(&nodes, rest)).unwrap();
    assert_eq!(responses.channels, [Channel::Ground(1)]);
    let gain =
        |state: u32| (responses.legs[0][state as usize][1] + responses.legs[1][state as usize][1]) / 2.0;
    // Driving: 10 ohm (both halves of the driver in parallel) against 280 ohm of bias.
    near(gain(state_of(1, true)), (1.0 / 10.0 + 2.0 / 12e3) / (1.0 / 10.0 + 1.0 / 280.0 + 4.0 / 12e3), 1e-4);
    // Listening while the panel drives: 6 kohm against 10 ohm.
    near(gain(state_of(0, true)), (2.0 / 12e3) / (1.0 / 10.0 + 1.0 / 280.0 + 4.0 / 12e3), 1e-4);
    // Listening while nobody drives: 6 kohm against the 280 ohm of the bias.
    near(gain(IDLE), (2.0 / 12e3) / (1.0 / 280.0 + 4.0 / 12e3), 1e-4);
}

/// Two sources behind 500 ohm each: in common mode 250 ohm against the 280 ohm of the bias; their
/// imbalance of 10 % makes a DM of 10 % of the current into the pair's differential resistance.
#[test]
fn injection_through_resistances_gives_way_to_the_pair() {
    let rest = "[[disturbances]]\nname = \"x\"\n\
                coupling.legs = { node = \"press\", source_ohm = 500.0, imbalance = 0.1 }\n\
                source.ground-shift = { volts = 1.0 }\n";
    let responses = Responses::new(&scenario(TWO_NODES, rest)).unwrap();
    let [a, b] = [0, 1].map(|leg: usize| responses.legs[leg][IDLE as usize][1]);
    near((a + b) / 2.0, 280.0 / (280.0 + 250.0), 2e-3);
    // Norton: each leg gets (1 - CM) (1 +- 0.05)/500; half the difference of the two currents flows
    // through 60 ohm parallel to 1120 ohm (bias) and 1000 ohm (sources).
    let half_difference = (1.0 - (a + b) / 2.0) * 0.05 / 500.0;
    near(a - b, half_difference / (1.0 / 60.0 + 1.0 / 1120.0 + 1.0 / 1000.0), 1e-5);
    // A driver holds the pair firmly: 10 ohm.
    let [a, b] = [0, 1].map(|leg: usize| responses.legs[leg][state_of(0, true) as usize][1]);
    near((a + b) / 2.0, (1.0 / 250.0) / (1.0 / 250.0 + 1.0 / 280.0 + 1.0 / 10.0), 1e-3);
}

#[test]
fn swapped_node_and_reversed_bias_change_signs() {
    let plain = Responses::new(&scenario(TWO_NODES, "")).unwrap();
    let nodes = TWO_NODES
        .replace("pull_down_ohm = 560.0", "pull_down_ohm = 560.0, reversed = true")
        .replacen("driver = {}", "driver = { swapped = true }", 1);
    let turned = Responses::new(&scenario(&nodes, "")).unwrap();
    near(turned.modes(IDLE).0, -plain.modes(IDLE).0, 1e-9);
    near(turned.modes(state_of(0, true)).0, -plain.modes(state_of(0, true)).0, 1e-9);
    assert!(turned.modes(state_of(1, true)).0 > 1.5);
}

/// All of a driver's level is gone when all of its supply is.
#[test]
fn supply_dip_takes_the_drivers_level() {
    let nodes = TWO_NODES.replace("bias =", "# bias =");
    let rest = "[[disturbances]]\nname = \"dip\"\nsource.supply-dip = { node = \"press\", share = 1.0 }\n";
    let responses = Responses::new(&scenario(&nodes, rest)).unwrap();
    for leg in &responses.legs {
        let row = &leg[state_of(1, true) as usize];
        near(row[0] + row[1], 0.0, 1e-5);
        near(leg[state_of(0, true) as usize][1], 0.0, 1e-5);
    }
}

/// Nominal CAN levels 3.5 and 1.5 V (workshop manuals): 3.333 V behind 40 ohm into 60 ohm is 2 V.
#[test]
fn can_driver_makes_three_and_a_half_and_one_and_a_half_volts() {
    let nodes = r#"
[[nodes]]
name = "pump"
input_ohm = 1e9
input_rest_v = 2.5
terminator_ohm = 60.0
driver = { kind = "dominant-only", open_v = 3.333333, output_ohm = 40.0 }
"#;
    let responses = Responses::new(&scenario(nodes, "")).unwrap();
    let dominant = state_of(0, true) as usize;
    near(responses.legs[0][dominant][0], 3.5, 1e-4);
    near(responses.legs[1][dominant][0], 1.5, 1e-4);
    near(responses.modes(IDLE).0, 0.0, 1e-9);
    assert_eq!(responses.legs[0][state_of(0, false) as usize], responses.legs[0][IDLE as usize]);
}

/// Signatures of hard faults (textbook): an open leg becomes a copy of the other through the
/// terminator, a leg at common stays there, touching legs leave no DM.
#[test]
fn faults_leave_their_signatures() {
    let with = |fault: &str| Responses::new(&scenario(TWO_NODES, &format!("[[faults]]\n{fault}"))).unwrap();
    let levels = |responses: &Responses, node: usize, is_high: bool| {
        [0, 1].map(|leg: usize| responses.legs[leg][state_of(node, is_high) as usize][0])
    };
    let open = with("open = { at = \"press\", leg = \"a\", place = \"tap\" }");
    let [high, low] = [levels(&open, 1, true), levels(&open, 1, false)];
    let (swing_a, swing_b) = (high[0] - low[0], high[1] - low[1]);
    assert!(
        swing_a * swing_b > 0.0 && swing_b.abs() > 2.0 && swing_a.abs() < swing_b.abs(),
        "A {swing_a} V in phase with B {swing_b} V"
    );
    // The panel's tap is whole, so its own legs still move against each other.
    let [high, low] = [levels(&open, 0, true), levels(&open, 0, false)];
    assert!((high[0] - low[0]) * (high[1] - low[1]) < 0.0);

    let common = with("leg-to-common = { at = \"press\", leg = \"b\", ohm = 0.01 }");
    for is_high in [true, false] {
        assert!(levels(&common, 0, is_high)[1].abs() < 0.01);
    }
    let supply = with("leg-to-supply = { at = \"press\", leg = \"a\", ohm = 0.01, supply_v = 24.0 }");
    near(levels(&supply, 0, false)[0], 24.0, 0.05);
    let touching = with("leg-to-leg = { at = \"press\", ohm = 0.01 }");
    let [a, b] = levels(&touching, 0, true);
    assert!((a - b).abs() < 0.01);
    // Half the level behind a contact as large as the rest of the loop: 40 + 60 ohm.
    let series = with("series = { at = \"press\", leg = \"a\", place = \"tap\", ohm = 1e3 }");
    let [a, b] = levels(&series, 1, true);
    assert!(a - b < 1.0, "{} V", a - b);
}

/// An isolated node's ground may sit anywhere: the pair does not follow.
#[test]
fn isolated_node_does_not_carry_its_ground_onto_the_pair() {
    let nodes = TWO_NODES.replace("name = \"press\"", "name = \"press\"\nground_v = 100.0\nground_ohm = 1e8");
    let responses = Responses::new(&scenario(&nodes, "")).unwrap();
    near(responses.modes(state_of(1, true)).1, 2.5, 0.01);
    let share = 1.0 / 40.0 + 1.0 / 60.0 + 1.0 / 1120.0;
    near(responses.modes(state_of(1, true)).0, (3.6 / 40.0 + 5.0 / 1120.0) / share, 1e-3);
}
