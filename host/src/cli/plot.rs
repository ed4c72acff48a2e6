//! `plot`: a picture of the spectra of a log, or of a recording that is run through the firmware first.

use super::failure::Exit;
use super::{PlotArguments, calibration, stream, terminal};
use crate::plot::{Format, Plot, PlotError};
use crate::report::{Options, Report};
use crate::spectrum::ladder::Ladder;

pub(super) fn run(arguments: &PlotArguments) -> anyhow::Result<Exit> {
    // Before a long recording is read for nothing.
    Format::of(&arguments.output)?;
    let board = arguments.board.read()?;
    let log = stream::log_of(&arguments.input, &arguments.reading)?;
    let floor = calibration::floor_for(&log, board.as_ref())?;
    let report = Report::from_log(&log, &Options { list_limit: 0, ..Options::default() })?;
    let ladder = Ladder::from_log(&log)?.ok_or(PlotError::NoSpectra)?;
    let plot = Plot::new(&report, &ladder, floor.as_ref())?;
    plot.write(&arguments.output)?;
    terminal::print(&arguments.output.display().to_string())?;
    Ok(Exit::Done)
}
