//! Averaged power spectra of both modes at the full rate, from one complex transform per segment.
//!
//! * Segments of 1024 pairs, 50 % overlap, mean removed, periodic Hann window: Welch, IEEE Trans.
//!   AU-15, 1967; window figures in Harris, Proc. IEEE 66(1), 1978.
//! * One transform for the pair (two real signals in one complex transform, a textbook identity):
//!   `z = CM + j DM`, then with `P = Z[k]` and `Q = conj Z[N−k]`: `|CM|² = |P+Q|²/4`, `|DM|² = |P−Q|²/4`.
//! * Result: one-sided power spectral density in V²/Hz, `2|X|²/(fs Σw²)`, 1× at 0 Hz and at fs/2.
//!
//! The transform in `f32` leaks about 6e-8 of the differential mode's r.m.s. value per sample into the
//! common mode (and the other way): far below any converter.
//!
//! Segments may be skipped to save time; the message then says how many. The ladder of lower rates
//! is another user of this accumulator: it holds one rung and knows its rate only when publishing.

use crate::block::Block;
use crate::fft::{Complex, Complexes, POINTS, transform};
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

/// First half of the periodic Hann window in volts per microvolt, `(1 − cos 2πn/N)/2 · 1e-6`; the other
/// half mirrors it.
static WINDOW: [f32; BINS] = {
    let mut window = [0.0; BINS];
    let mut n = 0;
    while n < BINS {
        window[n] = ((0.5 - 0.5 * crate::trigonometry::sine_cosine_of_turn(n, POINTS).1) * 1e-6) as f32;
        n += 1;
    }
    window
};

/// Segment under construction, sums, and the transform's working space.
#[derive(Debug)]
pub struct SpectrumMeter {
    /// VA+VB of the segment, microvolts.
    twice_cm: [i32; POINTS],
    /// VA−VB of the segment, microvolts.
    dm: [i32; POINTS],
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
        Self::new()
    }
}

impl SpectrumMeter {
    /// No segment yet.
    pub const fn new() -> Self {
        Self {
            twice_cm: [0; POINTS],
            dm: [0; POINTS],
            filled: 0,
            pass_over: 0,
            first_sample: 0,
            end_sample: 0,
            segments: 0,
            skipped: 0,
            common: [0.0; BINS],
            differential: [0.0; BINS],
            work: [Complex::ZERO; POINTS],
            transformed: [Complex::ZERO; POINTS],
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
        while !dm.is_empty() {
            let over = dm.len().min(self.pass_over as usize);
            self.pass_over -= over as u32;
            let room = (dm.len() - over).min(POINTS - self.filled);
            fill(&mut self.twice_cm, self.filled, twice_cm.get(over..over + room));
            fill(&mut self.dm, self.filled, dm.get(over..over + room));
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
        self.clear();
    }

    fn clear(&mut self) {
        self.segments = 0;
        self.skipped = 0;
        self.common.fill(0.0);
        self.differential.fill(0.0);
    }

    /// Keeps the second half as the first of the next segment, or passes over some.
    fn move_on(&mut self, skip: u16) {
        if skip == 0 {
            self.twice_cm.copy_within(HALF.., 0);
            self.dm.copy_within(HALF.., 0);
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
        self.apply_window();
        transform(&mut self.work, &mut self.transformed);
        self.accumulate();
    }

    /// Volts, mean removed and windowed: common mode into `re`, differential mode into `im`.
    fn apply_window(&mut self) {
        let (cm_mean, dm_mean) = (mean(&self.twice_cm), mean(&self.dm));
        let (twice_cm, dm) = (self.twice_cm.split_at(HALF), self.dm.split_at(HALF));
        let (rise, fall) = self.work.split_at_mut(HALF);
        windowed(rise, (twice_cm.0, cm_mean), (dm.0, dm_mean), WINDOW.iter());
        windowed(fall, (twice_cm.1, cm_mean), (dm.1, dm_mean), WINDOW.iter().rev());
    }

    /// Adds |P+Q|² and |P−Q|² of every bin.
    fn accumulate(&mut self) {
        let [zero, rest @ ..] = &self.transformed;
        let [common_zero, common @ ..] = &mut self.common;
        let [differential_zero, differential @ ..] = &mut self.differential;
        // Bin 0 is its own mirror; bins 1.. mirror N-1 downwards.
        add_powers(*zero, *zero, common_zero, differential_zero);
        let sums = common.iter_mut().zip(differential);
        for ((p, q), (common, differential)) in rest.iter().zip(rest.iter().rev()).zip(sums) {
            add_powers(*p, *q, common, differential);
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

/// |P+Q|² and |P−Q|², where Q is the conjugate of `mirror`.
#[inline(always)]
fn add_powers(p: Complex, mirror: Complex, common: &mut f32, differential: &mut f32) {
    let (sum_re, sum_im) = (p.re + mirror.re, p.im - mirror.im);
    let (difference_re, difference_im) = (p.re - mirror.re, p.im + mirror.im);
    *common += sum_re * sum_re + sum_im * sum_im;
    *differential += difference_re * difference_re + difference_im * difference_im;
}

/// Half a segment: values less their mean, times the window.
#[inline(always)]
fn windowed<'a>(
    out: &mut [Complex],
    (twice_cm, cm_mean): (&[i32], i32),
    (dm, dm_mean): (&[i32], i32),
    window: impl Iterator<Item = &'a f32>,
) {
    for ((out, (&twice_cm, &dm)), &window) in out.iter_mut().zip(twice_cm.iter().zip(dm)).zip(window) {
        out.re = twice_cm.saturating_sub(cm_mean) as f32 * (window * 0.5);
        out.im = dm.saturating_sub(dm_mean) as f32 * window;
    }
}

/// Copies values to `slots` from `start` on.
fn fill(slots: &mut [i32; POINTS], start: usize, values: Option<&[i32]>) {
    let slots = slots.get_mut(start..).unwrap_or(&mut []);
    for (slot, &value) in slots.iter_mut().zip(values.unwrap_or(&[])) {
        *slot = value;
    }
}

/// Mean, rounded toward negative infinity: exact to a microvolt, far below any converter's step.
fn mean(values: &[i32; POINTS]) -> i32 {
    let sum: i64 = values.iter().map(|&value| i64::from(value)).sum();
    (sum >> POINTS.ilog2()) as i32
}
