//! What the board itself converts: measured with both legs tied to one source, kept in a file.
//!
//! With the legs tied together and moved in common, the differential mode is made by the board: unequal
//! gains, skew, unequal input networks. A leg B that reads `(1 + ε)` times too much shows `H = −ε/(1 + ε/2)`
//! and makes `−ε/4` of the data in the common mode, a quarter of H to first order; that is the board's own
//! driver imbalance. What of the differential mode is not coherent with the source is the noise of both
//! converters, four times their noise in the common mode.
//!
//! Between its frequencies the complex ratio is interpolated straight over the logarithm of frequency.

use super::grid::{self, Place};
use super::{Direction, Input, PointKind, Record, Settings, pool::Pool, region};
use serde::{Deserialize, Serialize};

/// A point of a floor recording is used where the common mode is so many times the board's noise in it.
const CLEAR_OF_NOISE: f64 = 10.0;
/// A point of a floor recording whose region is wider than this tells nothing: -20 dB.
const WIDEST_RADIUS: f64 = 0.1;
/// The first and last value hold this far beyond their frequencies: two points of the curve.
const REACH: f64 = 1.22;

/// Errors of a conversion floor.
#[derive(Debug, thiserror::Error)]
#[non_exhaustive]
pub enum FloorError {
    /// No point of the recording tells enough.
    #[error(
        "could not measure the board's own conversion: no band has {least} segments and enough common mode; \
         try a longer recording and a stronger source of the common mode on both tied legs",
        least = super::LEAST_SEGMENTS
    )]
    TooWeak,
    /// A point of a file is not a measured value.
    #[error(
        "could not use the conversion floor: the value at {frequency_hz} Hz is not valid; try measuring it \
         again with the legs tied together"
    )]
    NotValid {
        /// Frequency of the point, Hz.
        frequency_hz: f64,
    },
    /// A file without points.
    #[error(
        "could not use the conversion floor: it holds no points; try measuring it with the legs tied together"
    )]
    Empty,
}

/// The board's own conversion at one frequency.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize)]
pub struct FloorPoint {
    /// Frequency in Hz.
    pub frequency_hz: f64,
    /// Real part of S_cd/S_cc.
    pub real: f64,
    /// Imaginary part of it.
    pub imaginary: f64,
    /// The true value lies within this distance in 95 % of all cases.
    pub radius: f64,
    /// Noise of the board in the common mode, V²/Hz.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub common_noise_v2_per_hz: Option<f64>,
}

/// The board's own conversion over frequency, as kept in a file.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
#[serde(try_from = "Points")]
pub struct ConversionFloor {
    points: Vec<FloorPoint>,
}

/// A floor as a file holds it.
#[derive(Deserialize)]
struct Points {
    points: Vec<FloorPoint>,
}

impl TryFrom<Points> for ConversionFloor {
    type Error = FloorError;

    fn try_from(raw: Points) -> Result<Self, FloorError> {
        Self::new(raw.points)
    }
}

/// A ratio of the board's own and its radius.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct OwnRatio {
    /// Real and imaginary part.
    pub ratio: (f64, f64),
    /// The true value lies within this distance in 95 % of all cases.
    pub radius: f64,
}

impl OwnRatio {
    /// Magnitude plus radius.
    pub fn magnitude_with_radius(&self) -> f64 {
        self.ratio.0.hypot(self.ratio.1) + self.radius
    }
}

impl ConversionFloor {
    /// A floor of measured points, in any order.
    ///
    /// # Errors
    ///
    /// When there is none, or one that cannot be a measured value.
    pub fn new(mut points: Vec<FloorPoint>) -> Result<Self, FloorError> {
        for point in &points {
            let numbers = [point.frequency_hz, point.real, point.imaginary, point.radius];
            let noise = point.common_noise_v2_per_hz.unwrap_or(0.0);
            let is_valid = numbers.iter().all(|number| number.is_finite())
                && point.frequency_hz > 0.0
                && point.radius >= 0.0
                && noise.is_finite()
                && noise >= 0.0;
            if !is_valid {
                return Err(FloorError::NotValid { frequency_hz: point.frequency_hz });
            }
        }
        points.sort_by(|a, b| a.frequency_hz.total_cmp(&b.frequency_hz));
        if points.is_empty() { Err(FloorError::Empty) } else { Ok(Self { points }) }
    }

    /// The floor from the spectra of a recording with both legs tied to one source of common mode.
    ///
    /// Such a recording has no data in it: all segments are in the idle set.
    ///
    /// # Errors
    ///
    /// When no band has enough segments and enough common mode.
    pub fn from_tied_legs(records: &[Record], settings: &Settings) -> Result<Self, FloorError> {
        let places = grid::places(records, settings, Direction::Conversion);
        let input = Input { records, ..Input::default() };
        let mut pooled: Vec<(&Place, Pool, f64)> = Vec::new();
        for place in &places {
            let Some(pool) = super::pool_at(&input, place, Direction::Conversion) else { continue };
            if pool.time_segments >= super::LEAST_SEGMENTS && pool.is_measured() {
                let noise = common_noise_of(&pool);
                pooled.push((place, pool, noise));
            }
        }
        let points: Vec<FloorPoint> = pooled
            .iter()
            .filter_map(|(place, pool, noise)| {
                let noise = if place.kind == PointKind::Line {
                    noise.min(noise_beside(place, &pooled))
                } else {
                    *noise
                };
                point_of(place.frequency_hz, pool, noise)
            })
            .collect();
        if points.is_empty() { Err(FloorError::TooWeak) } else { Self::new(points) }
    }

    /// The points by rising frequency.
    pub fn points(&self) -> &[FloorPoint] {
        &self.points
    }

    /// The floor at a frequency; `None` beyond the measured range.
    pub fn at(&self, frequency_hz: f64) -> Option<FloorPoint> {
        let above = self.points.partition_point(|point| point.frequency_hz < frequency_hz);
        let low = above.checked_sub(1).and_then(|place| self.points.get(place));
        let high = self.points.get(above);
        match (low, high) {
            (Some(low), Some(high)) => Some(between(low, high, frequency_hz)),
            (Some(end), None) if frequency_hz <= end.frequency_hz * REACH => Some(*end),
            (None, Some(end)) if frequency_hz * REACH >= end.frequency_hz => Some(*end),
            _ => None,
        }
    }
}

impl FloorPoint {
    /// The board's own ratio in one direction.
    pub fn of(&self, direction: Direction) -> OwnRatio {
        let share = match direction {
            Direction::Conversion => 1.0,
            Direction::DriverImbalance => 0.25,
        };
        OwnRatio { ratio: (self.real * share, self.imaginary * share), radius: self.radius * share }
    }
}

/// Noise of the board in the common mode, V²/Hz: a quarter of what the common mode does not explain of the
/// differential one.
fn common_noise_of(pool: &Pool) -> f64 {
    region::unexplained(pool) * pool.answering / 4.0 / pool.bins.max(1) as f64
}

/// That noise in the nearest band: at a line itself, rounding on the wire hides it. Infinite without a band.
fn noise_beside(line: &Place, pooled: &[(&Place, Pool, f64)]) -> f64 {
    let distance = |place: &Place| (place.frequency_hz / line.frequency_hz).ln().abs();
    let bands = pooled.iter().filter(|(place, ..)| place.kind != PointKind::Line);
    let nearest = bands.min_by(|(a, ..), (b, ..)| distance(a).total_cmp(&distance(b)));
    nearest.map_or(f64::INFINITY, |(_, _, noise)| *noise)
}

/// A point of a floor recording, unless its region is too wide or its common mode is little more than the
/// board's noise, which would make the ratio low and is taken off.
fn point_of(frequency_hz: f64, pool: &Pool, common_noise_v2_per_hz: f64) -> Option<FloorPoint> {
    let noise = common_noise_v2_per_hz * pool.bins as f64;
    if pool.asking < CLEAR_OF_NOISE * noise {
        return None;
    }
    let region = region::Region::of(pool, pool.asking / (pool.asking - noise), None);
    (region.radius < WIDEST_RADIUS).then_some(FloorPoint {
        frequency_hz,
        real: region.ratio.0,
        imaginary: region.ratio.1,
        radius: region.radius,
        common_noise_v2_per_hz: Some(common_noise_v2_per_hz),
    })
}

/// Straight between two points over the logarithm of frequency; the wider radius of the two.
fn between(low: &FloorPoint, high: &FloorPoint, frequency_hz: f64) -> FloorPoint {
    let span = (high.frequency_hz / low.frequency_hz).ln();
    let share = if span > 0.0 { (frequency_hz / low.frequency_hz).ln() / span } else { 1.0 };
    let mix = |low: f64, high: f64| low + share * (high - low);
    let noise = match (low.common_noise_v2_per_hz, high.common_noise_v2_per_hz) {
        (Some(low), Some(high)) => Some(mix(low, high)),
        _ => None,
    };
    FloorPoint {
        frequency_hz,
        real: mix(low.real, high.real),
        imaginary: mix(low.imaginary, high.imaginary),
        radius: low.radius.max(high.radius),
        common_noise_v2_per_hz: noise,
    }
}
