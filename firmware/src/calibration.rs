//! Codes to microvolts, one leg at a time, without a division.
//!
//! `µV = ((code * mantissa + 2^(shift-1)) >> shift) + offset`, bounded to ±1000 V: see
//! [`LegScale`], which is also what the host needs to read raw waveforms. A code at a converter rail
//! is converted like any other and counted as clipped: the true voltage may lie beyond it.

use legwise_protocol::message::LegScale;
use legwise_protocol::units::Microvolts;

/// Whether a scale is one this module can apply: `shift` 1..=40 and rails in order.
pub const fn is_valid(scale: &LegScale) -> bool {
    scale.shift >= 1 && scale.shift <= 40 && scale.rail_low_code < scale.rail_high_code
}

/// Converts `codes` into `microvolts` (the shorter length counts). A shift out of range is bounded.
pub fn convert(scale: &LegScale, codes: &[i32], microvolts: &mut [i32]) {
    let shift = u32::from(scale.shift).clamp(1, 40);
    let mantissa = i64::from(scale.mantissa);
    let half = 1_i64 << (shift - 1);
    let (low, high) = (-i64::from(Microvolts::BOUND), i64::from(Microvolts::BOUND));
    let offset = i64::from(scale.offset_uv);
    for (microvolts, &code) in microvolts.iter_mut().zip(codes) {
        // |code * mantissa| < 2^62, so neither the product nor the sums leave an i64.
        let scaled = (i64::from(code) * mantissa + half) >> shift;
        *microvolts = (scaled + offset).clamp(low, high) as i32;
    }
}

/// Whether a pair has a leg at its rail.
pub fn is_clipped(legs: &[LegScale; 2], code_a: i32, code_b: i32) -> bool {
    let [a, b] = legs;
    is_at_rail(a, code_a) | is_at_rail(b, code_b)
}

/// How many pairs have a leg at its rail.
pub fn count_clipped(legs: &[LegScale; 2], code_a: &[i32], code_b: &[i32]) -> u32 {
    code_a.iter().zip(code_b).map(|(&a, &b)| u32::from(is_clipped(legs, a, b))).sum()
}

fn is_at_rail(scale: &LegScale, code: i32) -> bool {
    (code <= scale.rail_low_code) | (code >= scale.rail_high_code)
}

#[cfg(test)]
mod tests {
    use super::*;

    /// 12 bits over 24 V around mid-scale.
    const TWELVE_BIT: LegScale = LegScale {
        mantissa: 96_000_000, // 5859.375 µV per code, times 2^14
        shift: 14,
        offset_uv: -12_000_000,
        rail_low_code: 0,
        rail_high_code: 4095,
        gain_uncertainty_ppm: 0,
        offset_uncertainty_uv: 0,
    };

    #[test]
    fn conversion_is_the_rounded_exact_product() {
        let codes: [i32; 4096] = core::array::from_fn(|code| code as i32);
        let mut microvolts = [0; 4096];
        convert(&TWELVE_BIT, &codes, &mut microvolts);
        for (code, microvolts) in codes.iter().zip(microvolts) {
            let exact = f64::from(*code) * 24e6 / 4096.0 - 12e6;
            assert!((f64::from(microvolts) - exact).abs() <= 0.5, "{code}: {microvolts} against {exact}");
        }
    }

    #[test]
    fn wild_scales_are_bounded_not_wrapped() {
        let wild = LegScale { mantissa: i32::MAX, shift: 200, offset_uv: i32::MIN, ..TWELVE_BIT };
        let mut microvolts = [0; 2];
        convert(&wild, &[i32::MAX, i32::MIN], &mut microvolts);
        assert_eq!(microvolts, [-Microvolts::BOUND; 2]);
        let wild = LegScale { mantissa: i32::MIN, shift: 0, ..TWELVE_BIT };
        convert(&wild, &[i32::MAX, i32::MIN], &mut microvolts);
        assert_eq!(microvolts, [-Microvolts::BOUND, Microvolts::BOUND]);
        assert!(!is_valid(&wild));
    }

    #[test]
    fn a_pair_with_either_leg_at_a_rail_counts_once() {
        let legs = [TWELVE_BIT; 2];
        assert_eq!(count_clipped(&legs, &[0, 1, 4095, 7, 4094], &[9, 4095, 0, 8, 1]), 3);
    }
}
