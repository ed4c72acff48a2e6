//! `time_s` of a CSV file: the sample rate behind it, and the sample index of each row.
//!
//! Text rounds time. A 44.1 kHz clock written in whole microseconds steps by 22 or 23 µs, so neither a
//! single step nor their median is the period. What is used instead:
//!
//! 1. [`RateEstimate::from_rows`], over the first rows: the median step tells whole steps from gaps;
//!    the period is the slope of the line through the rows, or the mean step where there are gaps; a
//!    rate with fewer digits is preferred where the rounding leaves it open.
//! 2. [`SampleClock::index_of`], for every row: `round((t - anchor) * rate)` samples past the anchor,
//!    where the anchor follows the rows slowly (a first-order loop), so that a small error of the rate
//!    cannot add up to an invented gap. Without rounding this is `round((t - t0) * rate)`.
//!
//! What is no whole number of samples, to within [`BASE_TOLERANCE_SAMPLES`] and the rounding, is refused.

/// Deviation from the sample grid that is tolerated beside the rounding of the text, in samples.
/// Common practice, no source: well above a converter's jitter, well below half a sample.
pub(crate) const BASE_TOLERANCE_SAMPLES: f64 = 0.2;
/// Beyond this a row cannot be told from its neighbour.
const WIDEST_TOLERANCE_SAMPLES: f64 = 0.49;
/// Rate error granted over a gap: a converter's crystal (common practice, no source).
const GAP_TOLERANCE: f64 = 100e-6;
/// Share of its deviation by which the anchor follows a row.
const ANCHOR_GAIN: f64 = 1.0 / 64.0;
/// Rows after which the rate is measured anew.
const RATE_ROWS: u64 = 1 << 16;
/// Gaps among the first rows from which the steps no longer count as regular: this many ...
const MANY_GAPS: usize = 8;
/// ... and this share.
const MANY_GAPS_SHARE: f64 = 0.05;
/// Rows from which "no gap, only rounding" can be told from one gap of one sample.
const ENOUGH_ROWS: usize = 64;
/// A relative uncertainty above this leaves the rate as it is found.
const SNAP_UNCERTAINTY: f64 = 1e-3;

/// What is wrong with `time_s`.
#[derive(Clone, Copy, Debug, PartialEq, thiserror::Error)]
pub enum ClockFault {
    /// Earlier than the row before.
    #[error(
        "time_s runs backwards, from {before_s} to {time_s} s; try sorting the rows, or splitting the file where a new recording begins"
    )]
    Backwards {
        /// Time of the row before, seconds.
        before_s: f64,
        /// Time of this row, seconds.
        time_s: f64,
    },
    /// The same as in the row before.
    #[error(
        "time_s stands still at {time_s} s; try writing it with more digits, or removing the column and giving --rate HZ"
    )]
    StandsStill {
        /// Time of both rows, seconds.
        time_s: f64,
    },
    /// No whole number of samples after the row before.
    #[error(
        "time_s advances by {step_samples:.3} samples ({time_s} s) where a whole number is due; try writing it with more digits, or removing the column and giving --rate HZ if the sampling was regular"
    )]
    Irregular {
        /// Samples since the row before.
        step_samples: f64,
        /// Time of this row, seconds.
        time_s: f64,
    },
}

/// The sample rate behind the first rows.
#[derive(Clone, Copy, Debug, PartialEq)]
pub(crate) struct RateEstimate {
    /// Pairs per second, Hz.
    pub(crate) rate_hz: f64,
    /// Relative uncertainty of it, from the rounding of the text.
    pub(crate) uncertainty: f64,
    /// Time of sample 0 on the grid, seconds.
    anchor_s: f64,
    /// Rounding of the text, seconds.
    resolution_s: f64,
}

impl RateEstimate {
    /// From the times of the first rows; `resolution_s` is the last digit of their text.
    /// `Ok(None)` for fewer than two rows. An error carries the row it is found at, from 0.
    pub(crate) fn from_rows(times_s: &[f64], resolution_s: f64) -> Result<Option<Self>, (usize, ClockFault)> {
        let (Some(&first_s), Some(&last_s)) = (times_s.first(), times_s.last()) else {
            return Ok(None);
        };
        let steps: Vec<f64> = times_s.windows(2).filter_map(step_of).collect();
        for (row, pair) in times_s.windows(2).enumerate() {
            check_advance(pair).map_err(|fault| (row + 1, fault))?;
        }
        let mut sorted = steps.clone();
        sorted.sort_by(f64::total_cmp);
        let Some(&median_s) = sorted.get(sorted.len() / 2) else {
            return Ok(None);
        };
        let largest_s = first_s.abs().max(last_s.abs());
        let resolution_s = resolution_s.max(largest_s * f64::EPSILON);
        let is_single = |step_s: f64| {
            let deviation_s = (step_s - median_s).abs();
            deviation_s < 0.5 * median_s && deviation_s <= BASE_TOLERANCE_SAMPLES * median_s + resolution_s
        };
        let others = steps.iter().filter(|&&step_s| !is_single(step_s)).count();
        let (period_s, span_s, snap_share) = if others == 0 || is_uniform(times_s, resolution_s) {
            // Rounding averages out along the line.
            (slope_of(times_s), last_s - first_s, (4.0 / (times_s.len() as f64).sqrt()).min(2.0))
        } else if others >= MANY_GAPS && others as f64 > MANY_GAPS_SHARE * steps.len() as f64 {
            let row = steps.iter().position(|&step_s| !is_single(step_s)).unwrap_or(0) + 1;
            let time_s = times_s.get(row).copied().unwrap_or(last_s);
            let step_samples = steps.get(row - 1).map_or(0.0, |step_s| step_s / median_s);
            return Err((row, ClockFault::Irregular { step_samples, time_s }));
        } else {
            let span_s: f64 = steps.iter().filter(|&&step_s| is_single(step_s)).sum();
            (span_s / (steps.len() - others) as f64, span_s, 2.0)
        };
        let rounding = resolution_s * (1 + others) as f64 / span_s;
        let uncertainty = (2.0 * rounding).max(1e-9);
        let rate_hz = roundest_within(1.0 / period_s, (snap_share * rounding).max(1e-9));
        let anchor_s = anchor_of(times_s, rate_hz, resolution_s);
        Ok(Some(Self { rate_hz, uncertainty, anchor_s, resolution_s }))
    }
}

/// Follows `time_s` row by row.
#[derive(Clone, Copy, Debug)]
pub(crate) struct SampleClock {
    rate_hz: f64,
    tolerance_samples: f64,
    last_s: Option<f64>,
    /// A sample and its time on the grid.
    anchor_sample: u64,
    anchor_s: f64,
    /// The same at the start of the present stretch without a gap.
    stretch_sample: u64,
    stretch_s: f64,
}

impl SampleClock {
    /// Starts before the first row. `known_rate_hz` replaces the estimate where both agree to its uncertainty.
    pub(crate) fn new(estimate: &RateEstimate, known_rate_hz: Option<f64>) -> Self {
        let close = |rate_hz: &f64| (rate_hz / estimate.rate_hz - 1.0).abs() <= estimate.uncertainty;
        let rate_hz = known_rate_hz.filter(close).unwrap_or(estimate.rate_hz);
        let rounding_samples = estimate.resolution_s * rate_hz;
        Self {
            rate_hz,
            tolerance_samples: (BASE_TOLERANCE_SAMPLES + rounding_samples / 2.0)
                .min(WIDEST_TOLERANCE_SAMPLES),
            last_s: None,
            anchor_sample: 0,
            anchor_s: estimate.anchor_s,
            stretch_sample: 0,
            stretch_s: estimate.anchor_s,
        }
    }

    /// The sample index of the next row.
    #[inline]
    pub(crate) fn index_of(&mut self, time_s: f64) -> Result<u64, ClockFault> {
        let Some(last_s) = self.last_s.replace(time_s) else {
            return Ok(0);
        };
        check_advance(&[last_s, time_s])?;
        let distance = (time_s - self.anchor_s) * self.rate_hz;
        let samples = distance.round();
        let deviation = distance - samples;
        let tolerance = (self.tolerance_samples + GAP_TOLERANCE * (samples - 1.0)).min(0.5);
        if samples < 1.0 || deviation.abs() > tolerance || samples > MOST_SAMPLES {
            let step_samples = (time_s - last_s) * self.rate_hz;
            return Err(ClockFault::Irregular { step_samples, time_s });
        }
        self.anchor_sample = self.anchor_sample.saturating_add(samples as u64);
        if samples > 1.0 && deviation.abs() > self.tolerance_samples {
            self.anchor_s = time_s;
        } else {
            self.anchor_s = time_s - deviation * (1.0 - ANCHOR_GAIN) / self.rate_hz;
        }
        if samples > 1.0 {
            (self.stretch_sample, self.stretch_s) = (self.anchor_sample, self.anchor_s);
        } else {
            self.measure_rate();
        }
        Ok(self.anchor_sample)
    }

    #[inline]
    fn measure_rate(&mut self) {
        let samples = self.anchor_sample - self.stretch_sample;
        if samples > 0 && samples.is_multiple_of(RATE_ROWS) {
            self.rate_hz = samples as f64 / (self.anchor_s - self.stretch_s);
        }
    }
}

/// A gap longer than this is no gap of one recording: 285 years at 1 MHz.
const MOST_SAMPLES: f64 = (1_u64 << 53) as f64;

/// The last decimal digit of the times of a file, as their text shows it.
///
/// Trailing zeros may have been cut from a single row, so the most digits seen count; in exponent form
/// the digits move with the value, so the largest exponent seen counts.
#[derive(Clone, Copy, Debug, Default)]
pub(crate) struct TextResolution {
    /// Most decimals without an exponent.
    plain_decimals: Option<i32>,
    /// Largest exponent and most decimals before it.
    exponent: Option<(i32, i32)>,
}

impl TextResolution {
    /// Looks at one number. `separator` is taken for a decimal point as well.
    pub(crate) fn see(&mut self, text: &[u8], separator: u8) {
        let end = text.iter().position(|byte| matches!(byte, b'e' | b'E'));
        let mantissa = text.get(..end.unwrap_or(text.len())).unwrap_or_default();
        let point = mantissa.iter().position(|&byte| byte == b'.' || byte == separator);
        let decimals = point.map_or(0, |point| (mantissa.len() - point - 1) as i32);
        let Some(end) = end else {
            self.plain_decimals = self.plain_decimals.max(Some(decimals));
            return;
        };
        let exponent =
            text.get(end + 1..).and_then(|text| std::str::from_utf8(text).ok()?.parse::<i32>().ok());
        let is_zero = !mantissa.iter().any(|byte| (b'1'..=b'9').contains(byte));
        if let (Some(exponent), false) = (exponent, is_zero) {
            let (largest, most) = self.exponent.unwrap_or((exponent, decimals));
            self.exponent = Some((largest.max(exponent), most.max(decimals)));
        }
    }

    /// The resolution in the unit of the numbers, 0 when none has been seen.
    pub(crate) fn unit(self) -> f64 {
        let plain = self.plain_decimals.map(|decimals| -decimals);
        let scientific = self.exponent.map(|(exponent, decimals)| exponent.saturating_sub(decimals));
        plain.into_iter().chain(scientific).min().map_or(0.0, |power| 10_f64.powi(power))
    }
}

fn step_of(pair: &[f64]) -> Option<f64> {
    let [before_s, time_s] = *pair else { return None };
    Some(time_s - before_s)
}

fn check_advance(pair: &[f64]) -> Result<(), ClockFault> {
    match *pair {
        [before_s, time_s] if time_s < before_s => Err(ClockFault::Backwards { before_s, time_s }),
        [before_s, time_s] if time_s == before_s => Err(ClockFault::StandsStill { time_s }),
        _ => Ok(()),
    }
}

/// Slope of the least-squares line through the rows, seconds per row.
fn slope_of(times_s: &[f64]) -> f64 {
    let first_s = times_s.first().copied().unwrap_or(0.0);
    let middle = (times_s.len() as f64 - 1.0) / 2.0;
    let (mut product, mut square) = (0.0, 0.0);
    for (row, time_s) in times_s.iter().enumerate() {
        let distance = row as f64 - middle;
        product += distance * (time_s - first_s);
        square += distance * distance;
    }
    product / square
}

/// Whether all rows lie on one line but for rounding. A gap of one sample would tear the line apart by
/// a whole sample, less what the line follows it: at most `4 / rows` (leverage of the last row).
fn is_uniform(times_s: &[f64], resolution_s: f64) -> bool {
    let period_s = slope_of(times_s);
    let first_s = times_s.first().copied().unwrap_or(0.0);
    let origins = times_s.iter().enumerate().map(|(row, time_s)| time_s - first_s - row as f64 * period_s);
    let (low_s, high_s) = origins
        .fold((f64::MAX, f64::MIN), |(low_s, high_s), origin_s| (low_s.min(origin_s), high_s.max(origin_s)));
    times_s.len() >= ENOUGH_ROWS && high_s - low_s <= (1.05 * resolution_s).min(0.93 * period_s)
}

/// Middle of the times at which sample 0 would lie by the first stretch without a gap.
fn anchor_of(times_s: &[f64], rate_hz: f64, resolution_s: f64) -> f64 {
    let first_s = times_s.first().copied().unwrap_or(0.0);
    let bound_s = resolution_s.max(BASE_TOLERANCE_SAMPLES / rate_hz);
    let origins = times_s.iter().take(256).enumerate().map(|(row, time_s)| time_s - row as f64 / rate_hz);
    let near = origins.take_while(|origin_s| (origin_s - first_s).abs() <= bound_s);
    let (low_s, high_s) = near
        .fold((first_s, first_s), |(low_s, high_s), origin_s| (low_s.min(origin_s), high_s.max(origin_s)));
    low_s.midpoint(high_s)
}

/// The number with the fewest significant digits within `uncertainty` (relative) of `value`.
fn roundest_within(value: f64, uncertainty: f64) -> f64 {
    if uncertainty > SNAP_UNCERTAINTY || !(value > 0.0 && value.is_finite()) {
        return value;
    }
    let magnitude = value.log10().floor() as i32;
    let rounded = (0..12).map(|digits| {
        let unit = 10_f64.powi((magnitude - digits).abs());
        if magnitude >= digits { (value / unit).round() * unit } else { (value * unit).round() / unit }
    });
    rounded.into_iter().find(|round| (round / value - 1.0).abs() <= uncertainty).unwrap_or(value)
}

#[cfg(test)]
mod tests;
