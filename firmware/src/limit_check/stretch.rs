//! A stretch of a block in which an excursion stays open: runs of samples outside, and what lies between.
//!
//! A long excursion must not cost the device more than it has. So the loops over samples do only what
//! needs every sample, in as few registers as possible; counts per limit are taken afterwards, for limits
//! that the block breaks at all; and the excursion itself is touched once per stretch.

use super::config::{LimitConfig, twice};
use super::open::Piece;
use super::windows::Windows;
use crate::block::Block;
use crate::calibration;
use crate::interval::Interval;
use core::hint::cold_path;
use core::iter::Zip;
use core::ops::Range;
use core::slice::Iter;
use legwise_protocol::limits::{Limit, LimitMask};
use legwise_protocol::message::Breach;
use legwise_protocol::units::Span;

/// The stretch so far. How *deep* a sample is outside: [`LimitConfig::depth`].
#[derive(Clone, Debug)]
pub(super) struct Stretch<'a> {
    /// Samples that are not taken yet.
    ahead: Samples<'a>,
    /// Position in the block up to which they reach.
    until: usize,
    /// Position of the first sample, which is outside.
    first: usize,
    /// Position just past the last sample outside.
    pub(super) end_outside: usize,
    /// Samples in a row, up to the last, that are clear of the limits broken.
    pub(super) clear_run: u32,
    /// Greatest depth.
    worst: i32,
    /// Position of the first sample so deep.
    worst_at: usize,
    /// Samples outside.
    outside: usize,
    /// Sum of the depths.
    area: u64,
    /// DM of the samples outside.
    dm: Interval,
}

impl<'a> Stretch<'a> {
    /// Still empty: the first sample, which is outside, and those up to position `until` are ahead.
    pub(super) fn new(block: &Block<'a>, first: usize, until: usize) -> Self {
        Self {
            ahead: samples(block, first..until),
            until,
            first,
            end_outside: first,
            clear_run: 0,
            worst: 0,
            worst_at: first,
            outside: 0,
            area: 0,
            dm: Interval::only(block.dm.get(first).copied().unwrap_or(0)),
        }
    }

    /// Position just past the last sample taken.
    pub(super) fn end(&self) -> usize {
        self.until - self.ahead.len()
    }

    /// Takes samples outside in a row.
    pub(super) fn take_outside(&mut self, config: &LimitConfig) {
        if config.is_average_judged {
            self.take_while_deep(|leg_a, leg_b, twice_cm| config.depth(leg_a, leg_b, twice_cm));
        } else {
            self.take_while_deep(|leg_a, leg_b, _| config.depth_of_legs(leg_a, leg_b));
        }
    }

    /// Takes samples while their depth is more than 0. Kept out of its caller, for the sake of registers.
    #[inline(never)]
    fn take_while_deep(&mut self, depth: impl Fn(i32, i32, i32) -> i32) {
        let begin = self.end();
        let mut ahead = self.ahead.clone();
        let (mut worst, mut area, mut seen) = (self.worst, self.area, self.dm);
        loop {
            let mut rest = ahead.clone(); // what is ahead once this sample is taken
            let Some(((&leg_a, &leg_b), (&twice_cm, &dm))) = rest.next() else { break };
            let depth = depth(leg_a, leg_b, twice_cm);
            if depth <= 0 {
                break;
            }
            if depth > worst {
                cold_path();
                worst = depth;
                self.worst_at = self.until - ahead.len();
            }
            area += u64::from(depth.unsigned_abs());
            seen.include(dm);
            ahead = rest;
        }
        self.ahead = ahead;
        (self.worst, self.area, self.dm) = (worst, area, seen);
        self.end_outside = self.end();
        self.outside += self.end_outside - begin;
        self.clear_run = 0;
    }

    /// Takes samples inside: see [`take_inside`].
    pub(super) fn take_inside(&mut self, config: &LimitConfig, clear: &Windows) {
        take_inside(config, &mut self.ahead, clear, &mut self.clear_run);
    }

    /// What the stretch adds to its excursion; `limits` are those it broke.
    pub(super) fn piece(&self, config: &LimitConfig, block: &Block<'_>, limits: LimitMask) -> Piece {
        let (worst_limit, extreme_twice_uv) = self.extreme(config, block);
        let index = |position: usize| block.first_sample + position as u64;
        let breach = Breach {
            limits,
            worst_limit,
            extreme_twice_uv,
            extreme_sample: index(self.worst_at),
            outside_samples: self.outside as u64,
            area_twice_uv_samples: self.area,
            dm: self.dm.span(),
            clipped_samples: self.clipped(config, block),
        };
        let last_outside = index(self.end_outside.saturating_sub(1));
        Piece { first_sample: index(self.first), last_outside, breach, worst: self.worst }
    }

    /// How many of the samples outside have a leg at its converter's rail.
    fn clipped(&self, config: &LimitConfig, block: &Block<'_>) -> u64 {
        if block.clipped == 0 {
            return 0;
        }
        let range = self.first..self.end_outside;
        let legs = part(block.leg_a, &range).iter().zip(part(block.leg_b, &range));
        let codes = part(block.code_a, &range).iter().zip(part(block.code_b, &range));
        let is_clipped = |code_a: i32, code_b: i32| calibration::is_clipped(&config.legs, code_a, code_b);
        let samples = legs.zip(part(block.twice_cm, &range)).zip(codes);
        samples
            .filter(|&(((&leg_a, &leg_b), &twice_cm), (&code_a, &code_b))| {
                is_clipped(code_a, code_b) && !config.inside.hold(leg_a, leg_b, twice_cm)
            })
            .count() as u64
    }

    /// The limit broken by most, and twice the voltage there.
    fn extreme(&self, config: &LimitConfig, block: &Block<'_>) -> (Limit, i32) {
        let at = |values: &[i32]| values.get(self.worst_at).copied().unwrap_or(0);
        let (leg_a, leg_b, twice_cm) = (at(block.leg_a), at(block.leg_b), at(block.twice_cm));
        let distances = config.distances(leg_a, leg_b, twice_cm);
        let deepest = distances.into_iter().zip(Limit::ALL).find(|&(distance, _)| distance == self.worst);
        let limit = deepest.map_or(Limit::LegAHigh, |(_, limit)| limit);
        let twice_uv = match limit {
            Limit::LegAHigh | Limit::LegALow => twice(leg_a),
            Limit::LegBHigh | Limit::LegBLow => twice(leg_b),
            Limit::AverageHigh | Limit::AverageLow => twice_cm,
        };
        (limit, twice_uv)
    }
}

/// The legs, and their sum and difference, of samples ahead.
pub(super) type Samples<'a> = Zip<Pairs<'a>, Pairs<'a>>;
type Pairs<'a> = Zip<Iter<'a, i32>, Iter<'a, i32>>;

/// The samples at some positions of a block.
pub(super) fn samples<'a>(block: &Block<'a>, range: Range<usize>) -> Samples<'a> {
    let legs = part(block.leg_a, &range).iter().zip(part(block.leg_b, &range));
    legs.zip(part(block.twice_cm, &range).iter().zip(part(block.dm, &range)))
}

/// Takes samples inside, up to the next one outside or until the excursion closes: enough in a row,
/// counted on in `clear_run`, are `clear` of the limits it broke.
#[inline(never)]
pub(super) fn take_inside(
    config: &LimitConfig,
    samples: &mut Samples<'_>,
    clear: &Windows,
    clear_run: &mut u32,
) {
    let (mut run, mut ahead) = (*clear_run, samples.clone());
    while run < config.hold_off_samples {
        let mut rest = ahead.clone();
        let Some(((&leg_a, &leg_b), (&twice_cm, _))) = rest.next() else { break };
        run += 1;
        if !clear.hold(leg_a, leg_b, twice_cm) {
            cold_path();
            if !config.inside.hold(leg_a, leg_b, twice_cm) {
                run = 0;
                break;
            }
            run = 0;
        }
        ahead = rest;
    }
    *samples = ahead;
    *clear_run = run;
}

/// Samples of a part of a block beyond each limit, in bit order.
pub(super) fn count_beyond(
    config: &LimitConfig,
    block: &Block<'_>,
    range: &Range<usize>,
) -> [u32; Limit::COUNT] {
    let ends = |values: &[i32], span: Span, window: Span| {
        if span.low >= window.low && span.high <= window.high {
            [0, 0]
        } else {
            count_beyond_ends(part(values, range), span, window)
        }
    };
    let [a_low, a_high] = ends(block.leg_a, block.spans.leg_a, config.leg);
    let [b_low, b_high] = ends(block.leg_b, block.spans.leg_b, config.leg);
    let [average_low, average_high] = ends(block.twice_cm, block.spans.twice_cm, config.twice_cm);
    [a_high, a_low, b_high, b_low, average_high, average_low]
}

/// How many of `values` lie below and above a window; `span` is that of the block they are part of.
#[inline(never)]
fn count_beyond_ends(values: &[i32], span: Span, window: Span) -> [u32; 2] {
    let all = values.len() as u32;
    if span.low > window.high {
        [0, all]
    } else if span.high < window.low {
        [all, 0]
    } else {
        let count = |[low, high]: [u32; 2], &value: &i32| {
            [low + u32::from(value < window.low), high + u32::from(value > window.high)]
        };
        values.iter().fold([0, 0], count)
    }
}

fn part<'a>(values: &'a [i32], range: &Range<usize>) -> &'a [i32] {
    values.get(range.clone()).unwrap_or(&[])
}
