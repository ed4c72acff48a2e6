//! Messages to bytes.
//!
//! ```text
//!  postcard( Envelope, Message )        device to host        postcard( Request )   host to device
//!  + CRC-32/ISO-HDLC of that, 4 bytes little-endian
//!  then COBS over both, then one 0x00
//! ```
//!
//! CRC parameters: Cook, *Catalogue of parametrised CRC algorithms*, CRC-32/ISO-HDLC. COBS: Cheshire
//! and Baker, *Consistent overhead byte stuffing*, IEEE/ACM Trans. Networking 7(2), 1999. Both come
//! from well-kept crates; this file only puts them in order. Taking frames apart: [`crate::decoder`].

use crate::command::Request;
use crate::message::Message;
use crate::stuffing::{self, copy};
use core::fmt;
use crc::{CRC_32_ISO_HDLC, Crc, Table};
use postcard::experimental::max_size::MaxSize;
use serde::{Deserialize, Serialize};

/// Bytes of input the checksum takes at a time: each costs 1 KiB of table, scarce on a board.
const LANES: usize = if cfg!(target_os = "none") { 1 } else { 16 };
/// The checksum of a frame body.
pub(crate) static CRC: Crc<u32, Table<LANES>> = Crc::<u32, Table<LANES>>::new(&CRC_32_ISO_HDLC);
/// Bytes of the checksum.
pub const CRC_BYTES: usize = 4;
/// The byte that ends a frame and occurs nowhere inside it.
pub const DELIMITER: u8 = 0;

/// How a message travels.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize, MaxSize)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum Delivery {
    /// Sent once; a loss shows in the sequence numbers.
    Passing,
    /// Held until acknowledged; sent again after a reconnect.
    Kept {
        /// Counts kept messages since the boot, from 1. The same each time it is sent.
        number: u32,
    },
}

/// What precedes every message.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize, MaxSize)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Envelope {
    /// Drawn at each start of the device: a change means a restart.
    pub boot_id: u32,
    /// Counts every frame sent since the boot, repeats included; wraps.
    pub sequence: u32,
    /// Pairs the source had delivered when the message was made: the device's clock.
    pub sample: u64,
    /// How the message travels.
    pub delivery: Delivery,
}

/// A message with its envelope: one device-to-host frame.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize, MaxSize)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct DeviceFrame {
    /// Who, when, which.
    pub envelope: Envelope,
    /// What.
    pub message: Message,
}

/// Longest COBS form of `bytes` bytes plus the delimiter (Cheshire and Baker: one byte per 254, at least one).
/// Saturates.
pub const fn longest_encoding(bytes: usize) -> usize {
    bytes.saturating_add(bytes.div_ceil(254)).saturating_add(if bytes == 0 { 2 } else { 1 })
}

/// Longest body of a device frame: envelope, message, checksum.
pub const DEVICE_BODY_BYTES: usize = DeviceFrame::POSTCARD_MAX_SIZE + CRC_BYTES;
/// Longest device frame on the wire, delimiter included.
pub const DEVICE_FRAME_BYTES: usize = longest_encoding(DEVICE_BODY_BYTES);
/// Longest body of a request.
pub const REQUEST_BODY_BYTES: usize = Request::POSTCARD_MAX_SIZE + CRC_BYTES;
/// Longest request on the wire, delimiter included.
pub const REQUEST_FRAME_BYTES: usize = longest_encoding(REQUEST_BODY_BYTES);
/// Longest message without its envelope.
pub const MESSAGE_BYTES: usize = Message::POSTCARD_MAX_SIZE;
/// Longest envelope.
pub const ENVELOPE_BYTES: usize = Envelope::POSTCARD_MAX_SIZE;

/// Why a frame could not be written.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum EncodeError {
    /// The output holds `available` bytes; up to `needed` may be required.
    OutputTooSmall {
        /// Bytes that always suffice.
        needed: usize,
        /// Bytes given.
        available: usize,
    },
}

impl fmt::Display for EncodeError {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        match self {
            Self::OutputTooSmall { needed, available } => {
                write!(f, "could not encode: {available} bytes given, {needed} always suffice")
            }
        }
    }
}

impl core::error::Error for EncodeError {}

/// The postcard form of a message alone, without envelope: what an outbox stores.
///
/// # Errors
/// When `output` is too small; [`MESSAGE_BYTES`] always suffice.
pub fn encode_message<'a>(message: &Message, output: &'a mut [u8]) -> Result<&'a [u8], EncodeError> {
    let available = output.len();
    match postcard::to_slice(message, output) {
        Ok(used) => Ok(used),
        Err(_) => Err(EncodeError::OutputTooSmall { needed: MESSAGE_BYTES, available }),
    }
}

/// A device frame from an envelope and an encoded message, delimiter included. Returns the bytes used.
///
/// # Errors
/// When `output` is too small; [`DEVICE_FRAME_BYTES`] always suffice.
pub fn frame_message(envelope: &Envelope, message: &[u8], output: &mut [u8]) -> Result<usize, EncodeError> {
    let available = output.len();
    let error = EncodeError::OutputTooSmall { needed: DEVICE_FRAME_BYTES, available };
    let mut body = [0; DEVICE_BODY_BYTES];
    let used = postcard::to_slice(envelope, &mut body).map_err(|_| error)?.len();
    let end = used + message.len();
    copy(message, body.get_mut(used..end).ok_or(error)?);
    seal(&mut body, end, output).ok_or(error)
}

/// A whole device frame, delimiter included. Returns the bytes used.
///
/// # Errors
/// When `output` is too small; [`DEVICE_FRAME_BYTES`] always suffice.
pub fn encode_device_frame(frame: &DeviceFrame, output: &mut [u8]) -> Result<usize, EncodeError> {
    let mut body = [0; MESSAGE_BYTES];
    let message = encode_message(&frame.message, &mut body)?;
    frame_message(&frame.envelope, message, output)
}

/// A request frame, delimiter included. Returns the bytes used.
///
/// # Errors
/// When `output` is too small; [`REQUEST_FRAME_BYTES`] always suffice.
pub fn encode_request(request: &Request, output: &mut [u8]) -> Result<usize, EncodeError> {
    let error = EncodeError::OutputTooSmall { needed: REQUEST_FRAME_BYTES, available: output.len() };
    let mut body = [0; REQUEST_BODY_BYTES];
    let used = postcard::to_slice(request, &mut body).map_err(|_| error)?.len();
    seal(&mut body, used, output).ok_or(error)
}

/// Appends the checksum to the first `used` bytes of `body`, stuffs both, ends with the delimiter.
fn seal(body: &mut [u8], used: usize, output: &mut [u8]) -> Option<usize> {
    let checksum = CRC.checksum(body.get(..used)?).to_le_bytes();
    let end = used + CRC_BYTES;
    copy(&checksum, body.get_mut(used..end)?);
    let body = body.get(..end)?;
    if output.len() < longest_encoding(body.len()) {
        return None;
    }
    let stuffed = stuffing::encode(body, output)?;
    *output.get_mut(stuffed)? = DELIMITER;
    Some(stuffed + 1)
}
