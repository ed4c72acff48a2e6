//! Waveforms for tests: seeded noise, tones, data with edges of finite slope.

use rand::{RngExt, SeedableRng};
use rand_chacha::ChaCha8Rng;
use rand_distr::{Distribution, StandardNormal};

/// The generator of a seed.
pub fn dice(seed: u64) -> ChaCha8Rng {
    ChaCha8Rng::seed_from_u64(seed)
}

/// Normal noise of 1 V r.m.s.
pub fn noise(dice: &mut ChaCha8Rng, samples: usize) -> Vec<f64> {
    (0..samples).map(|_| StandardNormal.sample(dice)).collect()
}

/// `amplitude cos(2π cycles n / points + phase)`, with the phase reduced before it loses digits.
pub fn tone(amplitude: f64, cycles_per_point: f64, phase: f64, samples: usize) -> Vec<f64> {
    (0..samples)
        .map(|n| {
            let turns = (n as f64 * cycles_per_point).fract();
            amplitude * (core::f64::consts::TAU * turns + phase).cos()
        })
        .collect()
}

/// Random two-level data with straight edges, as a function of time in samples.
#[derive(Clone, Debug)]
pub struct Data {
    bits: Vec<bool>,
    /// Samples per bit, any positive number.
    pub bit_samples: f64,
    /// Duration of an edge in samples.
    pub edge_samples: f64,
    /// Level of a one and of a zero.
    pub levels_v: (f64, f64),
}

impl Data {
    /// Data for `samples` samples.
    pub fn new(seed: u64, samples: usize, bit_samples: f64, edge_samples: f64, levels_v: (f64, f64)) -> Self {
        let mut dice = dice(seed);
        let bits = (0..(samples as f64 / bit_samples) as usize + 4).map(|_| dice.random()).collect();
        Self { bits, bit_samples, edge_samples, levels_v }
    }

    /// Level at an instant; the edge into bit k begins with it.
    pub fn at(&self, instant: f64) -> f64 {
        let place = (instant / self.bit_samples).max(0.0);
        let bit = (place as usize).min(self.bits.len() - 1);
        let level = |bit: usize| if self.bits[bit] { self.levels_v.0 } else { self.levels_v.1 };
        let into = (place - place.floor()) * self.bit_samples / self.edge_samples;
        let before = level(bit.saturating_sub(1));
        before + (level(bit) - before) * into.min(1.0)
    }

    /// Instants at which the level begins to change.
    pub fn edges(&self) -> Vec<f64> {
        (1..self.bits.len())
            .filter(|&bit| self.bits[bit] != self.bits[bit - 1])
            .map(|bit| bit as f64 * self.bit_samples)
            .collect()
    }
}

/// Both legs in microvolt codes from a common and a differential mode in volts.
pub fn legs_uv(cm_v: &[f64], dm_v: &[f64]) -> (Vec<i32>, Vec<i32>) {
    let leg = |sign: f64| {
        cm_v.iter().zip(dm_v).map(|(cm, dm)| ((cm + sign * dm / 2.0) * 1e6).round() as i32).collect()
    };
    (leg(1.0), leg(-1.0))
}
