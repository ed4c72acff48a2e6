//! From errors to a line on the screen and an exit code.

use crate::board_file::BoardFileError;
use crate::board_file::tied_legs::TiedLegsError;
use crate::export::ExportError;
use crate::line::ScenarioError;
use crate::log::LogError;
use crate::plot::PlotError;
use crate::port::PortError;
use crate::recording::RecordingError;
use crate::report::ReportError;
use crate::report::Verdict;
use crate::watching::WatchingError;
use std::io;
use std::process::ExitCode;

/// How the program ends.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Exit {
    /// Done.
    Done = 0,
    /// Something unexpected.
    Unexpected = 1,
    /// The arguments are not usable.
    Usage = 2,
    /// The recording, scenario or log is not usable.
    Input = 3,
    /// The port is not usable or went away.
    Port = 4,
    /// Nothing more can be stored.
    Storage = 5,
    /// Finished; marginal.
    Marginal = 10,
    /// Finished; outside limits.
    Outside = 11,
    /// Finished; cannot judge.
    CannotJudge = 12,
}

impl Exit {
    /// The code of a finished run: `Done`, or by verdict where the user asked for that.
    pub const fn of_verdict(verdict: Verdict, is_asked_for: bool) -> Self {
        match verdict {
            _ if !is_asked_for => Self::Done,
            Verdict::Within => Self::Done,
            Verdict::Marginal => Self::Marginal,
            Verdict::Outside => Self::Outside,
            Verdict::CannotJudge => Self::CannotJudge,
        }
    }
}

impl From<Exit> for ExitCode {
    fn from(exit: Exit) -> Self {
        Self::from(exit as u8)
    }
}

/// Arguments that are well formed but of no use.
#[derive(Clone, Copy, Debug, PartialEq, thiserror::Error)]
pub enum UsageError {
    /// No time to simulate, or more than anyone has.
    #[error("could not simulate {seconds} s; try a length from one sample up")]
    Length {
        /// What was asked for.
        seconds: f64,
    },
    /// Nowhere to write to.
    #[error(
        "could not write the recording: no file was named; try -o FILE with a name that ends in .csv or .wav"
    )]
    NoOutput,
}

/// Prints what went wrong, unless it was only a reader that went away; the exit code.
pub fn explain(error: &anyhow::Error) -> Exit {
    let exit = classify(error);
    if exit != Exit::Done {
        // Nothing can be done when even the error output is closed.
        let _ = io::Write::write_all(&mut io::stderr(), format!("legwise: {}\n", sentence(error)).as_bytes());
    }
    exit
}

/// The error, with those of its causes that it does not name itself in brackets.
fn sentence(error: &anyhow::Error) -> String {
    if error.chain().len() == 1 && error.is::<io::Error>() {
        return format!("could not write to the standard output: {error}; try another place for it");
    }
    let mut text = error.to_string();
    for cause in error.chain().skip(1).map(ToString::to_string) {
        if !text.contains(&cause) {
            text.push_str(&format!(" ({cause})"));
        }
    }
    text
}

fn classify(error: &anyhow::Error) -> Exit {
    for cause in error.chain() {
        if let Some(exit) = cause.downcast_ref().map(of_plot).or(cause.downcast_ref().map(of_board_file)) {
            return exit;
        }
        if let Some(error) = cause.downcast_ref::<io::Error>() {
            return match error.kind() {
                io::ErrorKind::BrokenPipe => Exit::Done,
                _ => Exit::Storage,
            };
        }
        if matches!(cause.downcast_ref(), Some(RecordingError::UnknownFormat { .. })) {
            return Exit::Usage;
        }
        if let Some(error) = cause.downcast_ref::<RecordingError>() {
            return if error.is_about_writing() { Exit::Storage } else { Exit::Input };
        }
        if let Some(error) = cause.downcast_ref::<LogError>() {
            return if error.is_about_storing() { Exit::Storage } else { Exit::Input };
        }
        if let Some(error) = cause.downcast_ref::<ExportError>() {
            return match error {
                ExportError::UnknownTable { .. } => Exit::Usage,
                ExportError::Log(_) => Exit::Input,
                ExportError::Exists { .. } | ExportError::Write { .. } => Exit::Storage,
            };
        }
        if cause.is::<ReportError>() || cause.is::<ScenarioError>() || cause.is::<TiedLegsError>() {
            return Exit::Input;
        }
        if cause.is::<PortError>() {
            return Exit::Port;
        }
        if cause.is::<WatchingError>() || cause.is::<UsageError>() {
            return Exit::Usage;
        }
    }
    Exit::Unexpected
}

fn of_plot(error: &PlotError) -> Exit {
    match error {
        PlotError::UnknownFormat { .. } => Exit::Usage,
        PlotError::NoSpectra | PlotError::Log(_) | PlotError::Report(_) => Exit::Input,
        PlotError::Write { .. } => Exit::Storage,
        PlotError::Picture => Exit::Unexpected,
    }
}

fn of_board_file(error: &BoardFileError) -> Exit {
    match error {
        BoardFileError::Read { .. }
        | BoardFileError::Content { .. }
        | BoardFileError::Points { .. }
        | BoardFileError::Log(_) => Exit::Input,
        BoardFileError::IsSidecar { .. } => Exit::Usage,
        BoardFileError::Exists { .. } | BoardFileError::Write { .. } => Exit::Storage,
    }
}
