//! Hardware that is not there: a scripted source, a link in memory and a slow one, for tests and examples.

mod throttled;

use crate::link::Link;
use crate::source::{PairSource, SourceDescription, Taken};
use core::convert::Infallible;
use heapless::Deque;
use legwise_protocol::message::{GapCause, LegScale};

pub use throttled::ThrottledLink;

/// A scale of exactly one microvolt per code, with rails out of reach.
pub const MICROVOLT_CODES: LegScale = LegScale {
    mantissa: 1 << 30,
    shift: 30,
    offset_uv: 0,
    rail_low_code: i32::MIN,
    rail_high_code: i32::MAX,
    gain_uncertainty_ppm: 0,
    offset_uncertainty_uv: 0,
};

/// A source that plays codes from two slices, in deliveries of any sizes, with overruns on request.
#[derive(Clone, Debug)]
pub struct ScriptedSource<'a> {
    description: SourceDescription,
    leg_a: &'a [i32],
    leg_b: &'a [i32],
    deliveries: &'a [usize],
    next_delivery: usize,
    /// Deliveries that are lost: the numbers of the deliveries, in order.
    overruns: &'a [usize],
    next_sample: usize,
}

impl<'a> ScriptedSource<'a> {
    /// Plays both slices once. `deliveries` are the lengths handed out, repeated as often as needed;
    /// an empty slice or a 0 means as much as the caller takes. A delivery whose number stands in
    /// `overruns` is lost, and the next one says so.
    pub const fn new(
        description: SourceDescription,
        leg_a: &'a [i32],
        leg_b: &'a [i32],
        deliveries: &'a [usize],
        overruns: &'a [usize],
    ) -> Self {
        Self { description, leg_a, leg_b, deliveries, next_delivery: 0, overruns, next_sample: 0 }
    }

    fn delivery_length(&mut self, room: usize) -> usize {
        let wanted = match self.deliveries.len() {
            0 => 0,
            count => self.deliveries.get(self.next_delivery % count).copied().unwrap_or(0),
        };
        self.next_delivery += 1;
        if wanted == 0 { room } else { wanted.min(room) }
    }
}

impl PairSource for ScriptedSource<'_> {
    type Error = Infallible;

    fn describe(&self) -> SourceDescription {
        self.description
    }

    fn take(&mut self, leg_a: &mut [i32], leg_b: &mut [i32]) -> Result<Taken, Infallible> {
        let mut gap = None;
        loop {
            let length = self.delivery_length(leg_a.len().min(leg_b.len()));
            let rest_a = self.leg_a.get(self.next_sample..).unwrap_or(&[]);
            let rest_b = self.leg_b.get(self.next_sample..).unwrap_or(&[]);
            let pairs = length.min(rest_a.len()).min(rest_b.len());
            if pairs == 0 {
                return Ok(Taken::Finished);
            }
            let first_sample = self.next_sample as u64;
            self.next_sample += pairs;
            if self.overruns.contains(&(self.next_delivery - 1)) {
                gap = Some(GapCause::Overrun);
                continue;
            }
            for (out, from) in [(leg_a, rest_a), (leg_b, rest_b)] {
                for (slot, &code) in out.iter_mut().zip(from.iter().take(pairs)) {
                    *slot = code;
                }
            }
            return Ok(Taken::Pairs { first_sample, pairs, gap });
        }
    }
}

/// A link that keeps what is sent, up to `N` bytes, and hands out what a test puts in.
#[derive(Debug)]
pub struct MemoryLink<const N: usize> {
    sent: Deque<u8, N>,
    incoming: Deque<u8, N>,
}

impl<const N: usize> MemoryLink<N> {
    /// An empty link.
    pub const fn new() -> Self {
        Self { sent: Deque::new(), incoming: Deque::new() }
    }

    /// Takes the oldest byte the device has sent.
    pub fn take_sent(&mut self) -> Option<u8> {
        self.sent.pop_front()
    }

    /// Puts bytes on their way to the device; returns how many fitted.
    pub fn put(&mut self, bytes: &[u8]) -> usize {
        bytes.iter().take_while(|&&byte| self.incoming.push_back(byte).is_ok()).count()
    }
}

impl<const N: usize> Default for MemoryLink<N> {
    fn default() -> Self {
        Self::new()
    }
}

impl<const N: usize> Link for MemoryLink<N> {
    type Error = Infallible;

    fn send(&mut self, bytes: &[u8]) -> Result<usize, Infallible> {
        Ok(bytes.iter().take_while(|&&byte| self.sent.push_back(byte).is_ok()).count())
    }

    fn receive(&mut self, buffer: &mut [u8]) -> Result<usize, Infallible> {
        let mut count = 0;
        while let Some(slot) = buffer.get_mut(count) {
            let Some(byte) = self.incoming.pop_front() else { break };
            *slot = byte;
            count += 1;
        }
        Ok(count)
    }
}
