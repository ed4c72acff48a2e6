//! Staging: deliveries of any length in, whole blocks out, calibrated, aligned and split into modes.

use crate::alignment::Aligner;
use crate::block::{ALIGNED, BLOCK_PAIRS, Block, HISTORY, LOOKAHEAD, STAGED, Spans};
use crate::calibration::{self, Calibration};
use crate::interval::Interval;
use crate::source::SourceDescription;
use legwise_protocol::units::Span;

/// Buffers between the source and the stages.
#[derive(Debug)]
pub struct Staging {
    legs: [Calibration; 2],
    aligner: Aligner,
    /// Index of the first staged pair.
    first_sample: u64,
    staged: usize,
    /// Whether the history holds samples that precede the staged ones without a hole.
    has_history: bool,
    dm_before: i32,
    code_a: [i32; STAGED],
    code_b: [i32; STAGED],
    leg_a: [i32; STAGED],
    leg_b: [i32; HISTORY + STAGED],
    aligned_b: [i32; ALIGNED],
    twice_cm: [i32; BLOCK_PAIRS],
    dm: [i32; ALIGNED],
}

impl Default for Staging {
    fn default() -> Self {
        Self::new()
    }
}

impl Staging {
    /// Empty buffers, for no source yet: all bytes are 0.
    pub const fn new() -> Self {
        Self {
            legs: [Calibration::UNSET; 2],
            aligner: Aligner::UNSET,
            first_sample: 0,
            staged: 0,
            has_history: false,
            dm_before: 0,
            code_a: [0; STAGED],
            code_b: [0; STAGED],
            leg_a: [0; STAGED],
            leg_b: [0; HISTORY + STAGED],
            aligned_b: [0; ALIGNED],
            twice_cm: [0; BLOCK_PAIRS],
            dm: [0; ALIGNED],
        }
    }

    /// Starts afresh with a source.
    pub fn begin(&mut self, source: &SourceDescription) {
        self.legs = source.legs.map(Calibration::new);
        self.aligner = Aligner::new(source.skew_ns, source.sample_rate_mhz);
        self.restart(0);
    }

    /// Whether the source declared a skew between the legs.
    pub const fn is_skewed(&self) -> bool {
        self.aligner.is_skewed()
    }

    /// Index of the pair expected next.
    pub const fn next_sample(&self) -> u64 {
        self.first_sample + self.staged as u64
    }

    /// Forgets everything; the next pair has index `first_sample` and no history.
    pub fn restart(&mut self, first_sample: u64) {
        self.first_sample = first_sample;
        self.staged = 0;
        self.has_history = false;
    }

    /// Takes pairs from the front of both slices, as many as fit; returns how many.
    pub fn fill(&mut self, code_a: &[i32], code_b: &[i32]) -> usize {
        let pairs = code_a.len().min(code_b.len()).min(STAGED - self.staged);
        for (staged, codes) in [(&mut self.code_a, code_a), (&mut self.code_b, code_b)] {
            let free = staged.get_mut(self.staged..).unwrap_or(&mut []);
            for (slot, &code) in free.iter_mut().zip(codes.get(..pairs).unwrap_or(&[])) {
                *slot = code;
            }
        }
        self.staged += pairs;
        pairs
    }

    /// Whether a whole block and its lookahead are staged.
    pub const fn is_full(&self) -> bool {
        self.staged == STAGED
    }

    /// The next block: 256 pairs when full, what is left otherwise. `None` when nothing is staged.
    /// Call [`Staging::advance`] once it has been dealt with.
    pub fn block(&mut self) -> Option<Block<'_>> {
        let pairs = self.staged.min(BLOCK_PAIRS);
        if pairs == 0 {
            return None;
        }
        if self.staged < STAGED {
            self.repeat_last();
        }
        let [scale_a, scale_b] = self.legs;
        let spans_of_codes = (self.convert_a(&scale_a, pairs)?, self.convert_b(&scale_b, pairs)?);
        if self.aligner.is_skewed() {
            self.aligner.align(&self.leg_b, &mut self.aligned_b);
        }
        let (twice_cm, dm) = self.split_modes(pairs)?;
        let (code_a, code_b) = (self.code_a.get(..pairs)?, self.code_b.get(..pairs)?);
        let is_clear = scale_a.is_off_rails(spans_of_codes.0) && scale_b.is_off_rails(spans_of_codes.1);
        let legs = [*scale_a.scale(), *scale_b.scale()];
        Some(Block {
            first_sample: self.first_sample,
            code_a,
            code_b,
            leg_a: self.leg_a.get(..pairs)?,
            leg_b: self.leg_b.get(HISTORY..HISTORY + pairs)?,
            twice_cm: self.twice_cm.get(..pairs)?,
            dm: self.dm.get(..pairs)?,
            dm_before: if self.has_history { self.dm_before } else { *self.dm.first()? },
            dm_after: *self.dm.get(pairs)?,
            clipped: if is_clear { 0 } else { calibration::count_clipped(&legs, code_a, code_b) },
            spans: Spans {
                leg_a: scale_a.span(spans_of_codes.0),
                leg_b: scale_b.span(spans_of_codes.1),
                twice_cm,
                dm,
            },
        })
    }

    /// Converts leg A; the span of the block's own codes.
    fn convert_a(&mut self, scale: &Calibration, pairs: usize) -> Option<Span> {
        let (own, ahead) = self.leg_a.split_at_mut_checked(pairs)?;
        scale.convert(self.code_a.get(pairs..)?, ahead);
        Some(scale.convert(self.code_a.get(..pairs)?, own))
    }

    /// Converts leg B, behind its history; the span of the block's own codes.
    fn convert_b(&mut self, scale: &Calibration, pairs: usize) -> Option<Span> {
        let (history, staged) = self.leg_b.split_at_mut_checked(HISTORY)?;
        let (own, ahead) = staged.split_at_mut_checked(pairs)?;
        scale.convert(self.code_b.get(pairs..)?, ahead);
        let span = scale.convert(self.code_b.get(..pairs)?, own);
        if !self.has_history {
            history.fill(*own.first()?);
        }
        Some(span)
    }

    /// Sum and difference of the legs, and their spans.
    fn split_modes(&mut self, pairs: usize) -> Option<(Span, Span)> {
        let b_at_a: &[i32] =
            if self.aligner.is_skewed() { &self.aligned_b } else { self.leg_b.get(HISTORY..)? };
        let (&a, &b) = (self.leg_a.first()?, b_at_a.first()?);
        let (mut sums, mut differences) = (Interval::only(a + b), Interval::only(a - b));
        let legs = self.leg_a.get(..pairs)?.iter().zip(b_at_a);
        for ((sum, difference), (&a, &b)) in self.twice_cm.iter_mut().zip(&mut self.dm).zip(legs) {
            *sum = a + b;
            *difference = a - b;
            sums.include(a + b);
            differences.include(a - b);
        }
        *self.dm.get_mut(pairs)? = *self.leg_a.get(pairs)? - *b_at_a.get(pairs)?;
        Some((sums.span(), differences.span()))
    }

    /// Moves on past the block just dealt with: its tail becomes history, the lookahead moves up.
    pub fn advance(&mut self) {
        let pairs = self.staged.min(BLOCK_PAIRS);
        if pairs == 0 {
            return;
        }
        self.dm_before = self.dm.get(pairs - 1).copied().unwrap_or(0);
        // The two samples before the new front, in the buffer that starts with the old history.
        self.leg_b.copy_within(pairs..pairs + HISTORY, 0);
        self.code_a.copy_within(pairs.., 0);
        self.code_b.copy_within(pairs.., 0);
        self.has_history = true;
        self.first_sample += pairs as u64;
        self.staged -= pairs;
    }

    /// At the end of the data the last pair stands for what would follow.
    fn repeat_last(&mut self) {
        for codes in [&mut self.code_a, &mut self.code_b] {
            let last = codes.get(self.staged.wrapping_sub(1)).copied().unwrap_or(0);
            for slot in codes.iter_mut().skip(self.staged) {
                *slot = last;
            }
        }
    }
}

const _: () = assert!(LOOKAHEAD >= 3, "an earlier leg B needs two samples beyond the one after the block");
