//! Snippet blocks: lossless for any codes, safe against any bytes, small on bus traffic.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

use legwise_protocol::snippet::{
    BLOCK_BYTES, BLOCK_PAIRS, BlockError, decode_block, encode_block, longest_block_bytes,
};
use proptest::prelude::*;
use proptest::test_runner::RngSeed;
use rand::{Rng, RngExt, SeedableRng};
use rand_chacha::ChaCha8Rng;
use std::f64::consts::TAU;

fn encode(leg_a: &[i32], leg_b: &[i32]) -> Vec<u8> {
    let mut output = [0xA5; BLOCK_BYTES];
    let used = encode_block(leg_a, leg_b, &mut output).unwrap();
    output[..used].to_vec()
}

fn decode(block: &[u8]) -> Result<(Vec<i32>, Vec<i32>, usize), BlockError> {
    let (mut leg_a, mut leg_b) = ([0; BLOCK_PAIRS], [0; BLOCK_PAIRS]);
    let (pairs, used) = decode_block(block, &mut leg_a, &mut leg_b)?;
    Ok((leg_a[..pairs].to_vec(), leg_b[..pairs].to_vec(), used))
}

/// Pairs whose codes use `bits` bits around a base: from constant to full-range noise.
fn pairs() -> impl Strategy<Value = Vec<(i32, i32)>> {
    (0..=32_u32, any::<i32>()).prop_flat_map(|(bits, base)| {
        let code = any::<i32>().prop_map(move |noise| {
            let kept = if bits == 0 { 0 } else { noise >> (32 - bits) };
            base.wrapping_add(kept)
        });
        prop::collection::vec((code.clone(), code), 1..=BLOCK_PAIRS)
    })
}

proptest! {
    #![proptest_config(ProptestConfig { failure_persistence: None, rng_seed: RngSeed::Fixed(1), ..ProptestConfig::with_cases(20_000) })]

    #[test]
    fn any_pairs_survive_and_the_block_says_its_own_length(pairs in pairs(), tail in prop::collection::vec(any::<u8>(), 0..9)) {
        let (leg_a, leg_b): (Vec<i32>, Vec<i32>) = pairs.into_iter().unzip();
        let mut block = encode(&leg_a, &leg_b);
        let used = block.len();
        prop_assert!(used <= longest_block_bytes(32, leg_a.len()));
        block.extend(tail);
        prop_assert_eq!(decode(&block), Ok((leg_a, leg_b, used)));
    }

    #[test]
    fn a_block_cut_anywhere_is_truncated(pairs in pairs(), place in 0.0..1.0_f64) {
        let (leg_a, leg_b): (Vec<i32>, Vec<i32>) = pairs.into_iter().unzip();
        let block = encode(&leg_a, &leg_b);
        let cut = (place * block.len() as f64) as usize;
        prop_assert_eq!(decode(&block[..cut]), Err(BlockError::Truncated));
    }

    #[test]
    fn an_output_one_byte_short_is_refused(pairs in pairs()) {
        let (leg_a, leg_b): (Vec<i32>, Vec<i32>) = pairs.into_iter().unzip();
        let used = encode(&leg_a, &leg_b).len();
        prop_assert_eq!(encode_block(&leg_a, &leg_b, &mut vec![0; used - 1]), None);
    }
}

/// Whatever the bytes: an answer, no panic, and what is accepted is worth the same when written anew.
#[test]
fn two_million_hostile_strings_are_refused_or_decoded() {
    let mut rng = ChaCha8Rng::seed_from_u64(0xB10C);
    let mut buffer = [0_u8; BLOCK_BYTES + 60];
    let (mut accepted, mut truncated, mut out_of_range) = (0, 0, 0);
    for round in 0..2_000_000_u32 {
        let length = rng.random_range(0..=buffer.len());
        let string = &mut buffer[..length];
        rng.fill_bytes(string);
        match round % 4 {
            // Runs of ones lead to escapes, runs of zeros to short codes.
            0 => string.iter_mut().for_each(|byte| *byte = [0, 0xFF][usize::from(*byte >> 7)]),
            1 => string.iter_mut().skip(12).for_each(|byte| *byte = 0),
            // A real block with a few bits turned over.
            2 if length > 0 => {
                let codes: [i32; BLOCK_PAIRS] = core::array::from_fn(|n| i32::from(string[n % length]) - 100);
                let block = encode(&codes, &codes.map(|code| 300 - code / 3));
                let used = block.len().min(length);
                string[..used].copy_from_slice(&block[..used]);
                for _ in 0..rng.random_range(1..4) {
                    string[rng.random_range(..used)] ^= 1 << rng.random_range(0..8_u32);
                }
            }
            _ => {}
        }
        match decode(string) {
            Ok((leg_a, leg_b, used)) => {
                accepted += 1;
                assert!(used <= length && leg_a.len() <= BLOCK_PAIRS);
                let (again_a, again_b, _) = decode(&encode(&leg_a, &leg_b)).unwrap();
                assert_eq!((again_a, again_b), (leg_a, leg_b));
            }
            Err(BlockError::Truncated) => truncated += 1,
            Err(BlockError::OutOfRange) => out_of_range += 1,
        }
    }
    println!("accepted {accepted}, truncated {truncated}, out of range {out_of_range}");
    assert!(accepted > 100_000 && truncated > 100_000 && out_of_range > 100_000);
}

/// A differential pair seen by a 12-bit converter of ±12 V at 500 k pairs/s, levels ±2 V, edges between samples.
#[derive(Clone, Copy)]
struct Line {
    baud: f64,
    /// Standard deviation of the noise of each leg, in steps of the converter.
    noise_steps: f64,
    mains_v: f64,
    burst_v: f64,
}

fn normal(rng: &mut ChaCha8Rng) -> f64 {
    // Box and Muller 1958.
    let radius = (-2.0 * (1.0 - rng.random::<f64>()).ln()).sqrt();
    radius * (TAU * rng.random::<f64>()).cos()
}

impl Line {
    fn codes(&self, count: usize, rng: &mut ChaCha8Rng) -> (Vec<i32>, Vec<i32>) {
        const RATE_HZ: f64 = 500e3;
        const STEP_V: f64 = 24.0 / 4096.0;
        let bits: Vec<bool> = (0..count).map(|_| rng.random()).collect();
        let pair = |n: usize| {
            let time_s = n as f64 / RATE_HZ;
            let dm_v = match (self.baud > 0.0, bits[(time_s * self.baud) as usize]) {
                (false, _) => 0.25,
                (true, bit) => {
                    if bit {
                        2.0
                    } else {
                        -2.0
                    }
                }
            };
            let burst_v = self.burst_v * (-time_s / 1e-3).exp() * (TAU * 20e3 * time_s).sin();
            let cm_v = 2.5 + self.mains_v * (TAU * 50.0 * time_s).sin() + burst_v;
            (cm_v + dm_v / 2.0, cm_v - dm_v / 2.0)
        };
        let mut code = |volts: f64| (volts / STEP_V + self.noise_steps * normal(rng)).round() as i32 + 2048;
        (0..count).map(pair).map(|(a, b)| (code(a).clamp(0, 4095), code(b).clamp(0, 4095))).unzip()
    }

    /// Bits per code (one sample of one leg), headers and padding included, over 64 snippets of 1024 pairs.
    fn bits_per_code(&self) -> f64 {
        let mut bytes = 0;
        for seed in 0..64 {
            let (leg_a, leg_b) = self.codes(1024, &mut ChaCha8Rng::seed_from_u64(seed));
            let blocks = leg_a.chunks(BLOCK_PAIRS).zip(leg_b.chunks(BLOCK_PAIRS));
            bytes += blocks.map(|(a, b)| encode(a, b).len()).sum::<usize>();
        }
        bytes as f64 * 8.0 / (64 * 1024 * 2) as f64
    }
}

/// Budget: at most 6 bits per sample on bus traffic with noise; a steep burst of CM on top (2 V from
/// sample to sample) must still beat plain 12-bit packing. Never fewer than theory allows: noise
/// of s steps costs log2(s sqrt(2 pi e)) bits per sample (Cover and Thomas, differential entropy).
#[test]
fn bus_traffic_with_noise_takes_at_most_six_bits_per_sample() {
    const BUDGET: f64 = 6.0;
    const PACKED: f64 = 12.0;
    let quiet = Line { baud: 0.0, noise_steps: 0.5, mains_v: 0.0, burst_v: 0.0 };
    for (name, most, line) in [
        ("idle + 50 Hz", BUDGET, Line { mains_v: 1.0, ..quiet }),
        ("9600 Bd", BUDGET, Line { baud: 9_600.0, ..quiet }),
        ("115200 Bd", BUDGET, Line { baud: 115_200.0, ..quiet }),
        ("8 V burst on 9600 Bd", PACKED, Line { baud: 9_600.0, burst_v: 8.0, ..quiet }),
    ] {
        for noise_steps in [0.5, 1.5] {
            let bits = Line { noise_steps, ..line }.bits_per_code();
            println!("{name:22} noise {noise_steps} steps: {bits:.2} bits per sample");
            let floor = (noise_steps * (TAU * core::f64::consts::E).sqrt()).log2();
            assert!((floor..=most).contains(&bits), "{name}: {bits:.2} bits, theory {floor:.2}");
        }
    }
}
