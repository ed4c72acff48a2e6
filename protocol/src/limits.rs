//! What a receiver permits at its two terminals, in the integer form the device checks.
//!
//! With DM = VA−VB and CM = (VA+VB)/2, `max(VA,VB) = CM + |DM|/2`: a window per terminal and a
//! window on the average are different tests, and standards define one, the other or both
//! (receiver table in [`crate::receivers`]). All limits are inclusive: a sample *on* a limit is in.

use crate::units::Microvolts;
use postcard::experimental::max_size::MaxSize;
use serde::{Deserialize, Serialize};

/// A permitted range, both ends inclusive, against the receiver's own common.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize, MaxSize)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Window {
    /// Lowest permitted voltage.
    pub low: Microvolts,
    /// Highest permitted voltage.
    pub high: Microvolts,
}

impl Window {
    /// A window from two millivolt figures.
    pub const fn from_millivolts(low: i32, high: i32) -> Self {
        Self { low: Microvolts::from_millivolts(low), high: Microvolts::from_millivolts(high) }
    }

    /// Whether `value` lies inside, ends included.
    pub const fn contains(self, value: Microvolts) -> bool {
        self.low.uv() <= value.uv() && value.uv() <= self.high.uv()
    }

    /// Distance between the two ends in microvolts.
    pub const fn width_uv(self) -> i64 {
        self.high.uv() as i64 - self.low.uv() as i64
    }
}

/// The windows a monitor watches at once. A window that is `None` is not judged.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Serialize, Deserialize, MaxSize)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct LimitSet {
    /// For each leg on its own.
    pub terminal: Option<Window>,
    /// For the average of the two legs (the common mode).
    pub average: Option<Window>,
}

impl LimitSet {
    /// Whether there is any window to judge by.
    pub const fn is_empty(self) -> bool {
        self.terminal.is_none() && self.average.is_none()
    }
}

/// One side of one watched window. The discriminant is the bit number in [`LimitMask`]; never reorder.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Hash, Serialize, Deserialize, MaxSize)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
#[repr(u8)]
pub enum Limit {
    /// Leg A above the terminal window.
    #[default]
    LegAHigh = 0,
    /// Leg A below the terminal window.
    LegALow = 1,
    /// Leg B above the terminal window.
    LegBHigh = 2,
    /// Leg B below the terminal window.
    LegBLow = 3,
    /// The average above its window.
    AverageHigh = 4,
    /// The average below its window.
    AverageLow = 5,
}

impl Limit {
    /// How many limits there are.
    pub const COUNT: usize = 6;

    /// All limits in bit order.
    pub const ALL: [Self; Self::COUNT] =
        [Self::LegAHigh, Self::LegALow, Self::LegBHigh, Self::LegBLow, Self::AverageHigh, Self::AverageLow];

    /// Whether this limit is judged on the average rather than on one leg.
    pub const fn is_average(self) -> bool {
        matches!(self, Self::AverageHigh | Self::AverageLow)
    }

    /// Whether this is an upper limit.
    pub const fn is_high(self) -> bool {
        matches!(self, Self::LegAHigh | Self::LegBHigh | Self::AverageHigh)
    }
}

/// A set of [`Limit`]s, one bit each (bit number = discriminant).
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Serialize, Deserialize, MaxSize)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
#[serde(transparent)]
pub struct LimitMask(u8);

impl LimitMask {
    /// No limit.
    pub const NONE: Self = Self(0);
    /// The two limits judged on the average.
    pub const AVERAGE: Self = Self(1 << Limit::AverageHigh as u8 | 1 << Limit::AverageLow as u8);

    /// The set with exactly `limit` in it.
    pub const fn only(limit: Limit) -> Self {
        Self(1 << limit as u8)
    }

    /// From its bits; bits without a limit are dropped.
    pub const fn from_bits_cut(bits: u8) -> Self {
        Self(bits & ((1 << Limit::COUNT) - 1))
    }

    /// The bits.
    pub const fn bits(self) -> u8 {
        self.0
    }

    /// Both sets together.
    pub const fn with(self, other: Self) -> Self {
        Self(self.0 | other.0)
    }

    /// Whether `limit` is in the set.
    pub const fn contains(self, limit: Limit) -> bool {
        self.0 & (1 << limit as u8) != 0
    }

    /// Whether the set has no limit in it.
    pub const fn is_empty(self) -> bool {
        self.0 == 0
    }

    /// Whether every limit in the set is judged on the average.
    pub const fn is_average_only(self) -> bool {
        self.0 & !Self::AVERAGE.0 == 0
    }
}
