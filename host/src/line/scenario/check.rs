//! Field-level checks of a scenario: each error names the key and says what to try.

use super::{DriverKind, Fault, FaultPlace, Node, Scenario, Schedule, Traffic};
use crate::line::error::ScenarioError;
use legwise_protocol::receivers;
use std::collections::BTreeSet;

mod disturbance;
#[cfg(test)]
mod tests;

type Checked = Result<(), ScenarioError>;

/// `low <= value <= high`; refuses NaN.
fn within(key: impl Into<String>, value: f64, low: f64, high: f64) -> Checked {
    if low <= value && value <= high {
        return Ok(());
    }
    Err(ScenarioError::value(key, value, "it is out of range", format!("a value from {low} to {high}")))
}

fn unique<'a>(list: &str, names: impl Iterator<Item = &'a String>) -> Checked {
    let mut seen = BTreeSet::new();
    for (index, name) in names.enumerate() {
        let key = format!("{list}[{index}].name");
        if name.is_empty() {
            return Err(ScenarioError::value(key, "\"\"", "it is empty", "any short name"));
        }
        if !seen.insert(name) {
            return Err(ScenarioError::value(key, quoted(name), "the name is taken", "another name"));
        }
    }
    Ok(())
}

fn quoted(text: &str) -> String {
    format!("\"{text}\"")
}

impl Scenario {
    /// Checks every value.
    ///
    /// # Errors
    /// At the first value that cannot be used; the message names its key and says what to try.
    pub fn check(&self) -> Result<(), ScenarioError> {
        if receivers::by_name(&self.receiver).is_none() {
            let names: Vec<&str> = receivers::TABLE.iter().map(|receiver| receiver.name).collect();
            return Err(ScenarioError::value(
                "receiver",
                quoted(&self.receiver),
                "no receiver has this name",
                format!("one of {}", names.join(", ")),
            ));
        }
        within("sample_rate_hz", self.sample_rate_hz, 1e3, 1e7)?;
        if self.nodes.is_empty() || self.nodes.len() > 64 {
            return Err(ScenarioError::value(
                "nodes",
                self.nodes.len(),
                "unusable number of nodes",
                "1 to 64 nodes",
            ));
        }
        unique("nodes", self.nodes.iter().map(|node| &node.name))?;
        unique("machines", self.machines.iter().map(|machine| &machine.name))?;
        unique("disturbances", self.disturbances.iter().map(|disturbance| &disturbance.name))?;
        for (index, node) in self.nodes.iter().enumerate() {
            check_node(&format!("nodes[{index}]"), node)?;
        }
        for (index, fault) in self.faults.iter().enumerate() {
            self.check_fault(&format!("faults[{index}]"), fault)?;
        }
        for (index, machine) in self.machines.iter().enumerate() {
            check_schedule(&format!("machines[{index}].schedule"), &machine.schedule)?;
        }
        for (index, disturbance) in self.disturbances.iter().enumerate() {
            self.check_disturbance(&format!("disturbances[{index}]"), disturbance)?;
        }
        self.check_traffic()?;
        self.check_monitor()
    }

    fn known_node(&self, key: String, name: &str) -> Result<&Node, ScenarioError> {
        self.nodes.iter().find(|node| node.name == name).ok_or_else(|| {
            let names: Vec<&str> = self.nodes.iter().map(|node| node.name.as_str()).collect();
            ScenarioError::value(
                key,
                quoted(name),
                "no node has this name",
                format!("one of {}", names.join(", ")),
            )
        })
    }

    fn talker(&self, key: String, name: &str, kind: DriverKind) -> Checked {
        match &self.known_node(key.clone(), name)?.driver {
            Some(driver) if driver.kind == kind => Ok(()),
            Some(_) => Err(ScenarioError::value(
                key,
                quoted(name),
                "its driver is of the other kind",
                "driver.kind = \"both\" for uart traffic, \"dominant-only\" for can traffic",
            )),
            None => Err(ScenarioError::value(
                key,
                quoted(name),
                "this node has no driver",
                "adding `driver = {}` to it",
            )),
        }
    }

    fn check_fault(&self, key: &str, fault: &Fault) -> Checked {
        let kind = match fault {
            Fault::Open { .. } => "open",
            Fault::Series { .. } => "series",
            Fault::LegToCommon { .. } => "leg-to-common",
            Fault::LegToSupply { .. } => "leg-to-supply",
            Fault::LegToLeg { .. } => "leg-to-leg",
        };
        let key = format!("{key}.{kind}");
        let (at, ohm) = match fault {
            Fault::Open { at, .. } => (at, None),
            Fault::Series { at, ohm, .. }
            | Fault::LegToCommon { at, ohm, .. }
            | Fault::LegToLeg { at, ohm } => (at, Some(*ohm)),
            Fault::LegToSupply { at, ohm, supply_v, .. } => {
                within(format!("{key}.supply_v"), *supply_v, -60.0, 60.0)?;
                (at, Some(*ohm))
            }
        };
        self.known_node(format!("{key}.at"), at)?;
        if let Fault::Open { place: FaultPlace::Cable, .. } | Fault::Series { place: FaultPlace::Cable, .. } =
            fault
            && self.node_index(at) == Some(0)
        {
            let reason = "there is no cable before the first node";
            return Err(ScenarioError::value(format!("{key}.at"), quoted(at), reason, "the node after it"));
        }
        ohm.map_or(Ok(()), |ohm| within(format!("{key}.ohm"), ohm, 0.001, 1e9))
    }

    fn check_monitor(&self) -> Checked {
        let (front_end, adc) = (&self.monitor.front_end, &self.monitor.adc);
        if let Some(at) = &self.monitor.at {
            self.known_node("monitor.at".into(), at)?;
        }
        within("monitor.front_end.input_ohm", front_end.input_ohm, 1e3, 1e9)?;
        within("monitor.front_end.input_rest_v", front_end.input_rest_v, -60.0, 60.0)?;
        within("monitor.front_end.gain_error_a", front_end.gain_error_a, -0.5, 0.5)?;
        within("monitor.front_end.gain_error_b", front_end.gain_error_b, -0.5, 0.5)?;
        within("monitor.front_end.offset_error_a_v", front_end.offset_error_a_v, -10.0, 10.0)?;
        within("monitor.front_end.offset_error_b_v", front_end.offset_error_b_v, -10.0, 10.0)?;
        within("monitor.front_end.rc_us", front_end.rc_us, 0.0, 1e6)?;
        within("monitor.front_end.rc_mismatch", front_end.rc_mismatch, -1.0, 1.0)?;
        within("monitor.front_end.noise_uv", front_end.noise_uv, 0.0, 1e6)?;
        within("monitor.adc.bits", f64::from(adc.bits), 8.0, 16.0)?;
        within("monitor.adc.low_v", adc.low_v, -900.0, 900.0)?;
        within("monitor.adc.high_v", adc.high_v, -900.0, 900.0)?;
        if adc.high_v - adc.low_v < 0.1 {
            let reason = "it must lie at least 0.1 V above monitor.adc.low_v";
            return Err(ScenarioError::value("monitor.adc.high_v", adc.high_v, reason, "exchanging the two"));
        }
        let period_ns = 1e9 / self.sample_rate_hz;
        if f64::from(adc.skew_ns).abs() >= period_ns {
            let reason = format!("it must be smaller than the sample period of {period_ns} ns");
            return Err(ScenarioError::value("monitor.adc.skew_ns", adc.skew_ns, reason, "a smaller skew"));
        }
        within("monitor.adc.jitter_ns", adc.jitter_ns, 0.0, 0.1 * period_ns)
    }

    fn check_traffic(&self) -> Checked {
        match &self.traffic {
            Traffic::Silent => Ok(()),
            Traffic::Uart { baud, master, polls, stop_bits, stalls, .. } => {
                within("traffic.uart.baud", *baud, 50.0, 10e6)?;
                self.talker("traffic.uart.master".into(), master, DriverKind::Both)?;
                within("traffic.uart.stop_bits", f64::from(*stop_bits), 1.0, 2.0)?;
                self.check_uart_times()?;
                if polls.is_empty() {
                    let remedy = "at least one, or traffic = \"silent\"";
                    return Err(ScenarioError::value("traffic.uart.polls", "[]", "nobody is asked", remedy));
                }
                for (index, poll) in polls.iter().enumerate() {
                    let key = format!("traffic.uart.polls[{index}]");
                    self.talker(format!("{key}.slave"), &poll.slave, DriverKind::Both)?;
                    within(format!("{key}.ask_bytes"), f64::from(poll.ask_bytes), 1.0, 1024.0)?;
                    let [fewest, most] = poll.reply_bytes.map(f64::from);
                    within(format!("{key}.reply_bytes[0]"), fewest, 1.0, 1024.0)?;
                    within(format!("{key}.reply_bytes[1]"), most, fewest, 1024.0)?;
                    within(format!("{key}.turn_round_ms"), poll.turn_round_ms, 0.0, 1e5)?;
                    within(format!("{key}.turn_round_scatter_ms"), poll.turn_round_scatter_ms, 0.0, 1e5)?;
                    within(format!("{key}.answers"), poll.answers, 0.0, 1.0)?;
                }
                stalls.as_ref().map_or(Ok(()), |stalls| check_schedule("traffic.uart.stalls", stalls))
            }
            Traffic::Can { bit_rate_hz, frames } => {
                within("traffic.can.bit_rate_hz", *bit_rate_hz, 1e3, 8e6)?;
                if frames.is_empty() {
                    let remedy = "at least one, or traffic = \"silent\"";
                    return Err(ScenarioError::value("traffic.can.frames", "[]", "nobody sends", remedy));
                }
                for (index, frame) in frames.iter().enumerate() {
                    let key = format!("traffic.can.frames[{index}]");
                    self.talker(format!("{key}.node"), &frame.node, DriverKind::DominantOnly)?;
                    within(format!("{key}.bytes"), f64::from(frame.bytes), 0.0, 8.0)?;
                    within(format!("{key}.every_ms"), frame.every_ms, 0.1, 1e6)?;
                    within(format!("{key}.scatter_ms"), frame.scatter_ms, 0.0, frame.every_ms)?;
                }
                Ok(())
            }
        }
    }

    fn check_uart_times(&self) -> Checked {
        if let Traffic::Uart { pause_ms, pause_scatter_ms, timeout_ms, lead_bits, tail_bits, .. } =
            &self.traffic
        {
            within("traffic.uart.pause_ms", *pause_ms, 0.05, 1e6)?;
            within("traffic.uart.pause_scatter_ms", *pause_scatter_ms, 0.0, 1e6)?;
            within("traffic.uart.timeout_ms", *timeout_ms, 1.0, 1e6)?;
            within("traffic.uart.lead_bits", *lead_bits, 0.0, 100.0)?;
            within("traffic.uart.tail_bits", *tail_bits, 0.0, 100.0)?;
        }
        Ok(())
    }
}

fn check_schedule(key: &str, schedule: &Schedule) -> Checked {
    let of = |name: &str| format!("{key}.{name}");
    within(of("from_s"), schedule.from_s, 0.0, 1e8)?;
    within(of("jitter_s"), schedule.jitter_s, 0.0, 1e8)?;
    within(of("chance"), schedule.chance, 0.01, 1.0)?;
    if let Some(for_s) = schedule.for_s {
        within(of("for_s"), for_s, 1e-6, 1e8)?;
    }
    if let Some(every_s) = schedule.every_s {
        let Some(for_s) = schedule.for_s else {
            let reason = "a schedule that repeats needs a length";
            return Err(ScenarioError::value(of("every_s"), every_s, reason, "adding for_s"));
        };
        let shortest_s = for_s + 2.0 * schedule.jitter_s;
        if !(every_s > shortest_s && every_s <= 1e8) {
            let reason = format!("occurrences would overlap: for_s + 2 jitter_s is {shortest_s}");
            return Err(ScenarioError::value(
                of("every_s"),
                every_s,
                reason,
                "a longer period or less jitter",
            ));
        }
    }
    Ok(())
}

fn check_node(key: &str, node: &Node) -> Checked {
    let of = |name: &str| format!("{key}.{name}");
    within(of("cable_ohm"), node.cable_ohm, 0.0, 1e6)?;
    within(of("ground_v"), node.ground_v, -1000.0, 1000.0)?;
    within(of("ground_ohm"), node.ground_ohm, 0.0, 1e9)?;
    within(of("input_ohm"), node.input_ohm, 10.0, 1e9)?;
    within(of("input_rest_v"), node.input_rest_v, -60.0, 60.0)?;
    if let Some(ohm) = node.terminator_ohm {
        within(of("terminator_ohm"), ohm, 1.0, 1e6)?;
    }
    if let Some(bias) = &node.bias {
        within(of("bias.supply_v"), bias.supply_v, -60.0, 60.0)?;
        within(of("bias.pull_up_ohm"), bias.pull_up_ohm, 10.0, 1e9)?;
        within(of("bias.pull_down_ohm"), bias.pull_down_ohm, 10.0, 1e9)?;
    }
    if let Some(driver) = &node.driver {
        within(of("driver.open_v"), driver.open_v, 0.0, 20.0)?;
        within(of("driver.output_ohm"), driver.output_ohm, 0.1, 1e4)?;
        within(of("driver.offset_v"), driver.offset_v, -20.0, 20.0)?;
        within(of("driver.rise_ns"), driver.rise_ns, 0.1, 1e6)?;
    }
    Ok(())
}
