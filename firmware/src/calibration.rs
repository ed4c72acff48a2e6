//! Codes to microvolts, one leg at a time, without a division.
//!
//! `µV = ((code * mantissa + 2^(shift-1)) >> shift) + offset`, bounded to ±1000 V: see
//! [`LegScale`], which is also what the host needs to read raw waveforms. A code at a converter rail
//! is converted like any other and counted as clipped: the true voltage may lie beyond it.
//!
//! Codes between the rails of an ordinary converter take a short way to the same number: with
//! `k = 32 - shift`, `(((code << k) * mantissa + 2^31) >> 32) + offset`, where the first term is the upper
//! word of one multiplication that rounds: the half, `2^(shift-1)`, becomes 2^31 whatever the shift. A block
//! with any other code takes the long way.

use crate::interval::Interval;
use legwise_protocol::message::LegScale;
use legwise_protocol::units::{Microvolts, Span};

/// Whether a scale is one this module can apply: `shift` 1..=40 and rails in order.
pub const fn is_valid(scale: &LegScale) -> bool {
    scale.shift >= 1 && scale.shift <= 40 && scale.rail_low_code < scale.rail_high_code
}

/// A scale, made ready.
#[derive(Clone, Copy, Debug)]
pub struct Calibration {
    scale: LegScale,
    /// `k` of the short way, where it is exact for codes from rail to rail.
    code_shift: Option<u32>,
}

impl Calibration {
    /// No scale yet: every code becomes 0 µV.
    pub(crate) const UNSET: Self = Self {
        scale: LegScale {
            mantissa: 0,
            shift: 0,
            offset_uv: 0,
            rail_low_code: 0,
            rail_high_code: 0,
            gain_uncertainty_ppm: 0,
            offset_uncertainty_uv: 0,
        },
        code_shift: None,
    };

    /// Makes a scale ready. A shift out of range is bounded.
    pub fn new(scale: LegScale) -> Self {
        let scale = LegScale { shift: scale.shift.clamp(1, 40), ..scale };
        Self { scale, code_shift: short_way(&scale) }
    }

    /// The scale.
    pub const fn scale(&self) -> &LegScale {
        &self.scale
    }

    /// Converts `codes` into `microvolts` (the shorter length counts); the span of the codes.
    /// Kept out of its callers, which are four: for the sake of flash and registers.
    #[inline(never)]
    pub fn convert(&self, codes: &[i32], microvolts: &mut [i32]) -> Span {
        let Some(code_shift) = self.code_shift else { return self.convert_any(codes, microvolts) };
        let Some(&first) = codes.first() else { return Span::EMPTY };
        let LegScale { mantissa, offset_uv, rail_low_code, rail_high_code, .. } = self.scale;
        let mut seen = Interval::only(first);
        for (microvolts, &code) in microvolts.iter_mut().zip(codes) {
            seen.include(code);
            let product = i64::from(code.wrapping_shl(code_shift)) * i64::from(mantissa);
            *microvolts = (((product + (1 << 31)) >> 32) as i32).wrapping_add(offset_uv);
        }
        if Interval::new(rail_low_code, rail_high_code).holds_all(seen.span()) {
            seen.span()
        } else {
            self.convert_any(codes, microvolts)
        }
    }

    /// The long way, for any code.
    #[inline(never)]
    fn convert_any(&self, codes: &[i32], microvolts: &mut [i32]) -> Span {
        let mut span = Span::EMPTY;
        for (microvolts, &code) in microvolts.iter_mut().zip(codes) {
            span.include(code);
            *microvolts = self.scale.microvolts(code);
        }
        span
    }

    /// The span of microvolts that a span of codes becomes.
    pub fn span(&self, codes: Span) -> Span {
        let (low, high) = (self.scale.microvolts(codes.low), self.scale.microvolts(codes.high));
        // A front end that inverts has a negative gain.
        if self.scale.mantissa < 0 { Span { low: high, high: low } } else { Span { low, high } }
    }

    /// Whether no code of the span is at a rail.
    pub const fn is_off_rails(&self, codes: Span) -> bool {
        codes.low > self.scale.rail_low_code && codes.high < self.scale.rail_high_code
    }
}

/// `k` of the short way; `None` where the upper word would not hold the exact result at both rails.
fn short_way(scale: &LegScale) -> Option<u32> {
    let shift = u32::from(scale.shift);
    let code_shift = 32_u32.checked_sub(shift)?;
    let half = 1_i64 << (shift - 1);
    let reach = 1_i64 << (31 - code_shift.min(31));
    let is_exact = [scale.rail_low_code, scale.rail_high_code].into_iter().all(|code| {
        let code = i64::from(code);
        let exact = ((code * i64::from(scale.mantissa) + half) >> shift) + i64::from(scale.offset_uv);
        (-reach..reach).contains(&code) && exact.abs() <= i64::from(Microvolts::BOUND)
    });
    is_exact.then_some(code_shift)
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
        Calibration::new(TWELVE_BIT).convert(&codes, &mut microvolts);
        for (code, microvolts) in codes.iter().zip(microvolts) {
            let exact = f64::from(*code) * 24e6 / 4096.0 - 12e6;
            assert!((f64::from(microvolts) - exact).abs() <= 0.5, "{code}: {microvolts} against {exact}");
        }
    }

    #[test]
    fn wild_scales_are_bounded_not_wrapped() {
        let wild = LegScale { mantissa: i32::MAX, shift: 200, offset_uv: i32::MIN, ..TWELVE_BIT };
        let mut microvolts = [0; 2];
        Calibration::new(wild).convert(&[i32::MAX, i32::MIN], &mut microvolts);
        assert_eq!(microvolts, [-Microvolts::BOUND; 2]);
        let wild = LegScale { mantissa: i32::MIN, shift: 0, ..TWELVE_BIT };
        Calibration::new(wild).convert(&[i32::MAX, i32::MIN], &mut microvolts);
        assert_eq!(microvolts, [-Microvolts::BOUND, Microvolts::BOUND]);
        assert!(!is_valid(&wild));
    }

    #[test]
    fn the_short_way_gives_the_same_as_the_long_way_for_every_code() {
        let inverted = LegScale { mantissa: -TWELVE_BIT.mantissa, offset_uv: 13_000_000, ..TWELVE_BIT };
        let fine = LegScale {
            mantissa: 1_000_000_007,
            shift: 29,
            offset_uv: -77,
            rail_low_code: -8_388_608,
            rail_high_code: 8_388_607,
            ..TWELVE_BIT
        };
        for scale in [TWELVE_BIT, inverted, fine] {
            let calibration = Calibration::new(scale);
            assert!(calibration.code_shift.is_some());
            let step = usize::try_from((scale.rail_high_code - scale.rail_low_code) / 4095).unwrap();
            let mut microvolts = [0];
            for code in (scale.rail_low_code..=scale.rail_high_code).step_by(step) {
                let span = calibration.convert(&[code], &mut microvolts);
                assert_eq!(microvolts, [scale.microvolts(code)], "{code}");
                assert_eq!(calibration.span(span), Span { low: microvolts[0], high: microvolts[0] });
            }
        }
    }

    #[test]
    fn a_code_beyond_the_rails_takes_the_long_way() {
        let mut microvolts = [0; 3];
        Calibration::new(TWELVE_BIT).convert(&[5, 1 << 28, -9], &mut microvolts);
        assert_eq!(microvolts, [5, 1 << 28, -9].map(|code| TWELVE_BIT.microvolts(code)));
    }

    #[test]
    fn a_pair_with_either_leg_at_a_rail_counts_once() {
        let legs = [TWELVE_BIT; 2];
        assert_eq!(count_clipped(&legs, &[0, 1, 4095, 7, 4094], &[9, 4095, 0, 8, 1]), 3);
    }
}
