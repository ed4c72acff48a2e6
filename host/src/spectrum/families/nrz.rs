//! Estimates the bit rate from the shape of the spectrum that two-level data leave.
//!
//! Random bits of rate `B`, sampled at `fs`, have the density of `sinc²(f/B)` folded at `fs`:
//!
//! ```text
//! S(f) ∝ Σ_k sinc²((f + k·fs)/B)        sinc(x) = sin(πx)/(πx)
//! ```
//!
//! (W. R. Bennett, *Statistics of regenerative digital transmission*, Bell Syst. Tech. J. 37, 1958; from
//! memory.) Whatever the bits, every bit lasts `1/B`, so the zeros at multiples of `B` are always there, as
//! far as folding does not fill them: for `B ≥ fs` the density is flat and the rate cannot be told. Each rung
//! has its own gain, since its segments hold a different share of silence; beyond twelve lobes the zeros are
//! closer than the estimate and a smooth slope is used.

use std::f64::consts::PI;

/// Slowest rate looked for, bit/s.
const SLOWEST_HZ: f64 = 1_000.0;
/// Step of the search.
const STEP: f64 = 1.008;
/// Below this share of the bit rate the order of bits shows, not their shape.
const SHAPE_FROM: f64 = 0.05;
/// Lobes that are resolved.
const LOBES: f64 = 12.0;
/// Folds summed to each side; what is beyond is put as its integral.
const FOLDS: i32 = 4;
/// Folded energy and leakage fill the zeros up to about this share of the slope.
const FILL: f64 = 0.004;
/// Fewest points to fit to.
const FEWEST: usize = 40;

/// Density over frequency of one rung, V²/Hz, floor taken off.
#[derive(Clone, Debug, Default)]
pub(super) struct Curve {
    pub points: Vec<(f64, f64)>,
}

/// The rate that fits best.
#[derive(Clone, Copy, Debug, PartialEq)]
pub(super) struct Fit {
    pub bit_rate_hz: f64,
    pub uncertainty_hz: f64,
    /// Share of the variance of the density in dB, about each rung's mean, that the shape explains.
    pub explained: f64,
}

/// The best fit; with a hint only rates within 3 % of it compete.
pub(super) fn fit(curves: &[Curve], rate_hz: f64, hint_hz: Option<f64>) -> Option<Fit> {
    let (lowest_hz, highest_hz) = match hint_hz {
        Some(hint_hz) => (0.97 * hint_hz, 1.03 * hint_hz),
        None => (SLOWEST_HZ, 0.97 * rate_hz),
    };
    let step = if hint_hz.is_some() { 1.001 } else { STEP };
    let mut best: Option<(f64, f64)> = None;
    let mut bit_rate_hz = lowest_hz;
    while bit_rate_hz <= highest_hz {
        if let Some(explained) = explained(curves, rate_hz, bit_rate_hz)
            && best.is_none_or(|best| explained > best.1)
        {
            best = Some((bit_rate_hz, explained));
        }
        bit_rate_hz *= step;
    }
    let (mut centre_hz, mut most) = best?;
    let mut reach = step - 1.0;
    while reach > 1e-4 {
        let beside = [centre_hz * (1.0 - reach / 2.0), centre_hz * (1.0 + reach / 2.0)];
        for candidate_hz in beside {
            if let Some(explained) = explained(curves, rate_hz, candidate_hz)
                && explained > most
            {
                (centre_hz, most) = (candidate_hz, explained);
            }
        }
        reach /= 2.0;
    }
    // Half the step to where the fit is worse by a hundredth of the variance.
    let is_worse = |share: f64| {
        let at = |factor: f64| explained(curves, rate_hz, centre_hz * factor).unwrap_or(0.0);
        at(1.0 + share).max(at(1.0 - share)) < most - 0.01
    };
    let shares = [0.001, 0.002, 0.005, 0.01, 0.02, 0.05, 0.1];
    let share = shares.into_iter().find(|&share| is_worse(share)).unwrap_or(0.2);
    Some(Fit { bit_rate_hz: centre_hz, uncertainty_hz: share * centre_hz, explained: most })
}

/// Share of the variance explained: `1 − Σ(d − mean d)² / Σ(y − mean y)²`, `y` the measured density in dB and
/// `d` what is left of it after the shape.
fn explained(curves: &[Curve], rate_hz: f64, bit_rate_hz: f64) -> Option<f64> {
    let (mut left, mut whole, mut count) = (0.0, 0.0, 0);
    for curve in curves {
        let used = curve.points.iter().filter(|(frequency_hz, _)| *frequency_hz >= SHAPE_FROM * bit_rate_hz);
        let pairs: Vec<(f64, f64)> = used
            .map(|&(frequency_hz, density)| {
                let measured_db = 10.0 * density.log10();
                (measured_db, measured_db - 10.0 * shape(frequency_hz, rate_hz, bit_rate_hz).log10())
            })
            .collect();
        whole += spread(pairs.iter().map(|pair| pair.0));
        left += spread(pairs.iter().map(|pair| pair.1));
        count += pairs.len();
    }
    (count >= FEWEST && whole > 0.0).then(|| 1.0 - left / whole)
}

/// Sum of squares about the mean.
fn spread(values: impl Iterator<Item = f64> + Clone) -> f64 {
    let count = values.clone().count().max(1) as f64;
    let mean = values.clone().sum::<f64>() / count;
    values.map(|value| (value - mean).powi(2)).sum()
}

/// Folded density, 1 at 0 Hz without folding.
fn shape(frequency_hz: f64, rate_hz: f64, bit_rate_hz: f64) -> f64 {
    let is_resolved = frequency_hz <= LOBES * bit_rate_hz;
    let (mut sum, mut slope) = (0.0, 0.0);
    for fold in -FOLDS..=FOLDS {
        let x = PI * (frequency_hz + f64::from(fold) * rate_hz) / bit_rate_hz;
        let bound = 1.0 / (1.0 + x * x);
        slope += bound;
        sum += match x {
            _ if x.abs() < 1e-6 => 1.0,
            _ if is_resolved || fold != 0 => (x.sin() / x).powi(2),
            _ => 0.5 * bound,
        };
    }
    // Both tails beyond the folds summed: 2·∫ ½(B/(π·f))² df / fs.
    let tail = (bit_rate_hz / (PI * rate_hz)).powi(2) / (f64::from(FOLDS) + 0.5);
    sum + tail + FILL * slope
}
