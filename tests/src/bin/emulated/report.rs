//! `emulated report IMAGE LEGWISE`: `legwise log` records the image, `legwise report` judges.

use crate::{Outcome, text};
use legwise::line::{Length, LineSource, scenarios};
use legwise_tests::emulator::Emulator;
use legwise_tests::replay::Replay;
use std::path::{Path, PathBuf};

/// `legwise log` on the emulated board's port, then `legwise report`.
pub fn report(image: &Path, legwise: &Path) -> Outcome<()> {
    let folder = tempfile::tempdir().map_err(text)?;
    let scenario = scenarios::by_name("press-ground").ok_or("no such scenario")?;
    let source = LineSource::new(&scenario, 1, Length::Pairs(20 * 200_000)).map_err(text)?;
    let recording = folder.path().join("replay.bin");
    Replay::record(source, 0, 1, |_| false).write(&recording, 0).map_err(text)?;
    let emulator = Emulator::boot(image, &recording)?;
    let log: PathBuf = folder.path().join("night.lwlog");
    let run = |arguments: &[&std::ffi::OsStr]| {
        let status = std::process::Command::new(legwise).args(arguments).status().map_err(text)?;
        if status.success() { Ok(()) } else { Err(format!("legwise ended with {status}")) }
    };
    run(&[
        "log".as_ref(),
        "--port".as_ref(),
        emulator.port.as_ref(),
        "--point".as_ref(),
        "emulated board".as_ref(),
        "-o".as_ref(),
        log.as_os_str(),
    ])?;
    run(&["report".as_ref(), log.as_os_str()])
}
