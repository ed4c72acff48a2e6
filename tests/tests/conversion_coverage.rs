//! Stated regions against the truth: pairs with known conversion under traffic, a thousand runs and more.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

mod conversion_pair;

use conversion_pair::{Analyser, POINTS, RATE_HZ, Scene, Sets, over_the_wire};
use legwise::spectrum::conversion::{
    Coding, Input, Point, PointKind, Refusal, Settings, Verdict, conversion,
};
use legwise_tests::waveforms::dice;
use rand::RngExt;
use rand_chacha::ChaCha8Rng;
use rustfft::num_complex::Complex64;

const ONE: Coding = Coding::Wire { averages: 1 };
/// Common-mode noise of the board: legs of 3.4 mV rms over 250 kHz, a quarter of the sum of both.
const COMMON_NOISE: f64 = 3.4e-3 * 3.4e-3 / 2.0 / (RATE_HZ / 2.0);

/// Sets as they came over the wire.
fn received(sets: &Sets) -> Sets {
    Sets { idle: over_the_wire(&sets.idle), driven: over_the_wire(&sets.driven) }
}

/// The truth a point stands for: the true ratio at its bins, weighted by the common mode there; at a line
/// the one at the frequency of the tone.
fn truth(scene: &Scene, sets: &Sets, point: &Point) -> Complex64 {
    let bin_hz = RATE_HZ / POINTS as f64;
    if point.kind == PointKind::Line {
        let tone = scene.lines.iter().map(|(bins, _)| bins * bin_hz);
        let off = |frequency: &f64| (frequency - point.frequency_hz).abs();
        return scene.truth(tone.min_by(|a, b| off(a).total_cmp(&off(b))).unwrap());
    }
    let inside = |frequency: f64| frequency > point.band_hz.0 && frequency < point.band_hz.1;
    let (mut sum, mut weight) = (Complex64::default(), 0.0);
    for (number, bin) in sets.idle.bins.iter().enumerate() {
        let frequency = number as f64 * bin_hz;
        if inside(frequency) {
            sum += bin.common * scene.truth(frequency);
            weight += bin.common;
        }
    }
    sum / weight
}

fn distance(point: &Point, truth: Complex64) -> f64 {
    (Complex64::new(point.ratio.0, point.ratio.1) - truth).norm()
}

/// Counts of points and of those that hold the truth.
#[derive(Default, Debug)]
struct Held {
    points: u32,
    held: u32,
}

impl Held {
    fn count(&mut self, holds: bool) {
        self.points += 1;
        self.held += u32::from(holds);
    }

    fn percent(&self) -> f64 {
        100.0 * f64::from(self.held) / f64::from(self.points.max(1))
    }
}

/// A random pair: conversion -60 to -10 dB, traffic 0 to 100 %, noise and three lines in the common mode.
fn random_scene(dice: &mut ChaCha8Rng, run: u64) -> (Scene, f64) {
    let decibels = dice.random_range(-60.0..-10.0);
    let magnitude = 10.0_f64.powf(decibels / 20.0);
    let share = dice.random_range(0.0..1.0);
    let sign = if dice.random::<bool>() { magnitude } else { -magnitude };
    // What is converted must not look like activity: 0.5 V is ten times its rms.
    let common_rms_v = dice.random_range(0.05..1.0_f64).min(0.04 / magnitude);
    let line = |dice: &mut ChaCha8Rng, number: usize| {
        let bins = 12.0 + 120.0 * number as f64 + dice.random_range(0.0..40.0);
        (bins, common_rms_v * dice.random_range(0.3..1.0))
    };
    let lines = (0..3).map(|number| line(dice, number)).collect();
    let duty = match run % 10 {
        0 => 0.0,
        1 => 1.0,
        _ => dice.random_range(0.0..1.0),
    };
    let baud = [19_200.0, 38_400.0, 57_600.0, 115_200.0][dice.random_range(0..4)];
    let imbalance = dice.random_range(0.0..0.03);
    let filter = (sign * share, sign * (1.0 - share));
    (Scene { filter, imbalance, common_rms_v, lines, duty, baud, ..Scene::default() }, decibels)
}

/// What a run tells of its regions.
#[derive(Default)]
struct Tally {
    /// One random point of each run.
    per_run: Held,
    bands: Held,
    /// Lines, by magnitude in steps of 10 dB from -10 dB down.
    lines: [Held; 5],
    limits: Held,
    claimed: u32,
}

impl Tally {
    fn add(&mut self, scene: &Scene, exact: &Sets, told: &[Point], decibels: f64, choice: f64) {
        let chosen = (choice * told.len() as f64) as usize;
        for (place, point) in told.iter().enumerate() {
            let truth = truth(scene, exact, point);
            let holds = distance(point, truth) <= point.radius;
            match point.kind {
                PointKind::Line => self.lines[(((-10.0 - decibels) / 10.0) as usize).min(4)].count(holds),
                PointKind::Band { .. } => self.bands.count(holds),
            }
            match point.verdict {
                Verdict::Significant => self.claimed += 1,
                Verdict::UpperLimit { magnitude, .. } => self.limits.count(truth.norm() <= magnitude),
                Verdict::Refused(_) => {}
            }
            if place == chosen {
                self.per_run.count(holds);
            }
        }
    }

    fn print(&self, name: &str) {
        println!(
            "{name}: one point per run: {:.1} % of {} hold the truth",
            self.per_run.percent(),
            self.per_run.points
        );
        println!("    bands {:.2} % of {}", self.bands.percent(), self.bands.points);
        for (place, lines) in self.lines.iter().enumerate() {
            let from = -10 - 10 * place as i32;
            println!(
                "    lines from {from} to {} dB {:.2} % of {}",
                from - 10,
                lines.percent(),
                lines.points
            );
        }
        let (limits, claimed) = (&self.limits, self.claimed);
        println!(
            "    {claimed} claims; {:.2} % of {} limits above the truth",
            limits.percent(),
            limits.points
        );
    }
}

/// Points of which something is said.
fn told(sets: &Sets, coding: Coding) -> Vec<Point> {
    let records = sets.records(coding);
    let input = Input { records: &records, board: None, common_noise_v2_per_hz: Some(COMMON_NOISE) };
    let points = conversion(&input, &Settings::default());
    points.into_iter().filter(|point| !matches!(point.verdict, Verdict::Refused(_))).collect()
}

#[test]
fn regions_hold_the_true_conversion_in_95_of_100_runs() {
    let analyser = Analyser::new();
    let mut dice = dice(4_001);
    let (mut wire, mut computed) = (Tally::default(), Tally::default());
    let (mut refused_runs, mut runs) = (0, 0);
    while wire.per_run.points < 1000 {
        let (scene, decibels) = random_scene(&mut dice, runs);
        runs += 1;
        let exact = analyser.analyse(&scene, dice.random(), 0.0);
        let received = told(&received(&exact), ONE);
        if exact.idle.effective_segments() < 8.0 {
            assert!(received.is_empty(), "{} idle segments and yet a statement", exact.idle.segments);
            refused_runs += 1;
            continue;
        }
        let choice = dice.random();
        wire.add(&scene, &exact, &received, decibels, choice);
        computed.add(&scene, &exact, &told(&exact, Coding::Exact), decibels, choice);
    }
    println!("{runs} runs, {refused_runs} without enough idle segments");
    wire.print("over the wire");
    computed.print("as computed");
    for tally in [&wire, &computed] {
        assert!((93.0..=97.0).contains(&tally.per_run.percent()));
        assert!((94.0..=96.0).contains(&tally.bands.percent()));
        assert!(tally.limits.percent() >= 95.0 && tally.limits.points > 1000 && tally.claimed > 10_000);
    }
    // Few segments and near full coherence: rounding hides how little is unexplained, and the region is
    // wider than it need be. Elsewhere lines have 600 points each, 0.9 % standard deviation.
    assert!(wire.lines.iter().all(|lines| lines.percent() >= 93.0 && lines.points > 300));
    assert!(wire.lines[3..].iter().all(|lines| lines.percent() <= 97.5));
    assert!(computed.lines.iter().all(|lines| (92.5..=97.5).contains(&lines.percent())));
    assert!(refused_runs > 50);
}

/// Points that claim something.
fn claims(points: &[Point]) -> usize {
    points.iter().filter(|point| point.is_significant()).count()
}

#[test]
fn a_driver_out_of_balance_is_never_taken_for_a_pair_that_converts() {
    // 2 % of the data in the common mode and nothing converted; with common-mode noise and without, board
    // noise known and unknown; legs equal.
    let analyser = Analyser::new();
    let mut dice = dice(4_002);
    let (mut runs, mut wrong_runs) = (0, 0);
    for run in 0..600_u64 {
        let common_rms_v = [0.0, 0.02, 0.3][run as usize % 3];
        let baud = [19_200.0, 57_600.0, 115_200.0][(run / 3) as usize % 3];
        let duty = dice.random_range(0.05..0.8);
        let scene = Scene { imbalance: 0.02, common_rms_v, duty, baud, ..Scene::default() };
        let sets = received(&analyser.analyse(&scene, dice.random(), 0.0));
        let records = sets.records(ONE);
        let common_noise_v2_per_hz = (run % 2 == 0).then_some(COMMON_NOISE);
        let input = Input { records: &records, board: None, common_noise_v2_per_hz };
        let points = conversion(&input, &Settings::default());
        if points
            .iter()
            .any(|point| !matches!(point.verdict, Verdict::Refused(Refusal::TooFewSegments { .. })))
        {
            runs += 1;
            wrong_runs += usize::from(claims(&points) > 0);
        }
    }
    println!("{wrong_runs} of {runs} runs claim a conversion");
    assert!(runs > 300);
    assert!(wrong_runs * 100 <= runs, "more than 1 %");
}

#[test]
fn data_in_the_idle_set_are_not_taken_for_conversion() {
    // The selection fails: a share of the driven segments, up to all, ends up in the idle set.
    let analyser = Analyser::new();
    let mut dice = dice(4_003);
    let (mut points_seen, mut coherent, mut wrong_runs) = (0, 0, 0);
    let runs = 300;
    for run in 0..runs {
        let common_rms_v = [0.0, 0.05, 0.5][run % 3];
        let lapse = [0.02, 0.2, 0.5, 0.8][(run / 3) % 4];
        let duty = dice.random_range(0.2..0.9);
        let scene = Scene { imbalance: 0.02, common_rms_v, duty, ..Scene::default() };
        let sets = received(&analyser.analyse(&scene, dice.random(), lapse));
        let records = sets.records(ONE);
        let input = Input { records: &records, board: None, common_noise_v2_per_hz: Some(COMMON_NOISE) };
        let points = conversion(&input, &Settings::default());
        points_seen += points.len();
        coherent += points.iter().filter(|point| point.coherence > point.coherence_level).count();
        wrong_runs += usize::from(claims(&points) > 0);
    }
    println!("{coherent} of {points_seen} points coherent, {wrong_runs} of {runs} runs claim");
    assert!(coherent * 10 > points_seen, "the trap was not set");
    assert!(wrong_runs * 100 <= runs, "more than 1 %");
}

#[test]
fn unrelated_modes_are_claimed_as_often_as_the_level_says() {
    // Coloured common mode with lines, noise in the differential mode, nothing in common. A level of 10 %
    // per curve: 100 of 1000 runs are expected, standard deviation 9.5 (binomial); the same in 1000 runs
    // at the default level of 1 %: 10, at most 21 in 999 of 1000 experiments.
    let analyser = Analyser::new();
    let mut dice = dice(4_004);
    let mut wrong = [0_u32; 2];
    for _ in 0..1000 {
        let lines = vec![(40.3, 0.4), (211.7, 0.2)];
        let own_lines = vec![(97.4, 0.05)];
        let samples = 32_768;
        let scene = Scene { common_rms_v: 0.5, lines, own_lines, samples, ..Scene::default() };
        let sets = received(&analyser.analyse(&scene, dice.random(), 0.0));
        let records = sets.records(ONE);
        let input = Input { records: &records, board: None, common_noise_v2_per_hz: Some(COMMON_NOISE) };
        for (wrong, false_claim_level) in wrong.iter_mut().zip([0.1, 0.01]) {
            let settings = Settings { false_claim_level, ..Settings::default() };
            *wrong += u32::from(claims(&conversion(&input, &settings)) > 0);
        }
    }
    println!("{} of 1000 runs claim at 10 %, {} at 1 %", wrong[0], wrong[1]);
    assert!((60..=140).contains(&wrong[0]));
    assert!(wrong[1] <= 21);
}
