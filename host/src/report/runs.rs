//! Reads what each run says of itself: board, scales, settings, totals, and the summaries that came
//! after the last totals.
//!
//! A log that was cut off ends with totals that are up to one levels interval old; the summaries
//! past them are added, so that the account is as complete as the log.

use super::ReportError;
use crate::log::Log;
use crate::log::clock::RunClock;
use legwise_protocol::message::{LegScale, Settings, Totals};
use rusqlite::{Connection, Row};
use serde::de::DeserializeOwned;

/// One start of the device.
pub(crate) struct Run {
    pub number: i64,
    pub boot_id: i64,
    pub board: Option<String>,
    pub firmware_version: Option<String>,
    pub reset_cause: Option<String>,
    pub rate_mhz: Option<u64>,
    pub skew_ns: i64,
    pub legs: Option<[LegScale; 2]>,
    /// In force from the sample on, in order.
    pub settings: Vec<(u64, Settings)>,
    pub totals: Option<Totals>,
    pub end_cause: Option<String>,
    /// Readings the totals do not hold.
    pub tail: Tail,
    pub clock: Option<RunClock>,
}

/// Summaries that began after the last totals were taken. Extremes as (value, first sample, length).
#[derive(Clone, Debug, Default)]
pub(crate) struct Tail {
    pub pairs: u64,
    pub clipped: u64,
    pub outside: u64,
    pub first_sample: u64,
    pub end_sample: u64,
    /// Low and high of leg A, leg B, twice CM, DM.
    pub extremes: [[Option<TailExtreme>; 2]; 4],
}

/// An extreme of which only the interval is known.
#[derive(Clone, Copy, Debug)]
pub(crate) struct TailExtreme {
    pub value: i64,
    pub first_sample: u64,
    pub samples: u64,
}

impl Run {
    /// Pairs per second.
    pub(crate) fn rate_hz(&self) -> Option<f64> {
        self.rate_mhz.map(|rate| rate as f64 / 1000.0)
    }

    /// Pairs examined.
    pub(crate) fn pairs(&self) -> u64 {
        self.totals.map_or(0, |totals| totals.samples) + self.tail.pairs
    }

    /// First pair examined.
    pub(crate) fn first_sample(&self) -> u64 {
        self.totals.map_or(self.tail.first_sample, |totals| totals.first_sample)
    }

    /// One past the last pair known of.
    pub(crate) fn end_sample(&self) -> u64 {
        let of_totals =
            self.totals.map_or(0, |totals| totals.first_sample + totals.samples + totals.gap_samples);
        of_totals.max(self.tail.end_sample)
    }

    /// The settings in force at `sample`.
    pub(crate) fn settings_at(&self, sample: u64) -> Option<&Settings> {
        let in_force = self.settings.iter().rev().find(|(from, _)| *from <= sample);
        in_force.or(self.settings.first()).map(|(_, settings)| settings)
    }
}

/// Reads all runs in order.
pub(crate) fn load(log: &Log) -> Result<Vec<Run>, ReportError> {
    let connection = log.connection();
    let mut statement = connection.prepare(
        "SELECT run, boot_id, board, firmware_version, reset_cause, sample_rate_mhz, skew_ns, legs
         FROM run ORDER BY run",
    )?;
    let mut rows = statement.query([])?;
    let mut runs = Vec::new();
    while let Some(row) = rows.next()? {
        let number: i64 = row.get(0)?;
        let (totals, totals_sample, end_cause) = totals(connection, number)?;
        runs.push(Run {
            number,
            boot_id: row.get(1)?,
            board: row.get(2)?,
            firmware_version: row.get(3)?,
            reset_cause: row.get(4)?,
            rate_mhz: row.get::<_, Option<i64>>(5)?.filter(|&rate| rate > 0).map(i64::unsigned_abs),
            skew_ns: row.get::<_, Option<i64>>(6)?.unwrap_or(0),
            legs: row.get::<_, Option<String>>(7)?.map(|legs| parse(&legs, "run", "legs")).transpose()?,
            settings: settings(connection, number)?,
            totals,
            end_cause,
            tail: tail(connection, number, totals_sample)?,
            clock: RunClock::load(log, number)?,
        });
    }
    Ok(runs)
}

fn settings(connection: &Connection, run: i64) -> Result<Vec<(u64, Settings)>, ReportError> {
    let mut statement =
        connection.prepare("SELECT sample, settings FROM settings WHERE run = ?1 ORDER BY sample, number")?;
    let mut rows = statement.query([run])?;
    let mut list = Vec::new();
    while let Some(row) = rows.next()? {
        let text: String = row.get(1)?;
        list.push((count(row, 0)?, parse(&text, "settings", "settings")?));
    }
    Ok(list)
}

fn totals(connection: &Connection, run: i64) -> Result<(Option<Totals>, u64, Option<String>), ReportError> {
    let mut statement = connection.prepare("SELECT sample, totals, end_cause FROM totals WHERE run = ?1")?;
    let mut rows = statement.query([run])?;
    let Some(row) = rows.next()? else {
        return Ok((None, 0, None));
    };
    let text: String = row.get(1)?;
    Ok((Some(parse(&text, "totals", "totals")?), count(row, 0)?, row.get(2)?))
}

/// Adds up the summaries of `run` that begin at `from` or later.
fn tail(connection: &Connection, run: i64, from: u64) -> Result<Tail, ReportError> {
    const COLUMNS: [[&str; 2]; 4] = [
        ["leg_a_low_uv", "leg_a_high_uv"],
        ["leg_b_low_uv", "leg_b_high_uv"],
        ["cm_low_twice_uv", "cm_high_twice_uv"],
        ["dm_low_uv", "dm_high_uv"],
    ];
    let from = i64::try_from(from).unwrap_or(i64::MAX);
    let mut tail = connection.query_row(
        "SELECT coalesce(sum(samples), 0), coalesce(sum(clipped), 0), coalesce(sum(outside), 0),
                coalesce(min(first_sample), 0), coalesce(max(first_sample + samples), 0)
         FROM summary WHERE run = ?1 AND first_sample >= ?2",
        [run, from],
        |row| {
            Ok(Tail {
                pairs: count(row, 0)?,
                clipped: count(row, 1)?,
                outside: count(row, 2)?,
                first_sample: count(row, 3)?,
                end_sample: count(row, 4)?,
                extremes: Default::default(),
            })
        },
    )?;
    if tail.pairs == 0 {
        return Ok(tail);
    }
    for (slots, columns) in tail.extremes.iter_mut().zip(COLUMNS) {
        for ((slot, column), order) in slots.iter_mut().zip(columns).zip(["ASC", "DESC"]) {
            let query = format!(
                "SELECT {column}, first_sample, samples FROM summary
                 WHERE run = ?1 AND first_sample >= ?2 AND samples > 0 AND {column} IS NOT NULL
                 ORDER BY {column} {order}, first_sample LIMIT 1"
            );
            let mut statement = connection.prepare(&query)?;
            let mut rows = statement.query([run, from])?;
            if let Some(row) = rows.next()? {
                let value = row.get(0)?;
                *slot = Some(TailExtreme { value, first_sample: count(row, 1)?, samples: count(row, 2)? });
            }
        }
    }
    Ok(tail)
}

/// A column that holds a count or a sample index: never negative.
pub(crate) fn count(row: &Row<'_>, column: usize) -> rusqlite::Result<u64> {
    Ok(row.get::<_, i64>(column)?.max(0).unsigned_abs())
}

fn parse<T: DeserializeOwned>(
    text: &str,
    table: &'static str,
    column: &'static str,
) -> Result<T, ReportError> {
    serde_json::from_str(text).map_err(|error| ReportError::Content {
        table,
        column,
        reason: error.to_string(),
    })
}
