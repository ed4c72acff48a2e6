//! Instructions, counted exactly: under `-icount shift=10` each takes 1024 ns of the emulated clock.
//!
//! APB timer 0 (Arm, *Cortex-M System Design Kit Technical Reference Manual*, section 4.4) runs at
//! 25 MHz, 40 ns per tick, so an instruction is 25.6 ticks. Instructions are not cycles: a real core
//! needs somewhat more than one cycle for each (not measured here).

use core::ptr;

const CONTROL: *mut u32 = 0x4000_0000 as *mut u32;
const VALUE: *mut u32 = 0x4000_0004 as *mut u32;
const RELOAD: *mut u32 = 0x4000_0008 as *mut u32;

/// A running count.
#[derive(Clone, Copy, Debug)]
pub struct Counter {
    started: u32,
}

impl Counter {
    /// Starts counting.
    #[inline(never)]
    pub fn start() -> Self {
        // SAFETY: timer 0's registers, used by nothing else on this board.
        unsafe {
            ptr::write_volatile(RELOAD, u32::MAX);
            ptr::write_volatile(VALUE, u32::MAX);
            ptr::write_volatile(CONTROL, 1);
            Self { started: ptr::read_volatile(VALUE) }
        }
    }

    /// Instructions since the start, those of this call left out. At most 167 million.
    #[inline(never)]
    pub fn instructions(self) -> u32 {
        // SAFETY: as in `start`.
        let now = unsafe { ptr::read_volatile(VALUE) };
        let ticks = u64::from(self.started.wrapping_sub(now));
        ((ticks * 10 + 128) / 256) as u32
    }
}
