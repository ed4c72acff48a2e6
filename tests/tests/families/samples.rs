//! Samples of both modes through the ladder: the firmware's decimation filters, Hann-windowed transforms,
//! idle and driven averages.

use super::source::Coupled;
use super::{Averages, LEG_NOISE_V, RUNGS, published};
use legwise::spectrum::rung::{RungBin, RungSpectra, SegmentSet};
use legwise_firmware::halfband::{Bench, INPUTS, Memory, OUTPUTS, UNSETTLED};
use rand::RngExt;
use rand_chacha::ChaCha8Rng;
use rand_distr::{Distribution, StandardNormal};
use realfft::{RealFftPlanner, RealToComplex};
use std::f64::consts::TAU;
use std::sync::Arc;

/// |DM| from its rest up to which the bus is at rest, V.
const IDLE_V: f64 = 0.2;
/// Full-rate samples a decimated one looks back, per rung: 238, 238·(1 + 8), ...
const LOOK_BACK: usize = 238;
/// Duration of an edge of the data, s.
const EDGE_S: f64 = 0.3e-6;

/// Characters on the bus.
#[derive(Clone, Debug)]
pub struct Traffic {
    pub bit_rate_hz: f64,
    /// Bits per character with start and stop, 10 or 11.
    pub frame_bits: u32,
    /// Share of the time a message is under way.
    pub load: f64,
    /// Shortest and longest message, characters.
    pub characters: (u32, u32),
    /// Level of a one and of a zero, V.
    pub level_v: f64,
    /// Differential level at rest, V.
    pub rest_v: f64,
    /// What shows in the common mode of the differential one, and a step while driven, V.
    pub imbalance: f64,
    pub step_v: f64,
}

impl Traffic {
    /// Adds the samples; messages are drawn from a small set whose last characters change.
    fn add(&self, common: &mut [f64], differential: &mut [f64], rate_hz: f64, dice: &mut ChaCha8Rng) {
        let seconds = common.len() as f64 / rate_hz;
        let message = |dice: &mut ChaCha8Rng| -> Vec<u8> {
            let characters = dice.random_range(self.characters.0..=self.characters.1);
            (0..characters).map(|_| dice.random()).collect()
        };
        let pool: Vec<Vec<u8>> = (0..6).map(|_| message(dice)).collect();
        let mut edges: Vec<(f64, f64, f64)> = vec![(0.0, self.rest_v, 0.0)];
        let mut time_s = dice.random_range(0.0..0.01);
        let mut number = 0;
        while time_s < seconds {
            let mut characters = pool[number % pool.len()].clone();
            number += 1;
            for character in characters.iter_mut().rev().take(4) {
                *character = dice.random();
            }
            let start_s = time_s;
            for character in characters {
                for bit in 0..self.frame_bits {
                    let is_one = match bit {
                        0 => false,
                        1..=8 => character >> (bit - 1) & 1 == 1,
                        9 if self.frame_bits == 11 => character.count_ones() % 2 == 1,
                        _ => true,
                    };
                    let level_v = if is_one { self.level_v } else { -self.level_v };
                    edges.push((time_s, level_v, self.step_v));
                    time_s += 1.0 / self.bit_rate_hz;
                }
            }
            edges.push((time_s, self.rest_v, 0.0));
            let pause_s = (time_s - start_s) * (1.0 / self.load - 1.0);
            time_s += pause_s * dice.random_range(0.6..1.4) + 1.0 / self.bit_rate_hz;
        }
        let mut place = 0;
        let (mut from, mut to) = ((self.rest_v, 0.0), (self.rest_v, 0.0));
        for (n, (cm, dm)) in common.iter_mut().zip(differential).enumerate() {
            let now_s = n as f64 / rate_hz;
            while place < edges.len() && edges[place].0 <= now_s {
                (from, to) = (to, (edges[place].1, edges[place].2));
                place += 1;
            }
            let done = ((now_s - edges[place.saturating_sub(1)].0) / EDGE_S).min(1.0);
            let level_v = from.0 + (to.0 - from.0) * done;
            *dm += level_v;
            *cm += self.imbalance * level_v + from.1 + (to.1 - from.1) * done;
        }
    }
}

/// The averages of `seconds` of samples.
pub fn averages(
    sources: &[Coupled],
    traffic: Option<&Traffic>,
    rate_hz: f64,
    seconds: f64,
    dice: &mut ChaCha8Rng,
) -> Averages {
    let length = (rate_hz * seconds) as usize / INPUTS * INPUTS;
    let (mut common, mut differential) = (vec![0.0; length], vec![0.0; length]);
    for coupled in sources {
        let mut own = vec![0.0; length];
        coupled.source.add(&mut own, rate_hz, coupled.phase);
        for ((cm, dm), own) in common.iter_mut().zip(&mut differential).zip(own) {
            *cm += own;
            *dm += coupled.conversion * own;
        }
    }
    let rest_v = traffic.map_or(0.0, |traffic| traffic.rest_v);
    if let Some(traffic) = traffic {
        traffic.add(&mut common, &mut differential, rate_hz, dice);
    }
    for (cm, dm) in common.iter_mut().zip(&mut differential) {
        let (a, b): (f64, f64) = (StandardNormal.sample(dice), StandardNormal.sample(dice));
        *cm += LEG_NOISE_V * (a + b) / 2.0;
        *dm += LEG_NOISE_V * (a - b);
    }
    // Driven samples up to each, to tell in one step whether a stretch is at rest.
    let mut driven = vec![0_u32; length + 1];
    for n in 0..length {
        driven[n + 1] = driven[n] + u32::from((differential[n] - rest_v).abs() > IDLE_V);
    }
    ladder(&common, &differential, &driven, rate_hz)
}

/// The averages of given samples; `driven` counts the driven samples before each.
pub fn ladder(common: &[f64], differential: &[f64], driven: &[u32], rate_hz: f64) -> Averages {
    let single = |values: &[f64]| values.iter().map(|value| *value as f32).collect::<Vec<f32>>();
    let (mut cm, mut dm) = (single(common), single(differential));
    let mut planner = RealFftPlanner::new();
    let mut averages = Vec::new();
    let (mut step, mut look_back) = (1, 0);
    for rung in 0..RUNGS {
        let (points, ..) = published(rung);
        let fft = planner.plan_fft_forward(points);
        averages.extend(rung_averages(rung, &cm, &dm, (driven, step, look_back), rate_hz, &fft));
        (cm, dm) = (decimate(&cm), decimate(&dm));
        look_back += LOOK_BACK * step;
        step *= 8;
    }
    averages
}

fn decimate(samples: &[f32]) -> Vec<f32> {
    let (mut memory, mut bench) = (Memory::new(), Bench::new());
    let mut outputs = Vec::new();
    for block in samples.as_chunks::<INPUTS>().0 {
        bench.inputs().copy_from_slice(block);
        let mut eighth = [0.0; OUTPUTS];
        memory.decimate(&mut bench, &mut eighth);
        outputs.extend(eighth);
    }
    // What still holds the start is left out; the places in time move by as much.
    outputs.drain(..UNSETTLED.min(outputs.len()));
    outputs
}

fn rung_averages(
    rung: u8,
    cm: &[f32],
    dm: &[f32],
    (driven, step, look_back): (&[u32], usize, usize),
    rate_hz: f64,
    fft: &Arc<dyn RealToComplex<f64>>,
) -> Vec<RungSpectra> {
    let (points, first_bin, last_bin) = published(rung);
    let rung_rate_hz = rate_hz / step as f64;
    // First full-rate sample of this rung's first: 30 outputs of every rung above are left out.
    let offset = (1..=u32::from(rung)).map(|k| UNSETTLED * 8_usize.pow(k)).sum::<usize>();
    let hann: Vec<f64> = (0..points).map(|n| 0.5 - 0.5 * (TAU * n as f64 / points as f64).cos()).collect();
    let mut sets = [SegmentSet::Idle, SegmentSet::Driven].map(|set| RungSpectra {
        rung,
        rate_hz: rung_rate_hz,
        points: points as u32,
        set,
        segments: 0,
        skipped: 0,
        is_overlapped: true,
        other: 0,
        first_sample: 0,
        span_samples: driven.len() as u64 - 1,
        first_bin,
        bins: vec![RungBin::default(); last_bin - first_bin + 1],
    });
    let mut start = 0;
    while start + points <= cm.len() {
        let full = offset + start * step;
        let (from, to) = (full.saturating_sub(look_back), (full + points * step).min(driven.len() - 1));
        let is_driven = driven[to] > driven[from];
        let [c, d] = [cm, dm].map(|values| transform(&values[start..start + points], &hann, fft));
        let set = &mut sets[usize::from(is_driven)];
        set.segments += 1;
        for (place, bin) in set.bins.iter_mut().enumerate() {
            let (c, d) = (c[first_bin + place], d[first_bin + place]);
            bin.common += c.norm_sqr();
            bin.differential += d.norm_sqr();
            let cross = c.conj() * d;
            bin.cross = (bin.cross.0 + cross.re, bin.cross.1 + cross.im);
        }
        start += points / 2;
    }
    for set in &mut sets {
        // One-sided density: 2|X|²/(fs·S2), S2 = 3/8 of the points.
        let scale = 2.0 / (rung_rate_hz * 0.375 * points as f64 * set.segments.max(1) as f64);
        for bin in &mut set.bins {
            bin.common *= scale;
            bin.differential *= scale;
            bin.cross = (bin.cross.0 * scale, bin.cross.1 * scale);
        }
    }
    sets.into_iter().filter(|set| set.segments > 0).collect()
}

fn transform(
    values: &[f32],
    hann: &[f64],
    fft: &Arc<dyn RealToComplex<f64>>,
) -> Vec<realfft::num_complex::Complex64> {
    let mean = values.iter().map(|value| f64::from(*value)).sum::<f64>() / values.len() as f64;
    let mut windowed: Vec<f64> =
        values.iter().zip(hann).map(|(value, hann)| (f64::from(*value) - mean) * hann).collect();
    let mut bins = fft.make_output_vec();
    fft.process(&mut windowed, &mut bins).unwrap();
    bins
}
