//! The full rate: segments of 1024 pairs straight from the ring of codes, half of each shared with the next.

use super::sums::{Shape, Sum, density_scale, send, split};
use super::turn::Turn;
use super::window::Turned;
use crate::fft::{self, BINS, Complex, Complexes, POINTS};
use crate::snippet_ring::SnippetRing;
use legwise_protocol::message::{LegScale, Message, SegmentSet};

/// From the start of a segment to that of the next, pairs.
pub(super) const HOP: u64 = POINTS as u64 / 2;

/// What is averaged, and where the next segment ends.
#[derive(Debug)]
pub(super) struct Full {
    /// Microvolts per code, leg A and leg B.
    gains: [f32; 2],
    skew: Turned,
    /// Past the last pair of the next segment; 0 before the first block of a stretch.
    next_end: u64,
    pub(super) turn: Turn,
    sums: [Sum; BINS],
}

impl Full {
    pub(super) const fn new() -> Self {
        Self { gains: [0.0; 2], skew: Turned::NONE, next_end: 0, turn: Turn::new(), sums: [Sum::ZERO; BINS] }
    }

    /// Takes the scales of both legs.
    pub(super) fn scale(&mut self, legs: &[LegScale; 2]) {
        self.gains = [microvolts_per_code(&legs[0]), microvolts_per_code(&legs[1])];
    }

    /// Starts afresh with legs that differ by `skew`.
    pub(super) fn begin(&mut self, skew: Turned) {
        self.skew = skew;
        self.turn = Turn::new();
        self.sums.fill(Sum::ZERO);
        self.break_off();
    }

    /// Forgets the segment under construction: a gap follows.
    pub(super) const fn break_off(&mut self) {
        self.next_end = 0;
    }

    /// Whether a segment ends with the block of these pairs.
    pub(super) const fn has_segment(&mut self, first_sample: u64, end_sample: u64) -> bool {
        if self.next_end == 0 {
            self.next_end = first_sample + POINTS as u64;
        }
        // Segments end with whole blocks; a shorter block is the last one before a gap.
        let is_complete = end_sample == self.next_end;
        if is_complete {
            self.next_end += HOP;
        }
        is_complete
    }

    /// Transforms the last 1024 pairs into the average, if it is their set's turn; then passes over `skip`
    /// half segments.
    pub(super) fn take(
        &mut self,
        ring: &SnippetRing,
        end_sample: u64,
        set: SegmentSet,
        skip: u16,
        work: &mut Complexes,
    ) {
        let first_sample = end_sample - POINTS as u64;
        if !self.turn.admits(set, first_sample, end_sample) {
            return;
        }
        let Self { gains: [gain_a, gain_b], skew, sums, .. } = self;
        let ((mean_a, rest_a), (mean_b, rest_b)) = ring.means();
        let column = |n: usize| {
            let (window_a, window_b) = skew.eighth_windows(n);
            let point = |row: usize| {
                let (a, b) = ring.pair(first_sample as usize + n + POINTS / 8 * row);
                Complex {
                    re: (a.saturating_sub(mean_a) as f32 - rest_a) * (*gain_a * window_a[row]),
                    im: (b.saturating_sub(mean_b) as f32 - rest_b) * (*gain_b * window_b[row]),
                }
            };
            core::array::from_fn(|row| point(row).sum_and_difference(point(row + 4)))
        };
        fft::transform(work, column, |bin, x, mirror| {
            if let Some(sum) = sums.get_mut(bin) {
                let (a, b) = split(x, mirror);
                sum.add(a, skew.back(b, bin));
            }
        });
        if skip > 0 {
            // Half a segment is passed over for each: skip 1 leaves no hole.
            self.turn.skip(u32::from(skip));
            self.next_end += u64::from(skip) * HOP;
        }
    }

    /// Sends the average, if there is anything in it, and passes the turn on.
    pub(super) fn finish(&mut self, rate_hz: f32, records: &mut dyn FnMut(&Message)) {
        let shape =
            Shape { rung: 0, points: POINTS as u16, first_bin: 0, scale: density_scale(rate_hz, POINTS) };
        send(&self.sums, &shape, &self.turn, records);
        self.turn.pass_on();
        self.sums.fill(Sum::ZERO);
    }
}

fn microvolts_per_code(scale: &LegScale) -> f32 {
    scale.mantissa as f32 / (1_u64 << scale.shift.clamp(1, 40)) as f32
}
