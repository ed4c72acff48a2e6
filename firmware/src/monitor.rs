//! The whole device: source, pipeline, outbox, link and alarm, one step at a time.
//!
//! A board calls [`Monitor::step`] from its main loop. Nothing in it waits.

use crate::alarm::AlarmPin;
use crate::block::BLOCK_PAIRS;
use crate::dither::Schedule;
use crate::link::Link;
use crate::outbox::Outbox;
use crate::pipeline::{Buffers, Pipeline};
use crate::settings;
use crate::source::{PairSource, SourceDescription, Taken};
use crate::trace;
use core::ops::DerefMut;
use embedded_hal::digital::{ErrorType, OutputPin};
use legwise_protocol::WIRE_VERSION;
use legwise_protocol::bytes::Bytes;
use legwise_protocol::command::Command;
use legwise_protocol::decoder::RequestDecoder;
use legwise_protocol::framing::{DELIMITER, DEVICE_FRAME_BYTES};
use legwise_protocol::message::{
    EndCause, GapCause, Hello, Message, NAME_BYTES, Outcome, RateChange, Reply, ResetCause, Settings,
};

/// Who a device is.
#[derive(Clone, Copy, Debug)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Identity {
    /// Drawn anew at each start.
    pub boot_id: u32,
    /// Name of the board.
    pub board: &'static str,
    /// Serial number; 0 when it has none.
    pub serial: u64,
    /// Why it started.
    pub reset_cause: ResetCause,
}

/// What a step did.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum Step {
    /// Pairs were taken or bytes moved.
    Worked,
    /// Nothing to do right now: the board may sleep until the next interrupt.
    Waiting,
    /// The source has ended and everything has been sent.
    Finished,
}

/// What failed in a step; the next step may be tried.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum StepError<S, L, P> {
    /// The source.
    Source(S),
    /// The link.
    Link(L),
    /// The alarm pin.
    Pin(P),
}

impl<S: core::fmt::Debug, L: core::fmt::Debug, P: core::fmt::Debug> core::fmt::Display
    for StepError<S, L, P>
{
    fn fmt(&self, f: &mut core::fmt::Formatter<'_>) -> core::fmt::Result {
        match self {
            Self::Source(error) => write!(f, "could not take samples: {error:?}"),
            Self::Link(error) => write!(f, "could not use the link: {error:?}"),
            Self::Pin(error) => write!(f, "could not drive the alarm pin: {error:?}"),
        }
    }
}

/// What a step on source `S`, link `L` and pin `P` gives.
pub type StepResult<T, S, L, P> =
    Result<T, StepError<<S as PairSource>::Error, <L as Link>::Error, <P as ErrorType>::Error>>;

/// What a monitor holds besides the buffers of its pipeline. `KEPT` and `PASSING` are the sizes of the
/// outbox in bytes. All bytes of a new one are 0, so that a static one takes no flash.
#[derive(Debug)]
pub struct Memory<const KEPT: usize, const PASSING: usize> {
    outbox: Outbox<KEPT, PASSING>,
    frame: [u8; DEVICE_FRAME_BYTES],
    code_a: [i32; BLOCK_PAIRS],
    code_b: [i32; BLOCK_PAIRS],
}

impl<const KEPT: usize, const PASSING: usize> Memory<KEPT, PASSING> {
    /// Nothing held.
    pub const fn new() -> Self {
        Self {
            outbox: Outbox::new(),
            frame: [0; DEVICE_FRAME_BYTES],
            code_a: [0; BLOCK_PAIRS],
            code_b: [0; BLOCK_PAIRS],
        }
    }
}

impl<const KEPT: usize, const PASSING: usize> Default for Memory<KEPT, PASSING> {
    fn default() -> Self {
        Self::new()
    }
}

/// The device. Its large parts live where the board wants them: `B` refers to [`Buffers`] and `M` to a
/// [`Memory`], by a `&'static mut` on a board, by a `Box` on a desktop.
#[derive(Debug)]
pub struct Monitor<S, L, P, B, M> {
    identity: Identity,
    description: SourceDescription,
    source: S,
    link: L,
    alarm: AlarmPin<P>,
    pipeline: Pipeline<B>,
    memory: M,
    requests: RequestDecoder,
    frame_length: usize,
    frame_sent: usize,
    has_obeyed: bool,
    dither: Schedule,
    /// The rate the source has gone over to, once it has.
    rate: Option<RateChange>,
    /// Passing messages shed that the pipeline has been told of.
    told_shed: u32,
    /// Whether the first step has been made.
    is_introduced: bool,
    /// Why the pipeline is to end once its averages have been sent.
    ending: Option<EndCause>,
    is_stopped: bool,
    /// Whether pairs were passed over on request since the last one that was examined.
    has_passed_over: bool,
    is_ended: bool,
}

impl<S, L, P, B, M, const KEPT: usize, const PASSING: usize> Monitor<S, L, P, B, M>
where
    S: PairSource,
    L: Link,
    P: OutputPin,
    B: DerefMut<Target = Buffers>,
    M: DerefMut<Target = Memory<KEPT, PASSING>>,
{
    /// A device that starts to examine samples at its first step, which begins with an introduction.
    /// What `buffers` and `memory` held before is forgotten.
    pub fn new(
        identity: Identity,
        settings: Settings,
        (source, link, alarm): (S, L, AlarmPin<P>),
        (buffers, mut memory): (B, M),
    ) -> Self {
        let description = source.describe();
        memory.outbox.begin(identity.boot_id);
        // One delimiter first: whatever the line carried before ends there.
        memory.frame.fill(DELIMITER);
        Self {
            identity,
            description,
            source,
            link,
            alarm,
            pipeline: Pipeline::new(buffers, description, settings),
            memory,
            requests: RequestDecoder::new(),
            frame_length: 1,
            frame_sent: 0,
            has_obeyed: false,
            dither: Schedule::new(description.sample_rate_mhz),
            rate: None,
            told_shed: 0,
            is_introduced: false,
            ending: None,
            is_stopped: false,
            has_passed_over: false,
            is_ended: false,
        }
    }

    /// The outbox, to see what was shed or lost.
    pub fn outbox(&self) -> &Outbox<KEPT, PASSING> {
        &self.memory.outbox
    }

    /// Whether the host has ever asked for anything.
    pub const fn has_obeyed(&self) -> bool {
        self.has_obeyed
    }

    /// The link.
    pub const fn link_mut(&mut self) -> &mut L {
        &mut self.link
    }

    /// Index of the pair expected next.
    pub fn next_sample(&self) -> u64 {
        self.pipeline.next_sample()
    }

    /// The source.
    pub const fn source(&self) -> &S {
        &self.source
    }

    /// Takes commands, takes at most one block of pairs, sends what the link will take.
    ///
    /// # Errors
    /// When source, link or pin fail. State stays sound; step again.
    pub fn step(&mut self) -> StepResult<Step, S, L, P> {
        self.work().inspect_err(trace::failure)
    }

    fn work(&mut self) -> StepResult<Step, S, L, P> {
        if !self.is_introduced {
            self.is_introduced = true;
            self.introduce();
        }
        let has_received = self.receive().map_err(StepError::Link)?;
        let has_sampled = self.sample()?;
        let has_sent = self.send().map_err(StepError::Link)?;
        Ok(if has_received || has_sampled || has_sent {
            Step::Worked
        } else if self.is_ended
            && self.ending.is_none()
            && self.memory.outbox.is_sent()
            && self.frame_sent == self.frame_length
        {
            Step::Finished
        } else {
            Step::Waiting
        })
    }

    /// Takes samples if there are any; `true` when something was done.
    fn sample(&mut self) -> StepResult<bool, S, L, P> {
        let has_sent = self.ending.is_some() && self.wind_up();
        if self.is_ended {
            return Ok(has_sent);
        }
        let Self { pipeline, memory, .. } = self;
        let Memory { outbox, code_a, code_b, .. } = &mut **memory;
        let taken = self.source.take(code_a, code_b).map_err(StepError::Source)?;
        let records = &mut |message: &Message, sample: u64| outbox.record(message, sample);
        match taken {
            Taken::Nothing => return Ok(has_sent),
            Taken::Pairs { first_sample, pairs, .. } if self.is_stopped => {
                self.has_passed_over = true;
                let is_outside = self.pipeline.take_alarm();
                let end = first_sample.saturating_add(pairs as u64);
                self.alarm.follow(is_outside, end).map_err(StepError::Pin)?;
                return Ok(true);
            }
            Taken::Pairs { first_sample, pairs, gap } => {
                let has_passed_over = core::mem::take(&mut self.has_passed_over);
                let cause =
                    if has_passed_over { GapCause::Stopped } else { gap.unwrap_or(GapCause::Skipped) };
                let code_a = code_a.get(..pairs).unwrap_or(code_a);
                let code_b = code_b.get(..pairs).unwrap_or(code_b);
                if gap.is_some() && first_sample == pipeline.next_sample() {
                    pipeline.gap(first_sample, 0, cause, records);
                }
                pipeline.take(first_sample, code_a, code_b, cause, records);
                self.look_around();
            }
            Taken::Finished => {
                self.is_ended = true;
                if !self.is_stopped {
                    self.ending = Some(EndCause::SourceExhausted);
                }
            }
        }
        let is_outside = self.pipeline.take_alarm();
        self.alarm.follow(is_outside, self.pipeline.next_sample()).map_err(StepError::Pin)?;
        Ok(true)
    }

    /// After some pairs: what the link had to shed makes spectra fewer, and the rate is moved when it is time.
    fn look_around(&mut self) {
        let Self { pipeline, memory, .. } = self;
        let outbox = &mut memory.outbox;
        if outbox.shed() != self.told_shed {
            self.told_shed = outbox.shed();
            pipeline.note_shedding();
        }
        if let Some(tuning) = self.dither.due(pipeline.next_sample()) {
            let change = self.source.tune(tuning);
            self.dither.changed(change);
            if let Some(change) = change {
                self.rate = Some(change);
                pipeline.change_rate(change, &mut |message, sample| outbox.record(message, sample));
            }
        }
    }

    /// Sends the averages under way, one a step, each when there is room for it; then says `End`. `true` when
    /// something was done.
    fn wind_up(&mut self) -> bool {
        let Self { pipeline, memory, .. } = self;
        let outbox = &mut memory.outbox;
        if outbox.passing_room() < PASSING / 4 * 3 {
            return false;
        }
        let has_sent = pipeline.send_average(&mut |message, sample| outbox.record(message, sample));
        if !has_sent && let Some(cause) = self.ending.take() {
            pipeline.end(cause, &mut |message, sample| outbox.record(message, sample));
        }
        true
    }

    fn send(&mut self) -> Result<bool, L::Error> {
        let mut has_sent = false;
        loop {
            let Memory { outbox, frame, .. } = &mut *self.memory;
            if self.frame_sent == self.frame_length {
                self.frame_sent = 0;
                self.frame_length = outbox.next_frame(frame);
            }
            let waiting = frame.get(self.frame_sent..self.frame_length).unwrap_or(&[]);
            if waiting.is_empty() {
                return Ok(has_sent);
            }
            let taken = self.link.send(waiting)?.min(waiting.len());
            if taken == 0 {
                return Ok(has_sent);
            }
            self.frame_sent += taken;
            has_sent = true;
        }
    }

    fn receive(&mut self) -> Result<bool, L::Error> {
        let mut buffer = [0; 64];
        let received = self.link.receive(&mut buffer)?.min(buffer.len());
        let mut decoder = core::mem::take(&mut self.requests);
        decoder.feed_sequences(buffer.get(..received).unwrap_or(&[]), |sequence, command| {
            self.obey(sequence, command);
        });
        self.requests = decoder;
        Ok(received > 0)
    }

    /// Carries out a request and answers it; `None` stands for a command of a later version.
    fn obey(&mut self, sequence: u32, command: Option<Command>) {
        self.has_obeyed = true;
        let mut settings = *self.pipeline.settings();
        let outcome = match command {
            None => Outcome::Unsupported,
            Some(Command::Acknowledge { through }) => {
                trace::acknowledged(through);
                return self.memory.outbox.acknowledge(through);
            }
            Some(Command::Identify) => {
                self.memory.outbox.send_again();
                self.introduce();
                Outcome::Done
            }
            Some(Command::WatchLimits { receiver, limits }) => {
                settings.receiver = receiver;
                settings.limits = limits;
                self.change(settings)
            }
            Some(Command::SetDetection(detection)) => {
                settings.detection = detection;
                self.change(settings)
            }
            Some(Command::SetReporting(reporting)) => {
                settings.reporting = reporting;
                self.change(settings)
            }
            Some(Command::Start) => self.start(),
            Some(Command::Stop) => self.stop(),
        };
        trace::command(sequence, command.as_ref(), outcome);
        let sample = self.pipeline.next_sample();
        self.memory.outbox.record(&Message::Reply(Reply { to: sequence, outcome }), sample);
    }

    fn change(&mut self, settings: Settings) -> Outcome {
        if !settings::is_valid(&settings) {
            return Outcome::OutOfRange;
        }
        let Self { pipeline, memory, .. } = self;
        let outbox = &mut memory.outbox;
        pipeline.change(settings, &mut |message, sample| outbox.record(message, sample));
        Outcome::Done
    }

    fn start(&mut self) -> Outcome {
        if self.is_ended {
            return Outcome::Unsupported;
        }
        self.is_stopped = false;
        if let Some(cause) = self.ending.take() {
            let Self { pipeline, memory, .. } = self;
            let outbox = &mut memory.outbox;
            pipeline.end(cause, &mut |message, sample| outbox.record(message, sample));
        }
        Outcome::Done
    }

    fn stop(&mut self) -> Outcome {
        if !self.is_stopped && !self.is_ended {
            self.is_stopped = true;
            self.ending = Some(EndCause::Stopped);
        }
        Outcome::Done
    }

    fn introduce(&mut self) {
        let hello = Hello {
            wire_version: WIRE_VERSION,
            firmware_version: FIRMWARE_VERSION,
            board: Bytes::<NAME_BYTES>::from_slice_cut(self.identity.board.as_bytes()),
            serial: self.identity.serial,
            reset_cause: self.identity.reset_cause,
            sample_rate_mhz: self.description.sample_rate_mhz,
            skew_ns: self.description.skew_ns,
            legs: self.description.legs,
        };
        let sample = self.pipeline.next_sample();
        self.memory.outbox.record(&Message::Hello(hello), sample);
        self.memory.outbox.record(&Message::Settings(*self.pipeline.settings()), sample);
        // A host that comes late learns which rate holds.
        if let Some(change) = self.rate {
            self.memory.outbox.record(&Message::Rate(change), sample);
        }
    }
}

/// Version of this library, told in every `Hello`.
const FIRMWARE_VERSION: (u16, u16, u16) = (
    number(env!("CARGO_PKG_VERSION_MAJOR")),
    number(env!("CARGO_PKG_VERSION_MINOR")),
    number(env!("CARGO_PKG_VERSION_PATCH")),
);

/// A decimal number, read while the program is built.
const fn number(text: &str) -> u16 {
    let mut value = 0;
    let mut rest = text.as_bytes();
    while let [digit, after @ ..] = rest {
        value = value * 10 + (*digit - b'0') as u16;
        rest = after;
    }
    value
}
