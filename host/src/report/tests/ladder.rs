//! Spectra of a whole ladder, of lines of known source, for logs under construction.

use super::fixture::{Fixture, quiet_totals};
use legwise_protocol::cross::BinCodes;
use legwise_protocol::receivers::ReceiverId;
use rusqlite::params;
use std::f64::consts::PI;

/// Pairs per second: the finer bins of the second rung separate the sidebands of a drive.
pub const RATE_HZ: f64 = 200_000.0;

/// A line; what of it is in the differential mode goes with it at a fixed ratio.
#[derive(Clone, Copy, Debug)]
pub struct Tone {
    pub true_hz: f64,
    pub common_rms_v: f64,
    pub ratio: f64,
}

/// What the pair carries for one spectrum.
#[derive(Clone, Debug, Default)]
pub struct Scene {
    pub tones: Vec<Tone>,
    /// Bit rate of data of ±2 V; they are in driven spectra alone.
    pub bit_rate_hz: Option<f64>,
}

/// Floors, V²/Hz: a differential one of four times the common one, as of two equal legs.
pub const FLOORS: (f64, f64) = (1e-12, 4e-12);

/// Spectra of a ladder as a board sends them: 1024 points at the full rate, 512 below.
pub const RUNGS: std::ops::Range<u8> = 0..5;

fn points(rung: u8) -> usize {
    if rung == 0 { 1024 } else { 512 }
}

fn published(rung: u8) -> std::ops::Range<usize> {
    if rung == 0 { 0..513 } else { 20..206 }
}

/// Shape of the Hann window in power, `d` bins off.
fn hann(d: f64) -> f64 {
    let sinc = if d == 0.0 { 1.0 } else { (PI * d).sin() / (PI * d) };
    if (d.abs() - 1.0).abs() < 1e-9 { 0.25 } else { (sinc / (1.0 - d * d)).powi(2) }
}

/// The codes of one spectrum.
fn codes(scene: &Scene, rate_hz: f64, rung: u8, is_driven: bool) -> Vec<u8> {
    let rung_hz = rate_hz / 8_f64.powi(rung.into());
    let bin_hz = rung_hz / points(rung) as f64;
    let bins = published(rung).map(|bin| {
        let (mut common, mut differential, mut cross) = (FLOORS.0, FLOORS.1, 0.0);
        for tone in &scene.tones {
            // The ladder's filters keep out what lies beyond a lower rung.
            let folded_hz = tone.true_hz.rem_euclid(rate_hz);
            let shows_hz = folded_hz.min(rate_hz - folded_hz);
            if rung > 0 && shows_hz > 0.45 * rung_hz {
                continue;
            }
            let density = tone.common_rms_v.powi(2) / (1.5 * bin_hz) * hann(bin as f64 - shows_hz / bin_hz);
            common += density;
            cross += tone.ratio * density;
            differential += tone.ratio.powi(2) * density;
        }
        if let Some(bit_rate_hz) = scene.bit_rate_hz.filter(|_| is_driven) {
            let x = PI * bin as f64 * bin_hz / bit_rate_hz;
            let sinc = if x == 0.0 { 1.0 } else { x.sin() / x };
            differential += 2.0 * 4.0 / bit_rate_hz * sinc * sinc;
        }
        BinCodes::encode(common as f32, differential as f32, (cross as f32, 0.0)).to_bytes()
    });
    bins.flatten().collect()
}

/// A log of runs at `rates_hz`, one after another.
pub fn log_of(rates_hz: &[f64]) -> Fixture {
    let mut fixture = Fixture::single(ReceiverId::Tia485A, &quiet_totals(60_000_000));
    for (run, rate_hz) in (1_i64..).zip(rates_hz) {
        if run > 1 {
            fixture.run(run, 0);
            fixture.settings(run, 0, ReceiverId::Tia485A);
            fixture.totals(run, &quiet_totals(60_000_000), Some("exhausted"));
        }
        fixture
            .sql("UPDATE run SET sample_rate_mhz = ?2 WHERE run = ?1", params![run, (rate_hz * 1e3) as i64]);
    }
    fixture
}

/// Adds the spectra of all rungs and the sets given, of two seconds each, one scene after another.
pub fn add(fixture: &Fixture, run: i64, rate_hz: f64, sets: &[&str], scenes: &[Scene]) {
    let span = (2.0 * rate_hz) as i64;
    for (look, scene) in (0..).zip(scenes) {
        for (set, rung) in sets.iter().flat_map(|set| RUNGS.map(move |rung| (set, rung))) {
            fixture.sql(
                "INSERT INTO spectra VALUES (?1, ?2, ?3, ?4, ?5, ?6, 100, 0, 0, ?7, ?8)",
                params![
                    run,
                    look * span,
                    span,
                    set,
                    rung,
                    points(rung) as i64,
                    published(rung).start as i64,
                    codes(scene, rate_hz, rung, *set == "driven")
                ],
            );
        }
    }
}

/// A drive: carrier 4 kHz, output 43 Hz; its sidebands at three outputs beside the even multiples and six
/// beside the odd ones.
pub fn drive(ratio: f64) -> Vec<Tone> {
    let places =
        [(1, 0, 2.0), (2, 3, 0.5), (2, -3, 0.5), (3, 0, 0.4), (4, 3, 0.2), (4, -3, 0.2), (5, 0, 0.2)];
    let tone = |(multiple, outputs, common_rms_v): (i32, i32, f64)| Tone {
        true_hz: 4_000.0 * f64::from(multiple) + 43.0 * f64::from(outputs),
        common_rms_v,
        ratio,
    };
    places.map(tone).to_vec()
}

/// Mains with two harmonics, common mode alone.
pub fn mains() -> Vec<Tone> {
    let tone = |(true_hz, common_rms_v)| Tone { true_hz, common_rms_v, ratio: 0.0 };
    [(50.01, 0.5), (150.03, 0.15), (250.05, 0.05)].map(tone).to_vec()
}

/// One run with everything in it, and a second one at another rate: mains and data all the time, a drive for
/// looks 10 to 19 of 40, and a line that folds.
pub fn night_of_ladder() -> Fixture {
    let second_hz = 0.97 * RATE_HZ;
    let fixture = log_of(&[RATE_HZ, second_hz]);
    let folds = Tone { true_hz: 1_234_567.0, common_rms_v: 0.3, ratio: 0.0 };
    let scene = |has_drive: bool| {
        let drive = if has_drive { drive(0.05) } else { Vec::new() };
        Scene { tones: [mains(), drive, vec![folds]].concat(), bit_rate_hz: Some(19_200.0) }
    };
    let scenes: Vec<Scene> = (0..40).map(|look| scene((10..20).contains(&look))).collect();
    for (run, rate_hz, count) in [(1, RATE_HZ, 40), (2, second_hz, 20)] {
        add(&fixture, run, rate_hz, &["idle", "driven"], &scenes[..count]);
    }
    fixture
}
