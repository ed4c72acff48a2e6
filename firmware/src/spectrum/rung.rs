//! A rung of the ladder below the full rate: the filters into it, and the last 512 samples of both legs.

use super::full;
use super::sums::{Shape, Sum, density_scale, send, split};
use super::turn::Turn;
use super::window::Turned;
use crate::fft::{self, Complex, Complexes};
use crate::halfband::{Bench, INPUTS, Memory, OUTPUTS};
use legwise_protocol::message::{Message, SegmentSet};

/// Points of a segment.
pub(super) const POINTS: usize = 512;
const HOP: u64 = POINTS as u64 / 2;
const ROW: usize = POINTS / 4;
/// First bin sent: below it the next rung sees better.
pub(super) const FIRST_BIN: usize = 20;
/// Last bin sent, 0.4 of the rate: above it the decimation filter lets images through.
pub(super) const LAST_BIN: usize = POINTS * 2 / 5;
const BINS: usize = LAST_BIN + 1 - FIRST_BIN;
/// Fewer segments make no average: with fewer a coherence says nothing.
const LEAST_SEGMENTS: u32 = 8;
/// What the filters bring in from before a segment, in samples of this rung: 238 of the rate before.
const REACH: u64 = 30;

const _: () = assert!(INPUTS as u64 == HOP, "the next rung takes what has come since the last segment");
const _: () = assert!(REACH * 8 >= 238);

/// Both legs of one rung, µV.
#[derive(Debug)]
pub(super) struct Rung {
    filters: [Memory; 2],
    leg_a: [f32; POINTS],
    leg_b: [f32; POINTS],
    /// Samples since the start of the stretch, unsettled ones left out.
    count: u64,
    /// Whether the filters have forgotten what was before the stretch.
    is_settled: bool,
    /// Segments still to be passed over.
    pass_over: u16,
    skew: Turned,
    pub(super) turn: Turn,
    sums: [Sum; BINS],
}

/// The number of a rung: 0 is the full rate.
#[derive(Clone, Copy, Debug)]
pub(super) struct Number(pub(super) u8);

impl Number {
    pub(super) const FULL: Self = Self(0);

    pub(super) const fn is_full(self) -> bool {
        self.0 == 0
    }

    /// Pairs of the full rate that make one sample.
    pub(super) const fn pairs_per_sample(self) -> u64 {
        1 << (3 * self.0)
    }

    /// Pairs that bear on a segment.
    pub(super) const fn pairs_per_segment(self) -> u64 {
        (POINTS as u64 + REACH) * self.pairs_per_sample()
    }

    /// Segments to pass over where the full rate passes over `skip`. A segment costs as much on any rung;
    /// further down there are fewer of them, and averages are longer.
    pub(super) const fn skip(self, skip: u16) -> u16 {
        match self.0 {
            1 => skip.saturating_mul(2),
            2 => skip / 2,
            3 => skip / 16,
            _ => 0,
        }
    }

    /// Segments in an average while the full rate makes `segments`. Lower rungs go on for longer.
    pub(super) fn segments(self, segments: u32) -> u32 {
        let length: u64 = match self.0 {
            0 => return segments,
            1 => 2,
            2 | 3 => 4,
            _ => 16,
        };
        let count = u64::from(segments) * full::HOP * length / (HOP * self.pairs_per_sample());
        u32::try_from(count).unwrap_or(u32::MAX).max(LEAST_SEGMENTS)
    }
}

impl Rung {
    pub(super) const fn new() -> Self {
        Self {
            filters: [const { Memory::new() }; 2],
            leg_a: [0.0; POINTS],
            leg_b: [0.0; POINTS],
            count: 0,
            is_settled: false,
            pass_over: 0,
            skew: Turned::NONE,
            turn: Turn::new(),
            sums: [Sum::ZERO; BINS],
        }
    }

    /// Starts afresh with legs that differ by `skew`.
    pub(super) fn begin(&mut self, skew: Turned) {
        self.skew = skew;
        self.turn = Turn::new();
        self.sums.fill(Sum::ZERO);
        self.break_off();
    }

    /// Forgets the samples: a gap follows.
    pub(super) fn break_off(&mut self) {
        self.count = 0;
        self.is_settled = false;
        self.pass_over = 0;
        for memory in &mut self.filters {
            memory.restart();
        }
    }

    /// Filters [`INPUTS`] samples of the rate before into this rung; `fill` puts those of a leg in place.
    /// Whether [`Self::newest`] are new, for the rung after.
    pub(super) fn take(&mut self, bench: &mut Bench, fill: impl Fn(Leg, &mut [f32])) -> bool {
        let start = self.count as usize % POINTS;
        let mut outputs = [0.0; OUTPUTS];
        for (leg, memory) in [Leg::A, Leg::B].into_iter().zip(&mut self.filters) {
            fill(leg, bench.inputs());
            memory.decimate(bench, &mut outputs);
            let samples = match leg {
                Leg::A => &mut self.leg_a,
                Leg::B => &mut self.leg_b,
            };
            for (slot, &sample) in samples.get_mut(start..).unwrap_or_default().iter_mut().zip(&outputs) {
                *slot = sample;
            }
        }
        // The first outputs know nothing of what was before; the next chunk takes their place.
        if !self.is_settled {
            self.is_settled = true;
            return false;
        }
        self.count += OUTPUTS as u64;
        self.count.is_multiple_of(HOP)
    }

    /// The newest [`INPUTS`] samples of a leg, in order.
    pub(super) fn newest(&self, leg: Leg) -> &[f32] {
        let samples = match leg {
            Leg::A => &self.leg_a,
            Leg::B => &self.leg_b,
        };
        let is_upper = (self.count / HOP).is_multiple_of(2);
        let (lower, upper) = samples.split_at(POINTS / 2);
        if is_upper { upper } else { lower }
    }

    /// Whether a whole segment is there.
    pub(super) const fn has_segment(&self) -> bool {
        self.count >= POINTS as u64
    }

    /// Transforms the newest segment into the average, if it is its set's turn; then passes over `skip`.
    pub(super) fn take_segment(
        &mut self,
        (set, first_sample, end_sample): (SegmentSet, u64, u64),
        skip: u16,
        work: &mut Complexes,
    ) {
        if self.pass_over > 0 {
            self.pass_over -= 1;
            return self.turn.skip(1);
        }
        if !self.turn.admits(set, first_sample, end_sample) {
            return;
        }
        self.pass_over = skip;
        let Self { leg_a, leg_b, sums, skew, .. } = self;
        let mean = Complex { re: mean(leg_a), im: mean(leg_b) };
        let oldest = self.count as usize % POINTS;
        // 512 points and as many zeros: every second bin of the longer transform is one of the shorter.
        let column = |n: usize| {
            let (window_a, window_b) = skew.quarter_windows(n);
            core::array::from_fn(|row| {
                let at = (oldest + n + ROW * row) % POINTS;
                let point = Complex {
                    re: (leg_a[at] - mean.re) * window_a[row],
                    im: (leg_b[at] - mean.im) * window_b[row],
                };
                (point, point)
            })
        };
        fft::transform(work, column, |bin, x, mirror| {
            if bin % 2 == 0
                && let Some(sum) = sums.get_mut((bin / 2).wrapping_sub(FIRST_BIN))
            {
                let (a, b) = split(x, mirror);
                sum.add(a, skew.back(b, bin / 2));
            }
        });
    }

    /// Sends the average, if there is anything in it, and passes the turn on.
    pub(super) fn finish(&mut self, number: Number, full_rate_hz: f32, records: &mut dyn FnMut(&Message)) {
        let shape = Shape {
            rung: number.0,
            points: POINTS as u16,
            first_bin: FIRST_BIN as u16,
            scale: density_scale(full_rate_hz / number.pairs_per_sample() as f32, POINTS),
        };
        send(&self.sums, &shape, &self.turn, records);
        self.turn.pass_on();
        self.sums.fill(Sum::ZERO);
    }
}

/// One of the two.
#[derive(Clone, Copy, Debug)]
pub(super) enum Leg {
    A,
    B,
}

fn mean(samples: &[f32; POINTS]) -> f32 {
    samples.iter().sum::<f32>() / POINTS as f32
}
