//! Sinusoids: mains with harmonics, a supply's line, the midpoint of a six-pulse rectifier.
//!
//! The phase of sample n is `n * increment` in units of 2^-64 turns, with wrapping multiplication: it
//! is exact after any number of hours. Within a block a table of cos and sin of the phase *since the
//! block's start* is shared by both legs, so a sample costs two multiply-adds. The RC pole is applied
//! as its complex response `1/(1 + j w tau)`, and a leg's sampling delay as phase: both exact.

use super::envelope::{Envelope, Level};
use super::{Block, LegClock, filter_tau};
use crate::line::{BLOCK, Wave};
use std::f64::consts::TAU;

/// 2^64.
const TURN: f64 = 18_446_744_073_709_551_616.0;

/// One sinusoid.
#[derive(Clone, Debug)]
pub(crate) struct Tone {
    /// Turns per sample times 2^64, modulo a turn.
    increment: u64,
    /// Multiple of the fundamental: the drift follows it.
    order: f64,
    /// Per leg: amplitude and phase in turns, after the RC pole and the sampling delay.
    reach: [(f64, f64); 2],
    cosine: Box<Wave>,
    sine: Box<Wave>,
}

impl Tone {
    /// `turns_per_sample` is frequency over sample rate; `phase` in turns.
    pub fn new(turns_per_sample: f64, order: f64, amplitude: f64, phase: f64, legs: [LegClock; 2]) -> Self {
        let reach = legs.map(|leg| {
            let lag = TAU * turns_per_sample * filter_tau(leg);
            let gain = 1.0 / lag.hypot(1.0);
            (amplitude * gain, phase + turns_per_sample * leg.delay - lag.atan() / TAU)
        });
        let increment = (turns_per_sample.fract() * TURN) as u64;
        let mut tone =
            Self { increment, order, reach, cosine: Box::new([0.0; BLOCK]), sine: Box::new([0.0; BLOCK]) };
        tone.tabulate(turns_per_sample.fract());
        tone
    }

    /// Fills the table for a step of `turns` per sample, by rotation from four exact starts.
    fn tabulate(&mut self, turns: f64) {
        let (step_sin, step_cos) = (TAU * turns).sin_cos();
        for quarter in 0..4 {
            let start = quarter * BLOCK / 4;
            let (mut sin, mut cos) = (TAU * (turns * start as f64).fract()).sin_cos();
            for sample in start..start + BLOCK / 4 {
                self.cosine[sample] = cos as f32;
                self.sine[sample] = sin as f32;
                (cos, sin) = (cos * step_cos - sin * step_sin, sin * step_cos + cos * step_sin);
            }
        }
    }

    /// Sine and cosine parts at the block's first sample for a leg.
    fn start(&self, leg: usize, first: u64, drift_turns: f64) -> (f64, f64) {
        let (amplitude, phase) = self.reach[leg];
        let turns = self.increment.wrapping_mul(first) as f64 / TURN + phase + drift_turns * self.order;
        let (sin, cos) = (TAU * turns.fract()).sin_cos();
        (amplitude * sin, amplitude * cos)
    }
}

/// A fundamental with harmonics, possibly swinging in frequency.
#[derive(Clone, Debug)]
pub(crate) struct Tones {
    tones: Vec<Tone>,
    /// Swing of the fundamental and rate of the swing, both in turns per sample.
    drift: Option<(f64, f64)>,
    tabulated: Option<u64>,
}

impl Tones {
    /// `drift`: swing of the fundamental and rate of that swing, turns per sample.
    pub fn new(tones: Vec<Tone>, drift: Option<(f64, f64)>) -> Self {
        Self { tones, drift, tabulated: None }
    }

    /// Turns the fundamental is ahead at a sample: the integral of `swing * sin(2 pi rate n)`.
    fn ahead(&self, sample: f64) -> f64 {
        self.drift
            .map_or(0.0, |(swing, rate)| swing / (TAU * rate) * (1.0 - (TAU * (rate * sample).fract()).cos()))
    }

    /// Writes one block for a leg; `false` when it is off.
    pub fn fill(&mut self, leg: usize, block: Block<'_>, envelope: &mut Envelope, wave: &mut Wave) -> bool {
        let mut shape = [0.0; BLOCK];
        let level = envelope.fill(block.first as f64, &mut shape);
        if level == Level::Constant(0.0) {
            return false;
        }
        let ahead = self.ahead(block.first as f64);
        if self.drift.is_some() && self.tabulated != Some(block.first) {
            let gained = (self.ahead((block.first + BLOCK as u64) as f64) - ahead) / BLOCK as f64;
            for tone in &mut self.tones {
                let turns = tone.increment as f64 / TURN + gained * tone.order;
                tone.tabulate(turns);
            }
            self.tabulated = Some(block.first);
        }
        wave.fill(0.0);
        for tone in &self.tones {
            let (sine, cosine) = tone.start(leg, block.first, ahead);
            let (sine, cosine) = (sine as f32, cosine as f32);
            for ((value, cos), sin) in wave.iter_mut().zip(tone.cosine.iter()).zip(tone.sine.iter()) {
                *value += sine * cos + cosine * sin;
            }
            if let Some(jitter) = block.jitter {
                let slope = (TAU * tone.increment as f64 / TURN) as f32;
                for (sample, value) in wave.iter_mut().enumerate() {
                    let per_sample = cosine * tone.cosine[sample] - sine * tone.sine[sample];
                    *value += jitter[sample] * slope * per_sample;
                }
            }
        }
        apply(level, &shape, wave);
        true
    }
}

/// Average of the highest and the lowest of three phases of amplitude 1: `(max + min)/2`.
#[derive(Clone, Debug)]
pub(crate) struct SixPulse {
    phase: Tone,
}

impl SixPulse {
    /// `turns_per_sample` is mains frequency over sample rate.
    pub fn new(turns_per_sample: f64, legs: [LegClock; 2]) -> Self {
        Self { phase: Tone::new(turns_per_sample, 1.0, 1.0, 0.0, legs) }
    }

    /// Writes one block for a leg; `false` when it is off.
    pub fn fill(&mut self, leg: usize, block: Block<'_>, envelope: &mut Envelope, wave: &mut Wave) -> bool {
        let mut shape = [0.0; BLOCK];
        let level = envelope.fill(block.first as f64, &mut shape);
        if level == Level::Constant(0.0) {
            return false;
        }
        let (sine, cosine) = self.phase.start(leg, block.first, 0.0);
        let (sine, cosine) = (sine as f32, cosine as f32);
        let tables = self.phase.cosine.iter().zip(self.phase.sine.iter());
        for (value, (&cos, &sin)) in wave.iter_mut().zip(tables) {
            let one = sine * cos + cosine * sin;
            let quadrature = (cosine * cos - sine * sin) * 0.866_025_4;
            let (two, three) = (-0.5 * one - quadrature, -0.5 * one + quadrature);
            *value = 0.5 * (one.max(two).max(three) + one.min(two).min(three));
        }
        apply(level, &shape, wave);
        true
    }
}

fn apply(level: Level, shape: &Wave, wave: &mut Wave) {
    match level {
        Level::Constant(1.0) => {}
        Level::Constant(factor) => wave.iter_mut().for_each(|value| *value *= factor),
        Level::Varying => wave.iter_mut().zip(shape).for_each(|(value, factor)| *value *= factor),
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::line::schedule::{Gate, Occurrences};

    fn legs(filter_tau: f64, delay: f64) -> [LegClock; 2] {
        [LegClock { filter_tau: 0.0, delay: 0.0 }, LegClock { filter_tau, delay }]
    }

    fn always() -> Envelope {
        Envelope::new(Gate::new(Occurrences::new(None, "x", 1, 1.0)), true, 1.0, None, 0.0)
    }

    fn block(first: u64) -> Block<'static> {
        Block { first, jitter: None }
    }

    /// Twelve hours at 200 kS/s: 8.64e9 samples. 1/8 turn per sample is exact in binary, so the true
    /// phase there is known without any large product.
    #[test]
    fn phase_is_still_exact_after_twelve_hours() {
        let mut tones = Tones::new(vec![Tone::new(0.125, 1.0, 1.0, 0.0, legs(0.0, 0.0))], None);
        let mut wave = [0.0; BLOCK];
        let first = 8_640_000_000 / BLOCK as u64 * BLOCK as u64;
        assert!(tones.fill(0, block(first), &mut always(), &mut wave));
        for (sample, &value) in wave.iter().enumerate() {
            let exact = (TAU * ((first + sample as u64) % 8) as f64 / 8.0).sin();
            // The always-present 1e-4-sample pole turns the phase by 8e-5 rad.
            assert!((f64::from(value) - exact).abs() < 1e-4, "{sample}: {value} against {exact}");
        }
    }

    /// |H| = 1/sqrt(1 + (w tau)^2), phase -atan(w tau), plus the delay: textbook one-pole response.
    #[test]
    fn pole_and_delay_act_as_the_textbook_says() {
        let (turns, tau, delay) = (0.0371, 1.7, 0.4);
        let mut tones = Tones::new(vec![Tone::new(turns, 1.0, 2.0, 0.1, legs(tau, delay))], None);
        let mut wave = [0.0; BLOCK];
        assert!(tones.fill(1, block(512), &mut always(), &mut wave));
        let lag: f64 = TAU * turns * tau;
        let mut worst = 0.0_f64;
        for (sample, &value) in wave.iter().enumerate() {
            let t = 512.0 + sample as f64 + delay;
            let exact = 2.0 / (1.0 + lag * lag).sqrt() * (TAU * (turns * t + 0.1) - lag.atan()).sin();
            worst = worst.max((f64::from(value) - exact).abs());
        }
        println!("worst {worst:.2e}");
        // f32 table and two rounded products of up to 2 V: four ulps of 2^-23.
        assert!(worst < 4.0 * 2.0 / 8_388_608.0);
    }

    /// A swing of +-d turns per sample: the frequency estimated over a block from its phase gain.
    #[test]
    fn drifting_line_is_continuous_from_block_to_block() {
        let drift = Some((0.0005, 1.0 / 40_000.0));
        let mut tones = Tones::new(vec![Tone::new(0.2, 1.0, 1.0, 0.0, legs(0.0, 0.0))], drift);
        let mut signal = Vec::new();
        for index in 0..160 {
            let mut wave = [0.0; BLOCK];
            tones.fill(0, block(index * BLOCK as u64), &mut always(), &mut wave);
            signal.extend(wave.map(f64::from));
        }
        let rate: f64 = 1.0 / 40_000.0;
        let mut worst = 0.0_f64;
        for (sample, value) in signal.iter().enumerate() {
            let n = sample as f64;
            let turns = 0.2 * n + 0.0005 / (TAU * rate) * (1.0 - (TAU * rate * n).cos());
            worst = worst.max((value - (TAU * turns).sin()).abs());
        }
        println!("worst {worst:.2e}");
        // Straight-line phase within a block: (256^2/8) * curvature 0.0005*2 pi rate turns = 6.5e-4
        // turns = 4e-3 rad at most.
        assert!(worst < 5e-3);
    }

    /// Six-pulse midpoint: peak Vph/4; its third harmonic is 3 sqrt(3)/(8 pi) of Vph (Fourier series of
    /// -median/2): 81.32 V and 67.25 V at 325.27 V, 50 Hz.
    #[test]
    fn six_pulse_midpoint_has_its_published_peak_and_third_harmonic() {
        let mut pulse = SixPulse::new(50.0 / 64_000.0, legs(0.0, 0.0));
        let (mut peak, mut re, mut im) = (0.0_f64, 0.0, 0.0);
        let blocks = 50; // 12 800 samples: ten periods of 50 Hz
        for index in 0..blocks {
            let mut wave = [0.0; BLOCK];
            pulse.fill(0, block(index * BLOCK as u64), &mut always(), &mut wave);
            for (sample, &value) in wave.iter().enumerate() {
                let value = 325.27 * f64::from(value);
                peak = peak.max(value.abs());
                let angle = TAU * 150.0 * (index as usize * BLOCK + sample) as f64 / 64_000.0;
                re += value * angle.cos();
                im += value * angle.sin();
            }
        }
        let amplitude = 2.0 * f64::hypot(re, im) / (blocks as usize * BLOCK) as f64;
        println!("peak {peak:.2} V, 150 Hz {amplitude:.2} V");
        assert!((peak - 81.32).abs() < 0.1);
        assert!((amplitude - 67.25).abs() < 0.1);
    }
}
