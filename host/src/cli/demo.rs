//! `demo`: the whole job on a simulated pair, by the real firmware, through the real bytes, into a
//! real log.
//!
//! The board runs in its own thread and sends bytes; this thread decodes, stores, acknowledges and
//! shows what is flagged.

use super::failure::Exit;
use super::live::LiveView;
use super::{DemoArguments, simulate, stream, terminal};
use crate::board::VirtualBoard;
use crate::line::{Length, LineSource};
use crate::log::{Arrival, Log, Origin};
use crate::report::{self, Options, Report, figures};
use crate::session::Session;
use anyhow::Context;
use legwise_firmware::source::PairSource;
use legwise_protocol::framing::DeviceFrame;
use std::path::{Path, PathBuf};
use std::sync::mpsc::{Receiver, Sender, SyncSender, channel, sync_channel};
use std::thread;
use std::time::Instant;

/// Scenario of a bare `demo`.
pub(super) const DEFAULT_SCENARIO: &str = "press-ground";
/// Bus time of a bare `demo`.
pub(super) const DEFAULT_MINUTES: f64 = 10.0;
/// Batches of bytes that may wait for the decoder.
const BATCHES_IN_FLIGHT: usize = 2;
/// The board's buffers live on its thread's stack for a moment while they are made.
const BOARD_STACK_BYTES: usize = 16 << 20;

pub(super) fn run(arguments: &DemoArguments) -> anyhow::Result<Exit> {
    if arguments.scenario == "list" {
        return simulate::list();
    }
    let scenario = simulate::load(&arguments.scenario)?;
    let watching = arguments.watching.choose(Some(&scenario.receiver))?;
    let rate_hz = scenario.sample_rate_hz;
    let pairs = simulate::pairs_in(arguments.minutes * 60.0, rate_hz)?;
    let source = LineSource::new(&scenario, arguments.seed, Length::Pairs(pairs))?;
    let settings = watching.settings(source.describe().sample_rate_mhz);
    let (log_path, report_path) = free_paths(arguments)?;
    let about =
        stream::about(Origin::Simulated, &scenario.title, Some("simulated monitor on the simulated pair"));
    let log = Log::create(&log_path, &about)?;

    terminal::print(&format!("{}\n{}\n", scenario.title, scenario.description.trim()))?;
    terminal::print(&format!(
        "{} of bus time at {}, seed {}; this is a simulation, no board is attached",
        figures::span(pairs as f64 / rate_hz),
        figures::pair_rate(rate_hz),
        arguments.seed
    ))?;
    let started = Instant::now();
    let board = VirtualBoard::new(source, settings, "simulated", boot_id(arguments.seed));
    let log = record(board, Session::new(log), pairs, about.created_utc_ns)?;
    let took = started.elapsed().as_secs_f64();

    let report = Report::from_log(&log, &Options::default())?;
    std::fs::write(&report_path, report::text::render(&report, report::text::Style::PLAIN))
        .with_context(|| format!("could not write {}; try another --folder", report_path.display()))?;
    terminal::print(&format!("\n{}", report::text::render(&report, terminal::style())))?;
    terminal::print(&format!(
        "{}: {}\nbus time ran {:.0} times faster than real time ({} in {})\nlog    {}\nreport {}",
        report::text::verdict_words(report.verdict),
        report.reason,
        pairs as f64 / rate_hz / took,
        figures::span(pairs as f64 / rate_hz),
        figures::span(took),
        log_path.display(),
        report_path.display()
    ))?;
    Ok(Exit::of_verdict(report.verdict, arguments.verdict_code))
}

/// Paths that do not exist yet, so that no earlier run is lost.
fn free_paths(arguments: &DemoArguments) -> anyhow::Result<(PathBuf, PathBuf)> {
    let name = Path::new(&arguments.scenario).file_stem().unwrap_or_default().to_string_lossy();
    std::fs::create_dir_all(&arguments.folder).with_context(|| {
        format!("could not make the folder {}; try another --folder", arguments.folder.display())
    })?;
    let path = |number: u32, ending: &str| {
        let number = if number == 1 { String::new() } else { format!("-{number}") };
        arguments.folder.join(format!("{name}{number}.{ending}"))
    };
    let number =
        (1..).find(|&number| !path(number, "lwlog").exists() && !path(number, "txt").exists()).unwrap_or(1);
    Ok((path(number, "lwlog"), path(number, "txt")))
}

/// A boot id that repeats with the seed, as everything in a demo does.
fn boot_id(seed: u64) -> u32 {
    (seed ^ (seed >> 32)) as u32 ^ 0x4C57_0001
}

/// Bytes from the board, the sample it has come to, and the simulated time there, nanoseconds.
type Batch = (Vec<u8>, u64, i64);

/// Runs the board in a thread and its bytes through the session; the finished log.
fn record(
    board: VirtualBoard<LineSource>,
    mut session: Session,
    pairs: u64,
    start_utc_ns: i64,
) -> anyhow::Result<Log> {
    let bar = terminal::progress_bar(pairs, "the time");
    let (batches_out, batches) = sync_channel::<Batch>(BATCHES_IN_FLIGHT);
    let (acknowledge, acknowledged) = channel::<u32>();
    let runner = thread::Builder::new()
        .stack_size(BOARD_STACK_BYTES)
        .spawn(move || run_board(board, &batches_out, &acknowledged))
        .context("could not start the board's thread; try again")?;
    let outcome = receive(&mut session, &batches, &acknowledge, &bar, start_utc_ns);
    // Closing our ends stops the board if we stopped first.
    drop((batches, acknowledge));
    let has_run = runner.join().is_ok();
    bar.finish_and_clear();
    outcome?;
    anyhow::ensure!(
        has_run,
        "the simulated board stopped unexpectedly; try another --seed and tell us this one"
    );
    Ok(session.finish()?)
}

fn run_board(mut board: VirtualBoard<LineSource>, batches: &SyncSender<Batch>, acknowledged: &Receiver<u32>) {
    let mut is_running = true;
    while is_running {
        while let Ok(through) = acknowledged.try_recv() {
            board.acknowledge(through);
        }
        let mut bytes = Vec::new();
        let Ok(is_more) = board.run_batch(&mut bytes);
        is_running = is_more;
        let elapsed_ns = (board.source().now_s() * 1e9) as i64;
        if batches.send((bytes, board.next_sample(), elapsed_ns)).is_err() {
            return;
        }
    }
}

fn receive(
    session: &mut Session,
    batches: &Receiver<Batch>,
    acknowledge: &Sender<u32>,
    bar: &indicatif::ProgressBar,
    start_utc_ns: i64,
) -> anyhow::Result<()> {
    let mut view = LiveView::default();
    for (bytes, sample, elapsed_ns) in batches {
        let mut lines = Vec::new();
        let mut on_frame = |frame: &DeviceFrame| lines.extend(view.line(frame));
        // The simulated clock: the log's times run with the simulated pair, not with this machine.
        let arrival = Arrival { utc_ns: start_utc_ns + elapsed_ns, monotonic_ns: elapsed_ns };
        session.receive(&bytes, arrival, &mut on_frame)?;
        session.flush()?;
        if let Some(through) = session.acknowledgement() {
            // A board that has finished no longer listens; that loses nothing.
            let _ = acknowledge.send(through);
        }
        for line in lines {
            terminal::print_above(bar, &line)?;
        }
        bar.set_position(sample);
    }
    if let Some(line) = view.unprinted() {
        terminal::print_above(bar, &line)?;
    }
    Ok(())
}
