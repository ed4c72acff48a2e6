//! A board of your own, complete, with fakes for the hardware so that it runs on the desktop:
//! `cargo run -p legwise-firmware --example skeleton`.
//!
//! What stands between the two "hardware" lines is yours to replace; `run` is the board's `main` as it is,
//! but for the two places that say "on a board". `PORTING.md` goes through it step by step.

use core::convert::Infallible;
use legwise_firmware::alarm::{AlarmPin, NoPin};
use legwise_firmware::converters::hand_over::HandOver;
use legwise_firmware::front_end::{Divider, FrontEnd};
use legwise_firmware::link::Link;
use legwise_firmware::monitor::{Identity, Memory, Monitor, Step};
use legwise_firmware::pipeline::Buffers;
use legwise_firmware::settings;
use legwise_firmware::source::SourceDescription;
use legwise_protocol::decoder::DeviceDecoder;
use legwise_protocol::message::{Message, ResetCause};
use legwise_protocol::receivers::{ReceiverId, by_id};

/// The analogue side: 100 kohm per leg, 12 bits, 0.1 % resistors, a 0.2 % reference.
const FRONT_END: FrontEnd = FrontEnd {
    divider: Divider::STANDARD,
    reference_v: 3.3,
    bits: 12,
    rail_margin_codes: 4,
    resistor_ppm: 1_000,
    reference_ppm: 2_000,
    node_offset_uv: 2_000,
};

/// What the board says about itself. Uncalibrated: both legs alike.
const DESCRIPTION: SourceDescription = SourceDescription {
    sample_rate_mhz: 20_000_000, // 20 000 pairs per second
    skew_ns: 0,                  // both legs at once; else how much later leg B is sampled
    legs: [FRONT_END.leg_scale(); 2],
};

/// Pairs that may wait while the main loop is busy: 51 ms.
const QUEUE_PAIRS: usize = 1024;
/// Bytes for messages that must not get lost, and for those that may.
const KEPT_BYTES: usize = 8 * 1024;
const PASSING_BYTES: usize = 8 * 1024;

// ---- hardware, faked --------------------------------------------------------------------------------

/// Tick at which the fake bus jumps to a common mode of 13 V, for `PULSE_TICKS`.
const PULSE_TICK: u64 = 5_000;
const PULSE_TICKS: u64 = 3;

/// Two converters started together.
#[derive(Default)]
struct Converters {
    tick: u64,
}

impl Converters {
    /// The codes of leg A and leg B. On a board: two data registers.
    fn read(&mut self) -> [i16; 2] {
        let is_pulse = (PULSE_TICK..PULSE_TICK + PULSE_TICKS).contains(&self.tick);
        self.tick += 1;
        // 2 V of signal around 2.5 V, or around 13 V.
        let common_v = if is_pulse { 13.0 } else { 2.5 };
        [common_v + 1.0, common_v - 1.0].map(code_of)
    }
}

/// The code a perfect front end gives for a voltage on the leg.
fn code_of(leg_v: f64) -> i16 {
    let FrontEnd { divider, reference_v, .. } = FRONT_END;
    let node_v = divider.offset_v(reference_v) + leg_v / divider.ratio();
    (node_v / reference_v * 4096.0).round().clamp(0.0, 4095.0) as i16
}

/// A UART with room for a few bytes at a time.
#[derive(Default)]
struct Uart {
    sent: Vec<u8>,
}

impl Link for Uart {
    type Error = Infallible;

    /// On a board: as many bytes as the transmit buffer has room for, and no waiting.
    fn send(&mut self, bytes: &[u8]) -> Result<usize, Infallible> {
        let taken = bytes.len().min(16);
        self.sent.extend(bytes.iter().take(taken));
        Ok(taken)
    }

    /// On a board: whatever has arrived. No host speaks here.
    fn receive(&mut self, _buffer: &mut [u8]) -> Result<usize, Infallible> {
        Ok(0)
    }
}

/// On a board: feeds the watchdog. Only where the main loop really got round.
fn feed_watchdog() {}

// ---- end of the hardware ----------------------------------------------------------------------------

/// Runs the board for a second; returns what it sent.
fn run() -> Vec<u8> {
    // On a board a `static`, handed out once as `&'static mut` (crate `static_cell`).
    let mut hand_over = HandOver::<QUEUE_PAIRS>::new();
    let (mut sender, source) = hand_over.split(DESCRIPTION);
    let mut converters = Converters::default();

    let identity = Identity {
        boot_id: 0x1234_5678, // on a board: a random number, new at each start
        board: "skeleton",
        serial: 1,
        reset_cause: ResetCause::PowerOn, // on a board: from the reset flags
    };
    let Some(receiver) = by_id(ReceiverId::Tia485A) else { return Vec::new() };
    let settings = settings::for_receiver(receiver, DESCRIPTION.sample_rate_mhz);
    let Ok(alarm) = AlarmPin::new(NoPin, DESCRIPTION.sample_rate_mhz / 1000);
    // On a board two statics as well: the monitor's memory, about 45 kB, must not pass over the stack.
    let (mut buffers, mut memory) = (Buffers::new(), Memory::<KEPT_BYTES, PASSING_BYTES>::new());
    let hardware = (source, Uart::default(), alarm);
    let mut monitor = Monitor::new(identity, settings, hardware, (&mut buffers, &mut memory));

    for _ in 0..400 {
        // On a board this is the timer interrupt, which comes between any two lines of the loop.
        for _ in 0..50 {
            sender.put(converters.read());
        }
        // The main loop. A failed step leaves everything sound: the next one tries again.
        while !matches!(monitor.step(), Ok(Step::Waiting | Step::Finished)) {}
        feed_watchdog();
        // On a board: sleep until the next interrupt.
    }
    core::mem::take(&mut monitor.link_mut().sent)
}

/// The messages in a stream of bytes: the host's half.
fn decode(bytes: &[u8]) -> Vec<Message> {
    let mut messages = Vec::new();
    DeviceDecoder::new().feed_frames(bytes, |frame| messages.push(frame.message));
    messages
}

fn main() {
    let bytes = run();
    println!("{} bytes in a second of sampling:", bytes.len());
    for message in decode(&bytes) {
        match message {
            Message::Hello(hello) => println!("hello from {}", hello.board.as_text()),
            Message::Excursion(excursion) => println!("{excursion:?}"),
            Message::Summary(summary) => {
                println!("summary: {} pairs, {:?}", summary.samples, summary.twice_cm)
            }
            Message::Gap(gap) => println!("{gap:?}"),
            _ => {}
        }
    }
}

#[cfg(test)]
#[allow(clippy::panic)]
mod tests {
    use super::*;

    #[test]
    fn the_skeleton_introduces_itself_and_reports_the_pulse_where_it_was() {
        let messages = decode(&run());
        assert!(matches!(messages.first(), Some(Message::Hello(hello)) if hello.legs == DESCRIPTION.legs));
        let excursions: Vec<_> = messages
            .iter()
            .filter_map(|message| if let Message::Excursion(found) = message { Some(found) } else { None })
            .collect();
        let [excursion] = excursions[..] else { panic!("one excursion: {excursions:?}") };
        assert_eq!((excursion.first_sample, u64::from(excursion.samples)), (PULSE_TICK, PULSE_TICKS));
        // Leg A goes to 14 V, in steps of 9 mV.
        let extreme_v = f64::from(excursion.breach.extreme_twice_uv) / 2e6;
        assert!((extreme_v - 14.0).abs() <= 0.009_1 / 2.0, "{extreme_v}");
        assert!(!messages.iter().any(|message| matches!(message, Message::Gap(_))), "nothing was lost");
    }

    #[test]
    fn the_codes_in_the_porting_guide_are_those_of_the_front_end() {
        let guide = include_str!("../PORTING.md");
        for (step, leg_v) in [("| 3 |", 0.0), ("| 4 |", 9.0), ("| 5 |", -9.0)] {
            let line = guide.lines().find(|line| line.starts_with(step)).unwrap_or_default();
            assert!(line.contains(&format!("code {}", code_of(leg_v))), "{line}");
        }
        // With the input open the node sits where bias and ground resistor put it, and so does the leg.
        let FrontEnd { divider, reference_v, .. } = FRONT_END;
        let open_v = reference_v * divider.ground_ohm / (divider.bias_ohm + divider.ground_ohm);
        let line = guide.lines().find(|line| line.starts_with("| 2 |")).unwrap_or_default();
        for text in
            [format!("{open_v:.3} V"), format!("code {}", code_of(open_v)), format!("**{open_v:.2} V")]
        {
            assert!(line.contains(&text), "{text}: {line}");
        }
        let line = guide.lines().find(|line| line.starts_with("| 8 |")).unwrap_or_default();
        for end_v in [0.0, reference_v] {
            let leg_v = format!("{:+.1} V", divider.leg_v(end_v, reference_v));
            assert!(line.contains(&leg_v), "{leg_v}: {line}");
        }
    }
}
