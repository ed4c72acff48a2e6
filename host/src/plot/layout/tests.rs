//! Places, hatching, pens and words of a page.

use super::*;
use crate::plot::scene::{Element, hatching};
use crate::plot::{Mark, PlacedMark};
use std::collections::BTreeSet;

const SETS: [SegmentSet; 2] = [SegmentSet::Idle, SegmentSet::Driven];
const MODES: [Mode; 2] = [Mode::Common, Mode::Differential];

fn plot() -> Plot {
    let curve = |level: f64| (0..60).map(|step| (10_f64.powf(f64::from(step) / 10.0 - 0.6), level)).collect();
    let mut series = Vec::new();
    for (mode, level) in MODES.into_iter().zip([3e-4, 2e-5]) {
        for set in SETS {
            series.push(Series { mode, set, points: curve(level) });
        }
    }
    let mark = |frequency_hz: f64, is_line: bool, mark| PlacedMark {
        frequency_hz,
        band_hz: (frequency_hz * 0.9, frequency_hz * 1.1),
        is_line,
        mark,
    };
    let value = |db: f64| Mark::Value { db, low_db: db - 1.0, high_db: db + 0.9 };
    Plot {
        title: "panel <3>, terminal C".to_owned(),
        subtitles: vec!["when".to_owned(), "what".to_owned()],
        series,
        marks: vec![
            mark(100.0, false, value(-40.0)),
            mark(120.0, false, value(-41.0)),
            mark(300.0, true, value(-35.0)),
            mark(1e3, false, Mark::Limit { db: -50.0 }),
            mark(2e3, false, Mark::Refused),
            mark(2.4e3, false, Mark::Refused),
        ],
        marks_missing: None,
        floor: vec![(1.0, -62.0), (1e5, -58.0)],
        seen_hz: (0.2, 1.6e5),
        judged_hz: (0.6, 1e5),
        half_rate_hz: 250_000.0,
        notes: vec!["a note".to_owned()],
    }
}

fn texts(scene: &Scene) -> Vec<&str> {
    let elements = scene.elements.iter();
    elements
        .filter_map(|e| if let Element::Text(text) = e { Some(text.text.as_str()) } else { None })
        .collect()
}

/// All places of the elements of one name.
fn places(scene: &Scene, wanted: &str) -> Vec<Place> {
    let of = |element: &Element| match element {
        Element::Line { name, points, .. } | Element::Area { name, points, .. } if *name == wanted => {
            points.clone()
        }
        _ => Vec::new(),
    };
    scene.elements.iter().flat_map(of).collect()
}

#[test]
fn no_two_curves_share_weight_and_dash() {
    let mut looks = BTreeSet::new();
    for mode in MODES {
        for set in SETS {
            let pen = pen_of(mode, set);
            looks.insert(format!("{:?} {:?}", pen.width_px, pen.dash_px));
        }
    }
    assert_eq!(looks.len(), 4, "{looks:?}");
    // Solid ones of either mode differ in weight by more than print smears.
    let (idle, driven) = (pen_of(Mode::Common, SegmentSet::Idle), pen_of(Mode::Common, SegmentSet::Driven));
    assert!(idle.width_px > 2.0 * driven.width_px);
}

#[test]
fn axes_have_units_and_the_legend_names_every_curve() {
    let scene = layout(&plot());
    let texts = texts(&scene);
    for wanted in [
        "frequency in Hz",
        "amplitude density in V/√Hz",
        "conversion CM → DM in dB",
        "1 Hz",
        "1 kHz",
        "100 kHz",
        "100 µV/√Hz",
        "−40 dB",
        "common mode, bus idle",
        "differential mode, bus driven",
        "upper limit, nothing claimed",
        "the board's own, legs tied",
        "not seen: DC and below 200 mHz",
        "not seen: above 250 kHz, half the sample rate",
    ] {
        assert!(texts.contains(&wanted), "no '{wanted}' in {texts:?}");
    }
    let without = layout(&Plot { floor: Vec::new(), ..plot() });
    assert!(!self::texts(&without).contains(&"the board's own, legs tied"));
}

#[test]
fn hatching_covers_what_is_not_seen_and_nothing_else() {
    let plot = plot();
    let scene = layout(&plot);
    let across = frequencies(&plot, DENSITIES);
    let (low_x, high_x) = (across.place_px(0.2), across.place_px(250_000.0));
    let (low_judged, high_judged) = (across.place_px(0.6), across.place_px(1e5));
    let hatched = places(&scene, "blind");
    for (x, y) in &hatched {
        let (low, high) = if *y <= DENSITIES.bottom { (low_x, high_x) } else { (low_judged, high_judged) };
        assert!(*x <= low + 1e-6 || *x >= high - 1e-6, "hatched at {x} between {low} and {high}");
    }
    for frame in [DENSITIES, CONVERSION] {
        let inside = hatched.iter().filter(|(_, y)| (frame.top..=frame.bottom).contains(y));
        let xs: Vec<f64> = inside.map(|(x, _)| *x).collect();
        assert!(xs.contains(&frame.left) && xs.contains(&frame.right));
    }
    // Curves lie between.
    for name in ["common-idle", "differential-driven"] {
        assert!(places(&scene, name).iter().all(|(x, _)| (low_x - 0.1..=high_x).contains(x)), "{name}");
    }
    assert!(hatching(Frame { right: low_x, ..DENSITIES }, 7.0).len() > 40);
}

#[test]
fn everything_lies_on_the_page_and_marks_in_their_panel() {
    let scene = layout(&plot());
    for element in &scene.elements {
        let points = match element {
            Element::Line { points, .. } | Element::Area { points, .. } => points.clone(),
            Element::Text(text) => vec![text.at],
        };
        for (x, y) in points {
            assert!((0.0..=WIDTH_PX).contains(&x) && (0.0..=HEIGHT_PX).contains(&y), "{element:?}");
        }
    }
    for name in ["conversion", "region", "limit", "line", "floor", "unsaid"] {
        let places = places(&scene, name);
        assert!(!places.is_empty(), "no {name}");
        let is_inside = |(x, y): &Place| {
            (CONVERSION.left..=CONVERSION.right).contains(x)
                && (CONVERSION.top..=CONVERSION.bottom).contains(y)
        };
        assert!(places.iter().all(is_inside), "{name}: {places:?}");
    }
    // An arrow points down from its limit, and refused neighbours make one strip.
    let arrow = places(&scene, "limit");
    assert!(arrow[3].1 > arrow[2].1 && arrow[0].1 == arrow[1].1);
    let strip = places(&scene, "unsaid");
    let across = frequencies(&plot(), CONVERSION);
    let left = strip.iter().map(|place| place.0).fold(f64::INFINITY, f64::min);
    let right = strip.iter().map(|place| place.0).fold(0.0, f64::max);
    assert!((left - across.place_px(1.8e3)).abs() < 1e-6 && (right - across.place_px(2.64e3)).abs() < 1e-6);
}

#[test]
fn a_value_lies_where_its_axes_say() {
    let scene = layout(&plot());
    let curve = places(&scene, "conversion");
    let (across, from, to) = (frequencies(&plot(), CONVERSION), CONVERSION.bottom, CONVERSION.top);
    assert_eq!(curve.len(), 2);
    assert!((curve[0].0 - across.place_px(100.0)).abs() < 1e-9);
    // The panel spans -70 to -30 dB: floor at -62 with room below, a line at -34.1.
    let y = from + (to - from) * 30.0 / 40.0;
    assert!((curve[0].1 - y).abs() < 1e-6, "{} for {y}", curve[0].1);
}

#[test]
fn a_flat_spectrum_still_has_two_labels_on_its_axis() {
    for level in [3e-6, 1e-5, 9.9e-4] {
        let flat =
            [Series { mode: Mode::Common, set: SegmentSet::Idle, points: vec![(1.0, level), (10.0, level)] }];
        let axis = amplitudes(&flat, DENSITIES);
        let labels =
            axis.decades(|value| figures::tick(value, "V/√Hz")).into_iter().filter_map(|tick| tick.label);
        let labels: Vec<String> = labels.collect();
        assert!(labels.len() >= 2 && axis.holds(level), "{level}: {labels:?}");
    }
}

#[test]
fn an_empty_panel_says_why_and_long_names_are_cut() {
    let reason = "nothing claimed: nobody rested".to_owned();
    let empty = Plot {
        marks: Vec::new(),
        floor: Vec::new(),
        marks_missing: Some(reason.clone()),
        title: "x".repeat(500),
        ..plot()
    };
    let scene = layout(&empty);
    let texts = texts(&scene);
    assert!(texts.contains(&reason.as_str()));
    assert!(texts.iter().all(|text| text.chars().count() <= 170));
    assert!(texts[0].starts_with("Spectra: xxx") && texts[0].ends_with('…'));
}
