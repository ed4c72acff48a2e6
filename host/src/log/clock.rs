//! The device's sample counter on the calendar.
//!
//! Each row of `clock` is an arrival: `utc = offset + elapsed(sample) + delay`, delay never negative. Below all
//! arrivals of ten minutes lies a line ([`envelope`]) whose slope is the error of the device's crystal then;
//! windows overlap by half and each counts for its middle, so that a crystal that warms and cools is followed.
//! The time a counter stands for is that of [`super::rate`].
//!
//! Where the computer's clock was set, or stood still while the computer slept, wall clock and monotonic clock
//! move against each other: there the fit begins anew, so that every instant is told by the wall clock that
//! was in force.
//!
//! The uncertainty of an instant is how far neighbouring windows disagree where one takes over from the other,
//! and the shortest delay, which cannot be seen one-way. A stretch of less than two minutes has no slope of
//! its own: there the least delayed arrival anchors the nominal rate, and the uncertainty is how far the least
//! offsets of the first and the last quarter lie apart, times 4/3, because a steady drift moves these two by
//! three quarters of what it adds up to.

pub mod envelope;

use super::rate::Rates;
use super::{Log, LogError};
use envelope::Line;
use jiff::Timestamp;

/// Least uncertainty claimed: the one-way delay that no fit can see, over USB. A serial bridge with
/// a latency timer has up to 20 ms, of which the least is what counts (common practice, no source).
const LEAST_UNCERTAINTY_NS: i64 = 2_000_000;
/// Length of a window, nanoseconds.
const WINDOW_NS: i128 = 600_000_000_000;
/// Shorter stretches have no slope of their own.
const SHORT_NS: i128 = 120_000_000_000;
/// ... nor do those with fewer arrivals.
const FEW: usize = 16;
/// Steeper lines are no crystal: 1 %.
const STEEPEST: f64 = 0.01;
/// Wall and monotonic clock that move apart by more between two arrivals: one of them was set or stood still.
const STEP_NS: i64 = 5_000_000;

/// An instant with how far it may be off.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Instant {
    /// Nanoseconds since 1970-01-01 00:00 UTC.
    pub utc_ns: i64,
    /// Half-width of the interval that should hold the true instant, nanoseconds.
    pub uncertainty_ns: i64,
}

/// Counter to UTC for one run.
#[derive(Clone, Debug, PartialEq)]
pub struct RunClock {
    rates: Rates,
    /// In order; at least one.
    pieces: Vec<Piece>,
}

/// What holds from a sample on.
#[derive(Clone, Copy, Debug, PartialEq)]
struct Piece {
    from_sample: u64,
    /// `utc - elapsed` is `base_ns` plus the line's height at `elapsed - origin_ns`, all in nanoseconds.
    base_ns: i128,
    origin_ns: i128,
    line: Line,
    uncertainty_ns: i64,
}

/// An arrival: sample, the time it stands for, and the two clocks of the computer.
#[derive(Clone, Copy, Debug)]
struct Arrived {
    sample: u64,
    elapsed_ns: i128,
    utc_ns: i64,
    monotonic_ns: i64,
}

impl RunClock {
    /// The clock of `run`; `None` when its rate is unknown or it has no clock pairs (a recording).
    ///
    /// # Errors
    /// When the log cannot be read.
    pub fn load(log: &Log, run: i64) -> Result<Option<Self>, LogError> {
        let connection = log.connection();
        let Some(rates) = Rates::load(connection, run)? else { return Ok(None) };
        let mut statement = connection
            .prepare_cached("SELECT sample, utc_ns, monotonic_ns FROM clock WHERE run = ? ORDER BY sample")?;
        let mut fit = Fit::default();
        let mut rows = statement.query([run])?;
        while let Some(row) = rows.next()? {
            let sample = u64::try_from(row.get::<_, i64>(0)?).unwrap_or(0);
            let elapsed_ns = rates.elapsed_ns(sample);
            fit.take(Arrived { sample, elapsed_ns, utc_ns: row.get(1)?, monotonic_ns: row.get(2)? });
        }
        let pieces = fit.finish();
        Ok((!pieces.is_empty()).then_some(Self { rates, pieces }))
    }

    /// When `sample` was taken.
    pub fn at(&self, sample: u64) -> Instant {
        let after = self.pieces.partition_point(|piece| piece.from_sample <= sample);
        let Some(piece) = self.pieces.get(after.saturating_sub(1)) else {
            return Instant { utc_ns: 0, uncertainty_ns: i64::MAX };
        };
        let elapsed_ns = self.rates.elapsed_ns(sample);
        let utc_ns = i64::try_from(elapsed_ns + piece.offset_ns(elapsed_ns)).unwrap_or(i64::MAX);
        Instant { utc_ns, uncertainty_ns: piece.uncertainty_ns }
    }
}

impl Piece {
    /// `utc - elapsed`.
    fn offset_ns(&self, elapsed_ns: i128) -> i128 {
        self.base_ns + self.line.at((elapsed_ns - self.origin_ns) as f64) as i128
    }
}

/// Fits arrivals one after another; holds those of one window.
#[derive(Default)]
struct Fit {
    pieces: Vec<Piece>,
    /// Arrivals of the stretch that the next window may need.
    window: Vec<Arrived>,
    /// Piece with which the present stretch begins, and the last window's middle.
    stretch: usize,
    middle_ns: i128,
}

impl Fit {
    fn take(&mut self, arrived: Arrived) {
        if let Some(last) = self.window.last() {
            let apart = |arrived: &Arrived| arrived.utc_ns.saturating_sub(arrived.monotonic_ns);
            if apart(&arrived).saturating_sub(apart(last)).saturating_abs() > STEP_NS {
                self.end_stretch();
            }
        }
        self.window.push(arrived);
        let begin_ns = self.window.first().map_or(0, |first| first.elapsed_ns);
        if arrived.elapsed_ns - begin_ns >= WINDOW_NS {
            self.add_window();
            self.window.retain(|arrived| arrived.elapsed_ns >= begin_ns + WINDOW_NS / 2);
        }
    }

    fn finish(mut self) -> Vec<Piece> {
        self.end_stretch();
        self.pieces
    }

    /// What is left makes the last window; another stretch follows.
    fn end_stretch(&mut self) {
        self.add_window();
        self.window.clear();
        self.settle_uncertainties();
        self.stretch = self.pieces.len();
    }

    fn add_window(&mut self) {
        let (Some(first), Some(last)) = (self.window.first(), self.window.last()) else { return };
        let span_ns = last.elapsed_ns - first.elapsed_ns;
        let middle_ns = first.elapsed_ns + span_ns / 2;
        let is_first = self.pieces.len() == self.stretch;
        let (base_ns, origin_ns) = (i128::from(first.utc_ns) - first.elapsed_ns, first.elapsed_ns);
        let line = if span_ns >= SHORT_NS && self.window.len() >= FEW {
            let height = |one: &Arrived| (i128::from(one.utc_ns) - one.elapsed_ns - base_ns) as f64;
            let points: Vec<(f64, f64)> =
                self.window.iter().map(|one| ((one.elapsed_ns - origin_ns) as f64, height(one))).collect();
            envelope::below(&points).filter(|line| line.slope.abs() <= STEEPEST)
        } else {
            None
        };
        let from_ns = if is_first { i128::MIN } else { (self.middle_ns + middle_ns) / 2 };
        let from = self.window.iter().find(|one| one.elapsed_ns >= from_ns).unwrap_or(last);
        match line {
            Some(line) => {
                let uncertainty_ns = LEAST_UNCERTAINTY_NS;
                let from_sample = from.sample;
                self.pieces.push(Piece { from_sample, base_ns, origin_ns, line, uncertainty_ns });
            }
            // What follows the last window of a stretch is close enough to it.
            None if !is_first => return,
            None => self.pieces.push(anchored(&self.window, from.sample)),
        }
        self.middle_ns = middle_ns;
    }

    /// Adds to the pieces of the stretch how far they disagree where one takes over from the other.
    fn settle_uncertainties(&mut self) {
        let Some(pieces) = self.pieces.get_mut(self.stretch..) else { return };
        for number in 1..pieces.len() {
            let Some([before, after]) = pieces.get_mut(number - 1..=number) else { return };
            let at_ns = after.origin_ns;
            let apart_ns = (before.offset_ns(at_ns) - after.offset_ns(at_ns)).abs();
            let with = LEAST_UNCERTAINTY_NS.saturating_add(i64::try_from(apart_ns).unwrap_or(i64::MAX));
            before.uncertainty_ns = before.uncertainty_ns.max(with);
            after.uncertainty_ns = after.uncertainty_ns.max(with);
        }
    }
}

/// The nominal rate through the least delayed of a few arrivals.
fn anchored(arrivals: &[Arrived], from_sample: u64) -> Piece {
    let offset = |one: &Arrived| i128::from(one.utc_ns) - one.elapsed_ns;
    let least = |arrivals: &[Arrived]| arrivals.iter().map(offset).min().unwrap_or(0);
    let quarter = arrivals.len().div_ceil(4);
    let first = least(arrivals.get(..quarter).unwrap_or(arrivals));
    let last = least(arrivals.get(arrivals.len() - quarter..).unwrap_or(arrivals));
    let spread_ns = i64::try_from((first - last).abs() * 4 / 3).unwrap_or(i64::MAX);
    Piece {
        from_sample,
        base_ns: least(arrivals),
        origin_ns: 0,
        line: Line { intercept: 0.0, slope: 0.0 },
        uncertainty_ns: spread_ns.max(LEAST_UNCERTAINTY_NS),
    }
}

/// RFC 3339 text of a UTC instant, to the microsecond (cut), with `Z`.
pub fn rfc3339(utc_ns: i64) -> String {
    // Every i64 of nanoseconds lies between the years 1677 and 2262, inside what the calendar knows.
    Timestamp::from_nanosecond(i128::from(utc_ns))
        .map_or_else(|_| utc_ns.to_string(), |time| format!("{time:.6}"))
}

#[cfg(test)]
mod tests;
