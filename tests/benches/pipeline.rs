//! Pairs per second of the whole pipeline: quiet traffic, one long excursion, a storm.
//!
//! `cargo bench -p legwise-tests --bench pipeline`. Each line is the best of five runs over the same
//! four million pairs, so that other work on the machine disturbs little.
#![allow(clippy::unwrap_used, missing_docs)]

use legwise_firmware::pipeline::Pipeline;
use legwise_firmware::settings;
use legwise_firmware::source::SourceDescription;
use legwise_protocol::message::{EndCause, GapCause, Settings};
use legwise_protocol::receivers::{self, ReceiverId};
use legwise_tests::boards;
use legwise_tests::waveforms::{Data, dice, noise};
use std::time::Instant;

const PAIRS: usize = 1 << 22;
const RATE_HZ: u64 = 500_000;

/// 115 200 Bd traffic of ±2 V around 2.5 V with noise of half a code, 12 bits over 32 V.
fn quiet(board: &SourceDescription) -> (Vec<i32>, Vec<i32>) {
    let data = Data::new(1, PAIRS, 500e3 / 115_200.0, 0.3, (2.0, -2.0));
    let mut dice = dice(2);
    let mut leg = |sign: f64| -> Vec<i32> {
        let noise = noise(&mut dice, PAIRS);
        (0..PAIRS)
            .map(|n| {
                let volts = 2.5 + sign * data.at(n as f64) / 2.0 + 0.004 * noise[n];
                boards::code_of(&board.legs[0], volts)
            })
            .collect()
    };
    (leg(1.0), leg(-1.0))
}

fn best_rate(board: SourceDescription, settings: Settings, legs: &(Vec<i32>, Vec<i32>)) -> (f64, u64, u64) {
    let (mut best, mut messages, mut outside) = (0.0_f64, 0, 0);
    for _ in 0..5 {
        let mut pipeline = Pipeline::new(Box::default(), board, settings);
        messages = 0;
        let start = Instant::now();
        let records = &mut |_: &_, _| messages += 1;
        for (first, (a, b)) in (0..).step_by(256).zip(legs.0.chunks(256).zip(legs.1.chunks(256))) {
            pipeline.take(first, a, b, GapCause::Skipped, records);
        }
        pipeline.end(EndCause::SourceExhausted, records);
        best = best.max(PAIRS as f64 / start.elapsed().as_secs_f64() / 1e6);
        outside = pipeline.totals().outside;
    }
    (best, messages, outside)
}

fn main() {
    let board = boards::converter_board(RATE_HZ, boards::converter(12, 32.0, 2.5));
    let skewed = SourceDescription { skew_ns: 1_000, ..board };
    let default = settings::for_receiver(receivers::by_id(ReceiverId::Tia485A).unwrap(), RATE_HZ * 1000);
    let mut no_spectra = default;
    no_spectra.reporting.spectrum_segments = 0;
    let mut no_limits = no_spectra;
    no_limits.limits = Default::default();

    let calm = quiet(&board);
    let shifted = |is_out: &dyn Fn(usize) -> bool| {
        let leg = |codes: &[i32]| -> Vec<i32> {
            codes.iter().enumerate().map(|(n, &code)| if is_out(n) { code + 1_400 } else { code }).collect()
        };
        (leg(&calm.0), leg(&calm.1))
    };
    let excursion = shifted(&|n| n > 1_000);
    let storm = shifted(&|n| n % 20 < 3);
    for (name, board, settings, legs) in [
        ("quiet, everything on", board, default, &calm),
        ("quiet, spectra off", board, no_spectra, &calm),
        ("quiet, spectra off, no limits", board, no_limits, &calm),
        ("quiet, legs skewed, everything on", skewed, default, &calm),
        ("one long excursion, everything on", board, default, &excursion),
        ("one long excursion, spectra off", board, no_spectra, &excursion),
        ("storm, everything on", board, default, &storm),
        ("storm, spectra off", board, no_spectra, &storm),
    ] {
        let (rate, messages, outside) = best_rate(board, settings, legs);
        println!("{name:36} {rate:8.1} M pairs/s   {messages:6} messages, {outside:8} pairs outside");
    }
}
