//! The emulated board: QEMU's `mps2-an386`, a Cortex-M4F with CMSDK peripherals.
//!
//! * [`uart`]: the link to the host, UART 0;
//! * [`replay`]: the sampler, which plays a recording through semihosting;
//! * [`counter`]: instructions, counted exactly by the emulator's clock.
//!
//! With the feature `defmt` the console carries log frames.
#![no_std]

pub mod counter;
pub mod replay;
pub mod stack;
pub mod uart;

use core::panic::PanicInfo;
use cortex_m_semihosting::debug;
#[cfg(feature = "defmt")]
use defmt_semihosting as _; // the logger

/// Nothing in the library panics; should anything do, the emulator ends with a failure.
#[panic_handler]
fn panic(_: &PanicInfo<'_>) -> ! {
    loop {
        debug::exit(debug::EXIT_FAILURE);
    }
}
