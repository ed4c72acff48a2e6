//! Position arithmetic for a ring that hardware fills and nobody stops.
//!
//! Positions are words since the start, in 64 bits; the place in memory is the position modulo the
//! ring length. The writer never waits, so the reader can only find out that it was too slow:
//!
//! ```text
//!        read                     written
//!          │  scans ready to copy   │
//!  ────────┴────────────────────────┴─────► words since the start
//!          └── more than a ring apart: the words at `read` are gone ──┘
//! ```
//!
//! It is asked twice: before copying, which scans are there ([`RingReader::ready`]), and after, with
//! the position read afresh, whether the copy was overtaken meanwhile ([`RingReader::is_intact`]).

use core::num::NonZeroU64;

/// Whole scans that can be copied now.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Ready {
    /// Position of the first word.
    pub first_word: u64,
    /// How many scans.
    pub scans: usize,
    /// Scans passed over just before because they were overwritten.
    pub lost_scans: u64,
}

/// The reading end of a ring.
#[derive(Clone, Copy, Debug)]
pub struct RingReader {
    ring_words: NonZeroU64,
    scan_words: NonZeroU64,
    read: u64,
}

impl RingReader {
    /// A reader at the start of a ring of `ring_words`, in scans of `scan_words` (each at least 1).
    ///
    /// The ring need not be a multiple of the scan: a scan may lie across the seam.
    pub const fn new(ring_words: usize, scan_words: usize) -> Self {
        Self { ring_words: at_least_one(ring_words), scan_words: at_least_one(scan_words), read: 0 }
    }

    /// Back to the start: the writer begins anew.
    pub const fn restart(&mut self) {
        self.read = 0;
    }

    /// Scans taken or passed over since the start.
    pub fn read_scans(&self) -> u64 {
        self.read / self.scan_words
    }

    /// Place in memory of a position.
    pub fn place(&self, word: u64) -> usize {
        (word % self.ring_words) as usize
    }

    /// Which scans can be copied, at most `most`, now that `written` words have been written.
    ///
    /// Where the writer has lapped the reader, the reader goes on half a ring behind the writer: as far
    /// from being overtaken again as from waiting. Nothing moves on before [`Self::advance`], except that.
    pub fn ready(&mut self, written: u64, most: usize) -> Ready {
        let mut lost_scans = 0;
        if !self.is_intact(self.read, written) {
            let oldest_kept = written.saturating_sub(self.ring_words.get() / 2);
            let scans_passed = oldest_kept.saturating_add(self.scan_words.get() - 1) / self.scan_words;
            lost_scans = scans_passed.saturating_sub(self.read_scans());
            self.read += lost_scans * self.scan_words.get();
        }
        let waiting = written.saturating_sub(self.read) / self.scan_words;
        Ready { first_word: self.read, scans: waiting.min(most as u64) as usize, lost_scans }
    }

    /// Whether the word at `first_word` was still unharmed when `written` words had been written.
    ///
    /// One scan is left as a moat: the word being written right now is not in `written` yet.
    pub const fn is_intact(&self, first_word: u64, written: u64) -> bool {
        written.saturating_sub(first_word) + self.scan_words.get() <= self.ring_words.get()
    }

    /// Moves on past scans that were copied or are not wanted.
    pub const fn advance(&mut self, scans: u64) {
        self.read = self.read.saturating_add(scans.saturating_mul(self.scan_words.get()));
    }
}

/// Lengths that are never 0, so that dividing by them needs no check.
const fn at_least_one(words: usize) -> NonZeroU64 {
    match NonZeroU64::new(words as u64) {
        Some(words) => words,
        None => NonZeroU64::MIN,
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use proptest::prelude::*;
    use proptest::test_runner::RngSeed;
    use std::vec;
    use std::vec::Vec;

    #[test]
    fn a_scan_half_written_is_not_ready() {
        let mut reader = RingReader::new(30, 3);
        assert_eq!(reader.ready(2, 100), Ready { first_word: 0, scans: 0, lost_scans: 0 });
        assert_eq!(reader.ready(8, 100), Ready { first_word: 0, scans: 2, lost_scans: 0 });
        reader.advance(2);
        assert_eq!(reader.ready(8, 100), Ready { first_word: 6, scans: 0, lost_scans: 0 });
    }

    #[test]
    fn a_lapped_reader_counts_what_it_lost_and_starts_half_a_ring_behind() {
        let mut reader = RingReader::new(30, 3);
        assert_eq!(reader.ready(27, 100).lost_scans, 0); // 27 words + a moat of 3: just intact
        let ready = reader.ready(28, 100);
        // Half a ring behind word 28 is word 13; the next scan begins at word 15: five scans are lost.
        assert_eq!(ready, Ready { first_word: 15, scans: 4, lost_scans: 5 });
        assert_eq!(reader.ready(28, 100).lost_scans, 0);
    }

    #[test]
    fn many_laps_behind_is_no_different() {
        let mut reader = RingReader::new(4096, 2);
        let ready = reader.ready(1_000_000_001, 100);
        assert_eq!(ready.lost_scans * 2, ready.first_word);
        assert_eq!(1_000_000_001 - ready.first_word, 4096 / 2 - 1);
    }

    proptest! {
        #![proptest_config(ProptestConfig { failure_persistence: None, rng_seed: RngSeed::Fixed(1), ..ProptestConfig::default() })]
        /// A writer that writes its own position into the ring, and a reader of any pace: every scan
        /// is delivered in order or counted as lost, and no delivered word was overwritten.
        #[test]
        fn every_scan_is_delivered_unharmed_or_counted(
            scan_words in 1_usize..5, ring in 8_usize..60, seed in prop::collection::vec((0_u64..80, 0_u64..20), 1..200),
        ) {
            let mut memory = vec![0_u64; ring];
            let mut written = 0_u64;
            let mut write = |memory: &mut Vec<u64>, count: u64| {
                for _ in 0..count {
                    memory[(written % ring as u64) as usize] = written;
                    written += 1;
                }
                written
            };
            let mut reader = RingReader::new(ring, scan_words);
            let mut accounted = 0_u64;
            for (before, during) in seed {
                let now = write(&mut memory, before);
                let ready = reader.ready(now, 5);
                accounted += ready.lost_scans;
                prop_assert_eq!(ready.first_word, accounted * scan_words as u64);
                // The writer goes on while the first half of the words is copied.
                let words = ready.scans as u64 * scan_words as u64;
                let copy: Vec<u64> = (0..words).map(|word| {
                    if word == words / 2 {
                        write(&mut memory, during);
                    }
                    memory[reader.place(ready.first_word + word)]
                }).collect();
                let after = write(&mut memory, 0);
                if reader.is_intact(ready.first_word, after) {
                    for (copied, position) in copy.iter().zip(ready.first_word..) {
                        prop_assert_eq!(*copied, position);
                    }
                    reader.advance(ready.scans as u64);
                    accounted += ready.scans as u64;
                }
                prop_assert_eq!(reader.read_scans(), accounted);
            }
        }
    }
}
