//! The decimation filters against the vectors and against theory.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

use legwise_firmware::halfband::{Bench, INPUTS, Memory, OUTPUTS, UNSETTLED};
use std::f64::consts::TAU;

/// Decimates any whole number of blocks.
fn decimate(samples: &[f32]) -> Vec<f32> {
    let (mut memory, mut bench) = (Memory::new(), Bench::new());
    let mut outputs = Vec::new();
    for block in samples.as_chunks::<INPUTS>().0 {
        bench.inputs().copy_from_slice(block);
        let mut eighth = [0.0; OUTPUTS];
        memory.decimate(&mut bench, &mut eighth);
        outputs.extend(eighth);
    }
    outputs
}

/// Gain at `turns` per input sample: the filters are linear, so the outputs for a cosine and a sine are the
/// real and imaginary part of the output for a rotating phasor, whose length is constant.
fn gain_db(turns: f64) -> f64 {
    let wave = |phase: f64| -> Vec<f32> {
        (0..INPUTS * 4).map(|n| (TAU * (turns * n as f64 - phase)).cos() as f32).collect()
    };
    let (real, imaginary) = (decimate(&wave(0.0)), decimate(&wave(0.25)));
    let lengths = real.iter().zip(&imaginary).skip(UNSETTLED);
    let largest = lengths.map(|(&re, &im)| f64::from(re).hypot(im.into())).fold(0.0, f64::max);
    20.0 * largest.log10()
}

#[test]
fn the_cascade_gives_the_outputs_of_the_vector_file() {
    // tests/vectors/halfband.json, made by make_vectors.py with NumPy's convolve in f64.
    let text = include_str!("../vectors/halfband.json");
    let vectors: serde_json::Value = serde_json::from_str(text).unwrap();
    let numbers = |name: &str| -> Vec<f64> {
        vectors[name].as_array().unwrap().iter().map(|value| value.as_f64().unwrap()).collect()
    };
    let samples: Vec<f32> = numbers("x").iter().map(|&x| x as f32).collect();
    let expected = numbers("y3_float");
    let outputs = decimate(&samples);
    assert_eq!(outputs.len(), expected.len());
    let largest = expected.iter().fold(0.0_f64, |largest, y| largest.max(y.abs()));
    let worst = outputs.iter().zip(&expected).map(|(&y, &z)| (f64::from(y) - z).abs()).fold(0.0, f64::max);
    // Three stages of at most 14 additions of f32 (unit round-off 6e-8) and rounded coefficients.
    println!("worst error {:e} of the largest output", worst / largest);
    assert!(worst < 4e-7 * largest, "measured {:e}", worst / largest);
}

#[test]
fn the_pass_band_is_flat_to_a_thousandth_of_a_decibel() {
    let mut worst = 0.0_f64;
    for step in 0..=80 {
        let turns = 0.4 / 8.0 * f64::from(step) / 80.0;
        worst = worst.max(gain_db(turns).abs());
    }
    println!("worst pass-band error {worst:.5} dB");
    // Source: design of the coefficients, -0.0007 .. +0.0007 dB.
    assert!(worst < 0.001, "measured {worst} dB");
}

#[test]
fn nothing_folds_into_the_pass_band_above_minus_80_decibels() {
    let mut worst = f64::NEG_INFINITY;
    for fold in 1..=4 {
        for step in -40..=40 {
            let turns = f64::from(fold) / 8.0 + 0.4 / 8.0 * f64::from(step) / 40.0;
            if turns > 0.5 {
                continue;
            }
            worst = worst.max(gain_db(turns));
        }
    }
    println!("worst alias {worst:.2} dB");
    assert!(worst < -80.0, "measured {worst} dB");
}
