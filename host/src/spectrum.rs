//! Averages stored spectra and says what they hold at large: noise floor, low-frequency rest.
//!
//! A log keeps averaged power spectral densities as 16-bit codes ([`legwise_protocol::power`]); a
//! night holds tens of thousands of them. Here they become one density per mode: the mean, each
//! spectrum weighted by the segments in it, which is the density one long average would have given.
//! [`lines`] finds and measures the tones in it. Spectra of the ladder hold both modes and their cross
//! density by rung and set ([`rung`]); [`average`] gives their means.
//!
//! Conventions: one-sided density in V²/Hz, periodic Hann window, mean removed per segment. With
//! `N` points at rate `fs` and the Hann noise bandwidth of 1.5 bins, power in a bin is
//! `density * 1.5 * fs / N`, and a tone of peak amplitude `A` on a bin shows `A²/2` there
//! (Harris, *On the use of windows for harmonic analysis with the DFT*, Proc. IEEE 66(1), 1978).

use legwise_protocol::power;

pub mod average;
pub mod conversion;
pub mod families;
pub mod ladder;
pub mod lines;
pub mod rung;

/// Equivalent noise bandwidth of the periodic Hann window, in bins (Harris 1978, table I).
pub const HANN_ENBW_BINS: f64 = 1.5;
/// Bins from 0 Hz that the removed mean and what drifts below it may colour: not searched for lines.
pub const BLANKED_BINS: usize = 3;

/// Every power code decoded once, for reading spectra by the ten thousand.
pub struct PowerTable(Vec<f64>);

impl PowerTable {
    /// Decodes all 65 536 codes.
    pub fn new() -> Self {
        Self((0..=u16::MAX).map(power::decode).collect())
    }

    /// The power of `code`, V²/Hz.
    #[inline]
    pub fn decode(&self, code: u16) -> f64 {
        self.0.get(usize::from(code)).copied().unwrap_or(0.0)
    }
}

impl Default for PowerTable {
    fn default() -> Self {
        Self::new()
    }
}

/// A running mean of spectra of one shape, weighted by segments.
#[derive(Clone, Debug)]
pub struct SpectrumAverage {
    points: u32,
    sample_rate_hz: f64,
    spectra: u64,
    segments: u64,
    weighted_sum: Vec<f64>,
}

impl SpectrumAverage {
    /// An empty mean of spectra with `points` points per segment at `sample_rate_hz`.
    pub fn new(points: u32, sample_rate_hz: f64) -> Self {
        let bins = points as usize / 2 + 1;
        Self { points, sample_rate_hz, spectra: 0, segments: 0, weighted_sum: vec![0.0; bins] }
    }

    /// Takes one spectrum: `codes` are its little-endian power codes from 0 Hz up.
    ///
    /// `false`, and nothing changes, when the spectrum is empty or not of this shape.
    pub fn add(&mut self, table: &PowerTable, codes: &[u8], segments: u32) -> bool {
        if segments == 0 || codes.len() != self.weighted_sum.len() * 2 {
            return false;
        }
        let weight = f64::from(segments);
        let (pairs, _) = codes.as_chunks::<2>();
        for (sum, code) in self.weighted_sum.iter_mut().zip(pairs) {
            *sum += weight * table.decode(u16::from_le_bytes(*code));
        }
        self.spectra += 1;
        self.segments += u64::from(segments);
        true
    }

    /// Spectra taken.
    pub fn spectra(&self) -> u64 {
        self.spectra
    }

    /// Segments in all spectra taken.
    pub fn segments(&self) -> u64 {
        self.segments
    }

    /// The mean, or `None` when nothing was taken.
    pub fn density(&self) -> Option<Density> {
        let weight = self.segments as f64;
        (self.segments > 0).then(|| Density {
            points: self.points,
            sample_rate_hz: self.sample_rate_hz,
            segments: self.segments,
            v2_per_hz: self.weighted_sum.iter().map(|sum| sum / weight).collect(),
        })
    }
}

/// One averaged one-sided power spectral density.
#[derive(Clone, Debug)]
pub struct Density {
    /// Points per segment.
    pub points: u32,
    /// Pairs per second.
    pub sample_rate_hz: f64,
    /// Segments averaged.
    pub segments: u64,
    /// `points / 2 + 1` densities in V²/Hz, from 0 Hz to half the rate.
    pub v2_per_hz: Vec<f64>,
}

impl Density {
    /// Distance between bins in Hz.
    pub fn bin_hz(&self) -> f64 {
        self.sample_rate_hz / f64::from(self.points.max(1))
    }

    /// Mean density over `bins` (cut to what exists), found from the median so that lines do not
    /// lift it, in V²/Hz. 0 for an empty range.
    ///
    /// The median of a mean of `n` exponential powers lies below their mean by `1/(3n)` to first
    /// order (a Gamma(n) variable has its median near `n - 1/3`); that is put right here.
    pub(crate) fn floor_of(&self, bins: impl Iterator<Item = usize>) -> f64 {
        let mut values: Vec<f64> = bins.filter_map(|bin| self.v2_per_hz.get(bin).copied()).collect();
        let middle = values.len() / 2;
        if values.is_empty() {
            return 0.0;
        }
        let (_, median, _) = values.select_nth_unstable_by(middle, f64::total_cmp);
        *median / (1.0 - 1.0 / (3.0 * self.segments.max(1) as f64))
    }

    /// Noise floor over the whole band, lines left out, in V/√Hz.
    pub fn noise_floor_v_per_rthz(&self) -> f64 {
        self.floor_of(BLANKED_BINS..self.v2_per_hz.len().saturating_sub(BLANKED_BINS)).sqrt()
    }

    /// What lies in the blanked bins next to 0 Hz: the frequency below which it lies, Hz, and its
    /// value, V rms. The mean of each segment is not in it.
    pub fn low_frequency_rest(&self) -> (f64, f64) {
        let bin_hz = self.bin_hz();
        let power: f64 = self.v2_per_hz.iter().take(BLANKED_BINS).map(|density| density * bin_hz).sum();
        ((BLANKED_BINS as f64 - 0.5) * bin_hz, power.sqrt())
    }
}

#[cfg(test)]
mod tests;
