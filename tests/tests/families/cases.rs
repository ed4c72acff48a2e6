//! Random cases: which sources are there, at which rate they are sampled, and which way.

use super::samples::Traffic;
use super::source::{Coupled, Source};
use super::{Averages, densities, published, samples};
use legwise::spectrum::families::Member;
use legwise_tests::waveforms::dice;
use rand::RngExt;
use rand_chacha::ChaCha8Rng;

/// What a case holds.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Kind {
    Nothing,
    Mains,
    Drive,
    Supply,
    Tone,
    MainsDrive,
    MainsSupply,
    DriveSupply,
    MainsDriveSupply,
    TwoDrives,
    TwoSupplies,
    TwoMains,
    Traffic,
    TrafficMains,
    TrafficDrive,
    TrafficSupply,
    TrafficAll,
    /// A strong disturbance of the differential mode: driven averages without traffic.
    Pushed,
}

/// One case.
#[derive(Clone, Debug)]
pub struct Case {
    pub seed: u64,
    pub rate_hz: f64,
    pub sources: Vec<Coupled>,
    pub traffic: Option<Traffic>,
    pub is_sampled: bool,
}

fn between(dice: &mut ChaCha8Rng, low: f64, high: f64) -> f64 {
    low + (high - low) * dice.random::<f64>()
}

/// Evenly over the logarithm.
fn over_decades(dice: &mut ChaCha8Rng, low: f64, high: f64) -> f64 {
    (between(dice, low.ln(), high.ln())).exp()
}

fn coupled(source: Source, dice: &mut ChaCha8Rng) -> Coupled {
    let conversion = 10_f64.powf(between(dice, -50.0, -15.0) / 20.0);
    Coupled { source, conversion, phase: dice.random() }
}

/// 50 and 60 Hz as networks hold them, now and then anything between; odd harmonics, often even ones.
pub fn mains(dice: &mut ChaCha8Rng) -> Coupled {
    let fundamental_hz = match dice.random_range(0..10) {
        0..4 => between(dice, 49.8, 50.2),
        4..8 => between(dice, 59.8, 60.2),
        _ => between(dice, 49.8, 60.2),
    };
    let level_v = over_decades(dice, 0.01, 2.0);
    let is_half_wave = dice.random_range(0..3) == 0;
    let has_harmonics = dice.random_range(0..8) != 0;
    let mut harmonics_v = vec![level_v];
    for order in 2..=25 {
        // Triplen harmonics are strong in the common mode (reference of disturbances); even ones are those
        // of a half-wave rectified sine, 2/(n² − 1)·2/π of the fundamental's 1/2.
        let n = f64::from(order);
        let share = match order {
            _ if !has_harmonics => 0.0,
            _ if order % 2 == 0 && is_half_wave => 4.0 / std::f64::consts::PI / (n * n - 1.0),
            _ if order % 2 == 0 => 0.0,
            _ if order % 3 == 0 => between(dice, 0.3, 0.9) / n,
            _ => between(dice, 0.05, 0.5) / n,
        };
        harmonics_v.push(share * level_v);
    }
    coupled(Source::Mains { fundamental_hz, harmonics_v }, dice)
}

/// A carrier of 1..16 kHz, half of the time with a speed ramp; the output voltage follows the speed.
pub fn drive(dice: &mut ChaCha8Rng) -> Coupled {
    let carrier_hz = over_decades(dice, 1_000.0, 16_000.0);
    drive_at(carrier_hz, dice)
}

fn drive_at(carrier_hz: f64, dice: &mut ChaCha8Rng) -> Coupled {
    let start_hz = between(dice, 5.0, 55.0);
    let stop_hz = if dice.random() { between(dice, 5.0, 55.0) } else { start_hz };
    let modulation = |output_hz: f64| (0.05 + 0.9 * output_hz / 50.0).min(1.0);
    let level_v = over_decades(dice, 0.01, 1.5);
    let output_hz = (start_hz, stop_hz);
    let modulation = (modulation(start_hz), modulation(stop_hz));
    coupled(Source::Drive { carrier_hz, level_v, output_hz, modulation }, dice)
}

/// 20..150 kHz, with drift and ripple.
pub fn supply(dice: &mut ChaCha8Rng) -> Coupled {
    let fundamental_hz = over_decades(dice, 20_000.0, 150_000.0);
    supply_at(fundamental_hz, dice)
}

fn supply_at(fundamental_hz: f64, dice: &mut ChaCha8Rng) -> Coupled {
    let level_v = over_decades(dice, 0.01, 0.3);
    let mut harmonics_v = vec![level_v];
    for order in 2..=5 {
        harmonics_v.push(level_v * between(dice, 0.1, 0.9) / f64::from(order));
    }
    let is_steady = dice.random_range(0..4) == 0;
    let (drift, ripple) =
        if is_steady { (0.0, 0.0) } else { (between(dice, -0.01, 0.01), between(dice, 0.0, 0.012)) };
    let ripple_hz = if dice.random() { 100.0 } else { 120.0 };
    coupled(Source::Supply { fundamental_hz, harmonics_v, drift, ripple, ripple_hz }, dice)
}

/// A radio line, above half of any rate used here.
pub fn radio(dice: &mut ChaCha8Rng) -> Coupled {
    let frequency_hz = over_decades(dice, 260e3, 4.9e6);
    let level_v = over_decades(dice, 0.1, 1.0);
    coupled(Source::Tone { frequency_hz, level_v }, dice)
}

/// A lone tone: where no drive's carrier is, or so strong that its multiples would show.
fn tone(dice: &mut ChaCha8Rng) -> Coupled {
    let is_low = dice.random();
    let frequency_hz =
        if is_low { between(dice, 430.0, 780.0) } else { over_decades(dice, 1_200.0, 15_000.0) };
    let level_v = over_decades(dice, 0.05, 1.0);
    coupled(Source::Tone { frequency_hz, level_v }, dice)
}

/// 9600 to 250 000 bit/s.
pub fn traffic(dice: &mut ChaCha8Rng) -> Traffic {
    const RATES: [f64; 9] =
        [9_600.0, 19_200.0, 38_400.0, 57_600.0, 76_800.0, 115_200.0, 125e3, 187_500.0, 250e3];
    Traffic {
        bit_rate_hz: RATES[dice.random_range(0..RATES.len())],
        frame_bits: dice.random_range(10..=11),
        load: between(dice, 0.15, 0.95),
        characters: (6, dice.random_range(12..=80)),
        level_v: between(dice, 0.8, 2.5),
        rest_v: between(dice, 0.0, 0.5),
        imbalance: between(dice, -0.03, 0.03),
        step_v: between(dice, 0.0, 0.05),
    }
}

/// The same sources at two rates a few per cent apart.
#[derive(Clone, Debug)]
pub struct Pair {
    pub seed: u64,
    pub rates_hz: [f64; 2],
    /// Sources as they are at each rate: drives and supplies may have moved by themselves in between.
    pub sources: [Vec<Coupled>; 2],
    /// Whether a source of that number moved.
    pub has_moved: Vec<bool>,
}

impl Pair {
    /// The pair of a seed: one to three sources of all kinds.
    pub fn new(seed: u64) -> Self {
        let mut dice = dice(seed);
        let dice = &mut dice;
        let rate_hz = if dice.random() { 200_000.0 } else { 500_000.0 };
        let change = between(dice, 0.015, 0.04) * if dice.random() { 1.0 } else { -1.0 };
        let count = dice.random_range(1..=3);
        let first: Vec<Coupled> = (0..count)
            .map(|_| match dice.random_range(0..5) {
                0 => mains(dice),
                1 | 2 => drive(dice),
                3 => supply(dice),
                _ => radio(dice),
            })
            .collect();
        let (mut second, mut has_moved) = (first.clone(), Vec::new());
        for coupled in &mut second {
            let moves = dice.random::<bool>();
            let by = 1.0 + between(dice, 0.002, 0.02) * if dice.random() { 1.0 } else { -1.0 };
            has_moved.push(match &mut coupled.source {
                Source::Drive { carrier_hz, .. } if moves => {
                    *carrier_hz *= by;
                    true
                }
                Source::Supply { fundamental_hz, .. } if moves => {
                    *fundamental_hz *= by;
                    true
                }
                _ => false,
            });
        }
        Self { seed, rates_hz: [rate_hz, rate_hz * (1.0 + change)], sources: [first, second], has_moved }
    }

    /// What the ladder makes of it at each rate.
    pub fn averages(&self) -> [Averages; 2] {
        [0, 1].map(|place| {
            let mut dice = dice(self.seed ^ (0x5EED + place as u64));
            densities::averages(&self.sources[place], self.rates_hz[place], 12.0, &mut dice)
        })
    }

    /// Whether something below half of both rates stands where a line is, within its uncertainty and a bin, at
    /// both, with a third of its level at least.
    pub fn is_there(&self, line: &Member) -> bool {
        let (points, ..) = published(line.rung);
        let bin_hz = self.rates_hz[0] / 8_f64.powi(line.rung.into()) / points as f64;
        let (frequency_hz, reach_hz) = (line.frequency_hz, line.frequency_uncertainty_hz + bin_hz);
        let rms_v = line.levels.larger_v();
        let below_hz = self.rates_hz[0].min(self.rates_hz[1]) / 2.0;
        let power_v2 = |sources: &[Coupled], share: f64| -> f64 {
            let all = sources.iter().flat_map(|coupled| coupled.source.components(share, 12.0));
            let near = all.filter(|(hz, _)| *hz < below_hz && (hz - frequency_hz).abs() <= reach_hz);
            near.map(|(_, amplitude)| amplitude * amplitude / 2.0).sum()
        };
        self.sources.iter().all(|sources| {
            (0..=40).any(|step| power_v2(sources, f64::from(step) / 40.0).sqrt() >= rms_v / 3.0)
        })
    }
}

fn moved_to(mut coupled: Coupled, to_hz: f64) -> Coupled {
    if let Source::Mains { fundamental_hz, .. } = &mut coupled.source {
        *fundamental_hz = to_hz;
    }
    coupled
}

/// A source of 2 V of which the pair converts a third.
fn pushing(dice: &mut ChaCha8Rng) -> Coupled {
    let mut pushing = if dice.random() { mains(dice) } else { drive(dice) };
    match &mut pushing.source {
        Source::Mains { harmonics_v, .. } => harmonics_v[0] = 2.0,
        Source::Drive { level_v, .. } => *level_v = 2.0,
        _ => {}
    }
    pushing.conversion = 0.3;
    pushing
}

fn sources(kind: Kind, dice: &mut ChaCha8Rng) -> Vec<Coupled> {
    match kind {
        Kind::Nothing | Kind::Traffic => vec![],
        Kind::Mains | Kind::TrafficMains => vec![mains(dice)],
        Kind::Drive | Kind::TrafficDrive => vec![drive(dice)],
        Kind::Supply | Kind::TrafficSupply => vec![supply(dice)],
        Kind::Tone => vec![tone(dice)],
        Kind::MainsDrive => vec![mains(dice), drive(dice)],
        Kind::MainsSupply => vec![mains(dice), supply(dice)],
        Kind::DriveSupply => vec![drive(dice), supply(dice)],
        Kind::MainsDriveSupply | Kind::TrafficAll => vec![mains(dice), drive(dice), supply(dice)],
        Kind::TwoDrives => {
            let carrier_hz = over_decades(dice, 1_000.0, 8_000.0);
            let other_hz = carrier_hz * between(dice, 1.15, 1.85);
            vec![drive_at(carrier_hz, dice), drive_at(other_hz, dice)]
        }
        Kind::TwoSupplies => {
            let fundamental_hz = over_decades(dice, 20_000.0, 75_000.0);
            let other_hz = fundamental_hz * between(dice, 1.15, 1.85);
            vec![supply_at(fundamental_hz, dice), supply_at(other_hz, dice)]
        }
        Kind::TwoMains => {
            let (one, other) = (mains(dice), mains(dice));
            let near = |hz: f64, dice: &mut ChaCha8Rng| hz + between(dice, -0.1, 0.1);
            vec![moved_to(one, near(50.0, dice)), moved_to(other, near(60.0, dice))]
        }
        Kind::Pushed => vec![pushing(dice)],
    }
}

impl Kind {
    fn has_traffic(self) -> bool {
        matches!(
            self,
            Self::Traffic | Self::TrafficMains | Self::TrafficDrive | Self::TrafficSupply | Self::TrafficAll
        )
    }
}

impl Case {
    /// The case of a kind and seed.
    pub fn new(kind: Kind, seed: u64, is_sampled: bool) -> Self {
        let mut dice = dice(seed);
        let rate_hz = if dice.random() { 200_000.0 } else { 500_000.0 };
        let sources = sources(kind, &mut dice);
        let traffic = kind.has_traffic().then(|| traffic(&mut dice));
        Self { seed, rate_hz, sources, traffic, is_sampled }
    }

    /// What the ladder makes of it.
    pub fn averages(&self) -> Averages {
        let mut dice = dice(self.seed ^ 0x5EED);
        if self.is_sampled {
            let seconds = if self.rate_hz > 300e3 { 1.3 } else { 2.2 };
            samples::averages(&self.sources, self.traffic.as_ref(), self.rate_hz, seconds, &mut dice)
        } else {
            densities::averages(&self.sources, self.rate_hz, 12.0, &mut dice)
        }
    }
}
