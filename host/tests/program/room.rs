//! A folder that goes with the test, and the program run in it.

use serde_json::Value;
use std::ffi::OsStr;
use std::path::{Path, PathBuf};
use std::process::{Child, Command, Output, Stdio};
use std::sync::{Mutex, MutexGuard, PoisonError};

/// Held while a program is started or a terminal is opened: a terminal's descriptor that another
/// child inherits by accident would keep it from ever hanging up.
static STARTING: Mutex<()> = Mutex::new(());

/// Keeps others from starting programs meanwhile.
pub fn hold_starting() -> MutexGuard<'static, ()> {
    STARTING.lock().unwrap_or_else(PoisonError::into_inner)
}

/// A folder of one test.
pub struct Room(tempfile::TempDir);

/// What a finished run said.
#[derive(Debug)]
pub struct Ran {
    pub code: Option<i32>,
    pub out: String,
    pub err: String,
}

impl Room {
    pub fn new() -> Self {
        Self(tempfile::tempdir().unwrap())
    }

    pub fn folder(&self) -> &Path {
        self.0.path()
    }

    pub fn path(&self, name: &str) -> PathBuf {
        self.0.path().join(name)
    }

    pub fn write(&self, name: &str, content: impl AsRef<[u8]>) -> PathBuf {
        let path = self.path(name);
        std::fs::write(&path, content).unwrap();
        path
    }

    pub fn read(&self, name: &str) -> String {
        std::fs::read_to_string(self.path(name)).unwrap()
    }

    /// Names in the folder, sorted.
    pub fn files(&self) -> Vec<String> {
        let entries = std::fs::read_dir(self.folder()).unwrap();
        let mut names: Vec<String> =
            entries.map(|entry| entry.unwrap().file_name().to_string_lossy().into_owned()).collect();
        names.sort();
        names
    }

    /// A built-in scenario whose machine starts at once instead of after a while, as a file; its name.
    pub fn early(&self, scenario: &str) -> String {
        let text = self.done(&["simulate", scenario, "--print"]).out;
        let (before, rest) = text.split_once("schedule = {").expect("a machine with a schedule");
        let (_, after) = rest.split_once('}').unwrap();
        let name = format!("early-{scenario}.toml");
        let schedule = "schedule = { from_s = 0.1, for_s = 0.9, every_s = 1.1 }";
        self.write(&name, format!("{before}{schedule}{after}"));
        name
    }

    /// The program, ready to run in this folder.
    pub fn command<A: AsRef<OsStr>>(&self, arguments: &[A]) -> Command {
        let mut command = Command::new(env!("CARGO_BIN_EXE_legwise"));
        command.args(arguments).current_dir(self.folder()).env_remove("NO_COLOR").env("TERM", "xterm");
        command.stdin(Stdio::null()).stdout(Stdio::piped()).stderr(Stdio::piped());
        command
    }

    /// Runs the program to its end.
    pub fn run<A: AsRef<OsStr>>(&self, arguments: &[A]) -> Ran {
        finish(self.command(arguments))
    }

    /// Runs the program; it must succeed.
    pub fn done<A: AsRef<OsStr> + std::fmt::Debug>(&self, arguments: &[A]) -> Ran {
        let ran = self.run(arguments);
        assert_eq!(ran.code, Some(0), "{arguments:?}: {ran:?}");
        ran
    }

    /// Runs the program; it must succeed and print JSON.
    pub fn json<A: AsRef<OsStr> + std::fmt::Debug>(&self, arguments: &[A]) -> Value {
        self.done(arguments).json()
    }
}

impl Ran {
    pub fn json(&self) -> Value {
        serde_json::from_str(&self.out).unwrap_or_else(|error| panic!("{error}: {self:?}"))
    }
}

/// Starts a command.
pub fn start(mut command: Command) -> Child {
    let _guard = hold_starting();
    command.spawn().unwrap()
}

/// Runs a command to its end.
pub fn finish(command: Command) -> Ran {
    let Output { status, stdout, stderr } = start(command).wait_with_output().unwrap();
    Ran {
        code: status.code(),
        out: String::from_utf8(stdout).unwrap(),
        err: String::from_utf8(stderr).unwrap(),
    }
}
