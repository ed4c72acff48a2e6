//! `trim`: a board's own conversion into a file; and that file where other commands are given one.

use super::failure::Exit;
use super::{BoardArgument, TrimArguments, stream, terminal};
use crate::board_file::tied_legs::{self, TiedLegsError};
use crate::board_file::{BoardFacts, BoardFile, BoardFileError};
use crate::log::Log;
use crate::recording::Sidecar;
use crate::spectrum::conversion::ConversionFloor;
use crate::spectrum::ladder::Ladder;

impl BoardArgument {
    /// The board file, where one was named.
    pub(super) fn read(&self) -> Result<Option<BoardFile>, BoardFileError> {
        self.board.as_deref().map(BoardFile::read).transpose()
    }
}

/// The conversion in a board file, for a log; what does not fit is told on the error output.
pub(super) fn floor_for(log: &Log, board: Option<&BoardFile>) -> anyhow::Result<Option<ConversionFloor>> {
    let Some(file) = board else { return Ok(None) };
    for difference in file.differences(&BoardFacts::of(log)?) {
        terminal::warn(&difference);
    }
    Ok(Some(file.floor()?))
}

pub(super) fn trim(arguments: &TrimArguments) -> anyhow::Result<Exit> {
    let output = &arguments.output;
    let input = &arguments.input;
    if output.exists() {
        return Err(BoardFileError::Exists { path: output.clone() }.into());
    }
    if *output == Sidecar::path_of(input) || *output == input.with_extension("toml") {
        return Err(BoardFileError::IsSidecar { path: output.clone() }.into());
    }
    let log = stream::log_of(input, &arguments.reading)?;
    let ladder = Ladder::from_log(&log)?.ok_or(TiedLegsError::NoSpectra)?;
    let file = tied_legs::measure(&ladder, &BoardFacts::of(&log)?)?;
    file.write(output)?;
    terminal::print(&tied_legs::summary(&file, &file.floor()?))?;
    terminal::print(&format!("written to {}; give it to other commands with --board", output.display()))?;
    Ok(Exit::Done)
}
