//! What the limit check needs to know, and how far a sample lies beyond a limit.

use super::windows::Windows;
use crate::block::{Block, Spans};
use crate::extremes::is_edge;
use legwise_protocol::limits::{Limit, LimitMask, LimitSet, Window};
use legwise_protocol::message::{Breach, Detection, LegScale};
use legwise_protocol::units::Span;

/// What the check needs to know.
#[derive(Clone, Copy, Debug)]
pub struct LimitConfig {
    /// What each leg may read, and what VA+VB may; everything where it is not watched.
    pub(super) leg: Span,
    pub(super) twice_cm: Span,
    /// Whether the average has to be looked at: it may be outside alone, or deeper than a leg.
    pub(super) is_average_judged: bool,
    /// What a sample must keep to, ready to hold it against.
    pub(super) inside: Windows,
    hysteresis_uv: i32,
    pub(super) hold_off_samples: u32,
    pub(super) longest_samples: u32,
    /// `Some` where the source declares a skew between the legs.
    edge_step_uv: Option<i32>,
    pub(super) legs: [LegScale; 2],
}

impl LimitConfig {
    /// From validated settings. Limits of the average are stored doubled, so that it needs no halving.
    pub fn new(limits: &LimitSet, detection: &Detection, legs: [LegScale; 2], is_skewed: bool) -> Self {
        let span = |window: Option<Window>, times: i32| match window {
            Some(Window { low, high }) => {
                Span { low: low.uv().saturating_mul(times), high: high.uv().saturating_mul(times) }
            }
            None => Span { low: i32::MIN, high: i32::MAX },
        };
        let (leg, twice_cm) = (span(limits.terminal, 1), span(limits.average, 2));
        // The average of two legs of one instant lies between them: it breaks a limit no closer than theirs
        // only if one of them does, and that one by as much or more.
        let is_average_judged = is_skewed || twice_cm.low > twice(leg.low) || twice_cm.high < twice(leg.high);
        let judged_twice_cm = if is_average_judged { twice_cm } else { span(None, 2) };
        Self {
            leg,
            twice_cm,
            is_average_judged,
            inside: Windows::new(leg, judged_twice_cm, LimitMask::NONE, 0),
            hysteresis_uv: i32::try_from(detection.hysteresis_uv).unwrap_or(i32::MAX).min(1 << 30),
            hold_off_samples: detection.hold_off_samples.max(1),
            longest_samples: detection.longest_samples.max(1),
            edge_step_uv: is_skewed.then(|| i32::try_from(detection.edge_step_uv).unwrap_or(i32::MAX)),
            legs,
        }
    }

    /// Twice the distance beyond each limit, in bit order; negative inside. A limit that is not
    /// watched gives a large negative number.
    pub(super) fn distances(&self, leg_a: i32, leg_b: i32, twice_cm: i32) -> [i32; Limit::COUNT] {
        let (a, b, low, high) = (twice(leg_a), twice(leg_b), twice(self.leg.low), twice(self.leg.high));
        [
            a.saturating_sub(high),
            low.saturating_sub(a),
            b.saturating_sub(high),
            low.saturating_sub(b),
            twice_cm.saturating_sub(self.twice_cm.high),
            self.twice_cm.low.saturating_sub(twice_cm),
        ]
    }

    /// The largest of the distances of the legs, the short way.
    #[inline]
    pub(super) fn depth_of_legs(&self, leg_a: i32, leg_b: i32) -> i32 {
        let (higher, lower) = (leg_a.max(leg_b), leg_a.min(leg_b));
        twice(higher.saturating_sub(self.leg.high).max(self.leg.low.saturating_sub(lower)))
    }

    /// The largest of all distances: how deep outside, more than 0 if it is.
    #[inline]
    pub(super) fn depth(&self, leg_a: i32, leg_b: i32, twice_cm: i32) -> i32 {
        let Span { low, high } = self.twice_cm;
        let average = twice_cm.saturating_sub(high).max(low.saturating_sub(twice_cm));
        self.depth_of_legs(leg_a, leg_b).max(average)
    }

    /// Twice the distance of a breach's extreme beyond its limit.
    pub(super) fn beyond(&self, breach: &Breach) -> i32 {
        let value = breach.extreme_twice_uv;
        match breach.worst_limit {
            Limit::LegAHigh | Limit::LegBHigh => value.saturating_sub(twice(self.leg.high)),
            Limit::LegALow | Limit::LegBLow => twice(self.leg.low).saturating_sub(value),
            Limit::AverageHigh => value.saturating_sub(self.twice_cm.high),
            Limit::AverageLow => self.twice_cm.low.saturating_sub(value),
        }
    }

    /// The limits that some sample of a block breaks.
    pub(super) fn broken_in(&self, spans: &Spans) -> LimitMask {
        let is_broken = [
            spans.leg_a.high > self.leg.high,
            spans.leg_a.low < self.leg.low,
            spans.leg_b.high > self.leg.high,
            spans.leg_b.low < self.leg.low,
            spans.twice_cm.high > self.twice_cm.high,
            spans.twice_cm.low < self.twice_cm.low,
        ];
        let bits = is_broken.into_iter().rev().fold(0, |bits, is_broken| bits << 1 | u8::from(is_broken));
        LimitMask::from_bits_cut(bits)
    }

    /// The windows that keep the limits of `broken` by the hysteresis, and the others just so.
    #[inline(never)]
    pub(super) fn clear_of(&self, broken: LimitMask) -> Windows {
        Windows::new(self.leg, self.twice_cm, broken, self.hysteresis_uv)
    }

    /// Whether any sample outside may be a data edge seen through a skew.
    pub(super) const fn is_skewed(&self) -> bool {
        self.edge_step_uv.is_some()
    }

    /// Whether the sample at a position is a data edge, on a board with skew.
    pub(super) fn is_edge(&self, block: &Block<'_>, position: usize) -> bool {
        let Some(edge_step_uv) = self.edge_step_uv else { return false };
        let at = |position: usize| block.dm.get(position).copied();
        let before = position.checked_sub(1).and_then(at).unwrap_or(block.dm_before);
        let after = at(position + 1).unwrap_or(block.dm_after);
        at(position).is_some_and(|here| is_edge(before, here, after, edge_step_uv))
    }
}

/// Twice a value, in one instruction where there is one that saturates.
#[inline]
pub(super) const fn twice(value: i32) -> i32 {
    value.saturating_add(value)
}

#[cfg(test)]
mod tests {
    use super::*;
    use legwise_protocol::units::Microvolts;
    use proptest::prelude::*;
    use proptest::test_runner::RngSeed;

    const BOUND: i32 = Microvolts::BOUND;

    /// A few volts or anything up to 1000 V, so that limits, hysteresis and readings meet.
    fn microvolts() -> impl Strategy<Value = i32> {
        prop_oneof![-9_i32..9, -20_000_000_i32..20_000_000, -BOUND..=BOUND, Just(BOUND), Just(-BOUND)]
    }

    /// Any window, even one with its ends in the wrong order.
    fn window() -> impl Strategy<Value = Option<Window>> {
        let ends = (microvolts(), microvolts());
        prop::option::of(ends.prop_map(|(low, high)| Window {
            low: Microvolts::from_uv(low),
            high: Microvolts::from_uv(high),
        }))
    }

    fn config(limits: LimitSet, hysteresis_uv: u32, is_skewed: bool) -> LimitConfig {
        let settings = crate::settings::for_limits(limits, 500_000_000);
        let detection = Detection { hysteresis_uv, ..settings.detection };
        let leg = LegScale {
            mantissa: 2,
            shift: 1,
            offset_uv: 0,
            rail_low_code: -BOUND,
            rail_high_code: BOUND,
            gain_uncertainty_ppm: 0,
            offset_uncertainty_uv: 0,
        };
        LimitConfig::new(&limits, &detection, [leg; 2], is_skewed)
    }

    proptest! {
        #![proptest_config(ProptestConfig {
            cases: 20_000,
            failure_persistence: None,
            rng_seed: RngSeed::Fixed(1),
            ..ProptestConfig::default()
        })]
        /// The short ways agree with the six distances: how deep, and whether outside at all.
        #[test]
        fn depth_is_the_largest_distance_and_more_than_0_exactly_outside_the_windows(
            terminal in window(),
            average in window(),
            is_same in any::<bool>(),
            is_skewed in any::<bool>(),
            leg_a in microvolts(),
            leg_b in microvolts(),
            other_b in microvolts(),
        ) {
            let average = if is_same { terminal } else { average };
            let config = config(LimitSet { terminal, average }, 50_000, is_skewed);
            let twice_cm = leg_a + if is_skewed { other_b } else { leg_b };
            let largest = config.distances(leg_a, leg_b, twice_cm).into_iter().max().unwrap_or(0);
            let depth = config.depth(leg_a, leg_b, twice_cm);
            prop_assert_eq!(depth.max(0), largest.max(0));
            prop_assert_eq!(config.inside.hold(leg_a, leg_b, twice_cm), depth <= 0);
            if !config.is_average_judged {
                prop_assert_eq!(config.depth_of_legs(leg_a, leg_b).max(0), depth.max(0));
            }
        }

        /// Clear of the limits broken: each kept by the hysteresis, the others just kept.
        #[test]
        fn a_sample_is_clear_when_the_limits_broken_are_kept_by_the_hysteresis(
            terminal in window(),
            average in window(),
            hysteresis_uv in 0_u32..100_000_000,
            bits in 0_u8..64,
            leg_a in microvolts(),
            leg_b in microvolts(),
        ) {
            let config = config(LimitSet { terminal, average }, hysteresis_uv, true);
            let watched = |limit: Limit| if limit.is_average() { average } else { terminal }.is_some();
            // A limit that is not watched is never broken.
            let broken = Limit::ALL
                .into_iter()
                .filter(|&limit| watched(limit) && LimitMask::from_bits_cut(bits).contains(limit))
                .fold(LimitMask::NONE, |mask, limit| mask.with(LimitMask::only(limit)));
            let clear = config.clear_of(broken).hold(leg_a, leg_b, leg_a + leg_b);
            let distances = config.distances(leg_a, leg_b, leg_a + leg_b);
            let expected = distances.into_iter().zip(Limit::ALL).all(|(distance, limit)| {
                let by = if broken.contains(limit) { 2 * hysteresis_uv as i32 } else { 0 };
                !watched(limit) || distance <= -by
            });
            prop_assert_eq!(clear, expected);
        }
    }
}
