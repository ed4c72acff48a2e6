//! What a plot shows of points and names.

use super::*;
use crate::spectrum::conversion::{InputNoise, LimitReason};

fn point(frequency_hz: f64, kind: PointKind, verdict: Verdict) -> Point {
    Point {
        frequency_hz,
        band_hz: (frequency_hz * 0.95, frequency_hz * 1.05),
        rung: 0,
        kind,
        effective_segments: 100.0,
        coherence: 0.5,
        coherence_level: 0.1,
        ratio: (0.0, -0.01),
        radius: 0.005,
        board_floor: None,
        input_noise: InputNoise::Corrected { factor: 1.0 },
        verdict,
    }
}

fn limit(magnitude: f64) -> Verdict {
    Verdict::UpperLimit { magnitude, reason: LimitReason::NotSignificant }
}

const BAND: PointKind = PointKind::Band { bins: 3 };

#[test]
fn marks_are_values_with_their_region_limits_or_nothing() {
    let marks = marks_of(&[
        point(1e3, BAND, Verdict::Significant),
        point(3e3, BAND, limit(0.1)),
        point(4e3, BAND, limit(2.5)),
        point(5e3, BAND, Verdict::Refused(Refusal::NoiseOnly)),
        point(2e3, PointKind::Line, Verdict::Significant),
    ]);
    let frequencies: Vec<f64> = marks.iter().map(|placed| placed.frequency_hz).collect();
    assert_eq!(frequencies, [1e3, 2e3, 3e3, 4e3, 5e3]);
    let Mark::Value { db, low_db, high_db } = marks[0].mark else { panic!("{:?}", marks[0]) };
    // 0.01, and 0.005 less and more of it.
    assert!((db + 40.0).abs() < 1e-9 && (low_db + 46.0206).abs() < 1e-3 && (high_db + 36.4782).abs() < 1e-3);
    assert!(marks[1].is_line && !marks[0].is_line);
    let Mark::Limit { db } = marks[2].mark else { panic!("{:?}", marks[2]) };
    assert!((db + 20.0).abs() < 1e-9);
    // More than one leg alone makes is true of every pair: not worth an arrow.
    assert_eq!((marks[3].mark, marks[4].mark), (Mark::Refused, Mark::Refused));
}

#[test]
fn an_empty_panel_has_a_reason_and_one_with_a_mark_has_none() {
    let few = Verdict::Refused(Refusal::TooFewSegments { effective: 3.0 });
    let reason = missing(&[
        point(1e3, BAND, few),
        point(2e3, BAND, few),
        point(3e3, BAND, Verdict::Refused(Refusal::NoiseOnly)),
    ]);
    let expected =
        "nothing claimed: fewer than 8 segments with the bus idle; elsewhere the common mode is lost";
    assert!(reason.as_ref().is_some_and(|reason| reason.starts_with(expected)), "{reason:?}");
    assert!(missing(&[point(1e3, BAND, limit(5.0))]).is_some_and(|reason| reason.contains("noise")));
    assert_eq!(missing(&[point(1e3, BAND, few), point(2e3, BAND, limit(0.5))]), None);
    assert!(missing(&[]).is_some());
}

#[test]
fn the_ending_of_the_name_says_what_is_written() {
    for (name, format) in [("a.svg", Format::Svg), ("b/c.PNG", Format::Png), ("x.y.Svg", Format::Svg)] {
        assert_eq!(Format::of(Path::new(name)).unwrap(), format);
    }
    for name in ["a", "a.pdf", ".svg", "svg", "a.svgz"] {
        let error = Format::of(Path::new(name)).unwrap_err().to_string();
        assert!(error.contains("try") && error.contains(".svg or .png"), "{error}");
    }
}

#[test]
fn the_floor_is_the_boards_magnitude_with_its_radius_where_densities_are() {
    let points = [1.0, 100.0, 1e6].map(|frequency_hz| crate::spectrum::conversion::FloorPoint {
        frequency_hz,
        real: -0.003,
        imaginary: 0.004,
        radius: 0.005,
        common_noise_v2_per_hz: None,
    });
    let floor = floor_of(&ConversionFloor::new(points.to_vec()).unwrap(), (2.0, 2e5));
    assert_eq!(floor.len(), 1);
    assert!(floor[0].0 == 100.0 && (floor[0].1 + 40.0).abs() < 1e-9, "{floor:?}");
}
