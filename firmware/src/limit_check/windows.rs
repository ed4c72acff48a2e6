//! The windows a sample must keep to: one for each leg, one for the average.

use crate::block::Block;
use crate::interval::Interval;
use legwise_protocol::limits::{Limit, LimitMask};
use legwise_protocol::units::Span;

/// What each leg may read, microvolts, and what the average may, doubled: VA+VB is judged as it is.
#[derive(Clone, Copy, Debug)]
pub(super) struct Windows {
    leg_a: Interval,
    leg_b: Interval,
    twice_cm: Interval,
}

impl Windows {
    /// From the ends that are permitted; those in `broken` drawn in by the hysteresis (microvolts).
    pub(super) fn new(leg: Span, twice_cm: Span, broken: LimitMask, hysteresis_uv: i32) -> Self {
        let drawn_in = |span: Span, low: Limit, high: Limit, by: i32| {
            let low = if broken.contains(low) { span.low.saturating_add(by) } else { span.low };
            let high = if broken.contains(high) { span.high.saturating_sub(by) } else { span.high };
            Interval::new(low, high)
        };
        Self {
            leg_a: drawn_in(leg, Limit::LegALow, Limit::LegAHigh, hysteresis_uv),
            leg_b: drawn_in(leg, Limit::LegBLow, Limit::LegBHigh, hysteresis_uv),
            twice_cm: drawn_in(
                twice_cm,
                Limit::AverageLow,
                Limit::AverageHigh,
                hysteresis_uv.saturating_mul(2),
            ),
        }
    }

    /// Whether a sample keeps to all of them.
    #[inline]
    pub(super) const fn hold(&self, leg_a: i32, leg_b: i32, twice_cm: i32) -> bool {
        self.leg_a.holds(leg_a) && self.leg_b.holds(leg_b) && self.twice_cm.holds(twice_cm)
    }

    /// The first sample of the block, from position `from` on, that does not. A window kept by the whole
    /// block is not looked at.
    pub(super) fn first_beyond(&self, block: &Block<'_>, from: usize) -> Option<usize> {
        let mut end = block.pairs();
        let mut look = |window: Interval, values: &[i32], span: Span| {
            if !window.holds_all(span)
                && let Some(values) = values.get(from..end)
            {
                end = from + held(window, values);
            }
        };
        look(self.leg_a, block.leg_a, block.spans.leg_a);
        look(self.leg_b, block.leg_b, block.spans.leg_b);
        look(self.twice_cm, block.twice_cm, block.spans.twice_cm);
        (end < block.pairs()).then_some(end)
    }
}

/// How many values lie within a window before the first that does not: four at a time.
#[inline(never)]
fn held(window: Interval, values: &[i32]) -> usize {
    let (fours, _) = values.as_chunks::<4>();
    let held = 4 * fours.iter().take_while(|four| four.iter().all(|&value| window.holds(value))).count();
    held + values.iter().skip(held).take_while(|&&value| window.holds(value)).count()
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::block::Spans;

    fn span(values: &[i32]) -> Span {
        let mut span = Span::EMPTY;
        values.iter().for_each(|&value| span.include(value));
        span
    }

    #[test]
    fn the_first_sample_beyond_any_window_is_found_wherever_it_lies() {
        let leg = Span { low: -10, high: 10 };
        let windows = Windows::new(leg, Span { low: -18, high: 18 }, LimitMask::NONE, 0);
        for pairs in [1, 3, 4, 5, 11, 16] {
            for from in 0..=pairs {
                // Each quantity goes beyond from a position of its own on, or (at `pairs`) never.
                for [a, b, cm] in (0..=pairs).flat_map(|n| [[n, pairs, n / 2], [pairs, n, pairs], [n, n, 2]])
                {
                    let values = |at: usize, value: i32| -> std::vec::Vec<i32> {
                        (0..pairs).map(|n| if n >= at { value } else { 1 }).collect()
                    };
                    let (leg_a, leg_b, twice_cm) = (values(a, 11), values(b, -11), values(cm, 19));
                    let dm = values(0, 0);
                    let spans = Spans {
                        leg_a: span(&leg_a),
                        leg_b: span(&leg_b),
                        twice_cm: span(&twice_cm),
                        dm: span(&dm),
                    };
                    let block = Block {
                        first_sample: 0,
                        code_a: &dm,
                        code_b: &dm,
                        leg_a: &leg_a,
                        leg_b: &leg_b,
                        twice_cm: &twice_cm,
                        dm: &dm,
                        dm_before: 0,
                        dm_after: 0,
                        clipped: 0,
                        spans,
                    };
                    let expected = (from..pairs).find(|&n| !windows.hold(leg_a[n], leg_b[n], twice_cm[n]));
                    assert_eq!(windows.first_beyond(&block, from), expected, "{a} {b} {cm} from {from}");
                }
            }
        }
    }
}
