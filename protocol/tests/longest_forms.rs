//! The stated maxima are reached and never passed, and they are known at compile time.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

mod specimens;

use legwise_protocol::command::Request;
use legwise_protocol::framing::*;
use legwise_protocol::message::PAYLOAD_BYTES;
use legwise_protocol::snippet::{self, BLOCK_BYTES, BLOCK_PAIRS, longest_block_bytes};
use postcard::experimental::max_size::MaxSize;

const _: () = {
    assert!(DEVICE_BODY_BYTES == ENVELOPE_BYTES + MESSAGE_BYTES + CRC_BYTES);
    assert!(DEVICE_FRAME_BYTES == 469 && REQUEST_FRAME_BYTES == 47);
    // A whole block of codes up to 22 bits fits one message: every converter below 23 bits.
    assert!(longest_block_bytes(22, BLOCK_PAIRS) <= PAYLOAD_BYTES);
    assert!(longest_block_bytes(23, BLOCK_PAIRS) > PAYLOAD_BYTES);
    assert!(longest_block_bytes(32, BLOCK_PAIRS) == BLOCK_BYTES);
    // Half a block of any codes does.
    assert!(longest_block_bytes(32, BLOCK_PAIRS / 2) <= PAYLOAD_BYTES);
};

#[test]
fn longest_messages_reach_the_maximum_of_their_type() {
    let mut buffer = [0; MESSAGE_BYTES];
    let lengths = specimens::longest_messages()
        .iter()
        .map(|message| encode_message(message, &mut buffer).unwrap().len())
        .max();
    assert_eq!(lengths, Some(MESSAGE_BYTES));
    assert_eq!(
        postcard::to_slice(&specimens::longest_envelope(), &mut buffer).unwrap().len(),
        ENVELOPE_BYTES
    );
}

#[test]
fn longest_commands_reach_the_maximum_of_their_type() {
    let mut buffer = [0; REQUEST_BODY_BYTES];
    let request = |command| Request { sequence: u32::MAX, command };
    let lengths = specimens::longest_commands()
        .into_iter()
        .map(|command| postcard::to_slice(&request(command), &mut buffer).unwrap().len())
        .max();
    assert_eq!(lengths, Some(Request::POSTCARD_MAX_SIZE));
    assert_eq!(Request::POSTCARD_MAX_SIZE + CRC_BYTES, REQUEST_BODY_BYTES);
}

#[test]
fn every_longest_frame_fits_the_stated_buffer_and_one_byte_less_is_refused() {
    for message in specimens::longest_messages() {
        let frame = DeviceFrame { envelope: specimens::longest_envelope(), message };
        let used = encode_device_frame(&frame, &mut [0; DEVICE_FRAME_BYTES]).unwrap();
        assert!(used <= DEVICE_FRAME_BYTES);
        let error = encode_device_frame(&frame, &mut vec![0; used - 1]).unwrap_err();
        assert_eq!(error, EncodeError::OutputTooSmall { needed: DEVICE_FRAME_BYTES, available: used - 1 });
    }
    for command in specimens::longest_commands() {
        let request = Request { sequence: u32::MAX, command };
        let used = encode_request(&request, &mut [0; REQUEST_FRAME_BYTES]).unwrap();
        assert!(encode_request(&request, &mut vec![0; used - 1]).is_err());
    }
}

#[test]
fn a_message_too_long_for_a_frame_is_refused() {
    let envelope = specimens::longest_envelope();
    for length in [MESSAGE_BYTES + 1, MESSAGE_BYTES + CRC_BYTES, 10 * DEVICE_FRAME_BYTES] {
        assert!(
            frame_message(&envelope, &vec![1; length], &mut [0; 2 * DEVICE_FRAME_BYTES]).is_err(),
            "{length}"
        );
    }
}

/// Cheshire and Baker 1999: one byte, and one more for each further 254 begun. Against the crate in use.
#[test]
fn longest_encoding_is_the_true_maximum_and_saturates() {
    let mut stuffed = [0; 1600];
    for length in 0..1500 {
        let used = cobs::try_encode(&vec![1; length], &mut stuffed).unwrap();
        assert_eq!(used + 1, longest_encoding(length), "{length}");
    }
    assert_eq!(longest_encoding(usize::MAX), usize::MAX);
    assert_eq!(longest_block_bytes(usize::MAX, usize::MAX), usize::MAX.div_ceil(8));
}

/// Both legs jump together, then apart, from rail to rail: the widest differences of mid and side.
/// Up to 22 bits, where the bound decides what fits a message, no k beats raw and it is reached to the
/// byte; beyond, the zeros between the jumps let escapes beat raw.
#[test]
fn the_longest_block_is_reached_for_code_widths_that_fit_and_never_passed() {
    for code_bits in 2..=32_u32 {
        let (low, high) = (i32::MIN >> (32 - code_bits), i32::MAX >> (32 - code_bits));
        let leg_a: [i32; BLOCK_PAIRS] = core::array::from_fn(|n| [low, high, low, high][n % 4]);
        let leg_b: [i32; BLOCK_PAIRS] = core::array::from_fn(|n| [low, high, high, low][n % 4]);
        let mut output = [0; BLOCK_BYTES];
        let used = snippet::encode_block(&leg_a, &leg_b, &mut output).unwrap();
        let longest = longest_block_bytes(code_bits as usize, BLOCK_PAIRS);
        assert!(
            if code_bits <= 22 { used == longest } else { used < longest },
            "{code_bits} bits: {used} of {longest}"
        );
    }
}
