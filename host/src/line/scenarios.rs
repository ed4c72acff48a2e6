//! Scenarios that come with the program, all invented. Files: `host/scenarios/*.toml`.

use super::scenario::Scenario;

macro_rules! built_in {
    ($($name:literal: $line:literal),+ $(,)?) => {
        /// Name and one line about each built-in scenario.
        pub const NAMES: &[(&str, &str)] = &[$(($name, $line)),+];

        /// TOML text of a built-in scenario: a start for one's own.
        pub fn text_of(name: &str) -> Option<&'static str> {
            match name {
                $($name => Some(include_str!(concat!("../../scenarios/", $name, ".toml"))),)+
                _ => None,
            }
        }
    };
}

built_in! {
    "quiet-night": "five nodes, nothing wrong: everything stays inside its limits",
    "lost-replies": "one slave never answers and the master stalls; nothing electrical is wrong",
    "press-ground": "the press's ground rises while it runs; its messages leave the receiver's window",
    "drive-bay": "a drive's PWM in the common mode, with enough imbalance to reach the data",
    "contactor": "a contactor without suppressor sends showers of pulses onto both legs",
    "no-bias": "nobody biases the idle pair: it rests below 200 mV",
    "one-terminator": "the far terminator is missing: idle level twice what it should be",
    "charger": "a charger brings its switching line and mains hum onto the pair",
    "radio": "a hand-held radio near one node shifts both legs while someone talks",
    "can-weak-ground": "a CAN node's ground lifts under load and carries the pair with it",
    "tied-legs": "no bus: both legs on one generator, to measure what the monitor itself converts",
}

/// A built-in scenario by its name, case ignored.
pub fn by_name(name: &str) -> Option<Scenario> {
    text_of(&name.to_ascii_lowercase()).and_then(|text| Scenario::from_toml(text).ok())
}

#[cfg(test)]
mod tests;
