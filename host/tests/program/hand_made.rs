//! Recordings whose truth was worked out by hand (`tests/recordings`, expected values in the sidecars),
//! and what the options of `analyse` change about them.

use crate::room::Room;
use crate::truth::assert_volts;
use serde_json::Value;
use std::path::{Path, PathBuf};

/// Voltages are integer microvolts, averages half of them: what is left is the rounding of a `f64`.
const EXACT_V: f64 = 1e-9;
/// A level is the mean of offsets cut to 16 µV (`firmware/src/levels.rs`).
const LEVEL_TOLERANCE_V: f64 = 16e-6;

fn recordings() -> PathBuf {
    Path::new(env!("CARGO_MANIFEST_DIR")).join("../tests/recordings")
}

fn recording(name: &str) -> String {
    recordings().join(name).to_str().unwrap().to_owned()
}

/// Everything the table names must be in the report: voltages within the tolerance, the rest exactly.
fn compare(expected: &toml::Value, found: &Value, path: &str, tolerance_v: f64) {
    match expected {
        toml::Value::Table(table) => {
            for (key, value) in table.iter().filter(|(key, _)| *key != "tolerance_v") {
                compare(value, &found[key], &format!("{path}.{key}"), tolerance_v);
            }
        }
        toml::Value::Array(values) => {
            assert_eq!(found.as_array().map(Vec::len), Some(values.len()), "{path}: {found}");
            for (number, value) in values.iter().enumerate() {
                compare(value, &found[number], &format!("{path}[{number}]"), tolerance_v);
            }
        }
        toml::Value::Float(volts) if path.ends_with("_v") => {
            let level =
                if path.starts_with("levels") || path.contains(".levels") { LEVEL_TOLERANCE_V } else { 0.0 };
            assert_volts(found, Some(*volts), tolerance_v.max(level), path);
        }
        other => assert_eq!(found, &serde_json::to_value(other).unwrap(), "{path}"),
    }
}

#[test]
fn every_recording_gives_what_its_sidecar_expects() {
    let room = Room::new();
    let mut examined = 0;
    for entry in std::fs::read_dir(recordings()).unwrap() {
        let path = entry.unwrap().path();
        if !matches!(path.extension().and_then(|extension| extension.to_str()), Some("csv" | "wav")) {
            continue;
        }
        let name = path.file_name().unwrap().to_str().unwrap();
        let sidecar = std::fs::read_to_string(recordings().join(format!("{name}.toml"))).unwrap();
        let sidecar: toml::Table = toml::from_str(&sidecar).unwrap();
        let expected = sidecar.get("expected").unwrap_or_else(|| panic!("{name}: expects nothing"));
        let tolerance_v = expected.get("tolerance_v").map_or(EXACT_V, |value| value.as_float().unwrap());
        let report = room.json(&["analyse", path.to_str().unwrap(), "--json"]);
        compare(expected, &report, name, tolerance_v);
        let origin = report["recording"]["origin_name"].as_str().unwrap();
        assert!(origin.contains(name) && origin.contains("made by hand"), "{origin}");
        examined += 1;
    }
    assert!(examined >= 13, "{examined}");
    assert!(room.files().is_empty(), "an analysis leaves nothing behind: {:?}", room.files());
}

#[test]
fn the_verdict_is_in_the_exit_code_only_when_asked_for() {
    let room = Room::new();
    for (name, code) in [
        ("undisturbed.csv", 0),
        ("little-room.csv", 10),
        ("pulse-on-both-legs.csv", 11),
        ("at-the-rail.csv", 12),
    ] {
        let path = recording(name);
        assert_eq!(room.run(&["analyse", &path, "--verdict-code"]).code, Some(code), "{name}");
        assert_eq!(room.run(&["analyse", &path]).code, Some(0), "{name}");
        let log = format!("{name}.lwlog");
        assert_eq!(room.run(&["analyse", &path, "-o", &log]).code, Some(0), "{name}");
        assert_eq!(room.run(&["report", &log, "--verdict-code"]).code, Some(code), "{name}");
    }
}

#[test]
fn a_receiver_without_a_window_leads_to_no_verdict_but_to_numbers() {
    let room = Room::new();
    let report =
        room.json(&["analyse", &recording("pulse-on-both-legs.csv"), "--receiver", "can-ft", "--json"]);
    assert_eq!(report["verdict"], "cannot-judge");
    assert!(report["worst"]["margin_v"].is_null());
    assert_eq!(report["worst"]["leg_max_v"], 13.5);
    assert_eq!(report["excursions"]["samples_outside"], 0);
    assert!(report["reason"].as_str().unwrap().contains("no window"), "{}", report["reason"]);
}

#[test]
fn the_receiver_of_the_command_line_wins_over_that_of_the_sidecar() {
    let room = Room::new();
    let path = recording("can-at-7v1.csv");
    // -12 to 12 V (Infineon TLE9263): the leg at 8.1 V has 3.9 V left, marginal ends at 24 V * 3/19.
    let report = room.json(&["analyse", &path, "--receiver", "can-2016", "--json"]);
    assert_eq!(report["receiver"]["name"], "can-2016");
    assert_eq!(report["verdict"], "within");
    assert_volts(&report["worst"]["margin_v"], Some(3.9), EXACT_V, "margin_v");
    // Names are taken in any case.
    let report = room.json(&["analyse", &path, "--receiver", "CAN-2003", "--json"]);
    assert_eq!(report["verdict"], "outside");
}

#[test]
fn own_windows_are_judged_by_alone_or_together() {
    let room = Room::new();
    let path = recording("undisturbed.csv");
    let report = |options: &[&str]| {
        let mut arguments = vec!["analyse", &path, "--json"];
        arguments.extend(options);
        room.json(&arguments)
    };
    // Legs reach 3.5 and 1.5 V in every one of the 1200 samples of the talk.
    let above = report(&["--terminal-window", "1,3.4"]);
    assert_eq!(above["verdict"], "outside");
    assert_eq!(above["receiver"]["name"], "custom");
    assert!(above["receiver"]["average"].is_null() && above["judged"]["average"].is_null());
    assert_eq!(above["excursions"]["samples_outside"], 1200);
    assert_eq!(above["excursions"]["count"], 1);
    assert_eq!(above["excursions"]["list"][0]["first_sample"], 400);
    assert_eq!(above["excursions"]["list"][0]["samples"], 1200);
    // The average stays at 2.5 V throughout.
    let average = report(&["--average-window", "2.5,30"]);
    assert_eq!(average["verdict"], "marginal");
    assert_eq!(average["worst"]["margin_v"], 0.0);
    let both = report(&["--terminal-window", "-10,10", "--average-window", "3,30"]);
    assert_eq!(both["judged"]["terminal"]["verdict"], "within");
    assert_eq!(both["judged"]["average"]["verdict"], "outside");
    assert_eq!(both["excursions"]["samples_outside"], 2000);
    assert_eq!(both["excursions"]["list"][0]["is_cut"], true, "the recording ends outside");
}

#[test]
fn rate_rails_and_point_come_from_the_command_line_where_the_file_says_nothing() {
    let room = Room::new();
    let text = std::fs::read_to_string(recording("pulse-on-both-legs.csv")).unwrap();
    room.write("bare.csv", text);
    let bare = room.json(&["analyse", "bare.csv", "--rate", "250000", "--json"]);
    assert_eq!(bare["recording"]["sample_rate_hz"], 250_000.0);
    assert_eq!(bare["recording"]["duration_s"], 0.008);
    assert_eq!(bare["excursions"]["list"][0]["first_sample"], 1000);
    assert_volts(&bare["excursions"]["time_outside_s"], Some(30.0 / 250e3), 1e-12, "time_outside_s");
    assert!(bare["recording"]["point"].is_null());
    // The pulse takes both legs to 11.5 and 13.5 V: at a rail of 11.5 V every one of its 30 pairs is clipped.
    let railed = room
        .json(&["analyse", "bare.csv", "--rate", "1e6", "--rails", "-20,11.5", "--point", "X2", "--json"]);
    assert_eq!(railed["recording"]["clipped_samples"], 30);
    assert_eq!(railed["recording"]["point"], "X2");
    assert_eq!(railed["verdict"], "outside", "what was read beyond the limit was beyond it");
    // A full scale of 40 V doubles every voltage of the 20 V file.
    let wav = std::fs::read(recording("pulse-24-bit.wav")).unwrap();
    room.write("bare.wav", wav);
    let doubled = room.json(&["analyse", "bare.wav", "--full-scale", "40", "--json"]);
    assert_volts(&doubled["worst"]["leg_max_v"], Some(27.0), 5e-6, "leg_max_v");
}

#[test]
fn a_jump_of_time_is_a_gap_and_not_a_slower_clock() {
    let room = Room::new();
    let mut text = String::from("time_s,leg_a_v,leg_b_v\n");
    for sample in (0..600).chain(850..1000) {
        text += &format!("{:.5},2.6,2.4\n", f64::from(sample) / 20_000.0);
    }
    room.write("gap.csv", text);
    let report = room.json(&["analyse", "gap.csv", "--json"]);
    assert_eq!(report["recording"]["sample_rate_hz"], 20_000.0);
    assert_eq!(report["recording"]["pairs"], 750);
    assert_eq!(report["coverage"]["gap_count"], 1);
    assert_eq!(report["coverage"]["gap_samples"], 250);
    assert_eq!(report["coverage"]["gaps"][0]["moment"]["sample"], 600);
    assert_volts(&report["coverage"]["share"], Some(0.75), 1e-6, "share");
}

#[test]
fn a_skew_is_declared_on_the_command_line_and_told_in_the_report() {
    let room = Room::new();
    let path = recording("undisturbed.csv");
    let report = room.json(&["analyse", &path, "--skew-ns", "-400", "--json"]);
    assert_eq!(report["recording"]["skew_ns"].as_i64().map(i64::abs), Some(400));
    let text = room.done(&["analyse", &path, "--skew-ns", "-400"]).out;
    assert!(text.contains("400 ns apart"), "{text}");
}
