//! What to watch for: a receiver of the table, or windows the user brings, as device settings.

use legwise_firmware::settings;
use legwise_protocol::limits::{LimitSet, Window};
use legwise_protocol::message::Settings;
use legwise_protocol::receivers::{self, Receiver, ReceiverId, TABLE};
use legwise_protocol::units::Microvolts;
use std::str::FromStr;

/// Excursions reported one by one per second when no slow link stands between: nearly all.
const STORM_AFTER_ON_DESKTOP: u32 = 65_535;
/// Waveforms kept per second when no slow link stands between.
const SNIPPETS_ON_DESKTOP: u16 = 8;

/// The limits of a monitoring run.
#[derive(Clone, Copy, Debug)]
pub enum Watching {
    /// A row of the table.
    Receiver(&'static Receiver),
    /// The user's own windows.
    Own(LimitSet),
}

/// Why limits could not be taken.
#[derive(Debug, Clone, PartialEq, Eq, thiserror::Error)]
pub enum WatchingError {
    /// No such receiver.
    #[error("could not find receiver '{0}'; try one of: {known}", known = receiver_names())]
    UnknownReceiver(String),
    /// A window that is not two numbers.
    #[error("could not read the window '{0}'; try two voltages in volts, lowest first, such as -7,12")]
    BadWindow(String),
}

impl Watching {
    /// The receiver named; TIA-485-A when none is.
    ///
    /// # Errors
    /// When the table has no such name.
    pub fn named(name: Option<&str>) -> Result<Self, WatchingError> {
        let name = name.unwrap_or(TABLE[0].name);
        receivers::by_name(name)
            .map(Self::Receiver)
            .ok_or_else(|| WatchingError::UnknownReceiver(name.to_owned()))
    }

    /// Own windows where any is given, else the receiver named.
    ///
    /// # Errors
    /// When the table has no such name.
    pub fn choose(
        name: Option<&str>,
        terminal: Option<OwnWindow>,
        average: Option<OwnWindow>,
    ) -> Result<Self, WatchingError> {
        if terminal.is_none() && average.is_none() {
            return Self::named(name);
        }
        Ok(Self::Own(LimitSet { terminal: terminal.map(|own| own.0), average: average.map(|own| own.0) }))
    }

    /// Device settings for a link that is slow: the firmware's own defaults.
    pub fn settings(&self, sample_rate_mhz: u64) -> Settings {
        match self {
            Self::Receiver(receiver) => settings::for_receiver(receiver, sample_rate_mhz),
            Self::Own(limits) => settings::for_limits(*limits, sample_rate_mhz),
        }
    }

    /// Device settings for a board that runs on this machine: the same checks, fewer things left out.
    pub fn desktop_settings(&self, sample_rate_mhz: u64) -> Settings {
        let mut settings = self.settings(sample_rate_mhz);
        settings.detection.storm_after = STORM_AFTER_ON_DESKTOP;
        settings.reporting.snippets_per_window = SNIPPETS_ON_DESKTOP;
        settings
    }

    /// The wire's number and windows, for the command to a board.
    pub const fn on_wire(&self) -> (ReceiverId, LimitSet) {
        match self {
            Self::Receiver(receiver) => (receiver.id, receiver.limits()),
            Self::Own(limits) => (ReceiverId::Custom, *limits),
        }
    }
}

/// A window typed as `LOW,HIGH` in volts.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct OwnWindow(Window);

impl FromStr for OwnWindow {
    type Err = WatchingError;

    fn from_str(text: &str) -> Result<Self, WatchingError> {
        let volts = |text: &str| text.trim().parse().ok().and_then(Microvolts::try_from_volts);
        let window = text
            .split_once(',')
            .and_then(|(low, high)| Some(Window { low: volts(low)?, high: volts(high)? }));
        match window {
            // A millivolt is the narrowest window the hysteresis can work in.
            Some(window) if window.width_uv() >= 1000 => Ok(Self(window)),
            _ => Err(WatchingError::BadWindow(text.to_owned())),
        }
    }
}

fn receiver_names() -> String {
    TABLE.iter().map(|receiver| receiver.name).collect::<Vec<_>>().join(", ")
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_default_is_tia_485_a_judged_both_ways() {
        let Ok(Watching::Receiver(receiver)) = Watching::named(None) else { panic!("no default") };
        assert_eq!(receiver.name, "tia485a");
        assert!(receiver.terminal.is_some() && receiver.average.is_some());
    }

    #[test]
    fn own_windows_are_read_in_volts_and_must_be_in_order() {
        assert_eq!("-7, 12".parse(), Ok(OwnWindow(Window::from_millivolts(-7_000, 12_000))));
        for bad in ["12,-7", "7", "a,b", "1,NaN", "0,0.0001", "0,2000"] {
            assert!(bad.parse::<OwnWindow>().is_err(), "{bad}");
        }
    }

    #[test]
    fn an_unknown_receiver_lists_the_known_ones() {
        let message = Watching::named(Some("rs999")).map(|_| ()).unwrap_err().to_string();
        assert!(message.contains("'rs999'") && message.contains("can-2003"), "{message}");
    }
}
