//! A board at the far end of a terminal: the firmware with a scripted source, its bytes really
//! written and read, in a thread of its own.
//!
//! It starts to sample when it has been told what to watch, never loses a pair, and says when
//! everything it must keep has been acknowledged. Damage is done on the way to the port.

use crate::terminal;
use legwise_firmware::alarm::{AlarmPin, NoPin};
use legwise_firmware::fakes::MICROVOLT_CODES;
use legwise_firmware::link::Link;
use legwise_firmware::monitor::{Identity, Memory, Monitor, Step};
use legwise_firmware::pipeline::Buffers;
use legwise_firmware::settings;
use legwise_firmware::source::{PairSource, SourceDescription, Taken};
use legwise_protocol::command::Command;
use legwise_protocol::decoder::{DeviceDecoder, RequestDecoder};
use legwise_protocol::framing::{DELIMITER, Delivery};
use legwise_protocol::message::{Message, ResetCause};
use legwise_protocol::receivers;
use serialport::{SerialPort, TTYPort};
use std::convert::Infallible;
use std::io::{self, Read, Write};
use std::sync::mpsc::{Receiver, Sender, TryRecvError, channel};
use std::sync::{Arc, Mutex};
use std::thread::JoinHandle;
use std::time::{Duration, Instant};

/// Nothing here takes longer, however busy the machine.
pub const PATIENCE: Duration = Duration::from_secs(60);
/// Bytes that come between two frames: one frame's worth of noise, and a stretch longer than any frame.
const NOISE: &[u8] = &[0x55, 0x13, 0xFF, 0x07, 0x81, 0x02];
const LONG_NOISE_BYTES: usize = 5000;

/// What happens to the bytes on the way.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub enum Damage {
    #[default]
    None,
    /// Noise after the third and the fifth frame.
    Between,
    /// One byte of the first frame that tells of an excursion.
    InAnExcursion,
}

/// What the board plays, in microvolts.
#[derive(Clone, Debug, Default)]
pub struct Script {
    pub rate_hz: u64,
    /// Drawn anew at each start, by a board that is there.
    pub boot_id: u32,
    pub leg_a: Vec<i32>,
    pub leg_b: Vec<i32>,
    pub damage: Damage,
}

/// What has passed over the port.
#[derive(Clone, Copy, Debug, Default)]
pub struct Account {
    pub frames: u64,
    /// Bytes of noise without delimiters, and of the frame that was spoiled.
    pub spoiled_bytes: u64,
    last_kept: u32,
    acknowledged: u32,
    has_limits: bool,
    is_played: bool,
}

/// The thread, seen from the test.
pub struct PlayedBoard {
    pub port: String,
    slave: TTYPort,
    account: Arc<Mutex<Account>>,
    told: Receiver<()>,
    unplug: Sender<()>,
    thread: JoinHandle<()>,
}

impl PlayedBoard {
    pub fn start(script: Script) -> Self {
        let (master, slave, port) = terminal::pair();
        let (tell, told) = channel();
        let (unplug, unplugged) = channel();
        let account = Arc::new(Mutex::new(Account::default()));
        let shared = Arc::clone(&account);
        let play = move || run(master, script, &shared, &tell, &unplugged);
        let thread = std::thread::Builder::new().stack_size(16 << 20).spawn(play).unwrap();
        Self { port, slave, account, told, unplug, thread }
    }

    /// Waits until every sample is played and everything kept is acknowledged.
    pub fn wait(&self) -> Account {
        let told = self.told.recv_timeout(PATIENCE);
        let account = *self.account.lock().unwrap();
        assert_eq!(told, Ok(()), "the board was not heard out: {account:?}");
        account
    }

    /// Pulls the plug once the other end has read everything.
    pub fn unplug(self) {
        let begun = Instant::now();
        while self.slave.bytes_to_read().unwrap() > 0 {
            assert!(begun.elapsed() < PATIENCE, "nobody reads");
            std::thread::sleep(Duration::from_millis(5));
        }
        self.unplug.send(()).unwrap();
        self.thread.join().unwrap();
    }
}

fn run(
    master: TTYPort,
    script: Script,
    account: &Arc<Mutex<Account>>,
    tell: &Sender<()>,
    unplugged: &Receiver<()>,
) {
    let description =
        SourceDescription { sample_rate_mhz: script.rate_hz * 1000, skew_ns: 0, legs: [MICROVOLT_CODES; 2] };
    let link = PortLink {
        port: master,
        account: Arc::clone(account),
        frame: Vec::new(),
        frames: DeviceDecoder::new(),
        requests: RequestDecoder::new(),
        damage: script.damage,
    };
    let boot_id = script.boot_id;
    let source = HeldSource { description, script, next: 0, account: Arc::clone(account) };
    let identity = Identity { boot_id, board: "played", serial: 9, reset_cause: ResetCause::PowerOn };
    let settings = settings::for_receiver(&receivers::TABLE[0], description.sample_rate_mhz);
    let Ok(alarm) = AlarmPin::new(NoPin, 0);
    let memory = (Box::<Buffers>::default(), Box::<Memory<65_536, 16_384>>::default());
    let mut monitor = Monitor::new(identity, settings, (source, link, alarm), memory);
    let mut has_told = false;
    while unplugged.try_recv() == Err(TryRecvError::Empty) {
        match monitor.step() {
            Ok(Step::Worked) => {}
            Ok(Step::Waiting | Step::Finished) => std::thread::sleep(Duration::from_millis(1)),
            Err(error) => panic!("{error}"),
        }
        let now = *account.lock().unwrap();
        if !has_told && now.is_played && now.acknowledged == now.last_kept {
            has_told = true;
            // A test that has failed no longer listens.
            let _ = tell.send(());
        }
    }
}

/// Plays the script once it is wanted, then waits for more that never comes.
struct HeldSource {
    description: SourceDescription,
    script: Script,
    next: usize,
    account: Arc<Mutex<Account>>,
}

impl PairSource for HeldSource {
    type Error = Infallible;

    fn describe(&self) -> SourceDescription {
        self.description
    }

    fn take(&mut self, leg_a: &mut [i32], leg_b: &mut [i32]) -> Result<Taken, Infallible> {
        let mut account = self.account.lock().unwrap();
        let pairs = leg_a.len().min(self.script.leg_a.len() - self.next);
        account.is_played = pairs == 0;
        if !account.has_limits || account.is_played {
            return Ok(Taken::Nothing);
        }
        let range = self.next..self.next + pairs;
        leg_a[..pairs].copy_from_slice(&self.script.leg_a[range.clone()]);
        leg_b[..pairs].copy_from_slice(&self.script.leg_b[range.clone()]);
        self.next = range.end;
        Ok(Taken::Pairs { first_sample: range.start as u64, pairs, gap: None })
    }
}

/// The board's end of the terminal. Frames are written whole.
struct PortLink {
    port: TTYPort,
    account: Arc<Mutex<Account>>,
    frame: Vec<u8>,
    frames: DeviceDecoder,
    requests: RequestDecoder,
    damage: Damage,
}

impl PortLink {
    fn put(&mut self, bytes: &[u8]) -> io::Result<()> {
        self.port.set_timeout(PATIENCE)?;
        self.port.write_all(bytes)
    }

    fn put_frame(&mut self) -> io::Result<()> {
        let mut frame = std::mem::take(&mut self.frame);
        let mut heard = None;
        self.frames.feed_frames(&frame, |frame| heard = Some(frame));
        let Some(heard) = heard else { return self.put(&frame) };
        let frames = {
            let mut account = self.account.lock().unwrap();
            account.frames += 1;
            if let Delivery::Kept { number } = heard.envelope.delivery {
                account.last_kept = account.last_kept.max(number);
            }
            account.frames
        };
        if self.damage == Damage::InAnExcursion && matches!(heard.message, Message::Excursion(_)) {
            self.damage = Damage::None;
            let middle = frame.len() / 2;
            // Never into a delimiter: one frame is spoiled, not two.
            frame[middle] = if frame[middle] == 0x40 { 0x41 } else { frame[middle] ^ 0x40 };
            let mut account = self.account.lock().unwrap();
            account.frames -= 1;
            account.spoiled_bytes += frame.len() as u64 - 1;
        }
        self.put(&frame)?;
        if self.damage == Damage::Between {
            match frames {
                3 => self.put_noise(NOISE)?,
                5 => self.put_noise(&[0x55; LONG_NOISE_BYTES])?,
                _ => {}
            }
        }
        Ok(())
    }

    fn put_noise(&mut self, noise: &[u8]) -> io::Result<()> {
        self.account.lock().unwrap().spoiled_bytes += noise.len() as u64;
        self.put(noise)?;
        self.put(&[DELIMITER])
    }
}

impl Link for PortLink {
    type Error = io::Error;

    fn send(&mut self, bytes: &[u8]) -> io::Result<usize> {
        self.frame.extend_from_slice(bytes);
        if self.frame.last() == Some(&DELIMITER) {
            self.put_frame()?;
        }
        Ok(bytes.len())
    }

    fn receive(&mut self, buffer: &mut [u8]) -> io::Result<usize> {
        self.port.set_timeout(Duration::ZERO)?;
        let count = match self.port.read(buffer) {
            Ok(count) => count,
            Err(error) if error.kind() == io::ErrorKind::TimedOut => 0,
            Err(error) => return Err(error),
        };
        let mut account = self.account.lock().unwrap();
        self.requests.feed_requests(&buffer[..count], |request| match request.command {
            Command::WatchLimits { .. } => account.has_limits = true,
            Command::Acknowledge { through } => account.acknowledged = account.acknowledged.max(through),
            _ => {}
        });
        Ok(count)
    }
}
