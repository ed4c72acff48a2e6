//! Why a scenario cannot be simulated.

use super::network::NetworkError;
use thiserror::Error;

/// Why a scenario cannot be simulated. Every message ends with what to try.
#[derive(Clone, Debug, PartialEq, Error)]
pub enum ScenarioError {
    /// Not TOML, or not these keys.
    #[error(
        "could not read the scenario: {message}\ntry correcting the key or value marked above, or start from a built-in scenario"
    )]
    Syntax {
        /// What the TOML reader says, with line and column.
        message: String,
    },
    /// A value that cannot be used.
    #[error("could not use `{key} = {value}`: {reason}; try {remedy}")]
    Value {
        /// The key, with its path.
        key: String,
        /// The value given.
        value: String,
        /// What is wrong with it.
        reason: String,
        /// What to try.
        remedy: String,
    },
    /// The pair has no electrical solution.
    #[error(transparent)]
    Network(#[from] NetworkError),
}

impl ScenarioError {
    /// A [`ScenarioError::Value`].
    pub(crate) fn value(
        key: impl Into<String>,
        value: impl ToString,
        reason: impl Into<String>,
        remedy: impl Into<String>,
    ) -> Self {
        Self::Value {
            key: key.into(),
            value: value.to_string(),
            reason: reason.into(),
            remedy: remedy.into(),
        }
    }
}
