//! Byte streams with damage in them, and a plain model of what a decoder must make of them.
//!
//! The model knows the frames that were sent as byte strings. It cuts the stream at its zeros: a
//! piece that *is* a sent frame must come out, once and in its place; every other piece is damaged or,
//! past the longest length, oversize. It checks no checksum, so it shares nothing with the decoder. One
//! damaged piece in 2^32 passes the checksum by chance; where the decoder says so, the model looks at
//! the pieces it dropped with the checksum and stuffing written out in these tests.
#![allow(dead_code, reason = "each test file uses its share")]

use crate::{specimens, tables};
use legwise_protocol::bytes::Bytes;
use legwise_protocol::command::Request;
use legwise_protocol::decoder::{DecoderCounts, DeviceDecoder, RequestDecoder};
use legwise_protocol::framing::{
    DEVICE_FRAME_BYTES, DeviceFrame, REQUEST_FRAME_BYTES, encode_device_frame, encode_request,
};
use legwise_protocol::message::Message;
use rand::{Rng, RngExt, SeedableRng};
use rand_chacha::ChaCha8Rng;
use std::collections::HashMap;

/// A decoder for one direction.
pub trait Reader: Default {
    type Item: Clone + PartialEq + std::fmt::Debug;
    const LONGEST: usize;
    fn take(&mut self, bytes: &[u8], take: impl FnMut(Self::Item));
    fn seen(&self) -> DecoderCounts;
    /// Values to send, and their frames.
    fn sent(seed: u64) -> Vec<(Self::Item, Vec<u8>)>;
}

impl Reader for DeviceDecoder {
    type Item = DeviceFrame;
    const LONGEST: usize = DEVICE_FRAME_BYTES;

    fn take(&mut self, bytes: &[u8], take: impl FnMut(DeviceFrame)) {
        self.feed_frames(bytes, take);
    }

    fn seen(&self) -> DecoderCounts {
        self.counts()
    }

    fn sent(seed: u64) -> Vec<(DeviceFrame, Vec<u8>)> {
        let mut rng = ChaCha8Rng::seed_from_u64(seed);
        let envelope = specimens::longest_envelope();
        let longest =
            specimens::longest_messages().into_iter().map(|message| DeviceFrame { envelope, message });
        let few: Vec<DeviceFrame> =
            specimens::device_frames().into_iter().map(|(_, frame)| frame).chain(longest).collect();
        let many = (1..400_u32).map(|round| {
            let mut frame = few[rng.random_range(..few.len())].clone();
            frame.envelope.sequence = round << rng.random_range(0..23);
            frame.envelope.boot_id = round;
            let mut payload = [0; 384];
            rng.fill_bytes(&mut payload);
            let payload = Bytes::from_slice_cut(&payload[..rng.random_range(0..=384)]);
            match &mut frame.message {
                Message::Snippet(snippet) => snippet.blocks = payload,
                Message::Spectrum(spectrum) => spectrum.codes = payload,
                Message::Spectra(spectra) => spectra.codes = payload,
                _ => {}
            }
            frame
        });
        let encode = |frame: DeviceFrame| {
            let mut bytes = [0; DEVICE_FRAME_BYTES];
            let used = encode_device_frame(&frame, &mut bytes).unwrap();
            (frame, bytes[..used].to_vec())
        };
        let many: Vec<DeviceFrame> = many.collect();
        few.into_iter().chain(many).map(encode).collect()
    }
}

impl Reader for RequestDecoder {
    type Item = Request;
    const LONGEST: usize = REQUEST_FRAME_BYTES;

    fn take(&mut self, bytes: &[u8], take: impl FnMut(Request)) {
        self.feed_requests(bytes, take);
    }

    fn seen(&self) -> DecoderCounts {
        self.counts()
    }

    fn sent(_seed: u64) -> Vec<(Request, Vec<u8>)> {
        let longest = specimens::longest_commands()
            .into_iter()
            .map(|command| Request { sequence: u32::MAX - 1, command });
        let few = specimens::requests().into_iter().map(|(_, request)| request);
        few.chain(longest)
            .map(|request| {
                let mut bytes = [0; REQUEST_FRAME_BYTES];
                let used = encode_request(&request, &mut bytes).unwrap();
                (request, bytes[..used].to_vec())
            })
            .collect()
    }
}

/// Makes strings of every kind of damage.
pub struct Damage<'a> {
    frames: Vec<&'a [u8]>,
    longest: usize,
    rng: ChaCha8Rng,
}

impl<'a> Damage<'a> {
    pub fn new<T>(sent: &'a [(T, Vec<u8>)], longest: usize, seed: u64) -> Self {
        let frames = sent.iter().map(|(_, bytes)| bytes.as_slice()).collect();
        Self { frames, longest, rng: ChaCha8Rng::seed_from_u64(seed) }
    }

    fn below(&mut self, bound: usize) -> usize {
        self.rng.random_range(..bound)
    }

    fn frame(&mut self) -> &'a [u8] {
        let index = self.below(self.frames.len());
        self.frames[index]
    }

    /// Replaces `string` by the next one: random, intact or damaged.
    pub fn next(&mut self, string: &mut Vec<u8>) {
        string.clear();
        let kind = self.below(12);
        match kind {
            0 | 1 => {
                string.resize(self.below(self.longest * 4 / 3), 0);
                self.rng.fill_bytes(string);
                if kind == 1 {
                    let zeros = self.rng.random::<u8>();
                    string.iter_mut().filter(|byte| **byte < zeros).for_each(|byte| *byte = 0);
                }
            }
            2..=4 => string.extend_from_slice(self.frame()),
            5 => {
                for _ in 0..=self.below(3) {
                    string.extend_from_slice(self.frame());
                }
            }
            6 => {
                string.resize(self.longest + self.below(2 * self.longest), 0);
                self.rng.fill_bytes(string);
                string.iter_mut().for_each(|byte| *byte |= 1);
                string.push(0);
            }
            _ => {
                string.extend_from_slice(self.frame());
                for _ in 0..=self.below(4) {
                    self.hurt(string, kind);
                }
            }
        }
    }

    fn hurt(&mut self, string: &mut Vec<u8>, kind: usize) {
        let place = self.below(string.len().max(1));
        match kind {
            7 | 8 if !string.is_empty() => string[place] ^= 1 << self.below(8),
            9 => {
                let byte = if self.below(4) == 0 { 0 } else { self.rng.random() };
                string.insert(self.below(string.len() + 1), byte);
            }
            10 if !string.is_empty() => drop(string.remove(place)),
            _ => string.truncate(place),
        }
    }
}

/// What must come out of a stream.
pub struct Model {
    indices: HashMap<Vec<u8>, usize>,
    longest: usize,
    piece: Vec<u8>,
    /// Damaged pieces of the last call of `take`, a zero behind each.
    damaged: Vec<u8>,
    settled: DecoderCounts,
    pub fed_bytes: u64,
    pub zeros: u64,
    pub sound_bytes: u64,
}

impl Model {
    pub fn new<T>(sent: &[(T, Vec<u8>)], longest: usize) -> Self {
        let stuffed =
            |(index, (_, bytes)): (usize, &(T, Vec<u8>))| (bytes[..bytes.len() - 1].to_vec(), index);
        Self {
            indices: sent.iter().enumerate().map(stuffed).collect(),
            longest,
            piece: Vec::new(),
            damaged: Vec::new(),
            settled: DecoderCounts::default(),
            fed_bytes: 0,
            zeros: 0,
            sound_bytes: 0,
        }
    }

    /// Takes bytes; appends to `expected` which of the sent frames must come out.
    pub fn take(&mut self, bytes: &[u8], expected: &mut Vec<usize>) {
        self.fed_bytes += bytes.len() as u64;
        self.damaged.clear();
        let mut pieces = bytes.split(|&byte| byte == 0);
        self.piece.extend_from_slice(pieces.next().unwrap_or_default());
        for piece in pieces {
            self.zeros += 1;
            self.settle(expected);
            self.piece.clear();
            self.piece.extend_from_slice(piece);
        }
    }

    fn settle(&mut self, expected: &mut Vec<usize>) {
        if let Some(&index) = self.indices.get(&self.piece) {
            self.settled.sound_frames += 1;
            self.sound_bytes += self.piece.len() as u64;
            expected.push(index);
        } else if !self.piece.is_empty() {
            self.drop_piece();
        }
    }

    fn drop_piece(&mut self) {
        let counts = &mut self.settled;
        if self.piece.len() > self.longest {
            counts.oversize_frames += 1;
        } else {
            counts.damaged_frames += 1;
            self.damaged.extend_from_slice(&self.piece);
            self.damaged.push(0);
        }
        counts.dropped_bytes += self.piece.len() as u64;
    }

    /// Call when the decoder has counted `unknown_frames` in all: more than before are pieces of the last
    /// [`Self::take`] that passed the checksum by chance, which is verified, and the account put right.
    pub fn settle_chance(&mut self, unknown_frames: u64) {
        if unknown_frames == self.settled.unknown_frames {
            return;
        }
        for piece in self.damaged.split(|&byte| byte == 0).filter(|piece| !piece.is_empty()) {
            let body = tables::unstuff(piece).unwrap_or_default();
            let sound = body
                .split_last_chunk::<4>()
                .is_some_and(|(content, crc)| tables::checksum(content).to_le_bytes() == *crc);
            if sound {
                let counts = &mut self.settled;
                counts.damaged_frames -= 1;
                counts.sound_frames += 1;
                counts.unknown_frames += 1;
                counts.dropped_bytes -= piece.len() as u64;
                self.sound_bytes += piece.len() as u64;
            }
        }
        assert_eq!(self.settled.unknown_frames, unknown_frames, "a damaged frame passed for a sound one");
    }

    /// What the decoder must have counted by now, and the bytes it still holds.
    pub fn counts(&self) -> (DecoderCounts, u64) {
        let mut counts = self.settled;
        if self.piece.len() <= self.longest {
            return (counts, self.piece.len() as u64);
        }
        counts.oversize_frames += 1;
        counts.dropped_bytes += self.piece.len() as u64;
        (counts, 0)
    }
}
