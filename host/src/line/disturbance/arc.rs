//! A contactor that opens: trains of damped, ringing pulses.
//!
//! While the gap is small it breaks down often and at little voltage, while it is wide rarely and at
//! much: within a train the height grows and the distance of pulses stretches geometrically. Figures
//! for showering arcs (megahertz falling to tens of kilohertz, 1 to 10 ms, bounce 0.1 to 5 ms) are
//! from memory. A pulse is `Re exp(s t)` with `s = -1/decay + j w`; behind the RC pole of time
//! constant T, with `h = 1/(1 + s T)`, a stretch d advances it exactly by
//!
//! ```text
//! filter(t+d) = filter e + Re[ z h (exp(s d) - e) ]     e = exp(-d/T),   z(t+d) = z exp(s d)
//! ```

use super::{Block, LegClock, filter_tau};
use crate::line::random::{Dice, stream_of};
use crate::line::scenario::Source;
use crate::line::schedule::{Occurrence, Occurrences};
use crate::line::{BLOCK, Wave};
use std::f64::consts::TAU;

/// Pulses below this share of the peak are over.
const OVER: f64 = 1e-7;

/// A breakdown of the gap.
#[derive(Clone, Copy, Debug, PartialEq)]
struct Pulse {
    at: f64,
    height: f64,
}

/// The contactor and both legs that see it, in units of its peak.
#[derive(Clone, Debug)]
pub(crate) struct Arc {
    trains: Trains,
    pulses: Vec<Pulse>,
    read: [usize; 2],
    legs: [Ringing; 2],
}

/// Makes the pulses, train by train. Times in samples.
#[derive(Clone, Debug)]
struct Trains {
    occurrences: Occurrences,
    number: u64,
    opening: Option<Occurrence>,
    train: u16,
    trains: u16,
    length: f64,
    bounce: f64,
    first_gap: f64,
    last_gap: f64,
    dice: Dice,
    free_at: f64,
}

impl Arc {
    /// The contactor a scenario describes; `None` for another source.
    pub fn new(
        source: &Source,
        occurrences: Occurrences,
        seed: u64,
        name: &str,
        rate: f64,
        legs: [LegClock; 2],
    ) -> Option<Self> {
        let Source::Contactor {
            trains,
            train_ms,
            bounce_ms,
            first_gap_us,
            last_gap_us,
            ring_hz,
            decay_us,
            ..
        } = source
        else {
            return None;
        };
        let mut number = 0;
        let opening = occurrences.next(&mut number);
        Some(Self {
            trains: Trains {
                occurrences,
                number,
                opening,
                train: 0,
                trains: *trains,
                length: train_ms * 1e-3 * rate,
                bounce: bounce_ms * 1e-3 * rate,
                first_gap: first_gap_us * 1e-6 * rate,
                last_gap: last_gap_us * 1e-6 * rate,
                dice: Dice::new(seed, stream_of(name)),
                free_at: 0.0,
            },
            pulses: Vec::new(),
            read: [0; 2],
            legs: legs.map(|leg| Ringing::new(leg, TAU * ring_hz / rate, decay_us * 1e-6 * rate)),
        })
    }

    /// Makes all pulses before `until`.
    pub fn prepare(&mut self, until: f64) {
        let used = self.read[0].min(self.read[1]);
        if used == self.pulses.len() {
            self.pulses.clear();
            self.read = self.read.map(|read| read - used);
        }
        self.trains.extend(until, &mut self.pulses);
    }

    /// Writes one block for a leg; `false` when nothing happens in it.
    pub fn fill(&mut self, leg: usize, block: Block<'_>, wave: &mut Wave) -> bool {
        self.legs[leg].fill(block, &self.pulses, &mut self.read[leg], wave)
    }
}

impl Trains {
    fn extend(&mut self, until: f64, pulses: &mut Vec<Pulse>) {
        while let Some(opening) = self.opening {
            let wait = f64::from(self.train) * self.bounce;
            let start = (opening.from + wait).max(self.free_at);
            if start >= until {
                return;
            }
            let start = start + 0.3 * (self.bounce - self.length) * self.dice.unit();
            let sign = if self.dice.unit() < 0.5 { -1.0 } else { 1.0 };
            let mut elapsed = 0.0;
            while elapsed < self.length {
                let opened = elapsed / self.length;
                let height = sign * (0.25 + 0.75 * opened) * (0.7 + 0.3 * self.dice.unit());
                pulses.push(Pulse { at: start + elapsed, height });
                let gap = self.first_gap * (self.last_gap / self.first_gap).powf(opened);
                elapsed += gap * (0.8 + 0.4 * self.dice.unit());
            }
            self.free_at = start + self.length;
            self.train += 1;
            if self.train == self.trains {
                self.train = 0;
                self.opening = self.occurrences.next(&mut self.number);
            }
        }
    }
}

/// Sum of all pulses as one leg sees them.
#[derive(Clone, Debug)]
struct Ringing {
    delay: f64,
    filter_tau: f64,
    turn: f64,
    decay: f64,
    /// Real and imaginary part of `h`.
    h: (f64, f64),
    z: (f64, f64),
    filter: f64,
    position: f64,
    whole: Advance,
}

#[derive(Clone, Copy, Debug)]
struct Advance {
    ring: (f64, f64),
    filter: f64,
}

impl Ringing {
    fn new(leg: LegClock, turn: f64, decay: f64) -> Self {
        let mut tau = filter_tau(leg);
        if turn == 0.0 && (tau - decay).abs() < 1e-4 * decay {
            tau *= 1.0002;
        }
        let (re, im) = (1.0 - tau / decay, turn * tau);
        let norm = re * re + im * im;
        let mut ringing = Self {
            delay: leg.delay,
            filter_tau: tau,
            turn,
            decay,
            h: (re / norm, -im / norm),
            z: (0.0, 0.0),
            filter: 0.0,
            position: -1.0,
            whole: Advance { ring: (1.0, 0.0), filter: 1.0 },
        };
        ringing.whole = ringing.over(1.0);
        ringing
    }

    fn over(&self, samples: f64) -> Advance {
        let fade = (-samples / self.decay).exp();
        let (sin, cos) = (self.turn * samples).sin_cos();
        Advance { ring: (fade * cos, fade * sin), filter: (-samples / self.filter_tau).exp() }
    }

    fn advance(&mut self, by: Advance) {
        let scaled = product(self.z, self.h);
        self.filter = self.filter * by.filter + product(scaled, (by.ring.0 - by.filter, by.ring.1)).0;
        self.z = product(self.z, by.ring);
    }

    fn fill(&mut self, block: Block<'_>, pulses: &[Pulse], read: &mut usize, wave: &mut Wave) -> bool {
        let first = block.first as f64;
        let due = |read: usize, delay: f64| {
            pulses.get(read).map_or(f64::INFINITY, |pulse| pulse.at - first - delay)
        };
        let is_quiet = self.z.0.abs() + self.z.1.abs() + self.filter.abs() < OVER;
        if is_quiet && due(*read, self.delay) > (BLOCK - 1) as f64 {
            (self.z, self.filter, self.position) = ((0.0, 0.0), 0.0, -1.0);
            return false;
        }
        for (sample, value) in wave.iter_mut().enumerate() {
            let now = sample as f64;
            while due(*read, self.delay) <= now {
                let at = due(*read, self.delay).max(self.position);
                let step = self.over(at - self.position);
                self.advance(step);
                self.position = at;
                self.z.0 += pulses.get(*read).map_or(0.0, |pulse| pulse.height);
                *read += 1;
            }
            let elapsed = now - self.position;
            let step = if elapsed == 1.0 { self.whole } else { self.over(elapsed) };
            self.advance(step);
            self.position = now;
            let slope = block
                .jitter
                .map_or(0.0, |jitter| f64::from(jitter[sample]) * (self.z.0 - self.filter) / self.filter_tau);
            *value = (self.filter + slope) as f32;
        }
        self.position -= BLOCK as f64;
        true
    }
}

fn product(one: (f64, f64), other: (f64, f64)) -> (f64, f64) {
    (one.0 * other.0 - one.1 * other.1, one.0 * other.1 + one.1 * other.0)
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::line::scenario::Schedule;

    /// Reference: midpoint integration of `filter' = (pulse - filter)/T` with 2000 steps per sample.
    #[test]
    fn damped_pulses_behind_a_pole_match_a_numerical_integration() {
        let (turn, decay, tau, delay) = (TAU * 0.31, 1.6, 0.45, 0.3);
        let pulses = [(5.21, 1.0), (5.9, -0.4), (17.0, 0.7)].map(|(at, height)| Pulse { at, height });
        let mut ringing = Ringing::new(LegClock { filter_tau: tau, delay }, turn, decay);
        let mut wave = [0.0; BLOCK];
        assert!(ringing.fill(Block { first: 0, jitter: None }, &pulses, &mut 0, &mut wave));
        let pulse_sum = |t: f64| -> f64 {
            let one = |pulse: &Pulse| {
                let age = t - pulse.at;
                if age < 0.0 { 0.0 } else { pulse.height * (-age / decay).exp() * (turn * age).cos() }
            };
            pulses.iter().map(one).sum()
        };
        let (mut filter, mut worst, step) = (0.0, 0.0_f64, 1.0 / 2000.0);
        let mut index = 0;
        for tick in 0..40 * 2000 {
            let t = f64::from(tick) * step;
            if (t - (f64::from(index) + delay)).abs() < step / 2.0 && index < 40 {
                worst = worst.max((f64::from(wave[index as usize]) - filter).abs());
                index += 1;
            }
            let half = filter + step / 2.0 * (pulse_sum(t) - filter) / tau;
            filter += step * (pulse_sum(t + step / 2.0) - half) / tau;
        }
        println!("worst {worst:.2e} of the peak");
        // The jump of a pulse may fall anywhere in an integration step: 1/2000 sample over tau.
        assert!(worst < 1.5 * step / tau);
        assert!(wave.iter().any(|value| value.abs() > 0.2));
    }

    #[test]
    fn trains_grow_in_height_and_thin_out() {
        let schedule = Schedule { from_s: 0.5, for_s: Some(0.02), every_s: Some(1.0), ..Schedule::default() };
        let source = Source::Contactor {
            peak_v: 10.0,
            trains: 3,
            train_ms: 2.0,
            bounce_ms: 4.0,
            first_gap_us: 5.0,
            last_gap_us: 100.0,
            ring_hz: 150e3,
            decay_us: 8.0,
        };
        let rate = 200e3;
        let occurrences = Occurrences::new(Some(&schedule), "x", 3, rate);
        let legs = [LegClock { filter_tau: 0.3, delay: 0.0 }; 2];
        let mut arc = Arc::new(&source, occurrences, 3, "x", rate, legs).unwrap();
        arc.trains.extend(10.0 * rate, &mut arc.pulses);
        assert!(arc.pulses.windows(2).all(|pair| pair[0].at <= pair[1].at));
        let starts: Vec<usize> = std::iter::once(0)
            .chain((1..arc.pulses.len()).filter(|&n| arc.pulses[n].at - arc.pulses[n - 1].at > 0.001 * rate))
            .collect();
        assert_eq!(starts.len(), 30, "ten openings of three trains");
        for (place, &start) in starts.iter().enumerate() {
            let end = starts.get(place + 1).copied().unwrap_or(arc.pulses.len());
            let train = &arc.pulses[start..end];
            let third = train.len() / 3;
            let mean =
                |part: &[Pulse]| part.iter().map(|pulse| pulse.height.abs()).sum::<f64>() / part.len() as f64;
            assert!(mean(&train[2 * third..]) > 1.3 * mean(&train[..third]));
            assert!(train.iter().all(|pulse| pulse.height.abs() <= 1.0));
            let (early, late) =
                (train[1].at - train[0].at, train[train.len() - 1].at - train[train.len() - 2].at);
            assert!(late > 8.0 * early);
        }
    }
}
