//! Puts times on samples: seconds into the run, and wall clock where the run has one.

use super::model::Moment;
use super::runs::Run;
use jiff::Timestamp;
use jiff::tz::TimeZone;

/// The clocks of all runs, and the zone local times are given in.
pub(crate) struct Calendar<'a> {
    runs: &'a [Run],
    zone: TimeZone,
}

impl<'a> Calendar<'a> {
    pub(crate) fn new(runs: &'a [Run], zone: TimeZone) -> Self {
        Self { runs, zone }
    }

    fn run(&self, number: i64) -> Option<&'a Run> {
        self.runs.iter().find(|run| run.number == number)
    }

    /// Pairs per second of a run.
    pub(crate) fn rate_hz(&self, run: i64) -> Option<f64> {
        self.run(run).and_then(Run::rate_hz)
    }

    /// The moment of `sample` in `run`; it is known to lie within `within_samples` from there on.
    pub(crate) fn moment(&self, run: i64, sample: u64, within_samples: u64) -> Moment {
        let facts = self.run(run);
        let rate_hz = facts.and_then(Run::rate_hz);
        let instant = facts.and_then(|run| run.clock.as_ref()).map(|clock| clock.at(sample));
        let stamp = instant.and_then(|instant| Timestamp::from_nanosecond(i128::from(instant.utc_ns)).ok());
        let spread_s = rate_hz.map_or(0.0, |rate| within_samples.saturating_sub(1) as f64 / rate);
        Moment {
            run,
            sample,
            within_samples,
            seconds: rate_hz.map(|rate| sample as f64 / rate),
            utc: stamp.map(|stamp| stamp.strftime("%Y-%m-%dT%H:%M:%S.%3fZ").to_string()),
            local: stamp.map(|stamp| {
                let local = stamp.to_zoned_datetime(self.zone.clone());
                local.strftime("%Y-%m-%dT%H:%M:%S.%3f%:z").to_string()
            }),
            uncertainty_s: instant.map(|instant| instant.uncertainty_ns as f64 / 1e9 + spread_s),
        }
    }

    /// Seconds of UTC between two samples of two runs, if both have clocks.
    pub(crate) fn seconds_between(&self, from: (i64, u64), to: (i64, u64)) -> Option<f64> {
        let utc_ns = |(run, sample): (i64, u64)| Some(self.run(run)?.clock.as_ref()?.at(sample).utc_ns);
        Some((utc_ns(to)? as f64 - utc_ns(from)? as f64) / 1e9)
    }
}
