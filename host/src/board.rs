//! The desktop as one more board: the firmware pipeline run here, on a recording or a simulated line.
//!
//! The bytes it says are the bytes a device would say on the same samples with the same settings.

use legwise_firmware::alarm::{AlarmPin, NoPin};
use legwise_firmware::link::Link;
use legwise_firmware::monitor::{Identity, Memory, Monitor, Step, StepError};
use legwise_firmware::pipeline::Buffers;
use legwise_firmware::source::PairSource;
use legwise_protocol::command::{Command, Request};
use legwise_protocol::framing::{self, REQUEST_FRAME_BYTES};
use legwise_protocol::message::{ResetCause, Settings};
use std::collections::VecDeque;
use std::convert::Infallible;

/// Bytes of kept messages the board can hold until they are acknowledged.
const KEPT_BYTES: usize = 256 * 1024;
/// Bytes of passing messages the board can hold until they are taken.
const PASSING_BYTES: usize = 64 * 1024;
/// A batch of bytes is handed out from this size on.
pub const BATCH_BYTES: usize = 64 * 1024;
/// ... or after this many steps, so that progress shows.
const BATCH_STEPS: usize = 8192;

/// Both directions of a link, in memory.
#[derive(Debug, Default)]
struct MemoryPipe {
    sent: Vec<u8>,
    incoming: VecDeque<u8>,
}

impl Link for MemoryPipe {
    type Error = Infallible;

    fn send(&mut self, bytes: &[u8]) -> Result<usize, Infallible> {
        self.sent.extend_from_slice(bytes);
        Ok(bytes.len())
    }

    fn receive(&mut self, buffer: &mut [u8]) -> Result<usize, Infallible> {
        let count = buffer.len().min(self.incoming.len());
        for (slot, byte) in buffer.iter_mut().zip(self.incoming.drain(..count)) {
            *slot = byte;
        }
        Ok(count)
    }
}

/// A board made of a source and the firmware.
#[derive(Debug)]
pub struct VirtualBoard<S> {
    monitor: Monitor<S, MemoryPipe, NoPin, Box<Buffers>, Box<Memory<KEPT_BYTES, PASSING_BYTES>>>,
    commands: u32,
}

impl<S: PairSource> VirtualBoard<S> {
    /// A board that starts at once. `boot_id` tells one run from another.
    pub fn new(source: S, settings: Settings, board: &'static str, boot_id: u32) -> Self {
        let identity = Identity { boot_id, board, serial: 0, reset_cause: ResetCause::Software };
        let Ok(alarm) = AlarmPin::new(NoPin, 0);
        Self {
            monitor: Monitor::new(
                identity,
                settings,
                (source, MemoryPipe::default(), alarm),
                (Box::default(), Box::default()),
            ),
            commands: 0,
        }
    }

    /// Runs until a batch of bytes has been said, or for a while; appends the bytes to `bytes`.
    /// `false` when the source has ended and everything has been said.
    ///
    /// # Errors
    /// When the source fails; what was said before is in `bytes`.
    pub fn run_batch(&mut self, bytes: &mut Vec<u8>) -> Result<bool, S::Error> {
        let mut is_running = true;
        for _ in 0..BATCH_STEPS {
            match self.monitor.step() {
                Ok(Step::Worked) => {}
                Ok(Step::Waiting) => std::thread::yield_now(),
                Ok(Step::Finished) => is_running = false,
                Err(StepError::Source(error)) => {
                    bytes.append(&mut self.monitor.link_mut().sent);
                    return Err(error);
                }
                Err(StepError::Link(never) | StepError::Pin(never)) => match never {},
            }
            if !is_running || self.monitor.link_mut().sent.len() >= BATCH_BYTES {
                break;
            }
        }
        bytes.append(&mut self.monitor.link_mut().sent);
        Ok(is_running)
    }

    /// Sends a command to the board; it is obeyed at the next step.
    pub fn command(&mut self, command: Command) {
        self.commands += 1;
        let mut frame = [0; REQUEST_FRAME_BYTES];
        let request = Request { sequence: self.commands, command };
        if let Ok(length) = framing::encode_request(&request, &mut frame) {
            self.monitor.link_mut().incoming.extend(frame.iter().take(length));
        }
    }

    /// Kept messages are stored up to this number.
    pub fn acknowledge(&mut self, through: u32) {
        self.command(Command::Acknowledge { through });
    }

    /// Pairs the pipeline has come to.
    pub fn next_sample(&self) -> u64 {
        self.monitor.next_sample()
    }

    /// The source.
    pub fn source(&self) -> &S {
        self.monitor.source()
    }
}
