//! Decodes the log of the emulated board and holds it to the frames of the same run.
//!
//! `emulated_logs IMAGE`: boots the image (built with the feature `defmt` and `DEFMT_LOG=debug`) on a
//! recording with pulses enough for a storm, an overrun and the end, sends it a request it obeys and one
//! it refuses, and prints its log. Then once more on a recording that breaks off. Every kind of line
//! in the table of `firmware/src/trace.rs` that such runs can make must be there, at its level, as often as
//! the frames say. Missing: kept messages given up (the replay waits for the link), failures of link and pin.

use defmt_decoder::{DecodeError, Table};
use legwise::line::{Length, LineSource, scenarios};
use legwise::port::{BoardPort, DEFAULT_BAUD};
use legwise_firmware::settings;
use legwise_protocol::command::Command;
use legwise_protocol::decoder::DeviceDecoder;
use legwise_protocol::framing::{Delivery, DeviceFrame};
use legwise_protocol::message::{Message, Outcome};
use legwise_protocol::receivers::TABLE;
use legwise_tests::emulator::Emulator;
use legwise_tests::replay::Replay;
use std::collections::{BTreeMap, BTreeSet};
use std::path::Path;
use std::process::ExitCode;
use std::time::{Duration, Instant};

/// Longest silence of the board before it counts as hung.
const PATIENCE: Duration = Duration::from_secs(60);
const PAIRS: u64 = 40_000;
/// More than a storm window reports one by one (16).
const PULSES: u64 = 24;
/// Deliveries lost in front of the overrun, after the last pulse.
const LOST: std::ops::Range<usize> = 150..153;

type Checked<T> = Result<T, String>;

fn main() -> ExitCode {
    let arguments: Vec<_> = std::env::args().skip(1).collect();
    let outcome = match &arguments[..] {
        [image] => check(Path::new(image)),
        _ => Err("could not read the arguments; try: emulated_logs IMAGE".into()),
    };
    match outcome {
        Ok(()) => ExitCode::SUCCESS,
        Err(message) => {
            eprintln!("{message}");
            ExitCode::FAILURE
        }
    }
}

fn check(image: &Path) -> Checked<()> {
    let elf = std::fs::read(image).map_err(text)?;
    let table = Table::parse(&elf).map_err(text)?;
    let table = table.ok_or("no log texts in the image; try building it with --features defmt")?;

    println!("a run with pulses, an overrun, a request to refuse:");
    let mut replay = eventful()?;
    let whole = run(image, &table, &replay, 0)?;
    println!("\na recording that breaks off:");
    replay.deliveries.truncate(2);
    let broken = run(image, &table, &replay, 100)?;
    println!();

    let mut faults = compare(&whole);
    faults.extend((!whole.has_succeeded).then(|| "the image ended with a failure".to_owned()));
    if broken.count("ERROR", "source: Truncated") != 1 || broken.has_succeeded {
        faults.push("the recording broke off, and the log has no line for it".into());
    }
    println!("\n{} log lines, {} frames", whole.lines.len() + broken.lines.len(), whole.frames.len());
    if faults.is_empty() {
        return Ok(());
    }
    faults.push("try building the image with DEFMT_LOG=debug, and read firmware/src/trace.rs".into());
    Err(faults.join("\n"))
}

/// What the frames of a run say against what its log says.
fn compare(run: &Run) -> Vec<String> {
    let made = |is_such: fn(&Message) -> bool| run.kept.values().filter(|message| is_such(message)).count();
    let answered = |outcome| {
        let is_such = |frame: &&DeviceFrame| matches!(&frame.message, Message::Reply(reply) if (reply.outcome == Outcome::Done) == outcome);
        run.frames.iter().filter(is_such).count()
    };
    let closed = made(|message| matches!(message, Message::Excursion(_)));
    // Level, what the line holds, how many there must be.
    let lines = [
        ("INFO", ": settings Settings {", made(|message| matches!(message, Message::Settings(_)))),
        ("INFO", " closed: Excursion {", closed),
        ("WARN", ": storm: Storm {", made(|message| matches!(message, Message::Storm(_)))),
        ("WARN", ": gap: Gap {", made(|message| matches!(message, Message::Gap(_)))),
        ("INFO", ": end: SourceExhausted", made(|message| matches!(message, Message::End(_)))),
        ("INFO", " obeyed", answered(true)),
        ("WARN", " refused: OutOfRange", answered(false)),
        ("DEBUG", " begun", run.excursions()),
        ("DEBUG", "acknowledged through ", run.acknowledgements),
        ("INFO", "stack ", 1),
    ];
    let mut faults = Vec::new();
    for (level, part, expected) in lines {
        let found = run.count(level, part);
        println!("{level:<5} {part:<24} {found:>4} lines, {expected:>4} by the frames");
        if found != expected || expected == 0 {
            faults
                .push(format!("{found} lines with \"{part}\" at {level}, {expected} expected, at least one"));
        }
    }
    faults
}

/// A quiet line with pulses onto both legs, then an overrun.
fn eventful() -> Checked<Replay> {
    let scenario = scenarios::by_name("drive-bay").ok_or("no such scenario")?;
    let source = LineSource::new(&scenario, 3, Length::Pairs(PAIRS)).map_err(text)?;
    let mut replay = Replay::record(source, 0, 300, |number| LOST.contains(&number));
    let rail = replay.description.legs[0].rail_high_code;
    for delivery in &mut replay.deliveries {
        let legs = delivery.leg_a.iter_mut().zip(&mut delivery.leg_b);
        for (sample, (a, b)) in (delivery.first_sample..).zip(legs) {
            let (pulse, place) = (sample / 1_000, sample % 1_000);
            if (1..=PULSES).contains(&pulse) && place < 5 {
                (*a, *b) = (rail - 700, rail - 703);
            }
        }
    }
    Ok(replay)
}

/// What came of one run.
struct Run {
    frames: Vec<DeviceFrame>,
    /// Kept messages by number, each once.
    kept: BTreeMap<u32, Message>,
    acknowledgements: usize,
    /// Level and text.
    lines: Vec<(String, String)>,
    has_succeeded: bool,
}

impl Run {
    fn count(&self, level: &str, part: &str) -> usize {
        self.lines.iter().filter(|(at, line)| at == level && line.contains(part)).count()
    }

    /// Excursions told one by one and in storms.
    fn excursions(&self) -> usize {
        let numbers: BTreeSet<_> = self
            .kept
            .values()
            .filter_map(|message| match message {
                Message::Excursion(excursion) => Some(excursion.number),
                _ => None,
            })
            .collect();
        let in_storms = self.kept.values().map(|message| match message {
            Message::Storm(storm) => storm.excursions as usize,
            _ => 0,
        });
        numbers.len() + in_storms.sum::<usize>()
    }
}

/// Boots the image on a recording without its last `cut` bytes, talks to it, prints and returns its log.
fn run(image: &Path, table: &Table, replay: &Replay, cut: u64) -> Checked<Run> {
    let folder = tempfile::tempdir().map_err(text)?;
    let recording = folder.path().join("replay.bin");
    replay.write(&recording, 0).map_err(text)?;
    let file = std::fs::OpenOptions::new().write(true).open(&recording).map_err(text)?;
    let length = file.metadata().map_err(text)?.len();
    file.set_len(length - cut).map_err(text)?;
    let mut emulator = Emulator::boot(image, &recording)?;
    let (frames, acknowledgements) = talk(&emulator.port, replay)?;
    let (has_succeeded, log) = emulator.wait_for_bytes()?;
    let lines = decode(table, &log)?;
    let kept = frames.iter().filter_map(|frame| match frame.envelope.delivery {
        Delivery::Kept { number } => Some((number, frame.message.clone())),
        Delivery::Passing => None,
    });
    Ok(Run { kept: kept.collect(), frames, acknowledgements, lines, has_succeeded })
}

/// Sends the requests and acknowledges what comes until the image ends and takes the port with it;
/// frames, and how many acknowledgements were sent.
fn talk(port: &str, replay: &Replay) -> Checked<(Vec<DeviceFrame>, usize)> {
    let receiver = TABLE.get(replay.receiver as usize).ok_or("no such receiver")?;
    let mut detection = settings::for_receiver(receiver, replay.description.sample_rate_mhz).detection;
    detection.hold_off_samples = 0; // refused: at least 1
    let mut port = BoardPort::open(port, DEFAULT_BAUD).map_err(text)?;
    let limits = Command::WatchLimits { receiver: receiver.id, limits: receiver.limits() };
    for command in [Command::Identify, limits, Command::SetDetection(detection)] {
        port.command(command).map_err(text)?;
    }
    let (mut decoder, mut frames, mut buffer) = (DeviceDecoder::new(), Vec::new(), vec![0; 65_536]);
    let (mut acknowledged, mut acknowledgements, mut heard) = (0, 0, Instant::now());
    while let Ok(count) = port.read(&mut buffer) {
        if count > 0 {
            heard = Instant::now();
        } else if heard.elapsed() > PATIENCE {
            return Err(format!("the board fell silent after {} frames", frames.len()));
        }
        decoder.feed_frames(&buffer[..count], |frame| frames.push(frame));
        let newest = frames.iter().rev().find_map(|frame| match frame.envelope.delivery {
            Delivery::Kept { number } => Some(number),
            Delivery::Passing => None,
        });
        if let Some(through) = newest.filter(|&through| through > acknowledged) {
            if port.command(Command::Acknowledge { through }).is_err() {
                break;
            }
            (acknowledged, acknowledgements) = (through, acknowledgements + 1);
        }
    }
    Ok((frames, acknowledgements))
}

/// Decodes and prints every line; a damaged one is a failure.
fn decode(table: &Table, bytes: &[u8]) -> Checked<Vec<(String, String)>> {
    let mut decoder = table.new_stream_decoder();
    decoder.received(bytes);
    let mut lines = Vec::new();
    loop {
        let frame = match decoder.decode() {
            Ok(frame) => frame,
            Err(DecodeError::UnexpectedEof) => return Ok(lines),
            Err(DecodeError::Malformed) => {
                return Err(format!(
                    "damaged log after {} lines; is anything else written there?",
                    lines.len()
                ));
            }
        };
        let level = frame.level().map_or("", |level| level.as_str()).to_uppercase();
        let line = frame.display_message().to_string();
        println!("{level:<5} {line}");
        lines.push((level, line));
    }
}

fn text(error: impl std::fmt::Display) -> String {
    error.to_string()
}
