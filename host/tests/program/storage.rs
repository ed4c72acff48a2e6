//! No room: what was stored stays readable, the message says so, the exit code is 5.
//!
//! Three ways to run out: `/dev/full`, a limit on the size of files that the shell sets (both work for
//! every user), and a small file system in memory, which only the super-user may mount.
#![cfg(target_os = "linux")]

use crate::room::{Ran, Room, finish};
use serde_json::Value;
use std::fs::File;
use std::path::PathBuf;
use std::process::{Command, Stdio};

const STORAGE: Option<i32> = Some(5);

fn assert_out_of_room(ran: &Ran, fragment: &str) {
    assert_eq!(ran.code, STORAGE, "{ran:?}");
    assert!(ran.err.contains(fragment) && ran.err.contains("try"), "no '{fragment}' in: {}", ran.err);
    assert!(!ran.err.contains("panicked"), "{}", ran.err);
}

/// Runs the program with files limited to this many half kibibytes. The signal that would end it is
/// ignored, as service managers do, so that writing fails instead.
fn limited(room: &Room, half_kib: u32, arguments: &[&str]) -> Ran {
    let mut command = Command::new("sh");
    let script = format!("ulimit -f {half_kib}; trap '' XFSZ; exec \"$0\" \"$@\"");
    command.args(["-c", &script, env!("CARGO_BIN_EXE_legwise")]).args(arguments);
    command.current_dir(room.folder()).stdin(Stdio::null()).stdout(Stdio::piped()).stderr(Stdio::piped());
    finish(command)
}

/// A log that was cut off by a full disk must open, say that it is not complete, and hold something.
fn assert_readable(room: &Room, log: &str) -> Value {
    let report = room.json(&["report", log, "--json"]);
    assert_eq!(report["recording"]["is_complete"], false);
    assert!(report["recording"]["pairs"].as_u64().unwrap() > 0, "{report}");
    report
}

#[test]
fn a_full_standard_output_is_an_error_that_says_so() {
    let room = Room::new();
    for arguments in [&["receivers"][..], &["receivers", "--json"], &["ports", "--json"]] {
        let mut command = room.command(arguments);
        command.stdout(File::options().write(true).open("/dev/full").unwrap());
        assert_out_of_room(&finish(command), "standard output");
    }
}

#[test]
fn a_recording_that_outgrows_its_limit_is_not_passed_off_as_whole() {
    let room = Room::new();
    for output in ["x.csv", "x.wav"] {
        let ran = limited(&room, 64, &["simulate", "quiet-night", "--seconds", "1", "-o", output]);
        assert_out_of_room(&ran, "could not write");
        assert_eq!(ran.err.matches("File too large").count(), 1, "said twice: {}", ran.err);
        assert!(!room.path(output).exists(), "half a recording under its final name");
    }
    // The name is free for the next attempt.
    room.done(&["simulate", "quiet-night", "--seconds", "0.01", "-o", "x.csv"]);
    room.done(&["analyse", "x.csv"]);
}

#[test]
fn a_log_that_outgrows_its_limit_keeps_what_it_holds() {
    let room = Room::new();
    let ran = limited(&room, 400, &["demo", "--minutes", "2", "--scenario", "contactor"]);
    assert_out_of_room(&ran, "the disk is full or refuses writes");
    assert_readable(&room, "legwise-demo/contactor.lwlog");
    assert!(!room.path("legwise-demo/contactor.txt").exists(), "no report on half a run");

    room.done(&["simulate", "contactor", "--seconds", "2", "-o", "x.csv"]);
    let ran = limited(&room, 1, &["analyse", "x.csv", "-o", "x.lwlog"]);
    assert_out_of_room(&ran, "the disk is full or refuses writes");
    assert!(!room.path("x.lwlog").exists(), "a log that could not even be begun is left over");
    room.done(&["analyse", "x.csv", "-o", "x.lwlog"]);
}

/// A small file system in memory, unmounted with the value.
struct SmallDisk<'a> {
    room: &'a Room,
    folder: PathBuf,
}

impl<'a> SmallDisk<'a> {
    /// `None` where this user may not mount.
    fn mount(room: &'a Room, kib: u32) -> Option<Self> {
        let folder = room.path("disk");
        std::fs::create_dir_all(&folder).unwrap();
        let mut command = Command::new("mount");
        command.args(["-t", "tmpfs", "-o", &format!("size={kib}k"), "tmpfs"]).arg(&folder);
        command.stdout(Stdio::null()).stderr(Stdio::null());
        command.status().is_ok_and(|status| status.success()).then_some(Self { room, folder })
    }

    fn fill(&self) {
        // Writing stops where the room ends.
        let _ = std::fs::write(self.folder.join("filling"), vec![0; 4 << 20]);
    }

    fn empty(&self) {
        std::fs::remove_file(self.folder.join("filling")).unwrap();
    }
}

impl Drop for SmallDisk<'_> {
    fn drop(&mut self) {
        let _ = Command::new("umount").arg(&self.folder).status();
    }
}

#[test]
fn a_full_disk_loses_nothing_that_was_stored() {
    let room = Room::new();
    let Some(disk) = SmallDisk::mount(&room, 256) else {
        println!("may not mount here: full disks are tried through limits on file sizes only");
        return;
    };
    room.done(&["simulate", "contactor", "--seconds", "2", "-o", "x.csv"]);
    let ran = room.run(&["simulate", "contactor", "--seconds", "2", "-o", "disk/x.csv"]);
    assert_out_of_room(&ran, "the disk is full");
    assert!(!room.path("disk/x.csv").exists() && !room.path("disk/x.csv.toml").exists());
    std::fs::remove_file(room.path("disk/x.csv.part")).unwrap();

    let ran = room.run(&["demo", "--minutes", "2", "--scenario", "contactor", "--folder", "disk"]);
    assert_out_of_room(&ran, "the disk is full or refuses writes");
    let before = assert_readable(disk.room, "disk/contactor.lwlog");
    disk.fill();
    assert_eq!(assert_readable(&room, "disk/contactor.lwlog")["worst"], before["worst"], "on a full disk");
    let ran = room.run(&["analyse", "x.csv", "-o", "disk/x.lwlog"]);
    assert_out_of_room(&ran, "the disk is full");
    assert!(!room.path("disk/x.lwlog").exists(), "a log that could not even be begun is left over");
    disk.empty();
    assert_eq!(assert_readable(&room, "disk/contactor.lwlog")["worst"], before["worst"]);
}
