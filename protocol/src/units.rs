//! Integer units of the sample path.
//!
//! Instants are integers so that a limit is met or broken exactly, on every machine alike.
//! A leg reading is in microvolts and is bounded to ±1000 V: the sum of two legs (twice the
//! common mode) and their difference then always fit an `i32`.

use postcard::experimental::max_size::MaxSize;
use serde::de::{Error, Unexpected};
use serde::{Deserialize, Deserializer, Serialize};

/// A voltage in integer microvolts, bounded to ±[`Microvolts::BOUND`].
///
/// Reading one from a wire or a file refuses values beyond the bound.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, PartialOrd, Ord, Serialize, MaxSize)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
#[serde(transparent)]
pub struct Microvolts(i32);

impl Microvolts {
    /// Largest magnitude a leg reading takes: 1000 V, far beyond any pair this monitor may touch.
    pub const BOUND: i32 = 1_000_000_000;

    /// From integer microvolts; saturates at ±1000 V.
    pub const fn from_uv(microvolts: i32) -> Self {
        if microvolts > Self::BOUND {
            Self(Self::BOUND)
        } else if microvolts < -Self::BOUND {
            Self(-Self::BOUND)
        } else {
            Self(microvolts)
        }
    }

    /// From integer millivolts; saturates at ±1000 V.
    pub const fn from_millivolts(millivolts: i32) -> Self {
        if millivolts > Self::BOUND / 1000 {
            Self(Self::BOUND)
        } else if millivolts < -Self::BOUND / 1000 {
            Self(-Self::BOUND)
        } else {
            Self(millivolts * 1000)
        }
    }

    /// From volts, rounded to the nearest microvolt (ties away from zero).
    ///
    /// `None` for a NaN, an infinity, or a magnitude above 1000 V.
    pub fn try_from_volts(volts: f64) -> Option<Self> {
        let scaled = volts * 1e6;
        if scaled.is_nan() || scaled.abs() > Self::BOUND as f64 {
            return None;
        }
        let half = if scaled < 0.0 { -0.5 } else { 0.5 };
        Some(Self::from_uv((scaled + half) as i32))
    }

    /// The value in microvolts.
    pub const fn uv(self) -> i32 {
        self.0
    }

    /// The value in volts, exact to the `f64`.
    pub fn volts(self) -> f64 {
        f64::from(self.0) * 1e-6
    }
}

impl<'de> Deserialize<'de> for Microvolts {
    fn deserialize<D: Deserializer<'de>>(deserializer: D) -> Result<Self, D::Error> {
        let microvolts = i32::deserialize(deserializer)?;
        if microvolts.unsigned_abs() > Self::BOUND.unsigned_abs() {
            let found = Unexpected::Signed(i64::from(microvolts));
            return Err(D::Error::invalid_value(found, &"microvolts within 1000 V"));
        }
        Ok(Self(microvolts))
    }
}

/// Lowest and highest value seen of one quantity, both inclusive. Empty until something is seen.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize, MaxSize)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Span {
    /// Lowest value seen.
    pub low: i32,
    /// Highest value seen.
    pub high: i32,
}

impl Span {
    /// A span that has seen nothing: `low > high`.
    pub const EMPTY: Self = Self { low: i32::MAX, high: i32::MIN };

    /// Whether nothing has been seen.
    pub const fn is_empty(self) -> bool {
        self.low > self.high
    }

    /// Takes one value into the span.
    #[inline]
    pub fn include(&mut self, value: i32) {
        self.low = self.low.min(value);
        self.high = self.high.max(value);
    }

    /// Takes another span into this one.
    pub fn merge(&mut self, other: Self) {
        self.low = self.low.min(other.low);
        self.high = self.high.max(other.high);
    }
}

impl Default for Span {
    fn default() -> Self {
        Self::EMPTY
    }
}

#[cfg(test)]
#[allow(clippy::unwrap_used)]
mod tests {
    use super::*;

    #[test]
    fn volts_round_to_the_nearest_microvolt_and_saturation_is_refused() {
        assert_eq!(Microvolts::try_from_volts(12.000_000_4).map(Microvolts::uv), Some(12_000_000));
        assert_eq!(Microvolts::try_from_volts(-7.000_000_6).map(Microvolts::uv), Some(-7_000_001));
        assert_eq!(Microvolts::try_from_volts(f64::NAN), None);
        assert_eq!(Microvolts::try_from_volts(f64::INFINITY), None);
        assert_eq!(Microvolts::try_from_volts(1000.1), None);
        assert_eq!(Microvolts::from_uv(i32::MAX).uv(), Microvolts::BOUND);
        assert_eq!(Microvolts::from_millivolts(i32::MIN).uv(), -Microvolts::BOUND);
    }

    #[test]
    fn values_beyond_the_bound_are_not_read() {
        let mut bytes = [0; 5];
        for microvolts in [Microvolts::BOUND, -Microvolts::BOUND, 0] {
            let used = postcard::to_slice(&microvolts, &mut bytes).unwrap();
            assert_eq!(postcard::from_bytes(used), Ok(Microvolts(microvolts)));
        }
        for microvolts in [Microvolts::BOUND + 1, -Microvolts::BOUND - 1, i32::MAX, i32::MIN] {
            let used = postcard::to_slice(&microvolts, &mut bytes).unwrap();
            assert!(postcard::from_bytes::<Microvolts>(used).is_err(), "{microvolts}");
        }
    }

    #[test]
    fn sum_and_difference_of_two_bounded_legs_fit() {
        assert!(Microvolts::BOUND.checked_mul(2).is_some());
    }
}
