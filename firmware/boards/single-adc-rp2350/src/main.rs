//! The monitor on an RP2350: one converter, leg B read 2 µs after leg A, 166 667 pairs per second.
//!
//! One loop, no interrupts: the DMA fills its ring by itself, USB is polled, and the watchdog is fed only
//! while scans come out of the ring. Not run on hardware; see README.md.
#![no_std]
#![no_main]

mod converter;
mod front_end;
mod identity;

use converter::{AlternatingConverter, CONVERSION_NS, SAMPLE_RATE_MHZ};
use core::panic::PanicInfo;
use cortex_m_rt::entry;
use front_end::{LAYOUT, LEGS};
use legwise_firmware::alarm::AlarmPin;
use legwise_firmware::monitor::{Memory, Monitor};
use legwise_firmware::packets::PacketLink;
use legwise_firmware::pipeline::Buffers;
use legwise_firmware::sampling::circular::CircularSource;
use legwise_firmware::settings;
use legwise_firmware::source::SourceDescription;
use legwise_protocol::receivers::TABLE;
use legwise_usb_port::duty::{self, WATCHDOG_MS};
use legwise_usb_port::port::{UsbPort, hexadecimal};
use rp235x_hal::adc::{Adc, AdcPin};
use rp235x_hal::block::ImageDef;
use rp235x_hal::clocks::init_clocks_and_plls;
use rp235x_hal::fugit::ExtU32;
use rp235x_hal::gpio::{PinState, Pins};
use rp235x_hal::usb::UsbBus;
use rp235x_hal::{Sio, Watchdog, pac};
use static_cell::ConstStaticCell;
use usb_device::bus::UsbBusAllocator;

/// What the boot ROM wants to know: a secure Arm program.
#[unsafe(link_section = ".start_block")]
#[used]
static IMAGE: ImageDef = ImageDef::secure_exe();

/// The crystal of the common boards.
const CRYSTAL_HZ: u32 = 12_000_000;
/// Outbox: kept and passing messages, bytes.
const KEPT_BYTES: usize = 64 * 1024;
const PASSING_BYTES: usize = 16 * 1024;
/// One segment in two is transformed, or in eight at the higher rate: even a storm then leaves time to spare
/// (README.md, "How fast").
const SPECTRUM_SKIP: u16 = if cfg!(feature = "marker") { 1 } else { 7 };
/// Bytes on their way into USB packets.
const LINK_BYTES: usize = 1024;
/// Every stage of the power-on sequence, as the watchdog selects what it resets.
const RESET_ALL: u32 = 0x0001_ffff;
/// The alarm pin stays high for half a second after the last excursion.
const ALARM_HOLD_PAIRS: u64 = SAMPLE_RATE_MHZ / 2_000;

static BUFFERS: ConstStaticCell<Buffers> = ConstStaticCell::new(Buffers::new());
static MEMORY: ConstStaticCell<Memory<KEPT_BYTES, PASSING_BYTES>> = ConstStaticCell::new(Memory::new());

#[entry]
fn main() -> ! {
    // All of it is taken once, here; a second time cannot happen.
    let Some(mut device) = pac::Peripherals::take() else { reset() };
    let (Some(buffers), Some(memory)) = (BUFFERS.try_take(), MEMORY.try_take()) else { reset() };
    let identity = identity::identify(&device.WATCHDOG, &device.POWMAN);
    let mut watchdog = Watchdog::new(device.WATCHDOG);
    let Ok(clocks) = init_clocks_and_plls(
        CRYSTAL_HZ,
        device.XOSC,
        device.CLOCKS,
        device.PLL_SYS,
        device.PLL_USB,
        &mut device.RESETS,
        &mut watchdog,
    ) else {
        reset()
    };
    watchdog.start(WATCHDOG_MS.millis());

    let sio = Sio::new(device.SIO);
    let pins = Pins::new(device.IO_BANK0, device.PADS_BANK0, sio.gpio_bank0, &mut device.RESETS);
    let (Ok(_leg_a), Ok(_leg_b)) =
        (AdcPin::new(pins.gpio26.into_floating_input()), AdcPin::new(pins.gpio27.into_floating_input()))
    else {
        reset()
    };
    let Ok(alarm) = AlarmPin::new(pins.gpio15.into_push_pull_output(), ALARM_HOLD_PAIRS);
    let trouble_lamp = pins.gpio25.into_push_pull_output();
    // The regulator's steady mode: less ripple on the reference of boards that switch it by this pin.
    let _steady = pins.gpio23.into_push_pull_output_in_state(PinState::High);

    let adc = Adc::new(device.ADC, &mut device.RESETS).free();
    let converter = AlternatingConverter::new(adc, device.DMA, device.TIMER0, &mut device.RESETS);
    let description =
        SourceDescription { sample_rate_mhz: SAMPLE_RATE_MHZ, skew_ns: CONVERSION_NS, legs: LEGS };
    let source = CircularSource::new(converter, LAYOUT, description);

    let bus = UsbBusAllocator::new(UsbBus::new(
        device.USB,
        device.USB_DPRAM,
        clocks.usb_clock,
        true,
        &mut device.RESETS,
    ));
    let mut digits = [0; 16];
    let serial = hexadecimal(identity.serial, &mut digits);
    let Some(port) = UsbPort::new(&bus, "Legwise pair monitor", serial) else { reset() };
    let link = PacketLink::<_, LINK_BYTES>::new(port);

    let [receiver, ..] = &TABLE;
    let mut settings = settings::for_receiver(receiver, SAMPLE_RATE_MHZ);
    settings.reporting.spectrum_skip = SPECTRUM_SKIP;
    let hardware = (source, link, alarm);
    let monitor = Monitor::new(identity, settings, hardware, (buffers, memory));
    duty::run(monitor, || watchdog.feed(), trouble_lamp)
}

/// Starts over, all but the oscillators, by the watchdog's own trigger: a reset by the core alone would
/// leave the cause of the one before standing. The host sees a new boot id and the cause.
fn reset() -> ! {
    cortex_m::interrupt::disable();
    // SAFETY: the program ends here, so it does not matter who owns the registers; each is written whole.
    unsafe {
        (*pac::PSM::ptr()).wdsel().write(|w| w.bits(RESET_ALL).rosc().clear_bit().xosc().clear_bit());
        (*pac::WATCHDOG::ptr()).ctrl().write(|w| w.trigger().set_bit());
    }
    loop {
        cortex_m::asm::nop();
    }
}

/// The library does not panic; should a hardware crate, the board starts over.
#[panic_handler]
fn panic(_: &PanicInfo<'_>) -> ! {
    reset()
}
