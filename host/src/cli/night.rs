//! `log`: a board on a serial port into a log file, until Ctrl-C or a given time. A plug that is pulled is
//! waited for.

use super::failure::Exit;
use super::live::LiveView;
use super::{LogArguments, stream, terminal};
use crate::log::{Arrival, Log, LogError, Origin};
use crate::port::{BoardPort, PortError, UsbIdentity};
use crate::report::{Options, Report, figures};
use crate::session::Session;
use crate::watching::Watching;
use anyhow::Context;
use indicatif::ProgressBar;
use jiff::tz::TimeZone;
use jiff::{Timestamp, ZonedDateTime};
use legwise_protocol::command::Command;
use legwise_protocol::framing::DeviceFrame;
use legwise_protocol::message::{Hello, Message, Outcome, Reply};
use std::path::{Path, PathBuf};
use std::sync::Arc;
use std::sync::atomic::{AtomicBool, Ordering};
use std::time::{Duration, Instant};

/// How often a silent board is asked who it is.
const ASK_AGAIN: Duration = Duration::from_secs(1);
/// How often a port that went away is looked for.
const LOOK_AGAIN: Duration = Duration::from_millis(500);
/// How long a stopped board may take to finish its last words.
const LAST_WORDS: Duration = Duration::from_secs(2);

pub(super) fn run(arguments: &LogArguments) -> anyhow::Result<Exit> {
    let watching = arguments.watching.choose(None)?;
    let end = arguments.length.end(&ZonedDateTime::now())?;
    let path = arguments.output.clone().unwrap_or_else(default_path);
    // Before anything is opened: from here on Ctrl-C ends cleanly.
    let stop = Arc::new(AtomicBool::new(false));
    let flag = Arc::clone(&stop);
    ctrlc::set_handler(move || flag.store(true, Ordering::SeqCst))
        .context("could not catch Ctrl-C; try again")?;
    let port = BoardPort::open(&arguments.port, arguments.baud)?;
    let plug = Plug { identity: UsbIdentity::of(&arguments.port), baud: arguments.baud };
    let about = stream::about(Origin::Serial, &arguments.port, arguments.point.as_deref());
    let log = Log::create(&path, &about)?;

    let until = end
        .map(|end| format!(" at {}", end.to_zoned_datetime(TimeZone::system()).strftime("%Y-%m-%d %H:%M")));
    let until = until.as_deref().unwrap_or_default();
    terminal::print(&format!(
        "logging {} into {}; it ends{until}{}",
        arguments.port,
        path.display(),
        if end.is_some() { " or at Ctrl-C" } else { " at Ctrl-C" }
    ))?;
    if arguments.point.is_none() {
        terminal::print("no --point given: the report cannot say where the clip sat")?;
    }
    let bar = terminal::state_line();
    let mut recorder = Recorder::new((port, plug), Session::new(log), watching);
    let is_over = || stop.load(Ordering::SeqCst) || end.is_some_and(|end| Timestamp::now() >= end);
    let outcome = recorder.record(&bar, &is_over);
    bar.finish_and_clear();
    let was_silent = recorder.boot_id.is_none();
    let log = recorder.session.finish()?;
    if was_silent {
        terminal::print(&format!(
            "no board introduced itself on {}; try its power, the cable, and --baud",
            arguments.port
        ))?;
    }
    match outcome {
        Ok(()) => summarise(&log, &path, arguments.verdict_code),
        Err(error) => {
            summarise(&log, &path, false)?;
            Err(error)
        }
    }
}

fn default_path() -> PathBuf {
    PathBuf::from(ZonedDateTime::now().strftime("legwise-%Y%m%d-%H%M%S.lwlog").to_string())
}

/// The verdict in a few lines, and how to see the rest.
fn summarise(log: &Log, path: &Path, is_verdict_code: bool) -> anyhow::Result<Exit> {
    let report = Report::from_log(log, &Options::default())?;
    terminal::print(&crate::report::text::headline(&report, terminal::style()))?;
    terminal::print(&format!("all of it: legwise report {}", path.display()))?;
    Ok(Exit::of_verdict(report.verdict, is_verdict_code))
}

/// How to find a port again.
struct Plug {
    identity: Option<UsbIdentity>,
    baud: u32,
}

/// A port, a session and what has been said between them.
struct Recorder {
    port: BoardPort,
    plug: Plug,
    session: Session,
    watching: Watching,
    view: LiveView,
    /// Boot the board introduced itself with, once it has.
    boot_id: Option<u32>,
    /// Sequence number of the command that sets the limits, once sent.
    limits_sent: Option<u32>,
    has_ended: bool,
    /// Whether the last attempt to store failed.
    is_storage_failing: bool,
}

impl Recorder {
    fn new((port, plug): (BoardPort, Plug), session: Session, watching: Watching) -> Self {
        Self {
            port,
            plug,
            session,
            watching,
            view: LiveView::default(),
            boot_id: None,
            limits_sent: None,
            has_ended: false,
            is_storage_failing: false,
        }
    }

    /// Records until `is_over`, then asks the board to finish. A port that goes away is waited for.
    fn record(&mut self, bar: &ProgressBar, is_over: &dyn Fn() -> bool) -> anyhow::Result<()> {
        let mut last_asked = None::<Instant>;
        while !is_over() && !self.has_ended {
            match self.round(bar, &mut last_asked) {
                Ok(()) => {}
                Err(error) => match error.downcast::<PortError>() {
                    Ok(lost @ PortError::Lost { .. }) => {
                        if !self.find_again(&lost, bar, is_over)? {
                            return Ok(());
                        }
                        last_asked = None;
                    }
                    Ok(other) => return Err(other.into()),
                    Err(other) => return Err(other),
                },
            }
        }
        match self.finish(bar) {
            // A board that goes away while it is asked to finish has said what it had to say.
            Err(error) if error.is::<PortError>() => Ok(()),
            outcome => outcome,
        }
    }

    /// Asks where that is due and takes what has arrived.
    fn round(&mut self, bar: &ProgressBar, last_asked: &mut Option<Instant>) -> anyhow::Result<()> {
        let is_unknown =
            self.boot_id.is_none() && last_asked.is_none_or(|asked| asked.elapsed() >= ASK_AGAIN);
        if is_unknown || self.session.wants_identify(now()) {
            self.port.command(Command::Identify)?;
            *last_asked = Some(Instant::now());
        }
        self.listen(bar)?;
        bar.set_message(if self.boot_id.is_none() {
            "waiting for the board to introduce itself".to_owned()
        } else {
            self.view.state()
        });
        Ok(())
    }

    /// Waits for the port to come back, under its name or as the same device under another; `false` when the
    /// night was over first.
    fn find_again(
        &mut self,
        lost: &PortError,
        bar: &ProgressBar,
        is_over: &dyn Fn() -> bool,
    ) -> anyhow::Result<bool> {
        let name = self.port.name().to_owned();
        let text = format!("{lost}; waiting for it to come back");
        self.note_link(&text, bar)?;
        let gone = Instant::now();
        while !is_over() {
            bar.set_message(format!("{name} is gone for {}", figures::span(gone.elapsed().as_secs_f64())));
            std::thread::sleep(LOOK_AGAIN);
            let Ok(port) = BoardPort::reopen(&name, self.plug.identity.as_ref(), self.plug.baud) else {
                continue;
            };
            let text =
                format!("{} is back after {}", port.name(), figures::span(gone.elapsed().as_secs_f64()));
            self.note_link(&text, bar)?;
            self.port = port;
            self.session.reconnected();
            // What the board holds it sends again when it is asked who it is.
            if self.port.command(Command::Identify).is_ok() {
                return Ok(true);
            }
        }
        Ok(false)
    }

    /// Says what became of the link, here and in the log, and makes that and what was heard durable.
    fn note_link(&mut self, text: &str, bar: &ProgressBar) -> anyhow::Result<()> {
        say(bar, text);
        let outcome = self.session.log_mut().note(now().utc_ns, "link", text);
        let outcome = outcome.and_then(|()| self.session.flush());
        self.note_storage(outcome, bar)
    }

    /// Asks for the last words and waits for them.
    fn finish(&mut self, bar: &ProgressBar) -> anyhow::Result<()> {
        if !self.has_ended && self.boot_id.is_some() {
            self.port.command(Command::Stop)?;
            let asked = Instant::now();
            while !self.has_ended && asked.elapsed() < LAST_WORDS {
                self.listen(bar)?;
            }
        }
        let outcome = self.session.flush();
        self.note_storage(outcome, bar)?;
        self.acknowledge()?;
        if let Some(line) = self.view.unprinted() {
            say(bar, &line);
        }
        Ok(())
    }

    /// Takes what has arrived.
    fn listen(&mut self, bar: &ProgressBar) -> anyhow::Result<()> {
        let mut buffer = [0; 4096];
        let count = self.port.read(&mut buffer)?;
        // Without bytes too: commits must stay timely on a silent line.
        let bytes = buffer.get(..count).unwrap_or(&[]);
        let mut lines = Vec::new();
        let mut heard = Heard::default();
        let view = &mut self.view;
        let mut on_frame = |frame: &DeviceFrame| {
            heard.note(frame);
            lines.extend(view.line(frame));
        };
        let outcome = self.session.receive(bytes, now(), &mut on_frame);
        self.note_storage(outcome, bar)?;
        self.acknowledge()?;
        self.answer(heard, &mut lines)?;
        for line in lines {
            say(bar, &line);
        }
        Ok(())
    }

    /// Sends what the board must be told after what was heard.
    fn answer(&mut self, heard: Heard, lines: &mut Vec<String>) -> anyhow::Result<()> {
        self.has_ended |= heard.has_ended;
        if let Some(hello) = heard.hello
            && self.boot_id != Some(heard.boot_id)
        {
            let verb = if self.boot_id.is_none() { "introduced itself" } else { "has restarted" };
            lines.push(format!("board '{}' {verb}", hello.board.as_text()));
            self.boot_id = Some(heard.boot_id);
            let (receiver, limits) = self.watching.on_wire();
            self.limits_sent = Some(self.port.command(Command::WatchLimits { receiver, limits })?);
        }
        match heard.reply {
            Some(Reply { to, outcome }) if Some(to) == self.limits_sent && outcome != Outcome::Done => {
                lines.push(
                    "the board refused the limits asked for; its own stay in force, see the report"
                        .to_owned(),
                );
            }
            _ => {}
        }
        Ok(())
    }

    /// Tells the board what it may forget: what is durable.
    fn acknowledge(&mut self) -> anyhow::Result<()> {
        if let Some(through) = self.session.acknowledgement() {
            self.port.command(Command::Acknowledge { through })?;
        }
        Ok(())
    }

    /// A full disk is no reason to stop listening: what arrives waits in memory and on the board, and
    /// every commit tries again. Said once; any other failure ends the run.
    fn note_storage(&mut self, outcome: Result<(), LogError>, bar: &ProgressBar) -> anyhow::Result<()> {
        match outcome {
            Ok(()) => {
                if self.is_storage_failing && self.session.flush().is_ok() {
                    self.is_storage_failing = false;
                    say(bar, "storing works again; nothing that arrived meanwhile is lost");
                }
                Ok(())
            }
            Err(error @ (LogError::DiskFull | LogError::Busy)) => {
                if !std::mem::replace(&mut self.is_storage_failing, true) {
                    say(bar, &format!("{error}; going on, what arrives waits in memory"));
                }
                Ok(())
            }
            Err(error) => Err(error.into()),
        }
    }
}

/// Prints a line above the state. A reader that went away must not end a night: then the log alone
/// goes on.
fn say(bar: &ProgressBar, line: &str) {
    let _ = terminal::print_above(bar, line);
}

/// What matters in a handful of frames.
#[derive(Default)]
struct Heard {
    boot_id: u32,
    hello: Option<Hello>,
    reply: Option<Reply>,
    has_ended: bool,
}

impl Heard {
    fn note(&mut self, frame: &DeviceFrame) {
        match &frame.message {
            Message::Hello(hello) => {
                self.hello = Some(*hello);
                self.boot_id = frame.envelope.boot_id;
            }
            Message::Reply(reply) => self.reply = Some(*reply),
            Message::End(_) => self.has_ended = true,
            _ => {}
        }
    }
}

fn now() -> Arrival {
    Arrival { utc_ns: stream::utc_now_ns(), monotonic_ns: monotonic_ns() }
}

/// Nanoseconds since the program first asked.
fn monotonic_ns() -> i64 {
    static START: std::sync::OnceLock<Instant> = std::sync::OnceLock::new();
    i64::try_from(START.get_or_init(Instant::now).elapsed().as_nanos()).unwrap_or(i64::MAX)
}
