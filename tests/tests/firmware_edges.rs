//! Sampling skew: false peaks of the average at data edges are told from true excursions.
//!
//! Leg B is sampled later, so at a data edge the average takes a peak that is not on the bus: up to a
//! quarter of the DM swing (derived: VB moves DM/2 within the skew, the average moves half of that).
//! Interpolation leaves at half a sample 1/2 of the leg's step on one sample and 1/16 beside it (step
//! response of [-1 9 9 -1]/16); the average sees half of both.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

use legwise_firmware::settings;
use legwise_firmware::source::SourceDescription;
use legwise_protocol::limits::{LimitSet, Window};
use legwise_protocol::message::Settings;
use legwise_protocol::receivers::{self, ReceiverId};
use legwise_tests::boards;
use legwise_tests::recorder::Recorder;
use legwise_tests::waveforms::Data;

const RATE_HZ: u64 = 500_000;
/// Half a sample at that rate.
const SKEW_NS: i32 = 1_000;
const PAIRS: usize = 60_000;
/// 0.2 V below the limit of the average; beside an edge the interpolator leaves 1/16 of 2 V, halved.
const CM_V: f64 = 6.8;

fn can_settings() -> Settings {
    // Average only, -2 to 7 V: SN65HVD23x data sheet.
    let receiver = receivers::by_id(ReceiverId::CanHighSpeed2003).unwrap();
    let mut settings = settings::for_receiver(receiver, RATE_HZ * 1000);
    settings.reporting.spectrum_segments = 0;
    settings.detection.storm_after = u32::MAX;
    settings
}

/// Samples a pair whose average is constant: A at each instant, B `skew` samples later.
fn sample_pair(data: &Data, cm_v: f64, skew_samples: f64) -> (Vec<i32>, Vec<i32>) {
    let leg = |sign: f64, delay: f64| {
        (0..PAIRS).map(|n| boards::microvolts(cm_v + sign * data.at(n as f64 + delay) / 2.0)).collect()
    };
    (leg(1.0, 0.0), leg(-1.0, skew_samples))
}

/// Feeds in small deliveries; whether the alarm was ever on.
fn run(board: SourceDescription, settings: Settings, code_a: &[i32], code_b: &[i32]) -> (Recorder, bool) {
    let mut recorder = Recorder::new(board, settings);
    let mut has_alarmed = false;
    for (a, b) in code_a.chunks(100).zip(code_b.chunks(100)) {
        recorder.feed(a, b);
        has_alarmed |= recorder.pipeline.take_alarm();
    }
    recorder.end();
    has_alarmed |= recorder.pipeline.take_alarm();
    (recorder, has_alarmed)
}

fn skewed() -> SourceDescription {
    boards::skewed_board(RATE_HZ, SKEW_NS)
}

/// 9600 Bd, 115 200 Bd, and the longest bits that are shorter than the hold-off of four samples.
const BITS_SAMPLES: [f64; 3] = [500e3 / 9_600.0, 500e3 / 115_200.0, 3.7];

#[test]
fn false_peaks_of_a_clean_skewed_pair_are_suspects_and_raise_no_alarm() {
    let cases = BITS_SAMPLES.into_iter().flat_map(|bit| [(bit, 1.0), (bit, -1.0)]);
    for (bit_samples, sign) in cases {
        let data = Data::new(11, PAIRS, bit_samples, 0.05, (2.0, -2.0));
        let (code_a, code_b) = sample_pair(&data, CM_V, sign * 0.5);
        let board = boards::skewed_board(RATE_HZ, sign as i32 * SKEW_NS);
        let (recorder, has_alarmed) = run(board, can_settings(), &code_a, &code_b);
        let totals = recorder.totals();
        let edges = data.edges().iter().filter(|edge| **edge < PAIRS as f64).count();
        println!(
            "{bit_samples:.2} samples per bit: {edges} edges, {} samples outside, {} suspects, alarm {has_alarmed}",
            totals.outside, totals.edge_suspects
        );
        assert!(recorder.excursions().iter().all(|record| record.is_edge_suspect));
        assert_eq!(recorder.excursions().len() as u64, totals.edge_suspects);
        assert_eq!(totals.excursions, 0);
        assert!(!has_alarmed);
        // One edge in two is a falling peak, the other half rises; a few fall between the instants.
        assert!(totals.outside > edges as u64 / 4, "{totals:?}");
        let sum: u64 = recorder.excursions().iter().map(|record| record.breach.outside_samples).sum();
        assert_eq!(sum, totals.outside);
        // Readings of the average leave the edges out: what is left is the interpolator's 1/16.
        let reach = 1.0 / 16.0;
        let highest = f64::from(totals.twice_cm.high.value) / 2e6;
        assert!((highest - CM_V).abs() <= reach + 1e-6, "{highest}");
    }
}

#[test]
fn suspects_that_never_end_are_cut_into_suspects() {
    // Alternating bits shorter than the hold-off: one open stretch for the whole run.
    let mut settings = can_settings();
    settings.detection.longest_samples = 1_000;
    let code_a: Vec<i32> = (0..PAIRS).map(|n| if n / 4 % 2 == 0 { 7_800_000 } else { 5_800_000 }).collect();
    // Leg B already has its new level half a sample later: its step comes one index early.
    let code_b: Vec<i32> = (1..=PAIRS).map(|n| if n / 4 % 2 == 0 { 5_800_000 } else { 7_800_000 }).collect();
    settings.detection.hold_off_samples = 10;
    let (recorder, has_alarmed) = run(skewed(), settings, &code_a, &code_b);
    assert!(!has_alarmed);
    assert_eq!(recorder.totals().excursions, 0);
    let lengths: Vec<u32> = recorder.excursions().iter().map(|record| record.samples).collect();
    assert!(lengths.len() >= PAIRS / 1_010 && lengths.iter().all(|&length| length <= 1_000), "{lengths:?}");
    assert!(recorder.totals().outside > PAIRS as u64 / 10);
}

#[test]
fn a_true_excursion_of_two_samples_is_reported_and_alarms_even_on_an_edge() {
    for bit_samples in BITS_SAMPLES {
        let data = Data::new(11, PAIRS, bit_samples, 0.05, (2.0, -2.0));
        let edges = data.edges();
        let middle = (edges[edges.len() / 2] + bit_samples / 2.0) as usize;
        let on_edge = edges[edges.len() / 3].ceil() as usize;
        for first in [middle, on_edge] {
            let (mut code_a, mut code_b) = sample_pair(&data, CM_V, 0.5);
            for n in first..first + 2 {
                code_a[n] += 2_000_000;
                code_b[n] += 2_000_000;
            }
            let (recorder, has_alarmed) = run(skewed(), can_settings(), &code_a, &code_b);
            let confirmed: Vec<_> =
                recorder.excursions().into_iter().filter(|record| !record.is_edge_suspect).collect();
            assert_eq!(confirmed.len(), 1, "{bit_samples} at {first}");
            let range =
                confirmed[0].first_sample..confirmed[0].first_sample + u64::from(confirmed[0].samples);
            assert!(range.contains(&(first as u64)) && range.contains(&(first as u64 + 1)));
            assert!(has_alarmed && recorder.totals().excursions == 1);
            assert!(confirmed[0].breach.extreme_twice_uv > 2 * 8_000_000);
        }
    }
}

#[test]
fn without_declared_skew_nothing_is_ever_a_suspect() {
    let data = Data::new(11, PAIRS, 500e3 / 9_600.0, 0.05, (2.0, -2.0));
    let (code_a, code_b) = sample_pair(&data, CM_V, 0.5);
    let (recorder, has_alarmed) = run(boards::microvolt_board(RATE_HZ), can_settings(), &code_a, &code_b);
    assert!(recorder.excursions().iter().all(|record| !record.is_edge_suspect));
    assert_eq!(recorder.totals().edge_suspects, 0);
    assert!(recorder.totals().excursions > 100 && has_alarmed);
    // The readings then hold the peaks, a quarter of the swing.
    assert_eq!(recorder.totals().twice_cm.high.value, 2 * 7_800_000);
}

#[test]
fn a_leg_is_judged_on_its_own_samples_so_overshoot_invents_nothing() {
    // Leg B rests exactly on the limit of TIA-485-A and steps 4 V down and back: the interpolated leg
    // overshoots by 1/16 of that, 0.25 V beyond the limit. The average stays at 10 V.
    let receiver = receivers::by_id(ReceiverId::Tia485A).unwrap();
    let mut settings = settings::for_receiver(receiver, RATE_HZ * 1000);
    settings.reporting.spectrum_segments = 0;
    let data = Data::new(3, PAIRS, 40.3, 0.05, (4.0, -4.0));
    for skew_ns in [SKEW_NS, -SKEW_NS, 300, 1_700] {
        let skew_samples = f64::from(skew_ns) * 500e3 / 1e9;
        let (code_a, code_b) = sample_pair(&data, 10.0, skew_samples);
        let (recorder, has_alarmed) = run(boards::skewed_board(RATE_HZ, skew_ns), settings, &code_a, &code_b);
        let totals = recorder.totals();
        assert_eq!(totals.leg_b.high.value, 12_000_000);
        assert_eq!((totals.outside, recorder.excursions().len(), has_alarmed), (0, 0, false), "{skew_ns} ns");
        // The overshoot is there, in DM: 8 V less the interpolated overshoot.
        assert!(totals.dm.high.value.max(-totals.dm.low.value) > 4_050_000, "{:?}", totals.dm);
    }
}

#[test]
fn a_suspect_that_breaks_a_leg_limit_too_is_no_suspect() {
    // The same false peaks, but one leg is truly outside for that sample.
    let data = Data::new(11, PAIRS, 52.0, 0.05, (2.0, -2.0));
    let (mut code_a, code_b) = sample_pair(&data, CM_V, 0.5);
    let mut settings = can_settings();
    settings.limits = LimitSet { terminal: Some(Window::from_millivolts(-2_000, 9_000)), ..settings.limits };
    let at = data.edges()[20].ceil() as usize;
    code_a[at] = 9_000_001;
    let (recorder, has_alarmed) = run(skewed(), settings, &code_a, &code_b);
    let confirmed: Vec<_> = recorder.excursions().into_iter().filter(|r| !r.is_edge_suspect).collect();
    assert_eq!(confirmed.len(), 1);
    assert!(confirmed[0].first_sample <= at as u64 && has_alarmed);
}
