//! What boards with a circular converter and a USB serial link share.
//!
//! * [`port`]: the USB serial port as a packet port;
//! * [`duty`]: the main loop, with watchdog and trouble lamp.
//!
//! Nothing here touches a register: both run on the desktop in tests.
#![no_std]

#[cfg(test)]
extern crate std;

pub mod duty;
pub mod port;
