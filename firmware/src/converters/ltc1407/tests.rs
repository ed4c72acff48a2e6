//! Exact bus transactions by the frame drawn in the module, and a model of the part that knows only
//! edges and clocks, in front of the real pipeline.

use super::super::hand_over::{HandOver, QueuedSource};
use super::*;
use crate::front_end::Divider;
use crate::pipeline::{Buffers, Pipeline};
use crate::settings;
use crate::source::{PairSource, Taken};
use embedded_hal::spi::{self, Operation};
use embedded_hal_mock::eh1::MockError;
use embedded_hal_mock::eh1::digital::{Mock as PinMock, State, Transaction as PinStep};
use embedded_hal_mock::eh1::spi::{Mock as SpiMock, Transaction as SpiStep};
use legwise_protocol::limits::{LimitSet, Window};
use legwise_protocol::message::{Excursion, Gap, GapCause, Message};
use std::boxed::Box;
use std::cell::RefCell;
use std::io;
use std::rc::Rc;
use std::vec;
use std::vec::Vec;

/// 100 kohm from the leg; -15..+20 V at the leg become 0.07..2.43 V.
const FRONT_END: FrontEnd = FrontEnd {
    divider: Divider { input_ohm: 100e3, bias_ohm: 15.4e3, ground_ohm: 13.7e3 },
    reference_v: REFERENCE_V,
    bits: 14,
    rail_margin_codes: 0,
    resistor_ppm: 1_000,
    reference_ppm: 2_000,
    node_offset_uv: 500,
};

/// At 500 pairs per second one pair is skipped while the reference settles.
const CONFIG: Config = Config {
    part: Part::Bipolar14,
    sample_rate_mhz: 500_000,
    clock_hz: 20_000_000,
    legs: [Part::Bipolar14.leg_scale(&FRONT_END); 2],
};

fn frame(bytes: [u8; 4]) -> [SpiStep<u8>; 3] {
    [SpiStep::transaction_start(), SpiStep::read_vec(bytes.to_vec()), SpiStep::transaction_end()]
}

/// Low once at the start, then a pulse per tick.
fn pulses(ticks: usize) -> Vec<PinStep> {
    let pulse = [PinStep::set(State::High), PinStep::set(State::Low)];
    [PinStep::set(State::Low)].into_iter().chain((0..ticks).flat_map(|_| pulse.clone())).collect()
}

/// Everything that waits: pairs with their index, errors.
fn drain(source: &mut QueuedSource<'_>) -> (Vec<(u64, [i32; 2])>, Vec<ConverterError>) {
    let (mut pairs, mut errors) = (Vec::new(), Vec::new());
    let (mut a, mut b) = ([0; 8], [0; 8]);
    loop {
        match source.take(&mut a, &mut b) {
            Ok(Taken::Pairs { first_sample, pairs: count, .. }) => {
                pairs.extend((first_sample..).zip(a.iter().zip(&b).map(|(&a, &b)| [a, b])).take(count));
            }
            Ok(_) => return (pairs, errors),
            Err(error) => errors.push(error),
        }
    }
}

#[test]
fn every_tick_is_one_conv_pulse_and_one_frame_of_four_bytes_one_tick_late() {
    let frames = [
        [0x55, 0x55, 0x55, 0x55], // of no conversion
        [0x12, 0x34, 0x05, 0x67], // while the reference settles
        [0x1F, 0xFF, 0x20, 0x00], // the highest and the lowest code
        [0x3F, 0xFF, 0x00, 0x01], // -1 and 1
        [0xC0, 0x00, 0xDF, 0xFE], // the undefined bits set
    ];
    let mut spi = SpiMock::new(&frames.into_iter().flat_map(frame).collect::<Vec<_>>());
    let mut conv = PinMock::new(&pulses(frames.len()));
    let mut converter = Ltc1407::new(spi.clone(), conv.clone(), &CONFIG).unwrap();
    let mut hand_over = HandOver::<16>::new();
    let (mut sender, mut source) = hand_over.split(converter.description());
    for _ in frames {
        converter.tick(&mut sender).unwrap();
    }
    spi.done();
    conv.done();
    let (pairs, errors) = drain(&mut source);
    // Tick 0 is sampled while settling; the frame of tick 2 brings the pair of tick 1.
    assert_eq!(pairs, vec![(1, [8191, -8192]), (2, [-1, 1]), (3, [0, 8190])]);
    assert_eq!(errors, vec![]);
}

#[test]
fn the_conv_edge_comes_before_the_clocks_and_is_over_by_then() {
    let chip = Chip::new(Part::Bipolar14, |_| [0, 0]);
    let mut converter = Ltc1407::new(chip.clone(), chip.clone(), &CONFIG).unwrap();
    let mut hand_over = HandOver::<16>::new();
    let (mut sender, _) = hand_over.split(converter.description());
    converter.tick(&mut sender).unwrap();
    converter.tick(&mut sender).unwrap();
    let tick = ["high", "low", "32 clocks"];
    assert_eq!(chip.0.borrow().events, [&["low"][..], &tick, &tick].concat());
}

#[test]
fn codes_of_all_four_parts_are_extended_by_their_own_rule() {
    // The 14-bit word 10_1010_1010_1011 behind two undefined bits, and 01_0101_0101_0100.
    let frame = [0b0110_1010, 0b1010_1011, 0b1001_0101, 0b0101_0100];
    assert_eq!(Part::Unipolar14.codes(frame), [10_923, 5_460]);
    assert_eq!(Part::Bipolar14.codes(frame), [10_923 - 16_384, 5_460]);
    // 12 bits: the last two of the word are undefined.
    assert_eq!(Part::Unipolar12.codes(frame), [2_730, 1_365]);
    assert_eq!(Part::Bipolar12.codes(frame), [2_730 - 4_096, 1_365]);
}

#[test]
fn every_code_survives_whatever_the_undefined_bits_are() {
    for part in [Part::Unipolar12, Part::Unipolar14, Part::Bipolar12, Part::Bipolar14] {
        let [low, high] = part.rails();
        assert_eq!(high - low, (1 << part.bits()) - 1);
        for code in low..=high {
            for undefined in 0..4_u8 {
                let other = low + high - code;
                let bytes = wire_frame(part, [code, other], undefined);
                assert_eq!(part.codes(bytes).map(i32::from), [code, other], "{part:?}");
            }
        }
    }
}

/// The frame drawn in the module, one clock at a time.
fn wire_frame(part: Part, codes: [i32; 2], undefined: u8) -> [u8; FRAME_BYTES] {
    let mut bits = Vec::new();
    for code in codes {
        bits.extend([undefined & 1, undefined >> 1]);
        bits.extend((0..part.bits()).rev().map(|bit| (code >> bit & 1) as u8));
        bits.resize(bits.len().next_multiple_of(16), undefined & 1);
    }
    assert_eq!(bits.len(), 32);
    let mut bytes = bits.chunks(8).map(|byte| byte.iter().fold(0, |sum, bit| sum << 1 | bit));
    [(); FRAME_BYTES].map(|()| bytes.next().unwrap())
}

#[test]
fn a_bus_error_surfaces_in_both_halves_and_the_index_keeps_counting() {
    let chip = Chip::new(Part::Bipolar14, |tick| [tick as i32, -(tick as i32)]);
    let mut converter = Ltc1407::new(chip.clone(), chip.clone(), &CONFIG).unwrap();
    let mut hand_over = HandOver::<64>::new();
    let (mut sender, mut source) = hand_over.split(converter.description());
    let bus = ConverterError::Bus(spi::ErrorKind::ModeFault);
    for tick in 0..30 {
        // One frame fails; later three in a row, after which the part may have slept.
        let fails = matches!(tick, 8 | 15 | 16 | 17);
        chip.0.borrow_mut().bus_error = fails.then_some(spi::ErrorKind::ModeFault);
        assert_eq!(converter.tick(&mut sender), if fails { Err(bus) } else { Ok(()) });
    }
    let (pairs, errors) = drain(&mut source);
    // Lost: 0 (settling); 7 (not read) and 8 (not converted); 14..=17, and 18 (settling after sleep).
    let expected = (1..29).filter(|index| !matches!(index, 7 | 8 | 14..=18));
    assert_eq!(pairs, expected.map(|index| (index as u64, [index, -index])).collect::<Vec<_>>());
    assert_eq!(errors, vec![bus, bus], "once per streak");
}

#[test]
fn a_pin_error_surfaces_and_costs_the_pair_that_was_not_started() {
    let pulse = |error: Option<io::ErrorKind>| {
        let high = PinStep::set(State::High);
        [error.map_or(high.clone(), |kind| high.with_error(MockError::Io(kind))), PinStep::set(State::Low)]
    };
    let steps = [None, None, None, Some(io::ErrorKind::NotConnected), None, None, None];
    let mut conv = PinMock::new(
        &[PinStep::set(State::Low)].into_iter().chain(steps.into_iter().flat_map(pulse)).collect::<Vec<_>>(),
    );
    // No frame is read where no conversion was started.
    let frames = (0..6).flat_map(|number| frame([0, number, 0, number])).collect::<Vec<_>>();
    let mut spi = SpiMock::new(&frames);
    let mut converter = Ltc1407::new(spi.clone(), conv.clone(), &CONFIG).unwrap();
    let mut hand_over = HandOver::<16>::new();
    let (mut sender, mut source) = hand_over.split(converter.description());
    let results: Vec<_> = steps.iter().map(|_| converter.tick(&mut sender)).collect();
    spi.done();
    conv.done();
    let pin = ConverterError::Pin(ErrorKind::Other);
    assert_eq!(results, vec![Ok(()), Ok(()), Ok(()), Err(pin), Ok(()), Ok(()), Ok(())]);
    let (pairs, errors) = drain(&mut source);
    assert_eq!(pairs, vec![(1, [2, 2]), (4, [4, 4]), (5, [5, 5])]);
    assert_eq!(errors, vec![pin]);
}

#[test]
fn configurations_beyond_the_part_are_refused_with_value_and_limit() {
    let refused = |config: Config| config.description().unwrap_err();
    let most_hz = FASTEST_CLOCK_HZ;
    let clock_hz = most_hz + 1;
    assert_eq!(refused(Config { clock_hz, ..CONFIG }), SetupError::ClockTooFast { clock_hz, most_hz });
    // 20 MHz / 34 clocks = 588 235.294 pairs per second.
    let most_mhz = 588_235_294;
    let sample_rate_mhz = most_mhz + 1;
    let error = SetupError::RateOutOfRange { sample_rate_mhz, most_mhz };
    assert_eq!(refused(Config { sample_rate_mhz, ..CONFIG }), error);
    assert!(Config { sample_rate_mhz: most_mhz, ..CONFIG }.description().is_ok());
    let error = SetupError::RateOutOfRange { sample_rate_mhz: 0, most_mhz };
    assert_eq!(refused(Config { sample_rate_mhz: 0, ..CONFIG }), error);
    let [leg_a, leg_b] = CONFIG.legs;
    let legs = [leg_a, LegScale { shift: 0, ..leg_b }];
    assert_eq!(refused(Config { legs, ..CONFIG }), SetupError::ScaleOutOfRange);
    let pin = PinStep::set(State::Low).with_error(MockError::Io(io::ErrorKind::NotConnected));
    let (mut spi, mut conv) = (SpiMock::<u8>::new(&[]), PinMock::new(&[pin]));
    let error = Ltc1407::new(spi.clone(), conv.clone(), &CONFIG).unwrap_err();
    assert_eq!(error, SetupError::Pin(ErrorKind::Other));
    spi.done();
    conv.done();
}

#[test]
fn both_codings_read_the_same_voltage_off_the_divider() {
    // Kirchhoff at the node: V_leg = V_node (1 + p + q) - V_reference p.
    let (p, q) = (100e3 / 15.4e3, 100e3 / 13.7e3);
    let mut worst = 0.0_f64;
    for part in [Part::Unipolar12, Part::Unipolar14, Part::Bipolar12, Part::Bipolar14] {
        let scale = part.leg_scale(&FRONT_END);
        let [low, high] = part.rails();
        assert_eq!([scale.rail_low_code, scale.rail_high_code], [low, high]);
        for code in [low, low + 1, low + (high - low) / 3, high] {
            let node_v = 2.5 * f64::from(code - low) / f64::from(1 << part.bits());
            let leg_uv = 1e6 * (node_v * (1.0 + p + q) - 2.5 * p);
            worst = worst.max((f64::from(scale.microvolts(code)) - leg_uv).abs());
        }
    }
    // The offset is rounded to a microvolt once or twice, the product once.
    std::println!("worst {worst} uV");
    assert!(worst <= 1.5, "{worst}");
}

/// A model of the part: samples at the rising `CONV` edge, gives the result before it in 32 clocks.
#[derive(Clone)]
struct Chip(Rc<RefCell<ChipState>>);

struct ChipState {
    part: Part,
    /// Codes at a tick.
    wave: fn(u64) -> [i32; 2],
    is_high: bool,
    edges: u64,
    /// Result of the last conversion, and of the one before.
    sampled: [i32; 2],
    before: [i32; 2],
    bus_error: Option<spi::ErrorKind>,
    events: Vec<&'static str>,
}

impl Chip {
    fn new(part: Part, wave: fn(u64) -> [i32; 2]) -> Self {
        Self(Rc::new(RefCell::new(ChipState {
            part,
            wave,
            is_high: false,
            edges: 0,
            sampled: [0; 2],
            before: [0; 2],
            bus_error: None,
            events: Vec::new(),
        })))
    }
}

impl embedded_hal::digital::ErrorType for Chip {
    type Error = core::convert::Infallible;
}

impl OutputPin for Chip {
    fn set_low(&mut self) -> Result<(), Self::Error> {
        let mut chip = self.0.borrow_mut();
        chip.is_high = false;
        chip.events.push("low");
        Ok(())
    }

    fn set_high(&mut self) -> Result<(), Self::Error> {
        let mut chip = self.0.borrow_mut();
        if !chip.is_high {
            chip.before = chip.sampled;
            chip.sampled = (chip.wave)(chip.edges);
            chip.edges += 1;
        }
        chip.is_high = true;
        chip.events.push("high");
        Ok(())
    }
}

/// The bus end of the chip; its pin end has another error type.
impl spi::ErrorType for Chip {
    type Error = spi::ErrorKind;
}

impl SpiDevice for Chip {
    fn transaction(&mut self, operations: &mut [Operation<'_, u8>]) -> Result<(), spi::ErrorKind> {
        let mut chip = self.0.borrow_mut();
        if let Some(error) = chip.bus_error {
            // Nothing was clocked: the conversion is void, and so is what the next frame brings.
            chip.sampled = [0x1555; 2];
            return Err(error);
        }
        let [Operation::Read(bytes)] = operations else { panic!("one read of a frame: {operations:?}") };
        assert_eq!(bytes.len(), FRAME_BYTES);
        // The undefined bits change from frame to frame.
        let undefined = (chip.edges % 4) as u8;
        bytes.copy_from_slice(&wire_frame(chip.part, chip.before, undefined));
        chip.events.push("32 clocks");
        Ok(())
    }
}

/// A quiet bus at the 1000th code, with 5 pairs at code 7000 from index 3000 on.
fn wave(tick: u64) -> [i32; 2] {
    if (3000..3005).contains(&tick) { [7000, 1000] } else { [1000, 1000] }
}

#[test]
fn the_pipeline_finds_an_excursion_at_the_very_tick_and_the_overrun_as_a_gap() {
    let chip = Chip::new(Part::Bipolar14, wave);
    let mut converter = Ltc1407::new(chip.clone(), chip, &CONFIG).unwrap();
    let mut hand_over = HandOver::<512>::new();
    let (mut sender, mut source) = hand_over.split(converter.description());
    let window = Window::from_millivolts(-7_000, 12_000);
    let limits = LimitSet { terminal: Some(window), average: None };
    let mut settings = settings::for_limits(limits, CONFIG.sample_rate_mhz);
    settings.reporting.snippet_after = 0;
    let mut pipeline = Pipeline::new(Box::<Buffers>::default(), source.describe(), settings);
    let (mut excursions, mut gaps) = (Vec::<Excursion>::new(), Vec::<Gap>::new());
    let mut records = |message: &Message, _: u64| match message {
        Message::Excursion(excursion) => excursions.push(*excursion),
        Message::Gap(gap) => gaps.push(*gap),
        _ => {}
    };
    let (mut a, mut b) = ([0; 256], [0; 256]);
    for tick in 0..8000 {
        converter.tick(&mut sender).unwrap();
        // The loop is away from tick 5000 to tick 5999.
        if (5000..6000).contains(&tick) {
            continue;
        }
        while let Taken::Pairs { first_sample, pairs, gap } = source.take(&mut a, &mut b).unwrap() {
            let cause = gap.unwrap_or(GapCause::Skipped);
            pipeline.take(first_sample, &a[..pairs], &b[..pairs], cause, &mut records);
        }
    }
    pipeline.end(legwise_protocol::message::EndCause::Stopped, &mut records);
    assert_eq!(excursions.len(), 1);
    assert_eq!((excursions[0].first_sample, excursions[0].samples), (3000, 5));
    // 7000 codes above 1.25 V are 2.318 V at the node; at the leg by Kirchhoff, and twice that. The
    // scale is good to 1.5 uV (see above).
    let exact = 2e6 * (2.5 * (0.5 + 7000.0 / 16_384.0) * (1.0 + 100.0 / 15.4 + 100.0 / 13.7) - 250.0 / 15.4);
    let extreme = f64::from(excursions[0].breach.extreme_twice_uv);
    std::println!("extreme {} uV", extreme / 2.0);
    assert!((extreme - exact).abs() <= 3.0, "{extreme} against {exact}");
    // Tick 4999 brought pair 4998; 511 more fitted; the loop comes back after tick 6000 (pair 5999, lost
    // as well: the queue was still full), and the next tick brings pair 6000.
    let first_sample = 4999 + 511;
    assert_eq!(gaps, vec![Gap { first_sample, samples: 6000 - first_sample, cause: GapCause::Overrun }]);
    assert_eq!(pipeline.totals().samples, 7999 - 1 - (6000 - first_sample));
    assert_eq!(pipeline.totals().outside, 5);
}
