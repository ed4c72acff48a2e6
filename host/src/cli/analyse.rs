//! `analyse`: a recording through the firmware pipeline into a log, and the report of that.

use super::failure::Exit;
use super::{AnalyseArguments, stream, tables, terminal};
use crate::board::VirtualBoard;
use crate::log::Origin;
use crate::recording;
use crate::session::Session;
use anyhow::Context;
use legwise_firmware::source::PairSource;

/// Boot id of a recording: there is no device that could draw one.
const RECORDING_BOOT_ID: u32 = 1;

/// File name and format, as the report names the recording.
fn origin(recording: &recording::Recording) -> String {
    let origin = recording.origin();
    let note = origin.note.as_deref().map(|note| format!("; {note}")).unwrap_or_default();
    format!("{} ({}{note})", origin.file_name, origin.format)
}

pub(super) fn run(arguments: &AnalyseArguments) -> anyhow::Result<Exit> {
    let recording = recording::open(&arguments.recording, &arguments.open_options())?;
    let watching = arguments.watching.choose(recording.receiver())?;
    let settings = watching.desktop_settings(recording.describe().sample_rate_mhz);
    let point = arguments.point.as_deref().or(recording.point());
    let about = stream::about(Origin::Recording, &origin(&recording), point);
    let log = stream::new_log(arguments.output.as_deref(), &about)?;

    let bar = terminal::progress_bar(recording.progress().1, "the recording");
    let mut session = Session::new(log);
    let mut board = VirtualBoard::new(recording, settings, "desktop", RECORDING_BOOT_ID);
    let outcome = stream::run(&mut board, &mut session, &mut |_| {}, &mut |source| {
        bar.set_position(source.progress().0);
    });
    bar.finish_and_clear();
    // A log the user asked for is finished even when the recording breaks off.
    let log = session.finish()?;
    outcome.with_context(|| match &arguments.output {
        Some(path) => format!("broke off; what came before is kept in {}", path.display()),
        None => "broke off; give -o to keep what comes before".to_owned(),
    })?;
    tables::print_report(&log, arguments.json.json, arguments.verdict_code)
}
