//! Checks of disturbances: coupling, source, timetable.

use super::{Checked, check_schedule, quoted, within};
use crate::line::error::ScenarioError;
use crate::line::scenario::{Coupling, Disturbance, Harmonic, Scenario, Source};

impl Scenario {
    pub(super) fn check_disturbance(&self, key: &str, disturbance: &Disturbance) -> Checked {
        if let Some(name) = &disturbance.machine {
            if disturbance.schedule.is_some() {
                let reason = "a disturbance that follows a machine has no schedule of its own";
                return Err(ScenarioError::value(
                    format!("{key}.schedule"),
                    "{..}",
                    reason,
                    "removing one of the two",
                ));
            }
            if self.machine(name).is_none() {
                let remedy = "adding it under [[machines]]";
                return Err(ScenarioError::value(
                    format!("{key}.machine"),
                    quoted(name),
                    "no machine has this name",
                    remedy,
                ));
            }
        }
        if let Some(schedule) = &disturbance.schedule {
            check_schedule(&format!("{key}.schedule"), schedule)?;
        }
        self.check_coupling(&format!("{key}.coupling"), disturbance)?;
        self.check_source(&format!("{key}.source"), &disturbance.source)
    }

    fn check_coupling(&self, key: &str, disturbance: &Disturbance) -> Checked {
        if disturbance.coupling.is_some()
            && matches!(disturbance.source, Source::Radio { .. } | Source::SupplyDip { .. })
        {
            let reason = "a radio or supply-dip source says itself where it acts";
            return Err(ScenarioError::value(key, "{..}", reason, "removing the coupling"));
        }
        match &disturbance.coupling {
            None => Ok(()),
            Some(Coupling::Pair { gain, imbalance }) => {
                let key = format!("{key}.pair");
                within(format!("{key}.gain"), *gain, -100.0, 100.0)?;
                within(format!("{key}.imbalance"), *imbalance, -2.0, 2.0)
            }
            Some(Coupling::Ground { node, gain }) => {
                let key = format!("{key}.ground");
                within(format!("{key}.gain"), *gain, -100.0, 100.0)?;
                self.known_node(format!("{key}.node"), node).map(|_| ())
            }
            Some(Coupling::Legs { node, gain, source_ohm, imbalance }) => {
                let key = format!("{key}.legs");
                within(format!("{key}.gain"), *gain, -100.0, 100.0)?;
                within(format!("{key}.source_ohm"), *source_ohm, 1.0, 1e9)?;
                within(format!("{key}.imbalance"), *imbalance, -1.9, 1.9)?;
                self.known_node(format!("{key}.node"), node).map(|_| ())
            }
        }
    }

    fn check_source(&self, key: &str, source: &Source) -> Checked {
        let key = &format!("{key}.{}", kind_of(source));
        let of = |name: &str| format!("{key}.{name}");
        match source {
            Source::Mains { hz, peak_v, harmonics, rise_s, decay_s } => {
                within(of("hz"), *hz, 1.0, 1000.0)?;
                within(of("peak_v"), *peak_v, -1000.0, 1000.0)?;
                check_harmonics(key, harmonics)?;
                within(of("rise_s"), *rise_s, 0.0, 1e4)?;
                decay_s.map_or(Ok(()), |decay_s| within(of("decay_s"), decay_s, 1e-3, 1e5))
            }
            Source::SixPulse { hz, phase_peak_v, rise_s } => {
                within(of("hz"), *hz, 1.0, 1000.0)?;
                within(of("phase_peak_v"), *phase_peak_v, -1000.0, 1000.0)?;
                within(of("rise_s"), *rise_s, 0.0, 1e4)
            }
            Source::Drive { dc_link_v, carrier_hz, output_hz, modulation, edge_us } => {
                within(of("dc_link_v"), *dc_link_v, 0.0, 2000.0)?;
                within(of("carrier_hz"), *carrier_hz, 100.0, 100e3)?;
                within(of("output_hz"), *output_hz, 0.1, carrier_hz / 10.0)?;
                within(of("modulation"), *modulation, 0.0, 0.99)?;
                within(of("edge_us"), *edge_us, 0.0, 1000.0)
            }
            Source::SwitchingSupply { hz, peak_v, harmonics, drift_hz, drift_period_s, rise_s } => {
                within(of("hz"), *hz, 100.0, 10e6)?;
                within(of("peak_v"), *peak_v, -1000.0, 1000.0)?;
                check_harmonics(key, harmonics)?;
                within(of("drift_hz"), *drift_hz, 0.0, 0.2 * hz)?;
                within(of("drift_period_s"), *drift_period_s, 1.0, 1e5)?;
                within(of("rise_s"), *rise_s, 0.0, 1e4)
            }
            Source::Contactor { .. } => check_contactor(key, source),
            Source::Radio { leg_a_v, leg_b_v, rise_s } => {
                within(of("leg_a_v"), *leg_a_v, -100.0, 100.0)?;
                within(of("leg_b_v"), *leg_b_v, -100.0, 100.0)?;
                within(of("rise_s"), *rise_s, 0.0, 1e4)
            }
            Source::GroundShift { volts, rise_s } => {
                within(of("volts"), *volts, -1000.0, 1000.0)?;
                within(of("rise_s"), *rise_s, 0.0, 1e4)
            }
            Source::SupplyDip { node, share, rise_s } => {
                self.known_node(of("node"), node)?;
                within(of("share"), *share, 0.0, 1.0)?;
                within(of("rise_s"), *rise_s, 0.0, 1e4)
            }
        }
    }
}

/// The key a source goes by.
fn kind_of(source: &Source) -> &'static str {
    match source {
        Source::Mains { .. } => "mains",
        Source::SixPulse { .. } => "six-pulse",
        Source::Drive { .. } => "drive",
        Source::SwitchingSupply { .. } => "switching-supply",
        Source::Contactor { .. } => "contactor",
        Source::Radio { .. } => "radio",
        Source::GroundShift { .. } => "ground-shift",
        Source::SupplyDip { .. } => "supply-dip",
    }
}

fn check_contactor(key: &str, source: &Source) -> Checked {
    let of = |name: &str| format!("{key}.{name}");
    if let Source::Contactor {
        peak_v,
        trains,
        train_ms,
        bounce_ms,
        first_gap_us,
        last_gap_us,
        ring_hz,
        decay_us,
    } = source
    {
        within(of("peak_v"), *peak_v, -1000.0, 1000.0)?;
        within(of("trains"), f64::from(*trains), 1.0, 100.0)?;
        within(of("train_ms"), *train_ms, 0.01, 100.0)?;
        within(of("bounce_ms"), *bounce_ms, *train_ms, 1000.0)?;
        within(of("first_gap_us"), *first_gap_us, 0.5, 1e4)?;
        within(of("last_gap_us"), *last_gap_us, *first_gap_us, 1e4)?;
        within(of("ring_hz"), *ring_hz, 0.0, 1e8)?;
        within(of("decay_us"), *decay_us, 0.01, 1e4)?;
    }
    Ok(())
}

fn check_harmonics(key: &str, harmonics: &[Harmonic]) -> Checked {
    for (index, harmonic) in harmonics.iter().enumerate() {
        let key = format!("{key}.harmonics[{index}]");
        within(format!("{key}.order"), f64::from(harmonic.order), 2.0, 1000.0)?;
        within(format!("{key}.share"), harmonic.share, -10.0, 10.0)?;
        within(format!("{key}.phase_deg"), harmonic.phase_deg, -360.0, 360.0)?;
    }
    Ok(())
}
