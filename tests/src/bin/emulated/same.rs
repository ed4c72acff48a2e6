//! `emulated same IMAGE`: every frame of the image must be that of the firmware on this machine.

use crate::{Outcome, PATIENCE, text};
use legwise::board::VirtualBoard;
use legwise::line::{Length, LineSource, scenarios};
use legwise::port::BoardPort;
use legwise_firmware::source::SourceDescription;
use legwise_protocol::command::Command;
use legwise_protocol::decoder::DeviceDecoder;
use legwise_protocol::framing::{Delivery, DeviceFrame};
use legwise_protocol::message::Message;
use legwise_tests::emulator::Emulator;
use legwise_tests::link_budget::BOARD_NAME;
use legwise_tests::replay::Replay;
use std::path::Path;
use std::time::Instant;

/// Bytes of stack that must never have been used.
const STACK_RESERVE_BYTES: usize = 256;
/// Pairs of each scenario, and how long before its first disturbance they begin.
const SCENARIO_PAIRS: f64 = 200_000.0;
const LEAD_S: f64 = 0.02;

/// Every recording through both; all frames must be equal.
pub fn same(image: &Path) -> Outcome<()> {
    let folder = tempfile::tempdir().map_err(text)?;
    println!(
        "{:<34} {:>8} {:>7} {:>6} {:>8} {:>7}",
        "recording", "pairs", "frames", "kept", "spectra", "equal"
    );
    let mut has_failed = false;
    for (name, replay) in recordings() {
        let path = folder.path().join("replay.bin");
        replay.write(&path, 0).map_err(text)?;
        let (emulated, console) = run_emulated(image, &path)?;
        let emulated = from_answer(emulated);
        let desktop = from_answer(run_desktop(replay.clone()));
        let is_equal = emulated == desktop;
        let kept = desktop.iter().filter(|frame| frame.message.is_kept()).count();
        let spectra = desktop.iter().filter(|frame| matches!(frame.message, Message::Spectra(_))).count();
        println!(
            "{name:<34} {:>8} {:>7} {kept:>6} {spectra:>8} {:>7}  {console}",
            replay.pairs(),
            desktop.len(),
            if is_equal { "yes" } else { "NO" }
        );
        if !is_equal {
            has_failed = true;
            explain(&emulated, &desktop);
        }
        check_stack(&console)?;
    }
    if has_failed { Err("the board and the desktop differ".into()) } else { Ok(()) }
}

/// Holds the stack to what the linker's budget for RAM leaves it.
fn check_stack(console: &str) -> Outcome<()> {
    let numbers: Vec<usize> = console.split_whitespace().filter_map(|word| word.parse().ok()).collect();
    let &[used, available] = numbers.as_slice() else {
        return Err(format!("the board did not tell its stack: {console:?}"));
    };
    if used + STACK_RESERVE_BYTES > available {
        return Err(format!(
            "the stack went {used} bytes deep, of {available}; {STACK_RESERVE_BYTES} must be left"
        ));
    }
    Ok(())
}

/// The frames from the answer to `Identify` on, sequence numbers counted from there. What came before
/// depends on when the host's first words arrived.
fn from_answer(frames: Vec<DeviceFrame>) -> Vec<DeviceFrame> {
    let is_answer = |frame: &DeviceFrame| matches!(frame.message, Message::Reply(_));
    let mut frames: Vec<_> = frames.into_iter().skip_while(|frame| !is_answer(frame)).collect();
    let first = frames.first().map_or(0, |frame| frame.envelope.sequence);
    for frame in &mut frames {
        frame.envelope.sequence = frame.envelope.sequence.wrapping_sub(first);
    }
    frames
}

/// The first frame that differs.
fn explain(emulated: &[DeviceFrame], desktop: &[DeviceFrame]) {
    println!("  {} frames from the board, {} from the desktop", emulated.len(), desktop.len());
    if let Some((left, right)) = emulated.iter().zip(desktop).find(|(left, right)| left != right) {
        println!("  board   {left:?}\n  desktop {right:?}");
    }
}

/// Scenarios, a skewed board, clipping, storms, overruns, odd deliveries.
fn recordings() -> Vec<(String, Replay)> {
    let mut recordings = Vec::new();
    for (number, (name, _)) in scenarios::NAMES.iter().enumerate() {
        let Some(scenario) = scenarios::by_name(name) else { continue };
        let seconds = SCENARIO_PAIRS / scenario.sample_rate_hz;
        let Ok(mut replay) = Replay::of_scenario(name, 7, LEAD_S, seconds) else { continue };
        replay.boot_id = 100 + number as u32;
        recordings.push(((*name).to_owned(), replay));
    }
    let quiet = |pairs| {
        let scenario = scenarios::by_name("drive-bay").ok_or("no such scenario").map_err(str::to_owned);
        scenario.and_then(|scenario| LineSource::new(&scenario, 3, Length::Pairs(pairs)).map_err(text))
    };
    if let Ok(source) = quiet(120_000) {
        recordings.push(("overruns".into(), Replay::record(source, 0, 200, |number| number % 57 < 3)));
    }
    if let Ok(source) = quiet(60_000) {
        let mut replay = Replay::record(source, 0, 201, |_| false);
        replay.description.skew_ns = 2_400;
        recordings.push(("skewed sampling, 2.4 µs".into(), replay));
    }
    if let Ok(source) = quiet(60_000) {
        let mut replay = Replay::record(source, 0, 202, |_| false);
        storm(&mut replay);
        recordings.push(("storm with clipping".into(), replay.clone()));
        replay.receiver = 7;
        recordings.push(("storm with clipping, LVDS limits".into(), replay));
    }
    recordings
}

/// Common-mode pulses every 37 pairs for a while, some at the converter's rail.
fn storm(replay: &mut Replay) {
    let SourceDescription { legs: [scale, _], .. } = replay.description;
    for delivery in replay.deliveries.iter_mut().skip(40).take(60) {
        let first = delivery.first_sample;
        let legs = delivery.leg_a.iter_mut().zip(&mut delivery.leg_b);
        for (sample, (a, b)) in (first..).zip(legs) {
            if sample % 37 < 5 {
                let code = if sample % 5 == 0 { scale.rail_high_code } else { scale.rail_high_code - 700 };
                (*a, *b) = (code, code - 3);
            }
        }
    }
}

/// The firmware on this machine, told the same things in the same order.
fn run_desktop(replay: Replay) -> Vec<DeviceFrame> {
    let (settings, boot_id) = (replay.settings(), replay.boot_id);
    let mut board = VirtualBoard::new(replay, settings, BOARD_NAME, boot_id);
    board.command(Command::Identify);
    let (mut decoder, mut frames, mut bytes) = (DeviceDecoder::new(), Vec::new(), Vec::new());
    let mut is_running = true;
    while is_running {
        bytes.clear();
        is_running = matches!(board.run_batch(&mut bytes), Ok(true));
        decoder.feed_frames(&bytes, |frame| frames.push(frame));
        if let Some(through) = highest_kept(&frames) {
            board.acknowledge(through);
        }
    }
    frames
}

/// The image in the emulator, through its serial port.
fn run_emulated(image: &Path, recording: &Path) -> Outcome<(Vec<DeviceFrame>, String)> {
    let mut emulator = Emulator::boot(image, recording)?;
    let mut port = BoardPort::open(&emulator.port, 115_200).map_err(text)?;
    port.command(Command::Identify).map_err(text)?;
    let (mut decoder, mut frames, mut buffer) = (DeviceDecoder::new(), Vec::new(), vec![0; 65_536]);
    let mut acknowledged = 0;
    let mut heard = Instant::now();
    loop {
        let count = port.read(&mut buffer).map_err(text)?;
        if count > 0 {
            heard = Instant::now();
            decoder.feed_frames(&buffer[..count], |frame| frames.push(frame));
        }
        let has_ended = matches!(frames.last(), Some(DeviceFrame { message: Message::End(_), .. }));
        if let Some(through) = highest_kept(&frames).filter(|&through| through > acknowledged) {
            port.command(Command::Acknowledge { through }).map_err(text)?;
            acknowledged = through;
        }
        if has_ended && highest_kept(&frames) == Some(acknowledged) {
            return Ok((frames, emulator.wait()?.join(" ")));
        }
        if heard.elapsed() > PATIENCE {
            return Err(format!("the board fell silent after {} frames", frames.len()));
        }
    }
}

fn highest_kept(frames: &[DeviceFrame]) -> Option<u32> {
    frames.iter().rev().find_map(|frame| match frame.envelope.delivery {
        Delivery::Kept { number } => Some(number),
        Delivery::Passing => None,
    })
}
