//! From the wiring of a scenario to what the monitor's legs do in each bus state.
//!
//! The pair is linear, and between two bus states only the drivers change. So for every state (idle,
//! or one node driving high or low) the network is solved once, and the voltage of a leg is
//!
//! `v(t) = base[state] + sum over channels of gain[state][channel] * x_channel(t)`
//!
//! where a channel is something that varies with time: a node's ground, a node's missing supply, or a
//! voltage injected into the legs through a resistance.

use super::error::ScenarioError;
use super::network::{Emf, Network, NetworkError, Point};
use super::scenario::{Coupling, DriverKind, Fault, FaultLeg, FaultPlace, Node, Scenario, Source};

/// Resistance standing for "no resistance": 1 mOhm.
const WIRE_OHM: f64 = 1e-3;
/// Resistance standing for "open": 1 GOhm.
const OPEN_OHM: f64 = 1e9;
/// A 10 to 90 % rise takes ln 9 time constants of a first-order edge.
const RISE_OVER_TAU: f64 = 2.197_224_577_336_219_4;

/// Number of the state in which nobody drives.
pub(crate) const IDLE: u32 = 0;

/// Number of the state in which `node` drives high (mark, dominant) or low (space).
pub(crate) fn state_of(node: usize, is_high: bool) -> u32 {
    1 + 2 * node as u32 + u32::from(is_high)
}

/// Something that varies with time and acts through the network.
#[derive(Clone, Debug, PartialEq)]
pub(crate) enum Channel {
    /// Ground of a node moves by x volts.
    Ground(usize),
    /// The share x of a node's supply is missing.
    Supply(usize),
    /// Source number n (place among the disturbances) has x volts behind its resistances.
    Legs(usize),
}

/// What one leg does in every state: `[state][0]` volts, then one gain per channel.
pub(crate) type LegStates = Vec<Vec<f64>>;

/// What both legs do in every state.
#[derive(Clone, Debug)]
pub(crate) struct Responses {
    /// Leg A, leg B.
    pub legs: [LegStates; 2],
    /// The channels, in the order of the gains.
    pub channels: Vec<Channel>,
    /// Time constant of the edges towards each state, seconds; `None` keeps the one before.
    pub edges_s: Vec<Option<f64>>,
}

/// What a source in the network stands for.
#[derive(Clone, Debug, Default)]
struct Role {
    volts: f64,
    ground_of: Option<usize>,
    supply_of: Option<usize>,
    legs_of: Option<usize>,
}

impl Responses {
    /// Solves every state of `scenario`.
    pub fn new(scenario: &Scenario) -> Result<Self, ScenarioError> {
        let channels = channels_of(scenario);
        let states = 1 + 2 * scenario.nodes.len();
        let idle = solve_state(scenario, None, &channels)?;
        let mut legs = [vec![idle[0].clone(); states], vec![idle[1].clone(); states]];
        let mut edges_s = vec![None; states];
        for (node, driver) in scenario.nodes.iter().enumerate() {
            let Some(driver) = &driver.driver else { continue };
            for is_high in [false, true] {
                if driver.kind == DriverKind::DominantOnly && !is_high {
                    continue;
                }
                let state = state_of(node, is_high) as usize;
                let [leg_a, leg_b] = solve_state(scenario, Some((node, is_high)), &channels)?;
                legs[0][state] = leg_a;
                legs[1][state] = leg_b;
                edges_s[state] = Some(driver.rise_ns * 1e-9 / RISE_OVER_TAU);
            }
        }
        Ok(Self { legs, channels, edges_s })
    }

    /// DM and CM in volts in `state`, with every channel at zero.
    #[cfg(test)]
    pub fn modes(&self, state: u32) -> (f64, f64) {
        let [a, b] = [0, 1].map(|leg: usize| self.legs[leg][state as usize][0]);
        (a - b, (a + b) / 2.0)
    }
}

/// The channels the disturbances of a scenario need, each once.
fn channels_of(scenario: &Scenario) -> Vec<Channel> {
    let mut channels = Vec::new();
    for index in 0..scenario.disturbances.len() {
        if let Some(channel) = channel_of(scenario, index)
            && !channels.contains(&channel)
        {
            channels.push(channel);
        }
    }
    channels
}

/// The channel disturbance `index` acts on; `None` when it acts on the pair directly.
pub(crate) fn channel_of(scenario: &Scenario, index: usize) -> Option<Channel> {
    let disturbance = scenario.disturbances.get(index)?;
    match (&disturbance.source, &disturbance.coupling) {
        (Source::SupplyDip { node, .. }, _) => scenario.node_index(node).map(Channel::Supply),
        (_, Some(Coupling::Ground { node, .. })) => scenario.node_index(node).map(Channel::Ground),
        (_, Some(Coupling::Legs { .. })) => Some(Channel::Legs(index)),
        _ => None,
    }
}

/// The monitor's legs with `talker` (node, is high) driving: volts, then one gain per channel.
fn solve_state(
    scenario: &Scenario,
    talker: Option<(usize, bool)>,
    channels: &[Channel],
) -> Result<[Vec<f64>; 2], NetworkError> {
    let mut wiring = Wiring { network: Network::new(), roles: Vec::new(), scenario, taps: Vec::new() };
    let monitored = wiring.cable()?;
    for index in 0..scenario.nodes.len() {
        let drives = talker.and_then(|(node, is_high)| (node == index).then_some(is_high));
        wiring.node(index, drives)?;
    }
    wiring.faults()?;
    wiring.monitor(monitored)?;
    let leg = |point: Point| -> Result<Vec<f64>, NetworkError> {
        let gains = wiring.network.gains(point)?;
        let weighted = |weight: &dyn Fn(&Role) -> f64| -> f64 {
            gains.iter().zip(&wiring.roles).map(|(gain, role)| gain * weight(role)).sum()
        };
        let mut row = vec![weighted(&|role| role.volts)];
        row.extend(channels.iter().map(|channel| match channel {
            Channel::Ground(node) => weighted(&|role| f64::from(role.ground_of == Some(*node))),
            Channel::Supply(node) => weighted(&|role| {
                if role.supply_of == Some(*node) { -role.volts } else { 0.0 }
            }),
            Channel::Legs(index) => weighted(&|role| f64::from(role.legs_of == Some(*index))),
        }));
        Ok(row)
    };
    Ok([leg(monitored[0])?, leg(monitored[1])?])
}

/// A network being built from a scenario.
struct Wiring<'a> {
    network: Network,
    roles: Vec<Role>,
    scenario: &'a Scenario,
    /// Per node: its common, the sources of that common, its leg A, its leg B.
    taps: Vec<Tap>,
}

#[derive(Clone, Debug)]
struct Tap {
    common: Point,
    /// Sources between the reference and an ideal common, to be put in series with every branch.
    ground: Vec<Emf>,
    legs: [Point; 2],
    cable: [Point; 2],
}

impl Wiring<'_> {
    fn source(&mut self, role: Role) -> Emf {
        self.roles.push(role);
        self.network.emf()
    }

    /// Lays cable and taps; answers the two points the monitor sees.
    fn cable(&mut self) -> Result<[Point; 2], NetworkError> {
        let scenario = self.scenario;
        for (index, node) in scenario.nodes.iter().enumerate() {
            let cable = [self.network.node(), self.network.node()];
            let mut legs = cable;
            for leg in [0, 1] {
                if let Some(before) = self.taps.last() {
                    let before = before.cable[leg];
                    let fault_ohm = self.series_ohm(&node.name, leg, FaultPlace::Cable);
                    self.network.resistor(before, cable[leg], node.cable_ohm + fault_ohm + WIRE_OHM)?;
                }
                let tap_ohm = self.series_ohm(&node.name, leg, FaultPlace::Tap);
                if tap_ohm > 0.0 {
                    legs[leg] = self.network.node();
                    self.network.resistor(cable[leg], legs[leg], tap_ohm)?;
                }
            }
            let ground =
                self.source(Role { volts: node.ground_v, ground_of: Some(index), ..Role::default() });
            let (common, ground) = if node.ground_ohm > 0.0 {
                let common = self.network.node();
                self.network.branch(Point::Reference, common, node.ground_ohm, &[ground])?;
                (common, Vec::new())
            } else {
                (Point::Reference, vec![ground])
            };
            self.taps.push(Tap { common, ground, legs, cable });
        }
        let monitored = self.taps.get(scenario.monitor_index()).map(|tap| tap.cable);
        Ok(monitored.unwrap_or([Point::Reference; 2]))
    }

    fn series_ohm(&self, node: &str, wanted: usize, wanted_place: FaultPlace) -> f64 {
        let ohm_of = |fault: &Fault| match fault {
            Fault::Open { at, leg, place } if at == node => Some((*leg, *place, OPEN_OHM)),
            Fault::Series { at, leg, place, ohm } if at == node => Some((*leg, *place, *ohm)),
            _ => None,
        };
        let faults = self.scenario.faults.iter().filter_map(ohm_of);
        faults
            .filter(|(leg, place, _)| leg_index(*leg) == wanted && *place == wanted_place)
            .map(|(_, _, ohm)| ohm)
            .sum()
    }

    /// Joins a leg of a node to the node's common through `ohm` and a source.
    fn tie(&mut self, index: usize, point: Point, ohm: f64, role: Role) -> Result<(), NetworkError> {
        let Tap { common, mut ground, .. } = self.taps[index].clone();
        ground.push(self.source(role));
        self.network.branch(common, point, ohm, &ground)
    }

    fn node(&mut self, index: usize, drives: Option<bool>) -> Result<(), NetworkError> {
        let node: &Node = &self.scenario.nodes[index];
        let legs = self.taps[index].legs;
        let supplied = |volts: f64| Role { volts, supply_of: Some(index), ..Role::default() };
        for leg in legs {
            self.tie(index, leg, node.input_ohm, supplied(node.input_rest_v))?;
        }
        if let Some(ohm) = node.terminator_ohm {
            self.network.resistor(legs[0], legs[1], ohm)?;
        }
        if let Some(bias) = &node.bias {
            let [up, down] = if bias.reversed { [legs[1], legs[0]] } else { legs };
            self.tie(index, up, bias.pull_up_ohm, supplied(bias.supply_v))?;
            self.tie(index, down, bias.pull_down_ohm, supplied(0.0))?;
        }
        if let (Some(driver), Some(is_high)) = (&node.driver, drives) {
            let sign = if is_high != driver.swapped { 0.5 } else { -0.5 };
            for (leg, sign) in legs.into_iter().zip([sign, -sign]) {
                let role = supplied(driver.offset_v + sign * driver.open_v);
                self.tie(index, leg, driver.output_ohm / 2.0, role)?;
            }
        }
        Ok(())
    }

    fn faults(&mut self) -> Result<(), NetworkError> {
        for fault in &self.scenario.faults {
            let (at, leg, ohm, volts) = match fault {
                Fault::Open { .. } | Fault::Series { .. } => continue,
                Fault::LegToCommon { at, leg, ohm } => (at, Some(*leg), *ohm, 0.0),
                Fault::LegToSupply { at, leg, ohm, supply_v } => (at, Some(*leg), *ohm, *supply_v),
                Fault::LegToLeg { at, ohm } => (at, None, *ohm, 0.0),
            };
            let index = self.scenario.node_index(at).unwrap_or(0);
            let cable = self.taps[index].cable;
            match leg {
                None => self.network.resistor(cable[0], cable[1], ohm)?,
                Some(leg) => {
                    let role = Role { volts, ..Role::default() };
                    self.tie(index, cable[leg_index(leg)], ohm, role)?;
                }
            }
        }
        Ok(())
    }

    /// The monitor's own inputs, and sources that couple through resistances.
    fn monitor(&mut self, monitored: [Point; 2]) -> Result<(), NetworkError> {
        let scenario = self.scenario;
        let front_end = &scenario.monitor.front_end;
        for point in monitored {
            let rest = self.source(Role { volts: front_end.input_rest_v, ..Role::default() });
            self.network.branch(Point::Reference, point, front_end.input_ohm, &[rest])?;
        }
        for (index, disturbance) in scenario.disturbances.iter().enumerate() {
            if let Some(Coupling::Legs { node, source_ohm, imbalance, .. }) = &disturbance.coupling {
                let cable = self.taps[scenario.node_index(node).unwrap_or(0)].cable;
                for (point, sign) in cable.into_iter().zip([0.5, -0.5]) {
                    let emf = self.source(Role { legs_of: Some(index), ..Role::default() });
                    self.network.branch(
                        Point::Reference,
                        point,
                        source_ohm / (1.0 + sign * imbalance),
                        &[emf],
                    )?;
                }
            }
        }
        Ok(())
    }
}

fn leg_index(leg: FaultLeg) -> usize {
    match leg {
        FaultLeg::A => 0,
        FaultLeg::B => 1,
    }
}

#[cfg(test)]
mod tests;
