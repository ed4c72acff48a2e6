//! Coherence, effective segments and radius against tables, a second Welch estimate, and many dice.
//!
//! `coherence_tables.json`: levels `1 − α^(1/(n−1))`, Welch's effective segments, one radius, by SciPy.
//! `welch_csd.csv`, `welch_summary.json`: both modes of a recording with data in every other block of 2048
//! samples, over all segments and over the idle ones, by SciPy's `csd`; its true conversion is
//! `0.02·e^(−jω/fs)`.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

mod conversion_pair;

use conversion_pair::{Analyser, RATE_HZ, Scene};
use legwise::spectrum::conversion::pool::Pool;
use legwise::spectrum::conversion::region::{Region, coherence_level};
use legwise::spectrum::conversion::{Coding, Direction, Input, PointKind, Record, Settings, conversion};
use legwise::spectrum::rung::{RungBin, RungSpectra, SegmentSet};
use legwise_tests::waveforms::{dice, noise};
use serde_json::Value;
use std::path::Path;

fn vector(name: &str) -> String {
    let path = Path::new(env!("CARGO_MANIFEST_DIR")).join("vectors").join(name);
    std::fs::read_to_string(path).unwrap()
}

fn json(name: &str) -> Value {
    serde_json::from_str(&vector(name)).unwrap()
}

/// One set of `segments` segments from columns of the vector file, starting with `column`.
fn from_csv(column: usize, has_coherence: bool, segments: u64, is_overlapped: bool) -> RungSpectra {
    let text = vector("welch_csd.csv");
    let rows = text.lines().filter(|line| !line.starts_with('#')).skip(1);
    let bins = rows.map(|row| {
        let values: Vec<f64> = row.split(',').map(|value| value.parse().unwrap()).collect();
        let [common, differential, re, im] = values[column..column + 4].try_into().unwrap();
        if has_coherence {
            let coherence = (re * re + im * im) / (common * differential);
            assert!((coherence / values[column + 4] - 1.0).abs() < 1e-6);
        }
        RungBin { common, differential, cross: (re, im) }
    });
    RungSpectra {
        rung: 0,
        rate_hz: RATE_HZ,
        points: 1024,
        set: SegmentSet::Idle,
        segments,
        skipped: 0,
        is_overlapped,
        other: 0,
        first_sample: 0,
        span_samples: 16_384,
        first_bin: 0,
        bins: bins.collect(),
    }
}

#[test]
fn coherence_levels_are_those_of_the_table() {
    let tables = json("coherence_tables.json");
    let mut checked = 0;
    for (n, levels) in tables["level"].as_object().unwrap() {
        for (alpha, level) in levels.as_object().unwrap() {
            let found = coherence_level(n.parse().unwrap(), alpha.parse().unwrap());
            assert!((found / level.as_f64().unwrap() - 1.0).abs() < 1e-12, "{n}, {alpha}");
            checked += 1;
        }
    }
    assert_eq!(checked, 24);
}

#[test]
fn one_bin_has_the_effective_segments_and_the_radius_of_the_tables() {
    let tables = json("coherence_tables.json");
    let of = |segments: u64, is_overlapped: bool, bin: RungBin| {
        let spectra = RungSpectra { bins: vec![bin; 8], ..from_csv(1, true, segments, is_overlapped) };
        let record = Record { spectra: &spectra, coding: Coding::Exact };
        Pool::of(record, PointKind::Band { bins: 1 }, &[5], Direction::Conversion)
    };
    let bin = RungBin { common: 2.0, differential: 3.0, cross: (0.4, -0.3) };
    for (segments, expected) in tables["neff_hann50"].as_object().unwrap() {
        let found = of(segments.parse().unwrap(), true, bin).effective_segments;
        assert!((found / expected.as_f64().unwrap() - 1.0).abs() < 1e-12, "{segments}: {found}");
    }
    let example = &tables["circle_radius_example"];
    let number = |name: &str| example[name].as_f64().unwrap();
    let ratio = number("Sdd_over_Scc");
    let cross = (number("gamma2") * ratio).sqrt();
    let bin = RungBin { common: 1.0, differential: ratio, cross: (0.6 * cross, 0.8 * cross) };
    let pool = of(number("n") as u64, false, bin);
    let region = Region::of(&pool, 1.0, None);
    assert!((region.radius / number("r") - 1.0).abs() < 1e-9, "{}", region.radius);
    assert!((region.ratio.0.hypot(region.ratio.1) / number("H_abs") - 1.0).abs() < 1e-12);
}

#[test]
fn idle_segments_of_the_recording_show_its_conversion_and_all_segments_do_not() {
    let summary = json("welch_summary.json");
    let peak = summary["peak_f"].as_f64().unwrap();
    let segments = summary["gated_K"].as_u64().unwrap();
    let idle = from_csv(6, false, segments, true);
    let records = [Record { spectra: &idle, coding: Coding::Exact }];
    let points = conversion(&Input { records: &records, ..Input::default() }, &Settings::default());
    let line = points.iter().find(|p| p.kind == PointKind::Line && p.frequency_hz == peak).unwrap();
    let expected = &summary["H1_idle_at_peak"];
    assert!((line.ratio.0 - expected[0].as_f64().unwrap()).abs() < 1e-9);
    assert!((line.ratio.1 - expected[1].as_f64().unwrap()).abs() < 1e-9);
    assert!(line.is_significant(), "{line:?}");
    // Every region holds the truth, save one in twenty: 95 % of the points and four standard deviations.
    let held = points.iter().filter(|point| {
        let turns = std::f64::consts::TAU * point.frequency_hz / RATE_HZ;
        let off = (point.ratio.0 - 0.02 * turns.cos()).hypot(point.ratio.1 + 0.02 * turns.sin());
        off <= point.radius
    });
    let (held, all) = (held.count(), points.len());
    println!(
        "{held} of {all} regions hold the truth; at the line {:.4}, radius {:.4}",
        line.magnitude(),
        line.radius
    );
    assert!(held * 100 >= all * 83, "{held} of {all}");

    let all = from_csv(1, true, summary["K"].as_u64().unwrap(), true);
    let records = [Record { spectra: &all, coding: Coding::Exact }];
    let points = conversion(&Input { records: &records, ..Input::default() }, &Settings::default());
    let wide = points.iter().filter(|point| point.radius > 0.02).count();
    assert!(wide * 10 > points.len() * 9, "with data in the segments the regions are wide");
}

#[test]
fn effective_segments_are_those_that_many_dice_show() {
    // Unrelated modes: the mean of γ² is 1/n and γ² exceeds the 5 % level once in twenty. Bands of level
    // and of falling density, 31 segments with half overlap and 600 runs: some
    // 13 000 points each, 0.9 % standard deviation of the mean.
    let analyser = Analyser::new();
    let (mut coherence, mut one_over_n, mut above, mut counts) = ([0.0; 4], [0.0; 4], [0; 4], [0; 4]);
    for seed in 0..600 {
        let mut dice = dice(7_000 + seed);
        let samples = 32 * 512;
        let scene = Scene { common_rms_v: 0.1, samples, ..Scene::default() };
        let sets = analyser.analyse(&scene, 90_000 + seed, 0.0);
        let white = analyser.welch(&noise(&mut dice, samples), &noise(&mut dice, samples));
        for (place, spectra) in [(0, &white), (2, &sets.idle)] {
            let records = [Record { spectra, coding: Coding::Exact }];
            let points = conversion(&Input { records: &records, ..Input::default() }, &Settings::default());
            for point in &points {
                let PointKind::Band { bins } = point.kind else { continue };
                let place = place + usize::from(bins > 4);
                coherence[place] += point.coherence;
                one_over_n[place] += 1.0 / point.effective_segments;
                above[place] += u32::from(point.coherence > coherence_level(point.effective_segments, 0.05));
                counts[place] += 1;
            }
        }
    }
    for place in 0..4 {
        let ratio = coherence[place] / one_over_n[place];
        let percent = 100.0 * f64::from(above[place]) / f64::from(counts[place]);
        println!(
            "case {place}: mean coherence × n = {ratio:.4}, above the 5 % level {percent:.2} %, {}",
            counts[place]
        );
        assert!(counts[place] > 3000);
        assert!((0.97..=1.03).contains(&ratio), "case {place}: {ratio}");
        assert!((4.3..=5.7).contains(&percent), "case {place}: {percent}");
    }
}
