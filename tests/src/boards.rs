//! Boards for tests: what a source says about its rate, its skew and its converters.

use legwise_firmware::fakes::MICROVOLT_CODES;
use legwise_firmware::source::SourceDescription;
use legwise_protocol::message::LegScale;

/// A board whose codes are microvolts, both legs sampled at once.
pub const fn microvolt_board(rate_hz: u64) -> SourceDescription {
    skewed_board(rate_hz, 0)
}

/// A board whose codes are microvolts and whose leg B is sampled `skew_ns` after leg A.
pub const fn skewed_board(rate_hz: u64, skew_ns: i32) -> SourceDescription {
    SourceDescription { sample_rate_mhz: rate_hz * 1000, skew_ns, legs: [MICROVOLT_CODES; 2] }
}

/// A board with the same converter on both legs.
pub const fn converter_board(rate_hz: u64, scale: LegScale) -> SourceDescription {
    SourceDescription { sample_rate_mhz: rate_hz * 1000, skew_ns: 0, legs: [scale; 2] }
}

/// A converter of `bits` bits over `span_v` volts around `centre_v`: code 0 is the lower end.
pub fn converter(bits: u32, span_v: f64, centre_v: f64) -> LegScale {
    let step_uv = span_v * 1e6 / f64::from(1_u32 << bits);
    // The largest binary point that leaves the mantissa in 31 bits.
    let shift = (0..=40_u8).rev().find(|&shift| step_uv * 2_f64.powi(shift.into()) < 2_f64.powi(31)).unwrap();
    LegScale {
        mantissa: (step_uv * 2_f64.powi(shift.into())).round() as i32,
        shift,
        offset_uv: ((centre_v - span_v / 2.0) * 1e6).round() as i32,
        rail_low_code: 0,
        rail_high_code: (1 << bits) - 1,
        gain_uncertainty_ppm: 0,
        offset_uncertainty_uv: 0,
    }
}

/// Volts per code.
pub fn step_v(scale: &LegScale) -> f64 {
    f64::from(scale.mantissa) * 2_f64.powi(-i32::from(scale.shift)) * 1e-6
}

/// The code a converter gives for a voltage: nearest, held at the rails.
pub fn code_of(scale: &LegScale, volts: f64) -> i32 {
    let code = (volts - f64::from(scale.offset_uv) * 1e-6) / step_v(scale);
    code.round().clamp(f64::from(scale.rail_low_code), f64::from(scale.rail_high_code)) as i32
}

/// A voltage as a microvolt code.
pub fn microvolts(volts: f64) -> i32 {
    (volts * 1e6).round() as i32
}
