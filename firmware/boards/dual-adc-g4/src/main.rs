//! The monitor on an STM32G474: both legs sampled at the same instant, 250 000 pairs per second.
//!
//! One loop, no interrupts: the DMA fills its ring by itself, USB is polled, and the watchdog is fed only
//! while scans come out of the ring. Not run on hardware; see README.md.
#![no_std]
#![no_main]

mod converter;
mod front_end;
mod identity;

use converter::DualConverter;
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
use static_cell::ConstStaticCell;
use stm32g4xx_hal::gpio::GpioExt;
use stm32g4xx_hal::independent_watchdog::IndependentWatchdog;
use stm32g4xx_hal::pac;
use stm32g4xx_hal::pwr::{PwrExt, VoltageScale};
use stm32g4xx_hal::rcc::{Config, PllConfig, PllMDiv, PllNMul, PllRDiv, PllSrc, Rcc, RccExt};
use stm32g4xx_hal::time::{ExtU32, RateExtU32};
use stm32g4xx_hal::usb;

/// Outbox: kept and passing messages, bytes.
const KEPT_BYTES: usize = 8 * 1024;
const PASSING_BYTES: usize = 6 * 1024;
/// One segment in four is transformed: even a storm then leaves time to spare (README.md, "How fast").
const SPECTRUM_SKIP: u16 = 3;
/// Bytes on their way into USB packets.
const LINK_BYTES: usize = 1024;
/// The alarm pin stays high for half a second after the last excursion.
const ALARM_HOLD_PAIRS: u64 = converter::SAMPLE_RATE_MHZ / 2_000;

static BUFFERS: ConstStaticCell<Buffers> = ConstStaticCell::new(Buffers::new());
static MEMORY: ConstStaticCell<Memory<KEPT_BYTES, PASSING_BYTES>> = ConstStaticCell::new(Memory::new());

#[entry]
fn main() -> ! {
    // All of it is taken once, here; a second time cannot happen.
    let Some(device) = pac::Peripherals::take() else { reset() };
    let (Some(buffers), Some(memory)) = (BUFFERS.try_take(), MEMORY.try_take()) else { reset() };
    let mut watchdog = IndependentWatchdog::new(device.IWDG);
    watchdog.start(WATCHDOG_MS.millis());

    let mut rcc = start_clocks(device.RCC, device.PWR, &device.CRS);
    let identity = identity::identify(&device.RNG, &mut rcc);
    let a = device.GPIOA.split(&mut rcc);
    let b = device.GPIOB.split(&mut rcc);
    let c = device.GPIOC.split(&mut rcc);
    let _legs = (a.pa1.into_analog(), b.pb0.into_analog());
    let _markers = (c.pc0.into_analog(), c.pc1.into_analog());
    let Ok(alarm) = AlarmPin::new(a.pa8.into_push_pull_output(), ALARM_HOLD_PAIRS);
    let trouble_lamp = a.pa5.into_push_pull_output();

    let parts = DualConverter {
        adc1: device.ADC1,
        adc2: device.ADC2,
        common: device.ADC12_COMMON,
        dma: device.DMA1,
        multiplexer: device.DMAMUX,
        buffers: device.OPAMP,
        trigger: device.TIM6,
        clock: device.TIM5,
    };
    let description =
        SourceDescription { sample_rate_mhz: converter::SAMPLE_RATE_MHZ, skew_ns: 0, legs: LEGS };
    let source = CircularSource::new(parts.start(&mut rcc), LAYOUT, description);

    let bus = usb::UsbBus::new(usb::Peripheral {
        usb: device.USB,
        pin_dm: a.pa11.into_alternate(),
        pin_dp: a.pa12.into_alternate(),
    });
    let mut digits = [0; 16];
    let serial = hexadecimal(identity.serial, &mut digits);
    let Some(port) = UsbPort::new(&bus, "Legwise pair monitor", serial) else { reset() };
    let link = PacketLink::<_, LINK_BYTES>::new(port);

    let [receiver, ..] = &TABLE;
    let mut settings = settings::for_receiver(receiver, converter::SAMPLE_RATE_MHZ);
    settings.reporting.spectrum_skip = SPECTRUM_SKIP;
    let hardware = (source, link, alarm);
    let monitor = Monitor::new(identity, settings, hardware, (buffers, memory));
    duty::run(monitor, || watchdog.feed(), trouble_lamp)
}

/// 170 MHz from the 24 MHz crystal; 48 MHz for USB and random numbers from the internal oscillator,
/// trimmed by the host's start-of-frame packets.
fn start_clocks(rcc: pac::RCC, pwr: pac::PWR, crs: &pac::CRS) -> Rcc {
    // What cannot be reached ignores writes and reads as 0, for which the hardware crate would panic.
    rcc.apb1enr1().modify(|_, w| w.pwren().set_bit());
    let power = pwr.constrain().vos(VoltageScale::Range1 { enable_boost: true }).freeze();
    let pll = PllConfig {
        mux: PllSrc::HSE(24.MHz()),
        m: PllMDiv::DIV_6,
        n: PllNMul::MUL_85,
        r: Some(PllRDiv::DIV_2),
        ..PllConfig::new()
    };
    let rcc = rcc.freeze(Config::pll().pll_cfg(pll).boost(true), power);
    rcc.enable_hsi48();
    rcc.apb1enr1().modify(|_, w| w.crsen().set_bit());
    crs.cr().modify(|_, w| w.autotrimen().set_bit().cen().set_bit());
    rcc
}

/// Starts over. The host sees a new boot id and the cause.
fn reset() -> ! {
    cortex_m::peripheral::SCB::sys_reset()
}

/// The library does not panic; should a hardware crate, the board starts over.
#[panic_handler]
fn panic(_: &PanicInfo<'_>) -> ! {
    reset()
}
