//! What was recorded and how much of the time was examined: runs, gaps, link, messages given up.

use super::ReportError;
use super::account::Account;
use super::model::{Coverage, GapPart, GivenUp, LinkAccount, Recording, RunPart};
use super::runs::{Run, count};
use super::times::Calendar;
use rusqlite::{Connection, OptionalExtension};

/// Gap rows of one run, added up.
#[derive(Clone, Copy, Debug, Default)]
struct GapSum {
    rows: u64,
    samples: u64,
    of_unknown_length: u64,
}

/// The part of the report on what was recorded.
pub(crate) fn recording(
    connection: &Connection,
    account: &Account,
    runs: &[Run],
    calendar: &Calendar<'_>,
) -> Result<Recording, ReportError> {
    let info = |key: &str| {
        let mut statement = connection.prepare_cached("SELECT value FROM info WHERE key = ?1")?;
        let value = statement.query_row([key], |row| row.get::<_, String>(0)).optional()?;
        Ok::<_, ReportError>(value.filter(|value| !value.trim().is_empty()))
    };
    let mut examined = runs.iter().filter(|run| run.pairs() > 0);
    let first = examined.next();
    let last = examined.next_back().or(first);
    Ok(Recording {
        origin: info("origin")?,
        origin_name: info("origin_name")?,
        point: info("point")?,
        created_utc: info("created_utc")?,
        pairs: account.pairs,
        sample_rate_hz: runs.iter().find_map(Run::rate_hz),
        duration_s: account.examined_s,
        clipped_samples: account.clipped,
        skew_ns: runs.iter().map(|run| run.skew_ns).max_by_key(|skew| skew.abs()).unwrap_or(0),
        is_complete: !runs.is_empty() && runs.iter().all(|run| run.end_cause.is_some()),
        started: first.map(|run| calendar.moment(run.number, run.first_sample(), 1)),
        ended: last.map(|run| calendar.moment(run.number, run.end_sample().saturating_sub(1), 1)),
        runs: runs.iter().map(run_part).collect(),
    })
}

fn run_part(run: &Run) -> RunPart {
    RunPart {
        run: run.number,
        boot_id: run.boot_id,
        board: run.board.clone(),
        firmware_version: run.firmware_version.clone(),
        reset_cause: run.reset_cause.clone(),
        pairs: run.pairs(),
        sample_rate_hz: run.rate_hz(),
        end_cause: run.end_cause.clone(),
    }
}

/// The part of the report on coverage; lists at most `limit` gaps.
pub(crate) fn read(
    connection: &Connection,
    account: &Account,
    runs: &[Run],
    calendar: &Calendar<'_>,
    limit: usize,
) -> Result<Coverage, ReportError> {
    let mut coverage = Coverage {
        share: None,
        gap_count: 0,
        gap_samples: 0,
        gap_s: Some(0.0),
        gaps_of_unknown_length: 0,
        gaps: list_gaps(connection, runs, calendar, limit)?,
        gaps_truncated: false,
        link: link(connection)?,
        given_up: given_up(connection)?,
    };
    for run in runs {
        let rows = gap_sum(connection, run.number)?;
        let totals = run.totals.unwrap_or_default();
        let samples = rows.samples.max(totals.gap_samples);
        coverage.gap_count += rows.rows.max(totals.gaps);
        coverage.gap_samples += samples;
        coverage.gaps_of_unknown_length += rows.of_unknown_length;
        let seconds = run.rate_hz().map(|rate| samples as f64 / rate);
        coverage.gap_s = coverage.gap_s.zip(seconds).map(|(sum, more)| sum + more);
    }
    for restart in restarts(runs, calendar) {
        coverage.gap_count += 1;
        match restart.length_s {
            Some(length_s) => coverage.gap_s = coverage.gap_s.map(|sum| sum + length_s),
            None => coverage.gaps_of_unknown_length += 1,
        }
        coverage.gaps.push(restart);
    }
    coverage.gaps.sort_by_key(|gap| (gap.moment.run, gap.moment.sample));
    coverage.gaps.truncate(limit);
    coverage.gaps_truncated = coverage.gap_count > coverage.gaps.len() as u64;
    let in_pairs = (account.pairs as f64, coverage.gap_samples as f64);
    let (examined, lost) = account.examined_s.zip(coverage.gap_s).unwrap_or(in_pairs);
    coverage.share = (account.pairs > 0).then(|| examined / (examined + lost));
    Ok(coverage)
}

/// The time between two runs, one entry each.
fn restarts(runs: &[Run], calendar: &Calendar<'_>) -> Vec<GapPart> {
    let examined: Vec<&Run> = runs.iter().filter(|run| run.pairs() > 0).collect();
    let pairs = examined.iter().zip(examined.iter().skip(1));
    pairs
        .map(|(before, after)| {
            let (from, to) = ((before.number, before.end_sample()), (after.number, after.first_sample()));
            GapPart {
                moment: calendar.moment(from.0, from.1, 1),
                samples: 0,
                length_s: calendar.seconds_between(from, to).map(|length_s| length_s.max(0.0)),
                cause: "restart".to_string(),
            }
        })
        .collect()
}

fn gap_sum(connection: &Connection, run: i64) -> Result<GapSum, ReportError> {
    let mut statement = connection.prepare_cached(
        "SELECT count(*), coalesce(sum(samples), 0), coalesce(sum(samples = 0), 0) FROM gap WHERE run = ?1",
    )?;
    let sum = statement.query_row([run], |row| {
        Ok(GapSum { rows: count(row, 0)?, samples: count(row, 1)?, of_unknown_length: count(row, 2)? })
    })?;
    Ok(sum)
}

fn list_gaps(
    connection: &Connection,
    runs: &[Run],
    calendar: &Calendar<'_>,
    limit: usize,
) -> Result<Vec<GapPart>, ReportError> {
    let mut statement = connection
        .prepare("SELECT run, first_sample, samples, cause FROM gap ORDER BY run, number LIMIT ?1")?;
    let mut rows = statement.query([i64::try_from(limit).unwrap_or(i64::MAX)])?;
    let mut gaps = Vec::new();
    while let Some(row) = rows.next()? {
        let (run, samples) = (row.get(0)?, count(row, 2)?);
        let rate_hz = runs.iter().find(|facts| facts.number == run).and_then(Run::rate_hz);
        gaps.push(GapPart {
            moment: calendar.moment(run, count(row, 1)?, 1),
            samples,
            length_s: rate_hz.filter(|_| samples > 0).map(|rate| samples as f64 / rate),
            cause: row.get(3)?,
        });
    }
    Ok(gaps)
}

fn link(connection: &Connection) -> Result<LinkAccount, ReportError> {
    let query = "SELECT coalesce(sum(frames), 0), coalesce(sum(missing_frames), 0),
                        coalesce(sum(repeated_frames), 0), coalesce(sum(damaged_frames), 0),
                        coalesce(sum(oversize_frames), 0), coalesce(sum(unknown_frames), 0),
                        coalesce(sum(dropped_bytes), 0) FROM link";
    let account = connection.query_row(query, [], |row| {
        Ok(LinkAccount {
            frames: count(row, 0)?,
            missing_frames: count(row, 1)?,
            repeated_frames: count(row, 2)?,
            damaged_frames: count(row, 3)?,
            oversize_frames: count(row, 4)?,
            unknown_frames: count(row, 5)?,
            dropped_bytes: count(row, 6)?,
        })
    })?;
    Ok(account)
}

fn given_up(connection: &Connection) -> Result<GivenUp, ReportError> {
    let query = "SELECT coalesce(sum(snippet_parts), 0), coalesce(sum(records), 0) FROM loss";
    let given_up = connection
        .query_row(query, [], |row| Ok(GivenUp { snippet_parts: count(row, 0)?, records: count(row, 1)? }))?;
    Ok(given_up)
}
