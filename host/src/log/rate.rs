//! The rates a run was sampled at, one after another, and the time its counter stands for.
//!
//! The counter counts pairs. Where a device moved its rate by a few per cent to tell folded lines from true
//! ones, the counter runs as much faster or slower: time is the sum over the stretches of pairs over rate.

use super::store::ns_of;
use rusqlite::{Connection, OptionalExtension};

/// Nominal rate and changes of a run.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Rates {
    nominal_mhz: u64,
    changes: Vec<Change>,
}

#[derive(Clone, Copy, Debug, PartialEq, Eq)]
struct Change {
    first_sample: u64,
    rate_mhz: u64,
    /// Time of `first_sample` after sample 0.
    elapsed_ns: i128,
}

impl Rates {
    /// The rates of `run`; `None` when it never said its nominal one.
    ///
    /// # Errors
    /// When the log cannot be read.
    pub fn load(connection: &Connection, run: i64) -> rusqlite::Result<Option<Self>> {
        let nominal = connection
            .prepare_cached("SELECT sample_rate_mhz FROM run WHERE run = ?")?
            .query_row([run], |row| row.get::<_, Option<i64>>(0))
            .optional()?
            .flatten();
        let Some(nominal_mhz) = nominal.and_then(|rate| u64::try_from(rate).ok()).filter(|&rate| rate > 0)
        else {
            return Ok(None);
        };
        let mut statement = connection.prepare_cached(
            "SELECT first_sample, sample_rate_mhz FROM rate
             WHERE run = ? AND sample_rate_mhz > 0 AND first_sample >= 0 ORDER BY first_sample, number",
        )?;
        let change = |row: &rusqlite::Row<'_>| Ok((row.get::<_, i64>(0)?, row.get::<_, i64>(1)?));
        let changes: Vec<(i64, i64)> = statement.query_map([run], change)?.collect::<Result<_, _>>()?;
        let changes = changes.into_iter().map(|(sample, rate)| (sample.unsigned_abs(), rate.unsigned_abs()));
        Ok(Some(Self::new(nominal_mhz, changes)))
    }

    /// A nominal rate above 0, and changes in order: the first pair at the new rate, and that rate, above 0.
    pub fn new(nominal_mhz: u64, changes: impl IntoIterator<Item = (u64, u64)>) -> Self {
        let mut rates = Self { nominal_mhz, changes: Vec::new() };
        for (first_sample, rate_mhz) in changes {
            let elapsed_ns = rates.elapsed_ns(first_sample);
            rates.changes.push(Change { first_sample, rate_mhz, elapsed_ns });
        }
        rates
    }

    /// The rate most of the run is sampled at, millihertz.
    pub const fn nominal_mhz(&self) -> u64 {
        self.nominal_mhz
    }

    /// The rate at `sample`, millihertz.
    pub fn at_mhz(&self, sample: u64) -> u64 {
        self.change_before(sample).map_or(self.nominal_mhz, |change| change.rate_mhz)
    }

    /// Time from sample 0 to `sample`, nanoseconds, rounded down within each stretch.
    pub fn elapsed_ns(&self, sample: u64) -> i128 {
        match self.change_before(sample) {
            None => ns_of(sample, self.nominal_mhz),
            Some(change) => change.elapsed_ns + ns_of(sample - change.first_sample, change.rate_mhz),
        }
    }

    fn change_before(&self, sample: u64) -> Option<&Change> {
        let count = self.changes.partition_point(|change| change.first_sample <= sample);
        self.changes.get(count.checked_sub(1)?)
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn time_is_the_sum_of_pairs_over_rate() {
        // 1000, 1250 and 800 pairs a second: 10 s, 4 s and what follows.
        let rates = Rates::new(1_000_000, [(10_000, 1_250_000), (15_000, 800_000)]);
        let seconds = |sample| rates.elapsed_ns(sample) as f64 / 1e9;
        for (sample, expected) in [(0, 0.0), (5_000, 5.0), (10_000, 10.0), (12_500, 12.0), (15_000, 14.0)] {
            assert_eq!(seconds(sample), expected, "sample {sample}");
        }
        assert_eq!(seconds(15_800), 15.0);
        assert_eq!(
            [9_999, 10_000, 15_000].map(|sample| rates.at_mhz(sample)),
            [1_000_000, 1_250_000, 800_000]
        );
    }
}
