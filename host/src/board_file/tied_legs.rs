//! What a board does of its own, from a recording with both its legs tied to one source.
//!
//! With the legs tied, the differential mode is the board's: `H = S_cd/S_cc`. A leg B that reads `1 + ε`
//! times what leg A reads makes `H = −ε/(1 + ε/2)`, hence
//!
//! ```text
//! ε(f) = −H / (1 + H/2)        its radius: |dε/dH| r = r / |1 + H/2|²
//! ```
//!
//! The recording is refused when it cannot be one of tied legs: too short, no common mode to speak of, or
//! a differential mode that is not small against it.

use super::{BoardFacts, BoardFile, FORMAT};
use crate::report::figures;
use crate::spectrum::conversion::{ConversionFloor, FloorError, FloorPoint, LEAST_SEGMENTS, Settings};
use crate::spectrum::ladder::Ladder;
use legwise_protocol::message::SegmentSet;
use std::fmt::Write;

/// Differential over common mode, as a voltage ratio, from which on the legs were not tied: -14 dB, far above
/// the 7 % by which two dividers of 1 % resistors differ at the worst (own arithmetic: 3.64 times the
/// tolerance each).
const LARGEST_RATIO: f64 = 0.2;
/// Share of driven segments from which on something else talked on the legs.
const MOST_DRIVEN: f64 = 0.02;

/// Why a recording gives no board file.
#[derive(Debug, thiserror::Error)]
#[non_exhaustive]
pub enum TiedLegsError {
    /// Nothing averaged.
    #[error(
        "could not measure the board: there are no averaged spectra of both modes in it; try a longer recording \
         (a minute or more)"
    )]
    NoSpectra,
    /// Not long enough.
    #[error(
        "could not measure the board: {effective:.1} segments are too few, {least} are needed; try a longer \
         recording (a minute or more)",
        least = LEAST_SEGMENTS
    )]
    TooShort {
        /// Effective idle segments of the rung that has most.
        effective: f64,
    },
    /// Somebody talked.
    #[error(
        "could not measure the board: the legs were driven apart in {percent:.0} % of the segments, so they were not \
         tied together; try again with both clips on one source, away from any bus"
    )]
    Driven {
        /// Share of driven segments, per cent.
        percent: f64,
    },
    /// The differential mode is large.
    #[error(
        "could not measure the board: the differential mode is {percent:.0} % of the common mode, too much for tied \
         legs; try checking that both clips hold on the same point"
    )]
    NotTied {
        /// Differential over common mode at its strong frequencies, per cent.
        percent: f64,
    },
    /// Nothing stands clear of the noise.
    #[error(transparent)]
    Floor(#[from] FloorError),
}

/// A mismatch of the legs at one frequency.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Mismatch {
    /// Gain of leg B over that of leg A, less 1: real and imaginary part.
    pub ratio: (f64, f64),
    /// The true one lies within this distance in 95 % of all cases.
    pub radius: f64,
}

impl Mismatch {
    /// From the board's own conversion.
    pub fn of(point: &FloorPoint) -> Self {
        let (re, im) = (1.0 + point.real / 2.0, point.imaginary / 2.0);
        let squared = re * re + im * im;
        // -H / (1 + H/2), with the conjugate of the denominator.
        let ratio = (
            -(point.real * re + point.imaginary * im) / squared,
            -(point.imaginary * re - point.real * im) / squared,
        );
        Self { ratio, radius: point.radius / squared }
    }

    /// Phase of leg B against leg A, degrees.
    pub fn phase_degrees(&self) -> f64 {
        self.ratio.1.atan2(1.0 + self.ratio.0).to_degrees()
    }
}

/// Measures a board.
///
/// # Errors
/// When the recording cannot be one of tied legs, or tells too little.
pub fn measure(ladder: &Ladder, facts: &BoardFacts) -> Result<BoardFile, TiedLegsError> {
    let segments = |set: SegmentSet, rung: u8| {
        ladder.of_set(set).find(|mean| mean.mean.rung == rung).map_or(0, |mean| mean.mean.segments)
    };
    let idle = segments(SegmentSet::Idle, 0);
    let driven: u64 = ladder.of_set(SegmentSet::Driven).map(|mean| mean.mean.segments).sum();
    let all: u64 = ladder.means.iter().map(|mean| mean.mean.segments).sum();
    let share = driven as f64 / all.max(1) as f64;
    if share > MOST_DRIVEN {
        return Err(TiedLegsError::Driven { percent: 100.0 * share });
    }
    let effective =
        ladder.of_set(SegmentSet::Idle).map(|mean| mean.mean.effective_segments()).fold(0.0, f64::max);
    if effective < LEAST_SEGMENTS {
        return Err(TiedLegsError::TooShort { effective });
    }
    let floor = ConversionFloor::from_tied_legs(&ladder.records(), &Settings::default())?;
    let ratio = largest_common(&floor);
    if ratio > LARGEST_RATIO {
        return Err(TiedLegsError::NotTied { percent: 100.0 * ratio });
    }
    Ok(BoardFile {
        format: FORMAT.to_owned(),
        board: facts.board.clone(),
        serial: facts.serial.clone(),
        sample_rate_hz: ladder.sample_rate_hz,
        measured_utc: facts.created_utc.clone(),
        tool_version: env!("CARGO_PKG_VERSION").to_owned(),
        segments: idle,
        points: floor.points().to_vec(),
    })
}

/// Largest magnitude that nine points in ten stay below: one bad point is no reason to refuse.
fn largest_common(floor: &ConversionFloor) -> f64 {
    let mut magnitudes: Vec<f64> =
        floor.points().iter().map(|point| point.real.hypot(point.imaginary) - point.radius).collect();
    magnitudes.sort_by(f64::total_cmp);
    let place = magnitudes.len().saturating_sub(1) * 9 / 10;
    magnitudes.get(place).copied().unwrap_or(0.0)
}

/// What was measured, for people: at powers of ten, and the worst.
pub fn summary(file: &BoardFile, floor: &ConversionFloor) -> String {
    let points = floor.points();
    let mut text = String::new();
    let (Some(first), Some(last)) = (points.first(), points.last()) else { return text };
    let board = file.board.as_deref().unwrap_or("a board without a name");
    let serial = file.serial.as_ref().map(|serial| format!(", serial {serial}")).unwrap_or_default();
    let _ = writeln!(
        text,
        "{board}{serial} at {}: {} points from {} to {}, {} segments at the full rate",
        figures::pair_rate(file.sample_rate_hz),
        points.len(),
        figures::hertz(first.frequency_hz),
        figures::hertz(last.frequency_hz),
        figures::count(file.segments),
    );
    let _ =
        writeln!(text, "  {:>12}  {:<34}  leg B against leg A", "frequency", "the board's own conversion");
    let lowest = first.frequency_hz.log10().ceil() as i32;
    let highest = last.frequency_hz.log10().floor() as i32;
    let decades = (lowest..=highest).filter_map(|decade| floor.at(10_f64.powi(decade)));
    for point in decades {
        let _ = writeln!(text, "  {}", row(&point));
    }
    let magnitude = |point: &FloorPoint| point.real.hypot(point.imaginary) + point.radius;
    if let Some(worst) = points.iter().max_by(|a, b| magnitude(a).total_cmp(&magnitude(b))) {
        let _ = writeln!(text, "  worst, with its uncertainty:\n  {}", row(worst));
    }
    text
}

/// One line: frequency, conversion with its range, gain and phase of leg B against leg A.
fn row(point: &FloorPoint) -> String {
    let magnitude = point.real.hypot(point.imaginary);
    let decibels = |magnitude: f64| 20.0 * magnitude.log10();
    let conversion = if point.radius < magnitude {
        let (low, high) = (decibels(magnitude - point.radius), decibels(magnitude + point.radius));
        format!("{} ({low:.1} to {high:.1})", figures::decibels(decibels(magnitude)))
    } else {
        format!("below {}", figures::decibels(decibels(magnitude + point.radius)))
    };
    let mismatch = Mismatch::of(point);
    format!(
        "{:>12}  {conversion:<34}  {} {}, {}",
        figures::hertz(point.frequency_hz),
        figures::percent_signed(mismatch.ratio.0),
        figures::uncertainty_percent(mismatch.radius),
        figures::degrees(mismatch.phase_degrees(), mismatch.radius.to_degrees())
    )
}
