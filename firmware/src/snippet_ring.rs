//! The raw waveform around an excursion: a ring of codes, captured with some pairs from before.
//!
//! ```text
//!            first sample outside
//!                     v
//!   ... | before (128) | after (384) |        ring of 1024 pairs, newest block overwrites the oldest
//! ```
//!
//! One capture at a time, and a limited number per storm window: every excursion is counted and
//! recorded anyway, the waveform is evidence for the first ones. Codes travel raw, compressed without
//! loss by [`legwise_protocol::snippet`]; nothing is compressed while sampling has to be served.

use crate::block::{BLOCK_PAIRS, Block};
use legwise_protocol::bytes::Bytes;
use legwise_protocol::message::{Message, PAYLOAD_BYTES, Reporting, SnippetPart};
use legwise_protocol::snippet::{BLOCK_BYTES, BLOCK_PAIRS as CODED_PAIRS, encode_block};

/// Pairs in the ring.
const RING: usize = 1024;
/// Most pairs kept from before an excursion.
pub const LONGEST_BEFORE: usize = 256;
/// Most pairs kept from its start onwards.
pub const LONGEST_AFTER: usize = 512;

const _: () = assert!(RING.is_power_of_two() && RING == crate::fft::POINTS, "a segment is the whole ring");
const _: () =
    assert!(LONGEST_BEFORE + LONGEST_AFTER + BLOCK_PAIRS <= RING, "a capture must fit beside a new block");

/// A capture that waits for its last pair.
#[derive(Clone, Copy, Debug)]
struct Capture {
    excursion: u64,
    first_sample: u64,
    end_sample: u64,
}

/// The ring and the capture in progress.
#[derive(Debug)]
pub struct SnippetRing {
    /// Codes of leg A and leg B.
    pairs: [(i32, i32); RING],
    /// Oldest pair that belongs to the present stretch without a gap.
    oldest_sample: u64,
    /// Just past the newest pair.
    end_sample: u64,
    capture: Option<Capture>,
    window: u64,
    captured_in_window: u16,
}

impl Default for SnippetRing {
    fn default() -> Self {
        Self::new()
    }
}

impl SnippetRing {
    /// An empty ring.
    pub const fn new() -> Self {
        Self {
            pairs: [(0, 0); RING],
            oldest_sample: 0,
            end_sample: 0,
            capture: None,
            window: 0,
            captured_in_window: 0,
        }
    }

    /// Forgets everything.
    pub fn restart(&mut self) {
        (self.oldest_sample, self.end_sample) = (0, 0);
        self.capture = None;
        (self.window, self.captured_in_window) = (0, 0);
    }

    /// Takes a block into the ring.
    pub fn take(&mut self, block: &Block<'_>) {
        if block.first_sample != self.end_sample {
            self.oldest_sample = block.first_sample;
        }
        let start = block.first_sample as usize % RING;
        let (early, late) = self.pairs.split_at_mut(start);
        let codes = || block.code_a.iter().copied().zip(block.code_b.iter().copied());
        let before_end = late.len();
        for (slot, pair) in late.iter_mut().zip(codes()) {
            *slot = pair;
        }
        for (slot, pair) in early.iter_mut().zip(codes().skip(before_end)) {
            *slot = pair;
        }
        self.end_sample = block.end_sample();
        self.oldest_sample = self.oldest_sample.max(self.end_sample.saturating_sub(RING as u64));
    }

    /// The codes of the pair with index `sample`, any one among the newest 1024.
    #[inline(always)]
    pub(crate) fn pair(&self, sample: usize) -> (i32, i32) {
        self.pairs[sample % RING]
    }

    /// Means of all codes in the ring: rounded down, and the rest.
    pub(crate) fn means(&self) -> ((i32, f32), (i32, f32)) {
        let sums = self.pairs.iter().fold((0_i64, 0_i64), |(sum_a, sum_b), &(code_a, code_b)| {
            (sum_a + i64::from(code_a), sum_b + i64::from(code_b))
        });
        let mean = |sum: i64| ((sum >> RING.ilog2()) as i32, (sum & (RING as i64 - 1)) as f32 / RING as f32);
        (mean(sums.0), mean(sums.1))
    }

    /// An excursion began at `sample`: captures around it, unless one is being captured or the storm
    /// window has had its share. Call after the block with that sample was taken.
    pub fn trigger(&mut self, excursion: u64, sample: u64, reporting: &Reporting, storm_samples: u32) {
        let window = sample / u64::from(storm_samples.max(1));
        if window != self.window {
            self.window = window;
            self.captured_in_window = 0;
        }
        let is_spent = self.captured_in_window >= reporting.snippets_per_window;
        if self.capture.is_some() || is_spent || reporting.snippet_after == 0 {
            return;
        }
        self.captured_in_window += 1;
        let before = u64::from(reporting.snippet_before).min(LONGEST_BEFORE as u64);
        let after = u64::from(reporting.snippet_after).min(LONGEST_AFTER as u64);
        self.capture = Some(Capture {
            excursion,
            first_sample: sample.saturating_sub(before).max(self.oldest_sample),
            end_sample: sample + after,
        });
    }

    /// Sends the capture if its last pair has arrived.
    pub fn pass(&mut self, records: &mut dyn FnMut(&Message)) {
        if self.capture.is_some_and(|capture| capture.end_sample <= self.end_sample) {
            self.finish(records);
        }
    }

    /// Sends the capture as far as it goes: nothing more will come.
    pub fn finish(&mut self, records: &mut dyn FnMut(&Message)) {
        let Some(capture) = self.capture.take() else { return };
        let end = capture.end_sample.min(self.end_sample);
        let mut part = SnippetPart {
            excursion: capture.excursion,
            first_sample: capture.first_sample,
            samples: 0,
            part: 0,
            more: false,
            blocks: Bytes::new(),
        };
        let mut coded = [0; BLOCK_BYTES];
        let mut sample = capture.first_sample;
        while sample < end {
            let (pairs, bytes) = self.encode(sample, end, &mut coded);
            let bytes = coded.get(..bytes).unwrap_or(&[]);
            if bytes.is_empty() {
                return;
            }
            if bytes.len() > part.blocks.room() {
                part.more = true;
                records(&Message::Snippet(part));
                let next = part.part.saturating_add(1);
                part = SnippetPart {
                    first_sample: sample,
                    samples: 0,
                    part: next,
                    more: false,
                    blocks: Bytes::new(),
                    ..part
                };
            }
            part.blocks.extend(bytes);
            part.samples += pairs;
            sample += u64::from(pairs);
        }
        if part.samples > 0 {
            records(&Message::Snippet(part));
        }
    }

    /// Codes up to 64 pairs from `sample` on; half as many if those do not fit into one message.
    fn encode(&self, sample: u64, end: u64, coded: &mut [u8; BLOCK_BYTES]) -> (u16, usize) {
        let (mut a, mut b) = ([0; CODED_PAIRS], [0; CODED_PAIRS]);
        let available = (end - sample).min(CODED_PAIRS as u64) as usize;
        for (offset, (a, b)) in a.iter_mut().zip(b.iter_mut()).enumerate().take(available) {
            (*a, *b) = self.pair(sample as usize + offset);
        }
        for pairs in [available, available.min(CODED_PAIRS / 2)] {
            let legs = (a.get(..pairs).unwrap_or(&[]), b.get(..pairs).unwrap_or(&[]));
            match encode_block(legs.0, legs.1, coded) {
                Some(bytes) if bytes <= PAYLOAD_BYTES => return (pairs as u16, bytes),
                _ => {}
            }
        }
        (0, 0)
    }
}
