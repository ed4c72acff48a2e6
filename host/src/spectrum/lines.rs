//! Finds the tones in an averaged spectrum and measures their frequency and amplitude.
//!
//! A line is a local maximum that stands at least 10 dB above the median of its neighbourhood (and
//! above what noise alone reaches in one spectrum of a hundred). An isolated one is interpolated
//! between two bins after the local floor is taken off: with `al` the amplitude of the larger
//! neighbour over that of the peak,
//!
//! ```text
//! d = ±(2·al − 1)/(al + 1)          A = A_peak · (1 − d²) / sinc(d)
//! ```
//!
//! (T. Grandke, *Interpolation algorithms for discrete Fourier transforms of weighted signals*, IEEE
//! Trans. IM-32, 350-355, 1983; Hann line shape sinc(d)/(1−d²)). Where that is not valid (close to
//! 0 Hz or half the rate, two lines closer than four bins, a line wider than the window's own) the
//! power in the band is summed instead and the line says so.

use super::{Density, HANN_ENBW_BINS};
use std::f64::consts::PI;

/// A local maximum this far above the local floor, as a power ratio, is a line: 10 dB.
const LINE_OVER_FLOOR: f64 = 10.0;
/// One-sided normal quantile of 0.01/513: one false line in a hundred spectra of 513 bins.
const FALSE_LINE_SIGMAS: f64 = 4.11;
/// Bins on each side that make the neighbourhood of a bin.
const NEIGHBOURHOOD_BINS: usize = 32;
/// Bins on each side of a peak that are its own.
const OWN_BINS: usize = 3;
/// Two lines closer than this cannot be told apart by interpolation.
const CROWDED_BINS: usize = 4;
/// A peak must rise this far above the bins three away, as a power ratio: 6 dB.
const SHARP_RATIO: f64 = 3.981;
/// How far the smaller neighbour may lie off the Hann shape, in amplitudes of the peak.
const SHAPE_TOLERANCE: f64 = 0.1;
/// A maximum must exceed the skirts of stronger lines by this power ratio (6 dB) to be a line itself.
const OVER_SKIRT: f64 = 4.0;
/// Bins a summed band reaches at most to each side.
const WIDEST_BAND_BINS: usize = 16;
/// Lines looked for before the strongest are taken.
const MOST_LINES: usize = 64;
/// Error of the neighbour ratio from the 16-bit power codes: two half steps of 2^-11 in power.
const CODE_RATIO_ERROR: f64 = 0.000_5;

/// How a line was measured.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum LineMethod {
    /// Two-bin interpolation.
    Interpolated,
    /// Root of the summed power of the band around it; frequency is the centre of that power.
    BandPower,
}

/// One spectral line.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Line {
    /// Frequency in Hz.
    pub frequency_hz: f64,
    /// Uncertainty of it in Hz (twice the standard deviation; half the band where power was summed).
    pub frequency_uncertainty_hz: f64,
    /// Peak amplitude in V; for a summed band that of a sine of the same power.
    pub amplitude_v: f64,
    /// The same in V rms.
    pub rms_v: f64,
    /// Height of the highest bin above the local floor in dB.
    pub above_floor_db: f64,
    /// How it was measured.
    pub method: LineMethod,
}

/// A peak that was accepted as a line.
struct Peak {
    bin: usize,
    /// Lowest and highest bin of other lines too close to be told apart from this one.
    crowd: (usize, usize),
    is_crowded: bool,
    floor: f64,
}

/// The strongest lines of `density`, at most `at_most`, largest amplitude first.
pub fn find(density: &Density, at_most: usize) -> Vec<Line> {
    let mut peaks: Vec<Peak> = Vec::new();
    for (bin, floor) in maxima(density) {
        let height = at(density, bin);
        let skirts: f64 =
            peaks.iter().map(|peak| at(density, peak.bin) * skirt(peak.bin.abs_diff(bin))).sum();
        if height < OVER_SKIRT * skirts {
            continue;
        }
        if let Some(peak) = peaks.iter_mut().find(|peak| peak.bin.abs_diff(bin) < CROWDED_BINS) {
            peak.is_crowded = true;
            peak.crowd = (peak.crowd.0.min(bin), peak.crowd.1.max(bin));
        } else if peaks.len() < MOST_LINES {
            peaks.push(Peak { bin, crowd: (bin, bin), is_crowded: false, floor });
        } else {
            break;
        }
    }
    let mut covered: Vec<(usize, usize)> = Vec::new();
    let mut lines = Vec::new();
    for peak in &peaks {
        if covered.iter().any(|&(low, high)| (low..=high).contains(&peak.bin)) {
            continue;
        }
        let line = interpolate(density, peak).unwrap_or_else(|| {
            let (low, high) = band(density, peak);
            covered.push((low, high));
            sum_band(density, peak, low, high)
        });
        lines.push(line);
    }
    lines.sort_by(|a, b| b.amplitude_v.total_cmp(&a.amplitude_v));
    lines.truncate(at_most);
    lines
}

fn at(density: &Density, bin: usize) -> f64 {
    density.v2_per_hz.get(bin).copied().unwrap_or(0.0)
}

/// Local maxima that stand out of their neighbourhood, highest first, each with its local floor.
fn maxima(density: &Density) -> Vec<(usize, f64)> {
    let last = density.v2_per_hz.len().saturating_sub(1);
    // Wilson and Hilferty's cube-root form of the upper quantile of a mean of n powers.
    let n = density.segments.max(1) as f64;
    let by_chance = (1.0 - 1.0 / (9.0 * n) + FALSE_LINE_SIGMAS / (3.0 * n.sqrt())).powi(3);
    let ratio = LINE_OVER_FLOOR.max(by_chance);
    let mut found: Vec<(usize, f64)> = (2..last)
        .filter(|&bin| at(density, bin) > at(density, bin - 1) && at(density, bin) >= at(density, bin + 1))
        .filter_map(|bin| {
            let floor = local_floor(density, bin, last);
            (at(density, bin) > ratio * floor).then_some((bin, floor))
        })
        .collect();
    found.sort_by(|a, b| at(density, b.0).total_cmp(&at(density, a.0)));
    found
}

fn local_floor(density: &Density, bin: usize, last: usize) -> f64 {
    let low = bin.saturating_sub(NEIGHBOURHOOD_BINS).max(super::BLANKED_BINS);
    let high = (bin + NEIGHBOURHOOD_BINS).min(last.saturating_sub(1));
    density.floor_of((low..=high).filter(|&other| other.abs_diff(bin) > OWN_BINS))
}

/// Most power the Hann window leaves `bins` away from the highest bin of a line, as a ratio: the
/// envelope of its side lobes, half a bin closer because the line need not sit on its bin, and
/// raised by the 1.42 dB the highest bin then misses.
fn skirt(bins: usize) -> f64 {
    let distance = bins as f64 - 0.5;
    if distance < 1.5 {
        return 1.0;
    }
    let amplitude = 1.178 / (PI * distance * (distance * distance - 1.0));
    amplitude * amplitude
}

/// Two-bin interpolation; `None` where it is not valid.
fn interpolate(density: &Density, peak: &Peak) -> Option<Line> {
    let (bin, last) = (peak.bin, density.v2_per_hz.len().saturating_sub(1));
    if peak.is_crowded || bin <= OWN_BINS || bin + OWN_BINS >= last {
        return None;
    }
    let height = at(density, bin);
    if height < SHARP_RATIO * at(density, bin - OWN_BINS).max(at(density, bin + OWN_BINS)) {
        return None;
    }
    let amplitude = |bin| (at(density, bin) - peak.floor).max(0.0).sqrt();
    let (below, top, above) = (amplitude(bin - 1), amplitude(bin), amplitude(bin + 1));
    let (larger, smaller) = (below.max(above), below.min(above));
    let ratio = larger / top;
    // Noise may push the ratio a little past its range of 1/2 (on the bin) to 1 (half way).
    let d = ((2.0 * ratio - 1.0) / (ratio + 1.0)).clamp(0.0, 0.5);
    if (smaller / top - (1.0 - d) / (2.0 + d)).abs() > SHAPE_TOLERANCE {
        return None;
    }
    let amplitude_v = (2.0 * top * top * HANN_ENBW_BINS * density.bin_hz()).sqrt() * (1.0 - d * d) / sinc(d);
    let signed = if above >= below { d } else { -d };
    // dd/dal is at most 4/3; the ratio wavers by sqrt(floor / (peak · n)) for small noise.
    let waver = (peak.floor / (height * density.segments.max(1) as f64)).sqrt();
    Some(Line {
        frequency_hz: (bin as f64 + signed) * density.bin_hz(),
        frequency_uncertainty_hz: density.bin_hz() * 4.0 / 3.0 * (2.0 * waver + CODE_RATIO_ERROR),
        amplitude_v,
        rms_v: amplitude_v / 2.0_f64.sqrt(),
        above_floor_db: decibels_over(height, peak.floor),
        method: LineMethod::Interpolated,
    })
}

/// First and last bin of the band around a peak: while it stands 3 dB above the floor, two bins
/// beyond its own and its neighbours' peaks at least.
fn band(density: &Density, peak: &Peak) -> (usize, usize) {
    let last = density.v2_per_hz.len().saturating_sub(1);
    let is_above = |bin: usize| at(density, bin) > 2.0 * peak.floor;
    let (mut low, mut high) = (peak.crowd.0.saturating_sub(2).max(1), (peak.crowd.1 + 2).min(last));
    while low > 1 && low + WIDEST_BAND_BINS > peak.bin && is_above(low - 1) {
        low -= 1;
    }
    while high < last && high < peak.bin + WIDEST_BAND_BINS && is_above(high + 1) {
        high += 1;
    }
    (low, high)
}

fn sum_band(density: &Density, peak: &Peak, low: usize, high: usize) -> Line {
    let bin_hz = density.bin_hz();
    let power_in = |bin| (at(density, bin) - peak.floor).max(0.0) * bin_hz;
    let power: f64 = (low..=high).map(power_in).sum();
    let moment: f64 = (low..=high).map(|bin| bin as f64 * power_in(bin)).sum();
    Line {
        frequency_hz: moment / power * bin_hz,
        frequency_uncertainty_hz: (high - low) as f64 / 2.0 * bin_hz,
        amplitude_v: (2.0 * power).sqrt(),
        rms_v: power.sqrt(),
        above_floor_db: decibels_over(at(density, peak.bin), peak.floor),
        method: LineMethod::BandPower,
    }
}

/// 10 log10 of a power ratio; a floor of nothing counts as the smallest power a code can tell.
fn decibels_over(power: f64, floor: f64) -> f64 {
    10.0 * (power / floor.max(legwise_protocol::power::decode(1))).log10()
}

/// sin(πx)/(πx).
fn sinc(x: f64) -> f64 {
    if x == 0.0 { 1.0 } else { (PI * x).sin() / (PI * x) }
}
