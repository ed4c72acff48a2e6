//! A master that polls slaves with asynchronous characters.
//!
//! ```text
//!  idle | lead: mark | start 0 | 8 data, lowest first | parity | stop 1 .. | tail: mark | idle
//! ```
//!
//! Mark is leg A above leg B. The driver is on from lead to tail; in between messages the pair rests
//! at its bias.

use super::{Pen, PollCounts, index_of};
use crate::line::error::ScenarioError;
use crate::line::follower::Event;
use crate::line::random::Dice;
use crate::line::scenario::{Parity, Poll, Scenario, Traffic};
use crate::line::schedule::{Gate, Occurrences};

/// The state of the conversation.
#[derive(Clone, Debug)]
pub(crate) struct Uart {
    line: Line,
    master: usize,
    polls: Vec<(usize, Poll)>,
    turn: usize,
    samples_per_ms: f64,
    pause_ms: f64,
    pause_scatter_ms: f64,
    timeout_ms: f64,
    stalls: Option<Gate>,
    dice: Dice,
    next_at: f64,
    counts: PollCounts,
}

/// How characters become levels.
#[derive(Clone, Debug)]
struct Line {
    bit: f64,
    parity: Parity,
    stop_bits: u8,
    lead_bits: f64,
    tail_bits: f64,
}

impl Uart {
    /// The conversation of a scenario with uart traffic.
    pub fn new(scenario: &Scenario, seed: u64, dice: Dice) -> Result<Self, ScenarioError> {
        let Traffic::Uart {
            baud,
            master,
            polls,
            parity,
            stop_bits,
            pause_ms,
            pause_scatter_ms,
            timeout_ms,
            lead_bits,
            tail_bits,
            stalls,
        } = &scenario.traffic
        else {
            return Err(ScenarioError::value("traffic", "..", "it is not uart traffic", "[traffic.uart]"));
        };
        let rate = scenario.sample_rate_hz;
        let polls = polls
            .iter()
            .map(|poll| Ok((index_of(scenario, "traffic.uart.polls", &poll.slave)?, poll.clone())))
            .collect::<Result<Vec<_>, ScenarioError>>()?;
        Ok(Self {
            line: Line {
                bit: rate / baud,
                parity: *parity,
                stop_bits: *stop_bits,
                lead_bits: *lead_bits,
                tail_bits: *tail_bits,
            },
            master: index_of(scenario, "traffic.uart.master", master)?,
            polls,
            turn: 0,
            samples_per_ms: rate * 1e-3,
            pause_ms: *pause_ms,
            pause_scatter_ms: *pause_scatter_ms,
            timeout_ms: *timeout_ms,
            stalls: stalls
                .as_ref()
                .map(|stalls| Gate::new(Occurrences::new(Some(stalls), "traffic.stalls", seed, rate))),
            dice,
            next_at: pause_ms * rate * 1e-3,
            counts: PollCounts::default(),
        })
    }

    /// Questions and answers so far.
    pub fn counts(&self) -> PollCounts {
        self.counts
    }

    /// Appends whole exchanges until all events before `until` (samples) are there.
    pub fn extend(&mut self, until: f64, events: &mut Vec<Event>) {
        while self.next_at < until {
            if let Some(stalls) = &mut self.stalls {
                while stalls.change_at() <= self.next_at {
                    stalls.step();
                }
                if stalls.is_on() {
                    self.next_at = stalls.change_at();
                    continue;
                }
            }
            self.exchange(events);
        }
    }

    fn exchange(&mut self, events: &mut Vec<Event>) {
        let Some((slave, poll)) = self.polls.get(self.turn) else {
            self.next_at = f64::INFINITY;
            return;
        };
        self.turn = (self.turn + 1) % self.polls.len();
        self.counts.asked += 1;
        let mut at = self.line.message(self.master, poll.ask_bytes, self.next_at, &mut self.dice, events);
        if self.dice.unit() < poll.answers {
            self.counts.answered += 1;
            let wait_ms = poll.turn_round_ms + poll.turn_round_scatter_ms * self.dice.unit();
            let bytes = self.dice.between(poll.reply_bytes[0], poll.reply_bytes[1]);
            at += wait_ms * self.samples_per_ms;
            at = self.line.message(*slave, bytes, at, &mut self.dice, events);
        } else {
            at += self.timeout_ms * self.samples_per_ms;
        }
        let pause_ms = self.pause_ms + self.pause_scatter_ms * self.dice.unit();
        self.next_at = at + pause_ms * self.samples_per_ms;
    }
}

impl Line {
    /// Writes a message of random characters from `at` on; answers when the driver lets go.
    fn message(&self, node: usize, bytes: u16, at: f64, dice: &mut Dice, events: &mut Vec<Event>) -> f64 {
        let mut pen = Pen::new(events, at);
        pen.drive(node, true, self.lead_bits * self.bit);
        for _ in 0..bytes {
            let byte = (dice.next() >> 56) as u8;
            pen.drive(node, false, self.bit);
            for place in 0..8 {
                pen.drive(node, byte >> place & 1 == 1, self.bit);
            }
            let is_odd = byte.count_ones() % 2 == 1;
            match self.parity {
                Parity::None => {}
                Parity::Even => pen.drive(node, is_odd, self.bit),
                Parity::Odd => pen.drive(node, !is_odd, self.bit),
            }
            pen.drive(node, true, f64::from(self.stop_bits) * self.bit);
        }
        pen.drive(node, true, self.tail_bits * self.bit);
        pen.release(0.0);
        pen.at
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::line::responses::{IDLE, state_of};

    /// Reads the level at an instant: the last event not after it.
    fn level(events: &[Event], at: f64) -> u32 {
        events.iter().rev().find(|event| event.at <= at).map_or(IDLE, |event| event.state)
    }

    #[test]
    fn a_receiver_reads_every_character_back() {
        let line = Line { bit: 10.4, parity: Parity::Even, stop_bits: 1, lead_bits: 2.0, tail_bits: 1.5 };
        let mut events = Vec::new();
        let end = line.message(2, 50, 100.0, &mut Dice::new(5, 5), &mut events);
        assert!((end - (100.0 + (2.0 + 50.0 * 11.0 + 1.5) * 10.4)).abs() < 1e-6);
        assert_eq!(events.last(), Some(&Event { at: end, state: IDLE }));
        let mut dice = Dice::new(5, 5);
        for character in 0..50 {
            let start = 100.0 + (2.0 + f64::from(character) * 11.0) * 10.4;
            let bit =
                |place: u8| level(&events, start + (f64::from(place) + 0.5) * 10.4) == state_of(2, true);
            let byte = (0..8).fold(0, |byte, place| byte | u8::from(bit(place + 1)) << place);
            assert!(!bit(0) && bit(10), "start and stop of character {character}");
            assert_eq!(byte, (dice.next() >> 56) as u8);
            let ones = byte.count_ones() + u32::from(bit(9));
            assert_eq!(ones % 2, 0, "even parity");
        }
    }

    fn scenario(rest: &str) -> Scenario {
        let text = format!(
            "title = \"t\"\ndescription = \"d\"\nreceiver = \"tia485a\"\n\
             [[nodes]]\nname = \"panel\"\ndriver = {{}}\n[[nodes]]\nname = \"oven\"\ndriver = {{}}\n\
             [traffic.uart]\n\nbaud = 19200.0\nmaster = \"panel\"\n{rest}"
        );
        Scenario::from_toml(&text).unwrap()
    }

    #[test]
    fn silent_slave_costs_the_timeout_and_nobody_else_speaks() {
        let rest = "timeout_ms = 500.0\npolls = [{ slave = \"oven\", answers = 0.0 }]";
        let mut uart = Uart::new(&scenario(rest), 1, Dice::new(1, 1)).unwrap();
        let mut events = Vec::new();
        uart.extend(2e6, &mut events);
        assert!(events.iter().all(|event| event.state <= state_of(0, true)));
        assert_eq!(uart.counts().answered, 0);
        // One question each 500 + 20 ms + 82 bits of 52 us, in 10 s.
        let expected = 10.0 / (0.520 + 82.0 / 19200.0);
        assert!((uart.counts().asked as f64 - expected).abs() <= 1.0, "{:?}", uart.counts());
    }

    #[test]
    fn master_is_quiet_during_a_stall() {
        let rest = "polls = [{ slave = \"oven\" }]\nstalls = { from_s = 1.0, for_s = 0.5, every_s = 2.0 }";
        let mut uart = Uart::new(&scenario(rest), 1, Dice::new(1, 1)).unwrap();
        let mut events = Vec::new();
        uart.extend(2e6, &mut events);
        assert!(events.windows(2).all(|pair| pair[0].at <= pair[1].at));
        for second in [1.0, 3.0, 5.0, 7.0] {
            // An exchange begun just before the stall may run 25 ms into it.
            let quiet = (second + 0.03) * 200e3..(second + 0.5) * 200e3;
            assert!(!events.iter().any(|event| quiet.contains(&event.at)), "stall at {second} s");
            let busy = (second + 0.5) * 200e3..(second + 0.6) * 200e3;
            assert!(events.iter().any(|event| busy.contains(&event.at)), "after the stall at {second} s");
        }
    }
}
