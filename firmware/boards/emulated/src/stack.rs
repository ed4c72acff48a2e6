//! How deep the stack has been: RAM is painted before `main`, and the paint that is left is counted.

use core::ptr;
use cortex_m_rt::pre_init;

/// What unused RAM is filled with.
const PAINT: u32 = 0x5A5A_A5A5;
/// Bytes below the stack pointer that the painter itself may need.
const OWN_BYTES: usize = 128;

unsafe extern "C" {
    /// End of the statics, where the stack must never reach.
    static mut __ebss: u32;
    /// Where the stack begins.
    static mut _stack_start: u32;
}

// SAFETY: runs once, before any static is set up; touches only RAM between the statics' end and its own
// stack frame, which nothing owns yet.
#[pre_init]
unsafe fn paint() {
    let mut word = &raw mut __ebss;
    let end = cortex_m::register::msp::read() as usize - OWN_BYTES;
    while (word as usize) < end {
        // SAFETY: see above.
        unsafe {
            ptr::write_volatile(word, PAINT);
            word = word.add(1);
        }
    }
}

/// Bytes of stack used at most so far, and the bytes there are.
pub fn high_water() -> (usize, usize) {
    let bottom = &raw const __ebss as usize;
    let top = &raw const _stack_start as usize;
    let mut word = bottom as *const u32;
    // SAFETY: reads RAM between the statics' end and the stack's start, all of it mapped.
    while (word as usize) < top && unsafe { ptr::read_volatile(word) } == PAINT {
        // SAFETY: stays below `top`.
        word = unsafe { word.add(1) };
    }
    (top - word as usize, top - bottom)
}
