//! Means of many averaged spectra of the ladder: of a night, of an hour, of both sets together.
//!
//! Each spectrum counts by the segments in it, which gives the spectra one long average would have given;
//! the cross density is averaged as the complex number it is. Only spectra of one shape go together: of
//! the same rung, rate, points and range of bins.

use super::rung::{RungBin, RungSpectra, SegmentSet};
use std::collections::BTreeMap;
use std::collections::btree_map::Entry;

/// What spectra must share to be averaged, apart from the set.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord)]
pub struct Shape {
    /// Rung of the ladder.
    pub rung: u8,
    /// Bits of the rate in Hz: rates are positive, so their bits are in order of rate.
    rate_bits: u64,
    /// Points per segment.
    pub points: u32,
    /// First bin published.
    pub first_bin: usize,
    /// Bins published.
    pub bins: usize,
}

impl Shape {
    /// The shape of `spectra`.
    pub fn of(spectra: &RungSpectra) -> Self {
        let (points, first_bin, bins) = (spectra.points, spectra.first_bin, spectra.bins.len());
        Self { rung: spectra.rung, rate_bits: spectra.rate_hz.to_bits(), points, first_bin, bins }
    }

    /// Samples per second of the rung.
    pub fn rate_hz(&self) -> f64 {
        f64::from_bits(self.rate_bits)
    }
}

/// A running mean of spectra of one shape.
#[derive(Clone, Debug)]
struct Sum {
    /// Everything but the bins; its bins are sums weighted by segments.
    total: RungSpectra,
    spectra: u64,
}

/// A mean.
#[derive(Clone, Debug, PartialEq)]
pub struct RungMean {
    /// The mean: segments are those of all spectra, the span runs from the first to the last of them,
    /// `is_overlapped` holds when it does for any. For both sets together, `set` is that of the first.
    pub mean: RungSpectra,
    /// Spectra in it.
    pub spectra: u64,
}

/// Running means by shape and set.
#[derive(Clone, Debug, Default)]
pub struct RungAverages {
    sums: BTreeMap<(Shape, SegmentSet), Sum>,
}

impl RungAverages {
    /// No means yet.
    pub fn new() -> Self {
        Self::default()
    }

    /// Takes one average; `false`, and nothing changes, when it holds no segments or its rate is not known.
    pub fn add(&mut self, spectra: &RungSpectra) -> bool {
        if spectra.segments == 0 || spectra.rate_hz.is_nan() || spectra.rate_hz <= 0.0 {
            return false;
        }
        match self.sums.entry((Shape::of(spectra), spectra.set)) {
            Entry::Occupied(mut entry) => entry.get_mut().add(spectra),
            Entry::Vacant(entry) => {
                entry.insert(Sum::begin(spectra));
            }
        }
        true
    }

    /// The mean of each shape and set, idle before driven: rung 0 first, lower rates before higher ones.
    pub fn by_set(&self) -> impl Iterator<Item = RungMean> + '_ {
        self.sums.values().map(Sum::mean)
    }

    /// The mean of each shape, both sets together.
    pub fn both_sets(&self) -> Vec<RungMean> {
        let mut together: BTreeMap<Shape, Sum> = BTreeMap::new();
        for ((shape, _), sum) in &self.sums {
            match together.entry(*shape) {
                Entry::Occupied(mut entry) => entry.get_mut().join(sum),
                Entry::Vacant(entry) => {
                    entry.insert(sum.clone());
                }
            }
        }
        together.values().map(Sum::mean).collect()
    }
}

impl Sum {
    fn begin(spectra: &RungSpectra) -> Self {
        let mut total = spectra.clone();
        scale(&mut total.bins, spectra.segments as f64);
        Self { total, spectra: 1 }
    }

    fn add(&mut self, spectra: &RungSpectra) {
        self.extend(spectra, spectra.segments as f64);
        self.spectra += 1;
    }

    /// Takes all that is in `other`.
    fn join(&mut self, other: &Self) {
        self.extend(&other.total, 1.0);
        self.spectra += other.spectra;
    }

    fn extend(&mut self, spectra: &RungSpectra, weight: f64) {
        let total = &mut self.total;
        for (sum, bin) in total.bins.iter_mut().zip(&spectra.bins) {
            sum.common += weight * bin.common;
            sum.differential += weight * bin.differential;
            sum.cross.0 += weight * bin.cross.0;
            sum.cross.1 += weight * bin.cross.1;
        }
        total.segments += spectra.segments;
        total.skipped += spectra.skipped;
        total.is_overlapped |= spectra.is_overlapped;
        let end = |spectra: &RungSpectra| spectra.first_sample.saturating_add(spectra.span_samples);
        let last = end(total).max(end(spectra));
        total.first_sample = total.first_sample.min(spectra.first_sample);
        total.span_samples = last - total.first_sample;
    }

    fn mean(&self) -> RungMean {
        let mut mean = self.total.clone();
        scale(&mut mean.bins, 1.0 / self.total.segments as f64);
        RungMean { mean, spectra: self.spectra }
    }
}

fn scale(bins: &mut [RungBin], factor: f64) {
    for bin in bins {
        bin.common *= factor;
        bin.differential *= factor;
        bin.cross = (bin.cross.0 * factor, bin.cross.1 * factor);
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Spectra of `segments` segments, one bin each with the given values.
    fn one(set: SegmentSet, first_sample: u64, segments: u64, common: f64, cross: (f64, f64)) -> RungSpectra {
        RungSpectra {
            rung: 2,
            rate_hz: 7812.5,
            points: 64,
            set,
            segments,
            skipped: 5,
            is_overlapped: false,
            other: 0,
            first_sample,
            span_samples: 1_000,
            first_bin: 4,
            bins: vec![RungBin { common, differential: 2.0 * common, cross }; 3],
        }
    }

    #[test]
    fn the_mean_is_weighted_by_segments_and_complex_in_the_cross_density() {
        let mut averages = RungAverages::new();
        assert!(averages.add(&one(SegmentSet::Idle, 9_000, 30, 1.0, (1.0, -4.0))));
        assert!(averages.add(&one(SegmentSet::Idle, 2_000, 10, 5.0, (-3.0, 4.0))));
        assert!(averages.add(&one(SegmentSet::Driven, 500, 40, 6.0, (0.0, 8.0))));
        let means: Vec<RungMean> = averages.by_set().collect();
        let [idle, driven] = means.as_slice() else { panic!("{means:?}") };
        let expected = RungBin { common: 2.0, differential: 4.0, cross: (0.0, -2.0) };
        assert_eq!(idle.mean.bins, vec![expected; 3]);
        assert_eq!(
            (idle.mean.set, idle.mean.segments, idle.mean.skipped, idle.spectra),
            (SegmentSet::Idle, 40, 10, 2)
        );
        assert_eq!((idle.mean.first_sample, idle.mean.span_samples), (2_000, 8_000));
        assert_eq!((driven.mean.segments, driven.mean.bins[0].common), (40, 6.0));
        let both = averages.both_sets();
        assert_eq!(both.len(), 1);
        assert_eq!((both[0].spectra, both[0].mean.segments, both[0].mean.first_sample), (3, 80, 500));
        assert_eq!(both[0].mean.bins[2], RungBin { common: 4.0, differential: 8.0, cross: (0.0, 3.0) });
    }

    #[test]
    fn spectra_of_other_shapes_are_kept_apart_and_empty_ones_refused() {
        let sample = one(SegmentSet::Idle, 0, 8, 1.0, (0.0, 0.0));
        let mut averages = RungAverages::new();
        for other in [
            sample.clone(),
            RungSpectra { rung: 1, ..sample.clone() },
            RungSpectra { rate_hz: 7812.6, ..sample.clone() },
            RungSpectra { points: 128, ..sample.clone() },
            RungSpectra { first_bin: 5, ..sample.clone() },
            RungSpectra { bins: sample.bins[1..].to_vec(), ..sample.clone() },
        ] {
            assert!(averages.add(&other));
        }
        assert_eq!(averages.both_sets().len(), 6);
        let rungs: Vec<u8> = averages.by_set().map(|mean| mean.mean.rung).collect();
        assert_eq!(rungs, [1, 2, 2, 2, 2, 2], "in order of rungs");
        for refused in
            [RungSpectra { segments: 0, ..sample.clone() }, RungSpectra { rate_hz: 0.0, ..sample.clone() }]
        {
            assert!(!averages.add(&refused));
        }
        assert!(averages.by_set().all(|mean| mean.spectra == 1));
    }

    #[test]
    fn overlap_in_any_makes_the_scatter_reckoned_as_overlapped() {
        let mut averages = RungAverages::new();
        averages.add(&one(SegmentSet::Idle, 0, 30, 1.0, (0.0, 0.0)));
        averages.add(&RungSpectra { is_overlapped: true, ..one(SegmentSet::Idle, 0, 30, 1.0, (0.0, 0.0)) });
        let mean = averages.by_set().next().map(|mean| mean.mean);
        assert!(mean.is_some_and(|mean| mean.is_overlapped && mean.effective_segments() < 60.0));
    }
}
