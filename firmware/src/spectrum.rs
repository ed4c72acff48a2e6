//! Averaged power spectra of both modes at the full rate, from one complex transform per segment.
//!
//! * Segments of 1024 pairs, 50 % overlap, mean removed, periodic Hann window: Welch, IEEE Trans.
//!   AU-15, 1967; window figures in Harris, Proc. IEEE 66(1), 1978.
//! * One transform for the pair (two real signals in one complex transform, a textbook identity):
//!   z = CM + j DM, then with P = Z[k] and Q = conj Z[N−k]: |CM|² = |P+Q|²/4, |DM|² = |P−Q|²/4.
//! * Result: one-sided power spectral density in V²/Hz, `2|X|²/(fs Σw²)`, 1× at 0 Hz and at fs/2.
//!
//! The transform in `f32` leaks about 6e-8 of the differential mode's r.m.s. value per sample into the
//! common mode (and the other way): far below any converter.
//!
//! Segments may be skipped to save time; the message then says how many. The ladder of lower rates
//! is another user of this accumulator: it holds one rung and knows its rate only when publishing.

use crate::block::Block;
use crate::fft::{Complexes, POINTS, transform};
use legwise_protocol::bytes::Bytes;
use legwise_protocol::message::{Message, Mode, PAYLOAD_BYTES, SpectrumPart};
use legwise_protocol::power;

const HALF: usize = POINTS / 2;
/// Bins from 0 Hz to half the rate.
pub const BINS: usize = HALF + 1;
/// Σw² of the periodic Hann window: 3N/8.
const WINDOW_POWER: f32 = 3.0 * POINTS as f32 / 8.0;
/// Bins one message carries.
const BINS_PER_PART: usize = PAYLOAD_BYTES / 2;

/// First half of the periodic Hann window, `(1 − cos 2πn/N)/2`; the other half mirrors it.
static WINDOW: [f32; BINS] = {
    let mut window = [0.0; BINS];
    let mut n = 0;
    while n < BINS {
        window[n] = (0.5 - 0.5 * crate::trigonometry::sine_cosine_of_turn(n, POINTS).1) as f32;
        n += 1;
    }
    window
};

/// Segment under construction, sums, and the transform's working space.
#[derive(Debug)]
pub struct SpectrumMeter {
    /// Volts: common mode in `re`, differential mode in `im`.
    segment: Complexes,
    filled: usize,
    /// Pairs still to be passed over before the next segment.
    pass_over: u32,
    first_sample: u64,
    end_sample: u64,
    segments: u32,
    skipped: u32,
    common: [f32; BINS],
    differential: [f32; BINS],
    work: Complexes,
    transformed: Complexes,
}

impl Default for SpectrumMeter {
    fn default() -> Self {
        Self {
            segment: Complexes::ZERO,
            filled: 0,
            pass_over: 0,
            first_sample: 0,
            end_sample: 0,
            segments: 0,
            skipped: 0,
            common: [0.0; BINS],
            differential: [0.0; BINS],
            work: Complexes::ZERO,
            transformed: Complexes::ZERO,
        }
    }
}

impl SpectrumMeter {
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
        while !dm.is_empty() {
            let over = dm.len().min(self.pass_over as usize);
            self.pass_over -= over as u32;
            let room = (dm.len() - over).min(POINTS - self.filled);
            let slots = self.segment.re.iter_mut().zip(&mut self.segment.im).skip(self.filled);
            let pairs = twice_cm.iter().zip(dm).skip(over).take(room);
            for ((re, im), (&sum, &difference)) in slots.zip(pairs) {
                *re = sum as f32 * 0.5e-6;
                *im = difference as f32 * 1e-6;
            }
            self.filled += room;
            let used = over + room;
            sample += used as u64;
            twice_cm = twice_cm.get(used..).unwrap_or(&[]);
            dm = dm.get(used..).unwrap_or(&[]);
            if self.filled == POINTS {
                self.transform_segment(sample);
                self.move_on(skip);
            }
        }
    }

    /// Forgets the segment under construction: a gap follows.
    pub fn break_off(&mut self) {
        self.filled = 0;
        self.pass_over = 0;
    }

    /// Sends both spectra and starts a new average; nothing when no segment was complete.
    pub fn finish(&mut self, sample_rate_mhz: u64, records: &mut dyn FnMut(&Message)) {
        if self.segments > 0 {
            let rate = sample_rate_mhz as f32 * 1e-3;
            // Each sum holds |P±Q|² = 4|X|²; 2/(fs Σw² K) · 1/4.
            let scale = 0.5 / (rate * WINDOW_POWER * self.segments as f32);
            self.send(Mode::Common, &self.common, scale, records);
            self.send(Mode::Differential, &self.differential, scale, records);
        }
        self.segments = 0;
        self.skipped = 0;
        self.common = [0.0; BINS];
        self.differential = [0.0; BINS];
    }

    /// Keeps the second half as the first of the next segment, or passes over some.
    fn move_on(&mut self, skip: u16) {
        if skip == 0 {
            self.segment.re.copy_within(HALF.., 0);
            self.segment.im.copy_within(HALF.., 0);
            self.filled = HALF;
        } else {
            // Without overlap half a segment is passed over anyway: skip 1 leaves no hole.
            self.filled = 0;
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
        windowed(&self.segment.re, &mut self.work.re);
        windowed(&self.segment.im, &mut self.work.im);
        transform(&mut self.work, &mut self.transformed);
        self.accumulate();
    }

    /// Adds |P+Q|² and |P−Q|² of every bin.
    fn accumulate(&mut self) {
        let (re, im) = (&self.transformed.re, &self.transformed.im);
        // Bin 0 is its own mirror; bins 1.. mirror N-1 downwards.
        let mirror_re = re.iter().take(1).chain(re.iter().rev());
        let mirror_im = im.iter().take(1).chain(im.iter().rev());
        let own = re.iter().zip(im);
        let sums = self.common.iter_mut().zip(&mut self.differential);
        for (((&p_re, &p_im), (&q_re, &q_im)), (common, differential)) in
            own.zip(mirror_re.zip(mirror_im)).zip(sums)
        {
            let (sum_re, sum_im) = (p_re + q_re, p_im - q_im);
            let (difference_re, difference_im) = (p_re - q_re, p_im + q_im);
            *common += sum_re * sum_re + sum_im * sum_im;
            *differential += difference_re * difference_re + difference_im * difference_im;
        }
    }

    fn send(&self, mode: Mode, sums: &[f32; BINS], scale: f32, records: &mut dyn FnMut(&Message)) {
        for (number, bins) in sums.chunks(BINS_PER_PART).enumerate() {
            let first_bin = number * BINS_PER_PART;
            let mut codes = Bytes::new();
            for (bin, &sum) in (first_bin..).zip(bins) {
                let is_single = bin == 0 || bin == HALF;
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

/// Mean removed, then windowed.
fn windowed(values: &[f32; POINTS], out: &mut [f32; POINTS]) {
    let mean = mean(values);
    let (out_rise, out_fall) = out.split_at_mut(HALF);
    let (rise, fall) = values.split_at(HALF);
    for ((out, &value), &window) in out_rise.iter_mut().zip(rise).zip(&WINDOW) {
        *out = (value - mean) * window;
    }
    for ((out, &value), &window) in out_fall.iter_mut().zip(fall).zip(WINDOW.iter().rev()) {
        *out = (value - mean) * window;
    }
}

/// Mean in a fixed order of four interleaved sums: the same on every machine, and short of round-off.
fn mean(values: &[f32; POINTS]) -> f32 {
    let mut sums = [0.0_f32; 4];
    for group in values.chunks_exact(4) {
        for (sum, &value) in sums.iter_mut().zip(group) {
            *sum += value;
        }
    }
    let [s0, s1, s2, s3] = sums;
    ((s0 + s1) + (s2 + s3)) * (1.0 / POINTS as f32)
}
