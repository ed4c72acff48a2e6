//! Whether a ratio may be claimed: the rules, in order, and the reasons given otherwise.
//!
//! A coherent ratio can have other causes than the one it is computed for. Each has a bound, and only
//! what exceeds it by more than the radius is claimed:
//!
//! * unequal noise of the legs: it makes a cross density `(S_A − S_B)/2`;
//! * the board's own ratio ([`super::floor`]);
//! * the rival direction. If the idle set held data of an unbalanced driver, `S_cd = conj(I)·S_dd,data`,
//!   and the data are at most all of `S_dd`: the bound is `|I|·S_dd/S_cc`, with I from the driven set. With
//!   an idle set full of data it equals the ratio itself. The other way round likewise;
//! * a skew between the legs. Content folded down from near n times the rate is turned back by the phase of
//!   where it shows, not of where it was: `2π n fs δ` is left of a skew δ, and the common mode alone then makes
//!   `|H| = 2 |tan(π n fs δ)|` (from the definition of the modes), a differential mode a quarter of that;
//! * one leg alone makes |H| = 2 and |I| = 1/2: more is the rival direction for certain.

use super::pool::Pool;
use super::region::{self, Region};
use super::{Direction, Input, LEAST_SEGMENTS, Point};
use crate::spectrum::rung::{RungSpectra, SegmentSet};
use serde::Serialize;

/// Noise of the legs is taken to be unequal by at most this share of their sum (assumed, no source;
/// two legs behind one kind of converter are nearer than that).
const LEG_INEQUALITY: f64 = 0.2;
/// Noise in the asking mode is taken off where that mode is at least so many times stronger.
const CORRECTABLE: f64 = 3.0;
/// The idle set is trusted at a glance when its DM power is below this share of the driven set's.
const TRUSTED_SHARE: f64 = 0.05;
/// Data are seen in a band when the driven set holds so many times more DM there.
const SEEN_RATIO: f64 = 4.0;
/// Common-mode noise of independent legs is a quarter of their differential noise.
const DIFFERENTIAL_PER_COMMON: f64 = 4.0;

/// What may be said of a ratio.
#[derive(Clone, Copy, Debug, PartialEq, Serialize)]
#[serde(rename_all = "snake_case")]
pub enum Verdict {
    /// The ratio, within its radius.
    Significant,
    /// The true ratio is at most this.
    UpperLimit {
        /// Highest magnitude.
        magnitude: f64,
        /// Why no value.
        reason: LimitReason,
    },
    /// Nothing.
    Refused(Refusal),
}

/// Why there is a limit instead of a value.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize)]
#[serde(rename_all = "snake_case")]
pub enum LimitReason {
    /// Unrelated modes would show such a coherence too often.
    NotSignificant,
    /// Below what the board itself converts.
    BelowBoardFloor,
    /// Noise of the legs, if unequal, would do the same.
    LegNoise,
    /// The other direction, from segments of the wrong set, would do the same.
    RivalDirection,
    /// Leg B is sampled later: content folded down from above half the rate would do the same.
    Folded,
}

/// Why nothing is said.
#[derive(Clone, Copy, Debug, PartialEq, Serialize)]
#[serde(rename_all = "snake_case")]
pub enum Refusal {
    /// Fewer than [`LEAST_SEGMENTS`] effective segments of the right set.
    TooFewSegments {
        /// How many there are.
        effective: f64,
    },
    /// A mode holds nothing at all here.
    NothingMeasured,
    /// The asking mode does not stand clear of the board's noise.
    NoiseOnly,
    /// More than one leg alone can make: what is coherent comes the other way.
    OtherDirection,
}

/// What noise of the board in the asking mode does to the magnitude.
#[derive(Clone, Copy, Debug, PartialEq, Serialize)]
#[serde(rename_all = "snake_case")]
pub enum InputNoise {
    /// It was taken off: the magnitude was raised by this factor.
    Corrected {
        /// 1 or above.
        factor: f64,
    },
    /// Not taken off: the true magnitude is up to this factor higher.
    LowByUpTo {
        /// 1 or above.
        factor: f64,
    },
    /// All of the asking mode may be noise.
    Unbounded,
}

impl InputNoise {
    /// The factor that was applied.
    pub(super) fn removed(self) -> f64 {
        if let Self::Corrected { factor } = self { factor } else { 1.0 }
    }

    /// By how many dB the magnitude may be low; infinite when not known.
    pub fn low_by_db(self) -> f64 {
        20.0 * self.left().log10()
    }

    /// The factor by which the true magnitude may be higher.
    fn left(self) -> f64 {
        match self {
            Self::Corrected { .. } => 1.0,
            Self::LowByUpTo { factor } => factor,
            Self::Unbounded => f64::INFINITY,
        }
    }
}

/// Densities of the board's noise in the asking mode per volt of common noise.
fn asking_share(direction: Direction) -> f64 {
    match direction {
        Direction::Conversion => 1.0,
        Direction::DriverImbalance => DIFFERENTIAL_PER_COMMON,
    }
}

/// Common-mode noise of the board over the bins of a pool, V²/Hz: the known one, else the most that the
/// part of the answering mode which is not explained by the asking one leaves room for.
fn common_noise_of(pool: &Pool, known: Option<f64>, direction: Direction) -> f64 {
    let rest = region::unexplained(pool) * pool.answering;
    match (known, direction) {
        (Some(noise), Direction::Conversion) => noise.max(0.0) * pool.bins as f64,
        // What else lies in the common mode, a drive above all, is no less there because the board is quiet.
        (Some(noise), Direction::DriverImbalance) => rest.max(noise * pool.bins as f64),
        (None, Direction::Conversion) => rest / DIFFERENTIAL_PER_COMMON,
        (None, Direction::DriverImbalance) => rest,
    }
}

/// What noise in the asking mode does.
pub(super) fn input_noise(pool: &Pool, known: Option<f64>, direction: Direction) -> InputNoise {
    let noise = common_noise_of(pool, known, direction) * asking_share(direction);
    if known.is_some() && pool.asking > CORRECTABLE * noise {
        return InputNoise::Corrected { factor: pool.asking / (pool.asking - noise) };
    }
    // Two standard deviations of an averaged power.
    let most = noise * (1.0 + 2.0 / pool.effective_segments.max(1.0).sqrt());
    if pool.asking > most {
        InputNoise::LowByUpTo { factor: pool.asking / (pool.asking - most) }
    } else {
        InputNoise::Unbounded
    }
}

/// What the rival direction could do to a ratio.
#[derive(Clone, Copy, Debug, PartialEq)]
pub(super) struct Rival {
    /// Highest magnitude it could make, 0 where it is not to be feared or nothing is known of it.
    share: f64,
}

impl Rival {
    /// The share of the rival direction, from the other set.
    pub(super) fn of(input: &Input, place: &super::Place, pool: &Pool, direction: Direction) -> Self {
        let other = direction.other();
        let none = Self { share: 0.0 };
        let Some(rival) = super::pool_at(input, place, other) else { return none };
        if rival.time_segments < LEAST_SEGMENTS || !rival.is_measured() {
            return none;
        }
        let is_seen = rival.asking > SEEN_RATIO * pool.answering;
        if direction == Direction::Conversion && !is_seen && is_idle_trusted(input, place.rung) {
            return none;
        }
        let ratio = Region::of(&rival, 1.0, None).highest_magnitude().min(highest_possible(other));
        Self { share: ratio * pool.answering / pool.asking }
    }
}

/// Whether the idle set holds so much less DM than the driven one that it can hold no data to speak of.
fn is_idle_trusted(input: &Input, rung: u8) -> bool {
    let power = |spectra: &RungSpectra| spectra.bins.iter().map(|bin| bin.differential).sum::<f64>();
    let of = |set: SegmentSet| super::find(input.records, rung, set).map(|record| power(record.spectra));
    match (of(SegmentSet::Idle), of(SegmentSet::Driven)) {
        (Some(idle), Some(driven)) => idle < TRUSTED_SHARE * driven,
        _ => false,
    }
}

/// What one leg alone makes: CM x/2 with DM x.
fn highest_possible(direction: Direction) -> f64 {
    match direction {
        Direction::Conversion => 2.0,
        Direction::DriverImbalance => 0.5,
    }
}

/// The rules in order.
pub(super) fn of(
    point: &Point,
    pool: &Pool,
    known_noise: Option<f64>,
    rival: &Rival,
    (direction, folded_ratio): (Direction, f64),
) -> Verdict {
    let lowest = point.magnitude() - point.radius;
    let leg_noise = 2.0 * LEG_INEQUALITY * common_noise_of(pool, known_noise, direction) / pool.asking;
    let floor = point.board_floor.unwrap_or(0.0);
    let is_coherent = point.coherence > point.coherence_level;
    let is_noise_only = known_noise.is_some() && point.input_noise == InputNoise::Unbounded;
    if is_noise_only {
        return Verdict::Refused(Refusal::NoiseOnly);
    }
    if is_coherent && lowest > highest_possible(direction) {
        return Verdict::Refused(Refusal::OtherDirection);
    }
    // With each reason what it may have taken away from the ratio.
    let (reason, hidden) = if !is_coherent {
        (LimitReason::NotSignificant, 0.0)
    } else if lowest <= floor {
        (LimitReason::BelowBoardFloor, 0.0)
    } else if lowest <= leg_noise {
        (LimitReason::LegNoise, leg_noise)
    } else if lowest <= rival.share {
        (LimitReason::RivalDirection, rival.share)
    } else if lowest <= folded_ratio {
        (LimitReason::Folded, folded_ratio)
    } else {
        return Verdict::Significant;
    };
    if point.input_noise == InputNoise::Unbounded {
        return Verdict::Refused(Refusal::NoiseOnly);
    }
    let magnitude = (point.magnitude() + point.radius + hidden) * point.input_noise.left();
    Verdict::UpperLimit { magnitude: magnitude.max(floor), reason }
}
