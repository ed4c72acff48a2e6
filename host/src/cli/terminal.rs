//! What goes to the screen: colours only where a person looks, progress that leaves no trace.

use crate::report::text::Style;
use indicatif::{ProgressBar, ProgressDrawTarget, ProgressStyle};
use std::io::{self, IsTerminal, Write};
use std::time::Duration;

/// Colours when standard output is a terminal and NO_COLOR is not set.
pub fn style() -> Style {
    let is_refused = std::env::var_os("NO_COLOR").is_some_and(|value| !value.is_empty());
    let is_plain = std::env::var_os("TERM").is_some_and(|value| value == "dumb");
    Style { has_colour: io::stdout().is_terminal() && !is_refused && !is_plain }
}

/// Writes text and a line end to standard output.
///
/// # Errors
/// When the reader has gone.
pub fn print(text: &str) -> io::Result<()> {
    let mut out = io::stdout().lock();
    out.write_all(text.as_bytes())?;
    if !text.ends_with('\n') {
        out.write_all(b"\n")?;
    }
    out.flush()
}

/// Tells on the error output what to mind about a result.
pub fn warn(text: &str) {
    // Nothing can be done when even the error output is closed.
    let _ = io::stderr().write_all(format!("legwise: mind: {text}\n").as_bytes());
}

/// A bar over `total` units of work, on the error output; hidden when that is no terminal.
pub fn progress_bar(total: u64, unit: &str) -> ProgressBar {
    let bar = ProgressBar::with_draw_target(Some(total), ProgressDrawTarget::stderr_with_hz(8));
    let template =
        format!("{{msg}} [{{bar:30}}] {{percent}} % of {unit}, {{elapsed}} so far, about {{eta}} left");
    bar.set_style(
        ProgressStyle::with_template(&template)
            .unwrap_or_else(|_| ProgressStyle::default_bar())
            .progress_chars("#>-"),
    );
    bar
}

/// A line that tells the state of something without an end.
pub fn state_line() -> ProgressBar {
    let bar = ProgressBar::with_draw_target(None, ProgressDrawTarget::stderr_with_hz(4));
    bar.set_style(
        ProgressStyle::with_template("{elapsed_precise}  {msg}")
            .unwrap_or_else(|_| ProgressStyle::default_spinner()),
    );
    bar.enable_steady_tick(Duration::from_millis(500));
    bar
}

/// Prints a line to standard output above a bar.
///
/// # Errors
/// When the reader has gone.
pub fn print_above(bar: &ProgressBar, line: &str) -> io::Result<()> {
    bar.suspend(|| print(line))
}
