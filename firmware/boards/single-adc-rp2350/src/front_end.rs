//! What stands before the converter, in one place: resistors, reference, and what the marker reads.
//!
//! Change the values here when the parts differ; the scale told to the host follows.

use legwise_firmware::front_end::{Divider, FrontEnd};
use legwise_protocol::message::LegScale;

/// The divider of each leg, and the converter behind it.
pub const FRONT_END: FrontEnd = FrontEnd {
    divider: Divider::STANDARD,
    reference_v: 3.3,
    bits: 12,
    // The integral non-linearity of the converter family near the ends (about 8 codes measured on its
    // predecessor).
    rail_margin_codes: 8,
    resistor_ppm: 1_000,
    // The board's 3.3 V regulator and the filter to the converter's supply, 2 %. With a reference chip
    // on ADC_VREF write its tolerance here.
    reference_ppm: 20_000,
    // Offset and non-linearity together, 10 codes.
    node_offset_uv: 8_000,
};

/// Scales of leg A and leg B. After a calibration put `TwoPoints { .. }.trim(FRONT_END.leg_scale())` here
/// for each leg (`legwise_firmware::front_end::TwoPoints`; steps in README.md).
pub const LEGS: [LegScale; 2] = [FRONT_END.leg_scale(); 2];

/// The temperature sensor as a marker: 0.706 V at 27 °C and −1.721 mV/K (data sheet of the RP2350, from
/// memory) is 0.606..0.787 V from −20 to +85 °C; 50 mV more each way for spread of parts and reference.
#[cfg(feature = "marker")]
pub const LAYOUT: legwise_firmware::sampling::scan::AlternatingLayout =
    legwise_firmware::sampling::scan::AlternatingLayout {
        marker: legwise_firmware::sampling::scan::CodeWindow { low: code_of(556), high: code_of(837) },
    };

/// Without a marker a scan is just the legs.
#[cfg(not(feature = "marker"))]
pub const LAYOUT: legwise_firmware::sampling::scan::UnmarkedLayout =
    legwise_firmware::sampling::scan::UnmarkedLayout;

/// The code nearest below a voltage at the converter.
#[cfg(feature = "marker")]
const fn code_of(millivolts: u32) -> u16 {
    (millivolts * 4096 / 3300) as u16
}
