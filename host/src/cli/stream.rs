//! From a board on this machine, or a file, into a log.

use super::{ReadingArguments, terminal};
use crate::board::VirtualBoard;
use crate::log::{About, Arrival, Log, LogError, Origin};
use crate::recording;
use crate::session::Session;
use anyhow::Context;
use legwise_firmware::source::PairSource;
use legwise_protocol::framing::DeviceFrame;
use std::io::Read;
use std::path::Path;

/// Boot id of a recording: there is no device that could draw one.
const RECORDING_BOOT_ID: u32 = 1;
/// How every SQLite file begins (*Database File Format*, sqlite.org, section 1.3).
const DATABASE: &[u8] = b"SQLite format 3\0";

/// What a new log says about itself.
pub fn about(origin: Origin, origin_name: &str, point: Option<&str>) -> About {
    About {
        origin,
        origin_name: origin_name.to_owned(),
        point: point.map(str::to_owned),
        tool_version: env!("CARGO_PKG_VERSION").to_owned(),
        created_utc_ns: utc_now_ns(),
        stores_clock: origin != Origin::Recording,
    }
}

/// A log in the file named, or a temporary one.
///
/// # Errors
/// When the file cannot be made.
pub fn new_log(path: Option<&Path>, about: &About) -> Result<Log, LogError> {
    match path {
        Some(path) => Log::create(path, about),
        None => Log::temporary(about),
    }
}

/// Runs `board` to its end into `session`. `progress` is called with the source after every batch.
///
/// # Errors
/// When the source fails or nothing more can be stored; what was said before is stored.
pub fn run<S: PairSource<Error: std::error::Error + Send + Sync + 'static>>(
    board: &mut VirtualBoard<S>,
    session: &mut Session,
    on_frame: &mut dyn FnMut(&DeviceFrame),
    progress: &mut dyn FnMut(&S),
) -> anyhow::Result<()> {
    let mut bytes = Vec::new();
    loop {
        bytes.clear();
        let outcome = board.run_batch(&mut bytes);
        session.receive(&bytes, Arrival { utc_ns: 0, monotonic_ns: 0 }, on_frame)?;
        session.flush()?;
        let is_running = outcome?;
        if let Some(through) = session.acknowledgement() {
            board.acknowledge(through);
        }
        progress(board.source());
        if !is_running {
            return Ok(());
        }
    }
}

/// The log in a file, or the log of the recording in it.
///
/// # Errors
/// When it is neither, cannot be read, or breaks off.
pub fn log_of(path: &Path, reading: &ReadingArguments) -> anyhow::Result<Log> {
    let mut start = Vec::new();
    // What cannot be read shows when it is opened as what it seems to be.
    let is_database = std::fs::File::open(path)
        .and_then(|file| file.take(DATABASE.len() as u64).read_to_end(&mut start))
        .is_ok_and(|_| start == DATABASE);
    if is_database { Ok(Log::open(path)?) } else { analysed(path, reading, None) }
}

/// The log of a recording that went through the firmware, in the file named or a temporary one.
///
/// # Errors
/// When the recording or the log is not usable; a log that was asked for is kept as far as it came.
pub fn analysed(path: &Path, reading: &ReadingArguments, output: Option<&Path>) -> anyhow::Result<Log> {
    let recording = recording::open(path, &reading.open_options())?;
    let watching = reading.watching.choose(recording.receiver())?;
    let settings = watching.desktop_settings(recording.describe().sample_rate_mhz);
    let point = reading.point.as_deref().or(recording.point());
    let about = about(Origin::Recording, &origin_of(&recording), point);
    let log = new_log(output, &about)?;

    let bar = terminal::progress_bar(recording.progress().1, "the recording");
    let mut session = Session::new(log);
    let mut board = VirtualBoard::new(recording, settings, "desktop", RECORDING_BOOT_ID);
    let outcome = run(&mut board, &mut session, &mut |_| {}, &mut |source| {
        bar.set_position(source.progress().0);
    });
    bar.finish_and_clear();
    // A log the user asked for is finished even when the recording breaks off.
    let log = session.finish()?;
    outcome.with_context(|| match output {
        Some(path) => format!("broke off; what came before is kept in {}", path.display()),
        None => "broke off; 'legwise analyse' with -o keeps what comes before".to_owned(),
    })?;
    Ok(log)
}

/// File name and format, as the report names the recording.
fn origin_of(recording: &recording::Recording) -> String {
    let origin = recording.origin();
    let note = origin.note.as_deref().map(|note| format!("; {note}")).unwrap_or_default();
    format!("{} ({}{note})", origin.file_name, origin.format)
}

/// Now, nanoseconds since 1970 UTC.
pub fn utc_now_ns() -> i64 {
    i64::try_from(jiff::Timestamp::now().as_nanosecond()).unwrap_or(i64::MAX)
}
