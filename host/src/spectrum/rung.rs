//! Averaged spectra of one rung of the ladder and one set: both densities and the cross density.
//!
//! Rung k runs at 1/8^k of the sample rate. The set says which segments are in the average: *idle* ones,
//! in which the differential mode rested all the time, or *driven* ones. All densities are one-sided,
//! of segments with a periodic Hann window whose mean was removed; the cross density is
//! `S_cd = ⟨conj(C)·D⟩` in the same scale, so that `H = S_cd / S_cc` is what the pair makes of its common
//! mode.

use super::HANN_ENBW_BINS;

/// Which segments an average holds.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash, PartialOrd, Ord)]
pub enum SegmentSet {
    /// DM at rest from the first to the last sample.
    Idle,
    /// DM moved.
    Driven,
}

/// One bin.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct RungBin {
    /// Density of the common mode, V²/Hz.
    pub common: f64,
    /// Density of the differential mode, V²/Hz.
    pub differential: f64,
    /// Cross density, V²/Hz: real and imaginary part.
    pub cross: (f64, f64),
}

/// One average.
#[derive(Clone, Debug, PartialEq)]
pub struct RungSpectra {
    /// 0 is the full rate.
    pub rung: u8,
    /// Samples per second of this rung.
    pub rate_hz: f64,
    /// Points per segment.
    pub points: u32,
    /// Which segments.
    pub set: SegmentSet,
    /// Segments averaged.
    pub segments: u64,
    /// Segments passed over meanwhile, of the other set or to save time.
    pub skipped: u64,
    /// Whether consecutive segments overlap by half.
    pub is_overlapped: bool,
    /// First pair of the first segment, full rate.
    pub first_sample: u64,
    /// From there to the last pair of the last segment, full rate.
    pub span_samples: u64,
    /// Number of the first bin of `bins`.
    pub first_bin: usize,
    /// The bins.
    pub bins: Vec<RungBin>,
}

impl RungSpectra {
    /// Distance between bins, Hz.
    pub fn bin_hz(&self) -> f64 {
        self.rate_hz / f64::from(self.points.max(1))
    }

    /// Frequency of a bin by its place in `bins`, Hz.
    pub fn frequency_hz(&self, place: usize) -> f64 {
        (self.first_bin + place) as f64 * self.bin_hz()
    }

    /// Independent segments that would scatter as much: with Hann and half overlap `36 K²/(38 K − 2)`
    /// (Welch, IEEE Trans. AU-15, 1967), without overlap K.
    pub fn effective_segments(&self) -> f64 {
        let k = self.segments as f64;
        if self.is_overlapped && k >= 1.0 { 36.0 * k * k / (38.0 * k - 2.0) } else { k }
    }

    /// Noise bandwidth of a bin, Hz.
    pub fn noise_bandwidth_hz(&self) -> f64 {
        HANN_ENBW_BINS * self.bin_hz()
    }
}
