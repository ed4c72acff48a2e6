//! UART 0 as the link: CMSDK APB UART (Arm, *Cortex-M System Design Kit Technical Reference Manual*,
//! section 4.3).
//!
//! ```text
//!  0x4000_4000  DATA      write: send, read: received
//!        +0x04  STATE     bit 0: transmit buffer full, bit 1: receive buffer full
//!        +0x08  CTRL      bit 0: transmitter on, bit 1: receiver on
//!        +0x10  BAUDDIV   at least 16; the emulator does not pace by it
//! ```

use core::convert::Infallible;
use core::ptr;
use legwise_firmware::link::Link;

const BASE: usize = 0x4000_4000;
const DATA: *mut u32 = BASE as *mut u32;
const STATE: *mut u32 = (BASE + 0x04) as *mut u32;
const CONTROL: *mut u32 = (BASE + 0x08) as *mut u32;
const DIVIDER: *mut u32 = (BASE + 0x10) as *mut u32;
const TRANSMIT_FULL: u32 = 1;
const RECEIVE_FULL: u32 = 2;

/// The UART. There is one, and [`Uart::new`] must be called once.
#[derive(Debug)]
pub struct Uart(());

impl Uart {
    /// Switches transmitter and receiver on.
    pub fn new() -> Self {
        // SAFETY: the addresses are UART 0's registers, which only this value touches.
        unsafe {
            ptr::write_volatile(DIVIDER, 217); // 25 MHz / 115 200
            ptr::write_volatile(CONTROL, 0b11);
            // What may have been left from before a reset. It also makes the emulator look for input at
            // once: that the receiver is on it notices only when something else happens, within 1 s.
            ptr::read_volatile(DATA);
        }
        Self(())
    }
}

impl Default for Uart {
    fn default() -> Self {
        Self::new()
    }
}

impl Link for Uart {
    type Error = Infallible;

    fn send(&mut self, bytes: &[u8]) -> Result<usize, Infallible> {
        let mut sent = 0;
        for &byte in bytes {
            // SAFETY: as in `new`; this value owns the peripheral.
            unsafe {
                if ptr::read_volatile(STATE) & TRANSMIT_FULL != 0 {
                    break;
                }
                ptr::write_volatile(DATA, u32::from(byte));
            }
            sent += 1;
        }
        Ok(sent)
    }

    fn receive(&mut self, buffer: &mut [u8]) -> Result<usize, Infallible> {
        let mut received = 0;
        for slot in buffer {
            // SAFETY: as in `new`; this value owns the peripheral.
            unsafe {
                if ptr::read_volatile(STATE) & RECEIVE_FULL == 0 {
                    break;
                }
                *slot = ptr::read_volatile(DATA) as u8;
            }
            received += 1;
        }
        Ok(received)
    }
}
