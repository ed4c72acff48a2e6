//! A converter with a circular transfer as a source of pairs: numbering, order check, overruns.
//!
//! The board offers six register operations ([`CircularConverter`]); everything else is here.
//!
//! ```text
//!            ┌───────────────────────── restart: from the next instant on ────────────────────┐
//!            v                                                                                 │
//!        sampling ── scans ready ──► copy ── still intact? ──► marker right? ──► pairs         │
//!            │                         │ no: overrun             │ no                          │
//!            ├─ converter lost a reading, or stands still ───────┴─────────────────────────────┘
//! ```
//!
//! The index of a pair is its sampling instant on a timer that runs from the same clock as the
//! converter. So the index stays right across overruns and restarts, however many laps were missed.

use super::counter::nearest;
use super::ring_reader::RingReader;
use super::scan::{LONGEST_SCAN, Scan, ScanLayout};
use crate::source::{PairSource, SourceDescription, Taken, Tuning};
use legwise_protocol::message::{GapCause, RateChange};

/// How far ring position and clock may disagree before sampling counts as broken off: a conversion
/// under way is counted by the clock and not yet in the ring, and reading both takes time. Whole scans
/// that vanish without any sign are noticed from here on; until then indices are late by as many.
pub const TOLERANCE_SCANS: u64 = 3;
/// Restarts in a row without a single pair before they are reported as an error.
pub const RESTARTS_BEFORE_ERROR: u32 = 16;

/// The registers of a converter that fills a ring by itself.
///
/// # For driver authors
/// Nothing here waits longer than a few conversions. Interrupts are not needed.
pub trait CircularConverter {
    /// What is written at a time.
    type Word: Copy + Default;

    /// Length of the ring in words. Constant, at least 16 scans; several blocks to be useful.
    fn ring_words(&self) -> usize;

    /// The place that will be written next: words written since the restart, modulo the ring.
    fn position(&mut self) -> usize;

    /// The word at a place below [`Self::ring_words`], read afresh from memory.
    fn word(&self, place: usize) -> Self::Word;

    /// Sampling instants since power-on, by a timer with the converter's own clock; never falls.
    fn elapsed_scans(&mut self) -> u64;

    /// Whether readings were lost or the transfer stopped since the last restart. Must stay `true`
    /// until then, and become `true` before a reading that follows a lost one can be in the ring.
    fn has_failed(&mut self) -> bool;

    /// Stops everything, empties queues, and starts again with leg A at place 0. Returns the instant of
    /// the first scan, as [`Self::elapsed_scans`] counts.
    fn restart(&mut self) -> u64;

    /// Goes over to another rate without a gap: the first instant spaced by it, as [`Self::elapsed_scans`]
    /// counts, and the rate in millihertz; `None` when there is one rate only.
    fn tune(&mut self, _tuning: Tuning) -> Option<(u64, u64)> {
        None
    }
}

/// What a source has been through. Counts saturate.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub struct CircularCounts {
    /// Times that scans were overwritten before they were taken, or lost by the converter.
    pub overruns: u32,
    /// Times that a marker was not where it belongs.
    pub wrong_markers: u32,
    /// Conversions that the converter itself called void.
    pub bad_conversions: u32,
    /// Times that ring position and clock fell apart: triggers missed, or sampling stopped.
    pub stalls: u32,
}

/// Why no pairs come.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum CircularError {
    /// The marker is wrong after every restart: check the wiring of the marker inputs.
    MarkerLost,
    /// The converter does not sample, or loses readings after every restart.
    NotSampling,
}

impl core::fmt::Display for CircularError {
    fn fmt(&self, f: &mut core::fmt::Formatter<'_>) -> core::fmt::Result {
        f.write_str(match self {
            Self::MarkerLost => "could not find the channel order; check the wiring of the marker inputs",
            Self::NotSampling => "could not keep the converter sampling; check its clock and trigger",
        })
    }
}

impl core::error::Error for CircularError {}

/// Why sampling has to begin anew.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
enum Trouble {
    LostReading,
    Stalled,
    WrongMarker,
}

/// A [`CircularConverter`] with a [`ScanLayout`], as a source.
///
/// It delivers only when it can fill the buffers it is given, so that blocks stay long; give it
/// buffers of at most a quarter of the ring.
#[derive(Debug)]
pub struct CircularSource<C, L> {
    converter: C,
    layout: L,
    description: SourceDescription,
    reader: RingReader,
    /// Index of the scan at place 0 after the last restart.
    first_sample: u64,
    is_running: bool,
    gap: Option<GapCause>,
    restarts_in_a_row: u32,
    progress: u64,
    counts: CircularCounts,
}

impl<C, L> CircularSource<C, L>
where
    C: CircularConverter,
    L: ScanLayout<Word = C::Word>,
{
    /// A source that starts sampling when it is first asked.
    pub fn new(converter: C, layout: L, description: SourceDescription) -> Self {
        let reader = RingReader::new(converter.ring_words(), L::WORDS);
        Self {
            converter,
            layout,
            description,
            reader,
            first_sample: 0,
            is_running: false,
            gap: None,
            restarts_in_a_row: 0,
            progress: 0,
            counts: CircularCounts::default(),
        }
    }

    /// Scans that came out of the ring since power-on, good or not. Stands still when the converter
    /// does: what a watchdog should be fed by.
    pub const fn progress(&self) -> u64 {
        self.progress
    }

    /// What the source has been through.
    pub const fn counts(&self) -> CircularCounts {
        self.counts
    }

    /// The converter.
    pub const fn converter_mut(&mut self) -> &mut C {
        &mut self.converter
    }

    /// Begins anew at place 0. The index goes on with the clock.
    fn restart(&mut self) {
        let next_sample = self.first_sample + self.reader.read_scans();
        self.first_sample = self.converter.restart().max(next_sample);
        self.reader.restart();
        self.is_running = true;
    }

    /// Counts the trouble and has the next call start afresh.
    fn stop(&mut self, trouble: Trouble) -> Result<Taken, CircularError> {
        let counts = &mut self.counts;
        let (count, error) = match trouble {
            Trouble::LostReading => (&mut counts.overruns, CircularError::NotSampling),
            Trouble::Stalled => (&mut counts.stalls, CircularError::NotSampling),
            Trouble::WrongMarker => (&mut counts.wrong_markers, CircularError::MarkerLost),
        };
        *count = count.saturating_add(1);
        self.gap = Some(match (trouble, self.gap) {
            (Trouble::WrongMarker, None) => GapCause::Resynchronised,
            (Trouble::WrongMarker, Some(before)) => before,
            (Trouble::LostReading | Trouble::Stalled, _) => GapCause::Overrun,
        });
        self.is_running = false;
        self.restarts_in_a_row = self.restarts_in_a_row.saturating_add(1);
        if self.restarts_in_a_row >= RESTARTS_BEFORE_ERROR { Err(error) } else { Ok(Taken::Nothing) }
    }

    /// Words written since the restart; `None` when ring and clock contradict each other.
    fn written(&mut self) -> Option<u64> {
        let scans = self.converter.elapsed_scans().saturating_sub(self.first_sample);
        let expected = scans.saturating_mul(L::WORDS as u64);
        let position = self.converter.position() as u64;
        let written = nearest(expected, position, self.converter.ring_words() as u64);
        (written.abs_diff(expected) <= TOLERANCE_SCANS * L::WORDS as u64).then_some(written)
    }

    /// Copies scans from `first_word` on until the buffers are full or one is not a pair; returns the
    /// number of pairs, and what ended them early.
    fn copy(&self, first_word: u64, leg_a: &mut [i32], leg_b: &mut [i32]) -> (usize, Option<Scan>) {
        let ring_words = self.converter.ring_words();
        let mut place = self.reader.place(first_word);
        let mut words = [C::Word::default(); LONGEST_SCAN];
        let words = words.get_mut(..L::WORDS).unwrap_or(&mut []);
        for (pairs, (slot_a, slot_b)) in leg_a.iter_mut().zip(leg_b).enumerate() {
            for word in &mut *words {
                *word = self.converter.word(place);
                place += 1;
                if place == ring_words {
                    place = 0;
                }
            }
            match self.layout.read(words) {
                Scan::Pair { code_a, code_b } => {
                    *slot_a = i32::from(code_a);
                    *slot_b = i32::from(code_b);
                }
                other => return (pairs, Some(other)),
            }
        }
        (leg_a.len(), None)
    }
}

impl<C, L> PairSource for CircularSource<C, L>
where
    C: CircularConverter,
    L: ScanLayout<Word = C::Word>,
{
    type Error = CircularError;

    fn describe(&self) -> SourceDescription {
        self.description
    }

    fn take(&mut self, leg_a: &mut [i32], leg_b: &mut [i32]) -> Result<Taken, CircularError> {
        if !self.is_running {
            self.restart();
        }
        if self.converter.has_failed() {
            return self.stop(Trouble::LostReading);
        }
        let Some(written) = self.written() else { return self.stop(Trouble::Stalled) };
        let wanted = leg_a.len().min(leg_b.len());
        let ready = self.reader.ready(written, wanted);
        if ready.lost_scans > 0 {
            self.counts.overruns = self.counts.overruns.saturating_add(1);
            self.progress += ready.lost_scans;
            self.gap = Some(GapCause::Overrun);
        }
        if ready.scans < wanted || wanted == 0 {
            return Ok(Taken::Nothing);
        }
        let (Some(leg_a), Some(leg_b)) = (leg_a.get_mut(..wanted), leg_b.get_mut(..wanted)) else {
            return Ok(Taken::Nothing);
        };
        let (pairs, ended_by) = self.copy(ready.first_word, leg_a, leg_b);
        // What the writer did meanwhile decides whether the copy can be trusted.
        if self.converter.has_failed() {
            return self.stop(Trouble::LostReading);
        }
        let Some(written) = self.written() else { return self.stop(Trouble::Stalled) };
        if !self.reader.is_intact(ready.first_word, written) {
            return Ok(Taken::Nothing); // the next call counts what was lost
        }
        let first_sample = self.first_sample + self.reader.read_scans();
        self.reader.advance(pairs as u64);
        self.progress += pairs as u64;
        let stopped = match ended_by {
            Some(Scan::WrongMarker) => {
                self.progress += 1;
                self.stop(Trouble::WrongMarker)
            }
            Some(_) => {
                // One void conversion costs its own pair only.
                self.counts.bad_conversions = self.counts.bad_conversions.saturating_add(1);
                self.progress += 1;
                self.reader.advance(1);
                Ok(Taken::Nothing)
            }
            None => Ok(Taken::Nothing),
        };
        if pairs == 0 {
            return stopped;
        }
        self.restarts_in_a_row = 0;
        Ok(Taken::Pairs { first_sample, pairs, gap: self.gap.take() })
    }

    fn tune(&mut self, tuning: Tuning) -> Option<RateChange> {
        let (first_sample, sample_rate_mhz) = self.converter.tune(tuning)?;
        Some(RateChange { first_sample, sample_rate_mhz })
    }
}

#[cfg(test)]
mod tests;
