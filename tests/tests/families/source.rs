//! What simulated sources put on the pair.

use super::front_end;
use std::f64::consts::{PI, TAU};

/// One component at an instant: frequency, Hz, and peak amplitude in the common mode, V.
pub type Component = (f64, f64);

/// Multiples of a carrier that are simulated.
const MULTIPLES: u32 = 10;
/// Sidebands to each side, in output frequencies.
const SIDEBANDS: i32 = 15;

/// A source.
#[derive(Clone, Debug)]
pub enum Source {
    /// Fundamental, Hz; peak amplitude of each harmonic from the first, V.
    Mains { fundamental_hz: f64, harmonics_v: Vec<f64> },
    /// A two-level bridge with natural sampling; the output frequency ramps.
    Drive { carrier_hz: f64, level_v: f64, output_hz: (f64, f64), modulation: (f64, f64) },
    /// Peak amplitude per harmonic; drift over the whole time and ripple as shares of the frequency.
    Supply { fundamental_hz: f64, harmonics_v: Vec<f64>, drift: f64, ripple: f64, ripple_hz: f64 },
    /// A steady tone, through the front end ...
    Tone { frequency_hz: f64, level_v: f64 },
    /// ... and behind it.
    Steady { frequency_hz: f64, level_v: f64 },
}

/// A source, how much of it the pair converts into the differential mode, and its phase.
#[derive(Clone, Debug)]
pub struct Coupled {
    pub source: Source,
    pub conversion: f64,
    pub phase: f64,
}

/// Bessel function of the first kind by its integral, `1/π ∫ cos(nτ − x sin τ) dτ`, which the trapezoidal rule
/// gives exactly for a periodic integrand but for orders beyond the points.
pub fn bessel(n: i32, x: f64) -> f64 {
    const POINTS: i32 = 128;
    let at = |i: i32| {
        let tau = TAU * f64::from(i) / f64::from(POINTS);
        (f64::from(n) * tau - x * tau.sin()).cos()
    };
    (0..POINTS).map(at).sum::<f64>() / f64::from(POINTS)
}

/// Amplitude of the line `m·fc + n·fo` in the mean of three legs over that of the carrier at modulation 0:
/// `(4/(mπ))·½·J_n(mπM/2)·sin((m+n)π/2)`, multiples of three only (Holmes and Lipo 2003, from memory; the
/// check values are in this room's tests).
pub fn bridge(m: u32, n: i32, modulation: f64) -> f64 {
    if n % 3 != 0 || (m as i32 + n) % 2 == 0 {
        return 0.0;
    }
    let m = f64::from(m);
    2.0 / (m * PI) * bessel(n, m * PI * modulation / 2.0) * ((m + f64::from(n)) * PI / 2.0).sin()
}

impl Source {
    /// The components at `share` of the whole time, 0..1, which lasts `seconds`.
    pub fn components(&self, share: f64, seconds: f64) -> Vec<Component> {
        match self {
            Self::Mains { fundamental_hz, harmonics_v } => multiples(*fundamental_hz, harmonics_v),
            Self::Supply { harmonics_v, .. } => multiples(self.supply_hz(share, seconds), harmonics_v),
            Self::Tone { frequency_hz, level_v } => vec![(*frequency_hz, level_v * front_end(*frequency_hz))],
            Self::Steady { frequency_hz, level_v } => vec![(*frequency_hz, *level_v)],
            Self::Drive { carrier_hz, level_v, output_hz, modulation } => {
                let output_hz = output_hz.0 + (output_hz.1 - output_hz.0) * share;
                let modulation = modulation.0 + (modulation.1 - modulation.0) * share;
                let gain = level_v / bridge(1, 0, 0.9);
                let lines = (1..=MULTIPLES).flat_map(|m| (-SIDEBANDS..=SIDEBANDS).map(move |n| (m, n)));
                lines
                    .filter_map(|(m, n)| {
                        let frequency_hz = f64::from(m) * carrier_hz + f64::from(n) * output_hz;
                        let amplitude = gain * bridge(m, n, modulation) * front_end(frequency_hz);
                        (amplitude != 0.0 && frequency_hz > 0.0).then_some((frequency_hz, amplitude))
                    })
                    .collect()
            }
        }
    }

    /// Its fundamental and how far from it a line may be called its, Hz.
    pub fn place(&self) -> (f64, f64) {
        match self {
            Self::Mains { fundamental_hz, .. } => (*fundamental_hz, 0.1),
            Self::Drive { carrier_hz, .. } => (*carrier_hz, 0.001 * carrier_hz),
            Self::Supply { fundamental_hz, drift, ripple, .. } => {
                (*fundamental_hz, (drift.abs() + ripple + 0.001) * fundamental_hz)
            }
            Self::Tone { frequency_hz, .. } | Self::Steady { frequency_hz, .. } => (*frequency_hz, 200.0),
        }
    }

    /// Frequency of a supply.
    fn supply_hz(&self, share: f64, seconds: f64) -> f64 {
        let Self::Supply { fundamental_hz, drift, ripple, ripple_hz, .. } = self else { return 0.0 };
        fundamental_hz * (1.0 + drift * (share - 0.5) + ripple * (TAU * ripple_hz * share * seconds).sin())
    }

    /// Adds the samples to `common`.
    pub fn add(&self, common: &mut [f64], rate_hz: f64, phase: f64) {
        let seconds = common.len() as f64 / rate_hz;
        match self {
            Self::Drive { .. } => self.add_drive(common, rate_hz, phase),
            Self::Supply { harmonics_v, .. } => {
                let mut turns = phase;
                for n in 0..common.len() {
                    let share = n as f64 / common.len() as f64;
                    let frequency_hz = self.supply_hz(share, seconds);
                    turns = (turns + frequency_hz / rate_hz).fract();
                    let (sine, cosine) = (TAU * turns).sin_cos();
                    common[n] += series(harmonics_v, (cosine, sine), frequency_hz);
                }
            }
            Self::Mains { .. } | Self::Tone { .. } | Self::Steady { .. } => {
                for (number, (frequency_hz, amplitude)) in
                    self.components(0.0, seconds).into_iter().enumerate()
                {
                    let start = phase * (number + 1) as f64;
                    // A rotation, renewed often enough that its rounding does not add up.
                    for (block, values) in common.chunks_mut(4096).enumerate() {
                        let turns = (frequency_hz / rate_hz * (block * 4096) as f64 + start).fract();
                        let (mut im, mut re) = (TAU * turns).sin_cos();
                        let (step_im, step_re) = (TAU * (frequency_hz / rate_hz).fract()).sin_cos();
                        for value in values {
                            *value += amplitude * re;
                            (re, im) = (re * step_re - im * step_im, re * step_im + im * step_re);
                        }
                    }
                }
            }
        }
    }

    fn add_drive(&self, common: &mut [f64], rate_hz: f64, phase: f64) {
        let Self::Drive { carrier_hz, level_v, output_hz, modulation } = self else { return };
        let gain = level_v / bridge(1, 0, 0.9);
        let (mut carrier, mut output) = (phase, 0.0_f64);
        let length = common.len();
        let mut amplitudes = Vec::new();
        for (n, value) in common.iter_mut().enumerate() {
            let share = n as f64 / length as f64;
            if n % 2048 == 0 {
                let modulation = modulation.0 + (modulation.1 - modulation.0) * share;
                amplitudes = (1..=MULTIPLES)
                    .map(|m| {
                        let roll = gain * front_end(f64::from(m) * carrier_hz);
                        (0..=SIDEBANDS / 3)
                            .map(|k| roll * bridge(m, 3 * k, modulation) * if k == 0 { 1.0 } else { 2.0 })
                            .collect::<Vec<f64>>()
                    })
                    .collect::<Vec<_>>();
            }
            carrier = (carrier + carrier_hz / rate_hz).fract();
            output = (output + (output_hz.0 + (output_hz.1 - output_hz.0) * share) / rate_hz).fract();
            let (sine, cosine) = (TAU * carrier).sin_cos();
            let three = (TAU * 3.0 * output).cos();
            // cos(k·3θ) by Chebyshev's recurrence.
            let mut sides = [1.0, three, 0.0, 0.0, 0.0, 0.0];
            for k in 2..sides.len() {
                sides[k] = 2.0 * three * sides[k - 1] - sides[k - 2];
            }
            let (mut re, mut im) = (cosine, sine);
            for lines in &amplitudes {
                *value += re * lines.iter().zip(sides).map(|(a, side)| a * side).sum::<f64>();
                (re, im) = (re * cosine - im * sine, re * sine + im * cosine);
            }
        }
    }
}

fn multiples(fundamental_hz: f64, harmonics_v: &[f64]) -> Vec<Component> {
    let place = |order: usize| (order + 1) as f64 * fundamental_hz;
    let levels = harmonics_v.iter().enumerate().filter(|(_, level)| **level != 0.0);
    levels.map(|(order, level)| (place(order), level * front_end(place(order)))).collect()
}

/// Sum of harmonics of a rotating phasor, each through the front end.
fn series(harmonics_v: &[f64], (cosine, sine): (f64, f64), frequency_hz: f64) -> f64 {
    let (mut re, mut im, mut sum) = (cosine, sine, 0.0);
    for (order, level) in harmonics_v.iter().enumerate() {
        sum += level * front_end((order + 1) as f64 * frequency_hz) * re;
        (re, im) = (re * cosine - im * sine, re * sine + im * cosine);
    }
    sum
}
