//! Against the project's front-end tables, and against every corner of the tolerances.

use super::*;

/// One row of the project's front-end table, as printed there.
struct Row {
    /// Input, bias, ground.
    kohm: [f64; 3],
    ratio: f64,
    offset_v: f64,
    /// At −15, −7, 0, +12, +20 V on the leg.
    node_v: [f64; 5],
    source_kohm: f64,
    input_kohm: f64,
    range_v: [f64; 2],
    /// One code of 12 bits.
    step_mv: f64,
}

/// Computed there with G = 1/input + 1/bias + 1/ground and Thévenin's theorem, independent of the
/// formula used here.
const TABLE: [Row; 4] = [
    Row {
        kohm: [100.0, 20.5, 18.7],
        ratio: 11.23,
        offset_v: 1.434,
        node_v: [0.098, 0.810, 1.434, 2.503, 3.216],
        source_kohm: 8.9,
        input_kohm: 110.0,
        range_v: [-16.1, 20.9],
        step_mv: 9.0,
    },
    Row {
        kohm: [200.0, 41.2, 37.4],
        ratio: 11.20,
        offset_v: 1.430,
        node_v: [0.091, 0.805, 1.430, 2.501, 3.215],
        source_kohm: 17.9,
        input_kohm: 220.0,
        range_v: [-16.0, 20.9],
        step_mv: 9.0,
    },
    Row {
        kohm: [390.0, 80.6, 73.2],
        ratio: 11.17,
        offset_v: 1.430,
        node_v: [0.087, 0.803, 1.430, 2.505, 3.221],
        source_kohm: 34.9,
        input_kohm: 428.0,
        range_v: [-16.0, 20.9],
        step_mv: 9.0,
    },
    Row {
        kohm: [33.0, 6.8, 6.04],
        ratio: 11.32,
        offset_v: 1.415,
        node_v: [0.090, 0.797, 1.415, 2.476, 3.182],
        source_kohm: 2.9,
        input_kohm: 36.0,
        range_v: [-16.0, 21.3],
        step_mv: 9.1,
    },
];

fn front_end(kohm: [f64; 3]) -> FrontEnd {
    let [input_ohm, bias_ohm, ground_ohm] = kohm.map(|kohm| kohm * 1e3);
    FrontEnd {
        divider: Divider { input_ohm, bias_ohm, ground_ohm },
        reference_v: 3.3,
        bits: 12,
        rail_margin_codes: 0,
        resistor_ppm: 1_000,
        reference_ppm: 0,
        node_offset_uv: 0,
    }
}

#[test]
fn dividers_agree_with_the_front_end_table_to_the_last_digit_printed() {
    for row in TABLE {
        let divider = front_end(row.kohm).divider;
        let close = |found: f64, printed: f64, unit: f64| {
            // Half a unit of the last printed digit, and a hair for decimals that are no binary fractions.
            assert!((found - printed).abs() <= 0.5001 * unit, "{:?}: {found}, printed {printed}", row.kohm);
        };
        close(divider.ratio(), row.ratio, 0.01);
        close(divider.offset_v(3.3), row.offset_v, 0.001);
        for (leg_v, node_v) in [-15.0, -7.0, 0.0, 12.0, 20.0].into_iter().zip(row.node_v) {
            close(divider.offset_v(3.3) + leg_v / divider.ratio(), node_v, 0.001);
            // and back: half a millivolt at the node is that much times the ratio on the leg
            close(divider.leg_v(node_v, 3.3), leg_v, 0.001 * divider.ratio());
        }
        close(divider.source_ohm(), row.source_kohm * 1e3, 100.0);
        close(divider.input_resistance_ohm(), row.input_kohm * 1e3, 1000.0);
        close(divider.leg_v(0.0, 3.3), row.range_v[0], 0.1);
        close(divider.leg_v(3.3, 3.3), row.range_v[1], 0.1);
        close(front_end(row.kohm).step_uv(), row.step_mv * 1e3, 100.0);
    }
}

#[test]
fn the_scale_turns_node_voltages_back_into_leg_voltages() {
    for Row { kohm, .. } in TABLE {
        let front_end = front_end(kohm);
        let scale = front_end.leg_scale();
        for code in [0, 1, 121, 1780, 3106, 3991, 4095] {
            let exact = front_end.divider.leg_v(f64::from(code) * 3.3 / 4096.0, 3.3) * 1e6;
            // Rounded: mantissa (half a unit of 2^-17 times 4095: 0.02 µV), product and offset.
            let error = f64::from(scale.microvolts(code)) - exact;
            assert!(error.abs() <= 1.02, "{kohm:?} at {code}: {error} µV");
        }
    }
}

#[test]
fn uncertainties_are_those_of_the_worst_corner() {
    for Row { kohm, .. } in TABLE {
        let nominal = front_end(kohm);
        let scale = nominal.leg_scale();
        let (mut worst_gain, mut worst_offset_uv) = (0.0_f64, 0.0_f64);
        for corner in 0..8 {
            let t = |bit: i32| if corner >> bit & 1 == 1 { 1.001 } else { 0.999 };
            let [input, bias, ground] = kohm;
            let real = front_end([input * t(0), bias * t(1), ground * t(2)]).divider;
            let reading_v =
                |leg_v: f64| nominal.divider.leg_v(real.offset_v(3.3) + leg_v / real.ratio(), 3.3);
            worst_offset_uv = worst_offset_uv.max((reading_v(0.0) * 1e6).abs());
            worst_gain = worst_gain.max(((reading_v(10.0) - reading_v(0.0)) / 10.0 - 1.0).abs());
        }
        // First order in t = 0.1 %: the second order adds a few times t of the result.
        let declared_gain = f64::from(scale.gain_uncertainty_ppm) * 1e-6;
        let declared_uv = f64::from(scale.offset_uncertainty_uv);
        assert!((worst_gain / declared_gain - 1.0).abs() < 4e-3, "{worst_gain} of {declared_gain}");
        assert!((worst_offset_uv / declared_uv - 1.0).abs() < 4e-3, "{worst_offset_uv} of {declared_uv}");
    }
}

#[test]
fn both_legs_of_one_percent_parts_are_as_far_apart_as_the_tolerance_table_says() {
    // The project's tolerance table: 3.64 times the tolerance between two legs, 364 mV of offset at 1 %.
    let scale = FrontEnd { resistor_ppm: 10_000, ..front_end(TABLE[0].kohm) }.leg_scale();
    assert_eq!((2 * scale.gain_uncertainty_ppm + 50) / 100, 364);
    assert_eq!((2 * scale.offset_uncertainty_uv + 500) / 1000, 364);
}

#[test]
fn two_points_take_out_every_error_of_parts_and_reference() {
    let nominal = front_end(TABLE[0].kohm);
    let scale = nominal.leg_scale();
    // A leg of 1 % parts, one way each, on a reference 2 % high.
    let real = Divider { input_ohm: 101e3, bias_ohm: 20.295e3, ground_ohm: 18.887e3 };
    let code = |leg_v: f64| {
        let node_v = real.offset_v(3.366) + leg_v / real.ratio();
        libm::round(node_v / 3.366 * 4096.0) as i32
    };
    let reading_v = |scale: LegScale, leg_v: f64| f64::from(scale.microvolts(code(leg_v))) * 1e-6;
    let points = TwoPoints {
        at_zero_v: reading_v(scale, 0.0),
        at_known_v: reading_v(scale, 9.0),
        known_v: 9.0,
        known_ppm: 500,
        offset_uncertainty_uv: 5_000,
    };
    // A wrong reference alone is worth 2 % of 12 V.
    assert!((reading_v(scale, -12.0) + 12.0).abs() > 0.24, "worth a calibration");
    let trimmed = points.trim(scale);
    for leg_v in [-15.0, -7.0, 0.0, 9.0, 12.0, 19.0] {
        // Each of three codes is off by up to half a step: the point itself, and through both
        // calibration points the line, in proportion to the distance from them.
        let allowed_v = 4.6e-3 * (1.0 + (1.0 - leg_v / 9.0_f64).abs() + (leg_v / 9.0).abs());
        let error_v = reading_v(trimmed, leg_v) - leg_v;
        assert!(error_v.abs() <= allowed_v, "{leg_v} V: {error_v} V");
    }
    let useless = TwoPoints { at_known_v: points.at_zero_v, ..points };
    assert_eq!(useless.trim(scale), scale);
}

#[test]
fn any_values_give_a_scale_the_calibration_takes() {
    for bits in [0, 1, 12, 16, 24, 99] {
        for reference_v in [1e-6, 1.2, 3.3, 1e6] {
            let front_end = FrontEnd { bits, reference_v, ..front_end(TABLE[0].kohm) };
            assert!(crate::calibration::is_valid(&front_end.leg_scale()), "{bits} bits of {reference_v} V");
        }
    }
}
