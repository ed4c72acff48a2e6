//! Hardware counters that wrap, carried on in 64 bits.
//!
//! Two kinds: a free-running timer that is read often enough ([`Extension`]), and a ring position,
//! which says nothing about laps and needs a clock to count them ([`nearest`]).

/// A counter of `BITS` bits carried on in 64. Right as long as it is read at least once per turn.
#[derive(Clone, Copy, Debug, Default)]
pub struct Extension<const BITS: u32> {
    last: u64,
}

impl<const BITS: u32> Extension<BITS> {
    const MASK: u64 = {
        assert!(BITS >= 1 && BITS <= 63);
        (1 << BITS) - 1
    };

    /// Starts at 0.
    pub const fn new() -> Self {
        Self { last: 0 }
    }

    /// The count in 64 bits: the smallest that is not below the last one and ends in `counter`.
    pub const fn extend(&mut self, counter: u64) -> u64 {
        let forward = counter.wrapping_sub(self.last) & Self::MASK;
        self.last = self.last.wrapping_add(forward);
        self.last
    }
}

/// The value closest to `expected` that is `remainder` modulo `modulus`; of two equally close ones
/// the higher. Never negative: the lowest is `remainder` itself.
///
/// A modulus of 0 means that there are no laps: the answer is `remainder`.
pub const fn nearest(expected: u64, remainder: u64, modulus: u64) -> u64 {
    if modulus == 0 {
        return remainder;
    }
    let remainder = remainder % modulus;
    // Forward distance from `expected` to the next value with that remainder.
    let forward = (remainder + modulus - expected % modulus) % modulus;
    let backward = modulus - forward;
    if forward <= backward || expected < backward {
        expected.saturating_add(forward)
    } else {
        expected - backward
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use proptest::prelude::*;
    use proptest::test_runner::RngSeed;

    #[test]
    fn a_counter_that_wraps_keeps_counting() {
        let mut counter = Extension::<32>::new();
        let mut truth = 0_u64;
        for step in [0, 1, 1 << 20, (1 << 32) - 1, 1 << 31, 7, (1 << 32) - 1, (1 << 32) - 1] {
            truth += step;
            assert_eq!(counter.extend(truth & 0xffff_ffff), truth);
        }
    }

    #[test]
    fn laps_follow_the_clock_not_the_position() {
        // Ring of 100 words at position 7.
        assert_eq!(nearest(0, 7, 100), 7);
        assert_eq!(nearest(1_000, 7, 100), 1_007);
        assert_eq!(nearest(1_058, 7, 100), 1_107);
        assert_eq!(nearest(1_057, 7, 100), 1_107); // as far from 1 007: the higher
        assert_eq!(nearest(1_056, 7, 100), 1_007);
        assert_eq!(nearest(3, 99, 100), 99); // -1 would be closer, but nothing was written before 0
        assert_eq!(nearest(12, 34, 0), 34);
    }

    proptest! {
        #![proptest_config(ProptestConfig { failure_persistence: None, rng_seed: RngSeed::Fixed(1), ..ProptestConfig::default() })]
        #[test]
        fn nearest_has_the_remainder_and_none_is_nearer(
            expected in 0_u64..1 << 60, remainder in 0_u64..5_000, modulus in 1_u64..5_000,
        ) {
            let found = nearest(expected, remainder, modulus);
            prop_assert_eq!(found % modulus, remainder % modulus);
            let distance = found.abs_diff(expected);
            prop_assert!(2 * distance <= modulus || found < modulus);
        }
    }
}
