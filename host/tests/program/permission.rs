//! What this user may not read or write. The super-user may do anything, so for him the program is run
//! as another user, from a copy that one can reach.

use crate::bad_input::assert_refused;
use crate::room::{Ran, Room, finish};
use crate::terminal;
use std::fs::{self, Permissions};
use std::os::unix::fs::{MetadataExt, PermissionsExt};
use std::os::unix::process::CommandExt;
use std::path::Path;

/// The user and group that own nothing (`nobody` on most systems).
const NOBODY: u32 = 65_534;

const INPUT: i32 = 3;
const PORT: i32 = 4;
const STORAGE: i32 = 5;

fn set_mode(path: impl AsRef<Path>, mode: u32) {
    fs::set_permissions(path, Permissions::from_mode(mode)).unwrap();
}

/// Runs the program as a user without special rights.
fn run_plainly(room: &Room, arguments: &[&str]) -> Ran {
    let mut command = room.command(arguments);
    if fs::metadata(room.folder()).unwrap().uid() == 0 {
        let copy = room.path("legwise");
        if !copy.exists() {
            fs::copy(env!("CARGO_BIN_EXE_legwise"), &copy).unwrap();
            set_mode(&copy, 0o755);
        }
        command = std::process::Command::new(copy);
        command.args(arguments).current_dir(room.folder()).uid(NOBODY).gid(NOBODY);
        command.stdin(std::process::Stdio::null());
        command.stdout(std::process::Stdio::piped()).stderr(std::process::Stdio::piped());
    }
    finish(command)
}

#[test]
fn what_may_not_be_read_is_refused_with_the_reason() {
    let room = Room::new();
    room.done(&["simulate", "quiet-night", "--seconds", "0.05", "-o", "x.csv"]);
    room.done(&["analyse", "x.csv", "-o", "x.lwlog"]);
    set_mode(room.folder(), 0o755);
    assert_eq!(run_plainly(&room, &["analyse", "x.csv"]).code, Some(0), "readable to begin with");
    for name in ["x.csv", "x.lwlog"] {
        set_mode(room.path(name), 0);
    }
    assert_refused(&run_plainly(&room, &["analyse", "x.csv"]), INPUT, "permission denied");
    assert_refused(&run_plainly(&room, &["report", "x.lwlog"]), INPUT, "permission denied");
}

#[test]
fn folders_that_may_not_be_written_are_refused_with_the_reason() {
    let room = Room::new();
    room.done(&["simulate", "quiet-night", "--seconds", "0.05", "-o", "x.csv"]);
    fs::create_dir(room.path("closed")).unwrap();
    set_mode(room.folder(), 0o755);
    set_mode(room.path("closed"), 0o555);
    let before = room.files();
    for (arguments, fragment) in [
        (&["analyse", "x.csv", "-o", "closed/x.lwlog"][..], "may not be written"),
        (&["simulate", "quiet-night", "--seconds", "0.01", "-o", "closed/x.csv"], "permission denied"),
        (&["demo", "--minutes", "0.01", "--folder", "closed/demo"], "could not make the folder"),
        (&["demo", "--minutes", "0.01", "--folder", "closed"], "may not be written"),
    ] {
        let ran = run_plainly(&room, arguments);
        println!("{arguments:?}: {}", ran.err.trim_end());
        assert_refused(&ran, STORAGE, fragment);
    }
    assert_eq!(fs::read_dir(room.path("closed")).unwrap().count(), 0);
    let after: Vec<String> = room.files().into_iter().filter(|name| name != "legwise").collect();
    assert_eq!(after, before);
    set_mode(room.path("closed"), 0o755);
}

#[test]
fn a_log_in_a_folder_that_may_not_be_written_is_read_all_the_same() {
    let room = Room::new();
    room.done(&["simulate", "quiet-night", "--seconds", "0.05", "-o", "x.csv"]);
    fs::create_dir(room.path("shelf")).unwrap();
    room.done(&["analyse", "x.csv", "-o", "shelf/x.lwlog"]);
    set_mode(room.folder(), 0o755);
    set_mode(room.path("shelf/x.lwlog"), 0o444);
    set_mode(room.path("shelf"), 0o555);
    let ran = run_plainly(&room, &["report", "shelf/x.lwlog", "--json"]);
    assert_eq!(ran.code, Some(0), "{ran:?}");
    assert_eq!(ran.json()["verdict"], "within");
    set_mode(room.path("shelf"), 0o755);
}

#[test]
fn a_port_without_permission_is_refused_with_the_group_to_join() {
    let room = Room::new();
    set_mode(room.folder(), 0o777);
    let (_master, _slave, name) = terminal::pair();
    set_mode(&name, 0);
    let ran = run_plainly(&room, &["log", "--port", &name, "-o", "x.lwlog"]);
    assert_refused(&ran, PORT, "permission denied");
    assert!(ran.err.contains("dialout"), "{}", ran.err);
    assert!(!room.path("x.lwlog").exists());
}
