//! Bytes to messages: a decoder that takes any bytes in any pieces.
//!
//! ```text
//!            byte != 0                 byte == 0, body sound
//!          +-----------+              +--------------------> hand the body on
//!          v           |              |
//!      +-----------------+   byte == 0, body damaged
//!      |    Collecting   |----------------------------------> count it, start afresh
//!      +-----------------+
//!          | buffer full                    ^
//!          v                                | byte == 0 (counted once)
//!      +-----------------+                  |
//!      |    Skipping     |------------------+
//!      +-----------------+
//! ```
//!
//! Memory is the buffer `N` and nothing else. A damaged frame costs itself only, and its neighbour
//! where the delimiter between them was hit: the decoder is in step again at the next delimiter.

use crate::command::{Command, Request};
use crate::framing::{
    CRC, CRC_BYTES, DELIMITER, DEVICE_FRAME_BYTES, DeviceFrame, Envelope, REQUEST_FRAME_BYTES,
};
use crate::message::Message;
use crate::stuffing::{self, copy};

/// What a decoder has seen and dropped. Counts saturate.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct DecoderCounts {
    /// Frames with a sound checksum.
    pub sound_frames: u64,
    /// Frames dropped because stuffing or checksum was wrong.
    pub damaged_frames: u64,
    /// Frames dropped because they were longer than any frame may be.
    pub oversize_frames: u64,
    /// Sound frames whose content this version does not know.
    pub unknown_frames: u64,
    /// Bytes in all dropped frames, delimiters left out.
    pub dropped_bytes: u64,
}

/// Collects bytes into frame bodies. `N` is the longest frame on the wire.
#[derive(Clone, Debug)]
pub struct Decoder<const N: usize> {
    buffer: [u8; N],
    used: usize,
    is_skipping: bool,
    counts: DecoderCounts,
}

/// The host's decoder.
pub type DeviceDecoder = Decoder<DEVICE_FRAME_BYTES>;
/// The device's decoder.
pub type RequestDecoder = Decoder<REQUEST_FRAME_BYTES>;

impl<const N: usize> Decoder<N> {
    /// An empty decoder.
    pub const fn new() -> Self {
        Self {
            buffer: [0; N],
            used: 0,
            is_skipping: false,
            counts: DecoderCounts {
                sound_frames: 0,
                damaged_frames: 0,
                oversize_frames: 0,
                unknown_frames: 0,
                dropped_bytes: 0,
            },
        }
    }

    /// What has been seen and dropped so far.
    pub const fn counts(&self) -> DecoderCounts {
        self.counts
    }

    /// Drops a half-received frame without counting it as damage: for use after a reconnect.
    pub fn restart(&mut self) {
        self.used = 0;
        self.is_skipping = false;
    }

    /// Takes `bytes`; calls `take` with the body of every sound frame (checksum removed), in order.
    pub fn feed(&mut self, bytes: &[u8], mut take: impl FnMut(&[u8])) {
        let mut rest = bytes;
        while let Some(end) = rest.iter().position(|&byte| byte == DELIMITER) {
            let (piece, after) = rest.split_at(end);
            self.collect(piece);
            self.finish(&mut take);
            rest = after.get(1..).unwrap_or(&[]);
        }
        self.collect(rest);
    }

    fn collect(&mut self, piece: &[u8]) {
        let end = self.used.saturating_add(piece.len());
        match self.buffer.get_mut(self.used..end) {
            Some(slot) if !self.is_skipping => {
                copy(piece, slot);
                self.used = end;
            }
            _ => {
                if !self.is_skipping {
                    self.is_skipping = true;
                    self.counts.oversize_frames = self.counts.oversize_frames.saturating_add(1);
                    self.drop_bytes(self.used);
                    self.used = 0;
                }
                self.drop_bytes(piece.len());
            }
        }
    }

    fn finish(&mut self, take: &mut impl FnMut(&[u8])) {
        let used = core::mem::take(&mut self.used);
        if core::mem::take(&mut self.is_skipping) || used == 0 {
            return;
        }
        if let Some(body) = unstuff(self.buffer.get_mut(..used).unwrap_or(&mut [])) {
            self.counts.sound_frames = self.counts.sound_frames.saturating_add(1);
            take(body);
        } else {
            self.counts.damaged_frames = self.counts.damaged_frames.saturating_add(1);
            self.drop_bytes(used);
        }
    }

    fn drop_bytes(&mut self, bytes: usize) {
        self.counts.dropped_bytes = self.counts.dropped_bytes.saturating_add(bytes as u64);
    }

    fn count_unknown(&mut self, unknown: u64) {
        self.counts.unknown_frames = self.counts.unknown_frames.saturating_add(unknown);
    }
}

impl<const N: usize> Default for Decoder<N> {
    fn default() -> Self {
        Self::new()
    }
}

impl DeviceDecoder {
    /// Takes `bytes`; calls `take` with every frame that is sound and known, in order.
    ///
    /// A reader that acknowledges uses [`Self::feed_envelopes`]: the number of a kept message must
    /// count even where its content is from a later version.
    pub fn feed_frames(&mut self, bytes: &[u8], mut take: impl FnMut(DeviceFrame)) {
        self.feed_envelopes(bytes, |envelope, message| {
            if let Some(message) = message {
                take(DeviceFrame { envelope, message });
            }
        });
    }

    /// Takes `bytes`; calls `take` with the envelope of every sound frame, in order, and with its
    /// message where this version knows it.
    ///
    /// Frames with an unknown message, or whose very envelope is unknown (then without a call),
    /// are counted as unknown.
    pub fn feed_envelopes(&mut self, bytes: &[u8], mut take: impl FnMut(Envelope, Option<Message>)) {
        let mut unknown = 0;
        self.feed(bytes, |body| match postcard::take_from_bytes(body) {
            Ok((envelope, rest)) => {
                let message = postcard::from_bytes(rest).ok();
                unknown += u64::from(message.is_none());
                take(envelope, message);
            }
            Err(_) => unknown += 1,
        });
        self.count_unknown(unknown);
    }
}

impl RequestDecoder {
    /// Takes `bytes`; calls `take` with every request that is sound and known, in order.
    pub fn feed_requests(&mut self, bytes: &[u8], mut take: impl FnMut(Request)) {
        self.feed_sequences(bytes, |sequence, command| {
            if let Some(command) = command {
                take(Request { sequence, command });
            }
        });
    }

    /// Takes `bytes`; calls `take` with the sequence number of every sound request, in order, and
    /// with its command where this version knows it (where not: the answer is
    /// [`crate::message::Outcome::Unsupported`]).
    ///
    /// Requests with an unknown command, or without a readable number (then without a call), are
    /// counted as unknown.
    pub fn feed_sequences(&mut self, bytes: &[u8], mut take: impl FnMut(u32, Option<Command>)) {
        let mut unknown = 0;
        self.feed(bytes, |body| match postcard::take_from_bytes(body) {
            Ok((sequence, rest)) => {
                let command = postcard::from_bytes(rest).ok();
                unknown += u64::from(command.is_none());
                take(sequence, command);
            }
            Err(_) => unknown += 1,
        });
        self.count_unknown(unknown);
    }
}

/// The body of a stuffed frame, checksum verified and removed.
fn unstuff(frame: &mut [u8]) -> Option<&[u8]> {
    let length = stuffing::decode_in_place(frame)?;
    let (body, checksum) = frame.get(..length)?.split_last_chunk::<CRC_BYTES>()?;
    (CRC.checksum(body) == u32::from_le_bytes(*checksum)).then_some(body)
}
