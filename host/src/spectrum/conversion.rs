//! What the pair makes of its common mode in the differential mode, and what a driver makes of its data in
//! the common mode: complex ratio, coherence, region, and whether it may be claimed at all.
//!
//! ```text
//! conversion        H = S_cd / S_cc   from idle segments only     (differential volt per common volt)
//! driver imbalance  I = S_dc / S_dd   from driven segments        (common volt per differential volt)
//! ```
//!
//! Both are regressions of one mode on the other. Whatever stands in the answering mode and has nothing to
//! do with the asking one only scatters the ratio; noise of the board in the asking mode makes it low
//! (J. S. Bendat, A. G. Piersol, *Random Data*, chapters 6 and 9). Coherence cannot tell a pair that
//! converts from a driver that is unbalanced, therefore the two sets of segments, and the comparison of
//! one with the other before anything is claimed ([`verdict`]).
//!
//! A point is claimed when its coherence exceeds `1 − (α/M)^(1/(n−1))` (n effective segments, M points
//! tested, α [`Settings::false_claim_level`] for the whole curve), when it stands clear of the board's own
//! conversion ([`ConversionFloor`]), of what unequal noise of the legs could do, and of what the driver's
//! imbalance could do if the idle set held data. Otherwise it is an upper limit, or it is refused, with
//! the reason.
//!
//! Not seen here: a source that reaches both modes by separate ways with one clock (mains in a ground
//! loop and in an open loop of the pair) is coherent like a conversion and counts as one. Bursts that
//! come in both modes at once and rarely leave fewer effective segments than counted here.

use super::rung::{RungSpectra, SegmentSet};
use serde::Serialize;

pub mod floor;
pub mod grid;
pub mod pool;
pub mod region;
pub mod verdict;

pub use floor::{ConversionFloor, FloorError, FloorPoint};
pub use verdict::{InputNoise, LimitReason, Refusal, Verdict};

use grid::Place;
use pool::Pool;
use verdict::Rival;

/// Below so many effective segments nothing is said: with one, coherence is 1 whatever is measured.
pub const LEAST_SEGMENTS: f64 = 8.0;
/// Share of regions and of upper limits that hold the true value.
pub const CONFIDENCE: f64 = 0.95;

/// How densities came to the host.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Coding {
    /// As computed.
    Exact,
    /// Over the wire, as 16-bit powers and 12-bit cross parts, in so many averages that were averaged
    /// again on the host.
    Wire {
        /// Averages of one device averaged on the host; 1 for a single one.
        averages: u64,
    },
}

/// The spectra of one rung and set, and how they came.
#[derive(Clone, Copy, Debug)]
pub struct Record<'a> {
    /// The spectra.
    pub spectra: &'a RungSpectra,
    /// How they came.
    pub coding: Coding,
}

/// Everything a statement on conversion rests on.
#[derive(Clone, Copy, Debug, Default)]
pub struct Input<'a> {
    /// At most one record per rung and set, in any order.
    pub records: &'a [Record<'a>],
    /// The board's own conversion, from a recording with its legs tied together.
    pub board: Option<&'a ConversionFloor>,
    /// The board's own noise in the common mode, V²/Hz; taken from `board` when not given.
    pub common_noise_v2_per_hz: Option<f64>,
}

/// Times the sampling rate up to which folded content is reckoned with; a front end takes off more above
/// (assumed, no source).
const FOLDS: u32 = 3;

/// What to test, and how strictly.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Settings {
    /// Probability of a single claim in a whole curve of points where nothing is converted.
    pub false_claim_level: f64,
    /// Points of the curve per decade of frequency.
    pub points_per_decade: f64,
    /// Lines of the asking mode per rung that get a point of their own, strongest first.
    pub most_lines: usize,
    /// Sampling rate times how much later leg B is sampled: 0 where both are sampled at once.
    pub skew_samples: f64,
}

impl Default for Settings {
    fn default() -> Self {
        Self { false_claim_level: 0.01, points_per_decade: 24.0, most_lines: 48, skew_samples: 0.0 }
    }
}

impl Settings {
    /// The highest ratio that content folded down from near 1 to [`FOLDS`] times the rate could show.
    fn folded_ratio(&self, direction: Direction) -> f64 {
        let of = |fold: u32| {
            let turned = std::f64::consts::PI * f64::from(fold) * self.skew_samples.abs();
            // Beyond a quarter of a turn nothing is certain: one leg alone makes 2.
            if turned % std::f64::consts::PI > 0.78 { 2.0 } else { (2.0 * turned.tan().abs()).min(2.0) }
        };
        let highest = (1..=FOLDS).map(of).fold(0.0, f64::max);
        match direction {
            Direction::Conversion => highest,
            Direction::DriverImbalance => highest / 4.0,
        }
    }
}

/// Which ratio.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize)]
#[serde(rename_all = "snake_case")]
pub enum Direction {
    /// Common to differential mode, from idle segments.
    Conversion,
    /// Differential to common mode, from driven segments.
    DriverImbalance,
}

impl Direction {
    fn set(self) -> SegmentSet {
        match self {
            Self::Conversion => SegmentSet::Idle,
            Self::DriverImbalance => SegmentSet::Driven,
        }
    }

    fn other(self) -> Self {
        match self {
            Self::Conversion => Self::DriverImbalance,
            Self::DriverImbalance => Self::Conversion,
        }
    }
}

/// What a point stands for.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize)]
#[serde(rename_all = "snake_case")]
pub enum PointKind {
    /// A band of adjacent bins without strong lines in them.
    Band {
        /// Bins taken together.
        bins: usize,
    },
    /// The highest bin of a line of the asking mode.
    Line,
}

/// One point of a conversion or imbalance curve.
#[derive(Clone, Copy, Debug, PartialEq, Serialize)]
pub struct Point {
    /// Frequency in Hz: centre of the band, or of the line's highest bin.
    pub frequency_hz: f64,
    /// From where to where the bins reach, Hz.
    pub band_hz: (f64, f64),
    /// Rung of the ladder.
    pub rung: u8,
    /// Band or line.
    pub kind: PointKind,
    /// Independent segments that would scatter as much.
    pub effective_segments: f64,
    /// Coherence of the two modes, 0 to 1.
    pub coherence: f64,
    /// Coherence that had to be exceeded.
    pub coherence_level: f64,
    /// The ratio: real and imaginary part, the board's own conversion taken off where known.
    pub ratio: (f64, f64),
    /// The true ratio lies within this distance of `ratio` in [`CONFIDENCE`] of all cases.
    pub radius: f64,
    /// Magnitude of the board's own ratio here with its radius, where known.
    pub board_floor: Option<f64>,
    /// What the board's noise in the asking mode does to the ratio.
    pub input_noise: InputNoise,
    /// What may be said.
    pub verdict: Verdict,
}

impl Point {
    /// Magnitude of the ratio.
    pub fn magnitude(&self) -> f64 {
        self.ratio.0.hypot(self.ratio.1)
    }

    /// Magnitude in dB (20 log10), minus infinity for nothing at all.
    pub fn magnitude_db(&self) -> f64 {
        20.0 * self.magnitude().log10()
    }

    /// Lowest and highest magnitude of the region in dB; minus infinity when it holds zero.
    pub fn magnitude_range_db(&self) -> (f64, f64) {
        let decibels = |magnitude: f64| 20.0 * magnitude.max(0.0).log10();
        (decibels(self.magnitude() - self.radius), decibels(self.magnitude() + self.radius))
    }

    /// Phase of the answering mode against the asking one in degrees, -180 to 180.
    pub fn phase_degrees(&self) -> f64 {
        self.ratio.1.atan2(self.ratio.0).to_degrees()
    }

    /// How far the phase may be off, degrees; 180 when the region holds zero.
    pub fn phase_uncertainty_degrees(&self) -> f64 {
        if self.radius < self.magnitude() {
            (self.radius / self.magnitude()).asin().to_degrees()
        } else {
            180.0
        }
    }

    /// Whether a value is claimed.
    pub fn is_significant(&self) -> bool {
        self.verdict == Verdict::Significant
    }

    /// The upper limit in dB where there is one instead of a value.
    pub fn upper_limit_db(&self) -> Option<f64> {
        match self.verdict {
            Verdict::UpperLimit { magnitude, .. } => Some(20.0 * magnitude.log10()),
            _ => None,
        }
    }
}

/// What the pair converts of its common mode, over frequency and at each strong line of the common mode.
///
/// Bands first, then lines, each by rising frequency. Where the bus was never idle long enough the
/// points are there and refused.
pub fn conversion(input: &Input, settings: &Settings) -> Vec<Point> {
    curve(input, settings, Direction::Conversion)
}

/// What the drivers make of their data in the common mode, over frequency and at strong lines of the data.
pub fn driver_imbalance(input: &Input, settings: &Settings) -> Vec<Point> {
    curve(input, settings, Direction::DriverImbalance)
}

/// How a place is tested.
#[derive(Clone, Copy)]
struct Test {
    significance: f64,
    direction: Direction,
    folded_ratio: f64,
}

/// Every place with what was pooled there.
fn curve(input: &Input, settings: &Settings, direction: Direction) -> Vec<Point> {
    let places = grid::places(input.records, settings, direction);
    let pooled: Vec<(&Place, Option<Pool>)> =
        places.iter().map(|place| (place, pool_at(input, place, direction))).collect();
    let is_tested = |pool: &Option<Pool>| {
        pool.as_ref().is_some_and(|pool| pool.time_segments >= LEAST_SEGMENTS && pool.is_measured())
    };
    let tested = pooled.iter().filter(|(_, pool)| is_tested(pool)).count().max(1);
    let significance = settings.false_claim_level / tested as f64;
    let test = Test { significance, direction, folded_ratio: settings.folded_ratio(direction) };
    pooled.into_iter().map(|(place, pool)| point(input, place, pool, test)).collect()
}

/// The pool of a place in the set that `direction` rests on.
fn pool_at(input: &Input, place: &Place, direction: Direction) -> Option<Pool> {
    let record = find(input.records, place.rung, direction.set())?;
    Some(Pool::of(record, place.kind, &place.bins, direction))
}

/// The record of a rung and set.
fn find<'a>(records: &[Record<'a>], rung: u8, set: SegmentSet) -> Option<Record<'a>> {
    records.iter().copied().find(|record| record.spectra.rung == rung && record.spectra.set == set)
}

fn point(input: &Input, place: &Place, pool: Option<Pool>, test: Test) -> Point {
    let Test { significance, direction, folded_ratio } = test;
    let mut point = Point {
        frequency_hz: place.frequency_hz,
        band_hz: place.band_hz,
        rung: place.rung,
        kind: place.kind,
        effective_segments: 0.0,
        coherence: 0.0,
        coherence_level: 1.0,
        ratio: (0.0, 0.0),
        radius: f64::INFINITY,
        board_floor: None,
        input_noise: InputNoise::Unbounded,
        verdict: Verdict::Refused(Refusal::TooFewSegments { effective: 0.0 }),
    };
    let Some(pool) = pool else { return point };
    point.effective_segments = pool.effective_segments;
    if pool.time_segments < LEAST_SEGMENTS {
        point.verdict = Verdict::Refused(Refusal::TooFewSegments { effective: pool.time_segments });
        return point;
    }
    if !pool.is_measured() {
        point.verdict = Verdict::Refused(Refusal::NothingMeasured);
        return point;
    }
    let floor = input.board.and_then(|board| board.at(place.frequency_hz));
    let common_noise = input.common_noise_v2_per_hz.or(floor.and_then(|floor| floor.common_noise_v2_per_hz));
    let noise = verdict::input_noise(&pool, common_noise, direction);
    let own = floor.map(|floor| floor.of(direction));
    point.coherence = pool.coherence();
    point.coherence_level = region::coherence_level(pool.effective_segments, significance);
    let region = region::Region::of(&pool, noise.removed(), own);
    point.ratio = region.ratio;
    point.radius = region.radius;
    point.board_floor = own.map(|own| own.magnitude_with_radius());
    point.input_noise = noise;
    let rival = Rival::of(input, place, &pool, direction);
    point.verdict = verdict::of(&point, &pool, common_noise, &rival, (direction, folded_ratio));
    point
}

#[cfg(test)]
mod tests;
