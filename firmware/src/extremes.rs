//! Lowest and highest reading of every quantity: per block, per interval and since the start.

use crate::block::Block;
use legwise_protocol::message::{Extremes, Moment};
use legwise_protocol::units::Span;

/// Spans of one block.
#[derive(Clone, Copy, Debug)]
pub struct BlockSpans {
    /// Leg A.
    pub leg_a: Span,
    /// Leg B.
    pub leg_b: Span,
    /// VA+VB, every sample.
    pub twice_cm: Span,
    /// VA+VB with data edges left out; the same as `twice_cm` where no skew is declared.
    pub settled_twice_cm: Span,
    /// VA−VB.
    pub dm: Span,
}

impl BlockSpans {
    /// The spans of `block`. `edge_step_uv` is `Some` on a board with skew: a sample next to a step of
    /// DM beyond it is a data edge.
    pub fn of(block: &Block<'_>, edge_step_uv: Option<i32>) -> Self {
        let twice_cm = span_of(block.twice_cm);
        Self {
            leg_a: span_of(block.leg_a),
            leg_b: span_of(block.leg_b),
            twice_cm,
            settled_twice_cm: edge_step_uv.map_or(twice_cm, |step| settled_span(block, step)),
            dm: span_of(block.dm),
        }
    }
}

/// Whether the DM step into or out of a sample is a data edge.
pub fn is_edge(before: i32, here: i32, after: i32, edge_step_uv: i32) -> bool {
    let step = edge_step_uv.unsigned_abs();
    (here.abs_diff(before) > step) | (after.abs_diff(here) > step)
}

fn span_of(values: &[i32]) -> Span {
    // Two plain reductions: the form that compilers turn into wide min/max instructions.
    let (mut low, mut high) = (i32::MAX, i32::MIN);
    for &value in values {
        low = low.min(value);
        high = high.max(value);
    }
    Span { low, high }
}

fn settled_span(block: &Block<'_>, edge_step_uv: i32) -> Span {
    let mut span = Span::EMPTY;
    let mut before = block.dm_before;
    let mut ahead = block.dm.iter().skip(1);
    for (&sum, &here) in block.twice_cm.iter().zip(block.dm) {
        let after = ahead.next().copied().unwrap_or(block.dm_after);
        if !is_edge(before, here, after, edge_step_uv) {
            span.include(sum);
        }
        before = here;
    }
    span
}

/// Takes a block's span into running extremes; looks for the sample only when there is a new extreme.
/// `values` are the block's, so a span that left some out may name the first equal sample instead.
pub fn track(extremes: &mut Extremes, span: Span, values: &[i32], first_sample: u64) {
    let moment = |value: i32| {
        let offset = values.iter().position(|&candidate| candidate == value).unwrap_or(0);
        Moment { value, sample: first_sample + offset as u64 }
    };
    if span.is_empty() {
        return;
    }
    if span.low < extremes.low.value {
        extremes.low = moment(span.low);
    }
    if span.high > extremes.high.value {
        extremes.high = moment(span.high);
    }
}
