//! Cross densities as two 12-bit codes, and one bin of both modes in seven bytes.
//!
//! The cross density `conj(C)·D` tells how the two modes hang together. It is complex and signed, so each
//! of its parts travels as a small floating-point number like a power ([`crate::power`]), with a sign
//! and a shorter fraction. Coding is integer work on the `f32` bits: identical on every machine.
//!
//! ```text
//!   11     10        5 4          0
//! +------+------------+------------+
//! | sign |  exponent  |  fraction  |   value = ±2^(exponent - 54) * (1 + fraction/32)
//! +------+------------+------------+   code 0 = zero or not above 2^-54 V²/Hz
//!
//! bin = common power u16 | differential power u16 | imaginary (12 high bits), real (12 low bits)
//! ```
//!
//! Error: at most 2^-6 of each part (1.6 %), hence of the magnitude; of the phase at most 0.9 degrees.
//! Above 2^9·(2−2^-6) V²/Hz a part saturates at 1008.

use crate::power;

/// Bytes of one bin: two powers of two bytes, the cross density in three.
pub const BIN_BYTES: usize = 7;

/// Largest relative error of each part of a coded cross density inside the range: half a step of the
/// fraction.
pub const RELATIVE_ERROR: f64 = 1.0 / 64.0;

/// Exponent of magnitude `0x000`.
const EXPONENT_OF_ZERO: i32 = -54;
const FRACTION_BITS: u32 = 5;
const FRACTION_MASK: u16 = 0x1F;
const SIGN: u16 = 0x800;
const LARGEST: u16 = 0x7FF;

/// The code of the real or the imaginary part, at most `0xFFF`; NaN gives 0.
pub const fn encode(value: f32) -> u16 {
    if value.is_nan() {
        return 0;
    }
    // Add half a step, then cut: rounds to nearest and carries into the exponent by itself.
    let rounded = (value.to_bits() & 0x7FFF_FFFF) + (1 << (22 - FRACTION_BITS));
    let exponent = (rounded >> 23) as i32 - 127 - EXPONENT_OF_ZERO;
    let magnitude = if exponent < 0 {
        0
    } else if exponent > 63 {
        LARGEST
    } else {
        ((exponent as u32) << FRACTION_BITS) as u16 | (rounded >> (23 - FRACTION_BITS)) as u16 & FRACTION_MASK
    };
    if magnitude > 0 && value < 0.0 { SIGN | magnitude } else { magnitude }
}

/// The part that a code stands for, in the unit that was encoded. Bits above the twelfth are ignored.
pub fn decode(code: u16) -> f64 {
    let magnitude = code & LARGEST;
    if magnitude == 0 {
        return 0.0;
    }
    let exponent = i32::from(magnitude >> FRACTION_BITS) + EXPONENT_OF_ZERO;
    let fraction = 1.0 + f64::from(magnitude & FRACTION_MASK) / 32.0;
    let value = fraction * f64::from_bits(((exponent + 1023) as u64) << 52);
    if code & SIGN == 0 { value } else { -value }
}

/// Two codes in three bytes, low byte first: real part in the low 12 bits, imaginary in the high ones.
pub const fn pack(real: u16, imaginary: u16) -> [u8; 3] {
    let [low, middle, high, _] = ((real & 0xFFF) as u32 | ((imaginary & 0xFFF) as u32) << 12).to_le_bytes();
    [low, middle, high]
}

/// The codes of the real and the imaginary part.
pub const fn unpack(bytes: [u8; 3]) -> (u16, u16) {
    let [low, middle, high] = bytes;
    let word = u32::from_le_bytes([low, middle, high, 0]);
    ((word & 0xFFF) as u16, (word >> 12) as u16)
}

/// The codes of one bin, as the wire carries them.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub struct BinCodes {
    /// [`power`] code of the common mode.
    pub common: u16,
    /// [`power`] code of the differential mode.
    pub differential: u16,
    /// Codes of the cross density `conj(C)·D`: real and imaginary part.
    pub cross: (u16, u16),
}

impl BinCodes {
    /// The codes of densities in V²/Hz.
    pub fn encode(common: f32, differential: f32, cross: (f32, f32)) -> Self {
        Self {
            common: power::encode(common),
            differential: power::encode(differential),
            cross: (encode(cross.0), encode(cross.1)),
        }
    }

    /// The bytes on the wire.
    pub const fn to_bytes(self) -> [u8; BIN_BYTES] {
        let [c0, c1] = self.common.to_le_bytes();
        let [d0, d1] = self.differential.to_le_bytes();
        let [x0, x1, x2] = pack(self.cross.0, self.cross.1);
        [c0, c1, d0, d1, x0, x1, x2]
    }

    /// The codes in bytes from the wire.
    pub const fn from_bytes(bytes: [u8; BIN_BYTES]) -> Self {
        let [c0, c1, d0, d1, x0, x1, x2] = bytes;
        Self {
            common: u16::from_le_bytes([c0, c1]),
            differential: u16::from_le_bytes([d0, d1]),
            cross: unpack([x0, x1, x2]),
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn every_code_survives_a_round_trip() {
        for code in (1..=LARGEST).chain(SIGN + 1..=SIGN | LARGEST) {
            assert_eq!(encode(decode(code) as f32), code, "{code:#x}");
        }
        assert_eq!((decode(SIGN), decode(0)), (0.0, 0.0), "a zero with a sign is a zero");
    }

    #[test]
    fn every_pair_of_codes_survives_packing() {
        for real in 0..0x1000 {
            for imaginary in (0..0x1000).step_by(7).chain([0xFFF]) {
                assert_eq!(unpack(pack(real, imaginary)), (real, imaginary));
            }
        }
        assert_eq!(pack(0x123, 0xABC), [0x23, 0xC1, 0xAB]);
        let bin = BinCodes { common: 0x0102, differential: 0x0304, cross: (0x123, 0xABC) };
        assert_eq!(bin.to_bytes(), [0x02, 0x01, 0x04, 0x03, 0x23, 0xC1, 0xAB]);
        assert_eq!(BinCodes::from_bytes(bin.to_bytes()), bin);
    }

    #[test]
    fn error_stays_within_half_a_step_on_both_sides_of_zero() {
        let mut worst = 0.0_f64;
        let mut magnitude = 1.0e-16_f64;
        while magnitude < 1.0e3 {
            for value in [magnitude as f32, -magnitude as f32] {
                worst = worst.max((decode(encode(value)) / f64::from(value) - 1.0).abs());
            }
            magnitude *= 1.000_37;
        }
        assert!(worst <= RELATIVE_ERROR, "measured {worst:e}, limit {RELATIVE_ERROR:e}");
        assert!(worst > 0.95 * RELATIVE_ERROR, "the sweep did not come near the worst case: {worst:e}");
    }

    /// No neighbour is nearer, in `f64`, from the least value that is no zero to the largest code.
    #[test]
    fn the_code_is_the_nearest_one() {
        let mut bits = 0x2482_0000_u32; // 2^-54 * (1 + 1/64)
        while bits < 0x447C_0000 {
            let value = f32::from_bits(bits);
            let distance = |code: u16| (decode(code) - f64::from(value)).abs();
            let found = encode(value);
            let (below, above) = (found.max(1) - 1, (found + 1).min(LARGEST));
            assert!(distance(found) <= distance(below).min(distance(above)), "{value:e}");
            assert_eq!(encode(-value), found | SIGN, "{value:e}");
            bits += 0x0001_2347;
        }
    }

    #[test]
    fn what_cannot_be_coded_is_zero_or_saturated() {
        for zero in [0.0, -0.0, f32::NAN, -f32::NAN, 1e-20, -1e-20] {
            assert_eq!(encode(zero), 0, "{zero}");
        }
        assert_eq!([1e6, f32::INFINITY, f32::MAX].map(encode), [LARGEST; 3]);
        assert_eq!([-1e6, f32::NEG_INFINITY].map(encode), [SIGN | LARGEST; 2]);
        assert_eq!(decode(LARGEST), 1008.0);
    }
}
