//! What a log says: verdict, margins, excursions, levels, sources of disturbance, and what could not be seen.
//!
//! Everything is computed from the stored tables, so that a report can be made again, years later,
//! and says the same. [`Report::from_log`] computes; [`text::render`] draws for a terminal and
//! [`json::render`] writes for programs (keys in `SCHEMA.md`). Rules of the verdict: [`verdict`].
//!
//! ```text
//!  tables ─ runs ─┬─ account ──┐
//!                 ├─ excursions ┼─ margins ─ verdict ─ reason ─┐
//!                 ├─ coverage ──┘                              ├─ Report ─ text | json
//!                 ├─ levels (bias) · blind ─────────────────────┤
//!                 └─ averages ─ lines · sources · conversion ───┘
//! ```

use crate::log::{Log, LogError};
use crate::spectrum::conversion::ConversionFloor;
use jiff::tz::TimeZone;
use rusqlite::Connection;

mod account;
mod averages;
mod bias;
mod blind;
mod conversion;
mod coverage;
mod evidence;
mod excursions;
pub mod figures;
pub mod json;
mod levels;
mod lines;
mod margins;
pub mod model;
mod reason;
mod runs;
mod sources;
pub mod text;
mod times;
pub mod verdict;

pub use model::Report;
pub use verdict::Verdict;

use times::Calendar;

/// How a report is made.
#[derive(Clone, Debug)]
pub struct Options {
    /// Excursions and gaps listed at most, each.
    pub list_limit: usize,
    /// Zone of local times.
    pub zone: TimeZone,
    /// The board's own conversion, where it was measured: nothing below it is claimed.
    pub floor: Option<ConversionFloor>,
}

impl Default for Options {
    /// 10 000 entries; the zone of this computer; the board's own conversion not known.
    fn default() -> Self {
        Self { list_limit: 10_000, zone: TimeZone::system(), floor: None }
    }
}

/// Why a report could not be made.
#[derive(Debug, thiserror::Error)]
pub enum ReportError {
    /// The log could not be read.
    #[error(transparent)]
    Log(#[from] LogError),
    /// A table could not be read.
    #[error(
        "could not read the log's tables ({0}); try a copy of the file, and check that it is a log of this version"
    )]
    Table(#[from] rusqlite::Error),
    /// A stored description could not be understood.
    #[error(
        "could not understand column {column} of table {table} ({reason}); try the version of this tool that wrote the log"
    )]
    Content {
        /// Table it is in.
        table: &'static str,
        /// Column it is in.
        column: &'static str,
        /// What is wrong with it.
        reason: String,
    },
}

impl Report {
    /// Computes the report of `log`.
    ///
    /// # Errors
    /// When the log cannot be read or holds what this version does not understand.
    pub fn from_log(log: &Log, options: &Options) -> Result<Self, ReportError> {
        assemble(log, options)
    }
}

/// Puts the report together.
fn assemble(log: &Log, options: &Options) -> Result<Report, ReportError> {
    let connection = log.connection();
    let runs = runs::load(log)?;
    let calendar = Calendar::new(&runs, options.zone.clone());
    let tally = excursions::read(connection, &runs, &calendar, options.list_limit)?;
    let account = account::Account::of(&runs, &tally);
    let rules = margins::Rules::of(&runs);
    let margins = margins::judge(&rules, &account, &runs, &calendar);
    let coverage = coverage::read(connection, &account, &runs, &calendar, options.list_limit)?;
    let recording = coverage::recording(connection, &account, &runs, &calendar)?;
    let reason = reason::sentence(&margins, &account, &rules);
    let levels = levels::read(connection, rules.receiver)?;
    let spectrum = spectrum(connection, &runs, &calendar, options)?;
    let blind = blind::statements(&recording, &coverage, &margins, &spectrum);
    Ok(Report {
        schema: model::SCHEMA,
        tool_version: env!("CARGO_PKG_VERSION"),
        verdict: margins.ground.verdict(),
        reason,
        recording,
        coverage,
        receiver: margins::receiver_used(&rules),
        converter: margins.converter,
        worst: margins.worst,
        margins: margins.table,
        judged: margins.judged,
        excursions: account.excursions(tally),
        levels,
        spectrum,
        blind,
        cautions: blind::CAUTIONS.to_vec(),
    })
}

/// The spectral part.
fn spectrum(
    connection: &Connection,
    runs: &[runs::Run],
    calendar: &Calendar<'_>,
    options: &Options,
) -> Result<model::Spectra, ReportError> {
    let averages = averages::read(connection, runs)?;
    let mut modes = if averages.is_single() {
        lines::of_single(&averages.single)
    } else {
        lines::of_ladder(&averages.together)
    };
    let (sources, sources_not_listed) = sources::read(connection, &averages, calendar, options.list_limit)?;
    for mode in [&mut modes.common, &mut modes.differential].into_iter().flatten() {
        lines::mark_aliases(mode, &sources);
    }
    let skew_ns = runs.iter().map(|run| run.skew_ns).max_by_key(|skew| skew.abs()).unwrap_or(0);
    let [conversion, driver_imbalance] = conversion::read(&averages, skew_ns, options.floor.as_ref());
    Ok(model::Spectra {
        common: modes.common,
        differential: modes.differential,
        left_out: averages.left_out,
        second_rate_hz: averages.second_rate_hz,
        sources,
        sources_not_listed,
        conversion,
        driver_imbalance,
    })
}

#[cfg(test)]
mod tests;
