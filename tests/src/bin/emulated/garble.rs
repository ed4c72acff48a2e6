//! Input no host would send: seeded, of six kinds, none of which may change what a board does.

use legwise_protocol::command::{Command, Request};
use legwise_protocol::framing::{DELIMITER, REQUEST_FRAME_BYTES, encode_request};
use legwise_protocol::limits::{LimitSet, Window};
use legwise_protocol::message::{Detection, Reporting, Settings};
use legwise_protocol::receivers::ReceiverId;
use rand::RngExt;
use rand_chacha::ChaCha8Rng;

/// Requests made here are numbered from here on, so that their answers can be told from others.
pub const FIRST_NUMBER: u32 = 1 << 31;
/// Kept messages no board comes to in one of these runs.
const NEVER_SENT: u32 = 1 << 20;

/// What is wrong with a piece of input.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord)]
pub enum Kind {
    /// Any bytes.
    Noise,
    /// The front of a sound frame; its end never comes.
    Truncated,
    /// A sound frame with one to three bits turned.
    FlippedBits,
    /// A sound request for settings that are out of range.
    OutOfRange,
    /// An acknowledgement of messages that were never sent.
    NeverSent,
    /// Many bytes at once.
    Flood,
}

impl Kind {
    /// All kinds, with how often each is drawn (a flood takes the emulated UART about 0.1 s).
    const DRAWN: [(Self, u32); 6] = [
        (Self::Noise, 6),
        (Self::Truncated, 6),
        (Self::FlippedBits, 6),
        (Self::OutOfRange, 6),
        (Self::NeverSent, 4),
        (Self::Flood, 1),
    ];

    fn draw(dice: &mut ChaCha8Rng) -> Self {
        let mut left = dice.random_range(0..Self::DRAWN.iter().map(|drawn| drawn.1).sum());
        for (kind, often) in Self::DRAWN {
            if left < often {
                return kind;
            }
            left -= often;
        }
        Self::Noise
    }
}

/// Makes such input.
#[derive(Debug)]
pub struct Garbler {
    dice: ChaCha8Rng,
    /// Good settings, to be spoilt.
    settings: Settings,
    number: u32,
}

impl Garbler {
    /// `settings` are good ones.
    pub const fn new(dice: ChaCha8Rng, settings: Settings) -> Self {
        Self { dice, settings, number: FIRST_NUMBER }
    }

    /// A piece of one kind, with or without an end.
    pub fn piece(&mut self) -> (Kind, Vec<u8>) {
        let kind = Kind::draw(&mut self.dice);
        let mut bytes = match kind {
            Kind::Noise => self.noise(1, 100),
            Kind::Flood => self.noise(1000, 2000),
            Kind::Truncated => {
                let mut frame = self.sound_request();
                // Without delimiter and at least one byte more: with a delimiter behind it, it is short.
                frame.truncate(self.dice.random_range(1..frame.len() - 1));
                frame
            }
            Kind::FlippedBits => {
                let sound = self.sound_request();
                let mut frame = sound.clone();
                let mut left = self.dice.random_range(1..=3);
                while left > 0 || frame == sound {
                    let at = self.dice.random_range(0..frame.len() - 1);
                    frame[at] ^= 1 << self.dice.random_range(0..8);
                    left = u32::saturating_sub(left, 1);
                }
                frame
            }
            Kind::OutOfRange => {
                let command = self.spoilt();
                self.framed(command)
            }
            Kind::NeverSent => {
                let through = self.dice.random_range(NEVER_SENT..=u32::MAX);
                self.framed(Command::Acknowledge { through })
            }
        };
        if self.dice.random() {
            bytes.push(DELIMITER);
        }
        (kind, bytes)
    }

    fn noise(&mut self, shortest: usize, longest: usize) -> Vec<u8> {
        let length = self.dice.random_range(shortest..=longest);
        (0..length).map(|_| self.dice.random()).collect()
    }

    fn framed(&mut self, command: Command) -> Vec<u8> {
        self.number += 1;
        let mut frame = vec![0; REQUEST_FRAME_BYTES];
        let length = encode_request(&Request { sequence: self.number, command }, &mut frame).unwrap_or(0);
        frame.truncate(length);
        frame
    }

    /// A frame a board would obey, and be wrong to.
    fn sound_request(&mut self) -> Vec<u8> {
        let wide = LimitSet { terminal: Some(Window::from_millivolts(-20_000, 20_000)), average: None };
        let command = match self.dice.random_range(0..5) {
            0 => Command::Stop,
            1 => Command::WatchLimits { receiver: ReceiverId::Custom, limits: wide },
            2 => Command::SetDetection(Detection { hold_off_samples: 77, ..self.settings.detection }),
            3 => Command::SetReporting(Reporting { snippet_after: 0, ..self.settings.reporting }),
            _ => Command::Acknowledge { through: 1 },
        };
        self.framed(command)
    }

    fn spoilt(&mut self) -> Command {
        let Settings { detection, reporting, .. } = self.settings;
        let window = |low, high| Command::WatchLimits {
            receiver: ReceiverId::Custom,
            limits: LimitSet { terminal: None, average: Some(Window::from_millivolts(low, high)) },
        };
        match self.dice.random_range(0..8) {
            0 => window(12_000, -7_000),
            1 => window(5, 5),
            2 => Command::SetDetection(Detection { hold_off_samples: 0, ..detection }),
            3 => Command::SetDetection(Detection {
                hysteresis_uv: self.dice.random_range(100_000_001..=u32::MAX),
                ..detection
            }),
            4 => Command::SetDetection(Detection { storm_after: 0, ..detection }),
            5 => Command::SetReporting(Reporting { summary_samples: 257, ..reporting }),
            6 => Command::SetReporting(Reporting {
                levels_samples: self.dice.random_range((1 << 22) + 1..=u32::MAX),
                ..reporting
            }),
            _ => Command::SetReporting(Reporting {
                snippet_before: self.dice.random_range(257..=u16::MAX),
                ..reporting
            }),
        }
    }
}
