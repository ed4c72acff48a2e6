//! The whole monitor: replay, pipeline, UART. Sampling starts with the host's first word.
#![no_std]
#![no_main]

use core::cell::Cell;
use cortex_m_rt::entry;
use cortex_m_semihosting::debug;
#[cfg(not(feature = "defmt"))]
use cortex_m_semihosting::{nr, syscall1};
use legwise_board_emulated::replay::{Replay, draw_boot_id};
use legwise_board_emulated::stack::high_water;
use legwise_board_emulated::uart::Uart;
use legwise_firmware::alarm::{AlarmPin, NoPin};
use legwise_firmware::block::BLOCK_PAIRS;
use legwise_firmware::fakes::ThrottledLink;
use legwise_firmware::monitor::{Identity, Memory, Monitor, Step};
use legwise_firmware::pipeline::Buffers;
use legwise_firmware::settings;
use legwise_protocol::message::ResetCause;
use legwise_protocol::receivers::TABLE;
use static_cell::ConstStaticCell;

const KEPT_BYTES: usize = 6 * 1024;
const PASSING_BYTES: usize = 6 * 1024;
/// Kept messages one block can make, at most, with room to spare: below this the replay waits.
const KEPT_ROOM_BYTES: usize = 3 * 1024;

static BUFFERS: ConstStaticCell<Buffers> = ConstStaticCell::new(Buffers::new());
static MEMORY: ConstStaticCell<Memory<KEPT_BYTES, PASSING_BYTES>> = ConstStaticCell::new(Memory::new());

#[entry]
fn main() -> ! {
    let may_take = Cell::new(false);
    let Ok(replay) = Replay::open(&may_take) else { end(debug::EXIT_FAILURE) };
    let header = replay.header();
    let Some(receiver) = TABLE.get(header.receiver as usize) else { end(debug::EXIT_FAILURE) };
    let identity = Identity {
        boot_id: if header.boot_id == 0 { draw_boot_id() } else { header.boot_id },
        board: "emulated M4F",
        serial: 0,
        reset_cause: ResetCause::Software,
    };
    let Ok(alarm) = AlarmPin::new(NoPin, 0);
    let rate = legwise_firmware::source::PairSource::describe(&replay).sample_rate_mhz;
    let settings = settings::for_receiver(receiver, rate);
    let (Some(buffers), Some(memory)) = (BUFFERS.try_take(), MEMORY.try_take()) else {
        end(debug::EXIT_FAILURE)
    };
    let link = ThrottledLink::new(Uart::new(), header.link_bytes_per_s, rate);
    let hardware = (replay, link, alarm);
    let mut monitor = Monitor::new(identity, settings, hardware, (buffers, memory));
    let mut after_end = 0;
    loop {
        let now = monitor.next_sample() + after_end;
        monitor.link_mut().pass_time(now);
        // A recording can wait for the link; a converter could not. A slow link it waits for only as
        // long as the host takes to answer, so that acknowledgements come at once in sample time.
        let is_free = if header.link_bytes_per_s == 0 {
            monitor.outbox().kept_room() >= KEPT_ROOM_BYTES && monitor.outbox().is_sent()
        } else {
            monitor.link_mut().is_answered()
        };
        may_take.set(is_free && monitor.has_obeyed());
        match monitor.step() {
            Ok(Step::Worked) => {}
            // Nothing was taken though it might have been: the recording has ended, time goes on.
            Ok(Step::Waiting) if may_take.get() => after_end += BLOCK_PAIRS as u64,
            Ok(Step::Waiting) => {}
            Ok(Step::Finished) if monitor.outbox().is_empty() => {
                tell_stack();
                end(debug::EXIT_SUCCESS)
            }
            Ok(Step::Finished) => {}
            Err(_) => end(debug::EXIT_FAILURE),
        }
    }
}

/// Writes the stack's high-water mark to the emulator's console, in decimal and without `core::fmt`;
/// where the console carries log frames, as one of them.
fn tell_stack() {
    let (used, available) = high_water();
    #[cfg(feature = "defmt")]
    defmt::info!("stack {} of {} bytes", used, available);
    #[cfg(not(feature = "defmt"))]
    write_stack(used, available);
}

#[cfg(not(feature = "defmt"))]
fn write_stack(used: usize, available: usize) {
    let mut line = *b"stack      0 of      0 bytes\n\0";
    write_number(&mut line, 12, used);
    write_number(&mut line, 22, available);
    // SAFETY: SYS_WRITE0 reads the zero-ended line, which outlives the call.
    unsafe { syscall1(nr::WRITE0, line.as_ptr() as usize) };
}

/// Writes digits so that the last one stands before `end`.
#[cfg(not(feature = "defmt"))]
fn write_number(line: &mut [u8], end: usize, mut number: usize) {
    for slot in line.iter_mut().take(end).rev().take(6) {
        *slot = b'0' + (number % 10) as u8;
        number /= 10;
        if number == 0 {
            return;
        }
    }
}

fn end(code: debug::ExitStatus) -> ! {
    loop {
        debug::exit(code);
    }
}
