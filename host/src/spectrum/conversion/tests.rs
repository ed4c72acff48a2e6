//! Places, files, and the rules before a claim, on spectra written down by hand.

use super::*;
use crate::spectrum::rung::RungBin;

/// White spectra of one rung: every bin alike.
fn spectra(rung: u8, set: SegmentSet, segments: u64, bin: RungBin) -> RungSpectra {
    RungSpectra {
        rung,
        rate_hz: 500_000.0 / 8.0_f64.powi(i32::from(rung)),
        points: 1024,
        set,
        segments,
        skipped: 0,
        is_overlapped: true,
        other: 0,
        first_sample: 0,
        span_samples: 512 * (segments + 1),
        first_bin: 0,
        bins: vec![bin; 513],
    }
}

/// A bin with conversion `h` of a common mode of 1e-6 V²/Hz, and `noise` V²/Hz besides.
fn converting(h: (f64, f64), noise: f64) -> RungBin {
    let common = 1e-6;
    let differential = common * (h.0 * h.0 + h.1 * h.1) + noise;
    RungBin { common, differential, cross: (common * h.0, common * h.1) }
}

/// A bin with data of 1e-5 V²/Hz that an unbalanced driver puts into the common mode.
fn driven(imbalance: f64) -> RungBin {
    let differential = 1e-5;
    let common = differential * imbalance * imbalance + 1e-11;
    RungBin { common, differential, cross: (differential * imbalance, 0.0) }
}

fn points_of(sets: &[RungSpectra], board: Option<&ConversionFloor>) -> Vec<Point> {
    let records: Vec<Record> = sets.iter().map(|spectra| Record { spectra, coding: Coding::Exact }).collect();
    conversion(&Input { records: &records, board, common_noise_v2_per_hz: None }, &Settings::default())
}

fn floor(real: f64, radius: f64) -> ConversionFloor {
    let point = |frequency_hz| FloorPoint {
        frequency_hz,
        real,
        imaginary: 0.0,
        radius,
        common_noise_v2_per_hz: Some(2e-11),
    };
    ConversionFloor::new(vec![point(200_000.0), point(1.0)]).unwrap()
}

#[test]
fn every_frequency_belongs_to_one_rung_and_bands_leave_no_gap_between_them() {
    let bin = converting((0.01, 0.0), 1e-11);
    let sets: Vec<RungSpectra> = (0..4).map(|rung| spectra(rung, SegmentSet::Idle, 100, bin)).collect();
    let points = points_of(&sets, None);
    assert!(points.windows(2).all(|pair| pair[0].frequency_hz < pair[1].frequency_hz));
    for pair in points.windows(2) {
        let gap_hz = pair[1].band_hz.0 - pair[0].band_hz.1;
        // Half a bin of the faster rung where the rung changes, rounding elsewhere.
        let bin_hz = sets[usize::from(pair[1].rung)].bin_hz();
        let most = if pair[0].rung == pair[1].rung { 1e-6 } else { 0.51 * bin_hz };
        assert!(gap_hz.abs() <= most, "{} to {} Hz", pair[0].band_hz.1, pair[1].band_hz.0);
        assert!(pair[0].rung >= pair[1].rung);
    }
    assert!(points.first().unwrap().frequency_hz < 3.0);
    assert!(points.last().unwrap().frequency_hz > 185_000.0);
    // Slower rungs up to 0.35 of their rate, one half band more or less.
    for rung in 1..4_u8 {
        let last = points.iter().rfind(|point| point.rung == rung).unwrap();
        let share = last.frequency_hz / sets[usize::from(rung)].rate_hz;
        assert!((0.31..0.36).contains(&share), "rung {rung} to {share}");
    }
}

#[test]
fn lines_get_points_of_their_own_and_bands_go_around_them() {
    let mut idle = spectra(0, SegmentSet::Idle, 100, converting((0.01, 0.0), 1e-11));
    for (bin, share) in [(99, 0.25), (100, 1.0), (101, 0.25)] {
        idle.bins[bin] =
            RungBin { common: 1e-2 * share, differential: 1e-4 * share, cross: (0.9e-3 * share, 0.0) };
    }
    let points = points_of(&[idle], None);
    let lines: Vec<&Point> = points.iter().filter(|point| point.kind == PointKind::Line).collect();
    assert_eq!(lines.len(), 1);
    assert_eq!(lines[0].frequency_hz, 100.0 * 500_000.0 / 1024.0);
    assert!((lines[0].magnitude() - 0.09).abs() < 1e-12);
    for band in points.iter().filter(|point| point.kind != PointKind::Line) {
        assert!((band.magnitude() - 0.01).abs() < 1e-12, "{} Hz holds part of the line", band.frequency_hz);
    }
}

#[test]
fn too_few_idle_segments_are_refused_at_every_frequency() {
    for segments in [0, 1, 8] {
        let idle = spectra(0, SegmentSet::Idle, segments, converting((0.1, 0.0), 1e-12));
        let points = points_of(&[idle], None);
        assert!(points.len() > 40);
        for point in points {
            assert!(
                matches!(point.verdict, Verdict::Refused(Refusal::TooFewSegments { effective }) if effective < 8.0)
            );
        }
    }
    // Always driven: no idle set at all, the frequencies are named all the same.
    let points = points_of(&[spectra(0, SegmentSet::Driven, 500, driven(0.02))], None);
    assert!(points.len() > 40);
    assert!(points.iter().all(|p| p.verdict == Verdict::Refused(Refusal::TooFewSegments { effective: 0.0 })));
}

/// Content near n times the rate, folded down, shows `2 tan(π n fs δ)` where the true ratio is nothing.
#[test]
fn what_a_skew_makes_of_folded_content_is_no_conversion() {
    let idle = spectra(0, SegmentSet::Idle, 300, converting((0.2, 0.0), 1e-10));
    let records = [Record { spectra: &idle, coding: Coding::Exact }];
    let input = Input { records: &records, ..Input::default() };
    let verdicts = |skew_samples: f64| {
        let points = conversion(&input, &Settings { skew_samples, ..Settings::default() });
        points.into_iter().map(|point| point.verdict).collect::<Vec<_>>()
    };
    assert!(verdicts(0.001).iter().all(|verdict| *verdict == Verdict::Significant));
    let is_folded = |verdict: &Verdict| matches!(verdict, Verdict::UpperLimit { reason: LimitReason::Folded, magnitude } if *magnitude > 0.2);
    for skew_samples in [0.04, -0.04, 0.5, 1.0 / 3.0] {
        assert!(verdicts(skew_samples).iter().all(is_folded), "{skew_samples}");
    }
}

#[test]
fn an_idle_set_that_holds_the_data_is_refused_and_a_quiet_one_is_not() {
    let imbalance = 0.02;
    // Everything in the wrong set, no common mode of its own: H would be 50.
    let wrong = spectra(0, SegmentSet::Idle, 300, driven(imbalance));
    let data = spectra(0, SegmentSet::Driven, 300, driven(imbalance));
    let points = points_of(&[wrong.clone(), data.clone()], None);
    assert!(points.iter().all(|point| point.verdict == Verdict::Refused(Refusal::OtherDirection)));
    // With a common mode of its own H looks possible: 0.2. The driven set gives it away.
    let mut bin = driven(imbalance);
    bin.common += 1e-6;
    let hidden = spectra(0, SegmentSet::Idle, 30_000, bin);
    let sets = [hidden, data.clone()];
    let records = sets.each_ref().map(|spectra| Record { spectra, coding: Coding::Exact });
    let mut input = Input { records: &records, board: None, common_noise_v2_per_hz: Some(1e-11) };
    let points = conversion(&input, &Settings::default());
    let is_rival = |point: &Point| {
        matches!(point.verdict, Verdict::UpperLimit { reason: LimitReason::RivalDirection, .. })
    };
    assert!(points.iter().all(|point| (0.19..0.21).contains(&point.magnitude())));
    assert!(points.iter().all(is_rival));
    // Without the driven set nothing gives it away: the guard is what refused it.
    input.records = &records[..1];
    assert!(conversion(&input, &Settings::default()).iter().all(Point::is_significant));
    // The same ratio with hardly any DM beside it is the pair's.
    let quiet = spectra(0, SegmentSet::Idle, 300, converting((0.2, 0.0), 1e-10));
    assert!(points_of(&[quiet, data], None).iter().all(Point::is_significant));
}

#[test]
fn below_the_boards_floor_there_is_a_limit_and_above_it_the_board_is_taken_off() {
    let board = floor(-0.005, 0.001);
    let idle = |h: f64| spectra(0, SegmentSet::Idle, 1000, converting((h, 0.0), 1e-10));
    // The pair converts 0.004, the board -0.005: -0.001 is read.
    for point in points_of(&[idle(-0.001)], Some(&board)) {
        assert!((point.ratio.0 - 0.004).abs() < 1e-5);
        let Verdict::UpperLimit { magnitude, reason } = point.verdict else { panic!("{point:?}") };
        assert_eq!(reason, LimitReason::BelowBoardFloor);
        assert!(magnitude >= 0.006 - 1e-12);
    }
    for point in points_of(&[idle(0.025)], Some(&board)) {
        assert!(point.is_significant());
        assert!((point.ratio.0 - 0.03).abs() < 1e-4 && point.radius >= 0.001);
    }
}

#[test]
fn a_floor_survives_its_file_and_says_what_is_wrong_with_a_bad_one() {
    let board = floor(-0.01, 0.001);
    let text = toml::to_string(&board).unwrap();
    assert_eq!(toml::from_str::<ConversionFloor>(&text).unwrap(), board);
    assert_eq!(
        serde_json::from_str::<ConversionFloor>(&serde_json::to_string(&board).unwrap()).unwrap(),
        board
    );
    let bad = toml::from_str::<ConversionFloor>(&text.replace("radius = 0.001", "radius = -1.0"));
    assert!(bad.unwrap_err().to_string().contains("legs tied together"));
    assert!(matches!(ConversionFloor::new(vec![]), Err(FloorError::Empty)));
    let nothing = spectra(0, SegmentSet::Idle, 4, converting((0.01, 0.0), 0.0));
    let records = [Record { spectra: &nothing, coding: Coding::Exact }];
    let settings = Settings::default();
    assert!(matches!(ConversionFloor::from_tied_legs(&records, &settings), Err(FloorError::TooWeak)));
}

#[test]
fn a_floor_is_interpolated_as_a_complex_number_and_not_beyond_its_ends() {
    let point = |frequency_hz, real, imaginary| FloorPoint {
        frequency_hz,
        real,
        imaginary,
        radius: 0.001,
        common_noise_v2_per_hz: None,
    };
    let board = ConversionFloor::new(vec![point(100.0, 0.01, 0.0), point(10_000.0, 0.0, 0.03)]).unwrap();
    let middle = board.at(1000.0).unwrap();
    assert!((middle.real - 0.005).abs() < 1e-12 && (middle.imaginary - 0.015).abs() < 1e-12);
    assert_eq!(board.at(100.0).unwrap().real, 0.01);
    assert_eq!(board.at(90.0).unwrap().real, 0.01);
    assert!(board.at(70.0).is_none() && board.at(13_000.0).is_none());
}

#[test]
fn a_point_tells_its_range_and_phase() {
    let idle = spectra(0, SegmentSet::Idle, 400, converting((0.0, -0.01), 1e-10));
    let point = points_of(&[idle], None)[20];
    assert!((point.magnitude_db() + 40.0).abs() < 1e-9);
    assert!((point.phase_degrees() + 90.0).abs() < 1e-9);
    let (low, high) = point.magnitude_range_db();
    assert!(low < -40.0 && high > -40.0 && point.phase_uncertainty_degrees() < 45.0);
    assert_eq!(point.upper_limit_db(), None);
    // Nothing coherent: a limit, and a region that holds zero.
    let idle = spectra(0, SegmentSet::Idle, 400, converting((0.0, 0.0), 1e-10));
    let point = points_of(&[idle], None)[20];
    assert_eq!(point.phase_uncertainty_degrees(), 180.0);
    assert_eq!(point.magnitude_range_db().0, f64::NEG_INFINITY);
    assert!(point.upper_limit_db().is_some());
}

#[test]
fn a_floor_is_measured_where_the_common_mode_stands_clear_of_noise_and_that_noise_is_taken_off() {
    // Noise of 4e-9 in DM is 1e-9 in CM: a thousandth, a twentieth and a fifth of it.
    for (common, is_clear) in [(1e-6, true), (2e-8, true), (5e-9, false)] {
        let (h, signal) = (0.01, common - 1e-9);
        let bin = RungBin { common, differential: signal * h * h + 4e-9, cross: (signal * h, 0.0) };
        let tied = spectra(0, SegmentSet::Idle, 200_000, bin);
        let records = [Record { spectra: &tied, coding: Coding::Exact }];
        let floor = ConversionFloor::from_tied_legs(&records, &Settings::default());
        assert_eq!(floor.is_ok(), is_clear, "{common}");
        for point in floor.iter().flat_map(ConversionFloor::points) {
            assert!((point.real / h - 1.0).abs() < 1e-3, "{common}: {point:?}");
            assert!((point.common_noise_v2_per_hz.unwrap() / 1e-9 - 1.0).abs() < 1e-3, "{common}: {point:?}");
        }
    }
}
