//! A ladder in `f64`, and lines read from what a rung publishes.

use core::f64::consts::{PI, TAU};
use legwise_tests::recorder::Average;
use realfft::RealFftPlanner;

/// Points of a segment on a rung below the full rate.
pub const RUNG_POINTS: usize = 512;
/// First outputs of a cascade that know nothing of what was before: one chunk of 32.
const UNSETTLED: usize = 32;

/// Side coefficients of the three half-band stages, outermost first (the design's own digits).
const STAGES: [&[f64]; 3] = [
    &[0.0066333611, -0.0510355837, 0.294404689],
    &[-0.00247416984, 0.016965306, -0.0676784584, 0.303170276],
    &[
        0.000110871525,
        -0.000343266968,
        0.000834709408,
        -0.00173450322,
        0.00324582115,
        -0.00563238398,
        0.0092449878,
        -0.0145897612,
        0.0225088442,
        -0.0347002402,
        0.0555202046,
        -0.101029041,
        0.316585851,
    ],
];

/// An eighth of the rate: convolution with each stage's taps, every second sample, settled ones only.
pub fn decimated(samples: &[f64]) -> Vec<f64> {
    let mut samples = samples.to_vec();
    for sides in STAGES {
        let taps = 4 * sides.len() - 1;
        let mut response = vec![0.0; taps];
        response[taps / 2] = 0.5;
        for (i, &side) in sides.iter().enumerate() {
            (response[2 * i], response[taps - 1 - 2 * i]) = (side, side);
        }
        let padded: Vec<f64> = vec![0.0; taps - 1].into_iter().chain(samples).collect();
        let output = |window: &[f64]| window.iter().zip(&response).map(|(x, h)| x * h).sum();
        samples = padded.windows(taps).step_by(2).map(output).collect();
    }
    samples.split_off(UNSETTLED)
}

/// Densities of C and D and the cross density conj(C) D, V²/Hz, all bins of 512 points.
pub struct Density {
    pub segments: usize,
    pub bins: Vec<(f64, f64, (f64, f64))>,
}

/// Welch's estimate of both modes of two legs.
pub fn rung_density(legs: &[Vec<f64>; 2], rate_hz: f64) -> Density {
    let transform = RealFftPlanner::<f64>::new().plan_fft_forward(RUNG_POINTS);
    let window: Vec<f64> =
        (0..RUNG_POINTS).map(|n| 0.5 - 0.5 * (TAU * n as f64 / RUNG_POINTS as f64).cos()).collect();
    let scale = 2.0 / (rate_hz * window.iter().map(|w| w * w).sum::<f64>());
    let modes = |pair: fn(f64, f64) -> f64| -> Vec<f64> {
        legs[0].iter().zip(&legs[1]).map(|(&a, &b)| pair(a, b)).collect()
    };
    let (common, differential) = (modes(|a, b| (a + b) / 2.0), modes(|a, b| a - b));
    let spectrum = |signal: &[f64], first: usize| {
        let segment = &signal[first..first + RUNG_POINTS];
        let mean = segment.iter().sum::<f64>() / RUNG_POINTS as f64;
        let mut points: Vec<f64> = segment.iter().zip(&window).map(|(x, w)| (x - mean) * w).collect();
        let mut bins = transform.make_output_vec();
        transform.process(&mut points, &mut bins).unwrap();
        bins
    };
    let mut sums = vec![(0.0, 0.0, (0.0, 0.0)); RUNG_POINTS / 2 + 1];
    let starts: Vec<usize> = (0..=common.len() - RUNG_POINTS).step_by(RUNG_POINTS / 2).collect();
    for &first in &starts {
        for (sum, (c, d)) in
            sums.iter_mut().zip(spectrum(&common, first).iter().zip(spectrum(&differential, first)))
        {
            let cross = c.conj() * d;
            sum.0 += c.norm_sqr();
            sum.1 += d.norm_sqr();
            sum.2.0 += cross.re;
            sum.2.1 += cross.im;
        }
    }
    let scale = scale / starts.len() as f64;
    for sum in &mut sums {
        *sum = (sum.0 * scale, sum.1 * scale, (sum.2.0 * scale, sum.2.1 * scale));
    }
    Density { segments: starts.len(), bins: sums }
}

/// A line: frequency and peak amplitude.
#[derive(Clone, Copy, Debug)]
pub struct Line {
    pub hz: f64,
    pub peak_v: f64,
}

/// The line near `hz` in the density that an average publishes.
///
/// Grandke, Interpolation algorithms for discrete Fourier transforms of weighted signals, IEEE Trans.
/// IM-32, 1983, on averaged power (`firmware_spectrum.rs` has the formula).
pub fn line_of(density: &[f64], average: &Average, rate_hz: f64, hz: f64) -> Line {
    let bin_hz = rate_hz / f64::from(average.part.points);
    let from = usize::from(average.part.from_bin);
    let near = (hz / bin_hz).round() as usize - from;
    let bin = (near - 1..=near + 1).max_by(|&a, &b| density[a].total_cmp(&density[b])).unwrap();
    let is_above = density[bin + 1] > density[bin - 1];
    let neighbour = if is_above { bin + 1 } else { bin - 1 };
    let ratio = (density[neighbour] / density[bin]).sqrt();
    let offset = (2.0 * ratio - 1.0) / (ratio + 1.0);
    let peak = (2.0 * density[bin] * 1.5 * bin_hz).sqrt();
    let sinc = if offset.abs() < 1e-12 { 1.0 } else { (PI * offset).sin() / (PI * offset) };
    let bins = (from + bin) as f64 + if is_above { offset } else { -offset };
    Line { hz: bins * bin_hz, peak_v: peak * (1.0 - offset * offset) / sinc }
}
