//! Averaged power spectra of both modes at the full rate, from one complex transform per segment.
//!
//! * Segments of 1024 pairs, 50 % overlap, mean removed, periodic Hann window: Welch, IEEE Trans.
//!   AU-15, 1967; window figures in Harris, Proc. IEEE 66(1), 1978.
//! * One transform for the pair (two real signals in one complex transform, a textbook identity):
//!   `z = 2CM + j DM`, then with `P = Z[k]` and `Q = conj Z[N−k]`: `|2CM|² = |P+Q|²/4`, `|DM|² = |P−Q|²/4`.
//! * Result: one-sided power spectral density in V²/Hz, `2|X|²/(fs Σw²)`, 1× at 0 Hz and at fs/2.
//!
//! The transform's first pass windows what it fetches, its last adds up the powers: neither has a loop
//! of its own. The window is twice Hann's, `1 − cos 2πn/N`, from the transform's factors, and voltages
//! stay in microvolts; the scale of the result takes care of both.
//!
//! The transform in `f32` leaks about 6e-8 of the differential mode's r.m.s. value per sample into the
//! common mode (and the other way): far below any converter.
//!
//! Segments may be skipped to save time; the message then says how many. The ladder of lower rates
//! is another user of this accumulator: it holds one rung and knows its rate only when publishing.

use core::f32::consts::FRAC_1_SQRT_2;

use crate::block::Block;
use crate::fft::{BINS, COLUMNS, Complex, Complexes, POINTS, place, sine_cosine, transform};
use legwise_protocol::bytes::Bytes;
use legwise_protocol::message::{Message, Mode, PAYLOAD_BYTES, SpectrumPart};
use legwise_protocol::power;

const HALF: usize = POINTS / 2;
const ROWS: usize = HALF / COLUMNS;
/// Σw² of the window `1 − cos 2πn/N`: 3N/2.
const WINDOW_POWER: f32 = 1.5 * POINTS as f32;
/// Bins one message carries.
const BINS_PER_PART: usize = PAYLOAD_BYTES / 2;

/// Half a segment, column by column as the transform fetches it.
#[derive(Debug)]
struct Half {
    /// VA+VB and VA−VB, microvolts: sample n + N row/8 in column n. Exact below 2^24, that is 16.7 V;
    /// beyond, rounding is far below any converter's step.
    columns: [[Complex; ROWS]; COLUMNS],
    twice_cm_sum: i64,
    dm_sum: i64,
}

impl Half {
    const EMPTY: Self = Self { columns: [[Complex::ZERO; ROWS]; COLUMNS], twice_cm_sum: 0, dm_sum: 0 };

    /// Takes samples from `start` on, up to the end of the row at most; how many.
    fn fill(&mut self, start: usize, twice_cm: &[i32], dm: &[i32]) -> usize {
        if start == 0 {
            (self.twice_cm_sum, self.dm_sum) = (0, 0);
        }
        let (row, n) = (start / COLUMNS % ROWS, start % COLUMNS);
        let columns = self.columns.get_mut(n..).unwrap_or_default();
        let (mut twice_cm_sum, mut dm_sum) = (0, 0);
        for ((column, &twice_cm), &dm) in columns.iter_mut().zip(twice_cm).zip(dm) {
            twice_cm_sum += i64::from(twice_cm);
            dm_sum += i64::from(dm);
            column[row] = Complex { re: twice_cm as f32, im: dm as f32 };
        }
        self.twice_cm_sum += twice_cm_sum;
        self.dm_sum += dm_sum;
        columns.len().min(twice_cm.len()).min(dm.len())
    }
}

/// Sum and difference of two samples half a segment apart, less the mean, times the window:
/// `(1 − c) a ± (1 + c) b = s − c d, d − c s` with c the cosine at the older, s and d the sum and the
/// difference without window.
#[inline(always)]
fn windowed(older: Complex, newer: Complex, twice_mean: Complex, cosine: f32) -> (Complex, Complex) {
    let (sum, difference) = older.sum_and_difference(newer);
    let sum = Complex { re: sum.re - twice_mean.re, im: sum.im - twice_mean.im };
    (
        Complex { re: sum.re - cosine * difference.re, im: sum.im - cosine * difference.im },
        Complex { re: difference.re - cosine * sum.re, im: difference.im - cosine * sum.im },
    )
}

/// Sums over segments of `|P+Q|²` and `|P−Q|²` of a bin.
#[derive(Clone, Copy, Debug)]
struct Powers {
    common: f32,
    differential: f32,
}

impl Powers {
    const ZERO: Self = Self { common: 0.0, differential: 0.0 };

    /// Adds a segment; Q is the conjugate of `mirror`.
    #[inline(always)]
    fn add(&mut self, p: Complex, mirror: Complex) {
        let (sum_re, sum_im) = (p.re + mirror.re, p.im - mirror.im);
        let (difference_re, difference_im) = (p.re - mirror.re, p.im + mirror.im);
        self.common = self.common + sum_re * sum_re + sum_im * sum_im;
        self.differential = self.differential + difference_re * difference_re + difference_im * difference_im;
    }
}

/// Segment under construction, sums, and the transform's working space.
#[derive(Debug)]
pub struct SpectrumMeter {
    /// The older and the newer half of the segment: the other way round when `is_swapped`.
    halves: (Half, Half),
    is_swapped: bool,
    /// Whether the older half is there.
    has_older: bool,
    /// Pairs in the newer half.
    filled: usize,
    /// Pairs still to be passed over before the next segment.
    pass_over: u32,
    first_sample: u64,
    end_sample: u64,
    segments: u32,
    skipped: u32,
    powers: [Powers; BINS],
    work: Complexes,
}

impl Default for SpectrumMeter {
    fn default() -> Self {
        Self::new()
    }
}

impl SpectrumMeter {
    /// Nothing taken yet. All bytes are zero.
    pub const fn new() -> Self {
        Self {
            halves: (Half::EMPTY, Half::EMPTY),
            is_swapped: false,
            has_older: false,
            filled: 0,
            pass_over: 0,
            first_sample: 0,
            end_sample: 0,
            segments: 0,
            skipped: 0,
            powers: [Powers::ZERO; BINS],
            work: [Complex::ZERO; POINTS],
        }
    }

    /// Forgets the average and the segment under construction.
    pub fn restart(&mut self) {
        self.clear();
        self.break_off();
    }

    /// Segments in the average so far.
    pub const fn segments(&self) -> u32 {
        self.segments
    }

    /// Takes a block; transforms every segment that is complete. `skip` segments are passed over
    /// after each (0: none, consecutive segments overlap by half).
    pub fn take(&mut self, block: &Block<'_>, skip: u16) {
        let mut twice_cm = block.twice_cm;
        let mut dm = block.dm;
        let mut sample = block.first_sample;
        while !twice_cm.is_empty() && !dm.is_empty() {
            let over = dm.len().min(self.pass_over as usize);
            self.pass_over -= over as u32;
            let newer = if self.is_swapped { &mut self.halves.0 } else { &mut self.halves.1 };
            let rest = (twice_cm.get(over..).unwrap_or_default(), dm.get(over..).unwrap_or_default());
            let used = newer.fill(self.filled, rest.0, rest.1);
            self.filled += used;
            sample += (over + used) as u64;
            twice_cm = rest.0.get(used..).unwrap_or_default();
            dm = rest.1.get(used..).unwrap_or_default();
            if self.filled == HALF {
                self.filled = 0;
                self.take_half(sample, skip);
            }
        }
    }

    /// Forgets the segment under construction: a gap follows.
    pub fn break_off(&mut self) {
        self.filled = 0;
        self.has_older = false;
        self.pass_over = 0;
    }

    /// Sends both spectra and starts a new average; nothing when no segment was complete.
    pub fn finish(&mut self, sample_rate_mhz: u64, records: &mut dyn FnMut(&Message)) {
        if self.segments > 0 {
            let rate = sample_rate_mhz as f32 * 1e-3;
            // Each sum holds |P±Q|² = 4|X|² in µV²; 2/(fs Σw² K) · 1/4 · 1e-12, and CM is there twice.
            let scale = 0.5e-12 / (rate * WINDOW_POWER * self.segments as f32);
            self.send(Mode::Common, |powers| powers.common, 0.25 * scale, records);
            self.send(Mode::Differential, |powers| powers.differential, scale, records);
        }
        self.clear();
    }

    fn clear(&mut self) {
        self.segments = 0;
        self.skipped = 0;
        self.powers.fill(Powers::ZERO);
    }

    /// The newer half is full. It becomes the older, unless segments are passed over.
    fn take_half(&mut self, end_sample: u64, skip: u16) {
        let is_segment = self.has_older;
        if is_segment {
            self.transform_segment(end_sample);
        }
        self.is_swapped = !self.is_swapped;
        self.has_older = true;
        if is_segment && skip > 0 {
            // Without overlap half a segment is passed over anyway: skip 1 leaves no hole.
            self.has_older = false;
            self.pass_over = (u32::from(skip) - 1) * HALF as u32;
            self.skipped = self.skipped.saturating_add(u32::from(skip));
        }
    }

    fn transform_segment(&mut self, end_sample: u64) {
        if self.segments == 0 {
            self.first_sample = end_sample - POINTS as u64;
        }
        self.end_sample = end_sample;
        self.segments += 1;
        let (first, second) = (&self.halves.0, &self.halves.1);
        let (older, newer) = if self.is_swapped { (second, first) } else { (first, second) };
        // To a microvolt, far below any converter's step; twice, for two samples at a time.
        let twice_mean = |sum: i64| 2.0 * (sum >> POINTS.ilog2()) as i32 as f32;
        let twice_mean = Complex {
            re: twice_mean(older.twice_cm_sum + newer.twice_cm_sum),
            im: twice_mean(older.dm_sum + newer.dm_sum),
        };
        let column = |n: usize| {
            let (sine, cosine) = sine_cosine(n);
            let (difference, sum) = ((cosine - sine) * FRAC_1_SQRT_2, (cosine + sine) * FRAC_1_SQRT_2);
            // Cosines at n, n + N/8, n + 2N/8, n + 3N/8.
            let cosines = [cosine, difference, -sine, -sum];
            let (older, newer) = (&older.columns[n % COLUMNS], &newer.columns[n % COLUMNS]);
            core::array::from_fn(|row| windowed(older[row], newer[row], twice_mean, cosines[row]))
        };
        transform(&mut self.work, column, &mut self.powers, Powers::add);
    }

    fn send(&self, mode: Mode, sum: impl Fn(&Powers) -> f32, scale: f32, records: &mut dyn FnMut(&Message)) {
        for first_bin in (0..BINS).step_by(BINS_PER_PART) {
            let mut codes = Bytes::new();
            for bin in (first_bin..BINS).take(BINS_PER_PART) {
                let is_single = bin == 0 || bin == HALF;
                let sum = self.powers.get(place(bin)).map_or(0.0, &sum);
                let density = sum * scale * if is_single { 0.5 } else { 1.0 };
                codes.extend(&power::encode(density).to_le_bytes());
            }
            records(&Message::Spectrum(SpectrumPart {
                first_sample: self.first_sample,
                span_samples: self.end_sample - self.first_sample,
                mode,
                rung: 0,
                points: POINTS as u16,
                segments: self.segments,
                skipped: self.skipped,
                first_bin: first_bin as u16,
                codes,
            }));
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::block::Spans;
    use legwise_protocol::units::Span;
    use std::vec::Vec;

    fn take(meter: &mut SpectrumMeter, first_sample: u64, samples: &[(i32, i32)], skip: u16) {
        let (twice_cm, dm): (Vec<i32>, Vec<i32>) = samples.iter().copied().unzip();
        let span = Span::EMPTY;
        meter.take(
            &Block {
                first_sample,
                code_a: &[],
                code_b: &[],
                leg_a: &[],
                leg_b: &[],
                twice_cm: &twice_cm,
                dm: &dm,
                dm_before: 0,
                dm_after: 0,
                clipped: 0,
                spans: Spans { leg_a: span, leg_b: span, twice_cm: span, dm: span },
            },
            skip,
        );
    }

    fn finished(meter: &mut SpectrumMeter) -> Vec<SpectrumPart> {
        let mut parts = Vec::new();
        meter.finish(500_000_000, &mut |message| {
            if let Message::Spectrum(part) = message {
                parts.push(*part);
            }
        });
        parts
    }

    #[test]
    fn a_stream_gives_what_its_segments_give_one_by_one() {
        // Multiplicative congruential (Lewis, Goodman and Miller 1969), ±1 V.
        let mut seed = 7_u64;
        let mut noise = || {
            seed = seed * 16_807 % 2_147_483_647;
            (seed / 1074) as i32 - 1_000_000
        };
        let samples: Vec<_> = (0..20_000).map(|_| (2_000_000 + noise(), noise())).collect();
        for (skip, hop) in [(0, 512), (1, 1024), (2, 1536), (7, 4096)] {
            for block in [1, 100, 256, 5000] {
                let mut meter = SpectrumMeter::new();
                for (number, samples) in samples.chunks(block).enumerate() {
                    take(&mut meter, (number * block) as u64, samples, skip);
                }
                let mut single = SpectrumMeter::new();
                let mut first_sample = 0;
                while first_sample + POINTS <= samples.len() {
                    let segment = &samples[first_sample..first_sample + POINTS];
                    take(&mut single, first_sample as u64, segment, 0);
                    single.break_off();
                    first_sample += hop;
                }
                let (parts, singles) = (finished(&mut meter), finished(&mut single));
                assert!(parts.len() > 2, "{}", parts.len());
                for (part, single) in parts.iter().zip(&singles) {
                    assert_eq!(part.codes, single.codes, "skip {skip}, blocks of {block}");
                    assert_eq!((part.first_sample, part.segments), (0, single.segments));
                    assert_eq!(part.span_samples, single.span_samples);
                    assert_eq!(part.skipped, part.segments * u32::from(skip));
                }
            }
        }
    }
}
