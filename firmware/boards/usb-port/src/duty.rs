//! The main loop of a board whose converter fills a ring: step, feed the watchdog, show trouble.
//!
//! ```text
//!   ┌─► monitor.step() ─► scans came out of the ring? ── yes ─► feed the watchdog
//!   └──── lamp: lit by a failure of the source, dark again after a block's worth of scans without one
//! ```
//! A converter that cannot keep its order fails once per restart, and most steps between two restarts
//! just wait for scans: the lamp must not follow the latest step, or it would seem dark.

use core::ops::DerefMut;
use embedded_hal::digital::OutputPin;
use legwise_firmware::block::BLOCK_PAIRS;
use legwise_firmware::link::Link;
use legwise_firmware::monitor::{Memory, Monitor, StepError};
use legwise_firmware::pipeline::Buffers;
use legwise_firmware::sampling::circular::{CircularConverter, CircularSource};
use legwise_firmware::sampling::scan::ScanLayout;

/// Without a scan for that long the watchdog should bite, milliseconds.
///
/// The source restarts its converter by itself within microseconds; this is for what that does not
/// cure. Long enough that a board which keeps failing is on the bus long enough in between to tell the
/// host why it started, and that a breakpoint of a second is survived where the watchdog runs on.
pub const WATCHDOG_MS: u32 = 4_000;

/// Scans without a failure after which trouble is over.
const WELL_SCANS: u64 = BLOCK_PAIRS as u64;

/// Decides when to feed and when to light the lamp.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub struct Duty {
    progress: u64,
    /// Progress at the latest failure, while that is not yet overcome.
    failed_at: Option<u64>,
}

impl Duty {
    /// Nothing has come yet, nothing has failed.
    pub const fn new() -> Self {
        Self { progress: 0, failed_at: None }
    }

    /// Takes note of a step: whether the source failed in it, and the scans that have come out of the
    /// ring so far. Returns whether to feed the watchdog.
    pub fn follow(&mut self, has_failed: bool, progress: u64) -> bool {
        if has_failed {
            self.failed_at = Some(progress);
        } else if self.failed_at.is_some_and(|at| progress.saturating_sub(at) >= WELL_SCANS) {
            self.failed_at = None;
        }
        core::mem::replace(&mut self.progress, progress) != progress
    }

    /// Whether the lamp should be lit.
    pub const fn is_in_trouble(&self) -> bool {
        self.failed_at.is_some()
    }
}

/// Runs the monitor for ever. `feed` feeds the watchdog; `lamp` is high while no samples come.
pub fn run<C, L, K, P, B, M, const KEPT: usize, const PASSING: usize>(
    mut monitor: Monitor<CircularSource<C, L>, K, P, B, M>,
    mut feed: impl FnMut(),
    mut lamp: impl OutputPin,
) -> !
where
    C: CircularConverter,
    L: ScanLayout<Word = C::Word>,
    K: Link,
    P: OutputPin,
    B: DerefMut<Target = Buffers>,
    M: DerefMut<Target = Memory<KEPT, PASSING>>,
{
    let mut duty = Duty::new();
    loop {
        let has_failed = matches!(monitor.step(), Err(StepError::Source(_)));
        if duty.follow(has_failed, monitor.source().progress()) {
            feed();
        }
        // A lamp that cannot be driven is no reason to stop.
        let _ = lamp.set_state(duty.is_in_trouble().into());
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_watchdog_is_fed_only_when_scans_have_come() {
        let mut duty = Duty::new();
        assert!(!duty.follow(false, 0));
        assert!(duty.follow(false, 256));
        assert!(!duty.follow(false, 256));
        assert!(!duty.follow(true, 256));
        // A scan with a wrong marker is a scan: the board lives, and says so by its lamp.
        assert!(duty.follow(true, 257));
    }

    #[test]
    fn the_lamp_stays_lit_while_a_converter_fails_at_every_restart() {
        let mut duty = Duty::new();
        assert!(!duty.is_in_trouble());
        for restart in 0..100 {
            duty.follow(true, restart);
            for _ in 0..1000 {
                duty.follow(false, restart);
                assert!(duty.is_in_trouble());
            }
        }
    }

    #[test]
    fn a_block_without_a_failure_darkens_the_lamp() {
        let mut duty = Duty::new();
        duty.follow(true, 1_000);
        duty.follow(false, 1_000 + WELL_SCANS - 1);
        assert!(duty.is_in_trouble());
        duty.follow(false, 1_000 + WELL_SCANS);
        assert!(!duty.is_in_trouble());
    }
}
