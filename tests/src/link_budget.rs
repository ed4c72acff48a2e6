//! What a board's stream asks of its link, and what becomes of it on a slow one.
//!
//! [`play`] runs the firmware on a recording behind a link of a given speed, with a host that answers
//! every frame at once: the same loop as the emulated board's, on this machine. [`Demand`] and
//! [`Shed`] are read off the frames that arrived, as a host would.

use crate::replay::Replay;
use legwise_firmware::alarm::{AlarmPin, NoPin};
use legwise_firmware::block::BLOCK_PAIRS;
use legwise_firmware::fakes::ThrottledLink;
use legwise_firmware::link::Link;
use legwise_firmware::monitor::{Identity, Memory, Monitor, Step};
use legwise_firmware::pipeline::Buffers;
use legwise_firmware::source::{PairSource, SourceDescription, Taken};
use legwise_protocol::command::{Command, Request};
use legwise_protocol::decoder::DeviceDecoder;
use legwise_protocol::framing::{self, DELIMITER, DEVICE_FRAME_BYTES, Delivery, DeviceFrame};
use legwise_protocol::framing::{REQUEST_FRAME_BYTES, encode_device_frame};
use legwise_protocol::message::{Loss, Message, ResetCause, Settings};
use std::collections::VecDeque;
use std::convert::Infallible;

/// Bytes per second at 115 200 baud, 8 data bits, one start and one stop bit.
pub const USUAL_BYTES_PER_S: u32 = 115_200 / 10;
/// Outbox of the emulated board: kept bytes, passing bytes (`firmware/boards/emulated/src/bin/monitor.rs`).
const KEPT_BYTES: usize = 6 * 1024;
const PASSING_BYTES: usize = 6 * 1024;
/// Name the emulated board gives itself.
pub const BOARD_NAME: &str = "emulated M4F";

/// A host that collects frames and answers each but a reply with an acknowledgement of everything kept.
#[derive(Debug, Default)]
pub struct PromptHost {
    decoder: DeviceDecoder,
    frames: Vec<DeviceFrame>,
    through: u32,
    requests: u32,
}

impl PromptHost {
    /// What this host says first: a delimiter, then `Identify`.
    pub fn opening(&mut self) -> Vec<u8> {
        let mut bytes = vec![DELIMITER];
        bytes.extend(self.request(Command::Identify));
        bytes
    }

    /// Takes bytes of the board; what there is to say to them.
    pub fn hear(&mut self, bytes: &[u8]) -> Vec<u8> {
        let known = self.frames.len();
        self.decoder.feed_frames(bytes, |frame| self.frames.push(frame));
        let mut said = Vec::new();
        for index in known..self.frames.len() {
            let frame = &self.frames[index];
            if let Delivery::Kept { number } = frame.envelope.delivery {
                self.through = self.through.max(number);
            }
            if !matches!(frame.message, Message::Reply(_)) {
                said.extend(self.request(Command::Acknowledge { through: self.through }));
            }
        }
        said
    }

    /// Whether the board has said its last word.
    pub fn has_heard_the_end(&self) -> bool {
        self.frames.iter().rev().take(8).any(|frame| matches!(frame.message, Message::End(_)))
    }

    /// Everything heard.
    pub fn into_frames(self) -> Vec<DeviceFrame> {
        self.frames
    }

    fn request(&mut self, command: Command) -> Vec<u8> {
        self.requests += 1;
        let mut frame = [0; REQUEST_FRAME_BYTES];
        let request = Request { sequence: self.requests, command };
        let length = framing::encode_request(&request, &mut frame).unwrap();
        frame[..length].to_vec()
    }
}

/// The host at the other end of a link in memory.
#[derive(Debug, Default)]
struct HostEnd {
    host: PromptHost,
    said: VecDeque<u8>,
}

impl Link for HostEnd {
    type Error = Infallible;

    fn send(&mut self, bytes: &[u8]) -> Result<usize, Infallible> {
        self.said.extend(self.host.hear(bytes));
        Ok(bytes.len())
    }

    fn receive(&mut self, buffer: &mut [u8]) -> Result<usize, Infallible> {
        let count = buffer.len().min(self.said.len());
        for (slot, byte) in buffer.iter_mut().zip(self.said.drain(..count)) {
            *slot = byte;
        }
        Ok(count)
    }
}

/// A recording that moves on only when it is let.
#[derive(Debug)]
struct Gated<'a> {
    replay: &'a Replay,
    next: usize,
    may_take: &'a std::cell::Cell<bool>,
}

impl PairSource for Gated<'_> {
    type Error = Infallible;

    fn describe(&self) -> SourceDescription {
        self.replay.description
    }

    fn take(&mut self, leg_a: &mut [i32], leg_b: &mut [i32]) -> Result<Taken, Infallible> {
        if !self.may_take.get() {
            return Ok(Taken::Nothing);
        }
        let Some(delivery) = self.replay.deliveries.get(self.next) else { return Ok(Taken::Finished) };
        self.next += 1;
        Ok(delivery.hand_out(leg_a, leg_b))
    }
}

/// Every frame that reaches a prompt host over a link of `link_bytes_per_s` (0: any speed), and what the
/// board itself says it shed and lost.
pub fn play(replay: &Replay, settings: Settings, link_bytes_per_s: u32) -> (Vec<DeviceFrame>, Shed) {
    let identity =
        Identity { boot_id: replay.boot_id, board: BOARD_NAME, serial: 0, reset_cause: ResetCause::Software };
    let mut end = HostEnd::default();
    end.said.extend(end.host.opening());
    let link = ThrottledLink::new(end, link_bytes_per_s, replay.description.sample_rate_mhz);
    let may_take = std::cell::Cell::new(false);
    let source = Gated { replay, next: 0, may_take: &may_take };
    let Ok(alarm) = AlarmPin::new(NoPin, 0);
    let memory = (Box::<Buffers>::default(), Box::<Memory<KEPT_BYTES, PASSING_BYTES>>::default());
    let mut monitor = Monitor::new(identity, settings, (source, link, alarm), memory);
    let mut after_end = 0;
    loop {
        let now = monitor.next_sample() + after_end;
        monitor.link_mut().pass_time(now);
        may_take.set(monitor.link_mut().is_answered() && monitor.has_obeyed());
        let Ok(step) = monitor.step();
        match step {
            Step::Worked => {}
            Step::Waiting if may_take.get() => after_end += BLOCK_PAIRS as u64,
            Step::Waiting => {}
            Step::Finished if monitor.outbox().is_empty() => break,
            Step::Finished => {}
        }
    }
    let shed = Shed { passing: monitor.outbox().shed(), kept: monitor.outbox().loss() };
    (std::mem::take(&mut monitor.link_mut().inner_mut().host).into_frames(), shed)
}

/// Bytes per second a stream asks for. The last words at the end of the recording are left out: a night has
/// one end.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Demand {
    /// All bytes over the whole time.
    pub mean: f64,
    /// The same of kept messages only.
    pub kept_mean: f64,
    /// Bytes of the messages made in the busiest second.
    pub busiest: usize,
    /// Bytes per second of the busiest eight that follow each other: a whole round of spectra, the lowest rung
    /// excepted.
    pub busiest_eight: f64,
}

impl Demand {
    /// What `frames` asked for, each counted in the second in which it was made.
    pub fn of(frames: &[DeviceFrame], replay: &Replay) -> Self {
        let rate_hz = replay.description.sample_rate_mhz / 1000;
        let seconds = (replay.pairs() as u64 / rate_hz) as usize;
        let mut by_second = vec![0; seconds];
        let (mut total, mut kept) = (0, 0);
        for frame in frames {
            let Some(second) = by_second.get_mut((frame.envelope.sample / rate_hz) as usize) else {
                continue;
            };
            let bytes = wire_bytes(frame);
            *second += bytes;
            total += bytes;
            if frame.message.is_kept() {
                kept += bytes;
            }
        }
        let eights = by_second.windows(8).map(|eight| eight.iter().sum::<usize>());
        Self {
            mean: total as f64 / seconds as f64,
            kept_mean: kept as f64 / seconds as f64,
            busiest_eight: eights.max().unwrap_or(0) as f64 / 8.0,
            busiest: by_second.into_iter().max().unwrap_or(0),
        }
    }
}

/// What did not arrive.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub struct Shed {
    /// Passing messages.
    pub passing: u32,
    /// Kept messages.
    pub kept: Loss,
}

impl Shed {
    /// As a host sees it: holes in the sequence numbers, and the last loss that was told.
    pub fn seen_in(frames: &[DeviceFrame]) -> Self {
        let last = frames.last().map_or(0, |frame| frame.envelope.sequence + 1);
        let told = frames.iter().rev().find_map(|frame| match frame.message {
            Message::Loss(loss) => Some(loss),
            _ => None,
        });
        Self { passing: last - frames.len() as u32, kept: told.unwrap_or_default() }
    }

    /// Kept messages of any kind.
    pub const fn kept_messages(&self) -> u32 {
        self.kept.snippet_parts + self.kept.records
    }
}

/// Length of a frame on the wire.
fn wire_bytes(frame: &DeviceFrame) -> usize {
    encode_device_frame(frame, &mut [0; DEVICE_FRAME_BYTES]).unwrap()
}

/// `settings` with the passing reports put off as far as they go: what remains is kept messages.
pub fn without_reports(settings: Settings) -> Settings {
    let mut settings = settings;
    settings.reporting.summary_samples = 1 << 31;
    settings.reporting.levels_samples = legwise_firmware::settings::LONGEST_LEVELS_SAMPLES;
    settings.reporting.spectrum_segments = 0;
    settings
}
