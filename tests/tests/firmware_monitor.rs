//! The whole device on fakes: commands and their outcomes, stopping and starting, the alarm pin.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

use core::convert::Infallible;
use embedded_hal::digital::{ErrorType, OutputPin};
use legwise_firmware::alarm::AlarmPin;
use legwise_firmware::fakes::MemoryLink;
use legwise_firmware::monitor::{Identity, Memory, Monitor, Step};
use legwise_firmware::pipeline::Buffers;
use legwise_firmware::settings;
use legwise_protocol::command::{Command, Request};
use legwise_protocol::decoder::DeviceDecoder;
use legwise_protocol::framing::{DeviceFrame, REQUEST_FRAME_BYTES, encode_request};
use legwise_protocol::limits::{LimitSet, Window};
use legwise_protocol::message::{EndCause, Gap, GapCause, Message, Outcome, Reply, ResetCause, Settings};
use legwise_protocol::receivers::{self, ReceiverId};
use legwise_tests::boards;
use legwise_tests::sources::HoledSource;
use std::cell::RefCell;
use std::rc::Rc;

/// A pin that remembers every change.
#[derive(Clone, Debug, Default)]
struct FakePin(Rc<RefCell<Vec<bool>>>);

impl ErrorType for FakePin {
    type Error = Infallible;
}

impl OutputPin for FakePin {
    fn set_low(&mut self) -> Result<(), Infallible> {
        self.0.borrow_mut().push(false);
        Ok(())
    }

    fn set_high(&mut self) -> Result<(), Infallible> {
        self.0.borrow_mut().push(true);
        Ok(())
    }
}

/// A device, the host's end of its link, and its pin.
struct Bench {
    monitor: Monitor<HoledSource, MemoryLink<16_384>, FakePin, Box<Buffers>, Box<Memory<32_768, 32_768>>>,
    decoder: DeviceDecoder,
    pin: FakePin,
    /// State of the pin after each step.
    pin_states: Vec<bool>,
    sequence: u32,
}

fn usual_settings() -> Settings {
    let receiver = receivers::by_id(ReceiverId::Tia485A).unwrap();
    let mut settings = settings::for_receiver(receiver, 200_000_000);
    settings.reporting.spectrum_segments = 0;
    settings.reporting.snippet_after = 0;
    settings.reporting.summary_samples = 512;
    settings
}

impl Bench {
    /// A device that takes 100 pairs a step.
    fn new(leg_a: Vec<i32>, hold_samples: u64) -> Self {
        let identity = Identity { boot_id: 3, board: "bench", serial: 1, reset_cause: ResetCause::PowerOn };
        let leg_b = vec![0; leg_a.len()];
        let source = HoledSource::new(boards::microvolt_board(200_000), leg_a, leg_b, vec![], vec![100]);
        let pin = FakePin::default();
        let alarm = AlarmPin::new(pin.clone(), hold_samples).unwrap();
        let link = MemoryLink::new();
        let monitor =
            Monitor::new(identity, usual_settings(), (source, link, alarm), (Box::default(), Box::default()));
        Self { monitor, decoder: DeviceDecoder::new(), pin, pin_states: Vec::new(), sequence: 0 }
    }

    /// Steps `count` times; what was said.
    fn steps(&mut self, count: usize) -> Vec<DeviceFrame> {
        let mut frames = Vec::new();
        for _ in 0..count {
            self.monitor.step().unwrap();
            let is_high = *self.pin.0.borrow().last().unwrap();
            self.pin_states.push(is_high);
            while let Some(byte) = self.monitor.link_mut().take_sent() {
                self.decoder.feed_frames(&[byte], |frame| frames.push(frame));
            }
        }
        frames
    }

    fn ask(&mut self, command: Command) -> u32 {
        self.sequence += 1;
        let mut buffer = [0; REQUEST_FRAME_BYTES];
        let length = encode_request(&Request { sequence: self.sequence, command }, &mut buffer).unwrap();
        assert_eq!(self.monitor.link_mut().put(&buffer[..length]), length);
        self.sequence
    }

    /// Asks and lets the device answer; the outcome and everything said meanwhile.
    fn settle(&mut self, command: Command) -> (Outcome, Vec<DeviceFrame>) {
        let sequence = self.ask(command);
        let frames = self.steps(4);
        let outcomes: Vec<Outcome> = frames
            .iter()
            .filter_map(|frame| match frame.message {
                Message::Reply(Reply { to, outcome }) if to == sequence => Some(outcome),
                _ => None,
            })
            .collect();
        assert_eq!(outcomes.len(), 1, "one reply to {command:?}: {frames:?}");
        (outcomes[0], frames)
    }

    fn settings_in_force(&mut self) -> Settings {
        let (outcome, frames) = self.settle(Command::Identify);
        assert_eq!(outcome, Outcome::Done);
        frames.iter().rev().find_map(settings_of).expect("Identify is answered by Settings")
    }
}

fn settings_of(frame: &DeviceFrame) -> Option<Settings> {
    if let Message::Settings(settings) = frame.message { Some(settings) } else { None }
}

fn gap_of(frame: &DeviceFrame) -> Option<Gap> {
    if let Message::Gap(gap) = frame.message { Some(gap) } else { None }
}

#[test]
fn identify_is_answered_by_hello_and_settings_even_when_everything_was_acknowledged() {
    let mut bench = Bench::new(vec![0; 100_000], 0);
    let frames = bench.steps(3);
    assert!(matches!(frames[0].message, Message::Hello(_)));
    assert_eq!(settings_of(&frames[1]), Some(usual_settings()));
    bench.ask(Command::Acknowledge { through: 1 });
    assert!(bench.steps(3).iter().all(|frame| !matches!(frame.message, Message::Reply(_))));
    let (outcome, frames) = bench.settle(Command::Identify);
    assert_eq!(outcome, Outcome::Done);
    assert!(frames.iter().any(|frame| matches!(frame.message, Message::Hello(_))));
    assert_eq!(frames.iter().find_map(settings_of), Some(usual_settings()));
}

#[test]
fn good_settings_are_taken_and_told() {
    let mut bench = Bench::new(vec![0; 100_000], 0);
    let limits = receivers::by_id(ReceiverId::CanHighSpeed2003).unwrap().limits();
    let mut detection = usual_settings().detection;
    detection.hold_off_samples = 9;
    let mut reporting = usual_settings().reporting;
    reporting.summary_samples = 1_024;
    let expected = Settings { receiver: ReceiverId::CanHighSpeed2003, limits, detection, reporting };
    let commands = [
        Command::WatchLimits { receiver: ReceiverId::CanHighSpeed2003, limits },
        Command::SetDetection(detection),
        Command::SetReporting(reporting),
    ];
    for command in commands {
        let (outcome, frames) = bench.settle(command);
        assert_eq!(outcome, Outcome::Done, "{command:?}");
        assert!(frames.iter().any(|frame| settings_of(frame).is_some()));
    }
    assert_eq!(bench.settings_in_force(), expected);
}

#[test]
fn settings_out_of_range_are_refused_and_nothing_changes() {
    let mut bench = Bench::new(vec![0; 200_000], 0);
    let usual = usual_settings();
    let reversed = LimitSet { terminal: Some(Window::from_millivolts(12_000, -7_000)), average: None };
    let narrow = LimitSet { terminal: None, average: Some(Window::from_millivolts(0, 100)) };
    let (detection, reporting) = (usual.detection, usual.reporting);
    let refused = [
        Command::WatchLimits { receiver: ReceiverId::Custom, limits: reversed },
        Command::WatchLimits { receiver: ReceiverId::Custom, limits: narrow },
        Command::SetDetection(legwise_protocol::message::Detection { hold_off_samples: 0, ..detection }),
        Command::SetDetection(legwise_protocol::message::Detection { hysteresis_uv: 9_500_000, ..detection }),
        Command::SetDetection(legwise_protocol::message::Detection { storm_samples: 0, ..detection }),
        Command::SetReporting(legwise_protocol::message::Reporting { summary_samples: 0, ..reporting }),
        Command::SetReporting(legwise_protocol::message::Reporting { levels_samples: 257, ..reporting }),
        Command::SetReporting(legwise_protocol::message::Reporting { snippet_before: 257, ..reporting }),
    ];
    for command in refused {
        let (outcome, frames) = bench.settle(command);
        assert_eq!(outcome, Outcome::OutOfRange, "{command:?}");
        assert!(frames.iter().skip(2).all(|frame| settings_of(frame).is_none()), "{command:?}");
        assert_eq!(bench.settings_in_force(), usual, "{command:?}");
    }
}

#[test]
fn garbled_commands_are_ignored_and_unknown_ones_are_unsupported() {
    let mut bench = Bench::new(vec![0; 100_000], 0);
    bench.steps(2);
    let mut buffer = [0; REQUEST_FRAME_BYTES];
    let length = encode_request(&Request { sequence: 77, command: Command::Stop }, &mut buffer).unwrap();
    for at in 0..length - 1 {
        let mut damaged = buffer[..length].to_vec();
        damaged[at] ^= 0x10;
        bench.monitor.link_mut().put(&damaged);
        let frames = bench.steps(3);
        let is_reaction = |frame: &DeviceFrame| matches!(frame.message, Message::Reply(_) | Message::End(_));
        assert!(!frames.iter().any(is_reaction), "byte {at}: {frames:?}");
    }
    // A delimiter, then a sound frame: understood again.
    bench.monitor.link_mut().put(&[0]);
    assert_eq!(bench.settle(Command::Start).0, Outcome::Done);

    // Number 5 and command 200 of a later version: postcard 05 c8 01, then its CRC.
    let body = [5, 0xc8, 0x01];
    let mut framed = body.to_vec();
    framed.extend(crc32(&body).to_le_bytes());
    assert!(!framed.contains(&0), "no stuffing needed");
    framed.insert(0, framed.len() as u8 + 1);
    framed.push(0);
    bench.monitor.link_mut().put(&framed);
    let replies: Vec<Reply> = bench
        .steps(3)
        .iter()
        .filter_map(|frame| if let Message::Reply(reply) = frame.message { Some(reply) } else { None })
        .collect();
    assert_eq!(replies, [Reply { to: 5, outcome: Outcome::Unsupported }]);
}

/// CRC-32/ISO-HDLC, bit by bit from its parameters (Cook, catalogue of parametrised CRC algorithms).
fn crc32(bytes: &[u8]) -> u32 {
    !bytes.iter().fold(u32::MAX, |crc, &byte| {
        (0..8).fold(crc ^ u32::from(byte), |crc, _| crc >> 1 ^ if crc & 1 == 1 { 0xedb8_8320 } else { 0 })
    })
}

#[test]
fn stop_ends_the_stream_and_start_names_what_was_passed_over() {
    let mut bench = Bench::new(vec![0; 10_000], 0);
    bench.steps(5);
    let (outcome, frames) = bench.settle(Command::Stop);
    assert_eq!(outcome, Outcome::Done);
    let end = frames.iter().find_map(|frame| match frame.message {
        Message::End(end) => Some(end),
        _ => None,
    });
    let end = end.expect("Stop is answered by End");
    assert_eq!((end.cause, end.totals.samples), (EndCause::Stopped, 500));
    assert!(bench.steps(10).is_empty(), "a stopped device examines nothing");
    assert_eq!(bench.settle(Command::Stop).0, Outcome::Done);
    let (outcome, frames) = bench.settle(Command::Start);
    assert_eq!(outcome, Outcome::Done);
    let gaps: Vec<Gap> = frames.iter().filter_map(gap_of).collect();
    // 500 pairs examined; the steps after it up to Start passed 100 pairs each.
    let [gap] = gaps[..] else { panic!("one gap: {gaps:?}") };
    assert_eq!((gap.first_sample, gap.cause), (500, GapCause::Stopped));
    assert_eq!(gap.samples, 100 * (4 + 10 + 4));
    // Afterwards a hole is an ordinary hole again, and the last End is the source's.
    let frames = bench.steps(200);
    assert_eq!(frames.iter().filter_map(gap_of).count(), 0);
    let last = frames.iter().rev().find_map(|frame| match frame.message {
        Message::End(end) => Some(end),
        _ => None,
    });
    let last = last.unwrap();
    assert_eq!(last.cause, EndCause::SourceExhausted);
    assert_eq!(last.totals.samples + last.totals.gap_samples, 10_000);
    assert_eq!(bench.settle(Command::Start).0, Outcome::Unsupported, "the source has ended");
    assert_eq!(bench.monitor.step(), Ok(Step::Finished));
}

#[test]
fn start_right_after_stop_leaves_no_gap() {
    let mut bench = Bench::new(vec![0; 10_000], 0);
    bench.steps(5);
    bench.ask(Command::Stop);
    bench.ask(Command::Start);
    let frames = bench.steps(200);
    assert_eq!(frames.iter().filter_map(gap_of).count(), 0);
    let ends = frames.iter().filter(|frame| matches!(frame.message, Message::End(_))).count();
    assert_eq!(ends, 2);
}

/// Steps (of 100 pairs) after which the pin was high.
fn high_steps(bench: &Bench) -> Vec<usize> {
    (0..bench.pin_states.len()).filter(|&step| bench.pin_states[step]).collect()
}

#[test]
fn the_alarm_pin_follows_excursions_long_and_short_and_holds() {
    let mut leg_a = vec![0; 20_000];
    leg_a[2_000..2_003].fill(12_000_001);
    leg_a[10_000..11_000].fill(-7_000_001);
    for hold_samples in [0, 1_000] {
        let mut bench = Bench::new(leg_a.clone(), hold_samples);
        bench.steps(200);
        let high = high_steps(&bench);
        // Blocks of 256 pairs with a lookahead of 3, dealt with when the step brings the last of them:
        // sample 2000 is in block 7 (to pair 2048, step 20), samples 10 000 to 10 999 in blocks 39 to 42.
        let step_of = |block: usize| (256 * (block + 1) + 3 - 1) / 100;
        let hold_steps = hold_samples as usize / 100;
        let first = step_of(7);
        let expected_short: Vec<usize> = (first..=first + hold_steps.saturating_sub(1)).collect();
        let short: Vec<usize> = high.iter().copied().filter(|&step| step < 60).collect();
        assert_eq!(short, expected_short, "hold {hold_samples}");
        let long: Vec<usize> = high.iter().copied().filter(|&step| step >= 60).collect();
        assert_eq!(long.first(), Some(&step_of(39)));
        let last = step_of(42) + hold_steps.saturating_sub(1);
        assert_eq!(long, (step_of(39)..=last).collect::<Vec<_>>(), "hold {hold_samples}");
        // Driven low at the start, then once for each change.
        assert_eq!(*bench.pin.0.borrow(), [false, true, false, true, false]);
    }
}

#[test]
fn a_stopped_device_lets_its_alarm_go() {
    let mut bench = Bench::new(vec![13_000_000; 20_000], 300);
    bench.steps(10);
    assert_eq!(bench.pin_states.last(), Some(&true));
    bench.ask(Command::Stop);
    bench.steps(10);
    assert_eq!(bench.pin_states.last(), Some(&false), "{:?}", bench.pin_states);
}
