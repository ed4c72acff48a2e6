//! Reads excursions and storms: exact counts, the first entries, and those furthest out.
//!
//! A night may hold very many rows, so both tables are read once, in order, and only what will be
//! listed is kept. Parts of one excursion follow each other and are put together.

use super::ReportError;
use super::figures::{volts_of_twice_uv, volts_of_uv};
use super::model::ExcursionEntry;
use super::runs::{Run, count};
use super::times::Calendar;
use legwise_protocol::limits::{Limit, LimitMask, LimitSet};
use rusqlite::{Connection, Row};
use std::collections::{HashMap, HashSet};

/// Entries kept for being furthest beyond their limit.
pub(crate) const FURTHEST: usize = 20;
/// Columns both tables have, in the order [`Raw::of`] reads them.
const COMMON: &str = "run, first_sample, samples, limits, worst_limit, extreme_twice_uv, extreme_sample, \
                      outside_samples, area_twice_uv_samples, dm_low_uv, dm_high_uv, clipped_samples";

/// What the two tables hold.
#[derive(Debug, Default)]
pub(crate) struct Tally {
    pub by_run: HashMap<i64, RunTally>,
    pub storms: u64,
    /// Excursions in storms, edge suspects left out.
    pub coalesced: u64,
    pub list: Vec<ExcursionEntry>,
    pub list_truncated: bool,
    pub furthest: Vec<ExcursionEntry>,
    /// Per limit, the worst value of an excursion that is no edge suspect: (twice µV, run, sample).
    pub extremes: [Option<(i64, i64, u64)>; Limit::COUNT],
}

/// What they hold of one run.
#[derive(Clone, Copy, Debug, Default)]
pub(crate) struct RunTally {
    /// Excursions, edge suspects left out.
    pub excursions: u64,
    pub edge_suspects: u64,
    pub outside_samples: u64,
}

/// One excursion or storm as stored.
#[derive(Clone, Debug)]
struct Raw {
    run: i64,
    number: Option<u64>,
    first_sample: u64,
    end_sample: u64,
    limits: u8,
    worst_limit: Limit,
    extreme_twice_uv: i64,
    extreme_sample: u64,
    outside_samples: u64,
    area_twice_uv_samples: u64,
    dm_low_uv: Option<i64>,
    dm_high_uv: Option<i64>,
    clipped_samples: u64,
    coalesced: u64,
    edge_suspects: u64,
    is_cut: bool,
    /// Distance beyond the limit of that time, twice µV.
    beyond_twice_uv: Option<i64>,
}

impl Raw {
    fn of(row: &Row<'_>, runs: &[Run]) -> rusqlite::Result<Self> {
        let (run, first_sample) = (row.get(0)?, count(row, 1)?);
        let worst = count(row, 4)?;
        let worst_limit =
            Limit::ALL.into_iter().find(|&limit| limit as u64 == worst).unwrap_or(Limit::LegAHigh);
        let extreme_twice_uv: i64 = row.get(5)?;
        let settings =
            runs.iter().find(|facts| facts.number == run).and_then(|run| run.settings_at(first_sample));
        Ok(Self {
            run,
            number: None,
            first_sample,
            end_sample: first_sample + count(row, 2)?,
            limits: row.get::<_, i64>(3)?.to_le_bytes()[0],
            worst_limit,
            extreme_twice_uv,
            extreme_sample: count(row, 6)?,
            outside_samples: count(row, 7)?,
            area_twice_uv_samples: count(row, 8)?,
            dm_low_uv: row.get(9)?,
            dm_high_uv: row.get(10)?,
            clipped_samples: count(row, 11)?,
            coalesced: 0,
            edge_suspects: 0,
            is_cut: false,
            beyond_twice_uv: settings
                .and_then(|settings| beyond(settings.limits, worst_limit, extreme_twice_uv)),
        })
    }

    fn is_edge_suspect(&self) -> bool {
        self.edge_suspects > 0 && self.edge_suspects >= self.coalesced
    }

    /// Takes a later part of the same excursion.
    fn join(&mut self, part: &Self) {
        if part.rank() > self.rank() {
            self.worst_limit = part.worst_limit;
            self.extreme_twice_uv = part.extreme_twice_uv;
            self.extreme_sample = part.extreme_sample;
            self.beyond_twice_uv = part.beyond_twice_uv;
        }
        self.end_sample = self.end_sample.max(part.end_sample);
        self.limits |= part.limits;
        self.outside_samples += part.outside_samples;
        self.area_twice_uv_samples = self.area_twice_uv_samples.saturating_add(part.area_twice_uv_samples);
        self.dm_low_uv = [self.dm_low_uv, part.dm_low_uv].into_iter().flatten().min();
        self.dm_high_uv = [self.dm_high_uv, part.dm_high_uv].into_iter().flatten().max();
        self.clipped_samples += part.clipped_samples;
        self.is_cut |= part.is_cut;
    }

    /// How far out it is: edge suspects after all others.
    fn rank(&self) -> (bool, i64) {
        (!self.is_edge_suspect(), self.beyond_twice_uv.unwrap_or(self.extreme_twice_uv.abs()))
    }

    fn entry(
        &self,
        calendar: &Calendar<'_>,
        rate_hz: Option<f64>,
        waveforms: &HashSet<(i64, u64)>,
    ) -> ExcursionEntry {
        let samples = self.end_sample - self.first_sample;
        let mask = LimitMask::from_bits_cut(self.limits);
        ExcursionEntry {
            number: self.number,
            first_sample: self.first_sample,
            samples,
            duration_s: rate_hz.map(|rate| samples as f64 / rate),
            moment: calendar.moment(self.run, self.first_sample, 1),
            limits: Limit::ALL.into_iter().filter(|&limit| mask.contains(limit)).map(limit_name).collect(),
            worst_limit: limit_name(self.worst_limit),
            extreme_v: volts_of_twice_uv(self.extreme_twice_uv),
            extreme_sample: self.extreme_sample,
            beyond_v: self.beyond_twice_uv.map(volts_of_twice_uv),
            outside_samples: self.outside_samples,
            area_v_s: rate_hz.map(|rate| self.area_twice_uv_samples as f64 / 2e6 / rate),
            dm_min_v: self.dm_low_uv.map(volts_of_uv),
            dm_max_v: self.dm_high_uv.map(volts_of_uv),
            clipped_samples: self.clipped_samples,
            coalesced: self.coalesced,
            is_edge_suspect: self.is_edge_suspect(),
            is_cut: self.is_cut,
            has_waveform: self.number.is_some_and(|number| waveforms.contains(&(self.run, number))),
        }
    }
}

/// Name of a limit in the report.
pub(crate) const fn limit_name(limit: Limit) -> &'static str {
    match limit {
        Limit::LegAHigh => "leg-a-high",
        Limit::LegALow => "leg-a-low",
        Limit::LegBHigh => "leg-b-high",
        Limit::LegBLow => "leg-b-low",
        Limit::AverageHigh => "average-high",
        Limit::AverageLow => "average-low",
    }
}

/// The limit itself in µV, where its window is defined.
pub(crate) fn limit_uv(limits: LimitSet, limit: Limit) -> Option<i64> {
    let window = if limit.is_average() { limits.average } else { limits.terminal }?;
    Some(i64::from(if limit.is_high() { window.high.uv() } else { window.low.uv() }))
}

fn beyond(limits: LimitSet, limit: Limit, extreme_twice_uv: i64) -> Option<i64> {
    let limit_twice_uv = 2 * limit_uv(limits, limit)?;
    Some(if limit.is_high() { extreme_twice_uv - limit_twice_uv } else { limit_twice_uv - extreme_twice_uv })
}

/// Collects entries as they pass.
#[derive(Default)]
struct Collector {
    tally: Tally,
    first: Vec<Raw>,
    furthest: Vec<Raw>,
    entries: usize,
    limit: usize,
}

impl Collector {
    fn take(&mut self, raw: Raw) {
        let counts = self.tally.by_run.entry(raw.run).or_default();
        let held = raw.coalesced.max(1);
        let suspects = raw.edge_suspects.min(held);
        counts.excursions += held - suspects;
        counts.edge_suspects += suspects;
        counts.outside_samples += raw.outside_samples;
        if raw.coalesced > 0 {
            self.tally.storms += 1;
            self.tally.coalesced += held - suspects;
        }
        // An extreme of the average in a storm may be that of an edge suspect in it.
        if suspects == 0 || !raw.worst_limit.is_average() {
            self.keep_extreme(&raw);
        }
        self.entries += 1;
        self.furthest.push(raw.clone());
        if self.furthest.len() >= 8 * FURTHEST {
            self.cut_furthest();
        }
        self.first.push(raw);
    }

    fn keep_extreme(&mut self, raw: &Raw) {
        let Some(slot) = self.tally.extremes.get_mut(raw.worst_limit as usize) else {
            return;
        };
        let is_worse = slot.is_none_or(|(value, _, _)| {
            if raw.worst_limit.is_high() {
                raw.extreme_twice_uv > value
            } else {
                raw.extreme_twice_uv < value
            }
        });
        if is_worse {
            *slot = Some((raw.extreme_twice_uv, raw.run, raw.extreme_sample));
        }
    }

    fn cut_furthest(&mut self) {
        self.furthest.sort_by_key(|raw| std::cmp::Reverse(raw.rank()));
        self.furthest.truncate(FURTHEST);
    }

    /// Drops what lies past the limit of the table just read; the other table starts afresh.
    fn end_table(&mut self, from: usize) {
        self.first.truncate(from + self.limit);
    }
}

/// Reads both tables; lists at most `limit` entries.
pub(crate) fn read(
    connection: &Connection,
    runs: &[Run],
    calendar: &Calendar<'_>,
    limit: usize,
) -> Result<Tally, ReportError> {
    let mut collector = Collector { limit, ..Collector::default() };
    read_excursions(connection, runs, &mut collector)?;
    collector.end_table(0);
    let from = collector.first.len();
    read_storms(connection, runs, &mut collector)?;
    collector.end_table(from);
    collector.cut_furthest();
    let Collector { mut tally, mut first, mut furthest, entries, .. } = collector;
    let in_time = |raw: &Raw| (raw.run, raw.first_sample);
    first.sort_by_key(in_time);
    first.truncate(limit);
    furthest.sort_by_key(in_time);
    let waveforms = waveforms(connection)?;
    let entry = |raw: &Raw| {
        let rate_hz = runs.iter().find(|run| run.number == raw.run).and_then(Run::rate_hz);
        raw.entry(calendar, rate_hz, &waveforms)
    };
    tally.list = first.iter().map(entry).collect();
    tally.furthest = furthest.iter().map(entry).collect();
    tally.list_truncated = entries > tally.list.len();
    Ok(tally)
}

fn read_excursions(
    connection: &Connection,
    runs: &[Run],
    collector: &mut Collector,
) -> Result<(), ReportError> {
    let query = format!("SELECT {COMMON}, excursion, edge_suspect, cut FROM excursion ORDER BY run, number");
    let mut statement = connection.prepare(&query)?;
    let mut rows = statement.query([])?;
    let mut open: Option<Raw> = None;
    while let Some(row) = rows.next()? {
        let mut raw = Raw::of(row, runs)?;
        raw.number = Some(count(row, 12)?);
        raw.edge_suspects = count(row, 13)?.min(1);
        raw.is_cut = row.get(14)?;
        match &mut open {
            Some(before) if (before.run, before.number) == (raw.run, raw.number) => before.join(&raw),
            _ => {
                if let Some(before) = open.replace(raw) {
                    collector.take(before);
                    collector.first.truncate(collector.limit);
                }
            }
        }
    }
    if let Some(last) = open {
        collector.take(last);
    }
    Ok(())
}

fn read_storms(connection: &Connection, runs: &[Run], collector: &mut Collector) -> Result<(), ReportError> {
    let query = format!("SELECT {COMMON}, excursions, edge_suspects FROM storm ORDER BY run, number");
    let mut statement = connection.prepare(&query)?;
    let mut rows = statement.query([])?;
    let most = collector.first.len() + collector.limit;
    while let Some(row) = rows.next()? {
        let mut raw = Raw::of(row, runs)?;
        raw.coalesced = count(row, 12)?;
        raw.edge_suspects = count(row, 13)?;
        collector.take(raw);
        collector.first.truncate(most);
    }
    Ok(())
}

/// The excursions whose waveform was kept: (run, number).
fn waveforms(connection: &Connection) -> Result<HashSet<(i64, u64)>, ReportError> {
    let mut statement = connection.prepare("SELECT DISTINCT run, excursion FROM snippet")?;
    let mut rows = statement.query([])?;
    let mut kept = HashSet::new();
    while let Some(row) = rows.next()? {
        kept.insert((row.get(0)?, count(row, 1)?));
    }
    Ok(kept)
}
