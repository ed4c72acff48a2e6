//! Lowest and highest reading of every quantity: per block, per interval and since the start.

use crate::block::Block;
use legwise_protocol::message::{Extremes, Moment};
use legwise_protocol::units::Span;

/// The span of VA+VB with data edges left out: a sample next to a step of DM beyond `edge_step_uv` is a
/// data edge. For boards with skew.
pub fn settled_twice_cm(block: &Block<'_>, edge_step_uv: i32) -> Span {
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

/// Whether the DM step into or out of a sample is a data edge.
pub fn is_edge(before: i32, here: i32, after: i32, edge_step_uv: i32) -> bool {
    let step = edge_step_uv.unsigned_abs();
    (here.abs_diff(before) > step) | (after.abs_diff(here) > step)
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
