//! What cannot be used: one message that says what to try, the documented exit code, nothing left over
//! and nothing lost.

use crate::room::{Ran, Room};

const USAGE: i32 = 2;
const INPUT: i32 = 3;
const PORT: i32 = 4;
const STORAGE: i32 = 5;

/// The run must fail with `code`, say `fragment` and what to try, on the error output alone.
pub fn assert_refused(ran: &Ran, code: i32, fragment: &str) {
    assert_eq!(ran.code, Some(code), "{ran:?}");
    assert!(ran.err.contains(fragment), "no '{fragment}' in: {}", ran.err);
    assert!(ran.err.contains("try"), "nothing to try: {}", ran.err);
    assert!(!ran.err.contains("panicked"), "{}", ran.err);
    assert_eq!(ran.out, "", "an error belongs on the error output");
}

/// Runs in a folder that must be the same afterwards.
fn refuse(room: &Room, arguments: &[&str], code: i32, fragment: &str) {
    let before = room.files();
    let ran = room.run(arguments);
    println!("{arguments:?}: {}", ran.err.trim_end());
    assert_refused(&ran, code, fragment);
    assert_eq!(room.files(), before, "{arguments:?} left something behind");
}

const ROWS: &str = "leg_a_v,leg_b_v\n2.6,2.4\n2.6,2.4\n";

#[test]
fn tables_that_are_no_recording_are_refused() {
    let room = Room::new();
    for (name, content, fragment) in [
        ("empty.csv", "", "the file is empty"),
        ("header.csv", "leg_a_v,leg_b_v\n", "not one row of samples"),
        ("one.csv", "leg_a_v\n1\n2\n", "there is no column leg_b_v"),
        ("bare.csv", "1,2\n3,4\n", "numbers instead of column names"),
        ("nan.csv", "leg_a_v,leg_b_v\n1,2\n1,NaN\n", "line 3, column leg_b_v: \"NaN\""),
        ("infinite.csv", "leg_a_v,leg_b_v\n1,2\n-inf,2\n", "line 3, column leg_a_v"),
        ("word.csv", "leg_a_v,leg_b_v\n1,2\n1,open\n", "\"open\""),
        ("hole.csv", "leg_a_v,leg_b_v\n1,2\n1,\n", "line 3, column leg_b_v"),
        ("ragged.csv", "leg_a_v,leg_b_v\n1,2\n1,2,3\n", "line 3: 3 fields where the header names 2"),
        ("huge.csv", "leg_a_v,leg_b_v\n1,2\n1e9,2\n", "line 3, column leg_a_v"),
    ] {
        room.write(name, content);
        refuse(&room, &["analyse", name, "--rate", "1000"], INPUT, fragment);
        refuse(&room, &["analyse", name, "--rate", "1000", "-o", "x.lwlog"], INPUT, name);
        refuse(&room, &["analyse", name, "--rate", "1000", "--json"], INPUT, name);
    }
}

#[test]
fn a_clock_that_cannot_be_or_is_not_known_is_refused() {
    let room = Room::new();
    room.write("no-rate.csv", ROWS);
    refuse(&room, &["analyse", "no-rate.csv"], INPUT, "the sample rate is not known");
    for rate in ["0", "-5", "1e12", "NaN"] {
        refuse(&room, &["analyse", "no-rate.csv", &format!("--rate={rate}")], INPUT, "a sample rate of");
    }
    refuse(&room, &["analyse", "no-rate.csv", "--rate", "fast"], USAGE, "fast");
    let clock = |times: &str| {
        let rows = times.split(' ').map(|time| format!("{time},1,2\n"));
        format!("time_s,leg_a_v,leg_b_v\n{}", rows.collect::<String>())
    };
    room.write("back.csv", clock("0 0.001 0.002 0.001"));
    refuse(&room, &["analyse", "back.csv"], INPUT, "time_s runs backwards");
    room.write("still.csv", clock("0 0.001 0.001 0.002"));
    refuse(&room, &["analyse", "still.csv"], INPUT, "time_s stands still");
    room.write("good.csv", clock("0 0.001 0.002 0.003"));
    refuse(&room, &["analyse", "good.csv", "--rate", "2000"], INPUT, "the rate given is 2000 Hz but time_s");
    refuse(&room, &["analyse", "good.csv", "--skew-ns", "1500000"], INPUT, "a skew of 1500000 ns");
    room.write("good.csv.toml", "sample_rate = 1000\n");
    refuse(&room, &["analyse", "good.csv"], INPUT, "unknown field `sample_rate`");
}

fn wav(room: &Room, name: &str, channels: u16, bits_per_sample: u16) {
    let sample_format = hound::SampleFormat::Int;
    let spec = hound::WavSpec { channels, sample_rate: 48_000, bits_per_sample, sample_format };
    let mut writer = hound::WavWriter::create(room.path(name), spec).unwrap();
    (0..600).for_each(|sample| writer.write_sample(sample % 100).unwrap());
    writer.finalize().unwrap();
}

#[test]
fn wav_files_of_other_kinds_are_refused() {
    let room = Room::new();
    for (name, channels, bits, fragment) in
        [("mono.wav", 1, 16, "1 channel"), ("four.wav", 4, 16, "4 channel"), ("coarse.wav", 2, 8, "8-bit")]
    {
        wav(&room, name, channels, bits);
        refuse(&room, &["analyse", name, "--full-scale", "20"], INPUT, fragment);
    }
    wav(&room, "good.wav", 2, 16);
    refuse(&room, &["analyse", "good.wav"], INPUT, "the voltage of a full-scale sample is not known");
    for full_scale in ["0", "-3", "1e9", "NaN"] {
        let option = format!("--full-scale={full_scale}");
        refuse(&room, &["analyse", "good.wav", &option], INPUT, "a full scale of");
    }
    let bytes = std::fs::read(room.path("good.wav")).unwrap();
    room.write("cut.wav", &bytes[..bytes.len() / 2]);
    refuse(&room, &["analyse", "cut.wav", "--full-scale", "20"], INPUT, "300 pairs");
    room.write("text.wav", "leg_a_v and leg_b_v\n");
    refuse(&room, &["analyse", "text.wav"], INPUT, "named .wav but does not begin with a RIFF header");
}

#[test]
fn files_that_are_no_log_are_refused_and_left_as_they_are() {
    let room = Room::new();
    let noise: Vec<u8> = (0..5000_u32).map(|n| (n.wrapping_mul(2_654_435_761) >> 24) as u8).collect();
    room.write("noise.lwlog", &noise);
    room.write("empty.lwlog", "");
    room.write("table.lwlog", ROWS);
    let other = rusqlite::Connection::open(room.path("other.lwlog")).unwrap();
    other.execute_batch("CREATE TABLE info (key, value)").unwrap();
    drop(other);
    for name in ["noise.lwlog", "empty.lwlog", "table.lwlog", "other.lwlog"] {
        let before = std::fs::read(room.path(name)).unwrap();
        refuse(&room, &["report", name], INPUT, "it is not a Legwise log");
        refuse(&room, &["report", name, "--json"], INPUT, name);
        refuse(&room, &["export", name], INPUT, name);
        assert_eq!(std::fs::read(room.path(name)).unwrap(), before, "{name} was changed");
    }
    refuse(&room, &["report", "missing.lwlog"], INPUT, "could not find missing.lwlog");
    refuse(&room, &["report", "."], INPUT, "it is not a Legwise log");
    refuse(&room, &["analyse", "other.lwlog"], INPUT, "it is an SQLite database");
    refuse(&room, &["analyse", "missing.csv"], INPUT, "there is no such file");
    refuse(&room, &["analyse", "."], INPUT, "it is a directory");
}

#[test]
fn logs_of_a_later_version_and_broken_ones_are_refused() {
    let room = Room::new();
    room.write("good.csv", ROWS.replace("2.6,2.4\n", &"2.6,2.4\n".repeat(3000)));
    room.done(&["analyse", "good.csv", "--rate", "1000", "-o", "good.lwlog"]);
    let log = std::fs::read(room.path("good.lwlog")).unwrap();
    room.write("later.lwlog", &log);
    let later = rusqlite::Connection::open(room.path("later.lwlog")).unwrap();
    later.pragma_update(None, "user_version", 99).unwrap();
    drop(later);
    refuse(&room, &["report", "later.lwlog"], INPUT, "it has schema 99, this version knows up to 3");
    room.write("cut.lwlog", &log[..log.len() / 2]);
    refuse(&room, &["report", "cut.lwlog"], INPUT, "damaged");
    let mut torn = log.clone();
    torn[4096..8192].fill(0xA5);
    room.write("torn.lwlog", &torn);
    refuse(&room, &["report", "torn.lwlog"], INPUT, "try");
    // What was good before still is.
    room.done(&["report", "good.lwlog"]);
}

#[test]
fn names_that_nobody_knows_are_answered_with_those_that_exist() {
    let room = Room::new();
    room.write("good.csv", ROWS);
    refuse(&room, &["analyse", "good.csv", "--rate", "1", "--receiver", "rs999"], USAGE, "tia485a, tia422b");
    refuse(&room, &["receivers", "rs999"], USAGE, "could not find receiver 'rs999'");
    refuse(&room, &["demo", "--receiver", "rs999", "--minutes", "0.01"], USAGE, "rs999");
    refuse(&room, &["simulate", "no-such", "-o", "x.csv"], INPUT, "legwise simulate list");
    refuse(&room, &["demo", "--scenario", "no-such"], INPUT, "legwise simulate list");
    refuse(&room, &["export", "good.csv", "--tables", "x"], INPUT, "it is not a Legwise log");
    room.done(&["analyse", "good.csv", "--rate", "1", "-o", "good.lwlog"]);
    refuse(&room, &["export", "good.lwlog", "--tables", "sheet"], USAGE, "sheet");
}

#[test]
fn scenarios_that_make_no_sense_are_refused_with_the_key() {
    let room = Room::new();
    let good = room.done(&["simulate", "quiet-night", "--print"]).out;
    for (name, from, to, fragment) in [
        ("type.toml", "title = \"Quiet night\"", "title = 3", "invalid type: integer `3`"),
        ("key.toml", "cable_ohm = 1.6", "cable_om = 1.6", "unknown field `cable_om`"),
        ("slave.toml", "slave = \"press\"", "slave = \"crane\"", "crane"),
        ("negative.toml", "terminator_ohm = 120.0", "terminator_ohm = -120.0", "terminator_ohm = -120"),
        ("receiver.toml", "receiver = \"tia485a\"", "receiver = \"rs999\"", "rs999"),
    ] {
        let bad = good.replacen(from, to, 1);
        assert_ne!(bad, good, "{name}");
        room.write(name, bad);
        refuse(&room, &["simulate", name, "--seconds", "0.01", "-o", "x.csv"], INPUT, fragment);
        refuse(&room, &["demo", "--scenario", name, "--minutes", "0.001"], INPUT, fragment);
    }
    room.write("empty.toml", "");
    refuse(&room, &["simulate", "empty.toml", "-o", "x.csv"], INPUT, "missing field");
    room.write("binary.toml", [0xFF, 0xFE, 0x00, 0x81]);
    refuse(&room, &["simulate", "binary.toml", "-o", "x.csv"], INPUT, "binary.toml");
}

#[test]
fn arguments_that_make_no_sense_are_refused() {
    let room = Room::new();
    room.write("good.csv", ROWS);
    for arguments in [
        &["analyse", "good.csv", "--rate", "1", "--terminal-window", "3"][..],
        &["analyse", "good.csv", "--rate", "1", "--terminal-window", "12,-7"],
        &["analyse", "good.csv", "--rate", "1", "--average-window", "a,b"],
        &["analyse", "good.csv", "--rate", "1", "--rails", "5"],
        &["analyse", "good.csv", "--rate", "1", "--rails", "5,5"],
        &["analyse", "good.csv", "--receiver", "lvds", "--average-window", "0,1"],
        &["analyse"],
        &["log"],
        &["report", "a", "b"],
        &["no-such-command"],
        &["simulate", "quiet-night"],
        &["simulate", "quiet-night", "-o", "x.txt"],
        &["simulate", "quiet-night", "-o", "x.csv", "--seconds", "0"],
        &["simulate", "quiet-night", "-o", "x.csv", "--seconds", "-1"],
        &["simulate", "quiet-night", "-o", "x.csv", "--seconds", "NaN"],
        &["simulate", "quiet-night", "-o", "x.csv", "--seconds", "inf"],
        &["demo", "--minutes", "0"],
        &["demo", "--minutes", "-3"],
        &["demo", "--seed", "x"],
    ] {
        refuse(&room, arguments, USAGE, "");
    }
}

#[test]
fn ports_that_are_none_are_refused_before_a_log_is_made() {
    let room = Room::new();
    room.write("file", "x");
    let missing = if cfg!(windows) { "COM250" } else { "/dev/no-such-port" };
    refuse(&room, &["log", "--port", missing, "-o", "x.lwlog"], PORT, "there is no such port");
    refuse(&room, &["log", "--port", missing], PORT, "legwise ports");
    let file = room.path("file");
    refuse(&room, &["log", "--port", file.to_str().unwrap(), "-o", "x.lwlog"], PORT, "could not open");
    refuse(&room, &["log", "--port", ".", "-o", "x.lwlog"], PORT, "could not open .");
}

#[test]
fn what_exists_is_never_written_over() {
    let room = Room::new();
    room.write("good.csv", ROWS);
    room.write("kept", "precious");
    for (name, arguments) in [
        ("a.lwlog", &["analyse", "good.csv", "--rate", "1", "-o", "a.lwlog"][..]),
        ("b.csv", &["simulate", "quiet-night", "--seconds", "0.01", "-o", "b.csv"]),
        ("c.wav", &["simulate", "quiet-night", "--seconds", "0.01", "-o", "c.wav"]),
        ("d.csv.toml", &["simulate", "quiet-night", "--seconds", "0.01", "-o", "d.csv"]),
    ] {
        room.write(name, "precious");
        refuse(&room, arguments, STORAGE, "it exists already");
        assert_eq!(room.read(name), "precious", "{arguments:?}");
    }
    room.done(&["analyse", "good.csv", "--rate", "1", "-o", "good.lwlog"]);
    room.done(&["export", "good.lwlog", "-o", "tables"]);
    let table = room.read("tables/summary.csv");
    refuse(&room, &["export", "good.lwlog", "-o", "tables"], STORAGE, "it exists already");
    assert_eq!(room.read("tables/summary.csv"), table);
    std::fs::create_dir(room.path("folder.csv")).unwrap();
    let arguments = ["simulate", "quiet-night", "--seconds", "0.01", "-o", "folder.csv"];
    refuse(&room, &arguments, STORAGE, "it exists already");
    // A demo goes round the runs that are there.
    let demo = ["demo", "--minutes", "0.005", "--scenario", "quiet-night"];
    room.done(&demo);
    let first = std::fs::read(room.path("legwise-demo/quiet-night.lwlog")).unwrap();
    assert!(room.done(&demo).out.contains("quiet-night-2.lwlog"));
    assert_eq!(std::fs::read(room.path("legwise-demo/quiet-night.lwlog")).unwrap(), first);
}

#[test]
fn a_fault_late_in_a_recording_is_told_and_what_was_read_before_is_not_passed_off_as_all() {
    let room = Room::new();
    let mut text = String::from("leg_a_v,leg_b_v\n");
    text += &"2.6,2.4\n".repeat(50_000);
    text += "2.6,oops\n";
    room.write("late.csv", text);
    let arguments = ["analyse", "late.csv", "--rate", "10000", "-o", "late.lwlog"];
    assert_refused(&room.run(&arguments), INPUT, "line 50002, column leg_b_v: \"oops\"");
    if room.path("late.lwlog").exists() {
        let report = room.json(&["report", "late.lwlog", "--json"]);
        assert_eq!(report["recording"]["is_complete"], false, "{report}");
    }
    // Without a file to keep it in there is no verdict on half a recording.
    let arguments = ["analyse", "late.csv", "--rate", "10000", "--json"];
    assert_refused(&room.run(&arguments), INPUT, "line 50002");
}

#[test]
fn outputs_into_folders_that_are_not_there_are_refused() {
    let room = Room::new();
    room.write("good.csv", ROWS);
    room.write("file", "x");
    for target in ["no-folder/x", "file/x"] {
        let log = format!("{target}.lwlog");
        refuse(&room, &["analyse", "good.csv", "--rate", "1", "-o", &log], STORAGE, "no such directory");
        let recording = format!("{target}.csv");
        let arguments = ["simulate", "quiet-night", "--seconds", "0.01", "-o", &recording];
        refuse(&room, &arguments, STORAGE, "no such directory");
    }
    let arguments = ["demo", "--minutes", "0.005", "--folder", "file"];
    refuse(&room, &arguments, STORAGE, "could not make the folder file");
}
