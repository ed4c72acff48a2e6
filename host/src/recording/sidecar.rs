//! The TOML file beside a recording: what the recording itself cannot say.
//!
//! `name.csv.toml`, or else `name.toml`. Every key is optional; an unknown key is an error, so that a
//! misspelt one is not silently without effect.
//!
//! ```toml
//! sample_rate_hz = 1000000.0
//! full_scale_v = 24.0                # WAV only: volts of a full-scale sample
//! skew_ns = 0                        # leg B sampled later than leg A
//! rail_low_v = -12.0                 # a number for both legs, or [leg A, leg B]
//! rail_high_v = [11.99, 12.01]
//! gain_uncertainty_percent = 0.5     # a number or a pair
//! offset_uncertainty_v = 0.01        # a number or a pair
//! point = "cabinet 3, terminal X2"
//! receiver = "rs485"
//! origin = "bench, two probes"
//! [expected]                         # for tests; the reader passes over it
//! ```

use super::RecordingError;
use serde::de::{Error, SeqAccess, Visitor};
use serde::{Deserialize, Deserializer, Serialize};
use std::ffi::OsString;
use std::path::{Path, PathBuf};

/// One value for both legs, or one for each.
#[derive(Clone, Copy, Debug, PartialEq, Serialize)]
#[serde(untagged)]
pub enum PerLeg {
    /// The same for both legs.
    Both(f64),
    /// Leg A, leg B.
    Each([f64; 2]),
}

impl PerLeg {
    /// The two values, leg A then leg B.
    pub const fn legs(self) -> [f64; 2] {
        match self {
            Self::Both(value) => [value, value],
            Self::Each(values) => values,
        }
    }

    /// The shorter form of two values.
    pub fn from_legs(values: [f64; 2]) -> Self {
        if values[0] == values[1] { Self::Both(values[0]) } else { Self::Each(values) }
    }
}

impl<'de> Deserialize<'de> for PerLeg {
    fn deserialize<D: Deserializer<'de>>(deserializer: D) -> Result<Self, D::Error> {
        deserializer.deserialize_any(PerLegVisitor)
    }
}

/// Takes a number or a list of exactly two.
struct PerLegVisitor;

impl<'de> Visitor<'de> for PerLegVisitor {
    type Value = PerLeg;

    fn expecting(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        f.write_str("a number, or two numbers in brackets (leg A, leg B)")
    }

    fn visit_f64<E: Error>(self, value: f64) -> Result<PerLeg, E> {
        Ok(PerLeg::Both(value))
    }

    fn visit_i64<E: Error>(self, value: i64) -> Result<PerLeg, E> {
        Ok(PerLeg::Both(value as f64))
    }

    fn visit_seq<A: SeqAccess<'de>>(self, mut values: A) -> Result<PerLeg, A::Error> {
        let (a, b) = (values.next_element()?, values.next_element()?);
        match (a, b, values.next_element::<f64>()?) {
            (Some(a), Some(b), None) => Ok(PerLeg::Each([a, b])),
            _ => Err(A::Error::custom("there must be two numbers in brackets (leg A, leg B)")),
        }
    }
}

/// Content of the file beside a recording. Units are in the names.
#[derive(Clone, Debug, Default, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
#[expect(missing_docs, reason = "the keys are described in the file's head")]
pub struct Sidecar {
    #[serde(skip_serializing_if = "Option::is_none")]
    pub sample_rate_hz: Option<f64>,
    #[serde(skip_serializing_if = "Option::is_none")]
    pub full_scale_v: Option<f64>,
    #[serde(skip_serializing_if = "Option::is_none")]
    pub skew_ns: Option<i32>,
    #[serde(skip_serializing_if = "Option::is_none")]
    pub rail_low_v: Option<PerLeg>,
    #[serde(skip_serializing_if = "Option::is_none")]
    pub rail_high_v: Option<PerLeg>,
    #[serde(skip_serializing_if = "Option::is_none")]
    pub gain_uncertainty_percent: Option<PerLeg>,
    #[serde(skip_serializing_if = "Option::is_none")]
    pub offset_uncertainty_v: Option<PerLeg>,
    #[serde(skip_serializing_if = "Option::is_none")]
    pub point: Option<String>,
    #[serde(skip_serializing_if = "Option::is_none")]
    pub receiver: Option<String>,
    #[serde(skip_serializing_if = "Option::is_none")]
    pub origin: Option<String>,
    #[serde(skip_serializing_if = "Option::is_none")]
    pub expected: Option<toml::Table>,
}

impl Sidecar {
    /// Where the sidecar of `recording` is written: the name with `.toml` appended.
    pub fn path_of(recording: &Path) -> PathBuf {
        with_suffix(recording, ".toml")
    }

    /// Reads the sidecar of `recording`; an empty one where there is none.
    ///
    /// # Errors
    /// When a sidecar exists but cannot be read or holds unknown keys or values of a wrong type.
    pub fn load(recording: &Path) -> Result<Self, RecordingError> {
        for path in [Self::path_of(recording), recording.with_extension("toml")] {
            if path == recording || !path.is_file() {
                continue;
            }
            let text =
                std::fs::read_to_string(&path).map_err(|error| RecordingError::from_io(&path, error))?;
            return toml::from_str(&text)
                .map_err(|source| RecordingError::Sidecar { path, source: Box::new(source) });
        }
        Ok(Self::default())
    }

    /// The file as text.
    ///
    /// # Errors
    /// When `expected` holds something TOML cannot write.
    pub fn to_text(&self) -> Result<String, toml::ser::Error> {
        toml::to_string(self)
    }
}

/// `path` with `suffix` appended to its name.
pub(crate) fn with_suffix(path: &Path, suffix: &str) -> PathBuf {
    let mut name = OsString::from(path.as_os_str());
    name.push(suffix);
    PathBuf::from(name)
}
