//! All runs together: sums of counts, worst of readings.
//!
//! The device's totals are exact. Where they are older than the log's last rows (a log cut off, or
//! still growing), the summaries since and the excursion rows are taken in, so that nothing stored
//! is overlooked; counts are then a lower bound.

use super::excursions::{RunTally, Tally};
use super::model::Excursions;
use super::runs::{Run, TailExtreme};
use legwise_protocol::limits::Limit;
use legwise_protocol::message::Extremes;

/// A worst reading and where it was taken. Twice microvolts, so that averages are exact.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(crate) struct Reading {
    pub twice_uv: i64,
    pub run: i64,
    pub sample: u64,
    /// It was taken within this many pairs from `sample` on.
    pub within_samples: u64,
}

/// Lowest and highest reading of one quantity.
#[derive(Clone, Copy, Debug, Default)]
pub(crate) struct Spread {
    pub low: Option<Reading>,
    pub high: Option<Reading>,
}

impl Spread {
    fn take_low(&mut self, reading: Reading) {
        let is_worse = self.low.is_none_or(|held| {
            (reading.twice_uv, reading.within_samples) < (held.twice_uv, held.within_samples)
        });
        if is_worse {
            self.low = Some(reading);
        }
    }

    fn take_high(&mut self, reading: Reading) {
        let is_worse = self.high.is_none_or(|held| {
            (-reading.twice_uv, reading.within_samples) < (-held.twice_uv, held.within_samples)
        });
        if is_worse {
            self.high = Some(reading);
        }
    }

    fn take_totals(&mut self, run: i64, extremes: &Extremes, factor: i64) {
        if extremes.is_empty() {
            return;
        }
        let reading = |value: i32, sample| Reading {
            twice_uv: factor * i64::from(value),
            run,
            sample,
            within_samples: 1,
        };
        self.take_low(reading(extremes.low.value, extremes.low.sample));
        self.take_high(reading(extremes.high.value, extremes.high.sample));
    }

    fn take_tail(&mut self, run: i64, extremes: &[Option<TailExtreme>; 2], factor: i64) {
        let reading = |extreme: TailExtreme| Reading {
            twice_uv: factor * extreme.value,
            run,
            sample: extreme.first_sample,
            within_samples: extreme.samples,
        };
        let [low, high] = extremes;
        if let Some(low) = low {
            self.take_low(reading(*low));
        }
        if let Some(high) = high {
            self.take_high(reading(*high));
        }
    }
}

/// Counts and extremes over all runs.
#[derive(Clone, Debug, Default)]
pub(crate) struct Account {
    pub pairs: u64,
    pub clipped: u64,
    pub outside: u64,
    /// `None` when some run does not say.
    pub outside_by_limit: Option<[u64; Limit::COUNT]>,
    pub excursions: u64,
    pub edge_suspects: u64,
    /// Gaps as the device counts them.
    pub gaps: u64,
    pub gap_samples: u64,
    pub examined_s: Option<f64>,
    pub outside_s: Option<f64>,
    pub leg_a: Spread,
    pub leg_b: Spread,
    pub cm: Spread,
    pub dm: Spread,
}

impl Account {
    /// Adds up `runs` and what the excursion tables hold.
    pub(crate) fn of(runs: &[Run], tally: &Tally) -> Self {
        let mut account = Self {
            outside_by_limit: Some([0; Limit::COUNT]),
            examined_s: Some(0.0),
            outside_s: Some(0.0),
            ..Self::default()
        };
        for run in runs {
            account.take_counts(run, tally.by_run.get(&run.number).copied().unwrap_or_default());
            if let Some(totals) = &run.totals {
                account.leg_a.take_totals(run.number, &totals.leg_a, 2);
                account.leg_b.take_totals(run.number, &totals.leg_b, 2);
                account.cm.take_totals(run.number, &totals.twice_cm, 1);
                account.dm.take_totals(run.number, &totals.dm, 2);
            }
            let [leg_a, leg_b, cm, dm] = &run.tail.extremes;
            account.leg_a.take_tail(run.number, leg_a, 2);
            account.leg_b.take_tail(run.number, leg_b, 2);
            account.cm.take_tail(run.number, cm, 1);
            account.dm.take_tail(run.number, dm, 2);
        }
        account.take_excursion_extremes(tally);
        account
    }

    fn take_counts(&mut self, run: &Run, counted: RunTally) {
        let totals = run.totals.unwrap_or_default();
        let is_final = run.end_cause.is_some() && run.tail.pairs == 0;
        let at_least = |exact: u64, counted: u64| if is_final { exact } else { exact.max(counted) };
        let outside = at_least(totals.outside + run.tail.outside, counted.outside_samples);
        self.pairs += run.pairs();
        self.clipped += totals.clipped + run.tail.clipped;
        self.outside += outside;
        self.excursions += at_least(totals.excursions, counted.excursions);
        self.edge_suspects += at_least(totals.edge_suspects, counted.edge_suspects);
        self.gaps += totals.gaps;
        self.gap_samples += totals.gap_samples;
        self.outside_by_limit = match (self.outside_by_limit, run.totals) {
            (Some(sums), Some(totals)) if outside == totals.outside => {
                let mut sums = sums;
                for (sum, more) in sums.iter_mut().zip(totals.outside_by_limit) {
                    *sum += more;
                }
                Some(sums)
            }
            (Some(sums), None) if outside == 0 => Some(sums),
            _ => None,
        };
        let seconds = |pairs: u64| run.rate_hz().map(|rate| pairs as f64 / rate);
        self.examined_s = self.examined_s.zip(seconds(run.pairs())).map(|(sum, more)| sum + more);
        self.outside_s = self.outside_s.zip(seconds(outside)).map(|(sum, more)| sum + more);
    }

    /// Real excursions hold extremes that the totals of a skewed source leave out at data edges.
    fn take_excursion_extremes(&mut self, tally: &Tally) {
        for (limit, extreme) in Limit::ALL.into_iter().zip(tally.extremes) {
            let Some((twice_uv, run, sample)) = extreme else {
                continue;
            };
            let reading = Reading { twice_uv, run, sample, within_samples: 1 };
            match limit {
                Limit::LegAHigh => self.leg_a.take_high(reading),
                Limit::LegALow => self.leg_a.take_low(reading),
                Limit::LegBHigh => self.leg_b.take_high(reading),
                Limit::LegBLow => self.leg_b.take_low(reading),
                Limit::AverageHigh => self.cm.take_high(reading),
                Limit::AverageLow => self.cm.take_low(reading),
            }
        }
    }

    /// The reading nearest to (or furthest beyond) `limit`.
    pub(crate) fn reading(&self, limit: Limit) -> Option<Reading> {
        match limit {
            Limit::LegAHigh => self.leg_a.high,
            Limit::LegALow => self.leg_a.low,
            Limit::LegBHigh => self.leg_b.high,
            Limit::LegBLow => self.leg_b.low,
            Limit::AverageHigh => self.cm.high,
            Limit::AverageLow => self.cm.low,
        }
    }

    /// The excursions part of the report.
    pub(crate) fn excursions(&self, tally: Tally) -> Excursions {
        Excursions {
            count: self.excursions,
            samples_outside: self.outside,
            time_outside_s: self.outside_s,
            share_outside: (self.pairs > 0).then(|| self.outside as f64 / self.pairs as f64),
            edge_suspects: self.edge_suspects,
            storms: tally.storms,
            coalesced: tally.coalesced,
            list: tally.list,
            list_truncated: tally.list_truncated,
            furthest: tally.furthest,
        }
    }
}
