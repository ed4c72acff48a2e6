//! An excursion while it is open, and the samples that make it.

use super::LimitConfig;
use legwise_protocol::limits::{Limit, LimitMask};
use legwise_protocol::message::{Breach, Excursion, Part};
use legwise_protocol::units::Span;

/// An open excursion (of its current part).
#[derive(Clone, Copy, Debug)]
pub(super) struct Open {
    pub(super) number: u64,
    pub(super) first_sample: u64,
    pub(super) last_outside: u64,
    pub(super) breach: Breach,
    /// Every limit broken since the excursion began, earlier parts included.
    pub(super) limits: LimitMask,
    /// Twice the distance of the part's extreme beyond its limit.
    pub(super) worst: i32,
    pub(super) inside_run: u32,
    pub(super) has_earlier_part: bool,
    /// Whether every sample outside so far may be a data edge seen through the skew.
    pub(super) is_suspect: bool,
}

/// One sample, as the check sees it.
#[derive(Clone, Copy)]
pub(super) struct Sample {
    pub(super) index: u64,
    pub(super) leg_a: i32,
    pub(super) leg_b: i32,
    pub(super) twice_cm: i32,
    pub(super) dm: i32,
    pub(super) is_edge: bool,
    pub(super) is_clipped: bool,
}

/// Samples outside in a row, before they are added to the open excursion: kept small, because a long
/// excursion must not cost the device more than it has.
#[derive(Clone, Copy, Debug, Default)]
pub(super) struct Stretch {
    pub(super) outside: u32,
    /// Samples outside each limit, in bit order.
    pub(super) counts: [u32; Limit::COUNT],
    pub(super) worst: i32,
    pub(super) worst_limit: Limit,
    pub(super) extreme_twice_uv: i32,
    pub(super) extreme_sample: u64,
    pub(super) area: u64,
    pub(super) dm: Span,
    pub(super) clipped: u32,
    pub(super) last_outside: u64,
}

impl Stretch {
    /// Takes a sample whose largest distance is `worst`.
    #[inline]
    pub(super) fn take(&mut self, sample: &Sample, distances: &[i32; Limit::COUNT], worst: i32) {
        self.outside += 1;
        for (count, &distance) in self.counts.iter_mut().zip(distances) {
            *count += u32::from(distance > 0);
        }
        if worst > self.worst {
            let which = distances.iter().zip(Limit::ALL).find(|&(&distance, _)| distance == worst);
            self.worst = worst;
            self.worst_limit = which.map_or(Limit::LegAHigh, |(_, limit)| limit);
            self.extreme_twice_uv = sample.value_twice(self.worst_limit);
            self.extreme_sample = sample.index;
        }
        self.area += u64::from(worst.unsigned_abs());
        self.dm.include(sample.dm);
        self.clipped += u32::from(sample.is_clipped);
        self.last_outside = sample.index;
    }
}

impl Sample {
    /// Twice the voltage a limit is judged on.
    pub(super) fn value_twice(&self, limit: Limit) -> i32 {
        match limit {
            Limit::LegAHigh | Limit::LegALow => self.leg_a.saturating_mul(2),
            Limit::LegBHigh | Limit::LegBLow => self.leg_b.saturating_mul(2),
            Limit::AverageHigh | Limit::AverageLow => self.twice_cm,
        }
    }
}

impl Open {
    pub(super) fn touch(&mut self, index: u64) {
        self.last_outside = index;
        self.inside_run = 0;
    }

    /// Whether the part is as long as one may be.
    pub(super) const fn is_full(&self, config: &LimitConfig, index: u64) -> bool {
        index - self.first_sample >= config.longest_samples as u64
    }

    /// Whether it is still a suspect with one more sample outside: a peak that stands alone.
    pub(super) const fn remains_suspect(&self, index: u64, is_suspicious: bool) -> bool {
        self.is_suspect && is_suspicious && index > self.last_outside + 1
    }

    pub(super) fn record(&self, part: Part, is_edge_suspect: bool, is_cut: bool) -> Excursion {
        // A part is at most longest_samples (a u32) long, plus nothing: the next one begins beyond it.
        let samples = u32::try_from(self.last_outside - self.first_sample + 1).unwrap_or(u32::MAX);
        Excursion {
            number: self.number,
            first_sample: self.first_sample,
            samples,
            breach: self.breach,
            part,
            is_edge_suspect,
            is_cut,
        }
    }
}
