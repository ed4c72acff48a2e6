//! `analyse`: a recording through the firmware pipeline into a log, and the report of that.

use super::failure::Exit;
use super::{AnalyseArguments, calibration, stream, tables};

pub(super) fn run(arguments: &AnalyseArguments) -> anyhow::Result<Exit> {
    let board = arguments.board.read()?;
    let log = stream::analysed(&arguments.recording, &arguments.reading, arguments.output.as_deref())?;
    let floor = calibration::floor_for(&log, board.as_ref())?;
    tables::print_report(&log, floor, arguments.json.json, arguments.verdict_code)
}
