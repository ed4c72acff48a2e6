//! From resistor values to the scale of a leg: the divider with bias that most boards use.
//!
//! ```text
//!                     3.3 V (the converter's reference)
//!                       │ bias
//!  leg ──── input ──────┼──────► converter
//!                       │ ground
//!                      0 V
//! ```
//! With p = input/bias and q = input/ground (Kirchhoff's current law at the node):
//! `V_leg = V_converter · (1 + p + q) − V_reference · p`. The bias comes from the converter's own
//! reference, so a wrong reference is an error of gain only.
//!
//! Errors, worst case, for resistors of relative tolerance t, from the derivatives of that formula:
//! gain `2 (1 − k) t` with k = 1/(1 + p + q), offset at 0 V on the leg `2 p (V_reference − V_offset) t`.
//! Everything is computed while the program is built.

use legwise_protocol::message::LegScale;

/// The resistors of one leg, ohms.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Divider {
    /// From the leg to the node.
    pub input_ohm: f64,
    /// From the reference to the node.
    pub bias_ohm: f64,
    /// From the node to 0 V.
    pub ground_ohm: f64,
}

impl Divider {
    /// −15..+20 V into 0..3.3 V at one ninth of a unit load: the default for makers.
    pub const STANDARD: Self = Self { input_ohm: 100e3, bias_ohm: 20.5e3, ground_ohm: 18.7e3 };

    /// Volts on the leg per volt at the node.
    pub const fn ratio(&self) -> f64 {
        1.0 + self.input_ohm / self.bias_ohm + self.input_ohm / self.ground_ohm
    }

    /// Volts at the node with 0 V on the leg.
    pub const fn offset_v(&self, reference_v: f64) -> f64 {
        reference_v * (self.input_ohm / self.bias_ohm) / self.ratio()
    }

    /// Volts on the leg that give `node_v` at the node.
    pub const fn leg_v(&self, node_v: f64, reference_v: f64) -> f64 {
        node_v * self.ratio() - reference_v * (self.input_ohm / self.bias_ohm)
    }

    /// What the converter sees as the source's resistance, ohms.
    pub const fn source_ohm(&self) -> f64 {
        self.input_ohm / self.ratio()
    }

    /// What the bus sees as the monitor's resistance, ohms.
    pub const fn input_resistance_ohm(&self) -> f64 {
        self.input_ohm + self.bias_ohm * self.ground_ohm / (self.bias_ohm + self.ground_ohm)
    }
}

/// A divider, its parts' tolerances, and the converter behind it.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct FrontEnd {
    /// The resistors.
    pub divider: Divider,
    /// Reference of converter and bias, volts.
    pub reference_v: f64,
    /// Resolution of the converter, 1..=24.
    pub bits: u32,
    /// Codes at either end that count as clipped, besides the outermost: where a buffer stops being linear.
    pub rail_margin_codes: i32,
    /// Tolerance of the resistors, parts per million.
    pub resistor_ppm: u32,
    /// Tolerance of the reference, parts per million.
    pub reference_ppm: u32,
    /// Offset of converter and buffer, worst case, microvolts at the node.
    pub node_offset_uv: u32,
}

impl FrontEnd {
    /// Microvolts on the leg per code.
    pub const fn step_uv(&self) -> f64 {
        self.reference_v * 1e6 / (1_u64 << bounded_bits(self.bits)) as f64 * self.divider.ratio()
    }

    /// The scale a board declares for this leg, before any calibration.
    ///
    /// Gain to 31 bits or 2^−40 µV, offset to the microvolt; uncertainties are rounded up.
    pub const fn leg_scale(&self) -> LegScale {
        let divider = &self.divider;
        let (mantissa, shift) = mantissa_of(self.step_uv());
        let tolerance = self.resistor_ppm as f64 * 1e-6;
        let (ratio, p) = (divider.ratio(), divider.input_ohm / divider.bias_ohm);
        let gain_ppm = 2.0 * (1.0 - 1.0 / ratio) * self.resistor_ppm as f64 + self.reference_ppm as f64;
        let offset_v = 2.0 * p * (self.reference_v - divider.offset_v(self.reference_v)) * tolerance;
        let offset_uncertainty_uv = offset_v * 1e6 + self.node_offset_uv as f64 * ratio;
        let highest_code = (1_i32 << bounded_bits(self.bits)) - 1;
        LegScale {
            mantissa,
            shift,
            offset_uv: rounded(divider.leg_v(0.0, self.reference_v) * 1e6),
            rail_low_code: self.rail_margin_codes,
            rail_high_code: highest_code - self.rail_margin_codes,
            gain_uncertainty_ppm: rounded_up(gain_ppm),
            offset_uncertainty_uv: rounded_up(offset_uncertainty_uv),
        }
    }
}

/// What a leg read at 0 V and at a known voltage: the two-point calibration of one leg.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct TwoPoints {
    /// Reading with the leg on the reference clip, volts.
    pub at_zero_v: f64,
    /// Reading at the known voltage, volts.
    pub at_known_v: f64,
    /// The known voltage, volts: not 0, and best a good part of the range.
    pub known_v: f64,
    /// How well the known voltage is known, parts per million; what the meter's data sheet says.
    pub known_ppm: u32,
    /// Uncertainty that stays after the offset was taken out, microvolts: noise of the reading and drift.
    pub offset_uncertainty_uv: u32,
}

impl TwoPoints {
    /// The scale under which both points read what they should.
    ///
    /// `scale` is the one the readings were taken with. Points that tell nothing (both readings alike, or
    /// the known voltage 0) leave it as it is.
    pub const fn trim(&self, scale: LegScale) -> LegScale {
        let read_v = self.at_known_v - self.at_zero_v;
        if read_v == 0.0 || self.known_v == 0.0 || !(self.known_v / read_v).is_finite() {
            return scale;
        }
        let factor = self.known_v / read_v;
        let step_uv = scale.mantissa as f64 / (1_u64 << scale.shift) as f64;
        let (mantissa, shift) = mantissa_of(step_uv * factor);
        LegScale {
            mantissa,
            shift,
            offset_uv: rounded((scale.offset_uv as f64 - self.at_zero_v * 1e6) * factor),
            gain_uncertainty_ppm: self.known_ppm,
            offset_uncertainty_uv: self.offset_uncertainty_uv,
            ..scale
        }
    }
}

const fn bounded_bits(bits: u32) -> u32 {
    match bits {
        0 => 1,
        25.. => 24,
        bits => bits,
    }
}

/// `step_uv` as an integer mantissa with the most places that fit, and their number, 1..=40.
const fn mantissa_of(step_uv: f64) -> (i32, u8) {
    let mut shift = 40;
    while shift > 1 && step_uv * (1_u64 << shift) as f64 > (i32::MAX - 1) as f64 {
        shift -= 1;
    }
    (rounded(step_uv * (1_u64 << shift) as f64), shift as u8)
}

/// Nearest integer, ties away from zero; saturates.
const fn rounded(value: f64) -> i32 {
    (if value < 0.0 { value - 0.5 } else { value + 0.5 }) as i32
}

/// Next integer upwards; saturates.
const fn rounded_up(value: f64) -> u32 {
    let floor = value as u32;
    if floor as f64 == value { floor } else { floor.saturating_add(1) }
}

#[cfg(test)]
mod tests;
