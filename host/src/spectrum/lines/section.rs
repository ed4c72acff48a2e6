//! The part of a density that is searched for lines: which bins it has, and the floor around each.

use super::OWN_BINS;
use crate::spectrum::{BLANKED_BINS, Density, HANN_ENBW_BINS};
use std::borrow::Cow;

/// One-sided normal quantile of 0.01/513: one false line in a hundred spectra of 513 bins.
const FALSE_LINE_SIGMAS: f64 = 4.11;
/// Bins on each side that make the neighbourhood of a bin.
const NEIGHBOURHOOD_BINS: usize = 32;

/// The part of one density that is searched for lines.
#[derive(Clone, Debug)]
pub struct Section<'a> {
    /// Number of the first value: the frequency over `bin_hz`.
    pub first_bin: usize,
    /// One-sided density, V²/Hz, from `first_bin` up.
    pub v2_per_hz: Cow<'a, [f64]>,
    /// Distance between bins, Hz.
    pub bin_hz: f64,
    /// Independent segments in the average.
    pub segments: f64,
    /// Bin of half the rate.
    pub half_rate_bin: usize,
    /// Lowest bin a peak is looked for in.
    pub lowest_bin: usize,
}

/// A line known from elsewhere, whose skirts reach into the section.
#[derive(Clone, Copy, Debug)]
pub struct Outside {
    /// Its frequency, Hz.
    pub frequency_hz: f64,
    /// Half the band it occupies by itself, Hz; 0 for a sine.
    pub half_width_hz: f64,
    /// Its power, V².
    pub power_v2: f64,
}

impl<'a> From<&'a Density> for Section<'a> {
    fn from(density: &'a Density) -> Self {
        Self {
            first_bin: 0,
            v2_per_hz: Cow::Borrowed(&density.v2_per_hz),
            bin_hz: density.bin_hz(),
            segments: density.segments.max(1) as f64,
            half_rate_bin: density.v2_per_hz.len().saturating_sub(1),
            lowest_bin: 2,
        }
    }
}

impl Section<'_> {
    /// Number of the last value.
    pub fn last_bin(&self) -> usize {
        self.first_bin + self.v2_per_hz.len().saturating_sub(1)
    }

    /// Density in a bin, where the section has it.
    pub fn get(&self, bin: usize) -> Option<f64> {
        self.v2_per_hz.get(bin.checked_sub(self.first_bin)?).copied()
    }

    pub(super) fn at(&self, bin: usize) -> f64 {
        self.get(bin).unwrap_or(0.0)
    }

    /// Bins that may hold a peak: not the ends of the whole spectrum.
    pub(super) fn searched(&self) -> std::ops::RangeInclusive<usize> {
        let last = self.last_bin().min(self.half_rate_bin.saturating_sub(1));
        self.first_bin.max(self.lowest_bin)..=last
    }

    /// Whether a neighbour of this bin exists but lies outside the section.
    pub(super) fn is_end(&self, bin: usize) -> bool {
        (bin == self.first_bin && bin > 0) || (bin == self.last_bin() && bin < self.half_rate_bin)
    }

    /// Power ratio a bin must reach over the floor so that noise alone seldom does.
    ///
    /// Wilson and Hilferty's cube-root form of the upper quantile of a mean of n powers.
    pub fn line_ratio(&self, least: f64) -> f64 {
        let n = self.segments.max(1.0);
        least.max((1.0 - 1.0 / (9.0 * n) + FALSE_LINE_SIGMAS / (3.0 * n.sqrt())).powi(3))
    }

    /// Median density around `bin`, its own bins left out, in V²/Hz.
    ///
    /// The median of a mean of `n` exponential powers lies below their mean by `1/(3n)` to first
    /// order (a Gamma(n) variable has its median near `n - 1/3`); that is put right here.
    pub(super) fn local_floor(&self, bin: usize) -> f64 {
        let last = self.last_bin().min(self.half_rate_bin.saturating_sub(1));
        let low = bin.saturating_sub(NEIGHBOURHOOD_BINS).max(BLANKED_BINS);
        let high = (bin + NEIGHBOURHOOD_BINS).min(last);
        let others = (low..=high).filter(|&other| other.abs_diff(bin) > OWN_BINS);
        median(others.filter_map(|other| self.get(other)))
            .map_or(0.0, |median| median / (1.0 - 1.0 / (3.0 * self.segments.max(1.0))))
    }

    /// Most the skirts of a line elsewhere can put into `bin`, V²/Hz.
    pub(super) fn skirt_of(&self, outside: &Outside, bin: usize) -> f64 {
        let distance = (outside.frequency_hz / self.bin_hz - bin as f64).abs();
        let clear = distance - outside.half_width_hz / self.bin_hz;
        outside.power_v2 / (HANN_ENBW_BINS * self.bin_hz) * super::envelope(clear)
    }
}

/// The middle one; `None` of nothing.
fn median(values: impl Iterator<Item = f64>) -> Option<f64> {
    let mut values: Vec<f64> = values.collect();
    let middle = values.len() / 2;
    (!values.is_empty()).then(|| *values.select_nth_unstable_by(middle, f64::total_cmp).1)
}
