//! Recordings for the emulated board: the file its sampler plays, and the same deliveries as a source
//! on the desktop.
//!
//! The file's layout is drawn in `firmware/boards/emulated/src/replay.rs`.

use legwise_firmware::block::BLOCK_PAIRS;
use legwise_firmware::source::{PairSource, SourceDescription, Taken};
use legwise_protocol::message::GapCause;
use std::convert::Infallible;
use std::io::{self, Write};
use std::path::Path;

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

/// A recording as deliveries.
#[derive(Clone, Debug)]
pub struct Replay {
    /// What the sampler says it is.
    pub description: SourceDescription,
    /// Row of the receiver table to judge by.
    pub receiver: u32,
    /// Boot id of the run.
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
        Self { description: source.describe(), receiver, boot_id, deliveries, next: 0 }
    }

    /// Pairs in all deliveries.
    pub fn pairs(&self) -> usize {
        self.deliveries.iter().map(|delivery| delivery.leg_a.len()).sum()
    }

    /// Writes the file.
    ///
    /// # Errors
    /// When the file cannot be written.
    pub fn write(&self, path: &Path) -> io::Result<()> {
        let mut out = io::BufWriter::new(std::fs::File::create(path)?);
        out.write_all(b"LWREPLAY")?;
        out.write_all(&self.receiver.to_le_bytes())?;
        out.write_all(&self.boot_id.to_le_bytes())?;
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
        let pairs = delivery.leg_a.len();
        leg_a[..pairs].copy_from_slice(&delivery.leg_a);
        leg_b[..pairs].copy_from_slice(&delivery.leg_b);
        Ok(Taken::Pairs {
            first_sample: delivery.first_sample,
            pairs,
            gap: delivery.is_overrun.then_some(GapCause::Overrun),
        })
    }
}
