//! A range of values that a value is held against with one subtraction and one comparison.
//!
//! Every sample is held against several ranges: the windows it may not leave, the lowest and highest
//! value so far, the range of its state. With `low` and the distance from there to `high`,
//!
//! ```text
//! low <= value <= high   <=>   value - low <= high - low      (both differences modulo 2^32)
//! ```
//! because a value below `low` wraps around to a difference beyond any `high - low`.

use core::hint::cold_path;
use legwise_protocol::units::Span;

/// Values from a lowest to a highest one, both included.
#[derive(Clone, Copy, Debug)]
pub(crate) struct Interval {
    low: i32,
    width: u32,
}

impl Interval {
    /// From `low` to `high`. Ends in the wrong order leave [`i32::MAX`] alone, which no reading is.
    pub(crate) const fn new(low: i32, high: i32) -> Self {
        if low > high { Self::only(i32::MAX) } else { Self { low, width: high.abs_diff(low) } }
    }

    /// One value alone.
    pub(crate) const fn only(value: i32) -> Self {
        Self { low: value, width: 0 }
    }

    /// Whether `value` lies within.
    #[inline]
    pub(crate) const fn holds(self, value: i32) -> bool {
        value.wrapping_sub(self.low) as u32 <= self.width
    }

    /// Widens the interval to hold `value` too: rarely needed, once it has held some.
    #[inline]
    pub(crate) fn include(&mut self, value: i32) {
        let above = value.wrapping_sub(self.low) as u32;
        if above > self.width {
            cold_path();
            if value > self.low {
                self.width = above;
            } else {
                self.width = self.width.wrapping_add(self.low.abs_diff(value));
                self.low = value;
            }
        }
    }

    /// Both ends.
    pub(crate) const fn span(self) -> Span {
        Span { low: self.low, high: self.low.wrapping_add_unsigned(self.width) }
    }

    /// Whether every value of `span` lies within.
    pub(crate) const fn holds_all(self, span: Span) -> bool {
        self.holds(span.low) && self.holds(span.high)
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    const VALUES: [i32; 9] = [i32::MIN, i32::MIN + 1, -7, -1, 0, 1, 12, i32::MAX - 1, i32::MAX];

    #[test]
    fn an_interval_holds_what_two_comparisons_would() {
        for low in VALUES {
            for high in VALUES.into_iter().filter(|&high| high >= low) {
                let interval = Interval::new(low, high);
                assert_eq!(interval.span(), Span { low, high });
                for value in VALUES {
                    assert_eq!(interval.holds(value), low <= value && value <= high, "{value}: {interval:?}");
                }
            }
        }
    }

    #[test]
    fn ends_in_the_wrong_order_hold_no_reading() {
        for value in VALUES {
            assert_eq!(Interval::new(5, -5).holds(value), value == i32::MAX);
        }
    }

    #[test]
    fn widening_gives_the_lowest_and_the_highest() {
        for first in VALUES {
            for second in VALUES {
                let mut interval = Interval::only(3);
                interval.include(first);
                interval.include(second);
                let expected = Span { low: first.min(second).min(3), high: first.max(second).max(3) };
                assert_eq!(interval.span(), expected);
            }
        }
    }
}
