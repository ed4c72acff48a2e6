//! Identities and published check values, each through the code that must honour it.
//!
//! T-numbers and sources are those of the receiver reference. "Identity" is arithmetic that holds for
//! any pair: DM = VA−VB, CM = (VA+VB)/2, max(VA,VB) = CM + |DM|/2. Facts of the trade are marked
//! "common practice, no source".
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

mod welch;

use core::f64::consts::PI;
use legwise_firmware::settings;
use legwise_protocol::limits::LimitSet;
use legwise_protocol::message::{Mode, Settings, Totals};
use legwise_protocol::power;
use legwise_protocol::receivers::{self, Decision, ReceiverId};
use legwise_tests::boards::{self, microvolts};
use legwise_tests::recorder::{Recorder, examine};
use legwise_tests::waveforms::{dice, legs_uv, noise, tone};
use welch::{POINTS, grandke};

const RATE_HZ: u64 = 500_000;

fn settings_of(id: ReceiverId) -> Settings {
    settings::for_receiver(receivers::by_id(id).unwrap(), RATE_HZ * 1000)
}

/// What the device makes of two constant legs.
fn hold(limits: LimitSet, leg_a_v: f64, leg_b_v: f64) -> Totals {
    let mut settings = settings::for_limits(limits, RATE_HZ * 1000);
    settings.detection.hysteresis_uv = 0;
    let (a, b) = (microvolts(leg_a_v), microvolts(leg_b_v));
    let board = boards::microvolt_board(RATE_HZ);
    let totals = examine(board, settings, &[a; 300], &[b; 300]).totals();
    assert!(totals.outside == 0 || totals.outside == 300);
    totals
}

/// Whether constant legs are inside the windows of a receiver.
fn is_inside(id: ReceiverId, leg_a_v: f64, leg_b_v: f64) -> bool {
    let limits = receivers::by_id(id).unwrap().limits();
    assert!(!limits.is_empty(), "{id:?} has nothing to judge by");
    hold(limits, leg_a_v, leg_b_v).outside == 0
}

fn modes_of(totals: &Totals) -> (f64, f64) {
    assert_eq!(totals.dm.low.value, totals.dm.high.value);
    (f64::from(totals.dm.high.value) * 1e-6, f64::from(totals.twice_cm.high.value) * 0.5e-6)
}

fn decide(id: ReceiverId, dm_v: f64) -> Decision {
    receivers::by_id(id).unwrap().threshold.value.decide(microvolts(dm_v))
}

#[test]
fn t1_to_t2_modes_of_nominal_levels() {
    // T1: workshop manuals, CAN dominant 3.5/1.5 V. T2: DS91M040 data sheet.
    for (a, b, dm, cm) in [(3.5, 1.5, 2.0, 2.5), (2.4, 0.0, 2.4, 1.2)] {
        assert_eq!(modes_of(&hold(LimitSet::default(), a, b)), (dm, cm));
    }
}

#[test]
fn t3_to_t5_threshold_test_voltages_of_m_lvds() {
    // DS91M040 data sheet, function tables and threshold test voltages: inside -1.4 to 3.8 V.
    let (one, two) = (ReceiverId::MlvdsType1, ReceiverId::MlvdsType2);
    for (a, b, dm, cm) in [(3.8, 3.75, 0.05, 3.775), (-1.4, -1.35, -0.05, -1.375), (3.8, 3.65, 0.15, 3.725)] {
        let modes = modes_of(&hold(LimitSet::default(), a, b));
        assert!((modes.0 - dm).abs() < 1e-9 && (modes.1 - cm).abs() < 1e-9, "{modes:?}");
        assert!(is_inside(one, a, b) && is_inside(two, a, b), "{a} {b}");
    }
    assert!(!is_inside(one, 3.800_001, 3.7) && !is_inside(one, -1.3, -1.400_001));
    assert_eq!(decide(one, 0.05), Decision::High);
    assert_eq!(decide(one, -0.05), Decision::Low);
    assert_eq!(decide(two, 0.15), Decision::High);
    assert_eq!(decide(two, 0.05), Decision::Low);
}

/// Legs at a receiver: driver offset, ground difference, differential voltage; A the higher.
fn at_receiver(offset_v: f64, ground_v: f64, dm_v: f64) -> (f64, f64) {
    (offset_v + ground_v + dm_v / 2.0, offset_v + ground_v - dm_v / 2.0)
}

/// Verdicts of 485 on the legs: (average inside, legs inside).
fn verdicts(legs: (f64, f64)) -> (bool, bool) {
    let limits = receivers::by_id(ReceiverId::Tia485A).unwrap().limits();
    let average = LimitSet { terminal: None, ..limits };
    let terminal = LimitSet { average: None, ..limits };
    let of = |limits| hold(limits, legs.0, legs.1).outside == 0;
    assert_eq!(is_inside(ReceiverId::Tia485A, legs.0, legs.1), of(average) && of(terminal), "both hold");
    (of(average), of(terminal))
}

#[test]
fn t6_to_t9_average_and_terminal_verdicts_of_485_differ_by_half_the_dm() {
    // Receiver reference 1.3 (window of 485 as quoted by a serial-port textbook and TI ISO14xx).
    let legs = at_receiver(2.5, 7.0, 3.0);
    assert_eq!(legs, (11.0, 8.0));
    assert_eq!(modes_of(&hold(LimitSet::default(), legs.0, legs.1)), (3.0, 9.5));
    assert_eq!(verdicts(legs), (true, true)); // T6
    assert_eq!(verdicts(at_receiver(2.5, 8.5, 3.0)), (true, false)); // T7: A at 12.5 V, average 11 V
    assert_eq!(verdicts(at_receiver(2.5, -8.5, 3.0)), (true, false)); // T8: B at -7.5 V, average -6 V
    // T9, TI "RS-485 Unit Load": 0 to 5 V drivers and ±7 V of ground difference; limits are inclusive.
    for (ground, beyond) in [(7.0, 1e-6), (-7.0, -1e-6)] {
        assert_eq!(verdicts(at_receiver(2.5, ground, 5.0)), (true, true));
        assert_eq!(verdicts(at_receiver(2.5, ground + beyond, 5.0)), (true, false));
    }
}

#[test]
fn t10_the_ground_budget_is_where_the_verdict_turns() {
    // Receiver reference 1.3: offset 3 V, |DM| 5 V leaves -7.5 to +6.5 V for ground difference and
    // noise. Found here by halving, not by formula.
    let is_fine = |ground: f64| verdicts(at_receiver(3.0, ground, 5.0)) == (true, true);
    let turn = |mut inside: f64, mut outside: f64| {
        while (inside - outside).abs() > 1e-6 {
            let middle = (inside + outside) / 2.0;
            if is_fine(middle) { inside = middle } else { outside = middle }
        }
        inside
    };
    assert!((turn(0.0, 20.0) - 6.5).abs() < 2e-6);
    assert!((turn(0.0, -20.0) + 7.5).abs() < 2e-6);
}

#[test]
fn t26_gain_mismatch_turns_common_into_differential_mode() {
    // Receiver reference 3.4: gains 1.005 and 1.000, CM 7 V, DM 2 V give DM' 2.0400 V, CM' 7.0200 V.
    // The board's leg A reads 0.5 % high because its stored scale is 0.5 % too large.
    let true_scale = boards::converter(16, 32.0, 0.0);
    let gain = |gain: f64| {
        let mut scale = true_scale;
        scale.mantissa = (f64::from(scale.mantissa) * gain).round() as i32;
        // The scale pivots about code 0, the lower end at -16 V; the true gain error about 0 V.
        scale.offset_uv = (f64::from(scale.offset_uv) * gain).round() as i32;
        scale
    };
    let read = |cm: f64, dm: f64| {
        let codes =
            (boards::code_of(&true_scale, cm + dm / 2.0), boards::code_of(&true_scale, cm - dm / 2.0));
        let mut board = boards::converter_board(RATE_HZ, true_scale);
        board.legs = [gain(1.005), gain(1.0)];
        let settings = settings_of(ReceiverId::Tia485A);
        modes_of(&examine(board, settings, &[codes.0; 300], &[codes.1; 300]).totals())
    };
    let (dm, cm) = read(7.0, 2.0);
    println!("DM' {dm:.6} V, CM' {cm:.6} V");
    // 8 V and 6 V are codes of this converter exactly; calibration rounds to 0.5 µV a leg.
    assert!((dm - 2.04).abs() <= 1e-6 && (cm - 7.02).abs() <= 1e-6);
    // Rejection: 20 log10(mean gain / difference), from DM' without DM.
    let (false_dm, false_cm) = read(7.0, 0.0);
    let rejection_db = 20.0 * (false_cm / false_dm).log10();
    assert!((rejection_db - 46.042).abs() < 0.01, "{rejection_db} dB");
}

/// Amplitudes of DM and CM, read from extremes over many phases: legs sampled `skew_s` apart, not declared.
fn sampled_apart(cm_v: f64, dm_v: f64, frequency_hz: f64, skew_s: f64, rate_hz: u64) -> (f64, f64) {
    let pairs = 1_000_000;
    let leg = |sign: f64, delay_s: f64| -> Vec<i32> {
        tone(
            cm_v + sign * dm_v / 2.0,
            frequency_hz / rate_hz as f64,
            2.0 * PI * frequency_hz * delay_s,
            pairs,
        )
        .into_iter()
        .map(microvolts)
        .collect()
    };
    let mut settings = settings_of(ReceiverId::Tia485A);
    settings.limits = LimitSet::default();
    settings.reporting.spectrum_segments = 0;
    let board = boards::microvolt_board(rate_hz);
    let totals = examine(board, settings, &leg(1.0, 0.0), &leg(-1.0, skew_s)).totals();
    (f64::from(totals.dm.high.value) * 1e-6, f64::from(totals.twice_cm.high.value) * 0.5e-6)
}

#[test]
fn t29_t30_sampling_the_legs_apart_makes_false_differential_mode() {
    // Receiver reference 3.6: |DM/CM| = 2 |sin(pi f dt)|, and CM reads low by cos(pi f dt).
    // A rate without a small ratio to the tone spreads 10^6 phases evenly: extremes are amplitudes to
    // (pi/10^6)²/2. Codes round to 0.5 µV a leg: 1 µV of DM, 1.4e-7 of 7 V.
    let (dm, cm) = sampled_apart(7.0, 0.0, 10_000.0, 1e-6, 499_979);
    println!("10 kHz: {:.7}, CM {:.7}", dm / 7.0, cm / 7.0);
    assert!((dm / 7.0 - 0.062_821_5).abs() < 1e-6); // T29
    assert!((cm / 7.0 - 0.999_506_6).abs() < 1e-6);
    assert!((20.0 * (dm / 7.0).log10() + 24.038).abs() < 1e-3);
    // T30: 50 Hz, -70.057 dB. Large legs, so that a microvolt is 0.001 dB of the 0.17 V that remain.
    let (dm, cm) = sampled_apart(500.0, 0.0, 50.0, 1e-6, 499_979);
    assert!((20.0 * (dm / cm).log10() + 70.057).abs() < 0.01, "{dm} of {cm}");
}

#[test]
fn t31_skewed_edges_make_a_common_mode_plateau() {
    // H. Johnson, "Common Mode Analysis of Skew": dV dt/(2 tr): 3 V, 30 ns, 3 ns give 0.150 V.
    // One sample per nanosecond; leg B is the inverse of A, three samples late.
    let rise = |t: f64| 3.0 * (t / 30.0).clamp(0.0, 1.0);
    let leg_a: Vec<i32> = (0..600).map(|t| microvolts(rise(f64::from(t) - 200.0))).collect();
    let leg_b: Vec<i32> = (0..600).map(|t| microvolts(3.0 - rise(f64::from(t) - 203.0))).collect();
    let board = boards::microvolt_board(1_000_000_000);
    let recorder = examine(board, settings_of(ReceiverId::Tia485A), &leg_a, &leg_b);
    let totals = recorder.totals();
    assert_eq!(totals.twice_cm.high.value - 3_000_000, 2 * 150_000);
    assert_eq!(totals.twice_cm.low.value, 3_000_000, "at rest CM is 1.5 V");
    assert!((203..=230).contains(&totals.twice_cm.high.sample));
}

#[test]
fn t32_skewed_differential_tone_leaks_into_common_mode() {
    // Receiver reference 3.6: (D/2) |sin(pi f dt)|: 3 V, 100 kHz, 100 ns give 47.116 mV.
    let (_, cm) = sampled_apart(0.0, 3.0, 100_000.0, 100e-9, 1_000_003);
    assert!((cm * 1e3 - 47.116).abs() < 0.01, "{} mV", cm * 1e3);
}

#[test]
fn t33_complex_amplitudes_of_legs_give_those_of_modes() {
    // Receiver reference 3.7, one bin: A = 3+2j, B = 1-1j: |CM|² 4.25, |DM|² 13, CM² + DM²/4 = 7.5.
    let samples = 6 * POINTS;
    let leg = |re: f64, im: f64| tone(re.hypot(im), 100.0 / POINTS as f64, im.atan2(re), samples);
    let codes = |leg: Vec<f64>| -> Vec<i32> { leg.into_iter().map(microvolts).collect() };
    let mut settings = settings_of(ReceiverId::Tia485A);
    settings.reporting.spectrum_segments = 11;
    let board = boards::microvolt_board(RATE_HZ);
    let recorder = examine(board, settings, &codes(leg(3.0, 2.0)), &codes(leg(1.0, -1.0)));
    let square = |mode| grandke(&recorder.spectrum(mode), RATE_HZ as f64, 100).1.powi(2);
    let (cm, dm) = (square(Mode::Common), square(Mode::Differential));
    println!("|CM|² {cm:.5}, |DM|² {dm:.5}");
    // One code of the peak and one of its neighbour: at zero offset the neighbour hardly matters.
    let limit = 1.5 * power::RELATIVE_ERROR;
    assert!((cm / 4.25 - 1.0).abs() < limit && (dm / 13.0 - 1.0).abs() < limit);
    assert!(((cm + dm / 4.0) / 7.5 - 1.0).abs() < limit);
}

#[test]
fn the_complex_split_vector_repeats_in_the_spectrum() {
    // vectors/complex_split.json: eight points of CM and DM and their transforms. Repeated without
    // end they are lines at every 128th of 1024 bins, each |X[k]|/8 of complex amplitude.
    let vector: serde_json::Value =
        serde_json::from_str(include_str!("../vectors/complex_split.json")).unwrap();
    let series = |name: &str| -> Vec<f64> {
        let eight: Vec<f64> = vector[name].as_array().unwrap().iter().map(|x| x.as_f64().unwrap()).collect();
        assert_eq!(eight.len(), 8);
        (0..3 * POINTS).map(|n| eight[n % 8]).collect()
    };
    let (code_a, code_b) = legs_uv(&series("cm"), &series("dm"));
    let mut settings = settings_of(ReceiverId::Tia485A);
    settings.reporting.spectrum_segments = 5;
    let recorder = examine(boards::microvolt_board(RATE_HZ), settings, &code_a, &code_b);
    for (name, mode) in [("C", Mode::Common), ("D", Mode::Differential)] {
        let spectrum = recorder.spectrum(mode);
        for k in 1..=4 {
            let part = |n: usize| vector[name][k][n].as_f64().unwrap() / 8.0;
            let norm = part(0).powi(2) + part(1).powi(2);
            // Power of a line: 2 |x|² inside, |x|² at fs/2; density: over ENBW fs/N.
            let lines = if k == 4 { 1.0 } else { 2.0 };
            let expected = lines * norm / (1.5 * RATE_HZ as f64 / POINTS as f64);
            let found = spectrum[128 * k];
            // f32 round-off of the strongest line (1e-7 of its amplitude) and µV rounding lie far below.
            assert!(
                (found - expected).abs() <= power::RELATIVE_ERROR * expected + 1e-12,
                "{name}[{k}]: {found:e} for {expected:e}"
            );
        }
    }
}

#[test]
fn t51_t52_t55_windows_of_can_and_flexray_are_inclusive() {
    let average = |id, cm: f64| is_inside(id, cm + 1.0, cm - 1.0);
    // T51: SN65HVD23x and SN75LBC031 data sheets, average -2 to 7 V.
    for (cm, is_in) in [(-2.0, true), (-2.1, false), (7.0, true), (7.1, false)] {
        assert_eq!(average(ReceiverId::CanHighSpeed2003, cm), is_in, "{cm} V");
    }
    // T52: TCAN1044V and TLE9263, 12 V; that each pin is meant is from memory.
    assert!(is_inside(ReceiverId::CanHighSpeed2016, 12.0, 10.0));
    assert!(!is_inside(ReceiverId::CanHighSpeed2016, 12.1, 10.0));
    // T55: NXP TJA1085, average -10 to 15 V.
    for (cm, is_in) in [(-10.0, true), (-10.1, false), (15.0, true), (15.1, false)] {
        assert_eq!(average(ReceiverId::FlexRay, cm), is_in, "{cm} V");
    }
}

#[test]
fn t53_to_t56_thresholds_decide_where_their_sources_say() {
    let cases = [
        // T53: SN65HVD23x, TLE9263 table 17: recessive to 0.5 V, dominant from 0.9 V.
        (ReceiverId::CanHighSpeed2003, 0.50, Decision::Low),
        (ReceiverId::CanHighSpeed2003, 0.70, Decision::Undefined),
        (ReceiverId::CanHighSpeed2003, 0.90, Decision::High),
        (ReceiverId::CanHighSpeed2016, 0.50, Decision::Low),
        (ReceiverId::CanHighSpeed2016, 0.70, Decision::Undefined),
        (ReceiverId::CanHighSpeed2016, 0.90, Decision::High),
        // T54: MAX3055: CANH 0.2, CANL 4.8 recessive; CANH 3.6, CANL 1.4 dominant; threshold near -3.2 V.
        (ReceiverId::CanFaultTolerant, 0.2 - 4.8, Decision::Low),
        (ReceiverId::CanFaultTolerant, -3.2, Decision::Undefined),
        (ReceiverId::CanFaultTolerant, 3.6 - 1.4, Decision::High),
        // T55: TJA1085: |DM| 150 to 300 mV may be decided either way.
        (ReceiverId::FlexRay, 0.15, Decision::Undefined),
        (ReceiverId::FlexRay, 0.299, Decision::Undefined),
        (ReceiverId::FlexRay, 0.3, Decision::High),
        (ReceiverId::FlexRay, -0.15, Decision::Undefined),
        (ReceiverId::FlexRay, -0.3, Decision::Low),
        // T56: TI SLLA272: valid from ±200 mV.
        (ReceiverId::Tia485A, 0.19, Decision::Undefined),
        (ReceiverId::Tia485A, 0.20, Decision::High),
        (ReceiverId::Tia485A, -0.20, Decision::Low),
        (ReceiverId::Tia485A, -0.19, Decision::Undefined),
    ];
    for (id, dm_v, decision) in cases {
        assert_eq!(decide(id, dm_v), decision, "{id:?} at {dm_v} V");
    }
}

/// Both modes of noise on leg A and a copy of it on leg B, `delay` samples late.
fn copied_noise(delay: usize) -> Recorder {
    let samples = 200 * POINTS;
    let noise = noise(&mut dice(9), samples + delay);
    let leg = |from: usize| -> Vec<i32> {
        noise[from..from + samples].iter().map(|volts| microvolts(0.5 * volts)).collect()
    };
    let mut settings = settings_of(ReceiverId::Tia485A);
    settings.reporting.spectrum_segments = 399;
    examine(boards::microvolt_board(RATE_HZ), settings, &leg(delay), &leg(0))
}

#[test]
fn noise_common_to_both_legs_is_common_mode_alone() {
    // Common practice, no source: what both legs share cancels in the difference, to the last bit.
    let recorder = copied_noise(0);
    let totals = recorder.totals();
    assert_eq!((totals.dm.low.value, totals.dm.high.value), (0, 0));
    assert_eq!(totals.twice_cm.high.value, 2 * totals.leg_a.high.value);
    assert!(recorder.spectrum(Mode::Differential).iter().all(|&density| density == 0.0));
    let theory = 0.25 / (RATE_HZ as f64 / 2.0);
    let mean = recorder.spectrum(Mode::Common)[3..510].iter().sum::<f64>() / 507.0;
    assert!((mean / theory - 1.0).abs() < 0.02, "{mean:e} for {theory:e}");
}

#[test]
fn a_delayed_copy_leaves_twice_the_sine_in_differential_mode() {
    // Common practice, no source: |DM/CM| = 2 |sin(pi f dt)| / |cos(pi f dt)| for a copy dt late, when
    // CM is the average of both; against the undelayed leg it is 2 |sin(pi f dt)|.
    let recorder = copied_noise(3);
    let (cm, dm) = (recorder.spectrum(Mode::Common), recorder.spectrum(Mode::Differential));
    let theory = 0.25 / (RATE_HZ as f64 / 2.0);
    let mut worst = 0.0_f64;
    for band in (8..500).step_by(24) {
        // Band means: 24 bins of 399 averages, 1.1 % standard deviation (Welch 1967, Hann 50 %).
        let mean = |spectrum: &[f64]| spectrum[band..band + 24].iter().sum::<f64>() / 24.0;
        let gains = |of: fn(f64) -> f64| {
            let gain = |bin: usize| of(PI * 3.0 * bin as f64 / POINTS as f64).powi(2);
            (band..band + 24).map(gain).sum::<f64>() / 24.0
        };
        let expected_dm = theory * 4.0 * gains(f64::sin);
        let expected_cm = theory * gains(f64::cos);
        // Four standard deviations, of the larger mode where the other is near its null.
        let error_dm = (mean(&dm) - expected_dm).abs() / (expected_dm + 0.2 * theory);
        let error_cm = (mean(&cm) - expected_cm).abs() / (expected_cm + 0.05 * theory);
        worst = worst.max(error_dm).max(error_cm);
        assert!(error_dm < 0.05 && error_cm < 0.05, "band {band}: {error_dm} {error_cm}");
    }
    println!("worst band {:.2} % off", worst * 100.0);
}
