//! Converters 1 and 2 in regular simultaneous mode, triggered by timer 6, emptied by DMA into a ring.
//!
//! ```text
//!  TIM6 update ─► ADC1: leg A (buffer 1), marker A ─┐ 32-bit word   DMA1 ch 1   ring of 4096 words
//!  250 kHz        ADC2: leg B (buffer 2), marker B ─┴─ CDR ─────────circular──► = 2048 scans, 8.2 ms
//!  TIM5 counts ticks of the same clock: that of the sample index
//! ```
//! Registers: reference manual RM0440, from memory and from the register crate; not verified on a chip.
//! In dual mode the first converter's reading is the low half of the common data word, so one word cannot
//! mix instants; a word too few would mix legs and markers.

use core::sync::atomic::{AtomicU32, Ordering, fence};
use legwise_firmware::sampling::circular::CircularConverter;
use legwise_firmware::sampling::counter::Extension;
use legwise_firmware::sampling::tick_clock::TickClock;
use legwise_firmware::source::Tuning;
use stm32g4xx_hal::pac::{self, adc1};
use stm32g4xx_hal::rcc::Rcc;

/// Core and timer clock.
pub const CORE_HZ: u32 = 170_000_000;
/// Ticks of the timer clock per pair: 250 000 pairs per second. The converters would do twice that, the
/// core would not: README.md, "How fast".
const TICKS_PER_PAIR: u32 = 680;
/// Fewer and more ticks by 2.5 %, for a look at the pair at other rates.
const TICKS_FASTER: u32 = TICKS_PER_PAIR - 17;
const TICKS_SLOWER: u32 = TICKS_PER_PAIR + 17;
/// Ticks before a trigger from which on its period is left alone: time to write it is needed.
const TICKS_TO_WRITE: u32 = 60;
/// Pairs per second, in millihertz.
pub const SAMPLE_RATE_MHZ: u64 = rate_mhz(TICKS_PER_PAIR);

const fn rate_mhz(ticks_per_pair: u32) -> u64 {
    CORE_HZ as u64 * 1_000 / ticks_per_pair as u64
}

/// Words of the ring: eight blocks of 256 pairs.
const RING_WORDS: usize = 4_096;
/// Written by the DMA channel, read by [`DualConverter::word`] only. Atomics, because another master
/// writes them: each read really reads.
static RING: [AtomicU32; RING_WORDS] = [const { AtomicU32::new(0) }; RING_WORDS];

/// Input of the legs behind their buffers, and of the markers.
const LEG_A_CHANNEL: u8 = 13; // operational amplifier 1, inside
const LEG_B_CHANNEL: u8 = 16; // operational amplifier 2, inside
const MARKER_A_CHANNEL: u8 = 6; // PC0
const MARKER_B_CHANNEL: u8 = 7; // PC1

// Converter clock: core / 4 = 42.5 MHz. Leg 47.5 + 12.5, marker 6.5 + 12.5 clocks: 79 of the 170 per pair.
const _: () = assert!(4 * (47 + 12 + 6 + 12 + 2) < TICKS_FASTER);
const _: () = assert!(CORE_HZ % TICKS_PER_PAIR == 0 && RING_WORDS < 65_536);

/// Request line of converter 1 at the DMA multiplexer.
const REQUEST_ADC1: u8 = 5;
/// Bits of the control register that are commands: writing 1 again would give the command again.
const COMMANDS: u32 = 0x8000_003f;
const ENABLE: u32 = 1 << 0;
const START: u32 = 1 << 2;
const STOP: u32 = 1 << 4;
const CALIBRATE: u32 = 1 << 31;
/// Looks at a flag before it is given up: about a millisecond. What stays broken shows as a stall.
const PATIENCE: u32 = 30_000;

/// The peripherals that sampling takes; this value owns them.
pub struct DualConverter {
    /// First converter: leg A, and the master of both.
    pub adc1: pac::ADC1,
    /// Second converter: leg B.
    pub adc2: pac::ADC2,
    /// What both share.
    pub common: pac::ADC12_COMMON,
    /// Empties the common data register.
    pub dma: pac::DMA1,
    /// Routes the request.
    pub multiplexer: pac::DMAMUX,
    /// Buffers between dividers and converters.
    pub buffers: pac::OPAMP,
    /// Triggers.
    pub trigger: pac::TIM6,
    /// Counts the triggers.
    pub clock: pac::TIM5,
}

/// The running converters.
pub struct RunningConverter {
    parts: DualConverter,
    elapsed: Extension<32>,
    instants: TickClock,
}

impl DualConverter {
    /// Sets everything up; sampling begins with the first [`CircularConverter::restart`]. The pins must be
    /// in analogue mode.
    pub fn start(self, rcc: &mut Rcc) -> RunningConverter {
        rcc.ahb1enr().modify(|_, w| w.dma1en().set_bit().dmamux1en().set_bit());
        rcc.ahb2enr().modify(|_, w| w.adc12en().set_bit());
        rcc.apb2enr().modify(|_, w| w.syscfgen().set_bit());
        rcc.apb1enr1().modify(|_, w| w.tim5en().set_bit().tim6en().set_bit());
        self.start_buffers();
        self.start_converters();
        self.start_timers();
        RunningConverter { parts: self, elapsed: Extension::new(), instants: TickClock::new(TICKS_PER_PAIR) }
    }

    /// Followers: PA1 to converter 1, PB0 to converter 2, both inside the chip. The divider's 8.9 kohm
    /// then drives a buffer instead of a sampling capacitor that still holds the marker's voltage.
    fn start_buffers(&self) {
        self.buffers.opamp1_csr().write(|w| {
            w.vp_sel().vinp0().vm_sel().output().opahsm().high_speed();
            w.opaintoen().adcchannel().opaen().enabled()
        });
        self.buffers.opamp2_csr().write(|w| {
            w.vp_sel().vinp2().vm_sel().output().opahsm().high_speed();
            w.opaintoen().adcchannel().opaen().enabled()
        });
    }

    fn start_converters(&self) {
        // Clock and mode first: both can only be written while the converters are off.
        self.common.ccr().modify(|_, w| w.ckmode().sync_div4().dual().dual_r().dmacfg().set_bit());
        power_up(&self.adc1);
        power_up(&self.adc2);
        set_sequence(&self.adc1, LEG_A_CHANNEL, MARKER_A_CHANNEL);
        set_sequence(&self.adc2, LEG_B_CHANNEL, MARKER_B_CHANNEL);
        // An overrun keeps the old reading and stops the requests: lost words cannot pass unseen.
        self.adc1.cfgr().modify(|_, w| w.exten().rising_edge().extsel().tim6_trgo().ovrmod().preserve());
        self.adc2.cfgr().modify(|_, w| w.ovrmod().preserve());
    }

    /// The trigger once per pair, its period taken over at each; and a counter of the same ticks, which wraps
    /// after 25 s and is read far more often.
    fn start_timers(&self) {
        let (trigger, clock) = (&self.trigger, &self.clock);
        // SAFETY: any 16-bit period and prescaler, any 32-bit period is valid; this value owns the timers.
        unsafe {
            trigger.arr().write(|w| w.bits(TICKS_PER_PAIR - 1));
            clock.psc().write(|w| w.bits(0));
            clock.arr().write(|w| w.bits(u32::MAX));
        }
        trigger.cr2().modify(|_, w| w.mms().update());
        trigger.cr1().modify(|_, w| w.arpe().enabled());
        // The prescaler is taken over at an update.
        clock.egr().write(|w| w.ug().set_bit());
        trigger.cr1().modify(|_, w| w.cen().set_bit());
        clock.cr1().modify(|_, w| w.cen().set_bit());
    }
}

/// Regulator, self-calibration, on.
fn power_up(adc: &adc1::RegisterBlock) {
    adc.cr().modify(|_, w| w.deeppwd().clear_bit());
    adc.cr().modify(|_, w| w.advregen().set_bit());
    cortex_m::asm::delay(CORE_HZ / 1_000_000 * 40); // the regulator takes 20 µs
    command(adc, CALIBRATE);
    wait_until(|| adc.cr().read().adcal().bit_is_clear());
    cortex_m::asm::delay(64); // four converter clocks between calibration and switching on
    adc.isr().write(|w| w.adrdy().clear());
    command(adc, ENABLE);
    wait_until(|| adc.isr().read().adrdy().bit_is_set());
}

/// Two conversions per trigger: a leg, then its marker.
fn set_sequence(adc: &adc1::RegisterBlock, leg: u8, marker: u8) {
    // SAFETY: the channel numbers exist (0..=18); the owner of `adc` calls this while it is stopped.
    adc.sqr1().write(|w| unsafe { w.l().set(1).sq1().bits(leg).sq2().bits(marker) });
    adc.smpr1().write(|w| w.smp(marker).cycles6_5());
    adc.smpr2().write(|w| w.smp(leg - 10).cycles47_5());
}

/// Gives one command, and none of those that still read as 1.
fn command(adc: &adc1::RegisterBlock, bit: u32) {
    adc.cr().modify(|r, w| {
        // SAFETY: all other bits stay as they are; the caller owns the converter.
        unsafe { w.bits(r.bits() & !COMMANDS | bit) }
    });
}

/// Waits for a condition, but not for ever.
fn wait_until(mut condition: impl FnMut() -> bool) {
    for _ in 0..PATIENCE {
        if condition() {
            return;
        }
    }
}

impl RunningConverter {
    fn stop(&self) {
        let parts = &self.parts;
        if parts.adc1.cr().read().adstart().bit_is_set() {
            command(&parts.adc1, STOP); // stops the second one too
            wait_until(|| parts.adc1.cr().read().adstart().bit_is_clear());
        }
        parts.dma.ch1().cr().modify(|_, w| w.en().disabled());
        // Withdraws a request that still hangs; allowed while both converters are stopped.
        // SAFETY: documented values; this value owns the converters.
        parts.common.ccr().modify(|_, w| unsafe { w.mdma().bits(0) });
        for adc in [&*parts.adc1, &*parts.adc2] {
            adc.isr().write(|w| w.ovr().clear().eoc().clear().eos().clear().eosmp().clear());
        }
    }

    fn start(&self) {
        let parts = &self.parts;
        let channel = parts.dma.ch1();
        // SAFETY: this value owns DMA1 and its multiplexer. The channel reads the common data register and
        // writes RING_WORDS words from the start of RING, a static of that length that nothing else writes.
        unsafe {
            parts.multiplexer.ccr(0).write(|w| w.dmareq_id().bits(REQUEST_ADC1));
            parts.dma.ifcr().write(|w| w.bits(0xf));
            channel.par().write(|w| w.bits(parts.common.cdr().as_ptr() as u32));
            channel.mar().write(|w| w.bits(RING.as_ptr() as u32));
            channel.ndtr().write(|w| w.bits(RING_WORDS as u32));
            parts.common.ccr().modify(|_, w| w.mdma().bits(0b10));
        }
        channel.cr().write(|w| {
            w.dir().from_peripheral().circ().enabled().minc().enabled().pl().very_high();
            w.msize().bits32().psize().bits32()
        });
        channel.cr().modify(|_, w| w.en().enabled());
        command(&parts.adc1, START);
    }
}

impl RunningConverter {
    /// Ticks since power-on.
    fn ticks(&mut self) -> u64 {
        self.elapsed.extend(u64::from(self.parts.clock.cnt().read().bits()))
    }
}

impl CircularConverter for RunningConverter {
    type Word = u32;

    fn ring_words(&self) -> usize {
        RING_WORDS
    }

    fn position(&mut self) -> usize {
        let left = self.parts.dma.ch1().ndtr().read().bits() as usize & 0xffff;
        fence(Ordering::Acquire); // words up to here are read after this, not before
        (RING_WORDS - left.min(RING_WORDS)) % RING_WORDS
    }

    fn word(&self, place: usize) -> u32 {
        RING.get(place).map_or(0, |word| word.load(Ordering::Relaxed))
    }

    fn elapsed_scans(&mut self) -> u64 {
        let ticks = self.ticks();
        self.instants.scans(ticks)
    }

    fn has_failed(&mut self) -> bool {
        fence(Ordering::Acquire);
        let state = self.parts.common.csr().read();
        state.ovr_mst().bit_is_set()
            || state.ovr_slv().bit_is_set()
            || self.parts.dma.isr().read().teif1().bit_is_set()
    }

    fn restart(&mut self) -> u64 {
        self.stop();
        // Right after a tick there are almost 4 µs until the next trigger: it is the first for certain.
        let before = self.elapsed_scans();
        let mut now = before;
        wait_until(|| {
            now = self.elapsed_scans();
            now != before
        });
        self.start();
        now + 1
    }

    fn tune(&mut self, tuning: Tuning) -> Option<(u64, u64)> {
        let ticks_per_pair = match tuning {
            Tuning::Nominal => TICKS_PER_PAIR,
            Tuning::Faster => TICKS_FASTER,
            Tuning::Slower => TICKS_SLOWER,
        };
        let first = cortex_m::interrupt::free(|_| {
            // Not while a trigger is about to come: it would be unclear which period follows it.
            let mut ticks = self.ticks();
            wait_until(|| {
                ticks = self.ticks();
                self.instants.ticks_left(ticks) > TICKS_TO_WRITE
            });
            // SAFETY: any 16-bit period is valid; this value owns the timer, which takes it at its next update.
            unsafe { self.parts.trigger.arr().write(|w| w.bits(ticks_per_pair - 1)) };
            self.instants.change(ticks, ticks_per_pair)
        });
        Some((first, rate_mhz(ticks_per_pair)))
    }
}
