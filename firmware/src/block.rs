//! The unit of work: up to [`BLOCK_PAIRS`] consecutive pairs and what is derived from them.
//!
//! Pairs are staged until a block is full, so every stage downstream sees the same blocks however the
//! source happened to cut its deliveries. A few pairs beyond the block (the lookahead) are staged too:
//! the skew interpolator and the edge rule need the samples that follow.
//!
//! ```text
//!            history (2)      block (up to 256)           lookahead (3)
//!          [ b-2  b-1 ] [ p0 p1 p2 ........... p255 ] [ p256 p257 p258 ]
//! ```

use legwise_protocol::units::Span;

/// Pairs in a full block.
pub const BLOCK_PAIRS: usize = 256;
/// Pairs staged beyond the block.
pub const LOOKAHEAD: usize = 3;
/// Pairs remembered from before the block.
pub const HISTORY: usize = 2;
/// Length of the staging buffers.
pub const STAGED: usize = BLOCK_PAIRS + LOOKAHEAD;
/// Aligned outputs per block: one more than the block, for the edge rule.
pub const ALIGNED: usize = BLOCK_PAIRS + 1;

/// Lowest and highest of each quantity in a block, microvolts.
#[derive(Clone, Copy, Debug)]
pub struct Spans {
    /// Leg A.
    pub leg_a: Span,
    /// Leg B.
    pub leg_b: Span,
    /// VA+VB, every sample.
    pub twice_cm: Span,
    /// VA−VB.
    pub dm: Span,
}

/// A block ready for the stages. All slices have the same length, except `dm_after`.
#[derive(Clone, Copy, Debug)]
pub struct Block<'a> {
    /// Index of the first pair.
    pub first_sample: u64,
    /// Raw codes of leg A.
    pub code_a: &'a [i32],
    /// Raw codes of leg B.
    pub code_b: &'a [i32],
    /// Leg A, microvolts.
    pub leg_a: &'a [i32],
    /// Leg B at its own sampling instants, microvolts: what the terminal window is judged by.
    pub leg_b: &'a [i32],
    /// VA+VB at leg A's instants, microvolts: twice the common mode.
    pub twice_cm: &'a [i32],
    /// VA−VB at leg A's instants, microvolts.
    pub dm: &'a [i32],
    /// Differential mode just before the block (of its first pair, when nothing came before).
    pub dm_before: i32,
    /// Differential mode just after the block (of its last pair, when nothing follows).
    pub dm_after: i32,
    /// Pairs with a leg at its converter's rail.
    pub clipped: u32,
    /// Lowest and highest of each quantity.
    pub spans: Spans,
}

impl Block<'_> {
    /// Pairs in the block.
    pub fn pairs(&self) -> usize {
        self.leg_a.len()
    }

    /// Index just past the last pair.
    pub fn end_sample(&self) -> u64 {
        self.first_sample + self.pairs() as u64
    }
}
