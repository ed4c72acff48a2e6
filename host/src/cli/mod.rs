//! The command line: raw arguments in, commands out, one exit code at the end.
//!
//! Exit codes (also in `legwise help`): see [`failure::Exit`].

mod analyse;
mod calibration;
mod demo;
pub mod failure;
mod length;
mod live;
mod night;
mod plot;
mod simulate;
mod stream;
mod tables;
mod terminal;

use crate::recording::OpenOptions;
use crate::watching::{OwnWindow, Watching, WatchingError};
use clap::{Args, Parser, Subcommand};
use failure::Exit;
use std::ffi::OsString;
use std::path::PathBuf;
use std::process::ExitCode;

const AFTER_HELP: &str = "\
Exit codes:
  0   done (a broken pipe counts as done)
  1   something unexpected
  2   the arguments are not usable
  3   the recording, scenario or log is not usable
  4   the port is not usable or went away
  5   nothing more can be stored (disk full, no permission, file exists)
With --verdict-code, a finished run also says by its code what was found:
  10  marginal   11  outside limits   12  cannot judge

The monitor is not rated for mains. Clip it to extra-low-voltage signal pairs only; follow the
site's rules and leave work on live cabinets to people licensed for it.";

const TRIM_HELP: &str = "\
How: unclip the monitor from the bus and from all plant wiring. Tie both leg clips together, at the
monitor, to one output of an extra-low-voltage source (a generator or a small isolated supply with
a signal on it, a few volts at the most), the reference clip to its other one. Log or record a
minute or more, with a signal at every frequency that matters: noise, a sweep, or many tones.";

/// Finds out whether the wire is to blame: logs and judges a differential bus leg by leg.
#[derive(Debug, Parser)]
#[command(name = "legwise", version, after_help = AFTER_HELP, max_term_width = 100)]
struct Arguments {
    #[command(subcommand)]
    command: Command,
}

#[derive(Debug, Subcommand)]
enum Command {
    /// Run the whole job on a simulated pair: board, log, verdict
    Demo(DemoArguments),
    /// List serial ports that may have a board on them
    Ports(JsonFlag),
    /// Log a board on a serial port until Ctrl-C or a given time
    Log(LogArguments),
    /// Say what a log holds: verdict, margins, excursions, levels, lines
    Report(ReportArguments),
    /// Judge a recording of both legs (CSV in volts, or two-channel WAV)
    Analyse(AnalyseArguments),
    /// Write a simulated pair to a recording
    Simulate(SimulateArguments),
    /// Show receiver limits and where each number comes from
    Receivers(ReceiversArguments),
    /// Write every table of a log as CSV
    Export(ExportArguments),
    /// Draw the spectra of a log or a recording, and what the pair converts
    Plot(PlotArguments),
    /// Measure a board's own conversion, with both its legs tied together
    #[command(after_help = TRIM_HELP)]
    Trim(TrimArguments),
}

/// Machine-readable output.
#[derive(Debug, Args)]
struct JsonFlag {
    /// Print JSON instead of text
    #[arg(long)]
    json: bool,
}

/// What to judge by.
#[derive(Debug, Args)]
struct WatchingArguments {
    /// Receiver to judge by, from 'legwise receivers' [default: tia485a]
    #[arg(long, value_name = "NAME")]
    receiver: Option<String>,
    /// Own window for each leg instead, in volts
    #[arg(long, value_name = "LOW,HIGH", allow_hyphen_values = true, conflicts_with = "receiver")]
    terminal_window: Option<OwnWindow>,
    /// Own window for the average of both legs instead, in volts
    #[arg(long, value_name = "LOW,HIGH", allow_hyphen_values = true, conflicts_with = "receiver")]
    average_window: Option<OwnWindow>,
}

impl WatchingArguments {
    /// The choice; `otherwise` names the receiver when the user does not.
    fn choose(&self, otherwise: Option<&str>) -> Result<Watching, WatchingError> {
        let name = self.receiver.as_deref().or(otherwise);
        Watching::choose(name, self.terminal_window, self.average_window)
    }
}

#[derive(Debug, Args)]
struct DemoArguments {
    /// Scenario by name or as a TOML file; '--scenario list' lists the built-in ones
    #[arg(long, value_name = "NAME", default_value = demo::DEFAULT_SCENARIO)]
    scenario: String,
    /// Minutes of bus time to run
    #[arg(long, value_name = "N", default_value_t = demo::DEFAULT_MINUTES, allow_negative_numbers = true)]
    minutes: f64,
    /// Seed of everything random
    #[arg(long, value_name = "N", default_value_t = 1)]
    seed: u64,
    /// Folder for log and report
    #[arg(long, value_name = "DIR", default_value = "legwise-demo")]
    folder: PathBuf,
    #[command(flatten)]
    watching: WatchingArguments,
    /// Let the exit code say what was found
    #[arg(long)]
    verdict_code: bool,
}

#[derive(Debug, Args)]
struct LogArguments {
    /// Serial port of the board
    #[arg(long, value_name = "PORT")]
    port: String,
    /// Where on the bus the clip sits, in your own words
    #[arg(long, value_name = "TEXT")]
    point: Option<String>,
    #[command(flatten)]
    watching: WatchingArguments,
    #[command(flatten)]
    length: length::LengthArguments,
    /// Log file to write [default: legwise-DATE-TIME.lwlog]
    #[arg(short, long, value_name = "FILE")]
    output: Option<PathBuf>,
    /// Bits per second of the port
    #[arg(long, value_name = "N", default_value_t = crate::port::DEFAULT_BAUD)]
    baud: u32,
    /// Let the exit code say what was found
    #[arg(long)]
    verdict_code: bool,
}

#[derive(Debug, Args)]
struct ReportArguments {
    /// Log file
    log: PathBuf,
    #[command(flatten)]
    board: BoardArgument,
    #[command(flatten)]
    json: JsonFlag,
    /// Let the exit code say what was found
    #[arg(long)]
    verdict_code: bool,
}

/// How a recording is read.
#[derive(Debug, Args)]
struct ReadingArguments {
    #[command(flatten)]
    watching: WatchingArguments,
    /// Pairs per second, where the file does not say
    #[arg(long, value_name = "HZ")]
    rate: Option<f64>,
    /// Volts of a full-scale WAV sample
    #[arg(long, value_name = "V")]
    full_scale: Option<f64>,
    /// How much later leg B was sampled, in nanoseconds
    #[arg(long, value_name = "NS", allow_hyphen_values = true)]
    skew_ns: Option<i32>,
    /// Voltages at which the converter clipped
    #[arg(long, value_name = "LOW,HIGH", allow_hyphen_values = true, value_parser = two_volts)]
    rails: Option<(f64, f64)>,
    /// Where on the bus the clip sat, in your own words
    #[arg(long, value_name = "TEXT")]
    point: Option<String>,
}

impl ReadingArguments {
    fn open_options(&self) -> OpenOptions {
        OpenOptions {
            rate_hz: self.rate,
            full_scale_v: self.full_scale,
            skew_ns: self.skew_ns,
            rails_v: self.rails,
        }
    }
}

/// A file written by `trim`.
#[derive(Debug, Args)]
struct BoardArgument {
    /// What the board itself converts, written by 'legwise trim'
    #[arg(long, value_name = "BOARD.toml")]
    board: Option<PathBuf>,
}

#[derive(Debug, Args)]
struct AnalyseArguments {
    /// Recording: CSV with columns leg_a_v, leg_b_v, or a two-channel WAV
    recording: PathBuf,
    #[command(flatten)]
    reading: ReadingArguments,
    #[command(flatten)]
    board: BoardArgument,
    /// Keep the log in this file
    #[arg(short, long, value_name = "FILE")]
    output: Option<PathBuf>,
    #[command(flatten)]
    json: JsonFlag,
    /// Let the exit code say what was found
    #[arg(long)]
    verdict_code: bool,
}

#[derive(Debug, Args)]
struct PlotArguments {
    /// Log file, or a recording as for 'analyse'
    #[arg(value_name = "LOG|RECORDING")]
    input: PathBuf,
    /// Picture to write, .svg or .png; an older one of this name is replaced
    #[arg(short, long, value_name = "FILE")]
    output: PathBuf,
    #[command(flatten)]
    board: BoardArgument,
    #[command(flatten)]
    reading: ReadingArguments,
}

#[derive(Debug, Args)]
struct TrimArguments {
    /// Log or recording with both legs tied to one source
    #[arg(value_name = "LOG|RECORDING")]
    input: PathBuf,
    /// Board file to write, a new one
    #[arg(short, long, value_name = "BOARD.toml")]
    output: PathBuf,
    #[command(flatten)]
    reading: ReadingArguments,
}

#[derive(Debug, Args)]
struct SimulateArguments {
    /// Scenario by name or as a TOML file; 'list' lists the built-in ones
    scenario: String,
    /// Recording to write, .csv or .wav
    #[arg(short, long, value_name = "FILE")]
    output: Option<PathBuf>,
    /// Seconds of bus time
    #[arg(long, value_name = "N", default_value_t = 10.0, allow_negative_numbers = true)]
    seconds: f64,
    /// Seed of everything random
    #[arg(long, value_name = "N", default_value_t = 1)]
    seed: u64,
    /// Print the scenario's TOML instead, as a start for your own
    #[arg(long)]
    print: bool,
}

#[derive(Debug, Args)]
struct ReceiversArguments {
    /// One receiver in full
    name: Option<String>,
    #[command(flatten)]
    json: JsonFlag,
}

#[derive(Debug, Args)]
struct ExportArguments {
    /// Log file
    log: PathBuf,
    /// Folder to write the CSV files into
    #[arg(short, long, value_name = "DIR", default_value = ".")]
    output: PathBuf,
    /// Only these tables, separated by commas
    #[arg(long, value_name = "NAMES", value_delimiter = ',')]
    tables: Option<Vec<String>>,
}

/// Runs the program with these arguments (the first is its name).
pub fn run(arguments: impl IntoIterator<Item = OsString>) -> ExitCode {
    let arguments = match Arguments::try_parse_from(arguments) {
        Ok(arguments) => arguments,
        Err(error) => {
            // Help and version are answers, not failures; a reader that went away is neither.
            let _ = error.print();
            return if error.use_stderr() { Exit::Usage.into() } else { Exit::Done.into() };
        }
    };
    let result = match &arguments.command {
        Command::Demo(arguments) => demo::run(arguments),
        Command::Ports(flag) => tables::ports(flag.json),
        Command::Log(arguments) => night::run(arguments),
        Command::Report(arguments) => tables::report(arguments),
        Command::Analyse(arguments) => analyse::run(arguments),
        Command::Simulate(arguments) => simulate::run(arguments),
        Command::Receivers(arguments) => tables::receivers(arguments),
        Command::Export(arguments) => tables::export(arguments),
        Command::Plot(arguments) => plot::run(arguments),
        Command::Trim(arguments) => calibration::trim(arguments),
    };
    match result {
        Ok(exit) => exit.into(),
        Err(error) => failure::explain(&error).into(),
    }
}

/// `LOW,HIGH` in volts, lowest first.
fn two_volts(text: &str) -> Result<(f64, f64), String> {
    let parsed = text.split_once(',').and_then(|(low, high)| {
        let (low, high) = (low.trim().parse::<f64>().ok()?, high.trim().parse::<f64>().ok()?);
        (low < high).then_some((low, high))
    });
    parsed.ok_or_else(|| "try two voltages in volts, lowest first, such as -15,20".to_owned())
}
