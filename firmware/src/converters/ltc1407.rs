//! LTC1407 family: two channels sampled at one edge, 12 or 14 bits, both results on one data line.
//!
//! A `CONV` edge samples both channels; the 32 clocks after it convert them and, meanwhile, shift out
//! the results of the conversion *before*. So the pair read at tick n belongs to tick n - 1.
//!
//! ```text
//!  CONV   _|‾|____________________________________________________________|‾|___
//!  SCK    ____1_2_3_ ... _16_17_18_19_ ... _32______________________________________  idle low, read at
//!  SDO        z z [ 14 bits channel 0 ] z z [ 14 bits channel 1 ]                     the falling edge
//!
//!  byte        0                 1                 2                 3
//!         z z d13 ... d8    d7 ... d0         z z d13 ... d8    d7 ... d0       z: undefined, masked
//! ```
//! A 12-bit part sends d11 ... d0 and two undefined bits in the place of d13 ... d0.
//!
//! Source: data sheets LTC1407/LTC1407A (1407f) and LTC1407-1/LTC1407A-1 (14071f), Linear Technology,
//! now Analog Devices. **Every statement and number about the part in this file is from memory: the
//! data sheets could not be opened when it was written, and it has not run on the part.** Check
//! against the data sheet before trusting it:
//!
//! | what | here | look in |
//! |---|---|---|
//! | one frame late ("output data words represent the inputs at the start of the previous conversion") | yes | Pin Functions, SDO |
//! | order in a frame | channel 0, then channel 1 | Timing Diagrams |
//! | undefined clocks before each word | 2 | Timing Diagrams |
//! | when data is valid | bit d13 from the 3rd rising clock edge on: SPI mode 1 (clock idles low, read at the falling edge) | Timing Characteristics |
//! | coding | straight binary (LTC1407, LTC1407A), two's complement (-1 parts) | Converter Characteristics |
//! | input range | 0..2.5 V, or -1.25..+1.25 V (-1 parts), between the + and - input | Analog Input |
//! | fastest clock | 51 MHz | Timing Characteristics |
//! | clocks from one `CONV` edge to the next | 34: 32 to convert, 2 to acquire | Timing Characteristics |
//! | `CONV` high | 4 ns or more, any length | Timing Characteristics |
//! | two `CONV` edges without a clock: nap; four: sleep; a clock edge wakes | yes | Sleep and Nap modes |
//! | reference settled after waking | 2 ms | Internal Reference |
//!
//! # For board authors
//! * The part has no chip select: give the bus to it alone, with a chip-select pin that leads nowhere
//!   ([`crate::alarm::NoPin`] will do).
//! * The `CONV` edge is the sampling instant. Toggled by software it jitters with the interrupt; where
//!   a timer output can make the edge, let it, pass [`crate::alarm::NoPin`] here, and call
//!   [`Ltc1407::tick`] from the interrupt of the same timer.
//! * `tick` waits for 32 clocks (1.6 µs at 20 MHz): call it from the timer interrupt, once per period.

use super::hand_over::{ConverterError, PairSender};
use crate::calibration;
use crate::front_end::FrontEnd;
use crate::source::SourceDescription;
use core::fmt;
use embedded_hal::digital::{Error as _, ErrorKind, OutputPin};
use embedded_hal::spi::{Error as _, MODE_1, Mode, SpiDevice};
use legwise_protocol::message::LegScale;

/// How the bus must be set up.
pub const SPI_MODE: Mode = MODE_1;
/// Bytes of a frame.
pub const FRAME_BYTES: usize = 4;
/// Nominal reference, which is also the width of the input range, volts.
pub const REFERENCE_V: f64 = 2.5;
/// Fastest clock.
pub const FASTEST_CLOCK_HZ: u32 = 51_000_000;
/// Clocks from one conversion to the next.
pub const CLOCKS_PER_PAIR: u32 = 34;
/// Pairs are not trusted for so long after the start and after the part may have slept.
const SETTLE_MS: u64 = 2;
/// Failed frames in a row after which the part may have napped or slept.
const NAP_AFTER: u32 = 2;

/// Which member of the family.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum Part {
    /// LTC1407: 12 bits, 0..2.5 V, straight binary.
    Unipolar12,
    /// LTC1407A: 14 bits, 0..2.5 V, straight binary.
    Unipolar14,
    /// LTC1407-1: 12 bits, -1.25..+1.25 V, two's complement.
    Bipolar12,
    /// LTC1407A-1: 14 bits, -1.25..+1.25 V, two's complement.
    Bipolar14,
}

impl Part {
    /// Bits of a code.
    pub const fn bits(self) -> u32 {
        match self {
            Self::Unipolar12 | Self::Bipolar12 => 12,
            Self::Unipolar14 | Self::Bipolar14 => 14,
        }
    }

    /// Whether codes are two's complement.
    pub const fn is_signed(self) -> bool {
        matches!(self, Self::Bipolar12 | Self::Bipolar14)
    }

    /// Lowest and highest code.
    pub const fn rails(self) -> [i32; 2] {
        let codes = 1 << self.bits();
        if self.is_signed() { [-codes / 2, codes / 2 - 1] } else { [0, codes - 1] }
    }

    /// The scale of a leg behind `front_end`, before any calibration; `front_end.bits` does not matter.
    ///
    /// A two's complement part measures against its - input, taken to lie at half the reference (a
    /// resistor pair, buffered): then both codings cover 0 V to the reference at the + input.
    pub const fn leg_scale(self, front_end: &FrontEnd) -> LegScale {
        let scale = FrontEnd { bits: self.bits(), ..*front_end }.leg_scale();
        if !self.is_signed() {
            return scale;
        }
        let half = 1 << (self.bits() - 1);
        LegScale {
            offset_uv: scale.microvolts(half),
            rail_low_code: scale.rail_low_code - half,
            rail_high_code: scale.rail_high_code - half,
            ..scale
        }
    }

    /// The codes in a frame, channel 0 then channel 1, sign extended. Undefined bits do not matter.
    pub const fn codes(self, frame: [u8; FRAME_BYTES]) -> [i16; 2] {
        let [high_0, low_0, high_1, low_1] = frame;
        [self.code([high_0, low_0]), self.code([high_1, low_1])]
    }

    const fn code(self, word: [u8; 2]) -> i16 {
        // The two undefined bits leave at the top, those of a 12-bit part at the bottom.
        let left = u16::from_be_bytes(word) << 2;
        let unused = 16 - self.bits();
        if self.is_signed() { (left as i16) >> unused } else { (left >> unused) as i16 }
    }
}

/// How the converter is used. Leg A is on channel 0, leg B on channel 1.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Config {
    /// Which part.
    pub part: Part,
    /// Ticks per second, in millihertz.
    pub sample_rate_mhz: u64,
    /// Clock of the bus.
    pub clock_hz: u32,
    /// Codes to microvolts, leg A then leg B: from [`Part::leg_scale`], or from a calibration.
    pub legs: [LegScale; 2],
}

/// Why a [`Config`] cannot be used.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum SetupError {
    /// The clock is faster than the part bears.
    ClockTooFast {
        /// As configured.
        clock_hz: u32,
        /// [`FASTEST_CLOCK_HZ`].
        most_hz: u32,
    },
    /// The ticks are faster than [`CLOCKS_PER_PAIR`] permits, or there are none.
    RateOutOfRange {
        /// As configured.
        sample_rate_mhz: u64,
        /// The most at this clock.
        most_mhz: u64,
    },
    /// A scale that cannot be applied: see [`calibration::is_valid`].
    ScaleOutOfRange,
    /// The `CONV` pin cannot be driven.
    Pin(#[cfg_attr(feature = "defmt", defmt(Debug2Format))] ErrorKind),
}

impl fmt::Display for SetupError {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        match self {
            Self::ClockTooFast { clock_hz, most_hz } => {
                write!(f, "could not use a clock of {clock_hz} Hz; choose {most_hz} Hz or less")
            }
            Self::RateOutOfRange { sample_rate_mhz, most_mhz } => {
                write!(f, "could not sample at {sample_rate_mhz} mHz; choose 1 to {most_mhz} at this clock")
            }
            Self::ScaleOutOfRange => {
                f.write_str("could not use the scale of a leg; choose a shift of 1 to 40 and rails in order")
            }
            Self::Pin(kind) => write!(f, "could not drive CONV low ({kind}); check the pin's configuration"),
        }
    }
}

impl core::error::Error for SetupError {}

impl Config {
    /// What the pipeline has to know: simultaneous, so no skew.
    ///
    /// # Errors
    /// When clock, rate or a scale are out of range.
    pub fn description(&self) -> Result<SourceDescription, SetupError> {
        if self.clock_hz > FASTEST_CLOCK_HZ {
            return Err(SetupError::ClockTooFast { clock_hz: self.clock_hz, most_hz: FASTEST_CLOCK_HZ });
        }
        let most_mhz = u64::from(self.clock_hz) * 1000 / u64::from(CLOCKS_PER_PAIR);
        let sample_rate_mhz = self.sample_rate_mhz;
        if sample_rate_mhz == 0 || sample_rate_mhz > most_mhz {
            return Err(SetupError::RateOutOfRange { sample_rate_mhz, most_mhz });
        }
        if !self.legs.iter().all(calibration::is_valid) {
            return Err(SetupError::ScaleOutOfRange);
        }
        Ok(SourceDescription { sample_rate_mhz, skew_ns: 0, legs: self.legs })
    }
}

/// The converter on a bus `S`, started by pin `C`. Lives in the timer interrupt.
#[derive(Debug)]
pub struct Ltc1407<S, C> {
    spi: S,
    conv: C,
    part: Part,
    description: SourceDescription,
    settle_pairs: u32,
    /// Coming results that are not to be trusted, the one of no conversion included.
    unsettled: u32,
    failures: u32,
    has_ticked: bool,
}

impl<S: SpiDevice, C: OutputPin> Ltc1407<S, C> {
    /// A converter that settles first: the pairs of its first 2 ms are skipped.
    ///
    /// # Errors
    /// When the configuration is out of range or `CONV` cannot be driven.
    pub fn new(spi: S, mut conv: C, config: &Config) -> Result<Self, SetupError> {
        let description = config.description()?;
        conv.set_low().map_err(|error| SetupError::Pin(error.kind()))?;
        let settle_pairs = (description.sample_rate_mhz * SETTLE_MS).div_ceil(1_000_000);
        let settle_pairs = u32::try_from(settle_pairs).unwrap_or(u32::MAX - 1);
        Ok(Self {
            spi,
            conv,
            part: config.part,
            description,
            settle_pairs,
            unsettled: settle_pairs + 1,
            failures: 0,
            has_ticked: false,
        })
    }

    /// What the source says about itself: for [`super::hand_over::HandOver::split`].
    pub const fn description(&self) -> SourceDescription {
        self.description
    }

    /// One sampling instant: starts a conversion, fetches the pair of the one before, hands it over.
    /// Call it once per timer period.
    ///
    /// # Errors
    /// When bus or pin fail; the loss is counted, and the other half of the queue is told as well.
    /// Keep calling.
    ///
    /// # Timing
    /// Two pin writes and one transfer of 32 clocks.
    pub fn tick(&mut self, sender: &mut PairSender<'_>) -> Result<(), ConverterError> {
        let result = self.convert();
        // The frame of the first tick belongs to no instant.
        let has_instant = core::mem::replace(&mut self.has_ticked, true);
        if let Err(error) = result {
            sender.report(error);
        }
        match result {
            Ok(Some(pair)) => sender.put(pair),
            _ if has_instant => sender.skip(),
            _ => {}
        }
        result.map(|_| ())
    }

    /// Starts a conversion and fetches the pair of the one before; `None` where that is not to be trusted.
    fn convert(&mut self) -> Result<Option<[i16; 2]>, ConverterError> {
        let mut frame = [0; FRAME_BYTES];
        let outcome = self
            .pulse()
            .and_then(|()| self.spi.read(&mut frame).map_err(|error| ConverterError::Bus(error.kind())));
        if let Err(error) = outcome {
            self.disturb();
            return Err(error);
        }
        self.failures = 0;
        if self.unsettled > 0 {
            self.unsettled -= 1;
            return Ok(None);
        }
        Ok(Some(self.part.codes(frame)))
    }

    fn pulse(&mut self) -> Result<(), ConverterError> {
        let raised = self.conv.set_high();
        // Low again even where raising failed: the next edge must be one.
        let lowered = self.conv.set_low();
        raised.and(lowered).map_err(|error| ConverterError::Pin(error.kind()))
    }

    /// A frame failed: the conversion it should have clocked is void, and so is its result, which the
    /// next frame brings. After two in a row the part may have slept.
    fn disturb(&mut self) {
        self.failures = self.failures.saturating_add(1);
        let void = if self.failures < NAP_AFTER { 1 } else { 1 + self.settle_pairs };
        self.unsettled = self.unsettled.max(void);
    }
}

#[cfg(test)]
#[allow(clippy::unwrap_used, clippy::expect_used, clippy::panic, clippy::indexing_slicing)]
mod tests;
