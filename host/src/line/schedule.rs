//! When something happens: the n-th occurrence of a schedule, computed on demand.
//!
//! Every occurrence is a pure function of the seed, the schedule's name and its number. So any
//! stretch of a night can be asked for without having simulated what went before, and nothing grows
//! with the length of a run.

use super::random::{Dice, stream_of};
use super::scenario::Schedule;

/// A schedule bound to a seed and a sample rate. Instants are in samples from the start.
#[derive(Clone, Debug)]
pub(crate) struct Occurrences {
    from: f64,
    lasts: f64,
    every: Option<f64>,
    scatter: f64,
    chance: f64,
    seed: u64,
    stream: u64,
}

/// One occurrence, in samples from the start; `until` may be infinite.
#[derive(Clone, Copy, Debug, PartialEq)]
pub(crate) struct Occurrence {
    /// When it begins.
    pub from: f64,
    /// When it is over.
    pub until: f64,
}

impl Occurrences {
    /// Binds `schedule` (always on when `None`). Schedules of one `name` coincide.
    pub fn new(schedule: Option<&Schedule>, name: &str, seed: u64, sample_rate_hz: f64) -> Self {
        let always = Schedule::default();
        let schedule = schedule.unwrap_or(&always);
        Self {
            from: schedule.from_s * sample_rate_hz,
            lasts: schedule.for_s.map_or(f64::INFINITY, |seconds| seconds * sample_rate_hz),
            every: schedule.every_s.map(|seconds| seconds * sample_rate_hz),
            scatter: schedule.jitter_s * sample_rate_hz,
            chance: schedule.chance,
            seed,
            stream: stream_of(name),
        }
    }

    /// Occurrence `number`; `None` when there are no more.
    fn numbered(&self, number: u64) -> Option<Option<Occurrence>> {
        let shift = match (number, self.every) {
            (0, _) => 0.0,
            (_, None) => return None,
            (number, Some(every)) => number as f64 * every,
        };
        let mut dice = Dice::new(self.seed ^ number.wrapping_mul(0xa076_1d64_78bd_642f), self.stream);
        let from = (self.from + shift + self.scatter * (2.0 * dice.unit() - 1.0)).max(0.0);
        let happens = dice.unit() < self.chance;
        Some(happens.then_some(Occurrence { from, until: from + self.lasts }))
    }

    /// The first occurrence with a number of at least `*number`; moves `*number` past it.
    pub fn next(&self, number: &mut u64) -> Option<Occurrence> {
        // A chance of 1 % misses a thousand times in a row with probability 4e-5; the search then
        // goes on at the next call, so the bound costs nothing but one idle block.
        for _ in 0..1000 {
            let found = self.numbered(*number)?;
            *number += 1;
            if found.is_some() {
                return found;
            }
        }
        None
    }

    /// All occurrences that touch `from..until` (samples), in order.
    pub fn within(&self, from: f64, until: f64) -> Vec<Occurrence> {
        let mut number = match self.every {
            Some(every) if self.lasts.is_finite() => {
                ((from - self.from - self.lasts - self.scatter) / every).floor().max(0.0) as u64
            }
            _ => 0,
        };
        let mut found = Vec::new();
        while let Some(candidate) = self.numbered(number) {
            number += 1;
            if let Some(occurrence) = candidate
                && occurrence.until > from
                && occurrence.from < until
            {
                found.push(occurrence);
            }
            let earliest = self.from + self.every.unwrap_or(0.0) * number as f64 - self.scatter;
            if earliest >= until {
                break;
            }
        }
        found
    }
}

/// Walks a schedule forward: is it on, and when does that change?
#[derive(Clone, Debug)]
pub(crate) struct Gate {
    occurrences: Occurrences,
    number: u64,
    is_on: bool,
    change_at: f64,
    off_at: f64,
}

impl Gate {
    /// A gate before the first occurrence.
    pub fn new(occurrences: Occurrences) -> Self {
        let mut gate = Self { occurrences, number: 0, is_on: false, change_at: 0.0, off_at: 0.0 };
        gate.seek();
        gate
    }

    /// Whether it is on until the next change.
    pub fn is_on(&self) -> bool {
        self.is_on
    }

    /// Instant of the next change, in samples; infinite when there is none.
    pub fn change_at(&self) -> f64 {
        self.change_at
    }

    /// Steps over the next change.
    pub fn step(&mut self) {
        self.is_on = !self.is_on;
        if self.is_on {
            self.change_at = self.off_at;
        } else {
            self.seek();
        }
    }

    fn seek(&mut self) {
        match self.occurrences.next(&mut self.number) {
            Some(next) => (self.change_at, self.off_at) = (next.from, next.until),
            None => (self.change_at, self.off_at) = (f64::INFINITY, f64::INFINITY),
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn schedule() -> Schedule {
        Schedule { from_s: 3.0, for_s: Some(2.0), every_s: Some(10.0), jitter_s: 3.5, chance: 0.6 }
    }

    #[test]
    fn any_stretch_holds_what_a_walk_from_the_start_meets() {
        let occurrences = Occurrences::new(Some(&schedule()), "press", 11, 1000.0);
        let mut walked = Vec::new();
        let mut gate = Gate::new(occurrences.clone());
        while gate.change_at() < 5e6 {
            let from = gate.change_at();
            gate.step();
            assert!(gate.is_on());
            walked.push(Occurrence { from, until: gate.change_at() });
            gate.step();
        }
        assert!(walked.windows(2).all(|pair| pair[0].until <= pair[1].from));
        // 500 trials at 0.6: mean 300, standard deviation 11; five of them allowed.
        assert!((walked.len() as f64 - 300.0).abs() < 55.0, "{}", walked.len());
        let (from, until) = (1.234e6, 2.345e6);
        let expected: Vec<Occurrence> =
            walked.into_iter().filter(|one| one.until > from && one.from < until).collect();
        assert_eq!(occurrences.within(from, until), expected);
    }

    #[test]
    fn one_name_means_one_timetable_and_another_seed_another() {
        let of = |name: &str, seed| Occurrences::new(Some(&schedule()), name, seed, 1000.0).within(0.0, 1e6);
        assert_eq!(of("press", 1), of("press", 1));
        assert_ne!(of("press", 1), of("press", 2));
        assert_ne!(of("press", 1), of("oven", 1));
    }

    #[test]
    fn without_a_schedule_it_is_always_on() {
        let mut gate = Gate::new(Occurrences::new(None, "hum", 1, 1000.0));
        assert_eq!(gate.change_at(), 0.0);
        gate.step();
        assert!(gate.is_on() && gate.change_at().is_infinite());
    }
}
