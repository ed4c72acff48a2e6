//! `emulated link IMAGE [SECONDS]`: the stream of every scenario against the speed of the link.
//!
//! The replay does not wait for a throttled link, so what does not fit is shed as on a real board. Time
//! is the sample count and the host answers every frame at once: the same frames on every run, and the
//! same as on this machine, which is checked. Demand is what an unhindered link carries there.

use crate::{Outcome, PATIENCE, text};
use legwise::line::scenarios;
use legwise_protocol::framing::DeviceFrame;
use legwise_tests::emulator::Emulator;
use legwise_tests::link_budget::{Demand, PromptHost, Shed, USUAL_BYTES_PER_S, play, without_reports};
use legwise_tests::replay::Replay;
use std::io::{Read, Write};
use std::path::Path;

/// A rate too low for the stream: 9 600 baud, ten bits a byte.
const LOW_BYTES_PER_S: u32 = 9_600 / 10;
/// The recordings begin so long before the first disturbance.
const LEAD_S: f64 = 2.0;

/// What a scenario came to at one rate.
struct Run {
    shed: Shed,
    /// Kept messages lost when nothing but kept messages is sent.
    lost_alone: u32,
    is_equal: bool,
}

/// Plays every scenario at both rates; prints the table.
pub fn link(image: &Path, seconds: f64) -> Outcome<()> {
    let folder = tempfile::tempdir().map_err(text)?;
    println!("{seconds} s of each scenario; bytes/s asked for; messages not sent at two speeds");
    println!(
        "{:<16} {:>6} {:>6} {:>8} | {:>15} | {:>30} |",
        "", "", "", "busiest", "115 200 baud", "9 600 baud"
    );
    println!(
        "{:<16} {:>6} {:>6} {:>8} | {:>7} {:>7} | {:>7} {:>7} {:>14} | {:>5}",
        "scenario", "mean", "kept", "second", "passing", "kept", "passing", "kept", "kept alone", "equal"
    );
    let (mut faults, mut shed_when_low) = (Vec::new(), 0);
    for (name, _) in scenarios::NAMES {
        let replay = Replay::of_scenario(name, 7, LEAD_S, seconds)?;
        let (frames, _) = play(&replay, replay.settings(), 0);
        let demand = Demand::of(&frames, &replay);
        let run = |bytes_per_s| run(image, folder.path(), &replay, bytes_per_s);
        let (usual, low) = std::thread::scope(|scope| {
            let usual = scope.spawn(|| run(USUAL_BYTES_PER_S));
            let low = run(LOW_BYTES_PER_S);
            (usual.join(), low)
        });
        let (usual, low) = (usual.map_err(|_| "a run has stopped early")??, low?);
        println!(
            "{name:<16} {:>6.0} {:>6.0} {:>8} | {:>7} {:>7} | {:>7} {:>7} {:>14} | {:>5}",
            demand.mean,
            demand.kept_mean,
            demand.busiest,
            usual.shed.passing,
            usual.shed.kept_messages(),
            low.shed.passing,
            low.shed.kept_messages(),
            low.lost_alone,
            if usual.is_equal && low.is_equal { "yes" } else { "NO" },
        );
        shed_when_low += low.shed.passing;
        faults.extend(faults_of(name, &usual, &low));
    }
    if shed_when_low == 0 {
        faults.push("nothing was shed at 9 600 baud: the throttle does not work, or the recordings are too short; try more seconds".into());
    }
    if faults.is_empty() { Ok(()) } else { Err(faults.join("\n")) }
}

/// What must not be.
fn faults_of(name: &str, usual: &Run, low: &Run) -> Vec<String> {
    let mut faults = Vec::new();
    if usual.shed != Shed::default() {
        faults.push(format!("{name}: 115 200 baud do not suffice: {:?}", usual.shed));
    }
    let lost = low.shed.kept_messages();
    if lost > 0 && low.lost_alone == 0 {
        faults.push(format!(
            "{name}: {lost} kept messages were lost at 9 600 baud to passing ones: alone they fit"
        ));
    }
    if !(usual.is_equal && low.is_equal) {
        faults.push(format!("{name}: the board and the desktop differ"));
    }
    faults
}

/// The image on a link of a given speed, held against the firmware on this machine.
fn run(image: &Path, folder: &Path, replay: &Replay, bytes_per_s: u32) -> Outcome<Run> {
    let path = folder.join(format!("replay-{bytes_per_s}.bin"));
    replay.write(&path, bytes_per_s).map_err(text)?;
    let emulated = run_emulated(image, &path)?;
    let (desktop, _) = play(replay, replay.settings(), bytes_per_s);
    let (_, alone) = play(replay, without_reports(replay.settings()), bytes_per_s);
    Ok(Run {
        shed: Shed::seen_in(&emulated),
        lost_alone: alone.kept_messages(),
        is_equal: emulated == desktop,
    })
}

/// Every frame of the image, each answered at once.
fn run_emulated(image: &Path, recording: &Path) -> Outcome<Vec<DeviceFrame>> {
    let (mut emulator, mut uart, _reset_line) = Emulator::boot_on_socket(image, recording)?;
    uart.set_read_timeout(Some(PATIENCE)).map_err(text)?;
    let mut host = PromptHost::default();
    uart.write_all(&host.opening()).map_err(text)?;
    let mut buffer = vec![0; 65_536];
    loop {
        let count = match uart.read(&mut buffer) {
            Ok(count) => count,
            // The emulator may go with an acknowledgement unread.
            Err(_) if host.has_heard_the_end() => 0,
            Err(error) => return Err(format!("the board fell silent: {error}")),
        };
        if count == 0 {
            emulator.wait()?;
            return Ok(host.into_frames());
        }
        let answer = host.hear(&buffer[..count]);
        if uart.write_all(&answer).is_err() && !host.has_heard_the_end() {
            return Err("the board has gone".into());
        }
    }
}
