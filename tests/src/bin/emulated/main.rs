//! Checks the emulated board.
//!
//! `emulated same IMAGE`: plays recordings through the image in the emulator and through the firmware
//! on this machine; every frame must be identical, envelope included.
//! `emulated report IMAGE LEGWISE`: `legwise log` records the image through its port, `legwise report`
//! judges.
//! `emulated link IMAGE [SECONDS]`: what every scenario asks of the link, what is shed at 115 200 baud
//! and what at a rate too low.
//! `emulated resets IMAGE [COUNT]`: resets the machine again and again amid garbled input.

mod garble;
mod link;
mod report;
mod resets;
mod same;

use std::path::Path;
use std::process::ExitCode;
use std::time::Duration;

/// Longest silence of the board before it counts as hung.
const PATIENCE: Duration = Duration::from_secs(60);
/// Seconds of each scenario that `link` plays, unless told otherwise.
const LINK_SECONDS: f64 = 16.0;
/// Resets that `resets` makes, unless told otherwise.
const RESETS: u32 = 1000;
const USAGE: &str = "could not read the arguments; try: emulated same IMAGE | emulated report IMAGE LEGWISE | \
                     emulated link IMAGE [SECONDS] | emulated resets IMAGE [COUNT]";

fn main() -> ExitCode {
    let arguments: Vec<_> = std::env::args().skip(1).collect();
    let outcome = match arguments.iter().map(String::as_str).collect::<Vec<_>>()[..] {
        ["same", image] => same::same(Path::new(image)),
        ["report", image, legwise] => report::report(Path::new(image), Path::new(legwise)),
        ["link", image] => link::link(Path::new(image), LINK_SECONDS),
        ["link", image, seconds] => number(seconds).and_then(|seconds| link::link(Path::new(image), seconds)),
        ["resets", image] => resets::resets(Path::new(image), RESETS),
        ["resets", image, count] => number(count).and_then(|count| resets::resets(Path::new(image), count)),
        _ => Err(USAGE.into()),
    };
    match outcome {
        Ok(()) => ExitCode::SUCCESS,
        Err(message) => {
            eprintln!("{message}");
            ExitCode::FAILURE
        }
    }
}

type Outcome<T> = Result<T, String>;

fn number<T: std::str::FromStr>(argument: &str) -> Outcome<T> {
    argument.parse().map_err(|_| USAGE.into())
}

fn text(error: impl std::fmt::Display) -> String {
    error.to_string()
}
