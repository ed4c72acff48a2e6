//! The account of a run: intervals of readings and the totals since the start.

use crate::block::Block;
use crate::extremes::track;
use crate::limit_check::LimitCounts;
use legwise_protocol::message::{Summary, Totals};
use legwise_protocol::units::Span;

/// Running interval and totals.
#[derive(Clone, Copy, Debug, Default)]
pub struct Account {
    interval: Summary,
    twice_cm_sum: i64,
    totals: Totals,
    /// Counts of the limit check when the interval began.
    counts_at_start: LimitCounts,
}

impl Account {
    /// Pairs in the interval so far.
    pub const fn interval_samples(&self) -> u32 {
        self.interval.samples
    }

    /// Takes a block; `settled_twice_cm` is the span of VA+VB that readings are made of: data edges are
    /// left out of it where a skew is declared.
    pub fn take(&mut self, block: &Block<'_>, settled_twice_cm: Span) {
        let spans = &block.spans;
        let pairs = block.pairs() as u32;
        if self.interval.samples == 0 {
            self.interval.first_sample = block.first_sample;
        }
        if self.totals.samples == 0 {
            self.totals.first_sample = block.first_sample;
        }
        self.interval.samples += pairs;
        self.interval.clipped += block.clipped;
        self.interval.leg_a.merge(spans.leg_a);
        self.interval.leg_b.merge(spans.leg_b);
        self.interval.twice_cm.merge(settled_twice_cm);
        self.interval.dm.merge(spans.dm);
        self.twice_cm_sum += block.twice_cm.iter().map(|&sum| i64::from(sum)).sum::<i64>();

        self.totals.samples += u64::from(pairs);
        self.totals.clipped += u64::from(block.clipped);
        track(&mut self.totals.leg_a, spans.leg_a, block.leg_a, block.first_sample);
        track(&mut self.totals.leg_b, spans.leg_b, block.leg_b, block.first_sample);
        track(&mut self.totals.twice_cm, settled_twice_cm, block.twice_cm, block.first_sample);
        track(&mut self.totals.dm, spans.dm, block.dm, block.first_sample);
    }

    /// Takes a gap.
    pub fn gap(&mut self, samples: u64) {
        self.totals.gaps += 1;
        self.totals.gap_samples += samples;
    }

    /// The interval so far, and a fresh one.
    pub fn finish_interval(&mut self, counts: &LimitCounts, alarm: bool) -> Summary {
        let samples = i64::from(self.interval.samples);
        let mean = self.twice_cm_sum.checked_div_euclid(samples).unwrap_or(0) as i32;
        let summary = Summary {
            twice_cm_mean_uv: mean,
            outside: (counts.outside - self.counts_at_start.outside) as u32,
            excursions: (counts.begun - self.counts_at_start.begun) as u32,
            alarm,
            ..self.interval
        };
        self.interval = Summary::default();
        self.twice_cm_sum = 0;
        self.counts_at_start = *counts;
        summary
    }

    /// Everything since the start.
    pub fn totals(&self, counts: &LimitCounts) -> Totals {
        Totals {
            outside: counts.outside,
            outside_by_limit: counts.outside_by_limit,
            excursions: counts.excursions,
            edge_suspects: counts.edge_suspects,
            ..self.totals
        }
    }
}
