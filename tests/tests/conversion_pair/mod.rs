//! A pair with known conversion and a driver with known imbalance, as averaged spectra.
//!
//! Everything in `f64` and independent of the device: the differential mode is data with idle gaps plus
//! `h0·c[n] + h1·c[n−1]` of the common mode, the common mode is coloured noise and lines plus a share of the
//! data, both legs have noise of their own. Segments of 1024 points with half overlap are idle when none
//! of their four blocks of 256 samples saw the differential mode leave its rest, driven otherwise. The
//! averages are coded as the wire codes them.
#![allow(dead_code, reason = "each test file uses its share")]

use core::f64::consts::TAU;
use legwise::spectrum::conversion::{Coding, Record};
use legwise::spectrum::rung::{RungBin, RungSpectra, SegmentSet};
use legwise_protocol::power;
use legwise_tests::waveforms::dice;
use rand::RngExt;
use rand_chacha::ChaCha8Rng;
use rand_distr::{Distribution, StandardNormal};
use rustfft::num_complex::Complex64;
use rustfft::{Fft, FftPlanner};
use std::sync::Arc;

pub const RATE_HZ: f64 = 500_000.0;
pub const POINTS: usize = 1024;
const BLOCK: usize = 256;
/// DM this far from its rest is activity.
const ACTIVITY_V: f64 = 0.5;
/// Differential mode of the idle bus, and of driven bits.
const REST_V: f64 = 0.2;
const DRIVEN_V: f64 = 2.0;

/// What happens on the bus.
#[derive(Clone, Debug)]
pub struct Scene {
    /// The conversion: `h0 + h1·e^(-jω)`.
    pub filter: (f64, f64),
    /// Share of the data that the driver puts into the common mode.
    pub imbalance: f64,
    /// Common-mode noise, V rms, each sample 0.5 of the last one plus a normal number.
    pub common_rms_v: f64,
    /// Lines in the common mode: bins of 1024 points, peak amplitude.
    pub lines: Vec<(f64, f64)>,
    /// Lines in the differential mode alone.
    pub own_lines: Vec<(f64, f64)>,
    /// White noise of the two legs, V rms.
    pub leg_noise_v: (f64, f64),
    /// How much too much the second leg reads.
    pub gain_error: f64,
    /// Share of time in which the bus is driven.
    pub duty: f64,
    /// Bits per second.
    pub baud: f64,
    /// Length in samples.
    pub samples: usize,
}

impl Default for Scene {
    fn default() -> Self {
        Self {
            filter: (0.0, 0.0),
            imbalance: 0.0,
            common_rms_v: 0.0,
            lines: vec![],
            own_lines: vec![],
            leg_noise_v: (3.4e-3, 3.4e-3),
            gain_error: 0.0,
            duty: 0.0,
            baud: 115_200.0,
            samples: 65_536,
        }
    }
}

impl Scene {
    /// The true conversion at a frequency.
    pub fn truth(&self, frequency_hz: f64) -> Complex64 {
        self.filter.0 + self.filter.1 * Complex64::from_polar(1.0, -TAU * frequency_hz / RATE_HZ)
    }

    /// Differential mode of the drivers: messages with gaps between them.
    fn data(&self, dice: &mut ChaCha8Rng) -> Vec<f64> {
        let bit_samples = RATE_HZ / self.baud;
        let mut data = vec![REST_V; self.samples];
        let mut at = 0.0;
        // The first message begins somewhere: before the start in a busy bus.
        while self.duty > 0.0 && at < self.samples as f64 {
            let bits = dice.random_range(33..330);
            let gap = bits as f64 * bit_samples * (1.0 - self.duty) / self.duty;
            let share: f64 = dice.random();
            at += -gap * (1.0 - share).ln();
            for _ in 0..bits {
                let level = if dice.random::<bool>() { DRIVEN_V } else { -DRIVEN_V };
                let (from, to) = (at.ceil() as usize, (at + bit_samples).ceil() as usize);
                for sample in data.iter_mut().take(to).skip(from) {
                    *sample = level;
                }
                at += bit_samples;
            }
        }
        data
    }

    /// Both modes as the legs show them.
    fn modes(&self, dice: &mut ChaCha8Rng) -> (Vec<f64>, Vec<f64>) {
        let data = self.data(dice);
        let mut normal = || -> f64 { StandardNormal.sample(&mut *dice) };
        let (mut lines, mut own_lines) = (Tones::new(&self.lines), Tones::new(&self.own_lines));
        // A first-order process: variance 1/(1 − 0.25).
        let step = self.common_rms_v * 0.75_f64.sqrt();
        let (mut noise, mut before) = (0.0, 0.0);
        let (mut common, mut differential) = (Vec::new(), Vec::new());
        for data in data {
            noise = 0.5 * noise + step * normal();
            let now = noise + lines.next();
            let converted = self.filter.0 * now + self.filter.1 * before;
            let cm = now + self.imbalance * (data - REST_V);
            let dm = data + converted + own_lines.next();
            let leg_a = cm + dm / 2.0 + self.leg_noise_v.0 * normal();
            let leg_b = (1.0 + self.gain_error) * (cm - dm / 2.0) + self.leg_noise_v.1 * normal();
            common.push((leg_a + leg_b) / 2.0);
            differential.push(leg_a - leg_b);
            before = now;
        }
        (common, differential)
    }
}

/// A sum of tones, each turned by one complex product per sample.
struct Tones(Vec<(Complex64, Complex64)>);

impl Tones {
    fn new(lines: &[(f64, f64)]) -> Self {
        let tone = |(number, (bins, amplitude)): (usize, &(f64, f64))| {
            let start = Complex64::from_polar(*amplitude, 2.1 * number as f64);
            (start, Complex64::from_polar(1.0, TAU * bins / POINTS as f64))
        };
        Self(lines.iter().enumerate().map(tone).collect())
    }

    fn next(&mut self) -> f64 {
        let mut sum = 0.0;
        for (now, turn) in &mut self.0 {
            sum += now.re;
            *now *= *turn;
        }
        sum
    }
}

/// Sums of one set.
struct Sums {
    common: Vec<f64>,
    differential: Vec<f64>,
    cross: Vec<Complex64>,
    segments: u64,
}

/// Turns scenes into spectra.
pub struct Analyser {
    transform: Arc<dyn Fft<f64>>,
    window: Vec<f64>,
}

/// Both sets of one run.
pub struct Sets {
    pub idle: RungSpectra,
    pub driven: RungSpectra,
}

impl Sets {
    pub fn records(&self, coding: Coding) -> [Record<'_>; 2] {
        [Record { spectra: &self.idle, coding }, Record { spectra: &self.driven, coding }]
    }
}

impl Analyser {
    pub fn new() -> Self {
        let window = (0..POINTS).map(|n| 0.5 - 0.5 * (TAU * n as f64 / POINTS as f64).cos()).collect();
        Self { transform: FftPlanner::new().plan_fft_forward(POINTS), window }
    }

    /// The exact averages of a scene; `lapse` is the probability that a driven segment is taken for idle.
    pub fn analyse(&self, scene: &Scene, seed: u64, lapse: f64) -> Sets {
        let mut dice = dice(seed);
        let (common, differential) = scene.modes(&mut dice);
        let active: Vec<bool> = differential
            .chunks(BLOCK)
            .map(|block| block.iter().any(|value| (value - REST_V).abs() > ACTIVITY_V))
            .collect();
        let mut sets = [Sums::new(), Sums::new()];
        for first in (0..=scene.samples - POINTS).step_by(POINTS / 2) {
            let blocks = &active[first / BLOCK..(first + POINTS) / BLOCK];
            let is_driven = blocks.contains(&true) && !(lapse > 0.0 && dice.random::<f64>() < lapse);
            let segment = first..first + POINTS;
            sets[usize::from(is_driven)].add(self, &common[segment.clone()], &differential[segment]);
        }
        let [idle, driven] = sets;
        let samples = scene.samples as u64;
        Sets {
            idle: idle.finish(SegmentSet::Idle, samples),
            driven: driven.finish(SegmentSet::Driven, samples),
        }
    }

    /// The spectra of two signals, all segments in the idle set.
    pub fn welch(&self, common: &[f64], differential: &[f64]) -> RungSpectra {
        let mut sums = Sums::new();
        for first in (0..=common.len() - POINTS).step_by(POINTS / 2) {
            sums.add(self, &common[first..first + POINTS], &differential[first..first + POINTS]);
        }
        sums.finish(SegmentSet::Idle, common.len() as u64)
    }
}

impl Sums {
    fn new() -> Self {
        let bins = POINTS / 2 + 1;
        let zero = Complex64::default();
        Self { common: vec![0.0; bins], differential: vec![0.0; bins], cross: vec![zero; bins], segments: 0 }
    }

    fn add(&mut self, analyser: &Analyser, common: &[f64], differential: &[f64]) {
        let mean = |x: &[f64]| x.iter().sum::<f64>() / x.len() as f64;
        let (common_mean, differential_mean) = (mean(common), mean(differential));
        let mut buffer: Vec<Complex64> = common
            .iter()
            .zip(differential)
            .zip(&analyser.window)
            .map(|((c, d), w)| Complex64::new((c - common_mean) * w, (d - differential_mean) * w))
            .collect();
        analyser.transform.process(&mut buffer);
        for bin in 0..=POINTS / 2 {
            let (p, q) = (buffer[bin], buffer[(POINTS - bin) % POINTS].conj());
            let (c, d) = ((p + q) / 2.0, (p - q) / Complex64::new(0.0, 2.0));
            self.common[bin] += c.norm_sqr();
            self.differential[bin] += d.norm_sqr();
            self.cross[bin] += c.conj() * d;
        }
        self.segments += 1;
    }

    fn finish(self, set: SegmentSet, span_samples: u64) -> RungSpectra {
        // Periodic Hann: Σ w² = 3N/8. One-sided, twice but at both ends.
        let scale = 1.0 / (RATE_HZ * 0.375 * POINTS as f64 * self.segments.max(1) as f64);
        let bins = (0..=POINTS / 2)
            .map(|bin| {
                let scale = if bin == 0 || bin == POINTS / 2 { scale } else { 2.0 * scale };
                RungBin {
                    common: self.common[bin] * scale,
                    differential: self.differential[bin] * scale,
                    cross: (self.cross[bin].re * scale, self.cross[bin].im * scale),
                }
            })
            .collect();
        RungSpectra {
            rung: 0,
            rate_hz: RATE_HZ,
            points: POINTS as u32,
            set,
            segments: self.segments,
            skipped: 0,
            is_overlapped: true,
            other: 0,
            first_sample: 0,
            span_samples,
            first_bin: 0,
            bins,
        }
    }
}

/// The spectra as the host receives them: 16-bit powers, cross parts with five bits of fraction.
pub fn over_the_wire(spectra: &RungSpectra) -> RungSpectra {
    let power = |value: f64| power::decode(power::encode(value as f32));
    let bins = spectra.bins.iter().map(|bin| RungBin {
        common: power(bin.common),
        differential: power(bin.differential),
        cross: (cross_part(bin.cross.0), cross_part(bin.cross.1)),
    });
    RungSpectra { bins: bins.collect(), ..spectra.clone() }
}

/// Nearest value with five bits after the leading one.
fn cross_part(value: f64) -> f64 {
    if value == 0.0 {
        return 0.0;
    }
    let step = (value.abs().log2().floor() - 5.0).exp2();
    (value / step).round() * step
}

/// Mean of equal shapes weighted by segments: what the host does with averages that follow each other.
pub fn mean_of(parts: &[RungSpectra]) -> RungSpectra {
    let segments: u64 = parts.iter().map(|part| part.segments).sum();
    let mut mean = parts[0].clone();
    for (place, bin) in mean.bins.iter_mut().enumerate() {
        let sum = |value: &dyn Fn(&RungBin) -> f64| {
            let weighted = parts.iter().map(|part| part.segments as f64 * value(&part.bins[place]));
            weighted.sum::<f64>() / segments as f64
        };
        *bin = RungBin {
            common: sum(&|bin| bin.common),
            differential: sum(&|bin| bin.differential),
            cross: (sum(&|bin| bin.cross.0), sum(&|bin| bin.cross.1)),
        };
    }
    mean.segments = segments;
    mean
}
