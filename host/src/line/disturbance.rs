//! What disturbs the pair: from the words of a scenario to waveforms behind the monitor's RC pole.
//!
//! Each kind lives in its own file and writes blocks of its own unit waveform, one leg at a time, at
//! that leg's sampling instants and through that leg's RC pole. A kind that is off for a block says
//! so, and then costs nothing.

mod arc;
mod bridge;
mod envelope;
mod tones;

use super::follower::SHORTEST;
use super::responses::channel_of;
use super::scenario::{Coupling, Harmonic, Scenario, Source};
use super::schedule::{Gate, Occurrences};
use super::{Activity, Wave, responses::Channel};
use arc::Arc;
use bridge::Bridge;
use envelope::{Envelope, Level};
use tones::{SixPulse, Tone, Tones};

/// What a disturbance must know about a leg. Times in samples.
#[derive(Clone, Copy, Debug)]
pub(crate) struct LegClock {
    /// Time constant of the RC pole.
    pub filter_tau: f64,
    /// Sampling delay.
    pub delay: f64,
}

/// Stretch of time to fill, and what goes with it.
#[derive(Clone, Copy)]
pub(crate) struct Block<'a> {
    /// Number of its first sample.
    pub first: u64,
    /// Error of each sampling instant in samples; none when there is no jitter.
    pub jitter: Option<&'a Wave>,
}

/// A disturbance at work.
#[derive(Clone, Debug)]
pub(crate) struct Active {
    name: String,
    occurrences: Occurrences,
    /// Place of its channel among the responses; none when it acts on the pair directly.
    channel: Option<usize>,
    /// Factor for each leg.
    gains: [f32; 2],
    shape: Shape,
}

#[derive(Clone, Debug)]
enum Shape {
    Tones(Tones, [Envelope; 2]),
    SixPulse(SixPulse, [Envelope; 2]),
    Level([Envelope; 2]),
    Bridge(Box<Bridge>),
    Arc(Box<Arc>),
}

impl Active {
    /// Disturbance `index` of a scenario.
    pub fn new(
        scenario: &Scenario,
        index: usize,
        seed: u64,
        legs: [LegClock; 2],
        channels: &[Channel],
    ) -> Option<Self> {
        let disturbance = scenario.disturbances.get(index)?;
        let rate = scenario.sample_rate_hz;
        let machine = disturbance.machine.as_deref().and_then(|name| scenario.machine(name));
        let (schedule, timetable) = match machine {
            Some(machine) => (Some(&machine.schedule), &machine.name),
            None => (disturbance.schedule.as_ref(), &disturbance.name),
        };
        let occurrences = Occurrences::new(schedule, timetable, seed, rate);
        let timing = Timing { occurrences: &occurrences, is_always: schedule.is_none(), rate, legs, seed };
        let (shape, factors) = timing.shape_of(&disturbance.source, &disturbance.name)?;
        let mut gains = coupling_gains(disturbance.coupling.as_ref());
        for (gain, factor) in gains.iter_mut().zip(factors) {
            *gain *= factor as f32;
        }
        let channel =
            channel_of(scenario, index).and_then(|wanted| channels.iter().position(|one| *one == wanted));
        Some(Self { name: disturbance.name.clone(), occurrences, channel, gains, shape })
    }

    /// Prepares everything both legs need before `until` (samples).
    pub fn prepare(&mut self, until: f64) {
        match &mut self.shape {
            Shape::Bridge(bridge) => bridge.prepare(until),
            Shape::Arc(arc) => arc.prepare(until),
            _ => {}
        }
    }

    /// Adds a block of leg A (0) or B (1) to `sum`; `gains` holds the channels' gains at each sample.
    pub fn add(&mut self, leg: usize, block: Block<'_>, scratch: &mut Wave, gains: &[Wave], sum: &mut Wave) {
        let factor = self.gains[leg];
        if factor == 0.0 {
            return;
        }
        if let Shape::Level(envelopes) = &mut self.shape
            && let Level::Constant(value) = envelopes[leg].fill(block.first as f64, scratch)
        {
            if value != 0.0 {
                scratch.fill(value);
                self.accumulate(factor, scratch, gains, sum);
            }
            return;
        }
        let is_on = match &mut self.shape {
            Shape::Tones(tones, envelopes) => tones.fill(leg, block, &mut envelopes[leg], scratch),
            Shape::SixPulse(pulse, envelopes) => pulse.fill(leg, block, &mut envelopes[leg], scratch),
            Shape::Level(_) => true,
            Shape::Bridge(bridge) => bridge.fill(leg, block, scratch),
            Shape::Arc(arc) => arc.fill(leg, block, scratch),
        };
        if is_on {
            self.accumulate(factor, scratch, gains, sum);
        }
    }

    /// Lets a block of a leg pass unheard: what goes on from block to block goes on, waves are not made.
    pub fn pass_over(&mut self, leg: usize, block: Block<'_>, scratch: &mut Wave) {
        match &mut self.shape {
            Shape::Tones(_, envelopes) | Shape::SixPulse(_, envelopes) | Shape::Level(envelopes) => {
                envelopes[leg].fill(block.first as f64, scratch);
            }
            Shape::Bridge(bridge) => {
                bridge.fill(leg, block, scratch);
            }
            Shape::Arc(arc) => {
                arc.fill(leg, block, scratch);
            }
        }
    }

    fn accumulate(&self, factor: f32, wave: &Wave, gains: &[Wave], sum: &mut Wave) {
        match self.channel.and_then(|channel| gains.get(channel)) {
            Some(gains) => {
                for ((sum, value), gain) in sum.iter_mut().zip(wave).zip(gains) {
                    *sum += factor * value * gain;
                }
            }
            None => {
                for (sum, value) in sum.iter_mut().zip(wave) {
                    *sum += factor * value;
                }
            }
        }
    }

    /// When it is on between two instants (seconds).
    pub fn activity(&self, from_s: f64, until_s: f64, rate: f64) -> impl Iterator<Item = Activity> {
        let found = self.occurrences.within(from_s * rate, until_s * rate);
        found.into_iter().map(move |one| Activity {
            name: self.name.clone(),
            from_s: one.from / rate,
            until_s: one.until / rate,
        })
    }
}

/// When something happens, and on which clocks it is seen.
struct Timing<'a> {
    occurrences: &'a Occurrences,
    is_always: bool,
    rate: f64,
    legs: [LegClock; 2],
    seed: u64,
}

impl Timing<'_> {
    fn envelopes(&self, rise_s: f64, decay_s: Option<f64>) -> [Envelope; 2] {
        self.legs.map(|leg| {
            let rise = (rise_s * self.rate).max(leg.filter_tau);
            let decay = decay_s.map(|seconds| seconds * self.rate);
            Envelope::new(Gate::new(self.occurrences.clone()), self.is_always, rise, decay, leg.delay)
        })
    }

    /// A unit waveform, and the volts (or share) of it on leg A and leg B.
    fn shape_of(&self, source: &Source, name: &str) -> Option<(Shape, [f64; 2])> {
        let (rate, legs) = (self.rate, self.legs);
        Some(match source {
            Source::Mains { hz, peak_v, harmonics, rise_s, decay_s } => {
                let tones = Tones::new(tones_of(*hz, harmonics, rate, legs), None);
                (Shape::Tones(tones, self.envelopes(*rise_s, *decay_s)), [*peak_v; 2])
            }
            Source::SwitchingSupply { hz, peak_v, harmonics, drift_hz, drift_period_s, rise_s } => {
                let drift = (*drift_hz > 0.0).then_some((drift_hz / rate, 1.0 / (drift_period_s * rate)));
                let tones = Tones::new(tones_of(*hz, harmonics, rate, legs), drift);
                (Shape::Tones(tones, self.envelopes(*rise_s, None)), [*peak_v; 2])
            }
            Source::SixPulse { hz, phase_peak_v, rise_s } => {
                let pulse = SixPulse::new(hz / rate, legs);
                (Shape::SixPulse(pulse, self.envelopes(*rise_s, None)), [*phase_peak_v; 2])
            }
            Source::Drive { dc_link_v, carrier_hz, output_hz, modulation, edge_us } => {
                let gate = Gate::new(self.occurrences.clone());
                let half = rate / (2.0 * carrier_hz);
                let edge_tau = edge_us * 1e-6 * rate;
                let bridge = Bridge::new(gate, half, output_hz / rate, *modulation, edge_tau, legs);
                (Shape::Bridge(Box::new(bridge)), [*dc_link_v; 2])
            }
            Source::Contactor { peak_v, .. } => {
                let arc = Arc::new(source, self.occurrences.clone(), self.seed, name, rate, legs)?;
                (Shape::Arc(Box::new(arc)), [*peak_v; 2])
            }
            Source::Radio { leg_a_v, leg_b_v, rise_s } => {
                (Shape::Level(self.envelopes(*rise_s, None)), [*leg_a_v, *leg_b_v])
            }
            Source::GroundShift { volts, rise_s } => {
                (Shape::Level(self.envelopes(*rise_s, None)), [*volts; 2])
            }
            Source::SupplyDip { share, rise_s, .. } => {
                (Shape::Level(self.envelopes(*rise_s, None)), [*share; 2])
            }
        })
    }
}

/// Factors of the two legs.
fn coupling_gains(coupling: Option<&Coupling>) -> [f32; 2] {
    match coupling {
        None => [1.0; 2],
        Some(Coupling::Pair { gain, imbalance }) => {
            [(gain * (1.0 + imbalance / 2.0)) as f32, (gain * (1.0 - imbalance / 2.0)) as f32]
        }
        Some(Coupling::Ground { gain, .. } | Coupling::Legs { gain, .. }) => [*gain as f32; 2],
    }
}

/// A fundamental of amplitude 1 and its harmonics.
fn tones_of(hz: f64, harmonics: &[Harmonic], rate: f64, legs: [LegClock; 2]) -> Vec<Tone> {
    let fundamental = Tone::new(hz / rate, 1.0, 1.0, 0.0, legs);
    let others = harmonics.iter().map(|harmonic| {
        let order = f64::from(harmonic.order);
        Tone::new(hz / rate * order, order, harmonic.share, harmonic.phase_deg / 360.0, legs)
    });
    std::iter::once(fundamental).chain(others).collect()
}

/// The RC pole's time constant, never quite zero.
fn filter_tau(leg: LegClock) -> f64 {
    leg.filter_tau.max(SHORTEST)
}
