//! Spectra as the host receives them, against theory, a second Welch estimate in `f64`, and vectors.
//!
//! Every figure here went through the whole path: codes, calibration, modes, one complex `f32`
//! transform, power codes. A power code is good to 1/2048 of the power (`power::RELATIVE_ERROR`).
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

mod welch;

use legwise_firmware::settings;
use legwise_firmware::source::SourceDescription;
use legwise_protocol::message::{LegScale, Mode, Settings};
use legwise_protocol::power;
use legwise_protocol::receivers::{self, ReceiverId};
use legwise_tests::boards;
use legwise_tests::recorder::{Recorder, examine};
use legwise_tests::waveforms::{Data, dice, legs_uv, noise, tone};
use welch::{BINS, POINTS, grandke, welch};

const RATE_HZ: u64 = 500_000;

fn settings_for(segments: u32) -> Settings {
    let receiver = receivers::by_id(ReceiverId::Tia485A).unwrap();
    let mut settings = settings::for_receiver(receiver, RATE_HZ * 1000);
    settings.reporting.spectrum_segments = segments;
    settings.reporting.snippet_after = 0;
    // One set: a pair at rest whatever it carries.
    settings.detection.idle_below_uv = 90_000_000;
    settings
}

/// Pairs of `segments` segments at 50 % overlap.
const fn pairs_of(segments: usize) -> usize {
    (segments + 1) * POINTS / 2
}

/// Modes in volts through the whole path; both spectra of the one average.
fn spectra(cm_v: &[f64], dm_v: &[f64]) -> (Vec<f64>, Vec<f64>) {
    let segments = cm_v.len() / (POINTS / 2) - 1;
    let (code_a, code_b) = legs_uv(cm_v, dm_v);
    let board = boards::microvolt_board(RATE_HZ);
    let recorder = examine(board, settings_for(segments as u32), &code_a, &code_b);
    let parts = recorder.spectrum_parts();
    assert!(parts.iter().all(|part| part.segments as usize == segments && part.rung == 0));
    assert!(parts.iter().all(|part| (part.first_sample, part.skipped) == (0, 0)));
    assert!(parts.iter().all(|part| part.span_samples == cm_v.len() as u64));
    (recorder.spectrum(Mode::Common), recorder.spectrum(Mode::Differential))
}

#[test]
fn tones_on_and_off_a_bin_read_their_amplitude_within_a_thousandth() {
    // Grandke 1983 on the averaged power: exact for a periodic Hann window away from 0 Hz and fs/2.
    // Power codes: 0.0244 % of each amplitude; at half a bin the interpolation adds as much again.
    let samples = pairs_of(31);
    let mut worst = (0.0_f64, 0.0_f64);
    for base in [12.0, 100.0, 307.0, 480.0] {
        for offset in [0.0, 0.1, 0.25, 0.3, 0.49, 0.5, 0.77] {
            let bins = base + offset;
            let cm = tone(0.8, bins / POINTS as f64, 0.4, samples);
            let dm = tone(1.5, (bins + 9.37) / POINTS as f64, 1.1, samples);
            let (common, differential) = spectra(&cm, &dm);
            for (spectrum, bins, amplitude) in [(common, bins, 0.8), (differential, bins + 9.37, 1.5)] {
                let (found_bins, found) = grandke(&spectrum, RATE_HZ as f64, bins.round() as usize);
                let error = (found / amplitude - 1.0).abs();
                worst = (worst.0.max(error), worst.1.max((found_bins - bins).abs()));
                assert!(error < 1e-3, "{bins} bins: {found} V for {amplitude} V");
            }
        }
    }
    println!("worst amplitude error {:.4} %, worst frequency error {:.1e} bins", worst.0 * 100.0, worst.1);
    assert!(worst.0 > 0.0);
}

#[test]
fn white_noise_lies_on_its_theoretical_floor_within_two_percent() {
    // Independent legs of sigma volts: DM = 2 sigma², CM = sigma²/2 of variance, spread evenly over
    // fs/2. Mean over bins 3..509 of K = 600 segments: n_eff = 0.947 K (Welch 1967), neighbouring Hann
    // bins correlated 4/9 and 1/36 in power, so sqrt(1.944/(507 * 568)) = 0.26 % standard deviation.
    let sigma = 0.02;
    let samples = pairs_of(600);
    let mut dice = dice(31);
    let leg_a: Vec<f64> = noise(&mut dice, samples).iter().map(|x| sigma * x).collect();
    let leg_b: Vec<f64> = noise(&mut dice, samples).iter().map(|x| sigma * x).collect();
    let cm: Vec<f64> = leg_a.iter().zip(&leg_b).map(|(a, b)| (a + b) / 2.0).collect();
    let dm: Vec<f64> = leg_a.iter().zip(&leg_b).map(|(a, b)| a - b).collect();
    let (common, differential) = spectra(&cm, &dm);
    let floor = |spectrum: &[f64]| spectrum[3..510].iter().sum::<f64>() / 507.0;
    for (name, spectrum, variance) in
        [("CM", &common, sigma * sigma / 2.0), ("DM", &differential, 2.0 * sigma * sigma)]
    {
        let theory = variance / (RATE_HZ as f64 / 2.0);
        let ratio = floor(spectrum) / theory;
        println!("{name} floor {:.4e} V²/Hz, {:+.3} % of theory", floor(spectrum), (ratio - 1.0) * 100.0);
        assert!((ratio - 1.0).abs() < 0.02, "{name}: {ratio}");
    }
}

#[test]
fn the_sum_over_all_bins_is_the_windowed_variance() {
    // Parseval with the window inside: sum PSD df = mean over segments of sum w² (x - mean)² / sum w².
    // Codes are off by at most 1/2048 each, unbiased: their sum by far less; 1/2048 is the bound.
    let samples = pairs_of(20);
    let mut dice = dice(32);
    let data = Data::new(5, samples, 26.04, 0.4, (2.0, -2.0));
    let dm: Vec<f64> =
        noise(&mut dice, samples).iter().enumerate().map(|(n, x)| data.at(n as f64) + 0.03 * x).collect();
    let cm: Vec<f64> = noise(&mut dice, samples).iter().map(|x| 1.2 + 0.3 * x).collect();
    let (common, differential) = spectra(&cm, &dm);
    let bin_hz = RATE_HZ as f64 / POINTS as f64;
    for (name, spectrum, signal) in [("CM", common, &cm), ("DM", differential, &dm)] {
        let total = spectrum.iter().sum::<f64>() * bin_hz;
        let variance = welch::windowed_variance(signal);
        println!("{name}: {total:.6} V² in the spectrum, {variance:.6} V² in the signal");
        assert!((total / variance - 1.0).abs() < power::RELATIVE_ERROR, "{name}: {total} {variance}");
    }
}

/// Compares a received spectrum with an `f64` reference; the worst relative difference above the floor.
///
/// `limit` is what the `f32` path may add to the power code's own error.
fn compare(name: &str, spectrum: &[f64], reference: &[f64], floor: f64, limit: f64) {
    let (mut worst, mut same_code, mut counted) = (0.0_f64, 0, 0);
    for (bin, (&found, &expected)) in spectrum.iter().zip(reference).enumerate() {
        if expected < floor {
            continue;
        }
        let error = (found / expected - 1.0).abs();
        worst = worst.max(error);
        counted += 1;
        same_code += u32::from(power::encode(found as f32) == power::encode(expected as f32));
        assert!(error <= limit + power::RELATIVE_ERROR, "{name}, bin {bin}: {found:e} for {expected:e}");
    }
    let other_code = 1.0 - f64::from(same_code) / f64::from(counted);
    println!("{name}: {counted} bins, worst {worst:.2e}, {:.2} % with another code", other_code * 100.0);
    assert!(counted > 400, "{name}: only {counted} bins above the floor");
    // A power that is off by e relative crosses a code boundary with a probability of 1024 e to 2048 e.
    // With e <= limit the share stays below this; it is what shows the f32 path behind the codes.
    assert!(other_code <= 2048.0 * limit, "{name}: {other_code}");
}

#[test]
fn spectra_agree_with_a_double_precision_estimate_on_random_input() {
    for seed in 0..4 {
        let samples = pairs_of(25);
        let mut dice = dice(100 + seed);
        let data = Data::new(seed, samples, 52.08, 0.3, (2.0, -2.0));
        let cm: Vec<f64> = noise(&mut dice, samples)
            .iter()
            .zip(tone(0.3, 0.137, 0.2, samples))
            .map(|(x, tone)| 2.3 + 0.05 * x + tone)
            .collect();
        let dm: Vec<f64> =
            noise(&mut dice, samples).iter().enumerate().map(|(n, x)| data.at(n as f64) + 0.05 * x).collect();
        let (code_a, code_b) = legs_uv(&cm, &dm);
        let modes = |n: usize| (f64::from(code_a[n]) * 1e-6, f64::from(code_b[n]) * 1e-6);
        let exact_cm: Vec<f64> = (0..samples).map(modes).map(|(a, b)| (a + b) / 2.0).collect();
        let exact_dm: Vec<f64> = (0..samples).map(modes).map(|(a, b)| a - b).collect();
        let (common, differential) = spectra(&cm, &dm);
        compare("CM", &common, &welch(&exact_cm, RATE_HZ as f64), 1e-10, 1e-4);
        compare("DM", &differential, &welch(&exact_dm, RATE_HZ as f64), 1e-10, 1e-4);
    }
}

/// The two-channel vector: 12-bit codes, volts = (code - 2048) * 24/4096, 500 kS/s.
fn vector_codes() -> (Vec<i32>, Vec<i32>) {
    let text = include_str!("../vectors/two_channel_input.csv");
    let mut reader = csv::ReaderBuilder::new().comment(Some(b'#')).from_reader(text.as_bytes());
    reader.deserialize::<(i32, i32)>().map(Result::unwrap).unzip()
}

#[test]
fn spectra_agree_with_the_welch_vector() {
    // vectors/welch_csd.csv: SciPy welch, nperseg 1024, periodic Hann, 50 % overlap, constant detrend.
    let (code_a, code_b) = vector_codes();
    let scale: LegScale = boards::converter(12, 24.0, 0.0);
    let board: SourceDescription = boards::converter_board(RATE_HZ, scale);
    let recorder = examine(board, settings_for(31), &code_a, &code_b);
    let text = include_str!("../vectors/welch_csd.csv");
    let mut reader = csv::ReaderBuilder::new().comment(Some(b'#')).from_reader(text.as_bytes());
    let rows: Vec<Vec<f64>> = reader.deserialize().map(Result::unwrap).collect();
    assert_eq!(rows.len(), BINS);
    let column = |number: usize| rows.iter().map(|row| row[number]).collect::<Vec<_>>();
    // Calibration rounds to 1 µV: 0.29 µV r.m.s., 3e-19 V²/Hz, nothing beside the floor of 1e-10.
    compare("Pcc", &recorder.spectrum(Mode::Common), &column(1), 1e-10, 1e-4);
    compare("Pdd", &recorder.spectrum(Mode::Differential), &column(2), 1e-10, 1e-4);

    // vectors/welch_summary.json: the tone's bin, its amplitude from three bins (0.4 V true).
    let summary: serde_json::Value =
        serde_json::from_str(include_str!("../vectors/welch_summary.json")).unwrap();
    let common = recorder.spectrum(Mode::Common);
    let peak = (10..BINS).max_by(|&a, &b| common[a].total_cmp(&common[b])).unwrap();
    assert_eq!(peak as u64, summary["peak_bin"].as_u64().unwrap());
    let bin_hz = RATE_HZ as f64 / POINTS as f64;
    let three = (2.0 * common[peak - 1..=peak + 1].iter().sum::<f64>() * bin_hz).sqrt();
    let expected = summary["tone_amp_from_psd_3bin"].as_f64().unwrap();
    assert!((three / expected - 1.0).abs() < power::RELATIVE_ERROR, "{three} V for {expected} V");
    let total = common.iter().sum::<f64>() * bin_hz;
    // The vector's sum is a trapezium: half of the first and last bin.
    let ends = (common[0] + common[BINS - 1]) / 2.0 * bin_hz;
    let expected = summary["parseval_cm"].as_f64().unwrap();
    assert!(((total - ends) / expected - 1.0).abs() < power::RELATIVE_ERROR, "{total} V² for {expected}");
}

#[test]
fn a_strong_differential_mode_leaves_the_common_spectrum_alone() {
    // ±2.5 V NRZ beside 2.4 mV of CM noise. Leakage acts like white noise of u DMrms per sample with
    // u = 2^-24 (the f32 unit round-off): 1.5e-7 V, 6.2e-5 of the CM amplitude. In the power that is
    // twice as much at most when it all adds up in phase: 1.24e-4.
    // A CM of exactly zero would prove nothing: rounding then keeps conjugate symmetry and the split is
    // exact whatever the transform does. Hence the noise.
    let limit = 2.0 * 2.5 * 2_f64.powi(-24) / 2.4e-3;
    for baud in [9_600.0, 115_200.0] {
        let samples = pairs_of(300);
        let data = Data::new(77, samples, RATE_HZ as f64 / baud, 0.05, (2.5, -2.5));
        let dm: Vec<f64> = (0..samples).map(|n| data.at(n as f64)).collect();
        let cm: Vec<f64> = noise(&mut dice(78), samples).iter().map(|x| 2.4e-3 * x).collect();
        let (code_a, code_b) = legs_uv(&cm, &dm);
        let alone: Vec<f64> =
            code_a.iter().zip(&code_b).map(|(&a, &b)| (f64::from(a) + f64::from(b)) * 0.5e-6).collect();
        let (common, _) = spectra(&cm, &dm);
        compare("CM beside NRZ", &common, &welch(&alone, RATE_HZ as f64), 1e-12, limit);
    }
}

#[test]
fn leakage_between_the_modes_is_round_off_of_the_differential_mode() {
    // Measured, not only bounded: floating point does not know volts, so 1000 V of NRZ beside 10 mV of
    // CM noise puts the leakage (u DMrms = 6e-5 V per sample) into reach of the power codes, while CM is
    // still 170 times larger than it, which keeps rounding free of symmetry. One segment at a time:
    // |C'| - |C| is the leakage's part in phase, half of its power.
    let u = 2_f64.powi(-24);
    let rounds = 60;
    for baud in [9_600.0, 115_200.0] {
        let samples = pairs_of(rounds);
        let data = Data::new(79, samples, RATE_HZ as f64 / baud, 0.05, (1_000.0, -1_000.0));
        let dm: Vec<f64> = (0..samples).map(|n| data.at(n as f64)).collect();
        let cm: Vec<f64> = noise(&mut dice(80), samples).iter().map(|x| 10e-3 * x).collect();
        let (code_a, code_b) = legs_uv(&cm, &dm);
        let mut settings = settings_for(1);
        settings.limits = Default::default();
        let recorder: Recorder = examine(boards::microvolt_board(RATE_HZ), settings, &code_a, &code_b);
        let alone: Vec<f64> =
            code_a.iter().zip(&code_b).map(|(&a, &b)| (f64::from(a) + f64::from(b)) * 0.5e-6).collect();
        let received = recorder.spectra(Mode::Common);
        assert_eq!(received.len(), rounds);
        let (mut sum, mut count) = (0.0, 0);
        for (round, spectrum) in received.iter().enumerate() {
            let first = round * POINTS / 2;
            let reference = welch(&alone[first..first + POINTS], RATE_HZ as f64);
            for (found, expected) in spectrum.iter().zip(&reference).take(BINS - 1).skip(3) {
                sum += (found.sqrt() - expected.sqrt()).powi(2);
                count += 1;
            }
        }
        // White noise of s volts has 2 s²/fs.
        let per_sample = (2.0 * sum / f64::from(count) * RATE_HZ as f64 / 2.0).sqrt();
        // A code is off by 2^-11 at most, evenly spread: 2^-11/sqrt(3)/sqrt(2) r.m.s. or less of the
        // power, half of that of the amplitude: 1e-4 of 10 mV, 1 µV, 2 % of what is measured here.
        let relative = per_sample / 1_000.0;
        println!("{baud} Bd: leakage {relative:.2e} of DM r.m.s. per sample, {:.2} u", relative / u);
        assert!(relative < 2.0 * u, "{relative:e}");
        assert!(relative > 0.05 * u, "nothing was measured: {relative:e}");
    }
}
