//! How fast the host takes frames apart: frames/s and bytes/s for a mix as a device sends it.
//!
//! `cargo bench -p legwise-protocol`. No timing decides a test; the numbers are printed for the reader,
//! with the cost of the naked checksum on the same bytes beside them as a yardstick of the machine.
#![allow(clippy::unwrap_used, clippy::expect_used, missing_docs)]

#[path = "../tests/specimens/mod.rs"]
mod specimens;

use legwise_protocol::bytes::Bytes;
use legwise_protocol::decoder::DeviceDecoder;
use legwise_protocol::framing::{DEVICE_FRAME_BYTES, DeviceFrame, encode_device_frame};
use legwise_protocol::message::Message;
use legwise_protocol::snippet::{BLOCK_PAIRS, decode_block, encode_block};
use rand::{Rng, RngExt, SeedableRng};
use rand_chacha::ChaCha8Rng;
use std::hint::black_box;
use std::time::Instant;

const REPEATS: u32 = 5;

/// Shares of a busy night in 20 frames: spectra and snippets with full payloads, summaries, levels,
/// totals, excursions.
fn mix(frames: u32) -> Vec<DeviceFrame> {
    let mut rng = ChaCha8Rng::seed_from_u64(1);
    let all = specimens::device_frames();
    let named = |name: &str| all.iter().find(|(found, _)| *found == name).unwrap().1.clone();
    let cycle = [
        ("Spectra", 6),
        ("Summary", 4),
        ("Snippet", 4),
        ("Excursion", 3),
        ("Levels", 1),
        ("Totals", 1),
        ("Storm", 1),
    ];
    let cycle: Vec<DeviceFrame> =
        cycle.iter().flat_map(|&(name, count)| std::iter::repeat_n(named(name), count)).collect();
    let frame = |sequence: u32| {
        let mut frame = cycle[sequence as usize % cycle.len()].clone();
        frame.envelope.sequence = sequence;
        let mut payload = [0; 384];
        rng.fill_bytes(&mut payload);
        match &mut frame.message {
            Message::Snippet(snippet) => snippet.blocks = Bytes::from_slice_cut(&payload),
            Message::Spectra(spectra) => spectra.codes = Bytes::from_slice_cut(&payload),
            _ => {}
        }
        frame
    };
    (0..frames).map(frame).collect()
}

/// The best of some runs, in seconds: the least disturbed one.
fn best_s(mut run: impl FnMut()) -> f64 {
    let once = |_| {
        let start = Instant::now();
        run();
        start.elapsed().as_secs_f64()
    };
    (0..REPEATS).map(once).fold(f64::INFINITY, f64::min)
}

fn print(what: &str, frames: usize, bytes: usize, seconds: f64) {
    let (frames, bytes) = (frames as f64 / seconds / 1e6, bytes as f64 / seconds / 1e6);
    println!("{what:34} {frames:8.3} M/s {bytes:9.1} MB/s");
}

fn main() {
    let frames = mix(200_000);
    let mut stream = vec![0; frames.len() * DEVICE_FRAME_BYTES];
    let mut used = 0;
    let encode = |stream: &mut [u8], used: &mut usize| {
        *used = 0;
        for frame in &frames {
            *used += encode_device_frame(frame, &mut stream[*used..]).unwrap();
        }
    };
    let seconds = best_s(|| encode(&mut stream, &mut used));
    print("encode frames", frames.len(), used, seconds);
    stream.truncate(used);

    for piece in [64, 4096] {
        let seconds = best_s(|| {
            let mut decoder = DeviceDecoder::new();
            let mut seen = 0;
            for bytes in stream.chunks(piece) {
                decoder
                    .feed_frames(bytes, |frame| seen += usize::from(black_box(frame).envelope.boot_id != 0));
            }
            assert_eq!((seen, decoder.counts().dropped_bytes), (frames.len(), 0));
        });
        print(&format!("decode frames, {piece} bytes at a time"), frames.len(), stream.len(), seconds);
    }

    let mut damaged = stream.clone();
    let mut rng = ChaCha8Rng::seed_from_u64(2);
    (0..frames.len() / 2).for_each(|_| damaged[rng.random_range(..used)] ^= 1 << rng.random_range(0..8_u32));
    let seconds = best_s(|| DeviceDecoder::new().feed_frames(&damaged, |frame| _ = black_box(frame)));
    print("decode with bit errors", frames.len(), damaged.len(), seconds);

    let crc = crc::Crc::<u32, crc::Table<16>>::new(&crc::CRC_32_ISO_HDLC);
    let seconds = best_s(|| _ = black_box(crc.checksum(black_box(&stream))));
    print("yardstick: checksum alone", frames.len(), stream.len(), seconds);
    snippet_blocks();
}

/// Blocks of a noisy 12-bit pair, both ways; bytes are raw codes at four bytes each.
fn snippet_blocks() {
    let mut rng = ChaCha8Rng::seed_from_u64(3);
    let mut leg = || -> [i32; BLOCK_PAIRS] { core::array::from_fn(|_| 2048 + rng.random_range(-4..=4)) };
    let (leg_a, leg_b) = (leg(), leg());
    let mut block = [0; 600];
    let rounds = 100_000;
    let mut used = 0;
    let seconds = best_s(|| {
        for _ in 0..rounds {
            used = encode_block(black_box(&leg_a), black_box(&leg_b), &mut block).unwrap();
        }
    });
    print("encode snippet pairs", rounds * BLOCK_PAIRS, rounds * BLOCK_PAIRS * 8, seconds);
    let (mut a, mut b) = ([0; BLOCK_PAIRS], [0; BLOCK_PAIRS]);
    let seconds = best_s(|| {
        for _ in 0..rounds {
            decode_block(black_box(&block[..used]), &mut a, &mut b).unwrap();
        }
    });
    assert_eq!((a, b), (leg_a, leg_b));
    print("decode snippet pairs", rounds * BLOCK_PAIRS, rounds * BLOCK_PAIRS * 8, seconds);
}
