//! Where conversion is asked for: bands of equal width on a logarithmic scale, and strong lines.
//!
//! Every frequency belongs to one rung: the slowest that still has it, up to 0.35 of its rate (its filter
//! passes to 0.4). Bands leave out the bins of strong lines of either mode: a line is one oscillation in
//! several bins at once, and would count as several independent ones. Lines of the asking mode get a
//! point of their own at their highest bin.

use super::{Direction, PointKind, Record, Settings};
use crate::spectrum::BLANKED_BINS;
use crate::spectrum::rung::{RungBin, RungSpectra, SegmentSet};
use std::collections::BTreeMap;
use std::f64::consts::PI;

/// Share of its rate up to which a slower rung is preferred.
const CROSSOVER: f64 = 0.35;
/// Share of its rate up to which the fastest rung is used; the filters of the others end there as well.
const TOP: f64 = 0.4;
/// A bin this far above the median around it, as a power ratio, begins a line: 10 dB.
const LINE_OVER_FLOOR: f64 = 10.0;
/// Bins to each side whose median is the floor of a bin; its nearest neighbours left out.
const NEIGHBOURHOOD_BINS: usize = 16;
/// Half the width of the Hann main lobe in bins.
const LOBE_BINS: usize = 2;
/// A bin is the line's when the line's skirt makes this share of it.
const SKIRT_SHARE: f64 = 0.25;

/// Bins that make one point.
#[derive(Clone, Debug, PartialEq)]
pub struct Place {
    /// Rung of the ladder.
    pub rung: u8,
    /// Band or line.
    pub kind: PointKind,
    /// Frequency of the point, Hz.
    pub frequency_hz: f64,
    /// From where to where its bins reach, Hz.
    pub band_hz: (f64, f64),
    /// Numbers of the bins, counted from 0 Hz, rising.
    pub bins: Vec<usize>,
}

/// A line: its highest bin, and the density there.
struct Line {
    bin: usize,
    density: f64,
}

/// The places of a curve: bands by rising frequency, then lines by rising frequency.
pub fn places(records: &[Record], settings: &Settings, direction: Direction) -> Vec<Place> {
    let mut bands = Vec::new();
    let mut lines = Vec::new();
    for (rung, (low_hz, high_hz)) in ranges(records) {
        let of_set = |set: SegmentSet| super::find(records, rung, set).map(|record| record.spectra);
        let own = of_set(direction.set());
        // Without segments of the right set the places are still named, so that they can be refused.
        let Some(shape) = own.or_else(|| of_set(direction.other().set())) else { continue };
        let (mut asking, mut answering) = (Vec::new(), Vec::new());
        if let Some(spectra) = own {
            asking = strong_lines(spectra, |bin| density_of(bin, direction), settings.most_lines);
            answering = strong_lines(spectra, |bin| density_of(bin, direction.other()), settings.most_lines);
        }
        let taken =
            taken_bins(shape, &asking, direction, taken_bins(shape, &answering, direction.other(), vec![]));
        bands.extend(bands_of(shape, settings.points_per_decade, (low_hz, high_hz), &taken));
        let bin_hz = shape.bin_hz();
        lines.extend(
            asking
                .iter()
                .map(|line| line_place(rung, line.bin, bin_hz))
                .filter(|place| place.frequency_hz > low_hz && place.frequency_hz <= high_hz),
        );
    }
    let by_frequency = |a: &Place, b: &Place| a.frequency_hz.total_cmp(&b.frequency_hz);
    bands.sort_by(by_frequency);
    lines.sort_by(by_frequency);
    bands.extend(lines);
    bands
}

/// From where to where each rung is used, Hz.
fn ranges(records: &[Record]) -> BTreeMap<u8, (f64, f64)> {
    let shapes: BTreeMap<u8, &RungSpectra> =
        records.iter().map(|record| (record.spectra.rung, record.spectra)).collect();
    let mut ranges = BTreeMap::new();
    for (rung, spectra) in &shapes {
        let slower = shapes.range(rung + 1..).next().map(|(_, spectra)| CROSSOVER * spectra.rate_hz);
        let low_hz = slower.unwrap_or((BLANKED_BINS as f64 - 0.5) * spectra.bin_hz());
        let share = if shapes.range(..rung).next().is_some() { CROSSOVER } else { TOP };
        ranges.insert(*rung, (low_hz, share * spectra.rate_hz));
    }
    ranges
}

/// Density of the asking mode.
fn density_of(bin: &RungBin, direction: Direction) -> f64 {
    match direction {
        Direction::Conversion => bin.common,
        Direction::DriverImbalance => bin.differential,
    }
}

fn line_place(rung: u8, bin: usize, bin_hz: f64) -> Place {
    let frequency_hz = bin as f64 * bin_hz;
    let band_hz = (frequency_hz - bin_hz / 2.0, frequency_hz + bin_hz / 2.0);
    Place { rung, kind: PointKind::Line, frequency_hz, band_hz, bins: vec![bin] }
}

/// Bands whose centre lies in the range, of the bins that no line has taken.
fn bands_of(
    spectra: &RungSpectra,
    per_decade: f64,
    (low_hz, high_hz): (f64, f64),
    taken: &[usize],
) -> Vec<Place> {
    let bin_hz = spectra.bin_hz();
    let edge_hz = |step: f64| 10.0_f64.powf(step / per_decade);
    let first = (low_hz.max(bin_hz).log10() * per_decade).ceil() as i64;
    let last = (high_hz.max(bin_hz).log10() * per_decade).floor() as i64;
    let lowest = spectra.first_bin.max(BLANKED_BINS);
    let end = spectra.first_bin + spectra.bins.len();
    let mut bands = Vec::new();
    for step in first..=last {
        let from = ((edge_hz(step as f64 - 0.5) / bin_hz).ceil() as usize).max(lowest);
        let to = ((edge_hz(step as f64 + 0.5) / bin_hz).ceil() as usize).min(end);
        let bins: Vec<usize> = (from..to).filter(|bin| taken.binary_search(bin).is_err()).collect();
        let (Some(&bottom), Some(&top)) = (bins.first(), bins.last()) else { continue };
        let band_hz = ((bottom as f64 - 0.5) * bin_hz, (top as f64 + 0.5) * bin_hz);
        bands.push(Place {
            rung: spectra.rung,
            kind: PointKind::Band { bins: bins.len() },
            frequency_hz: (bottom + top) as f64 / 2.0 * bin_hz,
            band_hz,
            bins,
        });
    }
    bands
}

/// Local maxima well above the median around them, strongest first, at most `at_most`.
fn strong_lines(spectra: &RungSpectra, density: impl Fn(&RungBin) -> f64, at_most: usize) -> Vec<Line> {
    let values: Vec<f64> = spectra.bins.iter().map(density).collect();
    let at = |place: usize| values.get(place).copied().unwrap_or(0.0);
    let lowest = BLANKED_BINS.saturating_sub(spectra.first_bin);
    let mut lines = Vec::new();
    for (place, &value) in values.iter().enumerate().skip(lowest) {
        let is_peak = value > at(place + 1) && (place == 0 || value >= at(place - 1));
        if is_peak && value > LINE_OVER_FLOOR * floor_around(&values, place) {
            lines.push(Line { bin: spectra.first_bin + place, density: value });
        }
    }
    lines.sort_by(|a, b| b.density.total_cmp(&a.density));
    // A side lobe of a stronger line is no line.
    let mut kept: Vec<Line> = Vec::new();
    for line in lines {
        let is_skirt = kept.iter().any(|other| {
            let distance = line.bin.abs_diff(other.bin);
            distance <= LOBE_BINS || other.density * skirt(distance) > SKIRT_SHARE * line.density
        });
        if !is_skirt && kept.len() < at_most {
            kept.push(line);
        }
    }
    kept
}

/// Median of the densities around a place, its nearest neighbours left out; infinite when alone.
fn floor_around(values: &[f64], place: usize) -> f64 {
    let from = place.saturating_sub(NEIGHBOURHOOD_BINS);
    let around = values.iter().enumerate().skip(from).take(place + NEIGHBOURHOOD_BINS + 1 - from);
    let mut near: Vec<f64> =
        around.filter(|(other, _)| other.abs_diff(place) > LOBE_BINS).map(|(_, value)| *value).collect();
    let middle = near.len() / 2;
    if near.is_empty() {
        return f64::INFINITY;
    }
    *near.select_nth_unstable_by(middle, f64::total_cmp).1
}

/// The most a line makes of its highest bin's power, `distance` bins from there.
///
/// Hann line shape sinc(d)/(1−d²) (Harris 1978); beyond the main lobe its envelope is 1/(πd(d²−1)), and
/// the line may lie half a bin nearer.
fn skirt(distance: usize) -> f64 {
    if distance <= LOBE_BINS {
        return 1.0;
    }
    let d = distance as f64 - 0.5;
    1.0 / (PI * d * (d * d - 1.0)).powi(2)
}

/// Numbers of the bins that lines of one mode have taken, joined with `taken`, rising.
fn taken_bins(
    spectra: &RungSpectra,
    lines: &[Line],
    direction: Direction,
    mut taken: Vec<usize>,
) -> Vec<usize> {
    for line in lines {
        for (place, bin) in spectra.bins.iter().enumerate() {
            let number = spectra.first_bin + place;
            let distance = number.abs_diff(line.bin);
            let share = line.density * skirt(distance);
            if distance <= LOBE_BINS || share > SKIRT_SHARE * density_of(bin, direction) {
                taken.push(number);
            }
        }
    }
    taken.sort_unstable();
    taken.dedup();
    taken
}
