//! The report as JSON. Keys, types and units: `SCHEMA.md` beside this file, compared by a test.

use super::Report;
use serde_json::Value;

/// The report as a JSON value.
///
/// # Errors
/// None is expected: the model holds nothing JSON cannot say. Numbers that are not finite become `null`.
pub fn value(report: &Report) -> Result<Value, serde_json::Error> {
    serde_json::to_value(report)
}

/// The report as indented JSON text with a newline at its end.
///
/// # Errors
/// As [`value`].
pub fn render(report: &Report) -> Result<String, serde_json::Error> {
    let mut text = serde_json::to_string_pretty(report)?;
    text.push('\n');
    Ok(text)
}
