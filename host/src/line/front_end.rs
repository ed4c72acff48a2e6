//! From leg voltages to codes: gain and offset errors, converter, and the scale the board declares.
//!
//! The converter is defined by the very integers of its [`LegScale`], so that
//! `uv = ((code * mantissa + 2^(shift-1)) >> shift) + offset_uv` names the middle of each code to
//! within a microvolt. Front-end errors are not in the scale unless the scenario calls it calibrated.

use super::scenario::Monitor;
use super::{BLOCK, Wave};
use legwise_protocol::message::LegScale;

/// Gain uncertainty of a divider of 0.1 % parts: three resistors per leg make 3.64 times the
/// tolerance (own enumeration of all corners of the 100 k divider).
const GAIN_PPM: u32 = 3640;
/// Offset uncertainty of the same divider.
const OFFSET_UV: u32 = 36_000;
/// What is left of both after a two-point calibration (common practice, no source).
const CALIBRATED_GAIN_PPM: u32 = 500;
const CALIBRATED_OFFSET_UV: u32 = 5_000;

/// The converter of one leg.
#[derive(Clone, Debug)]
pub(crate) struct Converter {
    /// What the board says about it.
    pub scale: LegScale,
    codes_per_v: f32,
    code_at_zero: f32,
    highest_code: f32,
}

impl Converter {
    /// The converter of leg A (0) or leg B (1).
    pub fn new(monitor: &Monitor, leg: usize) -> Self {
        let (adc, front_end) = (&monitor.adc, &monitor.front_end);
        let highest_code = (1_i32 << adc.bits) - 1;
        let step_uv = (adc.high_v - adc.low_v) * 1e6 / f64::from(highest_code);
        let (mantissa, shift) = mantissa_of(step_uv);
        let nominal_step_v = f64::from(mantissa) * 2_f64.powi(-i32::from(shift)) * 1e-6;
        let low_uv = (adc.low_v * 1e6).round();
        let [gain_error, offset_error_v] = match leg {
            0 => [front_end.gain_error_a, front_end.offset_error_a_v],
            _ => [front_end.gain_error_b, front_end.offset_error_b_v],
        };
        let gain = 1.0 + gain_error;
        let (mantissa, shift, offset_uv) = if front_end.calibrated {
            let (mantissa, shift) = mantissa_of(step_uv / gain);
            (mantissa, shift, ((low_uv - offset_error_v * 1e6) / gain).round())
        } else {
            (mantissa, shift, low_uv)
        };
        let (gain_ppm, uncertain_uv) = if front_end.calibrated {
            (CALIBRATED_GAIN_PPM, CALIBRATED_OFFSET_UV)
        } else {
            (GAIN_PPM, OFFSET_UV)
        };
        Self {
            scale: LegScale {
                mantissa,
                shift,
                offset_uv: offset_uv as i32,
                rail_low_code: 0,
                rail_high_code: highest_code,
                gain_uncertainty_ppm: front_end.gain_uncertainty_ppm.unwrap_or(gain_ppm),
                offset_uncertainty_uv: front_end.offset_uncertainty_uv.unwrap_or(uncertain_uv),
            },
            codes_per_v: (gain / nominal_step_v) as f32,
            code_at_zero: ((offset_error_v - low_uv * 1e-6) / nominal_step_v) as f32,
            highest_code: highest_code as f32,
        }
    }

    /// Rounds volts to codes; stops at the rails.
    pub fn convert(&self, volts: &Wave, codes: &mut [i32; BLOCK]) {
        // Adding 2^23 to a value in 0..2^16 leaves its nearest integer in the low mantissa bits.
        const MAGIC: f32 = 8_388_608.0;
        for (code, &volts) in codes.iter_mut().zip(volts) {
            let exact = (volts * self.codes_per_v + self.code_at_zero).clamp(0.0, self.highest_code);
            *code = ((exact + MAGIC).to_bits() & 0x007f_ffff) as i32;
        }
    }
}

/// Largest shift for which `step_uv * 2^shift` fits an `i32`, and that mantissa.
fn mantissa_of(step_uv: f64) -> (i32, u8) {
    let mut shift = 40_u8;
    while shift > 1 && (step_uv * 2_f64.powi(i32::from(shift))).round() > f64::from(i32::MAX) {
        shift -= 1;
    }
    ((step_uv * 2_f64.powi(i32::from(shift))).round() as i32, shift)
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::line::scenario::{Adc, FrontEnd};

    fn microvolts(scale: &LegScale, code: i32) -> i64 {
        let product = i64::from(code) * i64::from(scale.mantissa) + (1 << (scale.shift - 1));
        (product >> scale.shift) + i64::from(scale.offset_uv)
    }

    /// Volts into codes and back: never more than half a step off, whatever the resolution. Slack:
    /// 0.5 uV of integer rounding and the f32 resolution of a code near 2^16 (2^-8 of a step).
    #[test]
    fn declared_scale_gives_back_the_voltage_to_half_a_step() {
        for bits in 8..=16 {
            for (front_end, leg) in [
                (FrontEnd::default(), 0),
                (
                    FrontEnd {
                        gain_error_b: -0.02,
                        offset_error_b_v: 0.11,
                        calibrated: true,
                        ..Default::default()
                    },
                    1,
                ),
            ] {
                let adc = Adc { bits, low_v: -16.1, high_v: 20.9, ..Adc::default() };
                let converter = Converter::new(&Monitor { at: None, front_end, adc }, leg);
                let step_uv = f64::from(converter.scale.mantissa) / 2_f64.powi(converter.scale.shift.into());
                let mut worst = 0.0_f64;
                for block in 0..400 {
                    let volts: Wave = std::array::from_fn(|n| {
                        -15.5 + 35.5 * (block * BLOCK + n) as f32 / (400 * BLOCK) as f32
                    });
                    let mut codes = [0; BLOCK];
                    converter.convert(&volts, &mut codes);
                    for (&code, &volts) in codes.iter().zip(&volts) {
                        let error = microvolts(&converter.scale, code) as f64 - f64::from(volts) * 1e6;
                        worst = worst.max(error.abs() / step_uv);
                    }
                }
                println!("{bits} bits: worst error {worst:.4} steps");
                assert!(worst <= 0.5 + 1.0 / 256.0 + 1.0 / step_uv);
            }
        }
    }

    #[test]
    fn beyond_the_range_the_code_stays_at_the_rail() {
        let converter = Converter::new(&Monitor::default(), 0);
        let mut codes = [0; BLOCK];
        let mut volts = [0.0; BLOCK];
        (volts[0], volts[1], volts[2], volts[3]) = (-400.0, 400.0, -16.1, 20.9);
        converter.convert(&volts, &mut codes);
        assert_eq!(&codes[..4], &[0, 4095, 0, 4095]);
        assert_eq!((converter.scale.rail_low_code, converter.scale.rail_high_code), (0, 4095));
    }

    #[test]
    fn errors_stay_out_of_an_uncalibrated_scale() {
        let front_end = FrontEnd { gain_error_a: 0.01, ..FrontEnd::default() };
        let off = Converter::new(&Monitor { front_end, ..Monitor::default() }, 0);
        let ideal = Converter::new(&Monitor::default(), 0);
        assert_eq!(off.scale, ideal.scale);
        let (mut one, mut other) = ([0; BLOCK], [0; BLOCK]);
        off.convert(&[10.0; BLOCK], &mut one);
        ideal.convert(&[10.0; BLOCK], &mut other);
        // 1 % of 10 V is 11 codes of 9.04 mV.
        assert_eq!(one[0] - other[0], 11);
    }
}
