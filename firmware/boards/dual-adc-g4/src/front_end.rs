//! What stands before the converters, in one place: resistors, reference, and what reads the markers.
//!
//! Change the values here when the parts differ; the scale told to the host follows.

use legwise_firmware::front_end::{Divider, FrontEnd};
use legwise_firmware::sampling::scan::{CodeWindow, SimultaneousLayout};
use legwise_protocol::message::LegScale;

/// The divider of each leg, and the converters behind it.
pub const FRONT_END: FrontEnd = FrontEnd {
    divider: Divider::STANDARD,
    reference_v: 3.3,
    bits: 12,
    // The buffers are linear to about 20 mV from either supply without load (from memory of the data
    // sheet, not verified): 25 codes of 0.8 mV.
    rail_margin_codes: 25,
    resistor_ppm: 1_000,
    // The board's 3.3 V regulator, 1 %. With a reference chip on VREF+ write its tolerance here.
    reference_ppm: 10_000,
    // Buffer 3 mV and converter 2.5 mV after calibration (from memory, not verified).
    node_offset_uv: 5_500,
};

/// Scales of leg A and leg B. After a calibration put `TwoPoints { .. }.trim(FRONT_END.leg_scale())` here
/// for each leg (`legwise_firmware::front_end::TwoPoints`; steps in README.md).
pub const LEGS: [LegScale; 2] = [FRONT_END.leg_scale(); 2];

/// Marker A is wired to 3.3 V, marker B to 0 V: neither is a code that a leg in range can have, and they
/// tell the converters apart.
pub const LAYOUT: SimultaneousLayout = SimultaneousLayout {
    marker_a: CodeWindow { low: 4_000, high: 4_095 },
    marker_b: CodeWindow { low: 0, high: 95 },
};
