//! Welch's estimate in `f64`, and an amplitude from its bins: the references the spectra are held against.
//!
//! Periodic Hann window, 50 % overlap, mean removed per segment, one-sided V²/Hz: 2|X|²/(fs Σw²), once
//! at 0 Hz and fs/2 (Welch 1967; window figures Harris 1978).
#![allow(dead_code, reason = "each test file uses its share")]

use core::f64::consts::{PI, TAU};
use rustfft::FftPlanner;
use rustfft::num_complex::Complex64;

pub const POINTS: usize = 1024;
pub const BINS: usize = POINTS / 2 + 1;

fn window() -> Vec<f64> {
    (0..POINTS).map(|n| 0.5 - 0.5 * (TAU * n as f64 / POINTS as f64).cos()).collect()
}

fn segments(signal: &[f64]) -> impl Iterator<Item = Vec<f64>> {
    (0..=signal.len() - POINTS).step_by(POINTS / 2).map(|first| {
        let segment = &signal[first..first + POINTS];
        let mean = segment.iter().sum::<f64>() / POINTS as f64;
        segment.iter().map(|x| x - mean).collect()
    })
}

/// Power spectral density of a signal, V²/Hz, 513 bins.
pub fn welch(signal: &[f64], rate_hz: f64) -> Vec<f64> {
    let window = window();
    let window_power: f64 = window.iter().map(|w| w * w).sum();
    let transform = FftPlanner::<f64>::new().plan_fft_forward(POINTS);
    let (mut sums, mut count) = (vec![0.0; BINS], 0.0);
    for segment in segments(signal) {
        let mut buffer: Vec<Complex64> =
            segment.iter().zip(&window).map(|(x, w)| Complex64::new(x * w, 0.0)).collect();
        transform.process(&mut buffer);
        for (sum, value) in sums.iter_mut().zip(&buffer) {
            *sum += value.norm_sqr();
        }
        count += 1.0;
    }
    let scale = |bin: usize| if bin == 0 || bin == BINS - 1 { 1.0 } else { 2.0 };
    sums.iter().enumerate().map(|(bin, sum)| scale(bin) * sum / (rate_hz * window_power * count)).collect()
}

/// Mean over the segments of Σ w² x² / Σ w², x without its mean.
pub fn windowed_variance(signal: &[f64]) -> f64 {
    let window = window();
    let window_power: f64 = window.iter().map(|w| w * w).sum();
    let of = |segment: Vec<f64>| {
        segment.iter().zip(&window).map(|(x, w)| (x * w).powi(2)).sum::<f64>() / window_power
    };
    let variances: Vec<f64> = segments(signal).map(of).collect();
    variances.iter().sum::<f64>() / variances.len() as f64
}

/// Frequency in bins and peak amplitude in volts of the tone near `bin`.
///
/// Grandke, Interpolation algorithms for discrete Fourier transforms of weighted signals, IEEE Trans.
/// IM-32, 1983: with the larger neighbour, a = |X[k±1]|/|X[k]| and d = ±(2a − 1)/(a + 1); then
/// A = 2|X[k]|/Σw · (1 − d²)/sinc d.
pub fn grandke(spectrum: &[f64], rate_hz: f64, near_bin: usize) -> (f64, f64) {
    let bin = (near_bin - 1..=near_bin + 1).max_by(|&a, &b| spectrum[a].total_cmp(&spectrum[b])).unwrap();
    let is_above = spectrum[bin + 1] > spectrum[bin - 1];
    let neighbour = if is_above { bin + 1 } else { bin - 1 };
    let ratio = (spectrum[neighbour] / spectrum[bin]).sqrt();
    let offset = (2.0 * ratio - 1.0) / (ratio + 1.0);
    // Power to peak amplitude: A² = 2 · PSD · ENBW · fs/N with ENBW = 1.5 bins.
    let peak = (2.0 * spectrum[bin] * 1.5 * rate_hz / POINTS as f64).sqrt();
    let sinc = if offset.abs() < 1e-12 { 1.0 } else { (PI * offset).sin() / (PI * offset) };
    let bins = if is_above { bin as f64 + offset } else { bin as f64 - offset };
    (bins, peak * (1.0 - offset * offset) / sinc)
}
