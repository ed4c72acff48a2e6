//! Recordings for the emulated board: the file its sampler plays, and the same deliveries as a source
//! on the desktop.
//!
//! The file's layout is drawn in `firmware/boards/emulated/src/replay.rs`.

use legwise::line::{Length, LineSource, scenarios};
use legwise_firmware::block::BLOCK_PAIRS;
use legwise_firmware::settings;
use legwise_firmware::source::{PairSource, SourceDescription, Taken};
use legwise_protocol::message::{GapCause, Settings};
use legwise_protocol::receivers::{self, TABLE};
use std::convert::Infallible;
use std::io::{self, Write};
use std::path::Path;

/// The first disturbance of a scenario sets in within this time.
const LONGEST_WAIT_S: f64 = 120.0;

/// Consecutive pairs handed out at once.
#[derive(Clone, Debug)]
pub struct Delivery {
    /// Index of the first pair.
    pub first_sample: u64,
    /// Whether pairs were lost before it.
    pub is_overrun: bool,
    /// Codes of leg A, at most a block of them.
    pub leg_a: Vec<i32>,
    /// Codes of leg B, as many.
    pub leg_b: Vec<i32>,
}

impl Delivery {
    /// Copies the pairs to the front of both buffers.
    pub fn hand_out(&self, leg_a: &mut [i32], leg_b: &mut [i32]) -> Taken {
        let pairs = self.leg_a.len();
        leg_a[..pairs].copy_from_slice(&self.leg_a);
        leg_b[..pairs].copy_from_slice(&self.leg_b);
        Taken::Pairs {
            first_sample: self.first_sample,
            pairs,
            gap: self.is_overrun.then_some(GapCause::Overrun),
        }
    }
}

/// A recording as deliveries.
#[derive(Clone, Debug)]
pub struct Replay {
    /// What the sampler says it is.
    pub description: SourceDescription,
    /// Row of the receiver table to judge by.
    pub receiver: u32,
    /// Boot id of the run; 0: the board draws one at each start.
    pub boot_id: u32,
    /// The deliveries, in order.
    pub deliveries: Vec<Delivery>,
    next: usize,
}

impl Replay {
    /// Plays `source` into memory; the deliveries whose number satisfies `is_lost` become overruns.
    pub fn record<S: PairSource<Error = Infallible>>(
        mut source: S,
        receiver: u32,
        boot_id: u32,
        is_lost: impl Fn(usize) -> bool,
    ) -> Self {
        let mut deliveries = Vec::new();
        let (mut number, mut was_lost) = (0, false);
        loop {
            let (mut leg_a, mut leg_b) = (vec![0; BLOCK_PAIRS], vec![0; BLOCK_PAIRS]);
            let Ok(taken) = source.take(&mut leg_a, &mut leg_b);
            let Taken::Pairs { first_sample, pairs, gap } = taken else { break };
            leg_a.truncate(pairs);
            leg_b.truncate(pairs);
            number += 1;
            if is_lost(number) {
                was_lost = true;
                continue;
            }
            let is_overrun = gap.is_some() | std::mem::take(&mut was_lost);
            deliveries.push(Delivery { first_sample, is_overrun, leg_a, leg_b });
        }
        let description = source.describe();
        Self { description, receiver, boot_id, deliveries, next: 0 }
    }

    /// Deliveries made elsewhere, judged by the first receiver of the table.
    pub const fn of_deliveries(description: SourceDescription, deliveries: Vec<Delivery>) -> Self {
        Self { description, receiver: 0, boot_id: 1, deliveries, next: 0 }
    }

    /// `seconds` of a built-in scenario, from `lead_s` before its first disturbance sets in, judged by
    /// the scenario's receiver. Samples are counted from the first pair of the stretch.
    ///
    /// # Errors
    /// When there is no such scenario.
    pub fn of_scenario(name: &str, seed: u64, lead_s: f64, seconds: f64) -> Result<Self, String> {
        let scenario = scenarios::by_name(name).ok_or_else(|| format!("no scenario is called {name}"))?;
        let receiver = receivers::by_name(&scenario.receiver).map_or(0, |receiver| receiver.id as u32);
        let source =
            |pairs| LineSource::new(&scenario, seed, Length::Pairs(pairs)).map_err(|error| error.to_string());
        let onsets = source(1)?.activity(0.0, LONGEST_WAIT_S).into_iter().map(|one| one.from_s);
        let first_s = onsets.filter(|&from_s| from_s > 0.0).fold(f64::INFINITY, f64::min);
        let skipped_s = if first_s.is_finite() { (first_s - lead_s).max(0.0) } else { 0.0 };
        let blocks = |seconds: f64| (seconds * scenario.sample_rate_hz / BLOCK_PAIRS as f64) as usize;
        let (skipped, kept) = (blocks(skipped_s), blocks(seconds));
        let mut source = source(((skipped + kept) * BLOCK_PAIRS) as u64)?;
        let mut passed_over = [[0; BLOCK_PAIRS]; 2];
        for _ in 0..skipped {
            let [leg_a, leg_b] = &mut passed_over;
            let Ok(_) = source.take(leg_a, leg_b);
        }
        let mut replay = Self::record(source, receiver, 1, |_| false);
        for delivery in &mut replay.deliveries {
            delivery.first_sample -= (skipped * BLOCK_PAIRS) as u64;
        }
        Ok(replay)
    }

    /// The settings a board starts with on this recording.
    pub fn settings(&self) -> Settings {
        settings::for_receiver(&TABLE[self.receiver as usize], self.description.sample_rate_mhz)
    }

    /// Pairs in all deliveries.
    pub fn pairs(&self) -> usize {
        self.deliveries.iter().map(|delivery| delivery.leg_a.len()).sum()
    }

    /// Writes the file for a link of `link_bytes_per_s`, for which the replay will not wait; 0: it will.
    ///
    /// # Errors
    /// When the file cannot be written.
    pub fn write(&self, path: &Path, link_bytes_per_s: u32) -> io::Result<()> {
        let mut out = io::BufWriter::new(std::fs::File::create(path)?);
        out.write_all(b"LWREPLAY")?;
        out.write_all(&self.receiver.to_le_bytes())?;
        out.write_all(&self.boot_id.to_le_bytes())?;
        out.write_all(&link_bytes_per_s.to_le_bytes())?;
        out.write_all(&self.description.sample_rate_mhz.to_le_bytes())?;
        out.write_all(&self.description.skew_ns.to_le_bytes())?;
        for leg in &self.description.legs {
            out.write_all(&leg.mantissa.to_le_bytes())?;
            out.write_all(&u32::from(leg.shift).to_le_bytes())?;
            for field in [leg.offset_uv, leg.rail_low_code, leg.rail_high_code] {
                out.write_all(&field.to_le_bytes())?;
            }
            out.write_all(&leg.gain_uncertainty_ppm.to_le_bytes())?;
            out.write_all(&leg.offset_uncertainty_uv.to_le_bytes())?;
        }
        for delivery in &self.deliveries {
            out.write_all(&delivery.first_sample.to_le_bytes())?;
            out.write_all(&(delivery.leg_a.len() as u32).to_le_bytes())?;
            out.write_all(&u32::from(delivery.is_overrun).to_le_bytes())?;
            for code in delivery.leg_a.iter().chain(&delivery.leg_b) {
                out.write_all(&code.to_le_bytes())?;
            }
        }
        out.flush()
    }
}

impl PairSource for Replay {
    type Error = Infallible;

    fn describe(&self) -> SourceDescription {
        self.description
    }

    fn take(&mut self, leg_a: &mut [i32], leg_b: &mut [i32]) -> Result<Taken, Infallible> {
        let Some(delivery) = self.deliveries.get(self.next) else { return Ok(Taken::Finished) };
        self.next += 1;
        Ok(delivery.hand_out(leg_a, leg_b))
    }
}
