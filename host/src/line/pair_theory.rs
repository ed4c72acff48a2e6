//! Closed formulas of the trade for a pair: reflection, ground rise, conversion by imbalance, unit load.
//!
//! For those who write scenarios or check a report by hand. The simulated line itself solves its wiring
//! as a network ([`super::network`]); where both can answer, the tests hold them to each other.

/// What a mismatch sends back.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Reflection {
    /// Share of the incident voltage that comes back, −1 (short) to +1 (open).
    pub coefficient: f64,
    /// `−20 log10 |coefficient|`, dB; infinite for a perfect match.
    pub return_loss_db: f64,
}

/// Reflection of `load_ohm` at the end of a line of `line_ohm`: `(ZL − Z0)/(ZL + Z0)`.
pub fn reflection(load_ohm: f64, line_ohm: f64) -> Reflection {
    let coefficient = (load_ohm - line_ohm) / (load_ohm + line_ohm);
    Reflection { coefficient, return_loss_db: -20.0 * coefficient.abs().log10() }
}

/// Ground potential difference along a conductor that carries a current, V.
pub fn ground_rise_v(length_m: f64, ohm_per_m: f64, current_a: f64) -> f64 {
    length_m * ohm_per_m * current_a
}

/// Differential volts per common-mode volt when the legs have series resistances `leg_a_ohm` and
/// `leg_b_ohm` and each is loaded by `load_ohm` to the common: `Zc/(Zc+R1) − Zc/(Zc+R2)`.
pub fn conversion_by_series_resistance(load_ohm: f64, leg_a_ohm: f64, leg_b_ohm: f64) -> f64 {
    load_ohm / (load_ohm + leg_a_ohm) - load_ohm / (load_ohm + leg_b_ohm)
}

/// Longitudinal conversion loss as a voltage ratio, dB: large is good, positive.
pub fn longitudinal_conversion_loss_db(transverse_v: f64, longitudinal_v: f64) -> f64 {
    20.0 * (longitudinal_v / transverse_v).abs().log10()
}

/// The same pair in mixed-mode S parameters, which normalise DM to 2·Z0 and CM to Z0/2, dB.
pub fn mixed_mode_loss_db(voltage_loss_db: f64) -> f64 {
    voltage_loss_db + 20.0 * 2.0_f64.log10()
}

/// Current of one unit load at a terminal voltage, A: 15 kΩ to −3 V flowing in, to +5 V flowing out.
pub fn unit_load_a(terminal_v: f64) -> f64 {
    const OHM: f64 = 15_000.0;
    ((terminal_v + 3.0) / OHM).max(0.0) + ((terminal_v - 5.0) / OHM).min(0.0)
}

#[cfg(test)]
mod tests {
    use super::super::network::{Network, Point};
    use super::*;

    fn near(measured: f64, expected: f64, tolerance: f64) {
        let error = (measured - expected).abs();
        assert!(error <= tolerance, "measured {measured}, expected {expected} ± {tolerance}");
    }

    /// Transmission-line textbook formula; 171.6 Ω into 150 Ω is the PROFIBUS terminator of TI SN75HVD1176.
    #[test]
    fn mismatched_ends_reflect_the_textbook_share() {
        for (load, line, coefficient, loss) in [
            (60.0, 120.0, -0.333_33, 9.542),
            (171.6, 150.0, 0.067_164, 23.457),
            (120.0, 100.0, 0.090_909, 20.828),
            (100.0, 120.0, -0.090_909, 20.828),
        ] {
            near(reflection(load, line).coefficient, coefficient, 1e-5);
            near(reflection(load, line).return_loss_db, loss, 1e-3);
        }
        near(reflection(1e15, 120.0).coefficient, 1.0, 1e-9);
        near(reflection(0.0, 120.0).return_loss_db, 0.0, 1e-9);
    }

    /// 50 m at 5 mΩ/m and 5 A: 1.25 V, worked in *Common-mode voltage for industrial transceivers*.
    #[test]
    fn a_supply_conductor_lifts_its_ground_by_the_worked_example() {
        near(ground_rise_v(50.0, 0.005, 5.0), 1.25, 1e-9);
    }

    /// Voltage dividers (own arithmetic), against the network solved by nodal analysis.
    #[test]
    fn unequal_series_resistances_convert_as_the_network_does() {
        for (load, a, b, ratio, loss_db) in
            [(12e3, 60.0, 70.0, 8.2438e-4, 61.677), (1e6, 1e3, 2e3, 9.9701e-4, 60.026)]
        {
            let formula = conversion_by_series_resistance(load, a, b);
            near(formula, ratio, 1e-8);
            near(longitudinal_conversion_loss_db(formula, 1.0), loss_db, 0.01);

            let mut network = Network::new();
            let (leg_a, leg_b, common) = (network.node(), network.node(), network.emf());
            for (leg, ohm) in [(leg_a, a), (leg_b, b)] {
                network.branch(Point::Reference, leg, ohm, &[common]).unwrap();
                network.resistor(leg, Point::Reference, load).unwrap();
            }
            let volts = network.voltages(&[1.0]).unwrap();
            near(volts[0] - volts[1], formula, 1e-9);
        }
    }

    /// Definitions after ITU-T G.117 (voltage ratio) and the usual mixed-mode normalisation; 3.1623 mV/V
    /// is 10^-2.5.
    #[test]
    fn conversion_loss_is_positive_and_six_decibels_more_in_mixed_mode() {
        for (transverse, loss_db) in [(10e-3, 40.0), (3.1623e-3, 50.0), (1e-3, 60.0)] {
            near(longitudinal_conversion_loss_db(transverse, 1.0), loss_db, 1e-3);
            near(mixed_mode_loss_db(loss_db) - loss_db, 6.0206, 1e-3);
        }
    }

    /// TI, *RS-485 Unit Load*: 15 kΩ to −3 V and to +5 V.
    #[test]
    fn a_unit_load_draws_a_milliampere_at_the_upper_end_of_its_window() {
        near(unit_load_a(12.0), 1.0e-3, 1e-9);
        near(unit_load_a(-7.0), -0.8e-3, 1e-9);
        assert!(unit_load_a(-3.0) <= 0.0 && unit_load_a(5.0) >= 0.0);
    }
}
