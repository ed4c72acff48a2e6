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
//!
//! A [`Section`] is what is searched: a whole density, or the bins a rung of the ladder publishes. At an
//! end of a section that is neither 0 Hz nor half the rate a peak has one neighbour only. The formula
//! holds for any neighbour, `|W(d+1)/W(d)| = (1 − d)/(2 + d)`, so it serves there too.

use super::{Density, HANN_ENBW_BINS};
use std::f64::consts::PI;

mod section;

pub use section::{Outside, Section};

/// A local maximum this far above the local floor, as a power ratio, is a line: 10 dB.
const LINE_OVER_FLOOR: f64 = 10.0;
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
/// Bins above twice the floor that make a band of a maximum at the end of a section.
const END_BAND_BINS: usize = 5;
/// A valley this far below the peak, as a power ratio (15 dB) ...
const VALLEY: f64 = 0.03;
/// ... from which the density rises by this ratio (6 dB) ends a band: what follows is another line's.
const RISE: f64 = 4.0;
/// Second moment of the Hann window's own shape, bins²: (1/4 + 1/4)/(1 + 1/4 + 1/4) on a bin.
const WINDOW_SQUARE: f64 = 1.0 / 3.0;
/// Lines looked for before the strongest are taken.
const MOST_LINES: usize = 64;
/// Error of the neighbour ratio from the 16-bit power codes: two half steps of 2^-11 in power.
const CODE_RATIO_ERROR: f64 = 0.000_5;
/// Worst error in bins per amplitude of the window's envelope at the line's mirror image below 0 Hz:
/// computed over all phases, 1.7e-3 bins at bin 4 (envelope 6.3e-4), 1.7e-4 at bin 8 (7.8e-5), so 2.7 at 4.
const IMAGE_ERROR: f64 = 2.7;

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
    /// Standard deviation of the power about the frequency, Hz, the window's own taken off; 0 where the line
    /// is no wider than the window.
    pub spread_hz: f64,
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
    find_in(&Section::from(density), &[], at_most)
}

/// The strongest lines of a section, at most `at_most`, largest amplitude first. What the skirts of the
/// lines `outside` it explain is none.
pub fn find_in(section: &Section<'_>, outside: &[Outside], at_most: usize) -> Vec<Line> {
    // Bins whose power is counted already.
    let mut covered: Vec<(usize, usize)> = Vec::new();
    let mut lines = Vec::new();
    for peak in &peaks(section, outside) {
        let is_covered = |bin: usize| covered.iter().any(|&(low, high)| (low..=high).contains(&bin));
        if is_covered(peak.bin) {
            continue;
        }
        if let Some(line) = interpolate(section, peak) {
            lines.push(line);
            covered.push((peak.bin - OWN_BINS, peak.bin + OWN_BINS));
            continue;
        }
        let (low, high) = band(section, peak, is_covered);
        if section.is_end(peak.bin) && high - low < END_BAND_BINS {
            continue;
        }
        covered.push((low, high));
        lines.push(sum_band(section, peak, low, high));
    }
    lines.sort_by(|a, b| b.amplitude_v.total_cmp(&a.amplitude_v));
    lines.truncate(at_most);
    lines
}

/// The maxima that are lines, highest first, each with what is too close to be told from it.
fn peaks(section: &Section<'_>, outside: &[Outside]) -> Vec<Peak> {
    let mut peaks: Vec<Peak> = Vec::new();
    for (bin, floor) in maxima(section) {
        let height = section.at(bin);
        let own: f64 = peaks.iter().map(|peak| section.at(peak.bin) * skirt(peak.bin.abs_diff(bin))).sum();
        let others: f64 = outside.iter().map(|line| section.skirt_of(line, bin)).sum();
        if height < OVER_SKIRT * (own + others) {
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
    peaks
}

/// Local maxima that stand out of their neighbourhood, highest first, each with its local floor.
fn maxima(section: &Section<'_>) -> Vec<(usize, f64)> {
    let ratio = section.line_ratio(LINE_OVER_FLOOR);
    let mut found: Vec<(usize, f64)> = section
        .searched()
        .filter(|&bin| {
            let height = section.at(bin);
            height > section.at(bin.saturating_sub(1)) && height >= section.at(bin + 1)
        })
        .filter_map(|bin| {
            let floor = section.local_floor(bin);
            (section.at(bin) > ratio * floor).then_some((bin, floor))
        })
        .collect();
    found.sort_by(|a, b| section.at(b.0).total_cmp(&section.at(a.0)));
    found
}

/// Most power the Hann window leaves `bins` away from the highest bin of a line, as a ratio: the
/// envelope of its side lobes, half a bin closer because the line need not sit on its bin, and
/// raised by the 1.42 dB the highest bin then misses.
fn skirt(bins: usize) -> f64 {
    (1.178 * 1.178 * envelope(bins as f64 - 0.5)).min(1.0)
}

/// Envelope of the Hann window's side lobes, as a power ratio; 1 closer than a bin and a half.
fn envelope(bins: f64) -> f64 {
    if bins < 1.5 { 1.0 } else { (PI * bins * (bins * bins - 1.0)).powi(-2) }
}

/// Two-bin interpolation; `None` where it is not valid.
fn interpolate(section: &Section<'_>, peak: &Peak) -> Option<Line> {
    let bin = peak.bin;
    let is_near_half_rate = bin + OWN_BINS >= section.half_rate_bin;
    if peak.is_crowded || bin <= OWN_BINS || is_near_half_rate {
        return None;
    }
    let height = section.at(bin);
    if height < SHARP_RATIO * section.at(bin - OWN_BINS).max(section.at(bin + OWN_BINS)) {
        return None;
    }
    let amplitude = |bin| section.get(bin).map(|power| (power - peak.floor).max(0.0).sqrt());
    let top = amplitude(bin)?;
    let near = |bin| amplitude(bin).map(|amplitude| amplitude / top);
    let offset = match (near(bin - 1), near(bin + 1)) {
        (Some(below), Some(above)) => between(below, above)?,
        (None, Some(above)) => -from_one_side(above, near(bin + 2)?)?,
        (Some(below), None) => from_one_side(below, near(bin - 2)?)?,
        (None, None) => return None,
    };
    let d = offset.abs();
    let amplitude_v = (2.0 * top * top * HANN_ENBW_BINS * section.bin_hz).sqrt() * (1.0 - d * d) / sinc(d);
    // dd/dal is at most 4/3; the ratio wavers by sqrt(floor / (peak · n)) for small noise.
    let waver = (peak.floor / (height * section.segments.max(1.0))).sqrt();
    Some(Line {
        frequency_hz: (bin as f64 + offset) * section.bin_hz,
        frequency_uncertainty_hz: section.bin_hz
            * (4.0 / 3.0 * (2.0 * waver + CODE_RATIO_ERROR)
                + IMAGE_ERROR * envelope(2.0 * bin as f64).sqrt()),
        amplitude_v,
        rms_v: amplitude_v / 2.0_f64.sqrt(),
        spread_hz: 0.0,
        above_floor_db: decibels_over(height, peak.floor),
        method: LineMethod::Interpolated,
    })
}

/// Offset from the peak in bins, from both neighbours as shares of its amplitude; `None` where they do not
/// have the window's shape.
fn between(below: f64, above: f64) -> Option<f64> {
    let ratio = below.max(above);
    // Noise may push the ratio a little past its range of 1/2 (on the bin) to 1 (half way).
    let d = ((2.0 * ratio - 1.0) / (ratio + 1.0)).clamp(0.0, 0.5);
    let is_shaped = (below.min(above) - (1.0 - d) / (2.0 + d)).abs() <= SHAPE_TOLERANCE;
    is_shaped.then_some(if above >= below { d } else { -d })
}

/// Offset away from the neighbours on one side, one and two bins off, as shares of the peak's amplitude.
fn from_one_side(first: f64, second: f64) -> Option<f64> {
    let offset = (1.0 - 2.0 * first) / (1.0 + first);
    let shape = (offset * (1.0 - offset) / ((2.0 + offset) * (3.0 + offset))).abs();
    // A line further out than half a bin peaks in a bin that is not here.
    (offset.abs() <= 0.55 && (second - shape).abs() <= SHAPE_TOLERANCE).then_some(offset)
}

/// First and last bin of the band around a peak: while it stands 3 dB above the floor, two bins beyond its
/// own and its neighbours' peaks at least, neither beyond a valley nor into bins already `covered`.
fn band(section: &Section<'_>, peak: &Peak, is_covered: impl Fn(usize) -> bool) -> (usize, usize) {
    let (first, last) = (section.first_bin.max(1), section.last_bin());
    let widest =
        (peak.bin.saturating_sub(WIDEST_BAND_BINS).max(first), (peak.bin + WIDEST_BAND_BINS).min(last));
    let (low, high) = peak.crowd;
    let downwards = (widest.0..low).rev().take_while(|&bin| !is_covered(bin));
    let upwards = (high + 1..=widest.1).take_while(|&bin| !is_covered(bin));
    (reach(section, peak, low, downwards), reach(section, peak, high, upwards))
}

/// The last of the bins outwards from `start` that still belongs to the band.
fn reach(section: &Section<'_>, peak: &Peak, start: usize, outwards: impl Iterator<Item = usize>) -> usize {
    let height = section.at(peak.bin);
    let (mut reached, mut valley) = (start, (f64::INFINITY, start));
    for bin in outwards {
        let density = section.at(bin);
        if density < valley.0 {
            valley = (density, bin);
        } else if valley.0 < VALLEY * height && density > RISE * valley.0 {
            return valley.1;
        }
        if bin.abs_diff(start) > 2 && density <= 2.0 * peak.floor {
            break;
        }
        reached = bin;
    }
    reached
}

fn sum_band(section: &Section<'_>, peak: &Peak, low: usize, high: usize) -> Line {
    let bin_hz = section.bin_hz;
    let power_in = |bin| (section.at(bin) - peak.floor).max(0.0) * bin_hz;
    let power: f64 = (low..=high).map(power_in).sum();
    let centre = (low..=high).map(|bin| bin as f64 * power_in(bin)).sum::<f64>() / power;
    let square = (low..=high).map(|bin| (bin as f64 - centre).powi(2) * power_in(bin)).sum::<f64>() / power;
    Line {
        frequency_hz: centre * bin_hz,
        frequency_uncertainty_hz: (high - low) as f64 / 2.0 * bin_hz,
        amplitude_v: (2.0 * power).sqrt(),
        rms_v: power.sqrt(),
        spread_hz: (square - WINDOW_SQUARE).max(0.0).sqrt() * bin_hz,
        above_floor_db: decibels_over(section.at(peak.bin), peak.floor),
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
