//! Leg B brought to leg A's sampling instants, for the per-sample path.
//!
//! A board that reads its legs one after the other declares the delay. Four-tap Lagrange
//! interpolation (Laakso, Välimäki, Karjalainen, Laine, *Splitting the unit delay*, IEEE Signal
//! Processing Magazine 13(1), 1996): `h(k) = Π_{j≠k} (D−j)/(k−j)`. At half a sample this is
//! [−1 9 9 −1]/16 and leaves −49 dB of false differential mode at 0.1 of the sample rate.
//!
//! Only the common and differential mode use the aligned leg. The terminal window is judged on the
//! samples as taken: an interpolator overshoots at edges and could invent or hide an excursion.

use crate::block::{ALIGNED, HISTORY, STAGED};
use legwise_protocol::units::Microvolts;

const TAPS: usize = 4;
/// Binary point of the coefficients.
const SHIFT: u32 = 24;

/// Interpolator for one declared skew. [`Aligner::new`] with no skew passes leg B through.
#[derive(Clone, Copy, Debug)]
pub struct Aligner {
    taps: [i32; TAPS],
    /// Position of the first tap in `history + staged`, relative to the output's own sample.
    first_tap: usize,
    is_skewed: bool,
}

impl Aligner {
    /// No skew.
    pub(crate) const UNSET: Self = Self { taps: [0; TAPS], first_tap: 0, is_skewed: false };

    /// For leg B sampled `skew_ns` after leg A (negative: before), at the given rate. A skew of a
    /// whole sample or more is bounded to just below one: the source must renumber its samples instead.
    pub fn new(skew_ns: i32, sample_rate_mhz: u64) -> Self {
        let period_ns = if sample_rate_mhz == 0 { f64::INFINITY } else { 1e12 / sample_rate_mhz as f64 };
        let skew = (f64::from(skew_ns) / period_ns).clamp(-0.999, 0.999);
        // A later leg B needs the samples before: taps at n-2 .. n+1. An earlier one: n-1 .. n+2.
        let (first_tap, delay) = if skew > 0.0 { (0, 2.0 - skew) } else { (1, 1.0 - skew) };
        Self { taps: lagrange(delay), first_tap, is_skewed: skew_ns != 0 }
    }

    /// Whether any skew was declared.
    pub const fn is_skewed(&self) -> bool {
        self.is_skewed
    }

    /// Leg B at leg A's instants: `with_history` holds the two samples before the block, then the
    /// staged samples, all of them within ±1000 V. Without skew a plain copy, to the microvolt.
    /// Kept out of its caller, for the sake of registers.
    #[inline(never)]
    pub fn align(&self, with_history: &[i32; HISTORY + STAGED], aligned: &mut [i32; ALIGNED]) {
        if !self.is_skewed {
            for (out, &own) in aligned.iter_mut().zip(with_history.iter().skip(HISTORY)) {
                *out = own;
            }
            return;
        }
        let [h0, h1, h2, h3] = self.taps.map(i64::from);
        let Some(&[mut w0, mut w1, mut w2, ref ahead @ ..]) = with_history.get(self.first_tap..) else {
            return;
        };
        let mut magnitudes = 0;
        for (out, &w3) in aligned.iter_mut().zip(ahead) {
            let sum = h0 * i64::from(w0) + h1 * i64::from(w1) + h2 * i64::from(w2) + h3 * i64::from(w3);
            // The taps' magnitudes sum to 1.25 at most (at half a sample): 1250 V fit an i32.
            *out = ((sum + (1 << (SHIFT - 1))) >> SHIFT) as i32;
            magnitudes |= *out ^ (*out >> 31);
            (w0, w1, w2) = (w1, w2, w3);
        }
        // No value is larger than all their bits together (negative ones count from -1), which mostly stay
        // far below the bound: then there is nothing to do.
        if magnitudes >= Microvolts::BOUND {
            for out in aligned {
                *out = (*out).clamp(-Microvolts::BOUND, Microvolts::BOUND);
            }
        }
    }
}

/// Lagrange coefficients for `delay` samples after the first tap, scaled by 2^24; they sum to exactly 2^24.
fn lagrange(delay: f64) -> [i32; TAPS] {
    let mut taps = [0_i32; TAPS];
    for (k, tap) in taps.iter_mut().enumerate() {
        let mut product = f64::from(1_u32 << SHIFT);
        for j in 0..TAPS {
            if j != k {
                product *= (delay - j as f64) / (k as f64 - j as f64);
            }
        }
        let half = if product < 0.0 { -0.5 } else { 0.5 };
        *tap = (product + half) as i32;
    }
    // Rounding leaves a unit or two; the second tap takes it so that a constant stays constant.
    let [h0, h1, h2, h3] = taps;
    [h0, h1 + (1 << SHIFT) - (h0 + h1 + h2 + h3), h2, h3]
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn half_a_sample_gives_the_published_coefficients() {
        // Laakso et al. 1996; exact integers [-1 9 9 -1]/16.
        let sixteenth = 1 << (SHIFT - 4);
        assert_eq!(lagrange(1.5), [-sixteenth, 9 * sixteenth, 9 * sixteenth, -sixteenth]);
    }

    /// Worst error on a 10 V tone at `frequency` (of the sample rate), in microvolts.
    fn worst_error_uv(skew: f64, frequency: f64) -> f64 {
        let rate_mhz = 1_000_000_000; // 1 MS/s, so a skew in samples is that many microseconds
        let aligner = Aligner::new((skew * 1000.0) as i32, rate_mhz);
        let (mut worst, mut aligned) = (0.0_f64, [0; ALIGNED]);
        for phase_step in 0..64 {
            let tone = |at: f64| {
                let phase = core::f64::consts::TAU * (frequency * at + f64::from(phase_step) / 64.0);
                10e6 * libm::cos(phase)
            };
            let input: [i32; HISTORY + STAGED] =
                core::array::from_fn(|n| libm::round(tone(n as f64 - HISTORY as f64 + skew)) as i32);
            aligner.align(&input, &mut aligned);
            for (n, &out) in aligned.iter().enumerate() {
                worst = worst.max((f64::from(out) - tone(n as f64)).abs());
            }
        }
        worst
    }

    #[test]
    fn residual_matches_the_response_of_lagrange_4() {
        // A centred half-sample Lagrange-4 interpolator has H(f) = (9 cos(pi f) - cos(3 pi f))/8
        // (from its coefficients): the residual is 1 - |H|. Input and output are rounded to 1 µV each:
        // up to 0.5 * 20/16 + 0.5 µV more or less.
        for frequency in [0.01, 0.02, 0.05, 0.10, 0.15, 0.20] {
            let pi = core::f64::consts::PI;
            let h = (9.0 * libm::cos(pi * frequency) - libm::cos(3.0 * pi * frequency)) / 8.0;
            let theory = 10e6 * (1.0 - h).abs();
            for skew in [0.5, -0.5] {
                let measured = worst_error_uv(skew, frequency);
                assert!(
                    (measured - theory).abs() < 1.125 + 1e-3 * theory,
                    "{frequency} at {skew}: {measured:.2} µV, theory {theory:.2} µV"
                );
            }
        }
    }

    #[test]
    fn no_skew_copies_to_the_microvolt_and_constants_stay_constant() {
        let input: [i32; HISTORY + STAGED] = core::array::from_fn(|n| n as i32 * 7919 - 1_000_003);
        let mut aligned = [0; ALIGNED];
        Aligner::new(0, 500_000_000).align(&input, &mut aligned);
        assert_eq!(aligned.as_slice(), &input[HISTORY..HISTORY + ALIGNED]);
        for skew_ns in [-1999, -700, 1, 333, 1000, 1999] {
            Aligner::new(skew_ns, 500_000_000).align(&[11_999_999; HISTORY + STAGED], &mut aligned);
            assert_eq!(aligned, [11_999_999; ALIGNED], "{skew_ns} ns");
        }
    }

    #[test]
    fn what_overshoots_is_bounded_to_1000_v() {
        // At half a sample [-1 9 9 -1]/16 makes 1.25 of readings -1, 1, 1, -1: the most there is.
        let input: [i32; HISTORY + STAGED] = core::array::from_fn(|n| {
            if n % 4 == 1 || n % 4 == 2 { Microvolts::BOUND } else { -Microvolts::BOUND }
        });
        let mut aligned = [0; ALIGNED];
        Aligner::new(1000, 500_000_000).align(&input, &mut aligned);
        assert_eq!(aligned[..3], [Microvolts::BOUND, 0, -Microvolts::BOUND]);
        assert!(aligned.iter().all(|out| out.abs() <= Microvolts::BOUND));
        for delay in 0..=1000 {
            let magnitudes: i64 =
                lagrange(1.0 + f64::from(delay) / 1000.0).map(|tap| i64::from(tap.abs())).iter().sum();
            assert!(magnitudes <= (5 << SHIFT) / 4 + 2, "{delay}: {magnitudes}");
        }
    }
}
