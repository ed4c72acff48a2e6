//! What one mode makes in the other: the few places that tell most, and a sentence.
//!
//! The statistics are those of [`crate::spectrum::conversion`]; here is chosen what is shown. Nothing below
//! the board's own conversion is claimed, and where that is not known the report says so.
//!
//! What drivers make of their data is told from the shortest segments, those of the full rate. In longer ones
//! messages come and go, and every driver that takes over steps the common mode to its own: that hangs together
//! with the data as well, and is no imbalance.

use super::averages::Averages;
use super::figures::{hertz, ratio, uncertainty_degrees, volts};
use super::model::{Conversion, ConversionPoint};
use crate::spectrum::conversion::{
    self, CONFIDENCE, Coding, ConversionFloor, Direction, Input, LimitReason, Point, PointKind, Record,
    Refusal, Settings, Verdict,
};

/// Places shown.
const POINTS: usize = 5;
/// The rung that tells imbalance of the drivers: the full rate.
const IMBALANCE_RUNG: u8 = 0;
/// An upper limit above this tells nothing: -20 dB. A single wire makes 2.
const TELLING_LIMIT: f64 = 0.1;
/// Two places of one curve closer than this share of their frequency tell the same.
const SAME_SHARE: f64 = 0.15;

/// Both directions: common to differential, then differential to common.
/// `skew_ns` is how much later leg B is sampled.
pub(crate) fn read(averages: &Averages, skew_ns: i64, floor: Option<&ConversionFloor>) -> [Conversion; 2] {
    let records: Vec<Record<'_>> = averages
        .by_set
        .iter()
        .map(|mean| Record { spectra: &mean.mean, coding: Coding::Wire { averages: mean.spectra } })
        .collect();
    let input = Input { records: &records, board: floor, common_noise_v2_per_hz: None };
    let skew_samples = averages.rate_hz().unwrap_or(0.0) * skew_ns as f64 * 1e-9;
    let settings = Settings { skew_samples, ..Settings::default() };
    let curves = [
        (Direction::Conversion, conversion::conversion(&input, &settings)),
        (Direction::DriverImbalance, conversion::driver_imbalance(&input, &settings)),
    ];
    curves.map(|(direction, mut curve)| {
        curve.retain(|point| direction == Direction::Conversion || point.rung == IMBALANCE_RUNG);
        summary(&curve, direction, floor.is_some(), averages.is_single())
    })
}

fn summary(curve: &[Point], direction: Direction, is_board_known: bool, is_single: bool) -> Conversion {
    let significant = highest_first(curve);
    let mut limits: Vec<(&Point, f64)> =
        curve.iter().filter_map(|point| Some((point, limit(point)?))).collect();
    limits.sort_by(|a, b| a.1.total_cmp(&b.1));
    let is_telling = limits.first().is_some_and(|limit| limit.1 <= TELLING_LIMIT);
    let finding = match (significant.is_empty(), is_telling) {
        (false, _) => "significant",
        (true, true) => "upper-limit",
        (true, false) => "not-known",
    };
    let chosen = if significant.is_empty() {
        apart(limits.iter().map(|limit| limit.0))
    } else {
        apart(significant.iter().copied())
    };
    let points: Vec<ConversionPoint> = chosen.into_iter().map(point).collect();
    let text = match points.first() {
        Some(first) if finding == "significant" => value(first),
        Some(first) if is_telling => upper_limit(first, &limits),
        Some(first) => high_limit(first, direction),
        None => unknown(curve, direction, is_single),
    };
    Conversion {
        finding,
        text,
        is_board_known,
        tested: curve.len() as u64,
        significant: significant.len() as u64,
        points,
    }
}

/// The significant points: those that may be the highest first, the most exact of them leading; then the others
/// by what is sure of them.
///
/// Of a hundred regions that hold the true value in 95 % of cases a few do not, and the highest one would be
/// one of these. Regions are compared as wide as they must be for all of them to hold together: a radius goes
/// with `√(−ln α)`, and each has its share of α.
fn highest_first(curve: &[Point]) -> Vec<&Point> {
    let mut significant: Vec<&Point> = curve.iter().filter(|point| point.is_significant()).collect();
    let risk = 1.0 - CONFIDENCE;
    let wider = ((risk / significant.len().max(1) as f64).ln() / risk.ln()).sqrt();
    let least = |point: &Point| point.magnitude() - wider * point.radius;
    let highest = significant.iter().map(|point| least(point)).fold(0.0, f64::max);
    let rank = |point: &Point| {
        let may_be_highest = point.magnitude() + wider * point.radius >= highest;
        if may_be_highest { (0, point.radius / point.magnitude()) } else { (1, -least(point)) }
    };
    significant.sort_by(|a, b| {
        let (a, b) = (rank(a), rank(b));
        a.0.cmp(&b.0).then(a.1.total_cmp(&b.1))
    });
    significant
}

/// The upper limit of a point that has one.
fn limit(point: &Point) -> Option<f64> {
    match point.verdict {
        Verdict::UpperLimit { magnitude, .. } if magnitude.is_finite() => Some(magnitude),
        _ => None,
    }
}

/// The first of those that lie close together, at most [`POINTS`].
fn apart<'a>(points: impl Iterator<Item = &'a Point>) -> Vec<&'a Point> {
    let mut chosen: Vec<&Point> = Vec::new();
    for point in points {
        let is_same = |other: &&Point| (other.frequency_hz / point.frequency_hz).ln().abs() < SAME_SHARE;
        if chosen.len() < POINTS && !chosen.iter().any(is_same) {
            chosen.push(point);
        }
    }
    chosen
}

fn point(point: &Point) -> ConversionPoint {
    let is_significant = point.is_significant();
    let value = |value: f64| is_significant.then_some(value);
    // Noise in the asking mode makes a ratio low; where that is not bounded there is no highest value.
    let low_by = 10_f64.powf(point.input_noise.low_by_db() / 20.0);
    let highest = limit(point).unwrap_or((point.magnitude() + point.radius) * low_by);
    ConversionPoint {
        kind: if point.kind == PointKind::Line { "line" } else { "band" },
        frequency_hz: point.frequency_hz,
        from_hz: point.band_hz.0,
        to_hz: point.band_hz.1,
        magnitude: value(point.magnitude()),
        magnitude_low: value((point.magnitude() - point.radius).max(0.0)),
        magnitude_high: highest.is_finite().then_some(highest),
        phase_deg: value(point.phase_degrees()),
        phase_uncertainty_deg: value(point.phase_uncertainty_degrees()),
        coherence: point.coherence,
        effective_segments: point.effective_segments,
        board_floor: point.board_floor,
        verdict: verdict(point),
    }
}

fn verdict(point: &Point) -> &'static str {
    match point.verdict {
        Verdict::Significant => "significant",
        Verdict::UpperLimit { reason, .. } => match reason {
            LimitReason::NotSignificant => "not-significant",
            LimitReason::BelowBoardFloor => "below-board",
            LimitReason::LegNoise => "leg-noise",
            LimitReason::RivalDirection => "other-direction",
            LimitReason::Folded => "folded",
        },
        Verdict::Refused(_) => "refused",
    }
}

/// The sentence on a significant value.
fn value(point: &ConversionPoint) -> String {
    let magnitude = point.magnitude.unwrap_or(0.0);
    let low = point.magnitude_low.filter(|low| *low > 0.0).map_or("-".to_string(), decibels);
    let high = point.magnitude_high.map_or("?".to_string(), decibels);
    format!(
        "{}/V, {} dB (95 %: {low} to {high} dB) at {}, {:.0} deg {}",
        volts(magnitude),
        decibels(magnitude),
        hertz(point.frequency_hz),
        // Minus nothing is nothing.
        point.phase_deg.unwrap_or(0.0).round() + 0.0,
        uncertainty_degrees(point.phase_uncertainty_deg.unwrap_or(180.0)),
    )
}

fn decibels(magnitude: f64) -> String {
    format!("{:.1}", 20.0 * magnitude.log10())
}

/// The sentence on upper limits, lowest first.
fn upper_limit(first: &ConversionPoint, limits: &[(&Point, f64)]) -> String {
    let telling = || limits.iter().filter(|limit| limit.1 <= TELLING_LIMIT).map(|limit| limit.0.frequency_hz);
    let (low_hz, high_hz) = (telling().fold(f64::INFINITY, f64::min), telling().fold(0.0, f64::max));
    format!(
        "none seen: below {} at {}, below {} from {} to {}{}",
        ratio(first.magnitude_high.unwrap_or(f64::INFINITY)),
        hertz(first.frequency_hz),
        ratio(TELLING_LIMIT),
        hertz(low_hz),
        hertz(high_hz),
        reason(first.verdict),
    )
}

/// The sentence where even the lowest upper limit is high.
fn high_limit(first: &ConversionPoint, direction: Direction) -> String {
    let lacking = match direction {
        Direction::Conversion => "too little common mode while the bus rests",
        Direction::DriverImbalance => "too little data while the bus is driven",
    };
    let limit = ratio(first.magnitude_high.unwrap_or(f64::INFINITY));
    let lacking = if first.verdict == "folded" {
        "on legs sampled one after the other content folded down from above half the rate looks the same"
    } else {
        lacking
    };
    format!("not known: {lacking} (no more than {limit} at {})", hertz(first.frequency_hz))
}

fn reason(verdict: &str) -> &'static str {
    match verdict {
        "below-board" => "; the board itself converts as much",
        "leg-noise" => "; noise of the legs could do as much",
        "other-direction" => "; the other direction could do as much",
        "folded" => "; content folded down from above half the rate could do as much",
        _ => "",
    }
}

/// The sentence of a curve that says nothing.
fn unknown(curve: &[Point], direction: Direction, is_single: bool) -> String {
    if is_single {
        return "not known: the log's spectra hold each mode by itself".to_string();
    }
    let has = |is_it: fn(&Refusal) -> bool| {
        curve.iter().any(|point| matches!(&point.verdict, Verdict::Refused(refusal) if is_it(refusal)))
    };
    let is_conversion = direction == Direction::Conversion;
    let text = if curve.is_empty() {
        "not known: the log holds no spectra"
    } else if has(|refusal| matches!(refusal, Refusal::OtherDirection)) {
        "not known: what the modes share comes the other way"
    } else if has(|refusal| matches!(refusal, Refusal::NoiseOnly)) {
        if is_conversion {
            "not known: the common mode may be the board's own noise"
        } else {
            "not known: the common mode holds too much that is not from the data"
        }
    } else if is_conversion {
        "not known: the pair rested too seldom; try a longer recording"
    } else {
        "not known: the pair was driven too seldom; try a longer recording"
    };
    text.to_string()
}
