//! The per-sample limit check: which samples lie outside the permitted windows, and how far.
//!
//! Up to six limits at once: each leg against the terminal window, the average against its own. A
//! sample is outside when any limit is strictly broken. An excursion runs from the first sample
//! outside to the last:
//!
//! ```text
//!                 any limit broken
//!        +--------------------------------+
//!        |                                v
//!   +---------+                      +---------+ ---+ outside again, or inside by less than
//!   |  Quiet  |                      |  Open   |    | the hysteresis: stay open
//!   +---------+                      +---------+ <--+
//!        ^                                |
//!        +--------------------------------+
//!     every limit it broke is kept by the hysteresis for `hold_off_samples` in a row,
//!     or a gap, or the end of the data (then the excursion is marked as cut)
//! ```
//!
//! On a board with skew, an excursion is an *edge suspect* when only the average broke a limit, at data
//! edges, and never in two neighbouring samples. Traffic with bits shorter than the hold-off strings
//! several such peaks into one excursion; it stays a suspect, because no peak speaks for another.
//!
//! Hysteresis and hold-off only decide when an excursion *closes*: they add no sample to it and none
//! to the counts. A block whose extremes touch no limit needs no look at its samples.
//!
//! Samples are positions in a block here: the check leaps from one sample outside to the next, and what
//! lies between two leaps, a *stretch*, becomes one piece of an excursion.

mod config;
mod open;
mod stretch;
mod windows;

use crate::block::Block;
pub use config::LimitConfig;
use core::ops::Range;
use legwise_protocol::limits::{Limit, LimitMask};
use legwise_protocol::message::{Breach, Excursion, Part};
use open::{Open, Piece};
use stretch::{Stretch, count_beyond, samples, take_inside};

/// Exact counts since the start.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct LimitCounts {
    /// Samples outside any limit.
    pub outside: u64,
    /// Samples outside each limit, in bit order.
    pub outside_by_limit: [u64; Limit::COUNT],
    /// Excursions begun, edge suspects included.
    pub begun: u64,
    /// Excursions confirmed: closed or reported in part, edge suspects left out.
    pub excursions: u64,
    /// Edge suspects.
    pub edge_suspects: u64,
}

/// What the check tells the stages after it.
#[derive(Clone, Copy, Debug)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum LimitEvent {
    /// An excursion began at this sample.
    Begun {
        /// Its number, from 1.
        number: u64,
        /// Its first sample.
        sample: u64,
    },
    /// An excursion closed, or a part of it is complete.
    Closed(Excursion),
}

/// The running check.
#[derive(Clone, Copy, Debug, Default)]
pub struct LimitCheck {
    open: Option<Open>,
    counts: LimitCounts,
}

impl LimitCheck {
    /// Counts since the start.
    pub const fn counts(&self) -> LimitCounts {
        self.counts
    }

    /// Whether an excursion is open that is known not to be an edge suspect: the alarm condition.
    pub const fn is_confirmed_outside(&self) -> bool {
        matches!(self.open, Some(Open { is_suspect: false, .. }))
    }

    /// Checks every sample of `block`.
    pub fn check(&mut self, config: &LimitConfig, block: &Block<'_>, events: &mut dyn FnMut(LimitEvent)) {
        let broken = config.broken_in(&block.spans);
        if self.open.is_none() && broken.is_empty() {
            return;
        }
        let mut at = 0;
        while let Some(first) = self.next_outside(config, block, at, events) {
            at = self.follow(config, block, broken, first, events);
        }
    }

    /// Closes an open excursion because what follows is not known.
    pub fn cut(&mut self, events: &mut dyn FnMut(LimitEvent)) {
        self.close(true, events);
    }

    /// The position of the next sample outside; an open excursion takes the samples up to there, and
    /// closes if it is due.
    fn next_outside(
        &mut self,
        config: &LimitConfig,
        block: &Block<'_>,
        from: usize,
        events: &mut dyn FnMut(LimitEvent),
    ) -> Option<usize> {
        let mut at = from;
        if let Some(open) = &mut self.open {
            let mut ahead = samples(block, at..block.pairs());
            take_inside(config, &mut ahead, &config.clear_of(open.limits), &mut open.clear_run);
            at = block.pairs() - ahead.len();
            if open.clear_run < config.hold_off_samples {
                return (at < block.pairs()).then_some(at);
            }
            self.close(false, events);
        }
        config.inside.first_beyond(block, at)
    }

    /// Follows an excursion from its sample outside at position `first`, until it closes, its part is
    /// complete or the block ends; the position then. `broken` are the limits broken in the block.
    fn follow(
        &mut self,
        config: &LimitConfig,
        block: &Block<'_>,
        broken: LimitMask,
        first: usize,
        events: &mut dyn FnMut(LimitEvent),
    ) -> usize {
        let index = block.first_sample + first as u64;
        // Of a suspect, every sample outside has to be asked by itself whether it is an edge.
        let may_be_suspect = config.is_skewed() && !self.is_confirmed_outside();
        let room = match self.open.as_ref().map_or(0, |open| open.room(config, index)) {
            _ if may_be_suspect => 1,
            0 => u64::from(config.longest_samples),
            room => room,
        };
        let until = first.saturating_add(usize::try_from(room).unwrap_or(usize::MAX)).min(block.pairs());

        let mut stretch = Stretch::new(block, first, until);
        // Limits broken since the excursion began, and within the stretch: counted up to `counted`.
        let mut so_far = self.open.as_ref().map_or(LimitMask::NONE, |open| open.limits);
        let (mut limits, mut counted) = (LimitMask::NONE, first);
        let mut clear = if so_far.is_empty() { config.inside } else { config.clear_of(so_far) };
        let is_closed = loop {
            stretch.take_outside(config);
            // If the block can break another limit, it must be known now whether this run did.
            if so_far.with(broken) != so_far {
                limits = limits.with(self.count(config, block, counted..stretch.end_outside));
                counted = stretch.end_outside;
                so_far = so_far.with(limits);
                clear = config.clear_of(so_far);
            }
            stretch.take_inside(config, &clear);
            let is_closed = stretch.clear_run >= config.hold_off_samples;
            if is_closed || stretch.end() == until {
                break is_closed;
            }
        };
        if counted < stretch.end_outside {
            limits = limits.with(self.count(config, block, counted..stretch.end_outside));
        }
        let is_suspicious = may_be_suspect && limits.is_average_only() && config.is_edge(block, first);
        self.take(config, &stretch.piece(config, block, limits), is_suspicious, events);
        if is_closed {
            self.close(false, events);
        } else if let Some(open) = &mut self.open {
            open.clear_run = stretch.clear_run;
        }
        stretch.end()
    }

    /// Adds what a stretch has to the excursion, and begins one, or a part of one, where it is due.
    fn take(
        &mut self,
        config: &LimitConfig,
        piece: &Piece,
        is_suspicious: bool,
        events: &mut dyn FnMut(LimitEvent),
    ) {
        self.counts.outside += piece.breach.outside_samples;
        let index = piece.first_sample;
        match &mut self.open {
            Some(open) if open.room(config, index) > 0 => {
                open.is_suspect = open.remains_suspect(index, is_suspicious);
                open.take(piece);
            }
            Some(open) if !open.remains_suspect(index, is_suspicious) => {
                let part = if open.has_earlier_part { Part::Middle } else { Part::Begin };
                self.counts.excursions += u64::from(!open.has_earlier_part);
                open.is_suspect = false; // a part that is reported is no suspect, nor are those after it
                events(LimitEvent::Closed(open.record(part, false)));
                open.begin_part(piece);
            }
            _ => {
                self.close(false, events);
                self.counts.begun += 1;
                let number = self.counts.begun;
                self.open = Some(Open::new(number, piece, is_suspicious));
                events(LimitEvent::Begun { number, sample: index });
            }
        }
    }

    /// Counts the samples of a part of a block that break each limit; the limits that are broken.
    /// Kept out of its caller, for the sake of registers.
    #[inline(never)]
    fn count(&mut self, config: &LimitConfig, block: &Block<'_>, range: Range<usize>) -> LimitMask {
        let mut limits = LimitMask::NONE;
        let counts = count_beyond(config, block, &range);
        for ((total, limit), count) in self.counts.outside_by_limit.iter_mut().zip(Limit::ALL).zip(counts) {
            if count > 0 {
                *total += u64::from(count);
                limits = limits.with(LimitMask::only(limit));
            }
        }
        limits
    }

    /// Closes the open excursion, if there is one.
    fn close(&mut self, is_cut: bool, events: &mut dyn FnMut(LimitEvent)) {
        let Some(open) = &self.open else { return };
        if open.is_suspect {
            self.counts.edge_suspects += 1;
        } else if !open.has_earlier_part {
            self.counts.excursions += 1;
        }
        let part = if open.has_earlier_part { Part::Finish } else { Part::Whole };
        let record = open.record(part, is_cut);
        self.open = None;
        events(LimitEvent::Closed(record));
    }
}

/// Takes `other` into `breach`; the extreme further beyond its own limit stays.
pub fn merge_breach(breach: &mut Breach, other: &Breach, config: &LimitConfig) {
    if config.beyond(other) > config.beyond(breach) {
        breach.worst_limit = other.worst_limit;
        breach.extreme_twice_uv = other.extreme_twice_uv;
        breach.extreme_sample = other.extreme_sample;
    }
    add_sums(breach, other);
}

/// Takes all of `other` but its extreme into `breach`.
fn add_sums(breach: &mut Breach, other: &Breach) {
    breach.limits = breach.limits.with(other.limits);
    breach.outside_samples += other.outside_samples;
    breach.area_twice_uv_samples = breach.area_twice_uv_samples.saturating_add(other.area_twice_uv_samples);
    breach.dm.merge(other.dm);
    breach.clipped_samples += other.clipped_samples;
}
