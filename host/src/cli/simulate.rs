//! `simulate`: a scenario to a recording.

use super::failure::{Exit, UsageError};
use super::{SimulateArguments, terminal};
use crate::line::{Length, LineSource, Scenario, ScenarioError, scenarios};
use crate::recording;
use crate::report::figures;
use std::path::Path;

pub(super) fn run(arguments: &SimulateArguments) -> anyhow::Result<Exit> {
    if arguments.scenario == "list" {
        return list();
    }
    if arguments.print {
        terminal::print(&source_text(&arguments.scenario)?)?;
        return Ok(Exit::Done);
    }
    let scenario = load(&arguments.scenario)?;
    let output = arguments.output.as_deref().ok_or(UsageError::NoOutput)?;
    let rate_hz = scenario.sample_rate_hz;
    let pairs = pairs_in(arguments.seconds, rate_hz)?;
    let mut source = LineSource::new(&scenario, arguments.seed, Length::Pairs(pairs))?;
    let about = recording::WriteOptions {
        origin: Some(format!("simulated: {}, seed {}", scenario.title, arguments.seed)),
        receiver: Some(scenario.receiver.clone()),
        pairs: Some(pairs),
        ..recording::WriteOptions::default()
    };
    let written = recording::write(output, &mut source, &about)?;
    terminal::print(&format!(
        "{}: {} pairs at {} ({})",
        output.display(),
        figures::count(written.pairs),
        figures::pair_rate(rate_hz),
        figures::span(written.pairs as f64 / rate_hz),
    ))?;
    Ok(Exit::Done)
}

/// Prints the built-in scenarios.
pub(super) fn list() -> anyhow::Result<Exit> {
    for (name, line) in scenarios::NAMES {
        terminal::print(&format!("{name:<18} {line}"))?;
    }
    Ok(Exit::Done)
}

/// A scenario by name, or from a file.
pub(super) fn load(name: &str) -> Result<Scenario, ScenarioError> {
    match scenarios::by_name(name) {
        Some(scenario) => Ok(scenario),
        None => Scenario::from_toml(&source_text(name)?),
    }
}

/// Pairs in a stretch of time.
pub(super) fn pairs_in(seconds: f64, rate_hz: f64) -> Result<u64, UsageError> {
    let pairs = seconds * rate_hz;
    if (1.0..1e15).contains(&pairs) { Ok(pairs.round() as u64) } else { Err(UsageError::Length { seconds }) }
}

fn source_text(name: &str) -> Result<String, ScenarioError> {
    if let Some(text) = scenarios::text_of(&name.to_ascii_lowercase()) {
        return Ok(text.to_owned());
    }
    let path = Path::new(name);
    std::fs::read_to_string(path).map_err(|error| {
        let remedy = "'legwise simulate list' for the built-in ones, or the path of a TOML file";
        ScenarioError::value(
            "scenario",
            name,
            format!("no built-in scenario and no readable file ({error})"),
            remedy,
        )
    })
}
