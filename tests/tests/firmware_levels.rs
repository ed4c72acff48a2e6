//! Levels of three-state signals: where the pair rests and where it is driven to.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

use legwise_firmware::settings;
use legwise_protocol::message::{Level, Levels, Settings};
use legwise_protocol::receivers::{self, ReceiverId};
use legwise_tests::boards::{self, microvolts};
use legwise_tests::recorder::examine;
use legwise_tests::waveforms::{Data, dice, legs_uv, noise};

const RATE_HZ: u64 = 500_000;
/// Bins either side of a mode that count to it, 16.384 mV each: a level is the mean of the samples
/// within 41 mV (2.5 bins), so noise is cut there, perhaps off centre by half a bin.
const BIN_V: f64 = 16.384e-3;
/// Offsets inside a bin are cut to 16 µV and half of that is added back.
const OFFSET_V: f64 = 16e-6;

fn settings_of(id: ReceiverId) -> Settings {
    let mut settings = settings::for_receiver(receivers::by_id(id).unwrap(), RATE_HZ * 1000);
    settings.reporting.spectrum_segments = 0;
    settings.limits = Default::default();
    settings
}

/// Levels of a waveform given as modes in volts.
fn levels_of(id: ReceiverId, cm_v: &[f64], dm_v: &[f64]) -> Levels {
    let (code_a, code_b) = legs_uv(cm_v, dm_v);
    let recorder = examine(boards::microvolt_board(RATE_HZ), settings_of(id), &code_a, &code_b);
    let levels = recorder.levels();
    assert_eq!(levels.len(), 1);
    assert_eq!(levels[0].samples as usize, dm_v.len());
    levels[0]
}

#[track_caller]
fn assert_level(name: &str, level: Option<Level>, truth_v: f64, tolerance_v: f64) {
    let level = level.unwrap_or_else(|| panic!("no {name} level"));
    let error_v = f64::from(level.dm_uv) * 1e-6 - truth_v;
    println!("{name}: {:+.1} mV off, {} samples", error_v * 1e3, level.samples);
    assert!(error_v.abs() <= tolerance_v, "{name}: {error_v} V off");
}

/// Traffic in bursts: `busy` of every `period` samples, resting otherwise; Gaussian noise on DM.
struct Traffic {
    seed: u64,
    busy: usize,
    period: usize,
    driven_v: (f64, f64),
    idle_v: f64,
    noise_v: f64,
    edge_samples: f64,
}

const PAIRS: usize = 200_000;

impl Traffic {
    fn dm(&self) -> Vec<f64> {
        let data = Data::new(self.seed, PAIRS, 500e3 / 19_200.0, self.edge_samples, self.driven_v);
        let noise = noise(&mut dice(self.seed + 1), PAIRS);
        (0..PAIRS)
            .map(|n| {
                let is_busy = n % self.period < self.busy;
                let level = if is_busy { data.at(n as f64) } else { self.idle_v };
                level + self.noise_v * noise[n]
            })
            .collect()
    }
}

/// Noise cut at ±2.5 bins about a centre off by up to half a bin: with sigma of two bins the mean of
/// what is left is off by less than that half bin; sampling adds little with thousands of samples.
const NOISE_TOLERANCE_V: f64 = BIN_V / 2.0;

#[test]
fn three_states_are_told_apart_whatever_share_of_the_time_they_take() {
    // Signal reference 7: +2.1/-1.9 V, 30 mV noise, idle +0.25 V. At 80 % idle two-state methods call
    // the resting level "high".
    for (busy, period) in [(2_000, 10_000), (5_000, 10_000), (9_500, 10_000), (600, 10_000)] {
        let traffic = Traffic {
            seed: 1,
            busy,
            period,
            driven_v: (2.1, -1.9),
            idle_v: 0.25,
            noise_v: 0.03,
            edge_samples: 0.5,
        };
        let levels = levels_of(ReceiverId::Tia485A, &vec![2.5; PAIRS], &traffic.dm());
        assert_level("idle", levels.idle, 0.25, NOISE_TOLERANCE_V);
        assert_level("high", levels.driven_high, 2.1, NOISE_TOLERANCE_V);
        assert_level("low", levels.driven_low, -1.9, NOISE_TOLERANCE_V);
        // The resting samples lie within 0.3 to 0.7 of nothing; edges of half a sample rarely do.
        assert!(f64::from(levels.mid_samples) < 0.02 * busy as f64 / period as f64 * PAIRS as f64);
    }
}

#[test]
fn without_noise_a_level_is_good_to_its_offset_steps() {
    let levels = [(1.234_567, -2.345_678, 0.101_010), (0.9, -0.9, -0.3), (5.0, -5.0, 0.0), (2.0, -2.0, 0.59)];
    for (high, low, idle) in levels {
        let traffic = Traffic {
            seed: 2,
            busy: 5_000,
            period: 10_000,
            driven_v: (high, low),
            idle_v: idle,
            noise_v: 0.0,
            edge_samples: 0.01,
        };
        let levels = levels_of(ReceiverId::Tia485A, &vec![2.5; PAIRS], &traffic.dm());
        assert_level("idle", levels.idle, idle, OFFSET_V);
        assert_level("high", levels.driven_high, high, OFFSET_V);
        assert_level("low", levels.driven_low, low, OFFSET_V);
        assert_eq!(levels.mid_samples, 0);
    }
}

#[test]
fn levels_agree_with_the_state_level_vector() {
    // vectors/state_levels.json: DM in steps of 24/4096 V, 3200 busy samples, then 1600 at rest.
    // Medians beyond ±0.6 V: -1.8984 and 2.0977 V; its modes have bins of 47 mV and half a bin of error.
    let vector: serde_json::Value =
        serde_json::from_str(include_str!("../vectors/state_levels.json")).unwrap();
    let step_v = 24.0 / 4_096.0;
    let codes: Vec<i32> =
        vector["codes"].as_array().unwrap().iter().map(|code| code.as_i64().unwrap() as i32).collect();
    let scale = boards::converter(12, 24.0, 0.0);
    let leg_a: Vec<i32> = codes.iter().map(|code| 2_048 + code).collect();
    let board = boards::converter_board(RATE_HZ, scale);
    let recorder = examine(board, settings_of(ReceiverId::Tia485A), &leg_a, &vec![2_048; codes.len()]);
    let levels = recorder.levels()[0];
    let number = |value: &serde_json::Value| value.as_f64().unwrap();
    // Medians of codes move in whole steps; the refined mode does not: one step, and half a bin.
    let tolerance = step_v + NOISE_TOLERANCE_V;
    assert_level("low", levels.driven_low, number(&vector["median_split_0p6V"][0]), tolerance);
    assert_level("high", levels.driven_high, number(&vector["median_split_0p6V"][1]), tolerance);
    let coarse = 8.0 * step_v / 2.0 + NOISE_TOLERANCE_V;
    assert_level("low", levels.driven_low, number(&vector["mode_busy_only"][0]), coarse);
    assert_level("high", levels.driven_high, number(&vector["mode_busy_only"][1]), coarse);
    // What the two-state method calls high is the resting level.
    assert_level("idle", levels.idle, number(&vector["mode_all"][1]), coarse);
}

#[test]
fn a_two_state_bus_has_no_driven_low() {
    // CAN: recessive 0 V, dominant 2 V (workshop manuals: 3.5/1.5 V).
    let traffic = Traffic {
        seed: 3,
        busy: 6_000,
        period: 10_000,
        driven_v: (2.0, 0.0),
        idle_v: 0.0,
        noise_v: 0.03,
        edge_samples: 0.5,
    };
    let levels = levels_of(ReceiverId::CanHighSpeed2003, &vec![2.5; PAIRS], &traffic.dm());
    assert_level("recessive", levels.idle, 0.0, NOISE_TOLERANCE_V);
    assert_level("dominant", levels.driven_high, 2.0, NOISE_TOLERANCE_V);
    assert_eq!(levels.driven_low, None);
}

#[test]
fn a_strongly_biased_pair_rests_beyond_the_threshold() {
    // PROFIBUS termination: 1.1 V at rest (receiver reference, example 2), driven to ±2.5 V. Either sign.
    for sign in [1.0, -1.0] {
        let traffic = Traffic {
            seed: 4,
            busy: 4_000,
            period: 10_000,
            driven_v: (sign * 2.5, -sign * 2.5),
            idle_v: sign * 1.1,
            noise_v: 0.03,
            edge_samples: 0.5,
        };
        let levels = levels_of(ReceiverId::Tia485A, &vec![2.5; PAIRS], &traffic.dm());
        assert_level("idle", levels.idle, sign * 1.1, NOISE_TOLERANCE_V);
        assert_level("high", levels.driven_high, 2.5, NOISE_TOLERANCE_V);
        assert_level("low", levels.driven_low, -2.5, NOISE_TOLERANCE_V);
    }
}

#[test]
fn a_resting_level_at_the_threshold_is_not_taken_for_a_driven_one() {
    // 0.6 V is the threshold of the resting state: half of the noise about it lies beyond.
    for idle_v in [0.53, 0.56, 0.58, 0.59, 0.595, -0.58, -0.595] {
        for noise_v in [0.0, 0.01, 0.025] {
            let traffic = Traffic {
                seed: 8,
                busy: 2_000,
                period: 10_000,
                driven_v: (2.1, -1.9),
                idle_v,
                noise_v,
                edge_samples: 0.5,
            };
            let levels = levels_of(ReceiverId::Tia485A, &vec![2.5; PAIRS], &traffic.dm());
            assert_level("idle", levels.idle, idle_v, 2.0 * BIN_V);
            assert_level("high", levels.driven_high, 2.1, NOISE_TOLERANCE_V);
            assert_level("low", levels.driven_low, -1.9, NOISE_TOLERANCE_V);
        }
    }
}

#[test]
fn a_silent_line_has_a_resting_level_and_nothing_is_driven() {
    for noise_v in [0.001, 0.03, 0.1] {
        let dm: Vec<f64> = noise(&mut dice(5), PAIRS).iter().map(|x| 0.21 + noise_v * x).collect();
        let levels = levels_of(ReceiverId::Tia485A, &vec![0.3; PAIRS], &dm);
        // 0.1 V is six bins: the mode itself wanders by a bin or two.
        let tolerance = if noise_v > 0.05 { 3.0 * BIN_V } else { NOISE_TOLERANCE_V };
        assert_level("idle", levels.idle, 0.21, tolerance);
        assert_eq!((levels.driven_high, levels.driven_low, levels.mid_samples), (None, None, 0));
    }
}

#[test]
fn slow_edges_show_as_mid_level_share() {
    // Edges over a third of the bit: 40 % of each edge lies between 0.3 and 0.7 of a driven level on its
    // own side of zero. An edge from -2 to 2 V spends 0.8/4 of its time on each side there.
    let (edge, bit) = (9.0, 500e3 / 19_200.0);
    let data = Data::new(6, PAIRS, bit, edge, (2.0, -2.0));
    let dm: Vec<f64> = (0..PAIRS).map(|n| data.at(n as f64)).collect();
    let levels = levels_of(ReceiverId::Tia485A, &vec![2.5; PAIRS], &dm);
    let edges = data.edges().iter().filter(|edge| **edge < PAIRS as f64).count() as f64;
    let expected = edges * edge * 2.0 * 0.8 / 4.0;
    let found = f64::from(levels.mid_samples);
    println!("mid-level: {found} samples, {expected:.0} by geometry");
    // Bounds of the range fall on bins of 16 mV: ±1 bin of the 0.8 V at each of two ends, 4 %.
    assert!((found / expected - 1.0).abs() < 0.04);
}

#[test]
fn the_common_mode_is_told_apart_by_state() {
    // A talker pulls the pair to its own ground: CM 2.5 V at rest, 3.1 V while it drives.
    let traffic = Traffic {
        seed: 7,
        busy: 5_000,
        period: 10_000,
        driven_v: (2.0, -2.0),
        idle_v: 0.2,
        noise_v: 0.0,
        edge_samples: 0.01,
    };
    let cm: Vec<f64> = (0..PAIRS).map(|n| if n % 10_000 < 5_000 { 3.1 } else { 2.5 }).collect();
    let levels = levels_of(ReceiverId::Tia485A, &cm, &traffic.dm());
    let plateaus = [levels.idle_cm, levels.high_cm, levels.low_cm];
    assert_eq!(plateaus.map(|plateau| plateau.twice_cm_uv), [5_000_000, 6_200_000, 6_200_000]);
    let settled: u32 = plateaus.iter().map(|plateau| plateau.samples).sum();
    // Every sample counts except those whose state is not that of the one before.
    let dm = traffic.dm();
    let state = |dm: f64| (microvolts(dm) > 600_000, microvolts(dm) < -600_000);
    let changes = dm.windows(2).filter(|pair| state(pair[0]) != state(pair[1])).count();
    let first = usize::from(state(dm[0]) != (false, false));
    assert_eq!(settled as usize, PAIRS - changes - first);
}
