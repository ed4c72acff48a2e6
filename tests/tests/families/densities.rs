//! Averages put together in the frequency domain: per segment the window's shape of every component and
//! noise of the window's own correlation between bins.

use super::source::{Component, Coupled, Source};
use super::{Averages, LEG_NOISE_V, RUNGS, published};
use legwise::spectrum::rung::{RungBin, RungSpectra, SegmentSet};
use rand::RngExt;
use rand_chacha::ChaCha8Rng;
use rand_distr::{Distribution, StandardNormal};
use realfft::num_complex::Complex64;
use std::f64::consts::{PI, TAU};

/// Segments averaged at most; a device averages more of the upper rungs.
const MOST_SEGMENTS: usize = 48;
/// Bins on each side of a component that get its skirts.
const SKIRT_BINS: usize = 40;
/// Tones that stand for one that wanders, in rung 0; four times as many in each finer one.
const TONES: usize = 16;
const ENBW_BINS: f64 = 1.5;

/// The averages of `seconds` without traffic: the idle set.
pub fn averages(sources: &[Coupled], rate_hz: f64, seconds: f64, dice: &mut ChaCha8Rng) -> Averages {
    let of_rung = |rung| {
        let (points, ..) = published(rung);
        let segment_s = points as f64 * 8_f64.powi(rung.into()) / rate_hz;
        let segments = ((seconds / segment_s) as usize).min(MOST_SEGMENTS);
        (segments > 0).then(|| average(sources, rung, rate_hz, (seconds, segments), dice))
    };
    (0..RUNGS).filter_map(of_rung).collect()
}

fn average(
    sources: &[Coupled],
    rung: u8,
    rate_hz: f64,
    (seconds, segments): (f64, usize),
    dice: &mut ChaCha8Rng,
) -> RungSpectra {
    let (points, first_bin, last_bin) = published(rung);
    let rung_rate_hz = rate_hz / 8_f64.powi(rung.into());
    let bin_hz = rung_rate_hz / points as f64;
    let mut bins = vec![RungBin::default(); last_bin - first_bin + 1];
    for segment in 0..segments {
        let share = (segment as f64 + 0.5) / segments as f64;
        // White noise of density 2σ²/fs in a leg: (a + b)/2 and a − b.
        let leg = LEG_NOISE_V * (2.0 / rate_hz * bin_hz).sqrt();
        let (a, b) = (noise(last_bin + 1, dice), noise(last_bin + 1, dice));
        let mut c: Vec<Complex64> = a.iter().zip(&b).map(|(a, b)| (a + b) * (leg / 2.0)).collect();
        let mut d: Vec<Complex64> = a.iter().zip(&b).map(|(a, b)| (a - b) * leg).collect();
        for coupled in sources {
            for (frequency_hz, amplitude) in swept(coupled, share, (seconds, segments, rung), dice) {
                let rest = frequency_hz.rem_euclid(rate_hz);
                let place = rest.min(rate_hz - rest) / bin_hz;
                if place > points as f64 / 2.0 {
                    continue;
                }
                let phase = TAU * dice.random::<f64>();
                let centre = place as usize;
                for bin in centre.saturating_sub(SKIRT_BINS)..=(centre + SKIRT_BINS).min(last_bin) {
                    let off = bin as f64 - place;
                    let value =
                        Complex64::from_polar(window(off) * amplitude / 2_f64.sqrt(), phase - PI * off);
                    c[bin] += value;
                    d[bin] += value * coupled.conversion;
                }
            }
        }
        let scale = 1.0 / (ENBW_BINS * bin_hz * segments as f64);
        for (place, bin) in bins.iter_mut().enumerate() {
            let (c, d) = (c[first_bin + place], d[first_bin + place]);
            let cross = c.conj() * d * scale;
            bin.common += c.norm_sqr() * scale;
            bin.differential += d.norm_sqr() * scale;
            bin.cross = (bin.cross.0 + cross.re, bin.cross.1 + cross.im);
        }
    }
    RungSpectra {
        rung,
        rate_hz: rung_rate_hz,
        points: points as u32,
        set: SegmentSet::Idle,
        segments: segments as u64,
        skipped: 0,
        is_overlapped: false,
        other: 0,
        first_sample: 0,
        span_samples: (seconds * rate_hz) as u64,
        first_bin,
        bins,
    }
}

/// The components during a segment. One that wanders is put as tones at the places it passes.
fn swept(
    coupled: &Coupled,
    share: f64,
    (seconds, segments, rung): (f64, usize, u8),
    dice: &mut ChaCha8Rng,
) -> Vec<Component> {
    let Source::Supply { drift, ripple, .. } = &coupled.source else {
        return coupled.source.components(share, seconds);
    };
    let tones = if *drift == 0.0 && *ripple == 0.0 { 1 } else { TONES << (2 * rung.min(3)) };
    (0..tones)
        .flat_map(|_| {
            let share = share + (dice.random::<f64>() - 0.5) / segments as f64;
            let weight = (tones as f64).sqrt().recip();
            let components = coupled.source.components(share, seconds);
            components.into_iter().map(move |(frequency_hz, amplitude)| (frequency_hz, amplitude * weight))
        })
        .collect()
}

/// Complex noise of power 1.5 per bin as a Hann window leaves it: `x_k − (x_{k−1} + x_{k+1})/2`.
fn noise(bins: usize, dice: &mut ChaCha8Rng) -> Vec<Complex64> {
    let mut normal = || {
        let (re, im): (f64, f64) = (StandardNormal.sample(dice), StandardNormal.sample(dice));
        Complex64::new(re, im) / 2_f64.sqrt()
    };
    let white: Vec<Complex64> = (0..bins + 2).map(|_| normal()).collect();
    white.windows(3).map(|x| x[1] - (x[0] + x[2]) / 2.0).collect()
}

/// The Hann window's shape.
fn window(d: f64) -> f64 {
    if d.abs() < 1e-9 {
        1.0
    } else if (d.abs() - 1.0).abs() < 1e-9 {
        0.5
    } else {
        (PI * d).sin() / (PI * d * (1.0 - d * d))
    }
}
