//! Averaged spectra of one rung of the ladder and one set: both densities and the cross density.
//!
//! Rung k runs at 1/8^k of the sample rate. The set says which segments are in the average: *idle* ones,
//! in which the differential mode rested all the time, or *driven* ones. All densities are one-sided,
//! of segments with a periodic Hann window whose mean was removed; the cross density is
//! `S_cd = ⟨conj(C)·D⟩` in the same scale, so that `H = S_cd / S_cc` is what the pair makes of its common
//! mode.

use super::{Density, HANN_ENBW_BINS, PowerTable};
use legwise_protocol::cross::{self, BIN_BYTES, BinCodes};
use legwise_protocol::message::Mode;

pub use legwise_protocol::message::SegmentSet;

/// Decimation from one rung of the ladder to the next.
pub const RUNG_RATIO: f64 = 8.0;
/// Bins at an end of a rung whose median stands in for those it does not publish: [`RungSpectra::density`].
const EDGE_BINS: usize = 32;

/// Samples per second of a rung.
pub fn rate_of_rung(sample_rate_hz: f64, rung: u8) -> f64 {
    sample_rate_hz / RUNG_RATIO.powi(i32::from(rung))
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

impl RungBin {
    /// The density of one mode, V²/Hz.
    pub fn of(&self, mode: Mode) -> f64 {
        match mode {
            Mode::Common => self.common,
            Mode::Differential => self.differential,
        }
    }
}

/// One average.
#[derive(Clone, Debug, PartialEq)]
pub struct RungSpectra {
    /// 0 is the full rate.
    pub rung: u8,
    /// Samples per second of this rung; 0 when the log does not say.
    pub rate_hz: f64,
    /// Points per segment.
    pub points: u32,
    /// Which segments.
    pub set: SegmentSet,
    /// Segments averaged.
    pub segments: u64,
    /// Segments passed over meanwhile to save time.
    pub skipped: u64,
    /// Whether consecutive segments overlap by half: none was skipped.
    pub is_overlapped: bool,
    /// Segments passed over meanwhile because they belong to the other set.
    pub other: u64,
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

    /// The density of one mode from 0 Hz to half the rate, for a search for lines.
    ///
    /// Bins that the rung does not publish carry the median of the nearest published ones, so that the search
    /// meets neither a step nor a floor of nothing at the ends; what lies outside the published bins means
    /// nothing else.
    pub fn density(&self, mode: Mode) -> Density {
        let published: Vec<f64> = self.bins.iter().map(|bin| bin.of(mode)).collect();
        let end = published.len();
        let low = median(published.get(..end.min(EDGE_BINS)).unwrap_or_default());
        let high = median(published.get(end.saturating_sub(EDGE_BINS)..).unwrap_or_default());
        let count = (self.points as usize / 2 + 1).max(self.first_bin + end);
        let mut v2_per_hz = vec![low; self.first_bin];
        v2_per_hz.extend(published);
        v2_per_hz.resize(count, high);
        Density { points: self.points, sample_rate_hz: self.rate_hz, segments: self.segments, v2_per_hz }
    }
}

/// The value in the middle; 0 of nothing.
fn median(values: &[f64]) -> f64 {
    let mut values = values.to_vec();
    let middle = values.len() / 2;
    if values.is_empty() { 0.0 } else { *values.select_nth_unstable_by(middle, f64::total_cmp).1 }
}

/// Every code of a bin decoded once, for reading spectra by the ten thousand.
pub struct BinTable {
    powers: PowerTable,
    parts: Vec<f64>,
}

impl BinTable {
    /// Decodes all codes.
    pub fn new() -> Self {
        Self { powers: PowerTable::new(), parts: (0..0x1000).map(cross::decode).collect() }
    }

    /// The bin in seven bytes of the wire or the log.
    #[inline]
    pub fn decode(&self, bytes: [u8; BIN_BYTES]) -> RungBin {
        let codes = BinCodes::from_bytes(bytes);
        let part = |code: u16| self.parts.get(usize::from(code)).copied().unwrap_or(0.0);
        RungBin {
            common: self.powers.decode(codes.common),
            differential: self.powers.decode(codes.differential),
            cross: (part(codes.cross.0), part(codes.cross.1)),
        }
    }

    /// Replaces `bins` by those in `codes`; `false`, and no bins, when these are not whole ones.
    pub fn decode_all(&self, codes: &[u8], bins: &mut Vec<RungBin>) -> bool {
        bins.clear();
        let (chunks, rest) = codes.as_chunks::<BIN_BYTES>();
        if !rest.is_empty() {
            return false;
        }
        bins.extend(chunks.iter().map(|bytes| self.decode(*bytes)));
        true
    }
}

impl Default for BinTable {
    fn default() -> Self {
        Self::new()
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn spectra(first_bin: usize, bins: Vec<RungBin>) -> RungSpectra {
        RungSpectra {
            rung: 1,
            rate_hz: rate_of_rung(500_000.0, 1),
            points: 256,
            set: SegmentSet::Idle,
            segments: 50,
            skipped: 0,
            is_overlapped: true,
            other: 0,
            first_sample: 0,
            span_samples: 100_000,
            first_bin,
            bins,
        }
    }

    #[test]
    fn the_table_gives_what_the_codes_stand_for() {
        let table = BinTable::new();
        let codes = BinCodes { common: 40_000, differential: 33_333, cross: (0xB21, 0x355) };
        let expected = RungBin {
            common: legwise_protocol::power::decode(40_000),
            differential: legwise_protocol::power::decode(33_333),
            cross: (cross::decode(0xB21), cross::decode(0x355)),
        };
        assert!(expected.cross.0 < 0.0 && expected.cross.1 > 0.0);
        assert_eq!(table.decode(codes.to_bytes()), expected);
        let mut bins = vec![RungBin::default(); 9];
        let two = [codes.to_bytes(), BinCodes::default().to_bytes()].concat();
        assert!(table.decode_all(&two, &mut bins));
        assert_eq!(bins, [expected, RungBin::default()]);
        assert!(!table.decode_all(&two[1..], &mut bins) && bins.is_empty());
    }

    #[test]
    fn a_density_has_every_bin_and_no_step_where_none_were_published() {
        let bin = |level: f64| RungBin { common: level, differential: 3.0 * level, cross: (0.0, 0.0) };
        let mut bins: Vec<RungBin> = (0..80).map(|place| bin(1.0 + f64::from(place) / 80.0)).collect();
        bins[2] = bin(1e6);
        let spectra = spectra(20, bins);
        assert_eq!(spectra.frequency_hz(0), 20.0 * 62_500.0 / 256.0);
        let density = spectra.density(Mode::Differential);
        assert_eq!((density.v2_per_hz.len(), density.segments), (129, 50));
        assert_eq!(density.v2_per_hz[22], 3e6);
        // Medians of places 0 to 31 without place 2, and of places 48 to 79.
        assert_eq!(density.v2_per_hz[0], 3.0 * (1.0 + 17.0 / 80.0));
        assert_eq!(density.v2_per_hz[128], 3.0 * (1.0 + 64.0 / 80.0));
        let none = RungSpectra { bins: Vec::new(), first_bin: 0, ..spectra };
        assert_eq!(none.density(Mode::Common).v2_per_hz, vec![0.0; 129]);
    }
}
