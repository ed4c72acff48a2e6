//! `emulated resets IMAGE [COUNT]`: resets the machine at any moment while garbled input pours in.
//!
//! ```text
//!   garble, wait a little --> reset --> Hello and default Settings, unasked
//!                               ^          | garble, Identify: the same again
//!                               |          | WatchLimits: done and told
//!                               |          | sampling goes on from sample 0
//!                               +----------+ garble, Identify: still the limits commanded
//! ```
//!
//! Every frame of every life is held to the rules: a new boot id, `Hello` first, samples and numbers
//! that go up, answers only to what was asked.

use crate::garble::{FIRST_NUMBER, Garbler, Kind};
use crate::{Outcome, text};
use legwise_firmware::settings::are_limits_valid;
use legwise_protocol::WIRE_VERSION;
use legwise_protocol::command::{Command, Request};
use legwise_protocol::decoder::DeviceDecoder;
use legwise_protocol::framing::{DELIMITER, Delivery, DeviceFrame, REQUEST_FRAME_BYTES, encode_request};
use legwise_protocol::message::{self, Message, Settings};
use legwise_protocol::receivers::TABLE;
use legwise_tests::emulator::{Emulator, ResetLine};
use legwise_tests::link_budget::BOARD_NAME;
use legwise_tests::replay::Replay;
use legwise_tests::waveforms::dice;
use rand::RngExt;
use rand_chacha::ChaCha8Rng;
use std::collections::{BTreeMap, BTreeSet};
use std::io::{ErrorKind, Read, Write};
use std::net::TcpStream;
use std::path::Path;
use std::time::{Duration, Instant};

/// Longest time until the board has said what is awaited.
const PATIENCE: Duration = Duration::from_secs(20);
/// Longest wait of one read.
const READ_WAIT: Duration = Duration::from_millis(2);
/// The board is reset after at most this much more garble and listening.
const LONGEST_PAUSE_US: u64 = 12_000;
/// Rate the recording is said to have: low, so that reports come often.
const SAMPLE_RATE_MHZ: u64 = 5_000_000;
/// Reports of readings awaited in every life.
const SUMMARIES: u32 = 2;

/// What is known of the board since its last start.
#[derive(Debug, Default)]
struct Life {
    boot_id: u32,
    sequence: u32,
    /// Sample of the newest passing and of the newest new kept message.
    samples: [u64; 2],
    highest_kept: u32,
    settings: Option<Settings>,
    next_summary: u64,
    summaries: u32,
    replies: Vec<message::Reply>,
}

/// The board and what has been done to it.
struct Bench {
    emulator: Emulator,
    uart: TcpStream,
    reset_line: ResetLine,
    decoder: DeviceDecoder,
    defaults: Settings,
    dice: ChaCha8Rng,
    garbler: Garbler,
    life: Life,
    boot_ids: BTreeSet<u32>,
    number: u32,
    /// Pieces and bytes of each kind.
    garbled: BTreeMap<Kind, (u32, usize)>,
    refusals: u32,
    passing_missed: u32,
    slowest_start: Duration,
    slowest_answer: Duration,
}

/// Resets the machine `count` times; prints what was done.
pub fn resets(image: &Path, count: u32) -> Outcome<()> {
    let folder = tempfile::tempdir().map_err(text)?;
    let mut replay = Replay::of_scenario("press-ground", 5, 0.2, 5.0)?;
    replay.description.sample_rate_mhz = SAMPLE_RATE_MHZ;
    replay.boot_id = 0;
    let path = folder.path().join("replay.bin");
    replay.write(&path, 0).map_err(text)?;
    let mut bench = Bench::new(image, &path, replay.settings())?;
    let started = Instant::now();
    bench.await_start(started)?;
    let files = bench.emulator.open_files();
    for number in 0..=count {
        bench.live().and_then(|()| if number < count { bench.reset() } else { Ok(()) }).map_err(|fault| {
            format!("after {number} resets: {fault}; the board was known as {:?}", bench.life)
        })?;
        if number > 0 && number % 100 == 0 {
            println!("{number} resets, {:.0} s", started.elapsed().as_secs_f64());
        }
    }
    bench.tell(count, started.elapsed());
    match (files, bench.emulator.open_files()) {
        (Some(before), Some(after)) if after > before => {
            Err(format!("the image leaves files open: {before} at first, {after} at last"))
        }
        _ => Ok(()),
    }
}

impl Bench {
    fn new(image: &Path, recording: &Path, defaults: Settings) -> Outcome<Self> {
        let (emulator, uart, reset_line) = Emulator::boot_on_socket(image, recording)?;
        uart.set_read_timeout(Some(READ_WAIT)).map_err(text)?;
        uart.set_write_timeout(Some(PATIENCE)).map_err(text)?;
        Ok(Self {
            emulator,
            uart,
            reset_line,
            decoder: DeviceDecoder::new(),
            defaults,
            dice: dice(11),
            garbler: Garbler::new(dice(12), defaults),
            life: Life::default(),
            boot_ids: BTreeSet::new(),
            number: 0,
            garbled: BTreeMap::new(),
            refusals: 0,
            passing_missed: 0,
            slowest_start: Duration::ZERO,
            slowest_answer: Duration::ZERO,
        })
    }

    /// One life, from the first word to the last clean one.
    fn live(&mut self) -> Outcome<()> {
        self.garble()?;
        self.ask(Command::Identify)?;
        self.expect_settings(self.defaults)?;
        let receivers = TABLE
            .iter()
            .filter(|receiver| are_limits_valid(&receiver.limits(), self.defaults.detection.hysteresis_uv));
        let receivers: Vec<_> = receivers.collect();
        let receiver = receivers[self.dice.random_range(0..receivers.len())];
        let commanded = Settings { receiver: receiver.id, limits: receiver.limits(), ..self.defaults };
        self.ask(Command::WatchLimits { receiver: receiver.id, limits: receiver.limits() })?;
        self.expect_settings(commanded)?;
        self.garble()?;
        let asked = Instant::now();
        let mut acknowledged = 0;
        while self.life.summaries < SUMMARIES {
            if asked.elapsed() > PATIENCE {
                return Err("the board does not sample".into());
            }
            if acknowledged < self.life.highest_kept {
                acknowledged = self.life.highest_kept;
                self.say(Command::Acknowledge { through: acknowledged })?;
            }
            self.hear()?;
        }
        self.garble()?;
        // Its answer also says that no acknowledgement is still on its way into the next life.
        self.ask(Command::Identify)?;
        self.expect_settings(commanded)
    }

    /// More garble, a pause of any length, heard or not, and a reset.
    fn reset(&mut self) -> Outcome<()> {
        self.garble()?;
        let pause = Duration::from_micros(self.dice.random_range(0..LONGEST_PAUSE_US));
        let is_heard: bool = self.dice.random();
        let from = Instant::now();
        while from.elapsed() < pause {
            if is_heard { self.hear()? } else { std::thread::sleep(pause.saturating_sub(from.elapsed())) }
        }
        self.reset_line.pull()?;
        self.await_start(Instant::now())
    }

    /// Waits for the introduction that nobody asked for.
    fn await_start(&mut self, from: Instant) -> Outcome<()> {
        let last = self.life.boot_id;
        while self.life.boot_id == last || self.life.settings.is_none() {
            if from.elapsed() > PATIENCE {
                return Err("the board did not introduce itself".into());
            }
            self.hear()?;
        }
        self.slowest_start = self.slowest_start.max(from.elapsed());
        self.expect_settings(self.defaults)
    }

    fn expect_settings(&self, expected: Settings) -> Outcome<()> {
        match self.life.settings {
            Some(settings) if settings == expected => Ok(()),
            other => Err(format!("the settings told are {other:?}; they ought to be {expected:?}")),
        }
    }

    /// Sends up to three pieces of garble.
    fn garble(&mut self) -> Outcome<()> {
        for _ in 0..self.dice.random_range(0..=3) {
            let (kind, bytes) = self.garbler.piece();
            let (pieces, total) = self.garbled.entry(kind).or_default();
            (*pieces, *total) = (*pieces + 1, *total + bytes.len());
            self.uart.write_all(&bytes).map_err(|error| format!("the board takes nothing more: {error}"))?;
            if self.dice.random() {
                self.hear()?;
            }
        }
        Ok(())
    }

    /// Sends a command behind a delimiter, which ends whatever the line carried before.
    fn say(&mut self, command: Command) -> Outcome<()> {
        self.number += 1;
        let mut frame = [DELIMITER; REQUEST_FRAME_BYTES + 1];
        let request = Request { sequence: self.number, command };
        let length = encode_request(&request, &mut frame[1..]).map_err(text)?;
        self.uart
            .write_all(&frame[..=length])
            .map_err(|error| format!("the board takes nothing more: {error}"))
    }

    /// Sends a command and waits until the board says that it is done.
    fn ask(&mut self, command: Command) -> Outcome<()> {
        self.say(command)?;
        let (asked, to) = (Instant::now(), self.number);
        loop {
            self.hear()?;
            if let Some(reply) = self.life.replies.iter().find(|reply| reply.to == to) {
                self.slowest_answer = self.slowest_answer.max(asked.elapsed());
                return match reply.outcome {
                    message::Outcome::Done => Ok(()),
                    outcome => Err(format!("{command:?} was answered by {outcome:?}")),
                };
            }
            if asked.elapsed() > PATIENCE {
                return Err(format!("{command:?} was not answered"));
            }
        }
    }

    /// Takes what the board has said by now.
    fn hear(&mut self) -> Outcome<()> {
        let mut buffer = [0; 16_384];
        let count = match self.uart.read(&mut buffer) {
            Ok(0) => return Err("the emulator has gone".into()),
            Ok(count) => count,
            Err(error) if matches!(error.kind(), ErrorKind::WouldBlock | ErrorKind::TimedOut) => 0,
            Err(error) => return Err(text(error)),
        };
        let mut frames = Vec::new();
        self.decoder.feed_frames(&buffer[..count], |frame| frames.push(frame));
        frames.iter().try_for_each(|frame| self.examine(frame))
    }

    /// Holds a frame to the rules.
    fn examine(&mut self, frame: &DeviceFrame) -> Outcome<()> {
        let (envelope, number) = (frame.envelope, self.number);
        if envelope.boot_id != self.life.boot_id {
            let is_first =
                matches!(frame.message, Message::Hello(_)) && (envelope.sequence, envelope.sample) == (0, 0);
            if !is_first || !self.boot_ids.insert(envelope.boot_id) {
                return Err(format!("a life began with {frame:?}"));
            }
            self.life = Life { boot_id: envelope.boot_id, ..Life::default() };
        } else if envelope.sequence <= self.life.sequence {
            return Err(format!("the sequence went back: {frame:?}"));
        } else {
            self.passing_missed += envelope.sequence - self.life.sequence - 1;
            self.life.sequence = envelope.sequence;
        }
        let life = &mut self.life;
        let newest = match envelope.delivery {
            Delivery::Kept { number } if number > life.highest_kept + 1 => {
                return Err(format!("kept messages are missing before {frame:?}"));
            }
            Delivery::Kept { number } if number <= life.highest_kept => None,
            Delivery::Kept { number } => {
                life.highest_kept = number;
                Some(&mut life.samples[1])
            }
            Delivery::Passing => Some(&mut life.samples[0]),
        };
        if newest.is_some_and(|newest| std::mem::replace(newest, envelope.sample) > envelope.sample) {
            return Err(format!("samples went back: {frame:?}"));
        }
        match &frame.message {
            Message::Hello(hello) => {
                let is_right = hello.wire_version == WIRE_VERSION
                    && hello.board.as_text() == BOARD_NAME
                    && hello.sample_rate_mhz == SAMPLE_RATE_MHZ;
                return if is_right { Ok(()) } else { Err(format!("a wrong {hello:?}")) };
            }
            Message::Settings(settings) => life.settings = Some(*settings),
            Message::Summary(summary) => {
                if summary.first_sample != life.next_summary {
                    return Err(format!("readings up to {} were followed by {summary:?}", life.next_summary));
                }
                life.next_summary += u64::from(summary.samples);
                life.summaries += 1;
            }
            Message::Reply(reply) if reply.to >= FIRST_NUMBER => {
                self.refusals += 1;
                if reply.outcome != message::Outcome::OutOfRange {
                    return Err(format!("the board obeyed garble: {reply:?}"));
                }
            }
            Message::Reply(reply) if (1..=number).contains(&reply.to) => life.replies.push(*reply),
            Message::Reply(reply) => return Err(format!("nobody asked for {reply:?}")),
            Message::Gap(_) | Message::Loss(_) | Message::End(_) => {
                return Err(format!("nothing calls for {:?}", frame.message));
            }
            _ => {}
        }
        Ok(())
    }

    fn tell(&self, count: u32, elapsed: Duration) {
        println!("{count} resets in {:.0} s, {} boot ids", elapsed.as_secs_f64(), self.boot_ids.len());
        for (kind, (pieces, bytes)) in &self.garbled {
            println!("  {:<12} {pieces:>6} pieces {bytes:>8} bytes", format!("{kind:?}"));
        }
        let damaged = self.decoder.counts().damaged_frames;
        println!("{} refused as out of range; {damaged} frames cut by a reset", self.refusals);
        println!(
            "{} passing messages missing; slowest start {:.0} ms, slowest answer {:.0} ms",
            self.passing_missed,
            millis(self.slowest_start),
            millis(self.slowest_answer)
        );
    }
}

fn millis(duration: Duration) -> f64 {
    duration.as_secs_f64() * 1e3
}
