//! Nodes that send frames of the CAN kind: dominant bits are driven, recessive ones left alone.
//!
//! Base-format data frame (Bosch, *CAN Specification 2.0*, part A): start bit, 11 identifier bits,
//! RTR, IDE, r0, four length bits, data, CRC-15 (polynomial 0x4599), each after five equal bits
//! followed by a stuff bit; then CRC delimiter, acknowledge slot, its delimiter, seven recessive end
//! bits and three of intermission. The acknowledge bit is driven by another node, so the pair visits
//! that node's ground for one bit.

use super::{Pen, index_of};
use crate::line::error::ScenarioError;
use crate::line::follower::Event;
use crate::line::random::Dice;
use crate::line::scenario::{Scenario, Traffic};

/// Frames that are sent again and again.
#[derive(Clone, Debug)]
pub(crate) struct Can {
    bit: f64,
    senders: Vec<Sender>,
    dice: Dice,
    free_at: f64,
}

#[derive(Clone, Debug)]
struct Sender {
    node: usize,
    /// A node that acknowledges; none on a bus with one driver.
    listener: Option<usize>,
    identifier: u16,
    bytes: u16,
    every: f64,
    scatter: f64,
    /// Number of the next frame and when it is due.
    number: u64,
    due: f64,
}

impl Can {
    /// The frames of a scenario with can traffic.
    pub fn new(scenario: &Scenario, mut dice: Dice) -> Result<Self, ScenarioError> {
        let Traffic::Can { bit_rate_hz, frames } = &scenario.traffic else {
            return Err(ScenarioError::value("traffic", "..", "it is not can traffic", "[traffic.can]"));
        };
        let per_ms = scenario.sample_rate_hz * 1e-3;
        let mut senders = Vec::new();
        for (place, frame) in frames.iter().enumerate() {
            let node = index_of(scenario, "traffic.can.frames", &frame.node)?;
            let mut others = scenario.nodes.iter().enumerate();
            let listener = others.find(|(index, other)| *index != node && other.driver.is_some());
            senders.push(Sender {
                node,
                listener: listener.map(|(index, _)| index),
                identifier: 0x100 + place as u16,
                bytes: frame.bytes,
                every: frame.every_ms * per_ms,
                scatter: frame.scatter_ms * per_ms,
                number: 0,
                due: frame.scatter_ms * per_ms * dice.unit(),
            });
        }
        Ok(Self { bit: scenario.sample_rate_hz / bit_rate_hz, senders, dice, free_at: 0.0 })
    }

    /// Appends whole frames until all events before `until` (samples) are there.
    pub fn extend(&mut self, until: f64, events: &mut Vec<Event>) {
        // The lowest identifier (first in the list) wins among those that are due by then.
        while let Some(earliest) = self.senders.iter().map(|sender| sender.due).reduce(f64::min) {
            let start = earliest.max(self.free_at);
            if start >= until {
                break;
            }
            let Some(sender) = self.senders.iter_mut().find(|sender| sender.due <= start) else {
                break;
            };
            sender.number += 1;
            sender.due = sender.number as f64 * sender.every + sender.scatter * self.dice.unit();
            let data: Vec<u8> = (0..sender.bytes).map(|_| (self.dice.next() >> 56) as u8).collect();
            let mut pen = Pen::new(events, start);
            for bit in stuffed(&frame_bits(sender.identifier, &data)) {
                if bit {
                    pen.release(self.bit);
                } else {
                    pen.drive(sender.node, true, self.bit);
                }
            }
            pen.release(self.bit);
            match sender.listener {
                Some(listener) => pen.drive(listener, true, self.bit),
                None => pen.release(self.bit),
            }
            pen.release(11.0 * self.bit);
            self.free_at = pen.at;
        }
    }
}

/// The bits of a frame from its start bit to the end of its CRC, before stuffing; recessive is true.
fn frame_bits(identifier: u16, data: &[u8]) -> Vec<bool> {
    let mut bits = vec![false];
    let mut put = |value: u32, count: u32| bits.extend((0..count).rev().map(|place| value >> place & 1 == 1));
    put(u32::from(identifier), 11);
    put(0, 3);
    put(data.len() as u32, 4);
    for &byte in data {
        put(u32::from(byte), 8);
    }
    let crc = crc15(&bits);
    bits.extend((0..15).rev().map(|place| crc >> place & 1 == 1));
    bits
}

/// CRC-15 of a bit sequence.
fn crc15(bits: &[bool]) -> u16 {
    bits.iter().fold(0, |crc, &bit| {
        let shifted = crc << 1 & 0x7fff;
        if bit != (crc >> 14 & 1 == 1) { shifted ^ 0x4599 } else { shifted }
    })
}

/// Puts the opposite bit after every five equal ones.
fn stuffed(bits: &[bool]) -> Vec<bool> {
    let mut sent = Vec::with_capacity(bits.len() * 5 / 4 + 1);
    let mut run = 0;
    for &bit in bits {
        run = if sent.last() == Some(&bit) { run + 1 } else { 1 };
        sent.push(bit);
        if run == 5 {
            sent.push(!bit);
            run = 1;
        }
    }
    sent
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::line::responses::{IDLE, state_of};

    /// Check value of CRC-15/CAN over "123456789": 0x059e (Cook, Catalogue of parametrised CRC
    /// algorithms).
    #[test]
    fn crc_meets_the_catalogue() {
        let bits: Vec<bool> = b"123456789"
            .iter()
            .flat_map(|byte| (0..8).rev().map(move |place| byte >> place & 1 == 1))
            .collect();
        assert_eq!(crc15(&bits), 0x059e);
    }

    #[test]
    fn destuffing_gives_the_frame_back_and_no_run_exceeds_five() {
        let mut dice = Dice::new(1, 2);
        for _ in 0..200 {
            let data: Vec<u8> =
                (0..8).map(|_| [0, 0xff, dice.next() as u8][dice.between(0, 2) as usize]).collect();
            let plain = frame_bits(0x3f, &data);
            let sent = stuffed(&plain);
            assert!(sent.windows(6).all(|six| six.iter().any(|&bit| bit != six[0])));
            let mut back = Vec::new();
            let mut index = 0;
            let mut run = 0;
            while index < sent.len() {
                let bit = sent[index];
                run = if index > 0 && sent[index - 1] == bit { run + 1 } else { 1 };
                back.push(bit);
                index += 1;
                if run == 5 {
                    run = 1;
                    index += 1;
                }
            }
            assert_eq!(back, plain);
        }
    }

    #[test]
    fn frames_come_in_turn_and_are_acknowledged_by_another_node() {
        let text = r#"
title = "t"
description = "d"
receiver = "can-2003"
[[nodes]]
name = "pump"
driver = { kind = "dominant-only" }
[[nodes]]
name = "valve"
driver = { kind = "dominant-only" }
[traffic.can]
bit_rate_hz = 20e3
frames = [{ node = "pump", every_ms = 10.0 }, { node = "valve", every_ms = 10.0 }]
"#;
        let scenario = Scenario::from_toml(text).unwrap();
        let mut can = Can::new(&scenario, Dice::new(4, 4)).unwrap();
        let mut events = Vec::new();
        can.extend(200e3, &mut events);
        assert!(events.windows(2).all(|pair| pair[0].at < pair[1].at && pair[0].state != pair[1].state));
        let driven = |node: usize| events.iter().filter(|event| event.state == state_of(node, true)).count();
        assert!(driven(0) > 1000 && driven(1) > 1000);
        assert!(
            events
                .iter()
                .all(|event| { [IDLE, state_of(0, true), state_of(1, true)].contains(&event.state) })
        );
    }
}
