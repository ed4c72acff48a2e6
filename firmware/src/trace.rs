//! Log lines for whoever brings up a board: through `defmt` with the feature of that name, else nothing.
//!
//! | level | line |
//! |---|---|
//! | error | source, link or alarm pin failed |
//! | warn | storm, gap, kept messages given up, command refused or unknown |
//! | info | settings in force, also when introduced; excursion closed, unless a storm takes it in; command obeyed; end |
//! | debug | excursion begun, acknowledgement |
//!
//! Levels are chosen when the image is built (`DEFMT_LOG=info`; errors only without it). A line is made
//! where a record is made, a command obeyed, an excursion begun, never per sample; but at `debug` every
//! excursion of a storm has one, and an error comes again with every step that fails. Lines change no
//! record: the log is for the bench, what counts travels in messages. `.ci/board logs` shows it.

use crate::monitor::StepError;
use core::fmt::Debug;
use legwise_protocol::command::Command;
use legwise_protocol::message::{Loss, Message, Outcome};

/// A log line, or nothing; its values are looked at either way, so that both builds know them as used.
macro_rules! say {
    ($level:ident, $text:literal $(, $value:expr)* $(,)?) => {{
        #[cfg(feature = "defmt")]
        defmt::$level!($text $(, $value)*);
        #[cfg(not(feature = "defmt"))]
        { $(let _ = &$value;)* }
    }};
}

/// A record as it goes to the outbox.
#[inline]
pub(crate) fn record(message: &Message, sample: u64) {
    match message {
        Message::Settings(settings) => say!(info, "sample {}: settings {}", sample, settings),
        Message::Excursion(excursion) => {
            say!(info, "sample {}: excursion {} closed: {}", sample, excursion.number, excursion);
        }
        Message::Storm(storm) => say!(warn, "sample {}: storm: {}", sample, storm),
        Message::Gap(gap) => say!(warn, "sample {}: gap: {}", sample, gap),
        Message::End(end) => say!(info, "sample {}: end: {}", sample, end.cause),
        Message::Rate(change) => say!(info, "sample {}: rate {}", sample, change),
        Message::Hello(_)
        | Message::Summary(_)
        | Message::Snippet(_)
        | Message::Levels(_)
        | Message::Spectrum(_)
        | Message::Spectra(_)
        | Message::Totals(_)
        | Message::Loss(_)
        | Message::Reply(_) => {}
    }
}

/// An excursion began.
#[inline]
pub(crate) fn begun(number: u64, sample: u64) {
    say!(debug, "sample {}: excursion {} begun", sample, number);
}

/// The outbox gave up kept messages; counts since the start.
#[inline]
pub(crate) fn loss(loss: &Loss) {
    say!(warn, "kept messages given up so far: {}", loss);
}

/// What became of a request; `None` stands for a command of a later version.
#[inline]
pub(crate) fn command(sequence: u32, command: Option<&Command>, outcome: Outcome) {
    match (command, outcome) {
        (Some(command), Outcome::Done) => say!(info, "request {}: {} obeyed", sequence, command),
        (Some(command), _) => say!(warn, "request {}: {} refused: {}", sequence, command, outcome),
        (None, _) => say!(warn, "request {}: unknown command", sequence),
    }
}

/// The host has stored kept messages.
#[inline]
pub(crate) fn acknowledged(through: u32) {
    say!(debug, "acknowledged through {}", through);
}

/// A step failed.
#[inline]
pub(crate) fn failure<S: Debug, L: Debug, P: Debug>(error: &StepError<S, L, P>) {
    #[cfg(feature = "defmt")]
    match error {
        StepError::Source(error) => defmt::error!("source: {}", defmt::Debug2Format(error)),
        StepError::Link(error) => defmt::error!("link: {}", defmt::Debug2Format(error)),
        StepError::Pin(error) => defmt::error!("alarm pin: {}", defmt::Debug2Format(error)),
    }
    #[cfg(not(feature = "defmt"))]
    let _ = error;
}
