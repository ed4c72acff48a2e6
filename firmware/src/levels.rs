//! Signal levels: where the differential mode rests, and where it is driven to.
//!
//! A bus has three states, not two: driven high, driven low, and resting at its bias level between
//! messages. Levels are modes of a fixed-range histogram (after the histogram method of IEEE Std 181,
//! with the resting state kept apart), refined by the mean of the three bins around the mode. Means of
//! whole classes are pulled tens of millivolts by edge samples; modes are not.
//!
//! Each bin holds a count and the sum of its samples' offsets within the bin (in steps of 32 µV), so
//! a refined level is good to 32 µV however coarse the bins. The common mode is summed per state over
//! *settled* samples: those whose predecessor was in the same state.

use crate::block::Block;
use crate::interval::Interval;
use legwise_protocol::message::{Level, Levels, Plateau};

const BINS: usize = 512;
/// Bin width as a power of two: 32.768 mV, ±8.39 V in all.
const BIN_SHIFT: u32 = 15;
/// Steps of the offset within a bin: 2^5 µV.
const OFFSET_SHIFT: u32 = 5;
/// Range of the histogram; what lies beyond counts in the outermost bins.
const RANGE_UV: i32 = (BINS as i32 / 2) << BIN_SHIFT;
const OFFSET_MASK: i32 = (1 << BIN_SHIFT) - 1;
/// Bins either side of the mode that belong to a level.
const AROUND: usize = 1;
/// Bins either side of the resting level that its noise may reach: 0.1 V.
const SKIRT: usize = 3 * AROUND;
/// Two levels are told apart from 0.4 V on.
const APART_BINS: usize = 400_000 >> BIN_SHIFT;
/// A level in the resting region must hold this share of all samples, in a thousand.
const LEAST_IDLE_PER_MILLE: u32 = 10;
/// A driven region must hold this share of all samples, in a thousand ...
const LEAST_DRIVEN_PER_MILLE: u32 = 5;
/// ... and its mode this share of the region, in a thousand: scattered noise has no mode.
const LEAST_MODE_PER_MILLE: u32 = 100;
/// A second level on one side must hold this share of all samples, in a thousand.
const LEAST_SECOND_PER_MILLE: u32 = 50;

const _: () = assert!(
    (crate::settings::LONGEST_LEVELS_SAMPLES as u64) << (BIN_SHIFT - OFFSET_SHIFT) <= 1 << 32,
    "an offset sum must not overflow within the longest interval"
);

/// State of one sample, also the index of its sums.
const IDLE: usize = 0;
const HIGH: usize = 1;
const LOW: usize = 2;

/// One bin of the histogram.
#[derive(Clone, Copy, Debug)]
struct Bin {
    /// Samples.
    count: u32,
    /// Sum of their offsets within the bin, in steps of 32 µV.
    offset: u32,
}

/// Histogram and sums of one interval.
#[derive(Debug)]
pub struct LevelMeter {
    first_sample: u64,
    samples: u32,
    bins: [Bin; BINS],
    state: usize,
    /// The resting level last found.
    rest_uv: i32,
    settled: [u32; 3],
    twice_cm_sums: [i64; 3],
}

impl Default for LevelMeter {
    fn default() -> Self {
        Self::new()
    }
}

impl LevelMeter {
    /// An empty histogram.
    pub const fn new() -> Self {
        Self {
            first_sample: 0,
            samples: 0,
            bins: [Bin { count: 0, offset: 0 }; BINS],
            state: IDLE,
            rest_uv: 0,
            settled: [0; 3],
            twice_cm_sums: [0; 3],
        }
    }

    /// Forgets everything.
    pub fn restart(&mut self) {
        self.first_sample = 0;
        self.samples = 0;
        self.bins.fill(Bin { count: 0, offset: 0 });
        self.state = IDLE;
        self.rest_uv = 0;
        self.settled = [0; 3];
        self.twice_cm_sums = [0; 3];
    }

    /// Samples in the interval so far.
    pub const fn samples(&self) -> u32 {
        self.samples
    }

    /// The resting level last found, microvolts; 0 before.
    pub const fn rest_uv(&self) -> i32 {
        self.rest_uv
    }

    /// Takes a block; |DM| up to `idle_below_uv` is the resting state.
    pub fn take(&mut self, block: &Block<'_>, idle_below_uv: u32) {
        if self.samples == 0 {
            self.first_sample = block.first_sample;
        }
        for &dm in block.dm {
            let bounded = dm.clamp(-RANGE_UV, RANGE_UV - 1);
            let number = ((bounded >> BIN_SHIFT) + BINS as i32 / 2) as usize % BINS;
            if let Some(bin) = self.bins.get_mut(number) {
                bin.count = bin.count.wrapping_add(1);
                bin.offset = bin.offset.wrapping_add(((bounded & OFFSET_MASK) >> OFFSET_SHIFT) as u32);
            }
        }
        self.take_plateaus(block, i32::try_from(idle_below_uv).unwrap_or(i32::MAX));
        self.samples = self.samples.saturating_add(block.pairs() as u32);
    }

    /// Sums the common mode of each stretch in one state, its first sample left out.
    fn take_plateaus(&mut self, block: &Block<'_>, threshold: i32) {
        let mut range = range_of(self.state, threshold);
        if range.holds_all(block.spans.dm) {
            let sum = block.twice_cm.iter().map(|&twice_cm| i64::from(twice_cm)).sum();
            self.add_plateau(block.pairs() as u32, sum);
            return;
        }
        let (mut settled, mut sum) = (0_u32, 0_i64);
        for (&dm, &twice_cm) in block.dm.iter().zip(block.twice_cm) {
            if range.holds(dm) {
                settled += 1;
                sum += i64::from(twice_cm);
            } else {
                self.add_plateau(settled, sum);
                (settled, sum) = (0, 0);
                self.state = usize::from(dm > threshold) | usize::from(dm < -threshold) << 1;
                range = range_of(self.state, threshold);
            }
        }
        self.add_plateau(settled, sum);
    }

    fn add_plateau(&mut self, settled: u32, sum: i64) {
        if let Some(total) = self.settled.get_mut(self.state) {
            *total = total.wrapping_add(settled);
        }
        if let Some(total) = self.twice_cm_sums.get_mut(self.state) {
            *total += sum;
        }
    }

    /// The levels of the interval, and a fresh start.
    pub fn finish(&mut self, idle_below_uv: u32) -> Levels {
        let levels = self.evaluate(idle_below_uv);
        let (state, rest_uv) = (self.state, levels.idle.map_or(self.rest_uv, |idle| idle.dm_uv));
        self.restart();
        (self.state, self.rest_uv) = (state, rest_uv);
        levels
    }

    fn evaluate(&self, idle_below_uv: u32) -> Levels {
        let centre = BINS / 2;
        // The bins that hold the threshold itself belong to the resting region.
        let reach = ((idle_below_uv >> BIN_SHIFT) as usize + 1).clamp(1, centre - 1);
        let mut idle = self
            .mode(centre - reach, centre + reach, None)
            .filter(|mode| self.is_share(mode.held, LEAST_IDLE_PER_MILLE));
        let mut high = self.driven(centre + reach, BINS, idle);
        let mut low = self.driven(0, centre - reach, idle);
        if idle.is_none() {
            // A strongly biased pair rests beyond the threshold: then one side shows two levels.
            for side in [&mut high, &mut low] {
                let Some((driven, second)) = side.and_then(|mode| Some((mode, self.second(mode)?))) else {
                    continue;
                };
                let (outer, inner) =
                    if driven.distance() >= second.distance() { (driven, second) } else { (second, driven) };
                *side = Some(outer);
                idle = Some(inner);
                break;
            }
        }
        let [idle_cm, high_cm, low_cm] = [IDLE, HIGH, LOW].map(|state| self.plateau(state));
        Levels {
            first_sample: self.first_sample,
            samples: self.samples,
            idle: idle.map(|mode| self.level(mode)),
            driven_high: high.map(|mode| self.level(mode)),
            driven_low: low.map(|mode| self.level(mode)),
            mid_samples: self.mid_samples(idle, high) + self.mid_samples(idle, low),
            idle_cm,
            high_cm,
            low_cm,
        }
    }

    /// The mode of a region that is driven often enough and not scattered. The skirt of a resting
    /// level close to the region is not part of it.
    fn driven(&self, from: usize, to: usize, idle: Option<Mode>) -> Option<Mode> {
        let skirt = idle.map_or(0..0, |idle| idle.bin.saturating_sub(SKIRT)..idle.bin + SKIRT + 1);
        let from = if skirt.contains(&from) { skirt.end } else { from };
        let to = if skirt.contains(&to) { skirt.start } else { to };
        let region = sum(self.bins.get(from..to)?);
        if !self.is_share(region, LEAST_DRIVEN_PER_MILLE) {
            return None;
        }
        let mode = self.mode(from, to, None)?;
        (u64::from(mode.held) * 1000 >= u64::from(region) * u64::from(LEAST_MODE_PER_MILLE)).then_some(mode)
    }

    /// A second level on the same side as `first`, at least 0.4 V away from it.
    fn second(&self, first: Mode) -> Option<Mode> {
        let centre = BINS / 2;
        let (from, to) = if first.bin >= centre { (centre, BINS) } else { (0, centre) };
        self.mode(from, to, Some(first)).filter(|mode| self.is_share(mode.held, LEAST_SECOND_PER_MILLE))
    }

    /// The bin of `from..to` around which most samples lie; bins near `apart_from` do not count.
    fn mode(&self, from: usize, to: usize, apart_from: Option<Mode>) -> Option<Mode> {
        let mut best = Mode { bin: 0, held: 0 };
        for bin in from..to {
            if apart_from.is_some_and(|other| bin.abs_diff(other.bin) < APART_BINS) {
                continue;
            }
            let held = sum(self.around(bin));
            let is_taller = |bin: usize| self.bins.get(bin).map_or(0, |bin| bin.count);
            if held > best.held || held == best.held && is_taller(bin) > is_taller(best.bin) {
                best = Mode { bin, held };
            }
        }
        (best.held > 0).then_some(best)
    }

    fn around(&self, bin: usize) -> &[Bin] {
        self.bins.get(bin.saturating_sub(AROUND)..(bin + AROUND + 1).min(BINS)).unwrap_or(&[])
    }

    /// Mean of the samples around a mode.
    fn level(&self, mode: Mode) -> Level {
        let first_bin = mode.bin.saturating_sub(AROUND) as i64 - BINS as i64 / 2;
        let (mut total, mut held) = (0_i64, 0_i64);
        for (number, &Bin { count, offset }) in self.around(mode.bin).iter().enumerate() {
            let base = (first_bin + number as i64) << BIN_SHIFT;
            total += i64::from(count) * base + (i64::from(offset) << OFFSET_SHIFT);
            held += i64::from(count);
        }
        // Offsets were cut to 32 µV: on average 15.5 µV too low.
        let mean = total.checked_div_euclid(held).unwrap_or(0) + 15;
        Level { dm_uv: mean.clamp(i64::from(i32::MIN), i64::from(i32::MAX)) as i32, samples: mode.held }
    }

    /// Samples between 0.3 and 0.7 of a driven level, those near the resting level left out.
    fn mid_samples(&self, idle: Option<Mode>, driven: Option<Mode>) -> u32 {
        let Some(driven) = driven else { return 0 };
        let distance = driven.distance();
        let (near, far) = (distance * 3 / 10, distance * 7 / 10);
        let centre = BINS / 2;
        let (from, to) = if driven.bin >= centre {
            (centre + near, centre + far)
        } else {
            (centre.saturating_sub(far), centre.saturating_sub(near))
        };
        // Below the resting level's skirt, and above it; a range that ends before it begins is empty.
        let held = |from: usize, end: usize| sum(self.bins.get(from..end).unwrap_or(&[]));
        match idle {
            Some(idle) => held(from, (to + 1).min(idle.bin.saturating_sub(SKIRT)))
                .saturating_add(held(from.max(idle.bin + SKIRT + 1), to + 1)),
            None => held(from, to + 1),
        }
    }

    fn plateau(&self, state: usize) -> Plateau {
        let samples = self.settled.get(state).copied().unwrap_or(0);
        let total = self.twice_cm_sums.get(state).copied().unwrap_or(0);
        let mean = total.checked_div_euclid(i64::from(samples)).unwrap_or(0);
        Plateau { samples, twice_cm_uv: mean as i32 }
    }

    fn is_share(&self, held: u32, per_mille: u32) -> bool {
        held > 0 && u64::from(held) * 1000 >= u64::from(self.samples) * u64::from(per_mille)
    }
}

/// The values of DM that belong to one state.
const fn range_of(state: usize, threshold: i32) -> Interval {
    match state {
        HIGH => Interval::new(threshold.saturating_add(1), i32::MAX),
        LOW => Interval::new(i32::MIN, (-threshold).saturating_sub(1)),
        _ => Interval::new(-threshold, threshold),
    }
}

/// A bin and the samples within a bin of it.
#[derive(Clone, Copy, Debug)]
struct Mode {
    bin: usize,
    held: u32,
}

impl Mode {
    /// Bins away from 0 V.
    const fn distance(self) -> usize {
        self.bin.abs_diff(BINS / 2)
    }
}

/// Samples in some bins. Kept out of its callers, for the sake of flash.
#[inline(never)]
fn sum(bins: &[Bin]) -> u32 {
    bins.iter().map(|bin| bin.count).fold(0, u32::saturating_add)
}
