//! The same samples give the same numbers, whichever way they take.

use crate::room::Room;
use crate::truth::{Pairs, Rules};
use legwise::board::VirtualBoard;
use legwise::line::{Length, LineSource, Scenario};
use legwise::log::{About, Arrival, Log, Origin};
use legwise::session::Session;
use legwise::watching::Watching;
use legwise_firmware::source::PairSource;
use legwise_protocol::message::Settings;
use serde_json::{Value, json};
use std::path::Path;

/// Length of the simulated recordings: 300 000 pairs.
const SECONDS: &str = "1.5";
const SECONDS_NUMBER: f64 = 1.5;
const SEED: u64 = 5;

/// Half a bin of the device's histogram (16.384 mV): its stretch around a mode begins at a bin, the one
/// of the computation by hand anywhere.
const LEVEL_TOLERANCE_V: f64 = 8.192e-3;

/// Keys that may differ between two ways of the same samples: clocks, what a board says about its
/// converter, and waveforms, of which a slow link carries fewer.
const OF_THE_WAY: [&str; 6] =
    ["utc", "local", "uncertainty_s", "uncertainty_v", "margin_uncertainty_v", "has_waveform"];

/// The numbers of a report, without what belongs to the way they took.
pub fn numbers(report: &Value) -> Value {
    let recording = &report["recording"];
    let mut numbers = json!({
        "pairs": recording["pairs"],
        "sample_rate_hz": recording["sample_rate_hz"],
        "clipped_samples": recording["clipped_samples"],
        "is_complete": recording["is_complete"],
        "gaps": report["coverage"]["gap_count"],
    });
    for key in ["verdict", "receiver", "worst", "margins", "judged", "excursions", "levels", "spectrum"] {
        assert!(!report[key].is_null(), "no {key}");
        numbers[key] = report[key].clone();
    }
    strip(&mut numbers);
    numbers
}

/// The numbers, and apart from them the ratios of spectra: files hold whole microvolts, and a code of the wire
/// that lies near a step falls on the other side of it, 1/1024 further.
fn apart(report: &Value) -> (Value, Vec<Value>) {
    let mut numbers = numbers(report);
    let ratios = ["conversion", "driver_imbalance"].map(|key| numbers["spectrum"][key].take());
    (numbers, ratios.into())
}

/// Holds ratios of spectra together: the same points, each number within a hundredth.
fn assert_near(one: &[Value], other: &[Value]) {
    for (one, other) in one.iter().zip(other) {
        match (one, other) {
            (Value::Number(one), Value::Number(other)) => {
                let (one, other) = (one.as_f64().unwrap(), other.as_f64().unwrap());
                assert!((one - other).abs() <= 0.01 * other.abs(), "{one} and {other}");
            }
            (Value::Array(one), Value::Array(other)) => {
                assert_eq!(one.len(), other.len());
                assert_near(one, other);
            }
            (Value::Object(one), Value::Object(other)) => {
                assert_eq!(one.keys().collect::<Vec<_>>(), other.keys().collect::<Vec<_>>());
                let values =
                    |entries: &serde_json::Map<String, Value>| entries.values().cloned().collect::<Vec<_>>();
                assert_near(&values(one), &values(other));
            }
            _ => assert_eq!(one, other),
        }
    }
}

fn strip(value: &mut Value) {
    match value {
        Value::Object(entries) => {
            entries.retain(|key, _| !OF_THE_WAY.contains(&key.as_str()));
            entries.values_mut().for_each(strip);
        }
        Value::Array(entries) => entries.iter_mut().for_each(strip),
        _ => {}
    }
}

fn simulate(room: &Room, scenario: &str, output: &str) {
    room.done(&["simulate", scenario, "--seconds", SECONDS, "--seed", &SEED.to_string(), "-o", output]);
}

/// Runs a source through a board on this machine into a log, with its bytes cut into odd pieces.
fn through_a_board<S: PairSource>(source: S, settings: Settings, log: &Path) {
    let about = About {
        origin: Origin::Simulated,
        origin_name: "test".to_owned(),
        point: None,
        tool_version: "test".to_owned(),
        created_utc_ns: 0,
        stores_clock: false,
    };
    let mut session = Session::new(Log::create(log, &about).unwrap());
    let mut board = VirtualBoard::new(source, settings, "test", 77);
    let arrival = Arrival { utc_ns: 0, monotonic_ns: 0 };
    let mut length = 1;
    loop {
        let mut bytes = Vec::new();
        let is_running = board.run_batch(&mut bytes).unwrap();
        let mut rest = bytes.as_slice();
        while !rest.is_empty() {
            let (piece, after) = rest.split_at(length.min(rest.len()));
            session.receive(piece, arrival, &mut |_| {}).unwrap();
            rest = after;
            length = length * 7 % 977 + 1;
        }
        session.flush().unwrap();
        if let Some(through) = session.acknowledgement() {
            board.acknowledge(through);
        }
        if !is_running {
            break;
        }
    }
    session.finish().unwrap();
}

#[test]
fn the_line_its_csv_and_its_wav_give_one_report_and_that_of_a_computation_by_hand() {
    let room = Room::new();
    let file = room.early("press-ground");
    let scenario = Scenario::from_toml(&room.read(&file)).unwrap();
    simulate(&room, &file, "line.csv");
    simulate(&room, &file, "line.wav");
    let pairs = (scenario.sample_rate_hz * SECONDS_NUMBER).round() as u64;
    let source = LineSource::new(&scenario, SEED, Length::Pairs(pairs)).unwrap();
    let watching = Watching::named(Some(&scenario.receiver)).unwrap();
    let settings = watching.desktop_settings(source.describe().sample_rate_mhz);
    through_a_board(source, settings, &room.path("line.lwlog"));

    let of_line = room.json(&["report", "line.lwlog", "--json"]);
    let of_csv = room.json(&["analyse", "line.csv", "--json"]);
    let of_wav = room.json(&["analyse", "line.wav", "--json"]);
    let (line, line_conversion) = apart(&of_line);
    for of_file in [&of_csv, &of_wav] {
        let (file, file_conversion) = apart(of_file);
        assert_eq!(file, line);
        assert_near(&file_conversion, &line_conversion);
    }

    let samples = Pairs::from_csv(&room.read("line.csv"));
    let rules = Rules { rails: Some((-16_100_000, 20_900_000)), ..Rules::tia485a() };
    assert!(samples.excursions(&rules) > 5, "too few to mean anything: {}", samples.excursions(&rules));
    assert_eq!(of_csv["verdict"], "outside");
    samples.assert_told_by(&of_csv, &rules, LEVEL_TOLERANCE_V);
}

#[test]
fn other_scenarios_and_receivers_agree_with_the_computation_by_hand_too() {
    let room = Room::new();
    let windows = |low, high| Some((low, high));
    let narrow = Rules { terminal: windows(1_600_000, 3_300_000), ..Rules::default() };
    let narrow = Rules { average: windows(2_300_000, 2_700_000), idle_below: 600_000, ..narrow };
    let can = Rules { average: windows(-2_000_000, 7_000_000), idle_below: 700_000, ..Rules::default() };
    let own = &["--terminal-window", "1.6,3.3", "--average-window", "2.3,2.7"][..];
    let mut excursions = Vec::new();
    for (scenario, arguments, rules) in [
        ("quiet-night".to_owned(), &[][..], Rules::tia485a()),
        ("quiet-night".to_owned(), own, narrow),
        (room.early("contactor"), &[], Rules::tia485a()),
        (room.early("can-weak-ground"), &["--receiver", "can-2003"], can),
    ] {
        let recording = format!("{scenario}.csv");
        if !room.path(&recording).exists() {
            room.done(&["simulate", &scenario, "--seconds", "0.7", "-o", &recording]);
        }
        let mut command = vec!["analyse", &recording, "--json"];
        command.extend(arguments);
        let samples = Pairs::from_csv(&room.read(&recording));
        let sidecar: toml::Table = toml::from_str(&room.read(&format!("{recording}.toml"))).unwrap();
        let rail = |key: &str| (sidecar[key].as_float().unwrap() * 1e6).round() as i64;
        let rules = Rules { rails: Some((rail("rail_low_v"), rail("rail_high_v"))), ..rules };
        excursions.push(samples.excursions(&rules));
        samples.assert_told_by(&room.json(&command), &rules, LEVEL_TOLERANCE_V);
    }
    println!("excursions: {excursions:?}");
    assert!(excursions[0] == 0 && excursions[1..].iter().all(|&count| count >= 3), "{excursions:?}");
}

#[test]
fn a_kept_log_reports_word_for_word_what_the_analysis_printed() {
    let room = Room::new();
    simulate(&room, &room.early("press-ground"), "line.csv");
    let printed = room.done(&["analyse", "line.csv", "--json", "-o", "kept.lwlog", "--point", "door"]);
    assert_eq!(room.done(&["report", "kept.lwlog", "--json"]).out, printed.out);
    let again = room.json(&["analyse", "line.csv", "--json"]);
    assert_eq!(numbers(&again), numbers(&printed.json()), "without a file to keep it in");
    assert_eq!(printed.json()["recording"]["point"], "door");
    assert!(room.done(&["report", "kept.lwlog"]).out.contains("door"));
}

#[test]
fn a_demo_logs_the_numbers_of_the_recording_of_its_scenario() {
    let room = Room::new();
    let demo = room.done(&["demo", "--scenario", "drive-bay", "--minutes", "0.02", "--seed", "3"]);
    room.done(&["simulate", "drive-bay", "--seconds", "1.2", "--seed", "3", "-o", "bay.csv"]);
    let of_demo = room.json(&["report", "legwise-demo/drive-bay.lwlog", "--json"]);
    let of_csv = room.json(&["analyse", "bay.csv", "--json"]);
    let counts = |report: &Value| {
        let mut numbers = numbers(report);
        // Reported one by one on the desktop, by storm records over a link.
        for key in ["list", "furthest", "storms", "coalesced", "list_truncated"] {
            numbers["excursions"].as_object_mut().unwrap().remove(key);
        }
        numbers
    };
    assert_eq!(counts(&of_demo), counts(&of_csv));
    assert!(demo.out.contains("legwise-demo/drive-bay.lwlog"), "{}", demo.out);
    assert!(demo.out.contains("legwise-demo/drive-bay.txt"), "{}", demo.out);
    let told = room.done(&["report", "legwise-demo/drive-bay.lwlog"]).out;
    assert_eq!(room.read("legwise-demo/drive-bay.txt"), told, "the report beside the log");
    assert!(demo.out.contains(&told), "the report on the screen");
}
