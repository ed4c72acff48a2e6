//! Power spectral densities as 16-bit codes.
//!
//! A spectrum spans twenty decades, so a bin travels as a small floating-point number of its own:
//! 6 bits of exponent, 10 bits of fraction. Coding is integer work on the `f32` bits, hence
//! identical on every machine, and costs no logarithm on the device.
//!
//! ```text
//!  15        10 9                    0
//! +------------+----------------------+
//! |  exponent  |       fraction       |   value = 2^(exponent - 54) * (1 + fraction/1024)
//! +------------+----------------------+   code 0 = zero or below 2^-54 V²/Hz (5.6e-17)
//! ```
//!
//! Error: at most 2^-11 of the power (0.0021 dB, 0.024 % of the amplitude). Above 2^10·(1−2^-11)
//! V²/Hz the code saturates at `0xFFFF`.

/// Exponent of code `0x0000`.
const EXPONENT_OF_ZERO: i32 = -54;
const FRACTION_BITS: u32 = 10;

/// Largest relative error of a coded power inside the range: half a step of the fraction.
pub const RELATIVE_ERROR: f64 = 1.0 / 2048.0;

/// The code of a power; negative values and NaN give 0.
pub fn encode(power: f32) -> u16 {
    if power.is_nan() || power <= 0.0 {
        return 0;
    }
    // Add half a step, then cut: rounds to nearest and carries into the exponent by itself.
    let rounded = power.to_bits().saturating_add(1 << (22 - FRACTION_BITS));
    let exponent = (rounded >> 23) as i32 - 127 - EXPONENT_OF_ZERO;
    if exponent < 0 {
        0
    } else if exponent > 63 {
        u16::MAX
    } else {
        ((exponent as u32) << FRACTION_BITS | (rounded >> (23 - FRACTION_BITS) & 0x3FF)) as u16
    }
}

/// The power of a code, in the unit that was encoded.
pub fn decode(code: u16) -> f64 {
    if code == 0 {
        return 0.0;
    }
    let exponent = i32::from(code >> FRACTION_BITS) + EXPONENT_OF_ZERO;
    let fraction = 1.0 + f64::from(code & 0x3FF) / 1024.0;
    fraction * f64::from_bits(((exponent + 1023) as u64) << 52)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn every_code_survives_a_round_trip() {
        for code in 1..=u16::MAX {
            assert_eq!(encode(decode(code) as f32), code);
        }
    }

    #[test]
    fn error_stays_within_half_a_step() {
        let mut worst = 0.0_f64;
        let mut power = 1.0e-16_f64;
        while power < 1.0e3 {
            let relative = (decode(encode(power as f32)) / f64::from(power as f32) - 1.0).abs();
            worst = worst.max(relative);
            power *= 1.000_37;
        }
        assert!(worst <= RELATIVE_ERROR, "measured {worst:e}, limit {RELATIVE_ERROR:e}");
        assert!(worst > 0.9 * RELATIVE_ERROR, "the sweep did not come near the worst case: {worst:e}");
    }

    #[test]
    fn what_cannot_be_coded_is_zero_or_saturated() {
        assert_eq!(encode(0.0), 0);
        assert_eq!(encode(-1.0), 0);
        assert_eq!(encode(f32::NAN), 0);
        assert_eq!(encode(1e-20), 0);
        assert_eq!(encode(1e6), u16::MAX);
        assert_eq!(encode(f32::INFINITY), u16::MAX);
    }
}
