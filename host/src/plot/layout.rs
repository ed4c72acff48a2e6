//! Where everything of a plot goes: two panels over one frequency axis, legends above, notes below.
//!
//! The page is A4 across at 96 px per inch. Each curve has a weight and a dash of its own ([`pen_of`]).

use super::axis::{Axis, Scale, Tick};
use super::scene::{Anchor, Colour, Frame, Pen, Place, Scene};
use super::{Plot, Series};
use crate::report::figures;
use legwise_protocol::message::{Mode, SegmentSet};

mod marks;

const WIDTH_PX: f64 = 1122.0;
const HEIGHT_PX: f64 = 793.0;
const DENSITIES: Frame = Frame { left: 106.0, top: 100.0, right: 1100.0, bottom: 444.0 };
const CONVERSION: Frame = Frame { left: 106.0, top: 512.0, right: 1100.0, bottom: 700.0 };
/// Room beside what is seen for the hatching, as a ratio of frequencies.
const BLIND_BELOW: f64 = 0.6;
const BLIND_ABOVE: f64 = 1.45;
/// Characters of the title and of the lines below it that fit the page.
const TITLE_CHARACTERS: usize = 88;
const LINE_CHARACTERS: usize = 150;
/// Size of most text, px.
const TEXT_PX: f64 = 11.5;
/// Most decades the densities' axis spans below its top.
const MOST_DECADES: f64 = 9.0;

const GRID: Pen = Pen { width_px: 0.7, dash_px: &[], colour: Colour(196, 196, 196) };
const FINE_GRID: Pen = Pen { width_px: 0.4, dash_px: &[], colour: Colour(226, 226, 226) };
const FRAME: Pen = Pen { width_px: 1.0, dash_px: &[], colour: Colour::BLACK };
const HATCH: Pen = Pen { width_px: 0.6, dash_px: &[], colour: Colour(120, 120, 120) };

/// Weight and dash of a curve: no two are alike.
pub(super) fn pen_of(mode: Mode, set: SegmentSet) -> Pen {
    let (width_px, dash_px): (f64, &'static [f64]) = match (mode, set) {
        (Mode::Common, SegmentSet::Idle) => (1.4, &[]),
        (Mode::Common, SegmentSet::Driven) => (0.6, &[]),
        (Mode::Differential, SegmentSet::Idle) => (1.2, &[6.0, 2.0]),
        (Mode::Differential, SegmentSet::Driven) => (0.8, &[1.6, 1.4]),
    };
    let colour = match mode {
        Mode::Common => Colour(16, 44, 110),
        Mode::Differential => Colour(176, 62, 0),
    };
    Pen { width_px, dash_px, colour }
}

/// Name of a curve in the file.
fn name_of(mode: Mode, set: SegmentSet) -> &'static str {
    match (mode, set) {
        (Mode::Common, SegmentSet::Idle) => "common-idle",
        (Mode::Common, SegmentSet::Driven) => "common-driven",
        (Mode::Differential, SegmentSet::Idle) => "differential-idle",
        (Mode::Differential, SegmentSet::Driven) => "differential-driven",
    }
}

/// Name of a curve for people.
fn words_of(mode: Mode, set: SegmentSet) -> &'static str {
    match (mode, set) {
        (Mode::Common, SegmentSet::Idle) => "common mode, bus idle",
        (Mode::Common, SegmentSet::Driven) => "common mode, bus driven",
        (Mode::Differential, SegmentSet::Idle) => "differential mode, bus idle",
        (Mode::Differential, SegmentSet::Driven) => "differential mode, bus driven",
    }
}

/// The plot on a page.
pub fn layout(plot: &Plot) -> Scene {
    let mut scene = Scene {
        width_px: WIDTH_PX,
        height_px: HEIGHT_PX,
        title: format!("Spectra: {}", plot.title),
        elements: Vec::new(),
    };
    scene.text(
        (24.0, 32.0),
        18.0,
        Anchor::Start,
        shortened(&format!("Spectra: {}", plot.title), TITLE_CHARACTERS),
    );
    for (row, subtitle) in plot.subtitles.iter().enumerate() {
        let at = (24.0, 51.0 + 15.0 * row as f64);
        scene.text(at, TEXT_PX, Anchor::Start, shortened(subtitle, LINE_CHARACTERS));
    }
    densities(&mut scene, plot);
    marks::conversion(&mut scene, plot);
    for (row, note) in plot.notes.iter().enumerate() {
        scene.text((24.0, 756.0 + 13.0 * row as f64), 10.0, Anchor::Start, note.clone());
    }
    scene
}

/// The frequency axis, the same for both panels.
fn frequencies(plot: &Plot, frame: Frame) -> Axis {
    Axis {
        scale: Scale::Logarithmic,
        low: plot.seen_hz.0 * BLIND_BELOW,
        high: plot.half_rate_hz.max(plot.seen_hz.1) * BLIND_ABOVE,
        from_px: frame.left,
        to_px: frame.right,
    }
}

/// The axis of amplitude densities: what is there, and at least two powers of ten.
fn amplitudes(series: &[Series], frame: Frame) -> Axis {
    let all = || series.iter().flat_map(|one| one.points.iter().map(|point| point.1));
    let highest = all().fold(1e-15, f64::max);
    let lowest = all().fold(highest, f64::min).max(highest / 10_f64.powf(MOST_DECADES));
    let (mut low, mut high) = (lowest * 0.6, highest * 1.7);
    let axis =
        |low, high| Axis { scale: Scale::Logarithmic, low, high, from_px: frame.bottom, to_px: frame.top };
    let labelled =
        |axis: Axis| axis.decades(|_| String::new()).iter().filter(|tick| tick.label.is_some()).count();
    if labelled(axis(low, high)) < 2 {
        low = 10_f64.powf(low.log10().floor()) * 0.9;
        high = 10_f64.powf(high.log10().ceil()) * 1.1;
    }
    axis(low, high)
}

fn densities(scene: &mut Scene, plot: &Plot) {
    let frame = DENSITIES;
    let across = frequencies(plot, frame);
    let up = amplitudes(&plot.series, frame);
    let ticks = up.decades(|density| figures::tick(density, "V/√Hz"));
    panel(scene, frame, (&across, &up), &ticks, "amplitude density in V/√Hz");
    blind(scene, frame, &across, (plot.seen_hz.0, plot.half_rate_hz));
    // Idle curves, which conversion rests on, lie on top.
    for set in [SegmentSet::Driven, SegmentSet::Idle] {
        for one in plot.series.iter().filter(|one| one.set == set) {
            let points = one.points.iter().map(|(hz, density)| (across.place_px(*hz), up.place_px(*density)));
            scene.line(name_of(one.mode, one.set), points.collect(), pen_of(one.mode, one.set));
        }
    }
    let blind_texts = [
        format!("not seen: DC and below {}", figures::tick(plot.seen_hz.0, "Hz")),
        format!("not seen: above {}, half the sample rate", figures::tick(plot.half_rate_hz, "Hz")),
    ];
    blind_words(scene, frame, (&across, (plot.seen_hz.0, plot.half_rate_hz)), &blind_texts);
    outline(scene, frame);
    for (slot, one) in plot.series.iter().enumerate() {
        let left = frame.left + 250.0 * slot as f64;
        let y = frame.top - 10.0;
        scene.line("legend", vec![(left, y), (left + 40.0, y)], pen_of(one.mode, one.set));
        scene.text((left + 47.0, y + 4.0), TEXT_PX, Anchor::Start, words_of(one.mode, one.set));
    }
}

/// Grid, ticks and names of the axes of a panel.
fn panel(scene: &mut Scene, frame: Frame, (across, up): (&Axis, &Axis), ticks: &[Tick], name: &str) {
    let columns = across.decades(|frequency| figures::tick(frequency, "Hz"));
    for is_labelled in [false, true] {
        let pen = if is_labelled { GRID } else { FINE_GRID };
        for tick in columns.iter().filter(|tick| tick.label.is_some() == is_labelled) {
            let x = across.place_px(tick.value);
            scene.line("grid", vec![(x, frame.top), (x, frame.bottom)], pen);
        }
        for tick in ticks.iter().filter(|tick| tick.label.is_some() == is_labelled) {
            let y = up.place_px(tick.value);
            scene.line("grid", vec![(frame.left, y), (frame.right, y)], pen);
        }
    }
    for tick in &columns {
        let x = across.place_px(tick.value);
        let length = if tick.label.is_some() { 6.0 } else { 3.0 };
        scene.line("tick", vec![(x, frame.bottom), (x, frame.bottom + length)], FRAME);
        if let Some(label) = &tick.label {
            scene.text((x, frame.bottom + 18.0), TEXT_PX, Anchor::Middle, label.clone());
        }
    }
    for tick in ticks {
        let y = up.place_px(tick.value);
        let length = if tick.label.is_some() { 6.0 } else { 3.0 };
        scene.line("tick", vec![(frame.left - length, y), (frame.left, y)], FRAME);
        if let Some(label) = &tick.label {
            scene.text((frame.left - 9.0, y + 4.0), TEXT_PX, Anchor::End, label.clone());
        }
    }
    let middle = (frame.left + frame.right) / 2.0;
    scene.text((middle, frame.bottom + 34.0), TEXT_PX, Anchor::Middle, "frequency in Hz");
    scene.upright_text((18.0, (frame.top + frame.bottom) / 2.0), TEXT_PX, Anchor::Middle, name);
}

/// The parts of a panel beyond what is seen.
fn blind_frames(frame: Frame, across: &Axis, (low_hz, high_hz): (f64, f64)) -> [Frame; 2] {
    [Frame { right: across.place_px(low_hz), ..frame }, Frame { left: across.place_px(high_hz), ..frame }]
}

/// Hatches what is not seen.
fn blind(scene: &mut Scene, frame: Frame, across: &Axis, range_hz: (f64, f64)) {
    for part in blind_frames(frame, across, range_hz) {
        scene.area("blind", part.corners(), Colour(240, 240, 240));
        scene.hatch("blind", part, 7.0, HATCH);
        let inner = if part.left > frame.left { part.left } else { part.right };
        scene.line("blind", vec![(inner, frame.top), (inner, frame.bottom)], HATCH);
    }
}

/// Says what the hatching below and above means.
fn blind_words(
    scene: &mut Scene,
    frame: Frame,
    (across, range_hz): (&Axis, (f64, f64)),
    texts: &[String; 2],
) {
    for (part, text) in blind_frames(frame, across, range_hz).into_iter().zip(texts) {
        let x = (part.left + part.right) / 2.0;
        let half_length = 3.2 * text.chars().count() as f64;
        let middle = (frame.top + frame.bottom) / 2.0;
        let strip =
            Frame { left: x - 7.5, right: x + 7.5, top: middle - half_length, bottom: middle + half_length };
        scene.area("label", strip.corners(), Colour::WHITE);
        scene.upright_text((x + 3.7, middle), 10.0, Anchor::Middle, text.clone());
    }
}

fn outline(scene: &mut Scene, frame: Frame) {
    let mut corners: Vec<Place> = frame.corners();
    corners.push((frame.left, frame.top));
    scene.line("frame", corners, FRAME);
}

/// At most so many characters, the last of them an ellipsis when some were cut.
fn shortened(text: &str, characters: usize) -> String {
    if text.chars().count() <= characters {
        return text.to_owned();
    }
    let kept: String = text.chars().take(characters.saturating_sub(1)).collect();
    format!("{}…", kept.trim_end())
}

#[cfg(test)]
mod tests;
