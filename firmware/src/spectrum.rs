//! Averaged spectra of both modes and between them, from Nyquist down to a fraction of a hertz.
//!
//! ```text
//!  codes in the snippet ring ──────────────► 1024 points ─► rung 0        up to 0.5 of the rate
//!  legs ─► /8 ─► 512 points ───────────────────────────────► rung 1 ┐
//!           └──► /8 ─► 512 points ─────────────────────────► rung 2 │     0.04 .. 0.4  of the rung's
//!                 └──► /8 ─► 512 points ───────────────────► rung 3 │
//!                       └──► /8 ─► 512 points ─────────────► rung 4 ┘     (feature `fourth-rung`)
//! ```
//!
//! * Segments with 50 % overlap, mean removed, periodic Hann window: Welch, IEEE Trans. AU-15, 1967;
//!   window figures in Harris, Proc. IEEE 66(1), 1978.
//! * One transform for the pair, `z = A + j B`, split, turned to the same instant (`window`), then
//!   C = (A+B)/2 and D = A−B.
//! * Result: one-sided densities in V²/Hz, `2|X|²/(fs Σw²)`, 1× at 0 Hz and at fs/2, and the cross density
//!   `⟨conj(C)·D⟩` in the same scale. A white floor is continuous from rung to rung.
//! * Idle and driven segments are averaged apart, in turns (`turn`). Idle is a segment in which DM stayed
//!   within the idle threshold of its resting level, whatever the common mode did.
//!
//! Windowing is the transform's first pass, adding to the sums its last: neither has a loop of its own. The
//! transform in `f32` leaks about 6e-8 of a leg's r.m.s. value per sample into the other: far below any
//! converter.
//!
//! Segments may be skipped to save time; the message then says how many. The filters of the ladder see
//! every sample. After a gap filters and segments begin anew, the averages go on. Where the rate changes the
//! averages made so far are sent before new ones begin: about a second is in no spectrum.

mod full;
mod pace;
mod rung;
mod sums;
mod turn;
mod window;

use crate::block::{BLOCK_PAIRS, Block};
use crate::fft::{Complex, Complexes, POINTS};
use crate::halfband::{Bench, INPUTS};
use crate::snippet_ring::SnippetRing;
use crate::source::SourceDescription;
use full::Full;
use legwise_protocol::message::{Message, Reporting, SegmentSet};
use pace::Pace;
use rung::{Leg, Number, Rung};
use turn::Turn;
use window::Turned;

/// Rungs below the full rate.
pub const LOWER_RUNGS: usize = if cfg!(feature = "fourth-rung") { 4 } else { 3 };
/// RAM of each of them.
pub const LOWER_RUNG_BYTES: usize = size_of::<Rung>();
const NUMBERS: [Number; 4] = [Number(1), Number(2), Number(3), Number(4)];

const _: () = assert!(BLOCK_PAIRS == INPUTS, "a whole block goes into the ladder");

/// A rate the source goes over to.
#[derive(Clone, Copy, Debug)]
struct Change {
    first_sample: u64,
    sample_rate_mhz: u64,
}

/// Averages, segments under construction, filters, and the transform's working space.
#[derive(Debug)]
pub struct SpectrumMeter {
    sample_rate_mhz: u64,
    skew_ns: i32,
    /// End of the last block in which DM was not at rest.
    quiet_since: u64,
    full: Full,
    lower: [Rung; LOWER_RUNGS],
    pace: Pace,
    /// Whether nothing more is averaged before everything has been sent.
    is_winding_up: bool,
    change: Option<Change>,
    bench: Bench,
    work: Complexes,
}

impl Default for SpectrumMeter {
    fn default() -> Self {
        Self::new()
    }
}

impl SpectrumMeter {
    /// Nothing taken yet.
    pub const fn new() -> Self {
        Self {
            sample_rate_mhz: 0,
            skew_ns: 0,
            quiet_since: 0,
            full: Full::new(),
            lower: [const { Rung::new() }; LOWER_RUNGS],
            pace: Pace::new(),
            is_winding_up: false,
            change: None,
            bench: Bench::new(),
            work: [Complex::ZERO; POINTS],
        }
    }

    /// Starts afresh with a source.
    pub fn begin(&mut self, source: &SourceDescription) {
        self.sample_rate_mhz = source.sample_rate_mhz;
        self.skew_ns = source.skew_ns;
        self.full.scale(&source.legs);
        self.pace = Pace::new();
        self.quiet_since = 0;
        self.change = None;
        self.restart();
    }

    /// Empties everything, for the rate that holds.
    fn restart(&mut self) {
        self.is_winding_up = false;
        let mut delay = self.skew_ns as f32 * 1e-9 * self.rate_hz();
        self.full.begin(Turned::new(delay, POINTS));
        for rung in &mut self.lower {
            delay *= 0.125;
            rung.begin(Turned::new(delay, rung::POINTS));
        }
    }

    fn rate_hz(&self) -> f32 {
        self.sample_rate_mhz as f32 * 1e-3
    }

    /// From pair `first_sample` on the rate is another one. What was averaged is sent, then averages begin
    /// anew.
    pub fn change_rate(&mut self, first_sample: u64, sample_rate_mhz: u64) {
        self.change = Some(Change { first_sample, sample_rate_mhz });
    }

    /// What was averaged is sent, then averages begin anew: settings changed.
    pub fn wind_up(&mut self) {
        self.break_off();
        self.is_winding_up = true;
        let is_empty = self.full.turn.collected().is_none()
            && self.lower.iter().all(|rung| rung.turn.collected().is_none());
        if is_empty && self.change.is_none() {
            self.restart();
        }
    }

    /// Messages had to be shed: averages go on for longer.
    pub const fn note_shedding(&mut self) {
        self.pace.note_shedding();
    }

    /// Takes a block whose codes are in `ring` already. DM rests at `rest_uv`, give or take
    /// `idle_below_uv`.
    pub fn take(
        &mut self,
        block: &Block<'_>,
        ring: &SnippetRing,
        (rest_uv, idle_below_uv): (i32, u32),
        reporting: &Reporting,
        records: &mut dyn FnMut(&Message),
    ) {
        let end_sample = block.end_sample();
        let span = &block.spans.dm;
        if span.low.abs_diff(rest_uv).max(span.high.abs_diff(rest_uv)) > idle_below_uv {
            self.quiet_since = end_sample;
        }
        if !self.is_winding_up && self.change.is_some_and(|change| end_sample > change.first_sample) {
            self.wind_up();
        }
        if !self.is_winding_up {
            self.average(block, ring, reporting);
        }
        if self.pace.admits(end_sample) {
            self.send_due(end_sample, reporting, records);
        }
    }

    fn average(&mut self, block: &Block<'_>, ring: &SnippetRing, reporting: &Reporting) {
        let end_sample = block.end_sample();
        if self.full.has_segment(block.first_sample, end_sample) {
            let set = self.set_since(end_sample - POINTS as u64);
            self.full.take(ring, end_sample, set, reporting.spectrum_skip, &mut self.work);
        }
        if block.pairs() == BLOCK_PAIRS {
            self.climb_down(block, reporting.spectrum_skip);
        }
    }

    /// Filters a block down the ladder as far as it goes.
    fn climb_down(&mut self, block: &Block<'_>, skip: u16) {
        let end_sample = block.end_sample();
        for (place, number) in NUMBERS.into_iter().enumerate() {
            let set = self.set_since(end_sample.saturating_sub(number.pairs_per_segment()));
            let (above, below) = self.lower.split_at_mut(place);
            let Some(rung) = below.first_mut() else { return };
            let goes_on = match above.last() {
                None => rung.take(&mut self.bench, |leg, inputs| {
                    let samples = if matches!(leg, Leg::A) { block.leg_a } else { block.leg_b };
                    // Four at a time, for the sake of speed.
                    let samples = samples.as_chunks::<4>().0;
                    for (inputs, samples) in inputs.as_chunks_mut().0.iter_mut().zip(samples) {
                        *inputs = samples.map(|sample| sample as f32);
                    }
                }),
                Some(above) => rung.take(&mut self.bench, |leg, inputs| {
                    for (input, &sample) in inputs.iter_mut().zip(above.newest(leg)) {
                        *input = sample;
                    }
                }),
            };
            if !goes_on {
                return;
            }
            if rung.has_segment() {
                let length = rung::POINTS as u64 * number.pairs_per_sample();
                let first_sample = end_sample.saturating_sub(length);
                rung.take_segment((set, first_sample, end_sample), number.skip(skip), &mut self.work);
            }
        }
    }

    /// The set of what bears on pairs from `first_sample` on.
    fn set_since(&self, first_sample: u64) -> SegmentSet {
        if self.quiet_since > first_sample { SegmentSet::Driven } else { SegmentSet::Idle }
    }

    /// Sends one average that has gone on for long enough, if there is one.
    fn send_due(&mut self, sample: u64, reporting: &Reporting, records: &mut dyn FnMut(&Message)) {
        let segments = if self.is_winding_up { None } else { Some(self.pace.segments(reporting)) };
        match self.send_one(segments, records) {
            Some(number) if self.is_winding_up => self.pace.hurried(sample, number.is_full(), reporting),
            Some(number) => self.pace.sent(sample, number.is_full(), reporting),
            None if self.is_winding_up => self.begin_anew(sample),
            None => {}
        }
    }

    /// Everything has been sent: averages begin anew, at the new rate once that holds.
    fn begin_anew(&mut self, sample: u64) {
        match self.change {
            Some(change) if change.first_sample > sample => return,
            Some(change) => self.sample_rate_mhz = change.sample_rate_mhz,
            None => {}
        }
        self.change = None;
        self.restart();
    }

    /// Sends an average that has anything in it, long enough or not; `false` when there is none left.
    pub fn send_average(&mut self, records: &mut dyn FnMut(&Message)) -> bool {
        self.send_one(None, records).is_some()
    }

    /// Sends the first average whose turn is over, with so many `segments` of the full rate to an average; or
    /// the first one that has anything in it. Its rung.
    fn send_one(&mut self, segments: Option<u32>, records: &mut dyn FnMut(&Message)) -> Option<Number> {
        let rate_hz = self.rate_hz();
        let is_due = |turn: &Turn, number: Number| match segments {
            Some(segments) => turn.is_over(number.segments(segments)),
            None => turn.collected().is_some(),
        };
        if is_due(&self.full.turn, Number::FULL) {
            self.full.finish(rate_hz, records);
            return Some(Number::FULL);
        }
        for (rung, number) in self.lower.iter_mut().zip(NUMBERS) {
            if is_due(&rung.turn, number) {
                rung.finish(number, rate_hz, records);
                return Some(number);
            }
        }
        None
    }

    /// Forgets the segments under construction: a gap follows. Averages go on over it.
    pub fn break_off(&mut self) {
        self.full.break_off();
        for rung in &mut self.lower {
            rung.break_off();
        }
    }
}
