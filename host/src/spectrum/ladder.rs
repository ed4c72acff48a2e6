//! The averaged spectra of a whole log by rung and set: what a picture, a conversion or a calibration rests on.
//!
//! ```text
//!  stored spectra ─ mean per shape and set ─ one sample rate, one shape per rung ─ Ladder ─ joined curves
//! ```
//!
//! Where a log holds several sample rates, the one with most segments is taken, and of each rung the shape
//! with most. A frequency belongs to the slowest rung that still has it, up to 0.35 of that rung's rate
//! (signal processing practice: its filters pass to 0.4).

use super::BLANKED_BINS;
use super::average::{RungAverages, RungMean, Shape};
use super::conversion::{Coding, Record};
use super::rung::{RUNG_RATIO, RungBin, SegmentSet};
use crate::log::{Log, LogError, spectra};
use std::collections::BTreeMap;

/// A rung tells up to this share of its rate.
pub const CROSSOVER: f64 = 0.35;

/// Means of both sets, every rung in one shape.
#[derive(Clone, Debug, PartialEq)]
pub struct Ladder {
    /// Pairs per second of the device.
    pub sample_rate_hz: f64,
    /// By rung and set, the full rate first, idle before driven.
    pub means: Vec<RungMean>,
    /// Stored spectra that are not in the means: of other rates or shapes, without segments, not readable.
    pub left_out: u64,
}

/// A bin of a joined curve.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct CurvePoint {
    /// Frequency, Hz.
    pub frequency_hz: f64,
    /// The densities there.
    pub bin: RungBin,
}

impl Ladder {
    /// Averages what `log` holds; `None` when it holds no spectra of the ladder.
    ///
    /// # Errors
    /// When the table cannot be read.
    pub fn from_log(log: &Log) -> Result<Option<Self>, LogError> {
        let (mut averages, mut stored) = (RungAverages::new(), 0_u64);
        let passed_over = spectra::visit(log.connection(), |_, spectra| {
            stored += 1;
            averages.add(spectra);
            Ok::<(), rusqlite::Error>(())
        })?;
        Ok(Self::of(averages.by_set(), stored + passed_over))
    }

    /// Of means in many shapes those that go together; `stored` spectra there were in all.
    pub fn of(means: impl Iterator<Item = RungMean>, stored: u64) -> Option<Self> {
        let full_rate = |mean: &RungMean| mean.mean.rate_hz * RUNG_RATIO.powi(mean.mean.rung.into());
        let mut by_rate: BTreeMap<u64, BTreeMap<Shape, Vec<RungMean>>> = BTreeMap::new();
        for mean in means {
            let shapes = by_rate.entry(full_rate(&mean).to_bits()).or_default();
            shapes.entry(Shape::of(&mean.mean)).or_default().push(mean);
        }
        let segments = |means: &[RungMean]| means.iter().map(|mean| mean.mean.segments).sum::<u64>();
        let (rate_bits, shapes) = by_rate
            .into_iter()
            .max_by_key(|(_, shapes)| shapes.values().map(|means| segments(means)).sum::<u64>())?;
        let mut rungs: BTreeMap<u8, Vec<RungMean>> = BTreeMap::new();
        for (shape, means) in shapes {
            if rungs.get(&shape.rung).is_none_or(|best| segments(best) < segments(&means)) {
                rungs.insert(shape.rung, means);
            }
        }
        let means: Vec<RungMean> = rungs.into_values().flatten().collect();
        let used: u64 = means.iter().map(|mean| mean.spectra).sum();
        Some(Self { sample_rate_hz: f64::from_bits(rate_bits), means, left_out: stored.saturating_sub(used) })
    }

    /// What conversion is computed from.
    pub fn records(&self) -> Vec<Record<'_>> {
        let coding = |mean: &RungMean| Coding::Wire { averages: mean.spectra };
        self.means.iter().map(|mean| Record { spectra: &mean.mean, coding: coding(mean) }).collect()
    }

    /// The means of one set, the full rate first.
    pub fn of_set(&self, set: SegmentSet) -> impl Iterator<Item = &RungMean> {
        self.means.iter().filter(move |mean| mean.mean.set == set)
    }

    /// The bins of one set by rising frequency, each frequency from one rung; empty without such segments.
    ///
    /// Bins next to 0 Hz, which the removed mean colours, are left out.
    pub fn curve(&self, set: SegmentSet) -> Vec<CurvePoint> {
        let rungs: Vec<&RungMean> = self.of_set(set).collect();
        let crossovers: Vec<f64> = rungs
            .windows(2)
            .filter_map(|pair| if let [higher, lower] = pair { Some(crossover_hz(higher, lower)) } else { None })
            .collect();
        let mut curve = Vec::new();
        for (place, rung) in rungs.iter().enumerate().rev() {
            let from_hz = crossovers.get(place).copied().unwrap_or(0.0);
            let to_hz = place.checked_sub(1).and_then(|above| crossovers.get(above).copied());
            let to_hz = to_hz.unwrap_or(f64::INFINITY);
            let spectra = &rung.mean;
            for (place, bin) in spectra.bins.iter().enumerate() {
                let frequency_hz = spectra.frequency_hz(place);
                let is_told = spectra.first_bin + place >= BLANKED_BINS
                    && frequency_hz > from_hz
                    && frequency_hz <= to_hz;
                if is_told {
                    curve.push(CurvePoint { frequency_hz, bin: *bin });
                }
            }
        }
        curve
    }
}

/// Where the lower rung hands over, Hz: within what both published where they overlap.
fn crossover_hz(higher: &RungMean, lower: &RungMean) -> f64 {
    let lowest = higher.mean.frequency_hz(0);
    let highest = lower.mean.frequency_hz(lower.mean.bins.len().saturating_sub(1));
    (CROSSOVER * lower.mean.rate_hz).max(lowest).min(highest)
}
