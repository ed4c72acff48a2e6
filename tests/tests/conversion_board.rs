//! What the board adds of its own, what the driver does, and many averages taken together.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

mod conversion_pair;

use conversion_pair::{Analyser, RATE_HZ, Scene, Sets, mean_of, over_the_wire};
use legwise::spectrum::conversion::{
    Coding, ConversionFloor, Input, LimitReason, Point, Record, Refusal, Settings, Verdict, conversion,
    driver_imbalance,
};
use legwise::spectrum::rung::RungSpectra;
use legwise_tests::waveforms::dice;
use rand::RngExt;

const ONE: Coding = Coding::Wire { averages: 1 };
/// Common-mode noise of the board: legs of 3.4 mV rms over 250 kHz, a quarter of the sum of both.
const COMMON_NOISE: f64 = 3.4e-3 * 3.4e-3 / 2.0 / (RATE_HZ / 2.0);
/// The second leg reads 0.5 % too much.
const GAIN_ERROR: f64 = 0.005;

fn idle_points(
    spectra: &RungSpectra,
    coding: Coding,
    board: Option<&ConversionFloor>,
    noise: Option<f64>,
) -> Vec<Point> {
    let records = [Record { spectra, coding }];
    conversion(&Input { records: &records, board, common_noise_v2_per_hz: noise }, &Settings::default())
}

fn tied_legs(analyser: &Analyser, samples: usize, seed: u64) -> ConversionFloor {
    let scene = Scene { common_rms_v: 1.0, gain_error: GAIN_ERROR, samples, ..Scene::default() };
    let spectra = over_the_wire(&analyser.analyse(&scene, seed, 0.0).idle);
    let records = [Record { spectra: &spectra, coding: ONE }];
    ConversionFloor::from_tied_legs(&records, &Settings::default()).unwrap()
}

fn share(points: &[Point], holds: impl Fn(&Point) -> bool) -> f64 {
    points.iter().filter(|point| holds(point)).count() as f64 / points.len() as f64
}

#[test]
fn tied_legs_show_gain_error_and_noise_of_the_board() {
    // H = −ε/(1 + ε/2): signal.md gives −40.04 dB for 1 %; here 0.5 %, −46.04 dB.
    let floor = tied_legs(&Analyser::new(), 524_288, 21);
    let truth = -GAIN_ERROR / (1.0 + GAIN_ERROR / 2.0);
    let points = floor.points();
    let held = points.iter().filter(|p| (p.real - truth).hypot(p.imaginary) <= p.radius).count();
    println!("{held} of {} floor points hold {truth:.6}", points.len());
    assert!(points.len() > 40 && held * 100 >= points.len() * 85);
    for point in points.iter().filter(|point| point.frequency_hz > 20e3) {
        let noise = point.common_noise_v2_per_hz.unwrap() / COMMON_NOISE;
        assert!((0.8..1.2).contains(&noise), "{} Hz: {noise}", point.frequency_hz);
    }
}

#[test]
fn conversion_below_the_boards_own_is_never_claimed_and_above_it_the_boards_is_taken_off() {
    let analyser = Analyser::new();
    let scene = |conversion: f64| Scene {
        filter: (conversion, 0.0),
        common_rms_v: 1.0,
        gain_error: GAIN_ERROR,
        ..Scene::default()
    };
    let (mut below, mut above, mut blind) = (Vec::new(), Vec::new(), Vec::new());
    for seed in 0..40 {
        let floor = tied_legs(&analyser, 131_072, 2_000 + seed);
        let weak = over_the_wire(&analyser.analyse(&scene(0.001), 3_000 + seed, 0.0).idle);
        let strong = over_the_wire(&analyser.analyse(&scene(0.02), 4_000 + seed, 0.0).idle);
        below.extend(idle_points(&weak, ONE, Some(&floor), None));
        blind.extend(idle_points(&weak, ONE, None, None));
        above.extend(idle_points(&strong, ONE, Some(&floor), None));
    }
    assert!(share(&blind, Point::is_significant) > 0.5, "without the floor the board's is claimed");
    assert!(below.iter().all(|point| !point.is_significant()));
    let is_floor = |point: &Point| {
        matches!(point.verdict, Verdict::UpperLimit { reason: LimitReason::BelowBoardFloor, magnitude }
            if magnitude >= point.board_floor.unwrap())
    };
    println!("{:.0} % of {} points below the floor", 100.0 * share(&below, is_floor), below.len());
    assert!(share(&below, is_floor) > 0.5);
    assert!(share(&below, |point| point.upper_limit_db().is_some_and(|limit| limit > -60.0)) > 0.99);
    // Leg B reads (1 + ε)(C − D/2): H' = (H(1 + ε/2) − ε)/(1 + ε/2 − εH/4), less the board's −ε/(1 + ε/2).
    let unity = 1.0 + GAIN_ERROR / 2.0;
    let truth = (0.02 * unity - GAIN_ERROR) / (unity - GAIN_ERROR * 0.02 / 4.0) + GAIN_ERROR / unity;
    let held = share(&above, |point| (point.ratio.0 - truth).hypot(point.ratio.1) <= point.radius);
    println!("{:.1} % of {} regions hold the pair's own", held * 100.0, above.len());
    assert!(share(&above, Point::is_significant) > 0.8);
    assert!((0.93..=0.97).contains(&held));
}

#[test]
fn the_drivers_imbalance_is_measured_on_driven_segments() {
    let analyser = Analyser::new();
    let mut dice = dice(5_001);
    let (mut held, mut all, mut claimed) = (0, 0, 0);
    for _ in 0..150 {
        let imbalance = dice.random_range(0.005..0.05);
        let duty = dice.random_range(0.3..1.0);
        let scene = Scene { imbalance, common_rms_v: 0.05, duty, ..Scene::default() };
        let exact = analyser.analyse(&scene, dice.random(), 0.0);
        let sets = Sets { idle: over_the_wire(&exact.idle), driven: over_the_wire(&exact.driven) };
        let records = sets.records(ONE);
        let input = Input { records: &records, board: None, common_noise_v2_per_hz: Some(COMMON_NOISE) };
        for point in driver_imbalance(&input, &Settings::default()) {
            if !matches!(point.verdict, Verdict::Refused(_)) {
                all += 1;
                held += u32::from((point.ratio.0 - imbalance).hypot(point.ratio.1) <= point.radius);
                claimed += u32::from(point.is_significant());
            }
        }
    }
    let percent = 100.0 * f64::from(held) / f64::from(all);
    println!("{percent:.1} % of {all} regions hold the imbalance, {claimed} claimed");
    assert!((93.0..=97.5).contains(&percent));
    assert!(claimed * 2 > all);
}

#[test]
fn rounding_of_many_averages_is_told_apart_from_rounding_of_one() {
    // 12 averages of 31 segments each, coded one by one. Weak coherence: rounding averages out, regions
    // shrink with all segments. Strong coherence: every average rounds alike and the region stays.
    let analyser = Analyser::new();
    let mut widths = Vec::new();
    for (conversion, seed) in [(0.003, 1), (0.1, 2)] {
        let (mut held, mut all, mut width) = (0, 0, 0.0);
        for run in 0..25 {
            let scene =
                Scene { filter: (conversion, 0.0), common_rms_v: 0.4, samples: 16_384, ..Scene::default() };
            let seeds = (0..12).map(|part| 10_000 * seed + 100 * run + part);
            let parts: Vec<RungSpectra> =
                seeds.map(|seed| over_the_wire(&analyser.analyse(&scene, seed, 0.0).idle)).collect();
            let averages = Coding::Wire { averages: 12 };
            for point in idle_points(&mean_of(&parts), averages, None, Some(COMMON_NOISE)) {
                all += 1;
                held += u32::from((point.ratio.0 - conversion).hypot(point.ratio.1) <= point.radius);
                width += point.radius / conversion;
            }
        }
        let percent = 100.0 * f64::from(held) / f64::from(all);
        println!(
            "H {conversion}: {percent:.1} % of {all} hold it, mean radius {:.2} %",
            100.0 * width / f64::from(all)
        );
        assert!(percent >= 93.0, "{percent}");
        widths.push(percent);
    }
    assert!(widths[0] <= 97.0, "where scatter rules the region is no wider than stated");
}

#[test]
fn noise_of_the_board_in_the_common_mode_is_taken_off_or_stated() {
    // Common mode of 5 mV rms over noise of 2.4 mV: a fifth to a quarter of S_cc is noise, H1 reads low.
    let analyser = Analyser::new();
    let truth = 0.5;
    let scene = Scene { filter: (truth, 0.0), common_rms_v: 5e-3, samples: 65_536, ..Scene::default() };
    let (mut known, mut unknown) = (Vec::new(), Vec::new());
    for seed in 0..40 {
        let spectra = over_the_wire(&analyser.analyse(&scene, 800 + seed, 0.0).idle);
        known.extend(idle_points(&spectra, ONE, None, Some(COMMON_NOISE)));
        unknown.extend(idle_points(&spectra, ONE, None, None));
    }
    let corrected: Vec<Point> = known.iter().copied().filter(|p| p.input_noise.low_by_db() == 0.0).collect();
    let held = share(&corrected, |point| (point.ratio.0 - truth).hypot(point.ratio.1) <= point.radius);
    println!("{:.1} % of {} corrected regions hold the truth", held * 100.0, corrected.len());
    assert!((0.93..=0.97).contains(&held) && corrected.len() > 500);
    // Not known: low, and by no more than it says.
    let mean = unknown.iter().map(|point| point.ratio.0).sum::<f64>() / unknown.len() as f64;
    let stated = share(&unknown, |point| {
        let raised = 10.0_f64.powf(point.input_noise.low_by_db() / 20.0);
        point.magnitude() - point.radius <= truth && truth <= (point.magnitude() + point.radius) * raised
    });
    println!("uncorrected mean {mean:.3}; {:.1} % within what is stated", stated * 100.0);
    assert!(mean < 0.45 && stated > 0.95);
}

#[test]
fn with_nothing_in_the_common_mode_but_noise_nothing_is_said_even_if_the_legs_differ() {
    // Legs of 3.6 and 3.2 mV: S_cd = (S_A − S_B)/2, coherent after enough segments, and no conversion.
    let analyser = Analyser::new();
    let scene = Scene { leg_noise_v: (3.6e-3, 3.2e-3), samples: 2_097_152, ..Scene::default() };
    let spectra = over_the_wire(&analyser.analyse(&scene, 77, 0.0).idle);
    for noise in [Some(COMMON_NOISE), None] {
        let points = idle_points(&spectra, ONE, None, noise);
        let coherent = share(&points, |point| point.coherence > point.coherence_level);
        println!("{:.0} % coherent", coherent * 100.0);
        assert!(coherent > 0.3, "the trap was not set");
        assert!(points.iter().all(|point| !point.is_significant()));
    }
    let points = idle_points(&spectra, ONE, None, Some(COMMON_NOISE));
    assert!(share(&points, |point| point.verdict == Verdict::Refused(Refusal::NoiseOnly)) > 0.9);
}
