//! When averages go out: one at a time, and more seldom where the link cannot keep up.
//!
//! An average of the full rate takes four kilobytes of a link, one of a lower rung one and a half. Averages
//! that are due together therefore wait for each other, half the shortest average's length behind a long one
//! and a quarter behind a short one, and go on averaging meanwhile. Where messages had to be shed nevertheless, averages go on twice as long, up to sixteen times;
//! where none was for a while, half as long.

use super::full::HOP;
use legwise_protocol::message::Reporting;

/// Averages without a message shed after which they are made shorter again.
const PATIENCE: u8 = 16;
/// Largest factor, as a power of two.
const SLOWEST: u8 = 4;

/// How often averages are sent.
#[derive(Clone, Copy, Debug)]
pub(super) struct Pace {
    /// Sample count from which the next one may go.
    earliest: u64,
    /// Factor as a power of two.
    slowness: u8,
    is_shedding: bool,
    patience: u8,
}

impl Pace {
    pub(super) const fn new() -> Self {
        Self { earliest: 0, slowness: 0, is_shedding: false, patience: 0 }
    }

    /// The link could not take everything.
    pub(super) const fn note_shedding(&mut self) {
        self.is_shedding = true;
    }

    /// Whether an average may go at `sample`.
    pub(super) const fn admits(&self, sample: u64) -> bool {
        sample >= self.earliest
    }

    /// Segments of the full rate that make the shortest average.
    pub(super) const fn segments(&self, reporting: &Reporting) -> u32 {
        reporting.spectrum_segments.saturating_mul(1 << self.slowness)
    }

    /// The same while everything is sent so that averages can begin anew: just far enough apart for a line of
    /// 115 200 baud, 0.4 s and 0.16 s where the shortest average takes two seconds.
    pub(super) const fn hurried(&mut self, sample: u64, is_full: bool, reporting: &Reporting) {
        let share = if is_full { 5 } else { 12 };
        self.earliest = sample + reporting.spectrum_segments as u64 * HOP / share;
    }

    /// An average went out at `sample`, that of the full rate or one of a lower rung.
    pub(super) const fn sent(&mut self, sample: u64, is_full: bool, reporting: &Reporting) {
        if self.is_shedding {
            self.patience = PATIENCE;
            if self.slowness < SLOWEST {
                self.slowness += 1;
            }
        } else if self.patience > 0 {
            self.patience -= 1;
        } else if self.slowness > 0 {
            self.patience = PATIENCE;
            self.slowness -= 1;
        }
        self.is_shedding = false;
        let share = if is_full { 2 } else { 4 };
        self.earliest = sample + self.segments(reporting) as u64 * HOP / share;
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn reporting() -> Reporting {
        Reporting {
            summary_samples: 256,
            levels_samples: 256,
            spectrum_segments: 10,
            spectrum_skip: 0,
            snippet_before: 0,
            snippet_after: 0,
            snippets_per_window: 0,
        }
    }

    #[test]
    fn averages_keep_apart_by_their_size() {
        let (mut pace, reporting) = (Pace::new(), reporting());
        assert!(pace.admits(0));
        for (is_full, pause) in [(true, 2560), (false, 1280)] {
            pace.sent(1000, is_full, &reporting);
            assert!(!pace.admits(1000 + pause - 1));
            assert!(pace.admits(1000 + pause));
        }
    }

    #[test]
    fn shedding_doubles_the_length_up_to_sixteenfold_and_silence_halves_it_again() {
        let (mut pace, reporting) = (Pace::new(), reporting());
        for expected in [20, 40, 80, 160, 160] {
            pace.note_shedding();
            pace.sent(0, true, &reporting);
            assert_eq!(pace.segments(&reporting), expected);
        }
        for _ in 0..PATIENCE {
            pace.sent(0, true, &reporting);
            assert_eq!(pace.segments(&reporting), 160);
        }
        let lengths: std::vec::Vec<_> = (0..4 * (u32::from(PATIENCE) + 1))
            .map(|_| {
                pace.sent(0, true, &reporting);
                pace.segments(&reporting)
            })
            .collect();
        assert_eq!(lengths[0], 80);
        assert_eq!(lengths.last(), Some(&10));
        assert!(lengths.is_sorted_by(|before, after| before >= after));
    }
}
