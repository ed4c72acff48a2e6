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

mod open;

use crate::block::{Block, Spans};
use crate::calibration;
use crate::extremes::is_edge;
use legwise_protocol::limits::{Limit, LimitMask, LimitSet};
use legwise_protocol::message::{Breach, Detection, Excursion, LegScale, Part};
use legwise_protocol::units::Span;
use open::{Open, Sample, Stretch};

/// What the check needs to know.
#[derive(Clone, Copy, Debug)]
pub struct LimitConfig {
    high_leg: i32,
    low_leg: i32,
    high_average: i32,
    low_average: i32,
    hysteresis_twice: i32,
    hold_off_samples: u32,
    longest_samples: u32,
    /// `Some` where the source declares a skew between the legs.
    edge_step_uv: Option<i32>,
    legs: [LegScale; 2],
}

impl LimitConfig {
    /// From validated settings. Limits are stored doubled, so the average needs no halving.
    pub fn new(limits: &LimitSet, detection: &Detection, legs: [LegScale; 2], is_skewed: bool) -> Self {
        let doubled = |window: Option<legwise_protocol::limits::Window>| match window {
            Some(window) => (window.high.uv().saturating_mul(2), window.low.uv().saturating_mul(2)),
            None => (i32::MAX, i32::MIN),
        };
        let (high_leg, low_leg) = doubled(limits.terminal);
        let (high_average, low_average) = doubled(limits.average);
        Self {
            high_leg,
            low_leg,
            high_average,
            low_average,
            hysteresis_twice: i32::try_from(detection.hysteresis_uv.saturating_mul(2)).unwrap_or(i32::MAX),
            hold_off_samples: detection.hold_off_samples.max(1),
            longest_samples: detection.longest_samples.max(1),
            edge_step_uv: is_skewed.then(|| i32::try_from(detection.edge_step_uv).unwrap_or(i32::MAX)),
            legs,
        }
    }

    /// Twice the distance beyond each limit, in bit order; negative inside. A limit that is not
    /// watched gives a large negative number.
    #[inline]
    fn distances(&self, leg_a: i32, leg_b: i32, twice_cm: i32) -> [i32; Limit::COUNT] {
        let (a, b) = (leg_a.saturating_mul(2), leg_b.saturating_mul(2));
        [
            a.saturating_sub(self.high_leg),
            self.low_leg.saturating_sub(a),
            b.saturating_sub(self.high_leg),
            self.low_leg.saturating_sub(b),
            twice_cm.saturating_sub(self.high_average),
            self.low_average.saturating_sub(twice_cm),
        ]
    }

    /// Whether any sample with these extremes breaks a limit.
    fn is_any_outside(&self, spans: &Spans) -> bool {
        let highest = self.distances(spans.leg_a.high, spans.leg_b.high, spans.twice_cm.high);
        let lowest = self.distances(spans.leg_a.low, spans.leg_b.low, spans.twice_cm.low);
        highest.into_iter().chain(lowest).any(|distance| distance > 0)
    }
}

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
    is_confirmed_outside: bool,
}

impl LimitCheck {
    /// Counts since the start.
    pub const fn counts(&self) -> LimitCounts {
        self.counts
    }

    /// Whether an excursion is open that is known not to be an edge suspect: the alarm condition.
    pub const fn is_confirmed_outside(&self) -> bool {
        self.is_confirmed_outside
    }

    /// Checks every sample of `block`.
    pub fn check(&mut self, config: &LimitConfig, block: &Block<'_>, events: &mut dyn FnMut(LimitEvent)) {
        if self.open.is_none() && !config.is_any_outside(&block.spans) {
            return;
        }
        let legs = block.leg_a.iter().zip(block.leg_b);
        let modes = block.twice_cm.iter().zip(block.dm);
        let codes = block.code_a.iter().zip(block.code_b);
        let mut before = block.dm_before;
        let mut ahead = block.dm.iter().skip(1);
        let mut stretch = Stretch::default();
        let samples = (block.first_sample..).zip(legs.zip(modes).zip(codes));
        for (index, (((&leg_a, &leg_b), (&twice_cm, &dm)), (&code_a, &code_b))) in samples {
            let after = ahead.next().copied().unwrap_or(block.dm_after);
            let distances = config.distances(leg_a, leg_b, twice_cm);
            let worst = distances.into_iter().fold(i32::MIN, i32::max);
            if worst > 0 {
                let is_clipped = block.clipped > 0 && calibration::is_clipped(&config.legs, code_a, code_b);
                let sample = Sample { index, leg_a, leg_b, twice_cm, dm, is_edge: false, is_clipped };
                let is_settled =
                    self.open.as_ref().is_some_and(|open| !open.is_suspect && !open.is_full(config, index));
                if is_settled {
                    stretch.take(&sample, &distances, worst);
                } else {
                    self.flush(&mut stretch);
                    let is_edge = config.edge_step_uv.is_some_and(|step| is_edge(before, dm, after, step));
                    self.outside(config, &Sample { is_edge, ..sample }, &distances, events);
                }
            } else if self.open.is_some() {
                self.flush(&mut stretch);
                self.inside(config, &distances, events);
            }
            before = dm;
        }
        self.flush(&mut stretch);
    }

    /// Adds a stretch of samples outside to the open excursion and to the counts.
    fn flush(&mut self, stretch: &mut Stretch) {
        let Some(open) = &mut self.open else { return };
        if stretch.outside == 0 {
            return;
        }
        let Stretch { outside, counts, worst, extreme_twice_uv, extreme_sample, .. } = *stretch;
        self.counts.outside += u64::from(outside);
        let mut mask = LimitMask::NONE;
        let totals = self.counts.outside_by_limit.iter_mut().zip(Limit::ALL);
        for ((total, limit), &count) in totals.zip(&counts) {
            *total += u64::from(count);
            if count > 0 {
                mask = mask.with(LimitMask::only(limit));
            }
        }
        if worst > open.worst {
            open.worst = worst;
            open.breach.worst_limit = stretch.worst_limit;
            open.breach.extreme_twice_uv = extreme_twice_uv;
            open.breach.extreme_sample = extreme_sample;
        }
        let breach = &mut open.breach;
        breach.limits = breach.limits.with(mask);
        breach.outside_samples += u64::from(outside);
        breach.area_twice_uv_samples = breach.area_twice_uv_samples.saturating_add(stretch.area);
        breach.dm.merge(stretch.dm);
        breach.clipped_samples += u64::from(stretch.clipped);
        open.limits = open.limits.with(mask);
        open.touch(stretch.last_outside);
        *stretch = Stretch::default();
    }

    /// Closes an open excursion because what follows is not known.
    pub fn cut(&mut self, events: &mut dyn FnMut(LimitEvent)) {
        self.close(true, events);
    }

    fn outside(
        &mut self,
        config: &LimitConfig,
        sample: &Sample,
        distances: &[i32; Limit::COUNT],
        events: &mut dyn FnMut(LimitEvent),
    ) {
        self.counts.outside += 1;
        let mut mask = LimitMask::NONE;
        let (mut worst, mut worst_limit) = (0, Limit::LegAHigh);
        let counts = self.counts.outside_by_limit.iter_mut();
        for ((&distance, limit), count) in distances.iter().zip(Limit::ALL).zip(counts) {
            if distance > 0 {
                *count += 1;
                mask = mask.with(LimitMask::only(limit));
                if distance > worst {
                    (worst, worst_limit) = (distance, limit);
                }
            }
        }
        let one = Breach {
            limits: mask,
            worst_limit,
            extreme_twice_uv: sample.value_twice(worst_limit),
            extreme_sample: sample.index,
            outside_samples: 1,
            area_twice_uv_samples: worst as u64,
            dm: Span { low: sample.dm, high: sample.dm },
            clipped_samples: u64::from(sample.is_clipped),
        };
        let is_suspicious = sample.is_edge && mask.is_average_only();
        match &mut self.open {
            None => self.begin(sample, one, worst, is_suspicious, events),
            Some(open)
                if open.is_full(config, sample.index)
                    && open.remains_suspect(sample.index, is_suspicious) =>
            {
                self.close(false, events);
                self.begin(sample, one, worst, is_suspicious, events);
            }
            Some(open) if open.is_full(config, sample.index) => {
                let part = if open.has_earlier_part { Part::Middle } else { Part::Begin };
                self.counts.excursions += u64::from(!open.has_earlier_part);
                events(LimitEvent::Closed(open.record(part, false, false)));
                let limits = open.limits.with(mask);
                let first_sample = sample.index;
                let (is_suspect, has_earlier_part) = (false, true);
                *open =
                    Open { first_sample, breach: one, worst, limits, is_suspect, has_earlier_part, ..*open };
                open.touch(sample.index);
            }
            Some(open) => {
                merge_breach(&mut open.breach, &one, config);
                open.worst = open.worst.max(worst);
                open.is_suspect = open.remains_suspect(sample.index, is_suspicious);
                open.limits = open.limits.with(mask);
                open.touch(sample.index);
            }
        }
        self.is_confirmed_outside = self.open.is_some_and(|open| !open.is_suspect);
    }

    fn begin(
        &mut self,
        sample: &Sample,
        breach: Breach,
        worst: i32,
        is_suspect: bool,
        events: &mut dyn FnMut(LimitEvent),
    ) {
        self.counts.begun += 1;
        let number = self.counts.begun;
        self.open = Some(Open {
            number,
            first_sample: sample.index,
            last_outside: sample.index,
            breach,
            limits: breach.limits,
            worst,
            inside_run: 0,
            has_earlier_part: false,
            is_suspect,
        });
        events(LimitEvent::Begun { number, sample: sample.index });
    }

    fn inside(
        &mut self,
        config: &LimitConfig,
        distances: &[i32; Limit::COUNT],
        events: &mut dyn FnMut(LimitEvent),
    ) {
        let Some(open) = &mut self.open else { return };
        let is_clear = distances
            .iter()
            .zip(Limit::ALL)
            .all(|(&distance, limit)| !open.limits.contains(limit) || distance <= -config.hysteresis_twice);
        open.inside_run = if is_clear { open.inside_run + 1 } else { 0 };
        if open.inside_run >= config.hold_off_samples {
            self.close(false, events);
        }
    }

    fn close(&mut self, is_cut: bool, events: &mut dyn FnMut(LimitEvent)) {
        let Some(open) = self.open.take() else { return };
        self.is_confirmed_outside = false;
        let is_suspect = open.is_suspect;
        if is_suspect {
            self.counts.edge_suspects += 1;
        } else if !open.has_earlier_part {
            self.counts.excursions += 1;
        }
        let part = if open.has_earlier_part { Part::Finish } else { Part::Whole };
        events(LimitEvent::Closed(open.record(part, is_suspect, is_cut)));
    }
}

/// Takes `other` into `breach`; the extreme further beyond its own limit stays.
pub fn merge_breach(breach: &mut Breach, other: &Breach, config: &LimitConfig) {
    if config.beyond(other) > config.beyond(breach) {
        breach.worst_limit = other.worst_limit;
        breach.extreme_twice_uv = other.extreme_twice_uv;
        breach.extreme_sample = other.extreme_sample;
    }
    breach.limits = breach.limits.with(other.limits);
    breach.outside_samples += other.outside_samples;
    breach.area_twice_uv_samples = breach.area_twice_uv_samples.saturating_add(other.area_twice_uv_samples);
    breach.dm.merge(other.dm);
    breach.clipped_samples += other.clipped_samples;
}

impl LimitConfig {
    /// Twice the distance of a breach's extreme beyond its limit.
    fn beyond(&self, breach: &Breach) -> i32 {
        let value = breach.extreme_twice_uv;
        match breach.worst_limit {
            Limit::LegAHigh | Limit::LegBHigh => value.saturating_sub(self.high_leg),
            Limit::LegALow | Limit::LegBLow => self.low_leg.saturating_sub(value),
            Limit::AverageHigh => value.saturating_sub(self.high_average),
            Limit::AverageLow => self.low_average.saturating_sub(value),
        }
    }
}
