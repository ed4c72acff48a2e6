//! Seeded random scenarios with excursions of known place, length and size.

use legwise_firmware::settings;
use legwise_firmware::source::SourceDescription;
use legwise_protocol::limits::{LimitSet, Window};
use legwise_protocol::message::{LegScale, Settings};
use legwise_protocol::receivers::{Receiver, TABLE};
use legwise_tests::boards;
use legwise_tests::waveforms::{Data, dice, noise};
use rand::RngExt;
use rand_chacha::ChaCha8Rng;

/// Pairs per scenario.
pub const PAIRS: usize = 6_000;

/// What pushes the pair outside.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Push {
    /// One leg alone.
    LegA,
    LegB,
    /// Both legs together.
    Common,
}

/// A stretch that was put outside.
#[derive(Clone, Copy, Debug)]
pub struct Injected {
    pub first: usize,
    pub samples: usize,
    pub push: Push,
    pub is_high: bool,
}

/// A waveform with its truth.
pub struct Scenario {
    pub receiver: &'static Receiver,
    pub board: SourceDescription,
    pub settings: Settings,
    /// Truth before the converter, volts.
    pub leg_a_v: Vec<f64>,
    pub leg_b_v: Vec<f64>,
    pub code_a: Vec<i32>,
    pub code_b: Vec<i32>,
    pub injected: Vec<Injected>,
    /// Stretches at the last code that is inside; limits are inclusive.
    pub touching: usize,
    /// Those of them whose code stands for the limit to the microvolt.
    pub touching_exactly: usize,
}

impl Scenario {
    /// The scenario of a seed.
    pub fn new(seed: u64) -> Self {
        let mut dice = dice(seed);
        let judged: Vec<&Receiver> = TABLE.iter().filter(|row| !row.limits().is_empty()).collect();
        let receiver = judged[dice.random_range(..judged.len())];
        let limits = receiver.limits();
        let bounds = Bounds::of(&limits);
        let scale = choose_scale(&mut dice, &bounds);
        let rate_hz = [9_600, 200_000, 500_000][dice.random_range(..3_usize)];
        let mut settings = settings::for_receiver(receiver, rate_hz * 1000);
        settings.reporting.spectrum_segments = 0;
        settings.detection.hold_off_samples = dice.random_range(1..=12);
        settings.detection.hysteresis_uv = dice.random_range(0..(bounds.width() * 4e4) as u32);
        settings.detection.longest_samples = [u32::MAX, 700, 64][dice.random_range(..3_usize)];
        settings.detection.storm_after = u32::MAX;
        assert!(settings::is_valid(&settings));

        let (leg_a_v, leg_b_v) = base(&mut dice, seed, &bounds);
        let mut scenario = Self {
            receiver,
            board: boards::converter_board(rate_hz, scale),
            settings,
            leg_a_v,
            leg_b_v,
            code_a: Vec::new(),
            code_b: Vec::new(),
            injected: Vec::new(),
            touching: 0,
            touching_exactly: 0,
        };
        scenario.inject(&mut dice, &bounds);
        let code = |volts: &f64| boards::code_of(&scale, *volts);
        scenario.code_a = scenario.leg_a_v.iter().map(code).collect();
        scenario.code_b = scenario.leg_b_v.iter().map(code).collect();
        scenario.touch(&mut dice, &bounds);
        scenario
    }

    /// Puts stretches outside: some alone, some in tight rows, many at the edges of blocks.
    fn inject(&mut self, dice: &mut ChaCha8Rng, bounds: &Bounds) {
        let mut at = dice.random_range(20..250);
        while at < PAIRS - 1_600 {
            let row = if dice.random_bool(0.4) { dice.random_range(2..6) } else { 1 };
            for _ in 0..row {
                if at >= PAIRS - 1_600 {
                    break;
                }
                let samples = match dice.random_range(0..6) {
                    0 => 2,
                    1 => 3,
                    2 => dice.random_range(200..900),
                    _ => dice.random_range(2..40),
                };
                self.push_out(dice, bounds, at, samples);
                at += samples;
                let gap = dice.random_range(1..=2 * self.settings.detection.hold_off_samples as usize);
                self.linger(dice, bounds, at, gap);
                at += gap;
            }
            at += dice.random_range(60..500);
            if dice.random_bool(0.5) {
                // Next to an edge of the 256-pair blocks.
                at = at.div_ceil(256) * 256 + dice.random_range(0..4) - 2;
            }
        }
    }

    fn push_out(&mut self, dice: &mut ChaCha8Rng, bounds: &Bounds, first: usize, samples: usize) {
        let is_high = dice.random();
        let push = match dice.random_range(0..3) {
            0 if self.receiver.terminal.is_some() => Push::LegA,
            1 if self.receiver.terminal.is_some() => Push::LegB,
            _ => Push::Common,
        };
        let clear = 2.0 * bounds.step_v(&self.board.legs[0]);
        let reach = bounds.width() * [0.01, 0.1, 0.6][dice.random_range(..3_usize)];
        for n in first..first + samples {
            let beyond = clear + reach * dice.random::<f64>();
            let sign = if is_high { 1.0 } else { -1.0 };
            match push {
                Push::LegA => self.leg_a_v[n] = bounds.terminal(is_high) + sign * beyond,
                Push::LegB => self.leg_b_v[n] = bounds.terminal(is_high) + sign * beyond,
                Push::Common => {
                    // Both legs beyond the wider window, so the average is beyond its own too.
                    let dm = self.leg_a_v[n] - self.leg_b_v[n];
                    let cm = bounds.outer(is_high) + sign * (beyond + dm.abs() / 2.0);
                    (self.leg_a_v[n], self.leg_b_v[n]) = (cm + dm / 2.0, cm - dm / 2.0);
                }
            }
        }
        self.injected.push(Injected { first, samples, push, is_high });
    }

    /// Between two stretches of a row the pair may stay inside by less than the hysteresis.
    fn linger(&mut self, dice: &mut ChaCha8Rng, bounds: &Bounds, first: usize, samples: usize) {
        let Some(last) = self.injected.last().copied() else { return };
        let hysteresis = f64::from(self.settings.detection.hysteresis_uv) * 1e-6;
        let depth = 2.0 * bounds.step_v(&self.board.legs[0]) + hysteresis * dice.random::<f64>();
        if last.push == Push::Common || depth > bounds.width() / 10.0 || dice.random_bool(0.4) {
            return;
        }
        let sign = if last.is_high { -1.0 } else { 1.0 };
        let value = bounds.terminal(last.is_high) + sign * depth;
        let (leg, other) = match last.push {
            Push::LegA => (&mut self.leg_a_v, &self.leg_b_v),
            _ => (&mut self.leg_b_v, &self.leg_a_v),
        };
        let stretch = first..first + samples;
        // Where the window of the average is the narrower one, a leg at its limit may break that.
        if other[stretch.clone()].iter().all(|other| bounds.is_average_inside(value, *other)) {
            leg[stretch].fill(value);
        }
    }

    /// At the quiet end a leg is held at the last code that is still inside.
    fn touch(&mut self, dice: &mut ChaCha8Rng, bounds: &Bounds) {
        if self.receiver.terminal.is_none() {
            return;
        }
        let scale = self.board.legs[0];
        for _ in 0..4 {
            let is_high = dice.random();
            let limit = bounds.terminal(is_high);
            let mut code = boards::code_of(&scale, limit);
            let is_beyond = |code: i32| {
                let microvolts = scale.microvolts(code);
                if is_high {
                    microvolts > boards::microvolts(limit)
                } else {
                    microvolts < boards::microvolts(limit)
                }
            };
            while is_beyond(code) {
                code += if is_high { -1 } else { 1 };
            }
            let first = dice.random_range(PAIRS - 600..PAIRS - 40);
            let stretch = first..first + dice.random_range(1..30);
            let (leg, other) = match dice.random() {
                true => (&mut self.code_a, &self.code_b),
                false => (&mut self.code_b, &self.code_a),
            };
            let others = other[stretch.clone()].iter().map(|&code| f64::from(scale.microvolts(code)) * 1e-6);
            if others.into_iter().all(|other| bounds.is_average_inside(limit, other)) {
                leg[stretch].fill(code);
                self.touching += 1;
                self.touching_exactly += usize::from(scale.microvolts(code) == boards::microvolts(limit));
            }
        }
    }
}

/// The windows as plain volts.
struct Bounds {
    terminal: Option<(f64, f64)>,
    inner: (f64, f64),
    outer: (f64, f64),
}

impl Bounds {
    fn of(limits: &LimitSet) -> Self {
        let volts = |window: Window| (window.low.volts(), window.high.volts());
        let (terminal, average) = (limits.terminal.map(volts), limits.average.map(volts));
        let one = terminal.or(average).unwrap();
        let other = average.or(terminal).unwrap();
        Self {
            terminal,
            inner: (one.0.max(other.0), one.1.min(other.1)),
            outer: (one.0.min(other.0), one.1.max(other.1)),
        }
    }

    /// Width of the narrower window.
    fn width(&self) -> f64 {
        self.inner.1 - self.inner.0
    }

    fn terminal(&self, is_high: bool) -> f64 {
        let (low, high) = self.terminal.unwrap();
        if is_high { high } else { low }
    }

    fn outer(&self, is_high: bool) -> f64 {
        if is_high { self.outer.1 } else { self.outer.0 }
    }

    /// Whether two legs average well inside the narrower window.
    fn is_average_inside(&self, one_v: f64, other_v: f64) -> bool {
        let (average, margin) = ((one_v + other_v) / 2.0, 0.01 * self.width());
        (self.inner.0 + margin..self.inner.1 - margin).contains(&average)
    }

    fn step_v(&self, scale: &LegScale) -> f64 {
        boards::step_v(scale).max(1e-6)
    }
}

/// A converter whose rails lie beyond the windows, though not beyond every excursion.
fn choose_scale(dice: &mut ChaCha8Rng, bounds: &Bounds) -> LegScale {
    if dice.random_bool(0.2) {
        return legwise_firmware::fakes::MICROVOLT_CODES;
    }
    let bits = dice.random_range(12..=16);
    let centre = (bounds.inner.0 + bounds.inner.1) / 2.0;
    let span = 1.25 * (bounds.outer.1 - bounds.outer.0);
    if dice.random_bool(0.5) {
        // A whole number of microvolts per code, and a code exactly on round voltages.
        let step = (span * 1e6 / f64::from(1 << bits) / 50.0).ceil() * 50e-6;
        let half = step * f64::from(1 << (bits - 1));
        let centre = (centre / step).round() * step;
        return boards::converter(bits, 2.0 * half, centre);
    }
    boards::converter(bits, span, centre)
}

/// Traffic, noise and a resting common mode, well inside.
fn base(dice: &mut ChaCha8Rng, seed: u64, bounds: &Bounds) -> (Vec<f64>, Vec<f64>) {
    let half = bounds.width() / 2.0;
    let centre = (bounds.inner.0 + bounds.inner.1) / 2.0;
    let cm = centre + dice.random_range(-0.3..0.3) * half;
    let level = dice.random_range(0.1..0.5) * half;
    let bit = dice.random_range(3.0..60.0);
    let data = Data::new(seed + 1_000_000, PAIRS, bit, 0.5, (level, -level));
    let sigma = dice.random_range(0.0..0.02) * half;
    // Normal noise cut at five sigma: what is outside must be what was put there.
    let noise_a = noise(dice, PAIRS);
    let noise_b = noise(dice, PAIRS);
    let is_idle = |n: usize| (n / 1024) % 3 == 2;
    let dm = |n: usize| if is_idle(n) { 0.05 * level } else { data.at(n as f64) };
    let leg = |noise: &[f64], sign: f64| {
        (0..PAIRS).map(|n| cm + sign * dm(n) / 2.0 + sigma * noise[n].clamp(-5.0, 5.0)).collect()
    };
    (leg(&noise_a, 1.0), leg(&noise_b, -1.0))
}
