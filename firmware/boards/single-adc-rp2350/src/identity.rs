//! Who the board is: serial number, boot id, reason of the last reset.

use legwise_firmware::monitor::Identity;
use legwise_protocol::message::ResetCause;
use rp235x_hal::pac;
use rp235x_hal::rom_data::sys_info_api;

/// Asks the boot ROM and reads the reset flags.
pub fn identify(watchdog: &pac::WATCHDOG, power: &pac::POWMAN) -> Identity {
    let serial = match sys_info_api::chip_info() {
        Ok(Some(chip)) => u64::from(chip.wafer_id) << 32 | u64::from(chip.device_id),
        _ => 0,
    };
    // 128 random bits that the boot ROM draws at every start.
    let boot_id = match sys_info_api::boot_random() {
        Ok(Some(random)) => fold(random.0),
        _ => serial as u32,
    };
    Identity { boot_id, board: "single-ADC RP2350", serial, reset_cause: reset_cause(watchdog, power) }
}

fn fold(random: u128) -> u32 {
    (random ^ random >> 32 ^ random >> 64 ^ random >> 96) as u32
}

/// The watchdog register is cleared by any other reset; the power manager keeps the cause of the last one.
fn reset_cause(watchdog: &pac::WATCHDOG, power: &pac::POWMAN) -> ResetCause {
    let reason = watchdog.reason().read();
    let cause = power.chip_reset().read();
    if reason.timer().bit_is_set() {
        ResetCause::Watchdog
    } else if reason.force().bit_is_set() {
        ResetCause::Software
    } else if cause.had_bor().bit_is_set() {
        ResetCause::BrownOut
    } else if cause.had_por().bit_is_set() {
        ResetCause::PowerOn
    } else if cause.had_run_low().bit_is_set() {
        ResetCause::Pin
    } else if cause.had_dp_reset_req().bit_is_set() || cause.had_rescue().bit_is_set() {
        ResetCause::Software
    } else {
        ResetCause::Unknown
    }
}
