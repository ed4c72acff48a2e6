//! The converter reads its inputs in turn without a pause; DMA empties its queue into a ring for ever.
//!
//! ```text
//!  48 MHz / 96 = 500 000 conversions per second
//!  GPIO26 leg A ─► GPIO27 leg B ─► temperature (marker) ─► leg A ...      one scan every 6 µs
//!        └── 2 µs ──┘ skew                │
//!                                 queue of 8 ──DREQ──► DMA channel 0, endless ──► ring of 16 KiB
//!  TIMER0 counts microseconds of the same crystal: the clock of the sample index
//! ```
//! Registers: data sheet of the RP2350, chapters "ADC and temperature sensor", "DMA" (endless transfer
//! count, ring buffers) and "System timers"; from memory and the register crate, not verified on a chip.

use core::sync::atomic::{AtomicU16, Ordering, fence};
use legwise_firmware::sampling::circular::CircularConverter;
use rp235x_hal::pac;

/// One conversion: 96 clocks of 48 MHz.
pub const CONVERSION_NS: i32 = 2_000;
/// Conversions per pair.
const CONVERSIONS: u64 = if cfg!(feature = "marker") { 3 } else { 2 };
/// Microseconds per pair.
const SCAN_US: u64 = 2 * CONVERSIONS;
/// Pairs per second, in millihertz, rounded.
pub const SAMPLE_RATE_MHZ: u64 = (1_000_000_000 + SCAN_US / 2) / SCAN_US;

/// Inputs that take part: GPIO26, GPIO27, and the temperature sensor of the 60-pin package.
const ROUND: u16 = if cfg!(feature = "marker") { 0b1_0011 } else { 0b0_0011 };
/// The ring's length as the power of two that the DMA wraps at, bytes.
const RING_BITS: u8 = 14;
/// Words of the ring: more than 16 ms. Not a multiple of three: a scan may lie across the seam.
const RING_WORDS: usize = (1 << RING_BITS) / 2;

/// The DMA wraps addresses, so the ring must lie on a multiple of its own length.
#[repr(C, align(16384))]
struct Ring([AtomicU16; RING_WORDS]);

/// Written by DMA channel 0, read by [`AlternatingConverter::word`] only. Atomics, because another master
/// writes them: each read really reads.
static RING: Ring = Ring([const { AtomicU16::new(0) }; RING_WORDS]);
const _: () = assert!(align_of::<Ring>() == 1 << RING_BITS && size_of::<Ring>() == 1 << RING_BITS);

/// Looks at a flag before it is given up; what stays broken shows as a stall.
const PATIENCE: u32 = 30_000;

/// The converter and all that belongs to it; this value owns them.
pub struct AlternatingConverter {
    adc: pac::ADC,
    dma: pac::DMA,
    clock: pac::TIMER0,
}

impl AlternatingConverter {
    /// Takes a converter that is switched on, while the pins of both legs are analogue inputs and timers
    /// tick in microseconds. Sampling begins with the first [`CircularConverter::restart`].
    pub fn new(adc: pac::ADC, dma: pac::DMA, clock: pac::TIMER0, resets: &mut pac::RESETS) -> Self {
        resets.reset().modify(|_, w| w.dma().clear_bit().timer0().clear_bit());
        wait_until(|| {
            let done = resets.reset_done().read();
            done.dma().bit_is_set() && done.timer0().bit_is_set()
        });
        // The converter does not stop at a breakpoint; nor may the clock that numbers what it reads.
        clock.dbgpause().write(|w| w.dbg0().clear_bit().dbg1().clear_bit());
        adc.cs().modify(|_, w| w.ts_en().bit(cfg!(feature = "marker")));
        // Zero: the next conversion begins when the last one ends.
        // SAFETY: any divider is valid; this value owns the converter.
        adc.div().write(|w| unsafe { w.int().bits(0).frac().bits(0) });
        Self { adc, dma, clock }
    }

    /// Sampling instants since power-on.
    fn instant(&self) -> u64 {
        let mut high = self.clock.timerawh().read().bits();
        loop {
            let low = self.clock.timerawl().read().bits();
            // The upper half moves once in 71 minutes; if it did just now, `low` may belong to either.
            let high_after = self.clock.timerawh().read().bits();
            if high == high_after {
                return (u64::from(high) << 32 | u64::from(low)) / SCAN_US;
            }
            high = high_after;
        }
    }

    fn stop(&self) {
        self.adc.cs().modify(|_, w| w.start_many().clear_bit());
        wait_until(|| self.adc.cs().read().ready().bit_is_set());
        // First disabled, then aborted: an abort may otherwise start the channel again.
        self.dma.ch(0).ch_al1_ctrl().modify(|_, w| w.en().clear_bit());
        // SAFETY: this value owns the DMA; bit 0 is channel 0.
        self.dma.chan_abort().write(|w| unsafe { w.chan_abort().bits(1) });
        wait_until(|| self.dma.chan_abort().read().bits() == 0);
        self.adc.fcs().modify(|_, w| w.en().clear_bit().dreq_en().clear_bit());
        wait_until(|| {
            let is_empty = self.adc.fcs().read().empty().bit_is_set();
            if !is_empty {
                self.adc.fifo().read();
            }
            is_empty
        });
        // The failure flags go when a one is written to them.
        self.adc.fcs().modify(|_, w| w.over().clear_bit_by_one().under().clear_bit_by_one());
        self.adc.cs().modify(|_, w| w.err_sticky().clear_bit_by_one());
    }

    /// The DMA is ready before the converter runs: no word can be lost in between.
    fn start_dma(&self) {
        // SAFETY: this value owns converter and DMA. Channel 0 reads the queue's register and writes half-words
        // into RING, wrapping at its length, which is also its alignment; nothing else writes RING.
        unsafe {
            self.adc.fcs().modify(|_, w| {
                w.en().set_bit().err().set_bit().shift().clear_bit().dreq_en().set_bit().thresh().bits(1)
            });
            let channel = self.dma.ch(0);
            channel.ch_read_addr().write(|w| w.bits(self.adc.fifo().as_ptr() as u32));
            channel.ch_write_addr().write(|w| w.bits(RING.0.as_ptr() as u32));
            channel.ch_trans_count().write(|w| w.mode().endless().count().bits(1));
            channel.ch_ctrl_trig().write(|w| {
                w.data_size().size_halfword().incr_read().clear_bit().incr_write().set_bit();
                // Chained to itself: to nothing.
                w.ring_sel().set_bit().ring_size().bits(RING_BITS).chain_to().bits(0);
                w.treq_sel().adc().high_priority().set_bit().irq_quiet().set_bit().en().set_bit()
            });
        }
    }

    /// Leg A first; the round goes upwards from there.
    fn start_conversions(&self) {
        // SAFETY: input 0 and the inputs of ROUND exist; this value owns the converter.
        self.adc.cs().modify(|_, w| unsafe { w.ainsel().bits(0).rrobin().bits(ROUND) });
        self.adc.cs().modify(|_, w| w.start_many().set_bit());
    }
}

/// Waits for a condition, but not for ever.
fn wait_until(mut condition: impl FnMut() -> bool) {
    for _ in 0..PATIENCE {
        if condition() {
            return;
        }
    }
}

impl CircularConverter for AlternatingConverter {
    type Word = u16;

    fn ring_words(&self) -> usize {
        RING_WORDS
    }

    fn position(&mut self) -> usize {
        let next = self.dma.ch(0).ch_write_addr().read().bits() as usize;
        fence(Ordering::Acquire); // words up to here are read after this, not before
        next.wrapping_sub(RING.0.as_ptr() as usize) / 2 % RING_WORDS
    }

    fn word(&self, place: usize) -> u16 {
        RING.0.get(place).map_or(0, |word| word.load(Ordering::Relaxed))
    }

    fn elapsed_scans(&mut self) -> u64 {
        self.instant()
    }

    fn has_failed(&mut self) -> bool {
        fence(Ordering::Acquire);
        let queue = self.adc.fcs().read();
        let channel = self.dma.ch(0).ch_ctrl_trig().read();
        queue.over().bit_is_set() || queue.under().bit_is_set() || channel.ahb_error().bit_is_set()
    }

    fn restart(&mut self) -> u64 {
        self.stop();
        self.start_dma();
        // Scans begin on the clock's own grid, so that restarts do not wander.
        let before = self.instant();
        let mut now = before;
        wait_until(|| {
            now = self.instant();
            now != before
        });
        self.start_conversions();
        now
    }
}
