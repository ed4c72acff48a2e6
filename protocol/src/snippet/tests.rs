//! Rice codes against hand-worked codes; blocks against themselves and against size limits.

use super::*;

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
    for (value, k, code, length) in [(0, 2, 0b000, 3), (5, 2, 0b11010, 5), (-3, 2, 0b1001, 4), (18, 3, 0b1111_0100, 8), (-18, 3, 0b1111_0011, 8)]
    {
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
