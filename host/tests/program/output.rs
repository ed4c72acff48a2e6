//! What the program prints: whole JSON, no escape codes where no terminal looks, and no complaint
//! about a reader that has gone.

use crate::room::{Room, finish};
use serde_json::Value;

const ESCAPE: char = '\u{1b}';

/// Keys that programs rely on in `report --json` and `analyse --json`.
const PROMISED: [&str; 24] = [
    "recording.pairs",
    "recording.sample_rate_hz",
    "recording.clipped_samples",
    "receiver.name",
    "worst.leg_max_v",
    "worst.leg_min_v",
    "worst.cm_max_v",
    "worst.cm_min_v",
    "worst.margin_v",
    "levels.idle_v",
    "levels.driven_high_v",
    "levels.driven_low_v",
    "excursions.count",
    "excursions.samples_outside",
    "excursions.list",
    "verdict",
    "reason",
    "coverage.share",
    "coverage.gaps",
    "margins",
    "judged.terminal.verdict",
    "spectrum.common.lines",
    "blind.statements",
    "cautions",
];

fn recording(room: &Room) {
    room.done(&["simulate", &room.early("contactor"), "--seconds", "1", "-o", "x.csv"]);
    room.done(&["analyse", "x.csv", "-o", "x.lwlog"]);
}

/// A command of each kind that prints something.
const PRINTING: [&[&str]; 10] = [
    &["report", "x.lwlog"],
    &["report", "x.lwlog", "--json"],
    &["analyse", "x.csv"],
    &["analyse", "x.csv", "--json"],
    &["receivers"],
    &["receivers", "v11"],
    &["simulate", "list"],
    &["simulate", "radio", "--print"],
    &["demo", "--minutes", "0.01", "--scenario", "contactor"],
    &["--help"],
];

#[test]
fn json_is_whole_and_holds_every_promised_key() {
    let room = Room::new();
    recording(&room);
    for command in [["report", "x.lwlog", "--json"], ["analyse", "x.csv", "--json"]] {
        let report = room.json(&command);
        for key in PROMISED {
            let found = key.split('.').fold(&report, |value, part| &value[part]);
            assert!(!found.is_null(), "{command:?}: no {key}");
        }
        let list = report["excursions"]["list"].as_array().unwrap();
        assert!(!list.is_empty(), "contactor has become quiet");
        for entry in list {
            assert!(entry["first_sample"].is_u64() && entry["samples"].is_u64());
            assert!(entry["extreme_v"].is_f64());
        }
        assert!(
            ["within", "marginal", "outside", "cannot-judge"].map(Value::from).contains(&report["verdict"])
        );
    }
    let receivers = room.json(&["receivers", "--json"]);
    assert_eq!(receivers["default"], "tia485a");
    let rows = receivers["receivers"].as_array().unwrap();
    assert_eq!(rows.len(), legwise_protocol::receivers::TABLE.len());
    for row in rows {
        let name = row["name"].as_str().unwrap();
        assert!(row["threshold"]["source"].as_str().is_some_and(|source| !source.is_empty()), "{name}");
        assert_eq!(room.json(&["receivers", name, "--json"])["receivers"][0], *row);
    }
    assert!(room.json(&["ports", "--json"])["ports"].is_array());
}

#[test]
fn no_escape_codes_where_no_terminal_looks() {
    let room = Room::new();
    recording(&room);
    for arguments in PRINTING {
        let ran = room.done(arguments);
        assert!(!ran.out.is_empty() && !ran.out.contains(ESCAPE), "{arguments:?}: {}", ran.out);
        assert!(!ran.err.contains(ESCAPE), "{arguments:?}: {}", ran.err);
    }
}

#[test]
fn lines_fit_a_page() {
    let room = Room::new();
    recording(&room);
    for arguments in [&["report", "x.lwlog"][..], &["receivers"], &["receivers", "v11"], &["--help"]] {
        let out = room.done(arguments).out;
        let longest = out.lines().max_by_key(|line| line.chars().count()).unwrap();
        assert!(longest.chars().count() <= 100, "{arguments:?}: {longest}");
    }
}

#[test]
fn the_exit_codes_of_the_help_are_those_of_the_program() {
    let room = Room::new();
    let help = room.done(&["--help"]).out;
    for (code, words) in [(0, "done"), (2, "arguments"), (3, "recording"), (4, "port"), (5, "stored")] {
        let line = help.lines().find(|line| line.trim_start().starts_with(&format!("{code} ")));
        assert!(line.is_some_and(|line| line.contains(words)), "no line for {code} in {help}");
    }
    for code in [10, 11, 12] {
        assert!(help.contains(&format!(" {code}  ")), "{code} in {help}");
    }
    let version = room.done(&["--version"]).out;
    assert_eq!(version, format!("legwise {}\n", env!("CARGO_PKG_VERSION")));
    let commands =
        ["demo", "ports", "log", "report", "analyse", "simulate", "receivers", "export", "plot", "trim"];
    for command in commands {
        assert!(help.lines().any(|line| line.trim_start().starts_with(command)), "{command}");
        room.done(&[command, "--help"]);
    }
}

#[test]
fn a_reader_that_has_gone_is_no_failure() {
    let room = Room::new();
    recording(&room);
    for arguments in PRINTING {
        let (reader, writer) = std::io::pipe().unwrap();
        drop(reader);
        let mut command = room.command(arguments);
        command.stdout(writer);
        let ran = finish(command);
        assert_eq!(ran.code, Some(0), "{arguments:?}: {ran:?}");
        assert_eq!(ran.err, "", "{arguments:?}");
    }
}

#[cfg(unix)]
mod terminals {
    use super::{ESCAPE, Room, recording};
    use crate::room::start;
    use crate::terminal;
    use serialport::SerialPort;
    use std::fs::File;
    use std::io::Read;
    use std::time::Duration;

    /// What a command prints on a terminal.
    fn on_a_terminal(room: &Room, arguments: &[&str], environment: &[(&str, &str)]) -> String {
        let (mut screen, slave, name) = terminal::pair();
        let mut command = room.command(arguments);
        let open = || File::options().read(true).write(true).open(&name).unwrap();
        command.stdout(open()).stderr(open());
        for (key, value) in environment {
            command.env(key, value);
        }
        let mut child = start(command);
        screen.set_timeout(Duration::from_millis(20)).unwrap();
        let mut text = Vec::new();
        let mut has_ended = false;
        loop {
            let mut buffer = [0; 4096];
            match screen.read(&mut buffer) {
                Ok(count) if count > 0 => text.extend_from_slice(&buffer[..count]),
                _ if has_ended => break,
                _ => has_ended = child.try_wait().unwrap().is_some(),
            }
        }
        assert!(child.wait().unwrap().success(), "{arguments:?}");
        drop(slave);
        String::from_utf8_lossy(&text).into_owned()
    }

    #[test]
    fn a_terminal_gets_colours_unless_they_are_refused() {
        let room = Room::new();
        recording(&room);
        for arguments in [&["report", "x.lwlog"][..], &["receivers"]] {
            assert!(on_a_terminal(&room, arguments, &[]).contains(ESCAPE), "{arguments:?}: no colour at all");
            let plain = on_a_terminal(&room, arguments, &[("NO_COLOR", "1")]);
            assert!(!plain.is_empty() && !plain.contains(ESCAPE), "{arguments:?}: {plain}");
            assert!(!on_a_terminal(&room, arguments, &[("TERM", "dumb")]).contains(ESCAPE), "{arguments:?}");
        }
        let json = on_a_terminal(&room, &["report", "x.lwlog", "--json"], &[]);
        assert!(json.contains("verdict") && !json.contains(ESCAPE), "{json}");
    }
}
