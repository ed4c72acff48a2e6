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
    /// Bins next to 0 Hz, which the removed mean colours, and the one at half the rate, which is counted
    /// once where others are counted twice, are left out.
    pub fn curve(&self, set: SegmentSet) -> Vec<CurvePoint> {
        let rungs: Vec<&RungMean> = self.of_set(set).collect();
        let crossovers: Vec<f64> = rungs
            .windows(2)
            .filter_map(
                |pair| if let [higher, lower] = pair { Some(crossover_hz(higher, lower)) } else { None },
            )
            .collect();
        let mut curve = Vec::new();
        for (place, rung) in rungs.iter().enumerate().rev() {
            let from_hz = crossovers.get(place).copied().unwrap_or(0.0);
            let to_hz = place.checked_sub(1).and_then(|above| crossovers.get(above).copied());
            let to_hz = to_hz.unwrap_or(f64::INFINITY);
            let spectra = &rung.mean;
            for (place, bin) in spectra.bins.iter().enumerate() {
                let frequency_hz = spectra.frequency_hz(place);
                let number = spectra.first_bin + place;
                let is_told = number >= BLANKED_BINS
                    && 2 * number < spectra.points as usize
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
    let lowest = higher.mean.first_bin.max(BLANKED_BINS) as f64 * higher.mean.bin_hz();
    let highest = lower.mean.frequency_hz(lower.mean.bins.len().saturating_sub(1));
    (CROSSOVER * lower.mean.rate_hz).max(lowest).min(highest)
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::spectrum::rung::{RungSpectra, rate_of_rung};

    /// A mean as a board publishes it: the full rate whole, lower rungs from bin 20 to 204.
    fn mean(rate_hz: f64, rung: u8, set: SegmentSet, segments: u64) -> RungMean {
        let (points, first_bin, bins) = if rung == 0 { (1024, 0, 513) } else { (512, 20, 185) };
        let bin = RungBin { common: f64::from(rung) + 1.0, differential: 1.0, cross: (0.0, 0.0) };
        let mean = RungSpectra {
            rung,
            rate_hz: rate_of_rung(rate_hz, rung),
            points,
            set,
            segments,
            skipped: 0,
            is_overlapped: true,
            other: 0,
            first_sample: 0,
            span_samples: 1000,
            first_bin,
            bins: vec![bin; bins],
        };
        RungMean { mean, spectra: 3 }
    }

    fn ladder(rungs: &[u8]) -> Ladder {
        let means = rungs.iter().map(|rung| mean(500_000.0, *rung, SegmentSet::Idle, 50));
        Ladder::of(means, 3 * rungs.len() as u64).unwrap()
    }

    #[test]
    fn every_frequency_comes_from_one_rung_and_none_is_left_out() {
        let curve = ladder(&[0, 1, 2, 3, 4]).curve(SegmentSet::Idle);
        assert!(curve.windows(2).all(|pair| pair[0].frequency_hz < pair[1].frequency_hz));
        for pair in curve.windows(2) {
            // The rung is in the density. Never further apart than one bin of the faster of the two.
            let faster = pair[0].bin.common.min(pair[1].bin.common) as i32 - 1;
            let bin_hz =
                if faster == 0 { 500_000.0 / 1024.0 } else { 500_000.0 / 512.0 / 8_f64.powi(faster) };
            assert!(pair[1].frequency_hz - pair[0].frequency_hz <= bin_hz * 1.001, "{pair:?}");
        }
        for (hz, rung) in
            [(6.0, 4), (42.0, 4), (43.5, 3), (341.0, 3), (2733.0, 2), (21_800.0, 1), (22_100.0, 0)]
        {
            let nearest = |point: &&CurvePoint| ((point.frequency_hz / hz).ln().abs() * 1e9) as u64;
            let point = curve.iter().min_by_key(nearest).unwrap();
            assert_eq!(point.bin.common, f64::from(rung) + 1.0, "{hz} Hz");
        }
        // Bin 20 of the slowest rung; the last below half the rate.
        assert_eq!(curve[0].frequency_hz, 20.0 * 500_000.0 / 4096.0 / 512.0);
        assert_eq!(curve.last().unwrap().frequency_hz, 511.0 * 500_000.0 / 1024.0);
    }

    #[test]
    fn a_missing_rung_leaves_a_gap_and_no_frequency_twice() {
        let curve = ladder(&[0, 3]).curve(SegmentSet::Idle);
        assert!(curve.windows(2).all(|pair| pair[0].frequency_hz < pair[1].frequency_hz));
        // The slower up to 0.4 of its rate, the faster from its third bin.
        let last = curve.iter().rfind(|point| point.bin.common == 4.0).unwrap();
        assert!((last.frequency_hz / rate_of_rung(500_000.0, 3) - 0.4).abs() < 0.002);
        assert!(ladder(&[0, 1]).curve(SegmentSet::Driven).is_empty());
    }

    #[test]
    fn the_rate_with_most_segments_is_shown_and_the_rest_is_counted() {
        let means = [
            mean(500_000.0, 0, SegmentSet::Idle, 10),
            mean(487_000.0, 0, SegmentSet::Idle, 4),
            mean(487_000.0, 0, SegmentSet::Driven, 8),
            mean(487_000.0, 1, SegmentSet::Driven, 1),
        ];
        let ladder = Ladder::of(means.into_iter(), 13).unwrap();
        assert_eq!((ladder.sample_rate_hz, ladder.means.len(), ladder.left_out), (487_000.0, 3, 4));
        let codings: Vec<Coding> = ladder.records().iter().map(|record| record.coding).collect();
        assert_eq!(codings, [Coding::Wire { averages: 3 }; 3]);
        assert_eq!(Ladder::of(std::iter::empty(), 0), None);
    }
}
