//! Names the sources of the lines in the averaged spectra of all rungs.
//!
//! ```text
//!  rungs ─► ladder: one list of lines per mode ─► spots: one per frequency, levels of both modes
//!        ─► traffic ─► mains ─► combs (drives, supplies) ─► what is left: unknown
//! ```
//!
//! * **mains**: a fundamental in 45..65 Hz, found from the lines, with its harmonics, grouped *like* the
//!   harmonic subgroups of IEC 61000-4-7 (not per: the windows are Hann and not synchronised);
//! * **traffic**: what the differential mode shows while the bus is driven and not while it is idle;
//! * **drives**: a carrier of 1..20 kHz with multiples, and sidebands at multiples of the output frequency,
//!   of which only `m·fc ± 3k·fo` with `m + 3k` odd survive in the common mode of a two-level bridge;
//! * **supplies**: a line above 20 kHz with multiples, often smeared by ripple and load.
//!
//! Each family carries its evidence as data; its **confidence** is `1/(1 + e^−w)` with `w` the sum of the
//! evidence's weights: a rule, not a probability. Below [`NAMED_FROM`] the family is called unknown.
//!
//! What it does not tell: two sources whose lines lie closer than four bins, or a supply under a multiple of a
//! carrier (either may be taken for the other's); a carrier among mains harmonics of its own strength in a rung
//! that does not separate them; a supply so smeared that it stands less than 10 dB above the floor, or under
//! traffic without an idle average; weak mains under traffic where a rung has fewer than four segments; data
//! faster than half the sample rate are named, their bit rate is not. Lines a few decibels above the floor may
//! be left over as a family of their own.
//!
//! At one sample rate a line above half the rate cannot be told from the one it folds onto. With a second
//! set at another rate ([`name_at_two_rates`]) [`alias`] tells the lines that stay from those that move.

use super::rung::{RungSpectra, SegmentSet};
use std::fmt;

pub mod alias;
mod comb;
mod evidence;
pub mod ladder;
mod mains;
mod nrz;
pub mod presence;
mod sidebands;
mod spots;
mod traffic;

pub use alias::AliasState;
pub use evidence::{Evidence, Fact};
pub use legwise_protocol::message::Mode;

use spots::Spot;

/// Confidence a family must reach to be named.
pub const NAMED_FROM: f64 = 0.5;
/// Networks looked for: a railway's or a generator's beside the public one.
const MOST_MAINS: usize = 2;
/// Families named at most; what is left then is the weakest.
const MOST_FAMILIES: usize = 32;

/// Both modes.
pub const MODES: [Mode; 2] = [Mode::Common, Mode::Differential];

/// A value per mode.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct PerMode<T> {
    /// Of the common mode.
    pub common: T,
    /// Of the differential mode.
    pub differential: T,
}

impl<T: Copy> PerMode<T> {
    /// Of one mode.
    pub fn of(&self, mode: Mode) -> T {
        match mode {
            Mode::Common => self.common,
            Mode::Differential => self.differential,
        }
    }

    /// Makes one from each mode.
    pub fn from_each(mut value: impl FnMut(Mode) -> T) -> Self {
        Self { common: value(Mode::Common), differential: value(Mode::Differential) }
    }
}

/// A level in V rms; `None` where none stands out of the floor.
pub type Levels = PerMode<Option<f64>>;

impl Levels {
    /// The larger level, V rms; 0 where there is none.
    pub fn larger_v(&self) -> f64 {
        self.common.unwrap_or(0.0).max(self.differential.unwrap_or(0.0))
    }
}

/// What a family was called, with what only such a family has.
#[derive(Clone, Debug, PartialEq)]
pub enum Source {
    /// The supply network.
    Mains(MainsShape),
    /// A variable-speed drive or another converter switching at 1..20 kHz.
    Drive {
        /// Output frequency and its uncertainty, Hz, where sidebands show it.
        output_hz: Option<(f64, f64)>,
    },
    /// A switching supply.
    Supply {
        /// Width of the fundamental over its frequency; 0 where it is no wider than the window.
        smear: f64,
    },
    /// The data on the bus itself. The fundamental is the bit rate, bit/s, 0 where it cannot be told.
    Traffic {
        /// Bits per character with start and stop, where the lines show it.
        frame_bits: Option<u32>,
    },
    /// None of these.
    Unknown,
}

/// Name of a source, for tables.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash, PartialOrd, Ord)]
pub enum SourceName {
    /// See [`Source::Mains`].
    Mains,
    /// See [`Source::Drive`].
    Drive,
    /// See [`Source::Supply`].
    Supply,
    /// See [`Source::Traffic`].
    Traffic,
    /// See [`Source::Unknown`].
    Unknown,
}

impl fmt::Display for SourceName {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.pad(match self {
            Self::Mains => "mains",
            Self::Drive => "drive",
            Self::Supply => "supply",
            Self::Traffic => "traffic",
            Self::Unknown => "unknown",
        })
    }
}

impl Source {
    /// The name alone.
    pub fn name(&self) -> SourceName {
        match self {
            Self::Mains(_) => SourceName::Mains,
            Self::Drive { .. } => SourceName::Drive,
            Self::Supply { .. } => SourceName::Supply,
            Self::Traffic { .. } => SourceName::Traffic,
            Self::Unknown => SourceName::Unknown,
        }
    }
}

/// Strength of the harmonics of the mains, per mode.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct MainsShape {
    /// Root of the summed power of harmonics 3, 5, 7 ..., V rms.
    pub odd_rms_v: PerMode<f64>,
    /// Of harmonics 2, 4, 6 ..., V rms.
    pub even_rms_v: PerMode<f64>,
    /// The second harmonic over the fundamental, as a share of the 4/(3π) of a half-wave rectified sine
    /// (its Fourier series: 1/π, 1/2, 2/(3π) ...), at most 1. `None` without a fundamental.
    pub half_wave_share: PerMode<Option<f64>>,
}

/// What a line is to its family.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Role {
    /// The fundamental, the carrier.
    Fundamental,
    /// A multiple of it.
    Harmonic(u32),
    /// At `multiple` times the carrier plus `outputs` times the output frequency; 0 where that is unknown.
    Sideband {
        /// Multiple of the carrier.
        multiple: u32,
        /// Multiple of the output frequency.
        outputs: i32,
    },
    /// At this multiple of the rate of characters.
    CharacterMultiple(u32),
    /// Belongs to it without a place of its own.
    Structure,
}

/// One line of a family.
#[derive(Clone, Debug, PartialEq)]
pub struct Member {
    /// Where it shows, Hz.
    pub frequency_hz: f64,
    /// Uncertainty of that, Hz: twice the standard deviation; half the band for a summed one.
    pub frequency_uncertainty_hz: f64,
    /// What it is.
    pub role: Role,
    /// Levels, V rms.
    pub levels: Levels,
    /// Average the levels are from.
    pub set: SegmentSet,
    /// Rung the levels are from.
    pub rung: u8,
    /// Whether it is where it shows.
    pub alias: AliasState,
}

/// Lines of one source.
#[derive(Clone, Debug, PartialEq)]
pub struct Family {
    /// What it was called.
    pub source: Source,
    /// Fundamental, Hz: the true one where a second rate told it, else where it shows.
    pub fundamental_hz: f64,
    /// Uncertainty of the fundamental, Hz.
    pub fundamental_uncertainty_hz: f64,
    /// Its lines, the fundamental first where there is one.
    pub members: Vec<Member>,
    /// Root of the summed power of all members, V rms.
    pub total_rms_v: PerMode<f64>,
    /// `1/(1 + e^−w)`, `w` the sum of the weights of the evidence.
    pub confidence: f64,
    /// What speaks for and against the name.
    pub evidence: Vec<Evidence>,
}

impl Family {
    /// The stronger mode's total, V rms.
    pub fn strength_v(&self) -> f64 {
        self.total_rms_v.common.max(self.total_rms_v.differential)
    }

    /// Builds one; the name falls back to unknown where the evidence does not carry it.
    fn new(source: Source, fundamental: (f64, f64), members: Vec<Member>, evidence: Vec<Evidence>) -> Self {
        let total_rms_v = PerMode::from_each(|mode| root_sum(members.iter().map(|m| m.levels.of(mode))));
        let confidence = evidence::confidence(&evidence);
        let source = if confidence < NAMED_FROM { Source::Unknown } else { source };
        let (fundamental_hz, fundamental_uncertainty_hz) = fundamental;
        Self {
            source,
            fundamental_hz,
            fundamental_uncertainty_hz,
            members,
            total_rms_v,
            confidence,
            evidence,
        }
    }
}

/// What is known beforehand.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct Hints {
    /// Bit rate of the bus, bit/s.
    pub bit_rate_hz: Option<f64>,
}

/// The families in averages of one sample rate, strongest first. All lines are `Unconfirmed`.
///
/// `rungs`: one average per rung and set; of two for the same, the one with more segments counts. Where a
/// rung has an idle average, the lines are taken from it; the driven one only says what traffic adds.
pub fn name(rungs: &[RungSpectra], hints: &Hints) -> Vec<Family> {
    let ladder = ladder::Ladder::quiet(rungs);
    let spots = spots::gather(&ladder);
    name_spots(rungs, &ladder, spots, hints)
}

/// The families in averages of one sample rate, the lines checked against averages of another rate a few
/// per cent away, taken close in time.
pub fn name_at_two_rates(first: &[RungSpectra], second: &[RungSpectra], hints: &Hints) -> Vec<Family> {
    let (ladder, other) = (ladder::Ladder::quiet(first), ladder::Ladder::quiet(second));
    let mut spots = spots::gather(&ladder);
    let others = spots::gather(&other);
    if let (Some(first_rate_hz), Some(second_rate_hz)) = (ladder.full_rate_hz(), other.full_rate_hz()) {
        let sight = |spot: &Spot| spot.sighting();
        let (here, there): (Vec<_>, Vec<_>) =
            (spots.iter().map(sight).collect(), others.iter().map(sight).collect());
        let states = alias::check(&here, first_rate_hz, &there, second_rate_hz);
        for (spot, state) in spots.iter_mut().zip(states) {
            spot.alias = state;
        }
    }
    name_spots(first, &ladder, spots, hints)
}

fn name_spots(
    rungs: &[RungSpectra],
    ladder: &ladder::Ladder<'_>,
    spots: Vec<Spot>,
    hints: &Hints,
) -> Vec<Family> {
    let mut free = spots::Free::new(spots);
    // First of all: it tells which spots are data.
    let mut families: Vec<Family> = traffic::take(rungs, &mut free, hints).into_iter().collect();
    families.extend((0..MOST_MAINS).map_while(|_| mains::take(ladder, &mut free)));
    let rate_hz = ladder.full_rate_hz().unwrap_or(0.0);
    while families.len() < MOST_FAMILIES {
        let Some(family) = comb::take(&mut free, rate_hz) else { break };
        families.push(family);
    }
    families.sort_by(|a, b| b.strength_v().total_cmp(&a.strength_v()));
    families
}

/// Root of the sum of squares of what is there.
fn root_sum(values: impl Iterator<Item = Option<f64>>) -> f64 {
    values.flatten().map(|value| value * value).sum::<f64>().sqrt()
}

#[cfg(test)]
mod tests;
