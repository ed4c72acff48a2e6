//! From a board on this machine into a log.

use crate::board::VirtualBoard;
use crate::log::{About, Arrival, Log, LogError, Origin};
use crate::session::Session;
use legwise_firmware::source::PairSource;
use legwise_protocol::framing::DeviceFrame;
use std::path::Path;

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

/// Now, nanoseconds since 1970 UTC.
pub fn utc_now_ns() -> i64 {
    i64::try_from(jiff::Timestamp::now().as_nanosecond()).unwrap_or(i64::MAX)
}
