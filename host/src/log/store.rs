//! Frames to rows: which run they belong to, which table, what is put together first.
//!
//! Everything in memory that a transaction relies on is [`State`]; it is copied at every commit and
//! restored when a transaction fails, so that memory and file never disagree.

use super::rows;
use super::spectrum::Assembly;
use legwise_protocol::framing::{Delivery, DeviceFrame};
use legwise_protocol::message::{Message, Outcome};
use rusqlite::{Connection, Result};
use std::collections::BTreeMap;
use std::collections::btree_map::Entry;

/// Distance between two rows of `clock`.
const CLOCK_PAIR_NS: i64 = 1_000_000_000;
/// UTC moving against monotonic time by more than this between two clock rows is noted as a step.
/// A slewed clock moves at most 0.5 ms per second (adjtimex(2), common practice).
const CLOCK_STEP_NS: i64 = 100_000_000;

/// When bytes arrived, by two clocks: UTC can be stepped, the monotonic one cannot.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub struct Arrival {
    /// Nanoseconds since 1970-01-01 00:00 UTC.
    pub utc_ns: i64,
    /// Nanoseconds of a clock that never steps; its zero is free.
    pub monotonic_ns: i64,
}

/// What the link did during one run.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub struct LinkCounts {
    /// Frames that arrived and were understood.
    pub frames: u64,
    /// Frames missing by sequence number.
    pub missing_frames: u64,
    /// Frames whose sequence number had been seen or passed already.
    pub repeated_frames: u64,
    /// Frames dropped because stuffing or checksum was wrong.
    pub damaged_frames: u64,
    /// Frames dropped because they were too long.
    pub oversize_frames: u64,
    /// Sound frames of a kind this version does not know.
    pub unknown_frames: u64,
    /// Bytes in all dropped frames.
    pub dropped_bytes: u64,
}

/// What became of a frame.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Stored {
    /// It has a row, or changed one.
    New,
    /// A kept message that was stored before; nothing changed.
    Repeated,
    /// Part of a spectrum whose other parts are to come, or were lost.
    Partial,
    /// It waits in memory: nothing can be stored at present.
    Waiting,
    /// There is no table for it: replies, and kept messages without a number. What is odd becomes a note.
    NotStored,
}

/// What memory knows about the file.
#[derive(Clone, Debug, Default)]
pub(super) struct State {
    runs: BTreeMap<u32, Run>,
}

#[derive(Clone, Debug)]
struct Run {
    run: i64,
    sample_rate_mhz: Option<u64>,
    spectra: Assembly,
    clock: ClockPick,
}

/// Chooses the row of `clock` for each second: the frame that was delayed least.
#[derive(Clone, Copy, Debug, Default)]
struct ClockPick {
    /// Begin of the running second, monotonic.
    since_ns: i64,
    best: Option<Pair>,
    /// UTC minus monotonic of the last row.
    offset_ns: Option<i64>,
}

#[derive(Clone, Copy, Debug)]
struct Pair {
    delay_ns: i128,
    sample: u64,
    arrival: Arrival,
}

impl State {
    /// The row number in `run` of a boot.
    pub(super) fn run_of(&self, boot_id: u32) -> Option<i64> {
        self.runs.get(&boot_id).map(|run| run.run)
    }

    /// Spectra that lost a part.
    pub(super) fn dropped_spectra(&self, at_end: bool) -> u64 {
        self.runs.values().map(|run| run.spectra.dropped(at_end)).sum()
    }

    /// Stores one frame; `stores_clock` when arrivals tell real time.
    pub(super) fn store(
        &mut self,
        connection: &Connection,
        frame: &DeviceFrame,
        arrival: Arrival,
        stores_clock: bool,
    ) -> Result<Stored> {
        let run = match self.runs.entry(frame.envelope.boot_id) {
            Entry::Occupied(entry) => entry.into_mut(),
            Entry::Vacant(entry) => {
                let run = rows::new_run(connection, frame.envelope.boot_id)?;
                let (spectra, clock) = (Assembly::default(), ClockPick::default());
                entry.insert(Run { run, sample_rate_mhz: None, spectra, clock })
            }
        };
        if stores_clock {
            run.clock.offer(connection, run.run, run.sample_rate_mhz, frame.envelope.sample, arrival)?;
        }
        match frame.envelope.delivery {
            Delivery::Kept { number } => run.kept(connection, number, frame, arrival),
            Delivery::Passing => run.passing(connection, frame, arrival),
        }
    }

    /// Writes the clock pairs still being chosen.
    pub(super) fn finish(&mut self, connection: &Connection) -> Result<()> {
        for run in self.runs.values_mut() {
            if let Some(pair) = run.clock.best.take() {
                run.clock.write(connection, run.run, pair)?;
            }
        }
        Ok(())
    }
}

impl Run {
    fn kept(
        &mut self,
        connection: &Connection,
        number: u32,
        frame: &DeviceFrame,
        arrival: Arrival,
    ) -> Result<Stored> {
        let (run, sample) = (self.run, frame.envelope.sample);
        let changed = match &frame.message {
            Message::Settings(settings) => rows::settings(connection, run, number, sample, settings)?,
            Message::Excursion(excursion) => rows::excursion(connection, run, number, excursion)?,
            Message::Storm(storm) => rows::storm(connection, run, number, storm)?,
            Message::Snippet(part) => rows::snippet(connection, run, number, part)?,
            Message::Gap(gap) => rows::gap(connection, run, number, gap)?,
            Message::Rate(change) => rows::rate(connection, run, number, change)?,
            Message::Loss(loss) => rows::loss(connection, run, loss)?,
            Message::End(end) => rows::totals(connection, run, sample, &end.totals, Some(end.cause))?,
            _ => return self.passing(connection, frame, arrival),
        };
        Ok(if changed > 0 { Stored::New } else { Stored::Repeated })
    }

    fn passing(&mut self, connection: &Connection, frame: &DeviceFrame, arrival: Arrival) -> Result<Stored> {
        let run = self.run;
        match &frame.message {
            Message::Hello(hello) => {
                let rate = Some(hello.sample_rate_mhz).filter(|&rate| rate > 0);
                if rate != self.sample_rate_mhz {
                    self.sample_rate_mhz = rate;
                    self.clock.best = None; // its delay was reckoned by another rate
                }
                rows::hello(connection, run, hello)?;
            }
            Message::Summary(summary) => {
                rows::summary(connection, run, summary)?;
            }
            Message::Levels(levels) => {
                rows::levels(connection, run, levels)?;
            }
            Message::Totals(totals) => {
                rows::totals(connection, run, frame.envelope.sample, totals, None)?;
            }
            Message::Spectrum(part) => match self.spectra.take_mode(part) {
                None => return Ok(Stored::Partial),
                Some(codes) => {
                    rows::spectrum(connection, run, part, &codes)?;
                }
            },
            Message::Spectra(part) => match self.spectra.take_set(part) {
                None => return Ok(Stored::Partial),
                Some(codes) => {
                    rows::spectra(connection, run, part, &codes)?;
                }
            },
            Message::Reply(reply) => {
                if reply.outcome != Outcome::Done {
                    let text = format!("request {} was answered {:?}", reply.to, reply.outcome);
                    rows::note(connection, arrival.utc_ns, "reply", &text)?;
                }
                return Ok(Stored::NotStored);
            }
            unnumbered => {
                let text = format!("a message that needs a number came without one: {unnumbered:?}");
                rows::note(connection, arrival.utc_ns, "protocol", &text)?;
                return Ok(Stored::NotStored);
            }
        }
        Ok(Stored::New)
    }
}

impl ClockPick {
    /// Takes a candidate; writes the best one of a second when the next second begins. The first of
    /// a run is written at once, so that a log cut short has a clock too.
    fn offer(
        &mut self,
        connection: &Connection,
        run: i64,
        rate_mhz: Option<u64>,
        sample: u64,
        arrival: Arrival,
    ) -> Result<()> {
        let counter_ns = rate_mhz.map_or(i128::from(arrival.monotonic_ns), |rate| ns_of(sample, rate));
        let pair = Pair { delay_ns: i128::from(arrival.monotonic_ns) - counter_ns, sample, arrival };
        if self.offset_ns.is_none() {
            self.since_ns = arrival.monotonic_ns;
            return self.write(connection, run, pair);
        }
        if arrival.monotonic_ns.saturating_sub(self.since_ns) >= CLOCK_PAIR_NS {
            self.since_ns = arrival.monotonic_ns;
            if let Some(best) = self.best.replace(pair) {
                self.write(connection, run, best)?;
            }
        } else if self.best.is_none_or(|best| pair.delay_ns <= best.delay_ns) {
            self.best = Some(pair);
        }
        Ok(())
    }

    fn write(&mut self, connection: &Connection, run: i64, pair: Pair) -> Result<()> {
        let Arrival { utc_ns, monotonic_ns } = pair.arrival;
        let offset_ns = utc_ns.saturating_sub(monotonic_ns);
        if let Some(before) = self.offset_ns.replace(offset_ns) {
            let step_ns = offset_ns.saturating_sub(before);
            if step_ns.saturating_abs() > CLOCK_STEP_NS {
                let text = format!("the computer's clock moved by {:+.3} s", step_ns as f64 * 1e-9);
                rows::note(connection, utc_ns, "clock step", &text)?;
            }
        }
        rows::clock(connection, run, pair.sample, utc_ns, monotonic_ns)?;
        Ok(())
    }
}

/// Nanoseconds from sample 0 to `sample` at `rate_mhz` millihertz, rounded down.
pub(super) fn ns_of(sample: u64, rate_mhz: u64) -> i128 {
    i128::from(sample) * 1_000_000_000_000 / i128::from(rate_mhz.max(1))
}
