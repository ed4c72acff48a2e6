//! Every refusal names its key and says what to try.

use crate::line::scenario::Scenario;
use crate::line::{ScenarioError, scenarios};

/// The press-ground scenario with one piece of text exchanged.
fn with(from: &str, to: &str) -> Result<Scenario, ScenarioError> {
    let text = scenarios::text_of("press-ground").unwrap();
    assert!(text.contains(from), "{from}");
    Scenario::from_toml(&text.replacen(from, to, 1))
}

#[test]
fn refused_values_name_their_key_and_a_remedy() {
    let cases = [
        ("receiver = \"tia485a\"", "receiver = \"nobody\"", "receiver"),
        ("baud = 19200.0", "baud = 0.0", "traffic.uart.baud"),
        ("baud = 19200.0", "baud = nan", "traffic.uart.baud"),
        ("master = \"panel\"", "master = \"nobody\"", "traffic.uart.master"),
        ("slave = \"press\"", "slave = \"nobody\"", "traffic.uart.polls[0].slave"),
        ("reply_bytes = [9, 25]", "reply_bytes = [25, 9]", "traffic.uart.polls[0].reply_bytes[1]"),
        ("pause_ms = 120.0", "pause_ms = -1.0", "traffic.uart.pause_ms"),
        ("terminator_ohm = 120.0", "terminator_ohm = 0.0", "nodes[0].terminator_ohm"),
        ("supply_v = 5.0", "supply_v = 500.0", "nodes[0].bias.supply_v"),
        ("name = \"press\"", "name = \"panel\"", "nodes[1].name"),
        ("name = \"press\"", "name = \"\"", "nodes[1].name"),
        ("driver = { open_v = 3.7 }", "driver = { open_v = 30.0 }", "nodes[1].driver.open_v"),
        ("driver = { open_v = 3.7 }", "", "traffic.uart.polls[0].slave"),
        ("driver = {}", "driver = { kind = \"dominant-only\" }", "traffic.uart.master"),
        ("every_s = 75.0", "every_s = 30.0", "machines[0].schedule.every_s"),
        ("for_s = 14.0, ", "", "machines[0].schedule.every_s"),
        ("machine = \"press-run\"", "machine = \"nobody\"", "disturbances[1].machine"),
        (
            "machine = \"press-run\"",
            "machine = \"press-run\"\nschedule = { from_s = 1.0 }",
            "disturbances[1].schedule",
        ),
        ("node = \"press\" }", "node = \"nobody\" }", "disturbances[1].coupling.ground.node"),
        ("volts = 9.0", "volts = inf", "disturbances[1].source.ground-shift.volts"),
        ("order = 3", "order = 1", "disturbances[0].source.mains.harmonics[0].order"),
        ("name = \"hum\"", "name = \"press-ripple\"", "disturbances[2].name"),
        (
            "source.ground-shift = { volts = 9.0",
            "source.radio = { leg_a_v = 1.0, leg_b_v = 1.0",
            "disturbances[1].coupling",
        ),
        ("[traffic.uart]", "[monitor]\nat = \"nobody\"\n[traffic.uart]", "monitor.at"),
        ("[traffic.uart]", "[monitor.adc]\nbits = 7\n[traffic.uart]", "monitor.adc.bits"),
        ("[traffic.uart]", "[monitor.adc]\nskew_ns = 5000\n[traffic.uart]", "monitor.adc.skew_ns"),
        ("[traffic.uart]", "[monitor.adc]\njitter_ns = 900.0\n[traffic.uart]", "monitor.adc.jitter_ns"),
        ("[traffic.uart]", "[monitor.adc]\nhigh_v = -20.0\n[traffic.uart]", "monitor.adc.high_v"),
        ("[traffic.uart]", "[monitor.front_end]\nrc_us = -1.0\n[traffic.uart]", "monitor.front_end.rc_us"),
        (
            "[traffic.uart]",
            "[[faults]]\nleg-to-leg = { at = \"oven\", ohm = 0.0 }\n[traffic.uart]",
            "faults[0].leg-to-leg.ohm",
        ),
        (
            "[traffic.uart]",
            "[[faults]]\nopen = { at = \"panel\", leg = \"a\", place = \"cable\" }\n[traffic.uart]",
            "faults[0].open.at",
        ),
    ];
    for (from, to, key) in cases {
        let error = with(from, to).expect_err(to);
        let message = error.to_string();
        assert!(matches!(&error, ScenarioError::Value { key: named, .. } if named == key), "{to}: {message}");
        assert!(message.contains(&format!("`{key} = ")) && message.contains("; try "), "{message}");
    }
}

#[test]
fn unknown_missing_and_mistyped_keys_are_refused_with_their_place() {
    let cases = [
        ("title = ", "headline = ", "headline"),
        ("baud = 19200.0", "bauds = 19200.0", "bauds"),
        ("baud = 19200.0", "baud = \"fast\"", "baud"),
        ("peak_v = 0.25", "peak_mv = 250.0", "peak_mv"),
        ("source.ground-shift", "source.ground-drift", "ground-drift"),
        ("pull_up_ohm = 510.0, ", "", "pull_up_ohm"),
        ("coupling.ground", "coupling.sky", "sky"),
        ("receiver = \"tia485a\"", "receiver = tia485a", "receiver"),
    ];
    for (from, to, word) in cases {
        let error = with(from, to).expect_err(to);
        let message = error.to_string();
        assert!(matches!(error, ScenarioError::Syntax { .. }), "{to}: {message}");
        assert!(
            message.contains(word) && message.contains("line ") && message.contains("\ntry "),
            "{message}"
        );
    }
}

#[test]
fn can_scenarios_are_checked_as_well() {
    let text = scenarios::text_of("can-weak-ground").unwrap();
    for (from, to, key) in [
        ("bit_rate_hz = 125e3", "bit_rate_hz = 0.0", "traffic.can.bit_rate_hz"),
        ("bytes = 4", "bytes = 9", "traffic.can.frames[1].bytes"),
        ("every_ms = 20.0", "every_ms = 0.0", "traffic.can.frames[0].every_ms"),
        ("node = \"fan\", bytes", "node = \"nobody\", bytes", "traffic.can.frames[1].node"),
    ] {
        let error = Scenario::from_toml(&text.replacen(from, to, 1)).expect_err(to);
        assert!(matches!(&error, ScenarioError::Value { key: named, .. } if named == key), "{error}");
    }
}

/// The file in the module's documentation is a scenario.
#[test]
fn documented_example_is_accepted() {
    let source = include_str!("../../scenario.rs");
    let lines = source.lines().filter_map(|line| line.strip_prefix("//!"));
    let inside = lines.skip_while(|line| !line.contains("```toml")).skip(1);
    let text: Vec<&str> = inside.take_while(|line| !line.contains("```")).collect();
    Scenario::from_toml(&text.join("\n")).unwrap();
}
