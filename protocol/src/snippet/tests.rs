//! Rice codes against hand-worked codes and a reference stream; blocks against themselves and against size limits.
#![allow(clippy::unwrap_used)]

extern crate std;

use super::*;
use serde_json::Value;
use std::vec::Vec;

fn stream_hex(values: &[i64], k: u32, width: u32) -> ([u8; 256], usize) {
    let mut output = [0xAA; 256];
    let mut bits = BitWriter { output: &mut output, used_bits: 0 };
    for &value in values {
        Code { k, width }.put(zigzag(value), &mut bits).unwrap();
    }
    let used = bits.used_bits;
    (output, used)
}

#[test]
fn rice_codes_match_the_published_rule() {
    // Worked by hand from Rice 1979 / CCSDS 121.0-B: unary ones, terminator 0, k low bits.
    for (value, k, code, length) in [
        (0, 2, 0b000, 3),
        (5, 2, 0b11010, 5),
        (-3, 2, 0b1001, 4),
        (18, 3, 0b1111_0100, 8),
        (-18, 3, 0b1111_0011, 8),
    ] {
        let (bytes, used) = stream_hex(&[value], k, 14);
        assert_eq!(used, length, "{value}");
        assert_eq!(bytes[0] >> (8 - length), code, "{value}");
    }
}

fn round_trip(a: &[i32], b: &[i32]) -> usize {
    let mut output = [0xAA; BLOCK_BYTES];
    let used = encode_block(a, b, &mut output).unwrap();
    let (mut left, mut right) = ([0; BLOCK_PAIRS], [0; BLOCK_PAIRS]);
    assert_eq!(decode_block(&output[..used], &mut left, &mut right), Ok((a.len(), used)));
    assert_eq!((&left[..a.len()], &right[..b.len()]), (a, b));
    used
}

#[test]
fn extreme_codes_survive_and_fit_the_stated_maximum() {
    let zigzagging: [i32; 64] = core::array::from_fn(|n| if n % 2 == 0 { i32::MAX } else { i32::MIN });
    let opposite: [i32; 64] = core::array::from_fn(|n| if n % 3 == 0 { i32::MIN } else { i32::MAX });
    for (a, b) in [(zigzagging, opposite), (zigzagging, zigzagging), (opposite, zigzagging)] {
        assert!(round_trip(&a, &b) <= BLOCK_BYTES);
    }
    round_trip(&[5], &[-5]);
    round_trip(&[0; 64], &[0; 64]);
}

#[test]
fn a_quiet_pair_takes_few_bits() {
    let a: [i32; 64] = core::array::from_fn(|n| 2048 + (n as i32 * 7 % 3) - 1);
    let b: [i32; 64] = core::array::from_fn(|n| 2040 + (n as i32 * 5 % 3) - 1);
    let used = round_trip(&a, &b);
    assert!(used * 8 <= 64 * 2 * 4, "{used} bytes for 64 pairs");
}

#[test]
fn truncated_blocks_are_refused() {
    let mut output = [0; BLOCK_BYTES];
    let used = encode_block(&[1, 200, -3], &[9, 8, 7], &mut output).unwrap();
    let (mut a, mut b) = ([0; BLOCK_PAIRS], [0; BLOCK_PAIRS]);
    for length in 0..used {
        assert_eq!(decode_block(&output[..length], &mut a, &mut b), Err(BlockError::Truncated));
    }
    assert_eq!(encode_block(&[], &[], &mut output), None);
    assert_eq!(encode_block(&[1; 65], &[1; 65], &mut output), None);
    assert_eq!(encode_block(&[1; 9], &[1; 9], &mut output[..3]), None);
}

/// `tests/vectors/rice.json`: 64 pairs of bus traffic, streams made by an independent implementation
/// (`rice_block` of the vector script: escape after 8 ones, 14 raw bits, shortest k).
fn reference() -> Value {
    serde_json::from_str(include_str!("../../../tests/vectors/rice.json")).unwrap()
}

fn numbers(value: &Value) -> Vec<i64> {
    value.as_array().unwrap().iter().map(|number| number.as_i64().unwrap()).collect()
}

fn bytes_of(hex: &str) -> Vec<u8> {
    (0..hex.len()).step_by(2).map(|at| u8::from_str_radix(&hex[at..at + 2], 16).unwrap()).collect()
}

#[test]
fn streams_are_those_of_the_reference() {
    let reference = reference();
    assert_eq!(reference["escape_quotient"].as_u64(), Some(ESCAPE_QUOTIENT));
    let width = reference["escape_raw_bits"].as_u64().unwrap() as u32;
    for (differences, k, bits, hex) in [
        ("dmid", "k_mid", "bits_mid", "hex_mid_msb_first"),
        ("ddiff", "k_diff", "bits_diff", "hex_diff_msb_first"),
    ] {
        let values = numbers(&reference[differences]);
        let k = reference[k].as_u64().unwrap() as u32;
        let stream = bytes_of(reference[hex].as_str().unwrap());
        let (ours, used_bits) = stream_hex(&values, k, width);
        assert_eq!(used_bits as u64, reference[bits].as_u64().unwrap());
        assert_eq!(ours[..used_bits.div_ceil(8)], stream);

        let mut bits = BitReader { input: &stream, used_bits: 0 };
        let code = Code { k, width };
        assert!(values.iter().all(|&value| unzigzag(code.take(&mut bits).unwrap()) == value));
        assert_eq!(bits.used_bits, used_bits);

        let zigzags: Vec<u64> = values.iter().map(|&value| zigzag(value)).collect();
        assert_eq!(Code::choose(&zigzags).k, k, "{differences}: not the shortest k");
    }
}

#[test]
fn a_block_holds_the_reference_streams_behind_its_header() {
    let reference = reference();
    let codes =
        |leg: &str| -> Vec<i32> { numbers(&reference[leg]).iter().map(|&code| code as i32).collect() };
    let mut output = [0xAA; BLOCK_BYTES];
    let used = encode_block(&codes("a"), &codes("b"), &mut output).unwrap();
    let mut block = BitReader { input: &output[..used], used_bits: HEADER_BITS };
    for (k, bits, hex) in
        [("k_mid", "bits_mid", "hex_mid_msb_first"), ("k_diff", "bits_diff", "hex_diff_msb_first")]
    {
        // The reference starts with a difference of 0 to the first sample itself: a zero and k zeros.
        let first_bits = 1 + reference[k].as_u64().unwrap() as usize;
        let stream = bytes_of(reference[hex].as_str().unwrap());
        let mut expected = BitReader { input: &stream, used_bits: first_bits };
        for _ in first_bits as u64..reference[bits].as_u64().unwrap() {
            assert_eq!(block.take(1), expected.take(1));
        }
    }
    assert_eq!(block.used_bits.div_ceil(8), used);
}

/// The search stops just above the k of the mean: nothing shorter lies beyond.
#[test]
fn no_other_k_makes_a_shorter_stream() {
    let mut state = 1_u64;
    let mut random = move || {
        state = state.wrapping_mul(6_364_136_223_846_793_005).wrapping_add(1_442_695_040_888_963_407);
        state >> 30
    };
    for round in 0..20_000 {
        let (small, large) = (random() % 33, random() % 35);
        let values: [u64; 63] = core::array::from_fn(|n| {
            let bits = if (n as u64).is_multiple_of(1 + round % 40) { large } else { small };
            random() & ((1 << bits) - 1)
        });
        let code = Code::choose(&values);
        let shortest = (0..=30).map(|k| Code { k, ..code }.stream_bits(&values)).min().unwrap();
        let raw_bits = 63 * u64::from(code.width);
        let chosen_bits = if code.k == RAW { raw_bits } else { code.stream_bits(&values) };
        assert_eq!(chosen_bits, shortest.min(raw_bits), "k {} width {}", code.k, code.width);
    }
}
