//! The averages everything spectral rests on: one pass over the stored spectra.
//!
//! A board that dithers its sample rate leaves spectra of two or three rates in one log. The rate with most
//! segments is the main one; that with most segments among the others near it is the second one, by which lines
//! are checked against aliases. Of each rung the shape with most segments counts.

use super::ReportError;
use super::runs::{Run, count};
use crate::log::spectra;
use crate::spectrum::average::{RungAverages, RungMean, Shape};
use crate::spectrum::families::PerMode;
use crate::spectrum::rung::{RUNG_RATIO, RungBin, RungSpectra, SegmentSet};
use crate::spectrum::{Density, PowerTable, SpectrumAverage};
use rusqlite::Connection;
use std::collections::BTreeMap;

/// A second rate differs from the main one by at least and at most this share of it.
const SECOND_RATE: (f64, f64) = (0.002, 0.25);

/// Averages over the whole log.
#[derive(Default)]
pub(crate) struct Averages {
    /// Of each rung at the main rate, both sets together, the full rate first.
    pub together: Vec<RungMean>,
    /// The same by set.
    pub by_set: Vec<RungMean>,
    /// By set at the second rate; empty where there is none.
    pub second: Vec<RungMean>,
    /// The second rate, full rate, Hz.
    pub second_rate_hz: Option<f64>,
    /// Stored spectra that are in none of them, nor of a third rate near the main one.
    pub left_out: u64,
    /// Spectra of single modes at the full rate, where the log holds none of the ladder.
    pub single: PerMode<Option<Single>>,
}

/// The mean spectrum of one mode at the full rate.
#[derive(Clone)]
pub(crate) struct Single {
    /// The mean.
    pub density: Density,
    /// Stored spectra in it.
    pub spectra: u64,
    /// Segments passed over meanwhile.
    pub skipped: u64,
}

impl Averages {
    /// The main averages by set. Those of single modes count as driven: they hold whatever the bus did.
    pub fn main(&self) -> Vec<RungSpectra> {
        let PerMode { common: Some(common), differential: Some(differential) } = &self.single else {
            return spectra_of(&self.by_set);
        };
        let densities = common.density.v2_per_hz.iter().zip(&differential.density.v2_per_hz);
        let bin = |(&common, &differential)| RungBin { common, differential, cross: (0.0, 0.0) };
        vec![RungSpectra {
            rung: 0,
            rate_hz: common.density.sample_rate_hz,
            points: common.density.points,
            set: SegmentSet::Driven,
            segments: common.density.segments,
            skipped: common.skipped,
            is_overlapped: common.skipped == 0,
            other: 0,
            first_sample: 0,
            span_samples: 0,
            first_bin: 0,
            bins: densities.map(bin).collect(),
        }]
    }

    /// The second ones by set.
    pub fn second(&self) -> Vec<RungSpectra> {
        spectra_of(&self.second)
    }

    /// Whether the log holds spectra of single modes only.
    pub fn is_single(&self) -> bool {
        self.by_set.is_empty()
    }

    /// The main full rate, Hz.
    pub fn rate_hz(&self) -> Option<f64> {
        let first = self.by_set.first().map(|mean| full_rate_hz(&mean.mean));
        first.or(self.single.common.as_ref().map(|single| single.density.sample_rate_hz))
    }
}

fn spectra_of(means: &[RungMean]) -> Vec<RungSpectra> {
    means.iter().map(|mean| mean.mean.clone()).collect()
}

/// Pairs per second before the ladder. Exact: rungs divide by powers of two.
pub(crate) fn full_rate_hz(spectra: &RungSpectra) -> f64 {
    spectra.rate_hz * RUNG_RATIO.powi(spectra.rung.into())
}

/// Averages all spectra of a log.
pub(crate) fn read(connection: &Connection, runs: &[Run]) -> Result<Averages, ReportError> {
    let single: u64 = connection.query_row("SELECT count(*) FROM spectrum", [], |row| count(row, 0))?;
    let averages = read_ladder(connection)?;
    if averages.is_single() {
        let (single, left_out) = read_single(connection, runs)?;
        return Ok(Averages { single, left_out: averages.left_out + left_out, ..averages });
    }
    Ok(Averages { left_out: averages.left_out + single, ..averages })
}

/// Means of all rungs, and how many stored spectra are not in them.
fn read_ladder(connection: &Connection) -> Result<Averages, ReportError> {
    let (mut averages, mut stored) = (RungAverages::new(), 0_u64);
    let passed_over = spectra::visit(connection, |_, spectra| {
        stored += 1;
        averages.add(spectra);
        Ok::<(), ReportError>(())
    })?;
    let mut rates = by_rate(averages.both_sets());
    rates.sort_by_key(|rate| std::cmp::Reverse(rate.segments));
    let Some(main) = rates.first() else {
        return Ok(Averages { left_out: stored + passed_over, ..Averages::default() });
    };
    let is_second = |rate: &&Rate| {
        let apart = (rate.full_hz / main.full_hz - 1.0).abs();
        (SECOND_RATE.0..=SECOND_RATE.1).contains(&apart)
    };
    let second = rates.iter().skip(1).find(is_second);
    let shapes = |rate: &Rate| rate.rungs.values().map(|mean| Shape::of(&mean.mean)).collect::<Vec<_>>();
    let by_set = |shapes: &[Shape]| -> Vec<RungMean> {
        averages.by_set().filter(|mean| shapes.contains(&Shape::of(&mean.mean))).collect()
    };
    let used = |rate: &Rate| rate.rungs.values().map(|mean| mean.spectra).sum::<u64>();
    // A third rate, the second one's counterpart on the other side, is left out on purpose.
    let dithered: u64 = rates.iter().skip(1).filter(is_second).map(used).sum();
    Ok(Averages {
        by_set: by_set(&shapes(main)),
        second: second.map(|rate| by_set(&shapes(rate))).unwrap_or_default(),
        second_rate_hz: second.map(|rate| rate.full_hz),
        left_out: stored + passed_over - used(main) - dithered,
        together: main.rungs.values().cloned().collect(),
        single: PerMode::default(),
    })
}

/// What one sample rate left.
struct Rate {
    full_hz: f64,
    segments: u64,
    /// Of each rung the shape with most segments.
    rungs: BTreeMap<u8, RungMean>,
}

fn by_rate(means: Vec<RungMean>) -> Vec<Rate> {
    let mut rates: Vec<Rate> = Vec::new();
    for mean in means {
        let full_hz = full_rate_hz(&mean.mean);
        let place = rates.iter().position(|rate| rate.full_hz == full_hz).unwrap_or(rates.len());
        if place == rates.len() {
            rates.push(Rate { full_hz, segments: 0, rungs: BTreeMap::new() });
        }
        let Some(rate) = rates.get_mut(place) else { continue };
        rate.segments += mean.mean.segments;
        let is_better = |old: &RungMean| old.mean.segments >= mean.mean.segments;
        if !rate.rungs.get(&mean.mean.rung).is_some_and(is_better) {
            rate.rungs.insert(mean.mean.rung, mean);
        }
    }
    rates
}

/// Spectra of one shape: rate and points per segment, then mode.
type SingleShape = (u64, u32);

#[derive(Default)]
struct Shaped {
    /// Common, then differential; with the segments passed over.
    modes: [Option<(SpectrumAverage, u64)>; 2],
    spectra: u64,
    segments: u64,
}

/// Averages the spectra of single modes, at rung 0. Where shapes differ, the one with most segments is taken.
fn read_single(connection: &Connection, runs: &[Run]) -> Result<(PerMode<Option<Single>>, u64), ReportError> {
    let table = PowerTable::new();
    let mut shapes: BTreeMap<SingleShape, Shaped> = BTreeMap::new();
    let (mut stored, mut last_run) = (0_u64, None);
    let mut statement = connection
        .prepare("SELECT run, mode, points, segments, skipped, codes FROM spectrum WHERE rung = 0")?;
    let mut rows = statement.query([])?;
    while let Some(row) = rows.next()? {
        stored += 1;
        let run: i64 = row.get(0)?;
        if last_run.is_none_or(|(number, _)| number != run) {
            let rate = runs.iter().find(|facts| facts.number == run).and_then(|run| run.rate_mhz);
            last_run = Some((run, rate));
        }
        let Some((_, Some(rate_mhz))) = last_run else {
            continue;
        };
        let (mode, points, segments): (i64, u32, u32) = (row.get(1)?, row.get(2)?, row.get(3)?);
        let codes = row.get_ref(5)?.as_blob().map_err(rusqlite::Error::from)?;
        let shaped = shapes.entry((rate_mhz, points)).or_default();
        let Some(slot) = usize::try_from(mode).ok().and_then(|mode| shaped.modes.get_mut(mode)) else {
            continue;
        };
        let rate_hz = rate_mhz as f64 / 1000.0;
        let (average, skipped) = slot.get_or_insert_with(|| (SpectrumAverage::new(points, rate_hz), 0));
        if average.add(&table, codes, segments) {
            *skipped += count(row, 4)?;
            shaped.spectra += 1;
            shaped.segments += u64::from(segments);
        }
    }
    let Some(best) = shapes.into_values().max_by_key(|shaped| shaped.segments) else {
        return Ok((PerMode::default(), stored));
    };
    let of = |mode: &Option<(SpectrumAverage, u64)>| {
        let (average, skipped) = mode.as_ref()?;
        Some(Single { density: average.density()?, spectra: average.spectra(), skipped: *skipped })
    };
    let [common, differential] = &best.modes;
    Ok((PerMode { common: of(common), differential: of(differential) }, stored - best.spectra))
}
