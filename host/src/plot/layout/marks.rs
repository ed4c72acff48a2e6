//! The lower panel: conversion with its region, upper limits, the board's own.

use super::super::{Mark, PlacedMark, Plot};
use super::{CONVERSION, TEXT_PX, blind, blind_words, frequencies, outline, panel};
use crate::plot::axis::{Axis, Scale};
use crate::plot::scene::{Anchor, Colour, Frame, Pen, Place, Scene};
use crate::report::figures;

const VALUE: Pen = Pen { width_px: 1.6, dash_px: &[], colour: Colour::BLACK };
const BAR: Pen = Pen { width_px: 1.0, dash_px: &[], colour: Colour::BLACK };
const LIMIT: Pen = Pen { width_px: 0.8, dash_px: &[], colour: Colour(70, 70, 70) };
const FLOOR: Pen = Pen { width_px: 1.3, dash_px: &[1.3, 3.0], colour: Colour::BLACK };
const REGION: Colour = Colour(205, 205, 205);
/// Half the width of a limit's bar, length of its arrow, half the size of a mark, px.
const BAR_PX: f64 = 2.4;
const ARROW_PX: f64 = 8.0;
const MARK_PX: f64 = 3.2;
/// Height of the strip where nothing is said, px.
const UNSAID_PX: f64 = 7.0;
/// Lowest level drawn, dB: below it lies no board.
const LOWEST_DB: f64 = -140.0;

/// The axis of decibels: all that is there, to whole tens.
fn decibels(plot: &Plot, frame: Frame) -> Axis {
    let mut levels: Vec<f64> = plot.floor.iter().map(|point| point.1).collect();
    for placed in &plot.marks {
        match placed.mark {
            Mark::Value { low_db, high_db, .. } => levels.extend([low_db, high_db]),
            // Room for its arrow.
            Mark::Limit { db } => levels.extend([db, db - 6.0]),
            Mark::Refused => {}
        }
    }
    levels.retain(|level| level.is_finite());
    let lowest = levels.iter().copied().fold(f64::INFINITY, f64::min).max(LOWEST_DB);
    let highest = levels.iter().copied().fold(f64::NEG_INFINITY, f64::max);
    let (mut low, mut high) = if lowest <= highest {
        (((lowest - 5.0) / 10.0).floor() * 10.0, ((highest + 2.0) / 10.0).ceil() * 10.0)
    } else {
        (-60.0, 0.0)
    };
    if plot.marks_missing.is_some() {
        // Room for the reason.
        high += 10.0;
    }
    while high - low < 30.0 {
        low -= 10.0;
        if high < 0.0 {
            high += 10.0;
        }
    }
    Axis { scale: Scale::Linear, low, high, from_px: frame.bottom, to_px: frame.top }
}

/// Draws the lower panel.
pub(super) fn conversion(scene: &mut Scene, plot: &Plot) {
    let frame = CONVERSION;
    let across = frequencies(plot, frame);
    let up = decibels(plot, frame);
    let step = if up.high - up.low > 60.0 { 20.0 } else { 10.0 };
    let ticks = up.steps(step, figures::tick_decibels);
    panel(scene, frame, (&across, &up), &ticks, "conversion CM → DM in dB");
    blind(scene, frame, &across, plot.judged_hz);
    blind_words(scene, frame, (&across, plot.judged_hz), &["not judged".to_owned(), "not judged".to_owned()]);
    let place = |hz: f64, db: f64| (across.place_px(hz), up.place_px(db));
    unsaid(scene, plot, &across, frame);
    regions(scene, plot, &place);
    for placed in &plot.marks {
        match placed.mark {
            Mark::Limit { db } => limit(scene, "limit", place(placed.frequency_hz, db)),
            Mark::Value { db, low_db, high_db } if placed.is_line => {
                let hz = placed.frequency_hz;
                line_mark(scene, "line", place(hz, db), (place(hz, low_db).1, place(hz, high_db).1));
            }
            Mark::Value { .. } | Mark::Refused => {}
        }
    }
    scene.line("floor", plot.floor.iter().map(|(hz, db)| place(*hz, *db)).collect(), FLOOR);
    if let Some(reason) = &plot.marks_missing {
        empty(scene, frame, reason);
    }
    outline(scene, frame);
    legend(scene, frame, !plot.floor.is_empty());
}

/// A hatched strip along the bottom where nothing is said.
fn unsaid(scene: &mut Scene, plot: &Plot, across: &Axis, frame: Frame) {
    let mut runs: Vec<(f64, f64)> = Vec::new();
    let mut goes_on = false;
    for band in plot.marks.iter().filter(|placed| !placed.is_line) {
        let is_unsaid = band.mark == Mark::Refused;
        match runs.last_mut() {
            Some(run) if is_unsaid && goes_on => run.1 = band.band_hz.1,
            _ if is_unsaid => runs.push(band.band_hz),
            _ => {}
        }
        goes_on = is_unsaid;
    }
    for (low_hz, high_hz) in runs {
        let (left, right) = (across.place_px(low_hz), across.place_px(high_hz));
        let strip = Frame { left, right, top: frame.bottom - UNSAID_PX, bottom: frame.bottom };
        unsaid_strip(scene, "unsaid", strip);
    }
}

fn unsaid_strip(scene: &mut Scene, name: &'static str, strip: Frame) {
    scene.area(name, strip.corners(), Colour::WHITE);
    scene.hatch(name, strip, 4.0, LIMIT);
    scene.line(name, vec![(strip.left, strip.top), (strip.right, strip.top)], LIMIT);
}

/// Runs of neighbouring bands with a value: region and line; one alone gets a short bar.
fn regions(scene: &mut Scene, plot: &Plot, place: &dyn Fn(f64, f64) -> Place) {
    let bands: Vec<&PlacedMark> = plot.marks.iter().filter(|placed| !placed.is_line).collect();
    let mut runs: Vec<Vec<(f64, f64, f64, f64)>> = vec![Vec::new()];
    for band in bands {
        match (band.mark, runs.last_mut()) {
            (Mark::Value { db, low_db, high_db }, Some(run)) => {
                run.push((band.frequency_hz, db, low_db, high_db))
            }
            _ => runs.push(Vec::new()),
        }
    }
    for mut run in runs {
        if let [(hz, db, low_db, high_db)] = run[..] {
            run = vec![(hz * 0.985, db, low_db, high_db), (hz * 1.015, db, low_db, high_db)];
        }
        if run.is_empty() {
            continue;
        }
        let upper = run.iter().map(|(hz, _, _, high)| place(*hz, *high));
        let lower = run.iter().rev().map(|(hz, _, low, _)| place(*hz, *low));
        scene.area("region", upper.chain(lower).collect(), REGION);
        scene.line("conversion", run.iter().map(|(hz, db, _, _)| place(*hz, *db)).collect(), VALUE);
    }
}

/// A bar with an arrow below it.
fn limit(scene: &mut Scene, name: &'static str, (x, y): Place) {
    scene.line(name, vec![(x - BAR_PX, y), (x + BAR_PX, y)], LIMIT);
    scene.line(name, vec![(x, y), (x, y + ARROW_PX)], LIMIT);
    let tip = y + ARROW_PX;
    scene.line(name, vec![(x - 1.8, tip - 2.6), (x, tip), (x + 1.8, tip - 2.6)], LIMIT);
}

/// A rhomb with its region as a bar.
fn line_mark(scene: &mut Scene, name: &'static str, (x, y): Place, (low_y, high_y): (f64, f64)) {
    scene.line(name, vec![(x, low_y), (x, high_y)], BAR);
    let corners = vec![(x, y - MARK_PX), (x + MARK_PX, y), (x, y + MARK_PX), (x - MARK_PX, y)];
    let mut edge = corners.clone();
    edge.push((x, y - MARK_PX));
    scene.area(name, corners, Colour::WHITE);
    scene.line(name, edge, BAR);
}

/// The reason for an empty panel, near its top.
fn empty(scene: &mut Scene, frame: Frame, reason: &str) {
    let (x, y) = ((frame.left + frame.right) / 2.0, frame.top + 22.0);
    let half = 3.4 * reason.chars().count() as f64;
    let strip = Frame { left: x - half, right: x + half, top: y - 14.0, bottom: y + 9.0 };
    scene.area("label", strip.corners(), Colour::WHITE);
    scene.text((x, y), TEXT_PX, Anchor::Middle, reason);
}

fn legend(scene: &mut Scene, frame: Frame, has_floor: bool) {
    let y = frame.top - 10.0;
    let left = |offset: f64| frame.left + offset;
    let strip = Frame { left: left(0.0), right: left(36.0), top: y - 5.0, bottom: y + 5.0 };
    scene.area("legend", strip.corners(), REGION);
    scene.line("legend", vec![(strip.left, y), (strip.right, y)], VALUE);
    scene.text((strip.right + 6.0, y + 4.0), TEXT_PX, Anchor::Start, "in bands, with 95 % region");
    line_mark(scene, "legend", (left(230.0), y), (y + 7.0, y - 7.0));
    scene.text((left(240.0), y + 4.0), TEXT_PX, Anchor::Start, "at a line, with 95 % region");
    limit(scene, "legend", (left(434.0), y - 4.0));
    scene.text((left(444.0), y + 4.0), TEXT_PX, Anchor::Start, "upper limit, nothing claimed");
    let strip = Frame { left: left(638.0), right: left(664.0), top: y - 3.5, bottom: y + 3.5 };
    unsaid_strip(scene, "legend", strip);
    scene.text((left(670.0), y + 4.0), TEXT_PX, Anchor::Start, "nothing said");
    if has_floor {
        scene.line("legend", vec![(left(772.0), y), (left(808.0), y)], FLOOR);
        scene.text((left(814.0), y + 4.0), TEXT_PX, Anchor::Start, "the board's own, legs tied");
    }
}
