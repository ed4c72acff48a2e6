//! The device's sample counter on the calendar.
//!
//! Each row of `clock` is an arrival: `utc = offset + sample / rate + delay`, delay never negative.
//! The row with the smallest `utc - sample / rate` was delayed least; it anchors the run, and the
//! nominal rate carries from there (or, stretch by stretch, the rates the device says it went over to,
//! [`super::rate`]). That is the touching point of the lower envelope of arrivals
//! (Zhang, Liu and Xia, *Clock synchronization algorithms for network measurements*, INFOCOM 2002);
//! its slope, the error of the device's crystal, is not fitted but shown as uncertainty: how far the
//! least offsets of the first and the last quarter of the run lie apart, times 4/3, because a steady
//! drift moves these two by three quarters of what it adds up to. The shortest delay itself cannot
//! be seen one-way and stays in the result.

use super::rate::Rates;
use super::{Log, LogError};
use jiff::Timestamp;

/// Least uncertainty claimed: the one-way delay that no fit can see, over USB. A serial bridge with
/// a latency timer has up to 20 ms, which shows as spread only in part (common practice, no source).
const LEAST_UNCERTAINTY_NS: i64 = 2_000_000;

/// An instant with how far it may be off.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Instant {
    /// Nanoseconds since 1970-01-01 00:00 UTC.
    pub utc_ns: i64,
    /// Half-width of the interval that should hold the true instant, nanoseconds.
    pub uncertainty_ns: i64,
}

/// Counter to UTC for one run.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct RunClock {
    offset_ns: i128,
    rates: Rates,
    uncertainty_ns: i64,
}

impl RunClock {
    /// The clock of `run`; `None` when its rate is unknown or it has no clock pairs (a recording).
    ///
    /// # Errors
    /// When the log cannot be read.
    pub fn load(log: &Log, run: i64) -> Result<Option<Self>, LogError> {
        let connection = log.connection();
        let Some(rates) = Rates::load(connection, run)? else { return Ok(None) };
        let mut statement =
            connection.prepare_cached("SELECT sample, utc_ns FROM clock WHERE run = ? ORDER BY sample")?;
        let offset = |row: &rusqlite::Row<'_>| {
            let (sample, utc_ns): (i64, i64) = (row.get(0)?, row.get(1)?);
            Ok(i128::from(utc_ns) - rates.elapsed_ns(u64::try_from(sample).unwrap_or(0)))
        };
        let offsets: Vec<i128> = statement.query_map([run], offset)?.collect::<Result<_, _>>()?;
        Ok(Self::fit(&offsets, rates))
    }

    /// From offsets `utc - sample / rate` in order of samples.
    fn fit(offsets_ns: &[i128], rates: Rates) -> Option<Self> {
        let offset_ns = *offsets_ns.iter().min()?;
        let quarter = offsets_ns.len().div_ceil(4);
        let first = *offsets_ns.iter().take(quarter).min()?;
        let last = *offsets_ns.iter().rev().take(quarter).min()?;
        let spread = i64::try_from((first - last).abs() * 4 / 3).unwrap_or(i64::MAX);
        Some(Self { offset_ns, rates, uncertainty_ns: spread.max(LEAST_UNCERTAINTY_NS) })
    }

    /// When `sample` was taken.
    pub fn at(&self, sample: u64) -> Instant {
        let utc_ns = self.offset_ns + self.rates.elapsed_ns(sample);
        let utc_ns = i64::try_from(utc_ns).unwrap_or(i64::MAX);
        Instant { utc_ns, uncertainty_ns: self.uncertainty_ns }
    }
}

/// RFC 3339 text of a UTC instant, to the microsecond (cut), with `Z`.
pub fn rfc3339(utc_ns: i64) -> String {
    // Every i64 of nanoseconds lies between the years 1677 and 2262, inside what the calendar knows.
    Timestamp::from_nanosecond(i128::from(utc_ns))
        .map_or_else(|_| utc_ns.to_string(), |time| format!("{time:.6}"))
}

#[cfg(test)]
mod tests {
    use super::*;

    const NOON_NS: i64 = 1_700_000_000_000_000_000;
    fn rates() -> Rates {
        Rates::new(500_000_000, [])
    }

    /// Offsets of an arrival per second, delayed by 0.2 ms plus a saw-tooth of up to 16 ms (a serial
    /// bridge's latency timer), on a crystal that is `ppm` slow.
    fn offsets(seconds: i64, ppm: f64) -> Vec<i128> {
        let delay_ns = |second: i64| 200_000 + second * 7 % 16 * 1_000_000;
        let drift_ns = |second: i64| (second as f64 * ppm * 1000.0) as i64;
        (0..seconds).map(|second| i128::from(NOON_NS + delay_ns(second) + drift_ns(second))).collect()
    }

    #[test]
    fn the_least_delayed_arrival_anchors_the_run() {
        let clock = RunClock::fit(&offsets(3600, 0.0), rates()).unwrap();
        // One hour at 500 kS/s.
        let instant = clock.at(1_800_000_000);
        assert_eq!(instant.utc_ns, NOON_NS + 3_600_000_000_000 + 200_000);
        assert_eq!(instant.uncertainty_ns, LEAST_UNCERTAINTY_NS);
    }

    #[test]
    fn a_slow_crystal_shows_as_uncertainty_that_holds_the_truth() {
        for ppm in [-50.0, 50.0] {
            let clock = RunClock::fit(&offsets(28_800, ppm), rates()).unwrap();
            let mut worst_ns = 0;
            for half_hour in 0..16_i64 {
                let second = half_hour * 1800 + 1799;
                let instant = clock.at(second as u64 * 500_000);
                let truth_ns = NOON_NS + second * 1_000_000_000 + (second as f64 * ppm * 1000.0) as i64;
                worst_ns = worst_ns.max((instant.utc_ns - truth_ns).abs());
            }
            println!("{ppm} ppm: worst error {worst_ns} ns, claimed {} ns", clock.uncertainty_ns);
            // 50 ppm of 8 h are 1.44 s; the saw-tooth adds at most a few seconds' worth of drift.
            assert!(worst_ns > 1_200_000_000);
            assert!(worst_ns <= clock.uncertainty_ns);
            assert!(clock.uncertainty_ns < 1_450_000_000);
        }
    }

    #[test]
    fn one_pair_is_enough_and_none_is_no_clock() {
        assert_eq!(RunClock::fit(&[], rates()), None);
        assert_eq!(RunClock::fit(&[5], rates()).map(|clock| clock.at(500_000).utc_ns), Some(1_000_000_005));
    }

    #[test]
    fn instants_are_written_to_the_microsecond() {
        // 1 700 000 000 s after the epoch is 2023-11-14T22:13:20Z (POSIX time, arithmetic).
        assert_eq!(rfc3339(NOON_NS + 123_456_789), "2023-11-14T22:13:20.123456Z");
        assert_eq!(rfc3339(0), "1970-01-01T00:00:00.000000Z");
        assert!(rfc3339(i64::MAX).starts_with("2262-04-11T23:47:16"));
    }
}
