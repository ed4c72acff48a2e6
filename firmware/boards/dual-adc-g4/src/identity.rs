//! Who the board is: serial number, boot id, reason of the last reset.

use legwise_firmware::monitor::Identity;
use legwise_protocol::message::ResetCause;
use stm32g4xx_hal::pac;
use stm32g4xx_hal::rcc::Rcc;

/// Three words that no two chips share (address as in the hardware crate).
const UNIQUE_ID: *const [u32; 3] = 0x1FFF_7590 as *const [u32; 3];
/// Looks at the random number generator before it is given up: far longer than it takes.
const PATIENCE: u32 = 100_000;

/// Reads everything and clears the reset flags. Needs the 48 MHz clock.
pub fn identify(rng: &pac::RNG, rcc: &mut Rcc) -> Identity {
    // SAFETY: a read-only area of the chip, aligned, always mapped; nobody writes it.
    let [x, y, z] = unsafe { UNIQUE_ID.read_volatile() };
    let serial = (u64::from(x) << 32 | u64::from(y)) ^ u64::from(z).rotate_left(16);
    rcc.ahb2enr().modify(|_, w| w.rngen().set_bit());
    // Without a random number a restart does not show in the boot id, but in the reset cause it does.
    let boot_id = random(rng).unwrap_or((serial >> 32) as u32 ^ serial as u32);
    Identity { boot_id, board: "dual-ADC G4", serial, reset_cause: reset_cause(rcc) }
}

/// A number from the generator; `None` when it reports a fault or keeps silent.
fn random(rng: &pac::RNG) -> Option<u32> {
    rng.cr().modify(|_, w| w.rngen().set_bit());
    for _ in 0..PATIENCE {
        let state = rng.sr().read();
        if state.seis().bit_is_set() || state.ceis().bit_is_set() {
            return None;
        }
        if state.drdy().bit_is_set() {
            // Zero stands for a seed error at this very moment (RM0440, from memory).
            return Some(rng.dr().read().bits()).filter(|&number| number != 0);
        }
    }
    None
}

/// An internal reset pulls the reset pin as well, so the pin is named last; a brown-out and power-on
/// are the same flag.
fn reset_cause(rcc: &mut Rcc) -> ResetCause {
    let flags = rcc.csr().read();
    let cause = if flags.iwdgrstf().bit() || flags.wwdgrstf().bit() {
        ResetCause::Watchdog
    } else if flags.borrstf().bit() {
        ResetCause::PowerOn
    } else if flags.sftrstf().bit() || flags.oblrstf().bit() || flags.lpwrrstf().bit() {
        ResetCause::Software
    } else if flags.pinrstf().bit() {
        ResetCause::Pin
    } else {
        ResetCause::Unknown
    };
    rcc.csr().modify(|_, w| w.rmvf().set_bit());
    cause
}
