//! `plot`: whole SVG and PNG, with labelled axes and lines that a black and white print tells apart; and
//! what is no picture.

use crate::bad_input::assert_refused;
use crate::room::Room;
use roxmltree::{Document, Node};
use std::collections::{BTreeMap, BTreeSet};

/// Two seconds of a drive beside a talking bus, as a log and as a recording.
fn drive(room: &Room) {
    room.done(&["simulate", &room.early("drive-bay"), "--seconds", "2", "-o", "x.wav"]);
    room.done(&["analyse", "x.wav", "-o", "x.lwlog", "--point", "panel 3, <C> & D"]);
}

fn texts<'a>(document: &'a Document) -> Vec<&'a str> {
    let texts = document.descendants().filter(|node| node.has_tag_name("text"));
    texts.filter_map(|node| node.text()).collect()
}

/// What a path looks like without its colour.
fn look(path: &Node) -> (String, String) {
    let of = |name: &str| path.attribute(name).unwrap_or_default().to_owned();
    (of("stroke-width"), of("stroke-dasharray"))
}

fn paths<'a>(document: &'a Document, class: &str) -> Vec<Node<'a, 'a>> {
    document.descendants().filter(|node| node.attribute("class") == Some(class)).collect()
}

#[test]
fn the_picture_of_a_log_has_axes_with_units_a_legend_and_a_title() {
    let room = Room::new();
    drive(&room);
    assert_eq!(room.done(&["plot", "x.lwlog", "-o", "x.svg"]).out, "x.svg\n");
    let svg = room.read("x.svg");
    let document = Document::parse(&svg).unwrap();
    let texts = texts(&document);
    for wanted in [
        "Spectra: panel 3, <C> & D",
        "frequency in Hz",
        "amplitude density in V/√Hz",
        "conversion CM → DM in dB",
        "100 Hz",
        "1 kHz",
        "100 kHz",
        "1 mV/√Hz",
        "common mode, bus idle",
        "differential mode, bus idle",
        "common mode, bus driven",
        "differential mode, bus driven",
        "in bands, with 95 % region",
        "not seen: above 100 kHz, half the sample rate",
    ] {
        assert!(texts.contains(&wanted), "no '{wanted}' in {texts:?}");
    }
    for wanted in ["200 k pairs/s", "receiver tia485a", "segments: ", "x.wav", "UTC"] {
        assert!(texts.iter().any(|text| text.contains(wanted)), "no '{wanted}' in {texts:?}");
    }
    assert_eq!(texts.iter().filter(|text| **text == "frequency in Hz").count(), 2);
    // A log with a clock gives the time in UTC.
    room.done(&["demo", "--minutes", "0.05", "--scenario", "drive-bay", "--folder", "demo"]);
    room.done(&["plot", "demo/drive-bay.lwlog", "-o", "demo.svg"]);
    let demo = room.read("demo.svg");
    assert!(demo.contains(" to 20") && demo.contains(" UTC<"), "no time in {demo}");
}

#[test]
fn no_two_curves_look_alike_without_colour() {
    let room = Room::new();
    drive(&room);
    room.done(&["plot", "x.lwlog", "-o", "x.svg"]);
    let svg = room.read("x.svg");
    let document = Document::parse(&svg).unwrap();
    let mut looks = BTreeMap::new();
    for class in ["common-idle", "common-driven", "differential-idle", "differential-driven"] {
        let [path] = paths(&document, class)[..] else { panic!("{class}: {:?}", paths(&document, class)) };
        assert!(path.attribute("d").is_some_and(|points| points.len() > 500), "{class}");
        looks.insert(look(&path), class);
    }
    assert_eq!(looks.len(), 4, "{looks:?}");
    // The legend shows each as it is drawn.
    let legend: BTreeSet<(String, String)> = paths(&document, "legend").iter().map(look).collect();
    assert!(looks.keys().all(|look| legend.contains(look)), "{looks:?} in {legend:?}");
    // What is not seen is hatched in both panels, not only shaded.
    let strokes: usize = paths(&document, "blind")
        .iter()
        .filter_map(|path| path.attribute("d"))
        .map(|d| d.matches('M').count())
        .sum();
    assert!(strokes > 100, "{strokes}");
}

#[test]
fn the_known_imbalance_of_a_drive_shows_in_the_lower_panel() {
    let room = Room::new();
    drive(&room);
    room.done(&["plot", "x.lwlog", "-o", "x.svg"]);
    let scenario = room.done(&["simulate", "drive-bay", "--print"]).out;
    let imbalance = scenario
        .split("imbalance = ")
        .nth(1)
        .and_then(|rest| rest.split([' ', '\n', '}']).next().and_then(|number| number.parse::<f64>().ok()));
    let expected_db = 20.0 * imbalance.expect("an imbalance").log10();
    let svg = room.read("x.svg");
    let document = Document::parse(&svg).unwrap();
    // The axis, from two of its labels.
    let label = |text: &str| {
        let node = document.descendants().find(|node| node.text() == Some(text) && node.has_tag_name("text"));
        node.and_then(|node| node.attribute("y")).and_then(|y| y.parse::<f64>().ok())
    };
    let (upper, lower) = (label("−20 dB").unwrap(), label("−30 dB").unwrap());
    let decibels = |y: f64| -20.0 - 10.0 * (y + 4.0 - upper) / (lower - upper);
    // Ends of the bands' line, and the middle of each line's rhomb, whose area is closed.
    let points = |class: &str, is_wanted: fn(&str) -> bool| -> Vec<f64> {
        let data = paths(&document, class).into_iter().filter_map(|path| path.attribute("d"));
        let places = data.filter(|data| is_wanted(data)).flat_map(|data| data.split(['M', 'L']));
        let heights = places.filter_map(|place| place.split([' ', 'Z']).nth(1));
        heights.filter_map(|y| y.parse().ok()).map(decibels).collect()
    };
    let mut curve = points("conversion", |_| true);
    for rhomb in points("line", |data| data.ends_with('Z')).chunks(4) {
        curve.push(rhomb.iter().sum::<f64>() / rhomb.len() as f64);
    }
    let worst = curve.iter().map(|level| (level - expected_db).abs()).fold(0.0, f64::max);
    println!("{} points, {expected_db:.2} dB expected, furthest {worst:.2} dB off", curve.len());
    assert!(curve.len() > 10 && worst < 3.0, "{curve:?}");
}

#[test]
fn a_recording_gives_the_picture_its_log_gives_and_png_shows_the_same_page() {
    let room = Room::new();
    drive(&room);
    let point = ["--point", "panel 3, <C> & D"];
    room.done(&["plot", "x.lwlog", "-o", "log.svg"]);
    room.done(&[&["plot", "x.wav", "-o", "recording.svg"], &point[..]].concat());
    assert_eq!(room.read("log.svg"), room.read("recording.svg"));
    room.done(&[&["plot", "x.wav", "-o", "x.png"], &point[..]].concat());
    let decoded = tiny_skia::Pixmap::decode_png(&std::fs::read(room.path("x.png")).unwrap()).unwrap();
    assert_eq!((decoded.width(), decoded.height()), (2 * 1122, 2 * 793));
    let dark = decoded.pixels().iter().filter(|pixel| pixel.red() < 100).count();
    let share = dark as f64 / decoded.pixels().len() as f64;
    println!("{share:.4} of the pixels are dark");
    assert!((0.01..0.2).contains(&share), "{share}");
    // Replaced without a question: a picture can always be made again.
    room.done(&["plot", "x.lwlog", "-o", "x.png"]);
}

#[test]
fn what_gives_no_picture_is_refused_and_leaves_none() {
    let room = Room::new();
    room.write("short.csv", "leg_a_v,leg_b_v\n2.6,2.4\n2.6,2.4\n");
    room.write("text.lwlog", "not a log at all\n");
    drive(&room);
    let before = room.files();
    for (arguments, code, fragment) in [
        (&["plot", "short.csv", "--rate", "1000", "-o", "x.svg"][..], 3, "no averaged spectra"),
        (&["plot", "none.lwlog", "-o", "x.svg"], 3, "none.lwlog"),
        (&["plot", "text.lwlog", "-o", "x.svg"], 3, "text.lwlog"),
        (&["plot", "x.lwlog", "-o", "x.pdf"], 2, "ends in .svg or .png"),
        (&["plot", "x.lwlog", "-o", "x"], 2, "ends in .svg or .png"),
        (&["plot", "x.lwlog", "-o", "no/folder/x.svg"], 5, "could not write the picture"),
        (&["plot", "x.lwlog", "-o", "x.svg", "--board", "none.toml"], 3, "board file none.toml"),
        (&["plot", "x.lwlog", "-o", "x.svg", "--board", "short.csv"], 3, "written by 'legwise trim'"),
        (&["report", "x.lwlog", "--board", "x.wav"], 3, "it is not text"),
    ] {
        let ran = room.run(arguments);
        println!("{arguments:?}: {}", ran.err.trim_end());
        assert_refused(&ran, code, fragment);
        assert_eq!(room.files(), before, "{arguments:?}");
    }
    assert_eq!(room.run(&["plot", "x.lwlog"]).code, Some(2));
}
