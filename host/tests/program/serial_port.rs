//! `log`: a board on a port, from the first byte to the verdict, over a pseudo terminal.

use crate::bad_input::assert_refused;
use crate::played_board::{Account, Damage, PATIENCE, PlayedBoard, Script};
use crate::room::{Ran, Room, start};
use crate::same_numbers::numbers;
use crate::terminal;
use serde_json::Value;
use std::fmt::Write as _;
use std::io::{Read, Write};
use std::process::{Child, Command};
use std::time::{Duration, Instant};

const RATE_HZ: u64 = 200_000;
const PAIRS: usize = 450_000;
/// Where both legs are lifted by 8 V, and for how many samples: at the most 5 in any second.
const LIFTED: [(usize, usize); 6] =
    [(10_007, 1), (60_000, 2), (100_095, 40), (250_000, 3), (399_999, 700), (440_001, 5)];

/// Bits of 40 samples around 2.5 V with a little noise from a congruential generator (the constants of
/// Numerical Recipes), lifted at the places above.
fn script(damage: Damage) -> Script {
    let mut state = 1_u32;
    let mut noise_uv = || {
        state = state.wrapping_mul(1_664_525).wrapping_add(1_013_904_223);
        (state >> 16) as i32 % 4001 - 2000
    };
    let mut script = Script { rate_hz: RATE_HZ, boot_id: 4711, damage, ..Script::default() };
    for sample in 0..PAIRS {
        let half_dm_uv = match (sample % 20_000 < 8000, sample / 40 % 2) {
            (false, _) => 100_000,
            (true, 0) => 1_000_000,
            (true, _) => -1_000_000,
        };
        let is_lifted = LIFTED.iter().any(|&(first, count)| (first..first + count).contains(&sample));
        let cm_uv = if is_lifted { 10_500_000 } else { 2_500_000 };
        script.leg_a.push(cm_uv + half_dm_uv + noise_uv());
        script.leg_b.push(cm_uv - half_dm_uv + noise_uv());
    }
    script
}

/// The same samples as a recording, analysed on this machine.
fn on_the_desktop(room: &Room, script: &Script) -> Value {
    let mut text = String::from("leg_a_v,leg_b_v\n");
    for (a, b) in script.leg_a.iter().zip(&script.leg_b) {
        writeln!(text, "{:.6},{:.6}", f64::from(*a) / 1e6, f64::from(*b) / 1e6).unwrap();
    }
    room.write("samples.csv", text);
    let rate = RATE_HZ.to_string();
    room.json(&["analyse", "samples.csv", "--rate", &rate, "--receiver", "tia422b", "--json"])
}

fn log(room: &Room, port: &str) -> Child {
    let arguments = ["log", "--port", port, "--point", "bench, X7", "--receiver", "tia422b", "-o", "n.lwlog"];
    start(room.command(&arguments))
}

fn interrupt(child: &Child, signal: &str) {
    let status = Command::new("kill").args([signal, &child.id().to_string()]).status().unwrap();
    assert!(status.success());
}

/// Waits for the end of a child; gives up on it after a while.
fn end_of(mut child: Child) -> Ran {
    let begun = Instant::now();
    while child.try_wait().unwrap().is_none() {
        if begun.elapsed() > PATIENCE {
            child.kill().unwrap();
            panic!("did not end: {:?}", child.wait_with_output());
        }
        std::thread::sleep(Duration::from_millis(10));
    }
    let output = child.wait_with_output().unwrap();
    let text = |bytes| String::from_utf8(bytes).unwrap();
    Ran { code: output.status.code(), out: text(output.stdout), err: text(output.stderr) }
}

/// A night of a played board, ended by a signal.
fn night(room: &Room, script: Script, signal: &str) -> (Ran, Account, Value) {
    let board = PlayedBoard::start(script);
    let child = log(room, &board.port);
    let account = board.wait();
    interrupt(&child, signal);
    let ran = end_of(child);
    drop(board);
    (ran, account, room.json(&["report", "n.lwlog", "--json"]))
}

#[test]
fn a_night_on_a_port_ends_at_ctrl_c_with_the_numbers_of_a_desktop_run() {
    let room = Room::new();
    let script = script(Damage::None);
    let expected = on_the_desktop(&room, &script);
    let (ran, _, report) = night(&room, script, "-INT");
    assert_eq!(ran.code, Some(0), "{ran:?}");
    for words in ["board 'played' introduced itself", "OUTSIDE LIMITS", "legwise report n.lwlog"] {
        assert!(ran.out.contains(words), "no '{words}' in {}", ran.out);
    }
    assert_eq!(ran.out.matches("outside for").count(), LIFTED.len(), "{}", ran.out);

    assert_eq!(numbers(&report), numbers(&expected));
    assert_eq!(report["excursions"]["count"], LIFTED.len());
    let outside: usize = LIFTED.iter().map(|&(_, count)| count).sum();
    assert_eq!(report["excursions"]["samples_outside"], outside);
    assert_eq!(report["recording"]["origin"], "serial");
    assert_eq!(report["recording"]["point"], "bench, X7");
    assert_eq!(report["recording"]["runs"][0]["board"], "played");
    assert_eq!(report["recording"]["runs"][0]["reset_cause"], "power-on");
    assert_eq!(report["recording"]["runs"][0]["end_cause"], "stopped");
    assert!(report["excursions"]["list"][0]["moment"]["utc"].is_string(), "a night has a clock");
    let link = &report["coverage"]["link"];
    for key in ["missing_frames", "damaged_frames", "oversize_frames", "unknown_frames", "dropped_bytes"] {
        assert_eq!(link[key], 0, "{link}");
    }
    assert_eq!(room.files(), ["n.lwlog", "samples.csv"], "nothing but the log");
}

#[test]
fn the_limits_asked_for_reach_the_board_and_stand_in_the_log() {
    let room = Room::new();
    let quiet = Script {
        rate_hz: RATE_HZ,
        leg_a: vec![9_000_000; 5000],
        leg_b: vec![8_000_000; 5000],
        ..Script::default()
    };
    let (ran, _, report) = night(&room, quiet, "-TERM");
    assert_eq!(ran.code, Some(0), "a request to end is no failure: {ran:?}");
    // ±10 V for each terminal, ±7 V for the average (RS-422/485 interface-card manuals).
    assert_eq!(report["receiver"]["name"], "tia422b");
    assert_eq!(report["receiver"]["terminal"]["high_v"], 10.0);
    assert_eq!(report["receiver"]["average"]["high_v"], 7.0);
    assert_eq!(report["receiver"]["pairs_under_other_limits"], 0);
    assert_eq!(report["judged"]["terminal"]["verdict"], "marginal");
    assert_eq!(report["judged"]["average"]["verdict"], "outside");
    let database = rusqlite::Connection::open(room.path("n.lwlog")).unwrap();
    let query = "SELECT settings FROM settings ORDER BY run DESC, number DESC LIMIT 1";
    let settings: String = database.query_row(query, [], |row| row.get(0)).unwrap();
    let settings: Value = serde_json::from_str(&settings).unwrap();
    assert_eq!(settings["limits"]["terminal"]["high"], 10_000_000, "{settings}");
    assert_eq!(settings["limits"]["average"]["low"], -7_000_000, "{settings}");
}

/// Waits until the log holds a note of the link that says `words`.
fn wait_for_note(room: &Room, words: &str) {
    let begun = Instant::now();
    loop {
        let notes = rusqlite::Connection::open(room.path("n.lwlog")).and_then(|log| {
            let mut statement = log.prepare("SELECT text FROM note WHERE kind = 'link'")?;
            statement.query_map([], |row| row.get::<_, String>(0))?.collect::<Result<Vec<_>, _>>()
        });
        if notes.is_ok_and(|notes| notes.iter().any(|note| note.contains(words))) {
            return;
        }
        assert!(begun.elapsed() < PATIENCE, "no note says '{words}'");
        std::thread::sleep(Duration::from_millis(50));
    }
}

#[test]
fn a_plug_that_is_pulled_is_waited_for_and_costs_nothing_that_had_arrived() {
    let room = Room::new();
    let script = script(Damage::None);
    let expected = on_the_desktop(&room, &script);
    let board = PlayedBoard::start(script);
    let child = log(&room, &board.port);
    let account = board.wait();
    let port = board.port.clone();
    board.unplug();
    wait_for_note(&room, "waiting for it to come back");
    interrupt(&child, "-INT");
    let ran = end_of(child);
    assert_eq!(ran.code, Some(0), "{ran:?}");
    for words in
        [&format!("could not read from {port} any more"), "everything received is stored", "check the cable"]
    {
        assert!(ran.out.contains(words), "no '{words}' in {}", ran.out);
    }
    assert!(ran.out.contains("legwise report n.lwlog"), "how to see what there is: {}", ran.out);

    let report = room.json(&["report", "n.lwlog", "--json"]);
    assert_eq!(report["recording"]["is_complete"], false);
    assert_eq!(report["coverage"]["link"]["frames"], account.frames, "frames sent and frames stored");
    assert_eq!(report["verdict"], "outside");
    // Excursions were acknowledged, so they are there to the last one.
    let list = |report: &Value| {
        let entries = report["excursions"]["list"].as_array().unwrap();
        let places = entries.iter().map(|entry| (entry["first_sample"].clone(), entry["samples"].clone()));
        places.collect::<Vec<_>>()
    };
    assert_eq!(list(&report), list(&expected));
    assert_eq!(room.files(), ["n.lwlog", "samples.csv"], "the log is one whole file");
}

/// The board comes back as another terminal behind the same name, started anew.
#[test]
fn a_plug_that_comes_back_goes_on_in_the_same_log() {
    let room = Room::new();
    let name = room.path("board");
    let plug_in = |boot_id: u32| {
        let board = PlayedBoard::start(Script { boot_id, ..script(Damage::None) });
        let _ = std::fs::remove_file(&name);
        std::os::unix::fs::symlink(&board.port, &name).unwrap();
        board
    };
    let first = plug_in(4711);
    let child = log(&room, name.to_str().unwrap());
    first.wait();
    first.unplug();
    wait_for_note(&room, "waiting for it to come back");
    let second = plug_in(4712);
    second.wait();
    wait_for_note(&room, "is back after");
    interrupt(&child, "-INT");
    let ran = end_of(child);
    drop(second);
    assert_eq!(ran.code, Some(0), "{ran:?}");
    assert!(ran.out.contains("board 'played' has restarted"), "{}", ran.out);
    let report = room.json(&["report", "n.lwlog", "--json"]);
    assert_eq!(report["excursions"]["count"], 2 * LIFTED.len());
    // Of the first start up to one summary, half a second, went with the plug.
    let pairs = report["recording"]["pairs"].as_u64().unwrap() as usize;
    assert!((2 * PAIRS - RATE_HZ as usize / 2..=2 * PAIRS).contains(&pairs), "{pairs}");
}

#[test]
fn noise_between_frames_is_counted_and_costs_nothing() {
    let room = Room::new();
    let script = script(Damage::Between);
    let expected = on_the_desktop(&room, &script);
    let (ran, account, report) = night(&room, script, "-INT");
    assert_eq!(ran.code, Some(0), "{ran:?}");
    let link = &report["coverage"]["link"];
    assert_eq!(link["damaged_frames"], 1, "{link}");
    assert_eq!(link["oversize_frames"], 1, "{link}");
    assert_eq!(link["missing_frames"], 0, "{link}");
    assert_eq!(link["dropped_bytes"], account.spoiled_bytes, "{link}");
    assert_eq!(numbers(&report), numbers(&expected));
}

#[test]
fn an_excursion_spoiled_on_the_way_is_fetched_again() {
    let room = Room::new();
    let script = script(Damage::InAnExcursion);
    let expected = on_the_desktop(&room, &script);
    let (ran, account, report) = night(&room, script, "-INT");
    assert_eq!(ran.code, Some(0), "{ran:?}");
    let link = &report["coverage"]["link"];
    assert_eq!(link["damaged_frames"], 1, "{link}");
    assert_eq!(link["missing_frames"], 1, "{link}");
    assert_eq!(link["dropped_bytes"], account.spoiled_bytes, "{link}");
    assert_eq!(numbers(&report), numbers(&expected));
}

#[test]
fn a_port_where_no_board_speaks_ends_cleanly_and_judges_nothing() {
    let room = Room::new();
    let (mut master, _slave, port) = terminal::pair();
    let child = log(&room, &port);
    // Its question shows that it listens.
    serialport::SerialPort::set_timeout(&mut master, PATIENCE).unwrap();
    let mut question = [0; 64];
    assert!(master.read(&mut question).unwrap() > 0);
    master.write_all(&[0x55; 300]).unwrap();
    master.write_all(&[0, 0x13, 0x77, 0]).unwrap();
    std::thread::sleep(Duration::from_millis(300));
    interrupt(&child, "-INT");
    let ran = end_of(child);
    assert_eq!(ran.code, Some(0), "{ran:?}");
    assert!(ran.out.contains("CANNOT JUDGE"), "{}", ran.out);
    let report = room.json(&["report", "n.lwlog", "--json"]);
    assert_eq!(report["verdict"], "cannot-judge");
    assert_eq!(report["recording"]["pairs"], 0);
}

#[test]
fn a_port_that_another_program_holds_is_told_apart_from_a_missing_one() {
    let room = Room::new();
    let (mut master, _slave, port) = terminal::pair();
    let first = log(&room, &port);
    serialport::SerialPort::set_timeout(&mut master, PATIENCE).unwrap();
    assert!(master.read(&mut [0; 64]).unwrap() > 0, "the first one listens");
    let second = room.run(&["log", "--port", &port, "-o", "second.lwlog"]);
    assert_refused(&second, 4, "it is in use; try closing the other program");
    assert!(!room.path("second.lwlog").exists());
    interrupt(&first, "-INT");
    assert_eq!(end_of(first).code, Some(0));
}

#[test]
fn a_log_that_exists_is_refused_before_the_board_is_disturbed() {
    let room = Room::new();
    room.write("n.lwlog", "precious");
    let (_master, slave, port) = terminal::pair();
    let ran = end_of(log(&room, &port));
    assert_refused(&ran, 5, "it exists already");
    assert_eq!(room.read("n.lwlog"), "precious");
    drop(slave);
}
