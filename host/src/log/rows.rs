//! One function per table: a message to its row (`schema.sql`).
//!
//! Kept messages use `INSERT OR IGNORE` on (run, number): a re-sent one changes nothing. Passing ones
//! replace a row of the same interval. Unsigned 64-bit counts beyond `i64::MAX` (an SQLite integer)
//! are stored as `i64::MAX`; a sample counter gets there after 292 000 years at 1 MS/s.

use legwise_protocol::message::{
    EndCause, Excursion, Gap, GapCause, Hello, Levels, Loss, Mode, Part, RateChange, ResetCause, SegmentSet,
    Settings, SnippetPart, SpectraPart, SpectrumPart, Storm, Summary, Totals,
};
use legwise_protocol::receivers::{self, ReceiverId};
use legwise_protocol::units::Span;
use rusqlite::{Connection, Error, Params, Result, params};
use serde::Serialize;

/// An SQLite integer, saturated.
pub(super) fn int(value: u64) -> i64 {
    i64::try_from(value).unwrap_or(i64::MAX)
}

fn execute(connection: &Connection, sql: &str, values: impl Params) -> Result<usize> {
    connection.prepare_cached(sql)?.execute(values)
}

fn json(value: &impl Serialize) -> Result<String> {
    serde_json::to_string(value).map_err(|error| Error::ToSqlConversionFailure(Box::new(error)))
}

fn low(span: Span) -> Option<i32> {
    (!span.is_empty()).then_some(span.low)
}

fn high(span: Span) -> Option<i32> {
    (!span.is_empty()).then_some(span.high)
}

/// The name the log and its exports use for a receiver.
pub(super) fn receiver_name(id: ReceiverId) -> &'static str {
    receivers::by_id(id).map_or("custom", |receiver| receiver.name)
}

fn reset_cause(cause: ResetCause) -> &'static str {
    match cause {
        ResetCause::Unknown => "unknown",
        ResetCause::PowerOn => "power-on",
        ResetCause::Pin => "pin",
        ResetCause::Watchdog => "watchdog",
        ResetCause::BrownOut => "brown-out",
        ResetCause::Software => "software",
    }
}

fn gap_cause(cause: GapCause) -> &'static str {
    match cause {
        GapCause::Overrun => "overrun",
        GapCause::Skipped => "skipped",
        GapCause::Stopped => "stopped",
        GapCause::Resynchronised => "resynchronised",
    }
}

pub(super) fn new_run(connection: &Connection, boot_id: u32) -> Result<i64> {
    execute(connection, "INSERT INTO run (boot_id) VALUES (?)", params![boot_id])?;
    Ok(connection.last_insert_rowid())
}

pub(super) fn hello(connection: &Connection, run: i64, hello: &Hello) -> Result<usize> {
    let (major, minor, patch) = hello.firmware_version;
    let serial = (hello.serial != 0).then(|| hello.serial.to_string());
    execute(
        connection,
        "UPDATE run SET wire_version = ?2, firmware_version = ?3, board = ?4, serial = ?5, reset_cause = \
         ?6, sample_rate_mhz = ?7, skew_ns = ?8, legs = ?9 WHERE run = ?1",
        params![
            run,
            hello.wire_version,
            format!("{major}.{minor}.{patch}"),
            hello.board.as_text(),
            serial,
            reset_cause(hello.reset_cause),
            int(hello.sample_rate_mhz),
            hello.skew_ns,
            json(&hello.legs)?,
        ],
    )
}

pub(super) fn settings(
    c: &Connection,
    run: i64,
    number: u32,
    sample: u64,
    settings: &Settings,
) -> Result<usize> {
    execute(
        c,
        "INSERT OR IGNORE INTO settings (run, number, sample, receiver, settings) VALUES (?, ?, ?, ?, ?)",
        params![run, number, int(sample), receiver_name(settings.receiver), json(settings)?],
    )
}

pub(super) fn clock(c: &Connection, run: i64, sample: u64, utc_ns: i64, monotonic_ns: i64) -> Result<usize> {
    execute(
        c,
        "INSERT INTO clock (run, sample, utc_ns, monotonic_ns) VALUES (?, ?, ?, ?)",
        params![run, int(sample), utc_ns, monotonic_ns],
    )
}

pub(super) fn summary(connection: &Connection, run: i64, summary: &Summary) -> Result<usize> {
    let mean = (summary.samples > 0).then_some(summary.twice_cm_mean_uv);
    execute(
        connection,
        "INSERT OR REPLACE INTO summary (run, first_sample, samples, leg_a_low_uv, leg_a_high_uv, \
         leg_b_low_uv, leg_b_high_uv, cm_low_twice_uv, cm_high_twice_uv, dm_low_uv, dm_high_uv, \
         cm_mean_twice_uv, clipped, outside, excursions, alarm) VALUES (?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?, \
         ?, ?, ?, ?, ?)",
        params![
            run,
            int(summary.first_sample),
            summary.samples,
            low(summary.leg_a),
            high(summary.leg_a),
            low(summary.leg_b),
            high(summary.leg_b),
            low(summary.twice_cm),
            high(summary.twice_cm),
            low(summary.dm),
            high(summary.dm),
            mean,
            summary.clipped,
            summary.outside,
            summary.excursions,
            summary.alarm,
        ],
    )
}

pub(super) fn excursion(
    connection: &Connection,
    run: i64,
    number: u32,
    excursion: &Excursion,
) -> Result<usize> {
    let part = match excursion.part {
        Part::Whole => 0,
        Part::Begin => 1,
        Part::Middle => 2,
        Part::Finish => 3,
    };
    let breach = &excursion.breach;
    execute(
        connection,
        "INSERT OR IGNORE INTO excursion (run, number, excursion, part, first_sample, samples, limits, \
         worst_limit, extreme_twice_uv, extreme_sample, outside_samples, area_twice_uv_samples, \
         dm_low_uv, dm_high_uv, clipped_samples, edge_suspect, cut) VALUES (?, ?, ?, ?, ?, ?, ?, ?, ?, \
         ?, ?, ?, ?, ?, ?, ?, ?)",
        params![
            run,
            number,
            int(excursion.number),
            part,
            int(excursion.first_sample),
            excursion.samples,
            breach.limits.bits(),
            breach.worst_limit as u8,
            breach.extreme_twice_uv,
            int(breach.extreme_sample),
            int(breach.outside_samples),
            int(breach.area_twice_uv_samples),
            low(breach.dm),
            high(breach.dm),
            int(breach.clipped_samples),
            excursion.is_edge_suspect,
            excursion.is_cut,
        ],
    )
}

pub(super) fn storm(connection: &Connection, run: i64, number: u32, storm: &Storm) -> Result<usize> {
    let breach = &storm.breach;
    execute(
        connection,
        "INSERT OR IGNORE INTO storm (run, number, excursions, edge_suspects, first_sample, samples, \
         limits, worst_limit, extreme_twice_uv, extreme_sample, outside_samples, area_twice_uv_samples, \
         dm_low_uv, dm_high_uv, clipped_samples) VALUES (?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?)",
        params![
            run,
            number,
            storm.excursions,
            storm.edge_suspects,
            int(storm.first_sample),
            int(storm.samples),
            breach.limits.bits(),
            breach.worst_limit as u8,
            breach.extreme_twice_uv,
            int(breach.extreme_sample),
            int(breach.outside_samples),
            int(breach.area_twice_uv_samples),
            low(breach.dm),
            high(breach.dm),
            int(breach.clipped_samples),
        ],
    )
}

pub(super) fn snippet(connection: &Connection, run: i64, number: u32, part: &SnippetPart) -> Result<usize> {
    execute(
        connection,
        "INSERT OR IGNORE INTO snippet (run, number, excursion, first_sample, samples, part, more, \
         blocks) VALUES (?, ?, ?, ?, ?, ?, ?, ?)",
        params![
            run,
            number,
            int(part.excursion),
            int(part.first_sample),
            part.samples,
            part.part,
            part.more,
            part.blocks.as_slice(),
        ],
    )
}

pub(super) fn gap(connection: &Connection, run: i64, number: u32, gap: &Gap) -> Result<usize> {
    execute(
        connection,
        "INSERT OR IGNORE INTO gap (run, number, first_sample, samples, cause) VALUES (?, ?, ?, ?, ?)",
        params![run, number, int(gap.first_sample), int(gap.samples), gap_cause(gap.cause)],
    )
}

pub(super) fn rate(connection: &Connection, run: i64, number: u32, change: &RateChange) -> Result<usize> {
    execute(
        connection,
        "INSERT OR IGNORE INTO rate (run, number, first_sample, sample_rate_mhz) VALUES (?, ?, ?, ?)",
        params![run, number, int(change.first_sample), int(change.sample_rate_mhz)],
    )
}

pub(super) fn levels(connection: &Connection, run: i64, levels: &Levels) -> Result<usize> {
    let [idle, high, low] = [levels.idle, levels.driven_high, levels.driven_low];
    execute(
        connection,
        "INSERT OR REPLACE INTO levels (run, first_sample, samples, idle_uv, idle_samples, high_uv, \
         high_samples, low_uv, low_samples, mid_samples, cm_idle_samples, cm_idle_twice_uv, \
         cm_high_samples, cm_high_twice_uv, cm_low_samples, cm_low_twice_uv) VALUES (?, ?, ?, ?, ?, ?, \
         ?, ?, ?, ?, ?, ?, ?, ?, ?, ?)",
        params![
            run,
            int(levels.first_sample),
            levels.samples,
            idle.map(|level| level.dm_uv),
            idle.map(|level| level.samples),
            high.map(|level| level.dm_uv),
            high.map(|level| level.samples),
            low.map(|level| level.dm_uv),
            low.map(|level| level.samples),
            levels.mid_samples,
            levels.idle_cm.samples,
            levels.idle_cm.twice_cm_uv,
            levels.high_cm.samples,
            levels.high_cm.twice_cm_uv,
            levels.low_cm.samples,
            levels.low_cm.twice_cm_uv,
        ],
    )
}

/// `codes` holds the whole spectrum; `last` is its last part.
pub(super) fn spectrum(
    connection: &Connection,
    run: i64,
    last: &SpectrumPart,
    codes: &[u8],
) -> Result<usize> {
    let mode = match last.mode {
        Mode::Common => 0,
        Mode::Differential => 1,
    };
    execute(
        connection,
        "INSERT OR REPLACE INTO spectrum (run, first_sample, mode, rung, span_samples, points, segments, \
         skipped, codes) VALUES (?, ?, ?, ?, ?, ?, ?, ?, ?)",
        params![
            run,
            int(last.first_sample),
            mode,
            last.rung,
            int(last.span_samples),
            last.points,
            last.segments,
            last.skipped,
            codes,
        ],
    )
}

/// The name of a set in the log and its exports.
pub(super) const fn segment_set(set: SegmentSet) -> &'static str {
    match set {
        SegmentSet::Idle => "idle",
        SegmentSet::Driven => "driven",
    }
}

/// `codes` holds all bins; `last` is the last part.
pub(super) fn spectra(connection: &Connection, run: i64, last: &SpectraPart, codes: &[u8]) -> Result<usize> {
    execute(
        connection,
        "INSERT OR REPLACE INTO spectra (run, first_sample, span_samples, segment_set, rung, points, \
         segments, skipped, other, first_bin, codes) VALUES (?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?)",
        params![
            run,
            int(last.first_sample),
            int(last.span_samples),
            segment_set(last.set),
            last.rung,
            last.points,
            last.segments,
            last.skipped,
            last.other,
            last.from_bin,
            codes,
        ],
    )
}

/// The newest account stays; a re-sent `End` does not undo a later one.
pub(super) fn totals(
    connection: &Connection,
    run: i64,
    sample: u64,
    totals: &Totals,
    end: Option<EndCause>,
) -> Result<usize> {
    let end = end.map(|cause| match cause {
        EndCause::SourceExhausted => "exhausted",
        EndCause::Stopped => "stopped",
    });
    execute(
        connection,
        "INSERT INTO totals (run, sample, totals, end_cause) VALUES (?, ?, ?, ?) ON CONFLICT (run) DO \
         UPDATE SET end_cause = CASE WHEN excluded.sample > sample THEN excluded.end_cause ELSE \
         coalesce(excluded.end_cause, end_cause) END, sample = excluded.sample, totals = excluded.totals \
         WHERE excluded.sample >= sample",
        params![run, int(sample), json(totals)?, end],
    )
}

/// Counts only grow; an older account changes nothing.
pub(super) fn loss(connection: &Connection, run: i64, loss: &Loss) -> Result<usize> {
    execute(
        connection,
        "INSERT INTO loss (run, snippet_parts, records) VALUES (?, ?, ?) ON CONFLICT (run) DO UPDATE SET \
         snippet_parts = max(snippet_parts, excluded.snippet_parts), records = max(records, \
         excluded.records) WHERE excluded.snippet_parts > snippet_parts OR excluded.records > records",
        params![run, loss.snippet_parts, loss.records],
    )
}

pub(super) fn link(connection: &Connection, run: i64, link: &super::LinkCounts) -> Result<usize> {
    execute(
        connection,
        "INSERT OR REPLACE INTO link (run, frames, missing_frames, repeated_frames, damaged_frames, \
         oversize_frames, unknown_frames, dropped_bytes) VALUES (?, ?, ?, ?, ?, ?, ?, ?)",
        params![
            run,
            int(link.frames),
            int(link.missing_frames),
            int(link.repeated_frames),
            int(link.damaged_frames),
            int(link.oversize_frames),
            int(link.unknown_frames),
            int(link.dropped_bytes),
        ],
    )
}

pub(super) fn note(connection: &Connection, utc_ns: i64, kind: &str, text: &str) -> Result<usize> {
    execute(connection, "INSERT INTO note (utc_ns, kind, text) VALUES (?, ?, ?)", params![utc_ns, kind, text])
}
