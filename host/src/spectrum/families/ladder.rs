//! One list of lines per mode over all rungs, without the same line twice.
//!
//! Each rung publishes the bins in which it is the finest that may be used: up to 0.35 of its own rate, down
//! to 0.35 of the next one's. A line near such a limit can show in both; the finer rung's word counts. A band
//! wider than the window that lies across it is put together. What the skirts of lines in other rungs
//! explain is no line, nor what leaks through the decimators' stop band.
//!
//! Amplitudes of clean lines are right within 0.2 % from bin 6 of the lowest rung to bin 509 of rung 0; below,
//! the line's mirror image at negative frequencies limits (2.5e-4 at bin 4), above, that at half the rate.

use super::super::lines::{Line, LineMethod, Outside, Section, find_in};
use super::super::rung::{RUNG_RATIO, RungSpectra, SegmentSet};
use super::super::{BLANKED_BINS, HANN_ENBW_BINS};
use super::Mode;
use std::borrow::Cow;
use std::f64::consts::PI;

/// Lines per rung and mode.
const MOST_LINES: usize = 64;
/// Power that may leak through the decimators: −80 dB, what their design promises.
const LEAK: f64 = 1e-8;
/// A line must exceed a leak by this power ratio: 6 dB.
const OVER_LEAK: f64 = 4.0;
/// The median around a bin wavers, and with few segments the highest of a few hundred bins comes close to what
/// a line must reach: below so many segments ...
const FEW_SEGMENTS: f64 = 16.0;
/// ... a line stands higher by this, dB.
const FEW_MARGIN_DB: f64 = 2.5;
/// Two finds within this share of the coarser rung's bin are one line.
const SAME_BINS: f64 = 0.3;
/// Bins around a known frequency that its floor is taken from ...
pub(super) const FLOOR_BINS: usize = 32;
/// ... without those that are its own.
const OWN_BINS: usize = 3;

/// A line and where it was found.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct LadderLine {
    /// Mode it was found in.
    pub mode: Mode,
    /// Rung it was found in.
    pub rung: u8,
    /// Which segments the average holds.
    pub set: SegmentSet,
    /// Distance between bins there, Hz.
    pub bin_hz: f64,
    /// The line.
    pub line: Line,
}

impl LadderLine {
    /// Half the band it occupies, Hz: 0 for one no wider than the window.
    pub fn half_width_hz(&self) -> f64 {
        match self.line.method {
            LineMethod::Interpolated => 0.0,
            LineMethod::BandPower => self.line.frequency_uncertainty_hz,
        }
    }

    fn low_hz(&self) -> f64 {
        self.line.frequency_hz - self.half_width_hz()
    }

    fn high_hz(&self) -> f64 {
        self.line.frequency_hz + self.half_width_hz()
    }
}

/// Level at a frequency that was known beforehand.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct KnownLevel {
    /// Level, V rms.
    pub rms_v: f64,
    /// Highest bin over the floor, dB.
    pub above_floor_db: f64,
}

/// One average per rung, the finest bins last.
#[derive(Clone, Debug)]
pub struct Ladder<'a> {
    rungs: Vec<&'a RungSpectra>,
}

impl<'a> Ladder<'a> {
    /// Of each rung the idle average, or the driven one where there is no idle one.
    pub fn quiet(all: &'a [RungSpectra]) -> Self {
        Self::best(all, |spectra| (spectra.set == SegmentSet::Idle, spectra.segments))
    }

    /// The averages of one set.
    pub fn of_set(all: &'a [RungSpectra], set: SegmentSet) -> Self {
        let mut ladder = Self::best(all, |spectra| (spectra.set == set, spectra.segments));
        ladder.rungs.retain(|spectra| spectra.set == set);
        ladder
    }

    fn best(all: &'a [RungSpectra], merit: impl Fn(&RungSpectra) -> (bool, u64)) -> Self {
        let mut rungs: Vec<&RungSpectra> = Vec::new();
        for spectra in all.iter().filter(|spectra| spectra.segments > 0 && !spectra.bins.is_empty()) {
            match rungs.iter_mut().find(|other| other.rung == spectra.rung) {
                Some(other) if merit(other) < merit(spectra) => *other = spectra,
                Some(_) => {}
                None => rungs.push(spectra),
            }
        }
        rungs.sort_by_key(|spectra| spectra.rung);
        Self { rungs }
    }

    /// The averages, rung 0 first.
    pub fn rungs(&self) -> &[&'a RungSpectra] {
        &self.rungs
    }

    /// Rate of the samples, Hz.
    pub fn full_rate_hz(&self) -> Option<f64> {
        self.rungs.first().map(|spectra| spectra.rate_hz * RUNG_RATIO.powi(spectra.rung.into()))
    }

    /// The lines of one mode, lowest frequency first.
    pub fn lines(&self, mode: Mode) -> Vec<LadderLine> {
        let sections: Vec<Section<'_>> = self.rungs.iter().map(|spectra| section(spectra, mode)).collect();
        let look = |outside: &dyn Fn(usize) -> Vec<Outside>| -> Vec<LadderLine> {
            let each = self.rungs.iter().zip(&sections).enumerate();
            each.flat_map(|(place, (spectra, section))| {
                let lines = find_in(section, &outside(place), MOST_LINES);
                let least_db = least_db(section);
                lines.into_iter().filter(move |line| line.above_floor_db >= least_db).map(move |line| {
                    LadderLine { mode, rung: spectra.rung, set: spectra.set, bin_hz: spectra.bin_hz(), line }
                })
            })
            .collect()
        };
        let first = look(&|_| Vec::new());
        let mut lines = look(&|place| outside(&first, sections.get(place)));
        lines.retain(|line| !self.is_leak(line, &first));
        one_of_each(lines)
    }

    /// Whether a stronger line above a rung's half rate accounts for it.
    fn is_leak(&self, line: &LadderLine, all: &[LadderLine]) -> bool {
        let Some(spectra) = self.rungs.iter().find(|spectra| spectra.rung == line.rung) else { return false };
        all.iter().filter(|other| other.line.frequency_hz > spectra.rate_hz / 2.0).any(|other| {
            let folded_hz = fold(other.line.frequency_hz, spectra.rate_hz);
            let reach_hz = 1.5 * line.bin_hz + other.half_width_hz() + line.half_width_hz();
            (folded_hz - line.line.frequency_hz).abs() < reach_hz
                && line.line.rms_v.powi(2) < OVER_LEAK * LEAK * other.line.rms_v.powi(2)
        })
    }

    /// The finest average that has the frequency and both bins beside it.
    pub fn rung_at(&self, frequency_hz: f64) -> Option<&'a RungSpectra> {
        self.rungs.iter().rev().copied().find(|spectra| {
            let bin = frequency_hz / spectra.bin_hz();
            let last = (spectra.first_bin + spectra.bins.len()) as f64 - 2.0;
            bin >= spectra.first_bin as f64 + 1.0 && bin <= last && bin >= BLANKED_BINS as f64
        })
    }

    /// Level of a line of known frequency, from the three bins around it; `None` where it does not stand
    /// 6 dB (and what noise alone seldom reaches) above the floor.
    ///
    /// `Σ(S − floor)·1.5·bin / ΣW²` with the window's shape `W(d) = sinc(d)/(1 − d²)` at the three bins.
    pub fn level_at(&self, mode: Mode, frequency_hz: f64) -> Option<KnownLevel> {
        let section = section(self.rung_at(frequency_hz)?, mode);
        known_level(&section, frequency_hz)
    }
}

/// The searched part of an average.
fn section(spectra: &RungSpectra, mode: Mode) -> Section<'static> {
    section_of(spectra, mode, 0..=usize::MAX)
}

/// Those bins of an average that lie within `bins`.
pub(super) fn section_of(
    spectra: &RungSpectra,
    mode: Mode,
    bins: std::ops::RangeInclusive<usize>,
) -> Section<'static> {
    let first_bin = spectra.first_bin.max(*bins.start());
    let skipped = first_bin - spectra.first_bin;
    let kept = bins.end().saturating_sub(first_bin).saturating_add(1);
    let values = spectra.bins.iter().skip(skipped).take(kept).map(|bin| bin.of(mode));
    Section {
        first_bin,
        v2_per_hz: Cow::Owned(values.collect()),
        bin_hz: spectra.bin_hz(),
        segments: spectra.effective_segments(),
        half_rate_bin: spectra.points as usize / 2,
        lowest_bin: BLANKED_BINS,
    }
}

/// How far a line stands above the floor at least, dB.
fn least_db(section: &Section<'_>) -> f64 {
    let margin_db = if section.segments < FEW_SEGMENTS { FEW_MARGIN_DB } else { 0.0 };
    10.0 * section.line_ratio(10.0).log10() + margin_db
}

/// Level of a line of known frequency in a section.
pub(super) fn known_level(section: &Section<'_>, frequency_hz: f64) -> Option<KnownLevel> {
    let place = frequency_hz / section.bin_hz;
    let centre = place.round() as usize;
    let floor = quarter_floor(section, centre);
    let (mut excess, mut shape, mut highest) = (0.0, 0.0, 0.0_f64);
    for bin in centre.checked_sub(1)?..=centre + 1 {
        let density = section.get(bin)?;
        excess += density - floor;
        shape += window_power(bin as f64 - place);
        highest = highest.max(density);
    }
    let beside = [centre.checked_sub(OWN_BINS), Some(centre + OWN_BINS)];
    let is_slope = beside.into_iter().flatten().filter_map(|bin| section.get(bin)).any(|s| s > 2.0 * highest);
    // 6 dB: at a known frequency there is one chance to be wrong, not five hundred.
    if is_slope || excess <= 0.0 || highest <= section.line_ratio(4.0) * floor {
        return None;
    }
    Some(KnownLevel {
        rms_v: (excess * HANN_ENBW_BINS * section.bin_hz / shape).sqrt(),
        above_floor_db: 10.0 * (highest / floor.max(f64::MIN_POSITIVE)).log10(),
    })
}

/// Least level that [`known_level`] finds on a bin, V rms; `None` where the section does not hold the bin and
/// both beside it.
pub(super) fn detectable(section: &Section<'_>, bin: usize) -> Option<f64> {
    section.get(bin.checked_sub(1)?).and(section.get(bin + 1))?;
    let density = section.line_ratio(4.0) * quarter_floor(section, bin);
    // Half way between two bins the window shows 0.72 of the power it shows on one.
    Some((density * HANN_ENBW_BINS * section.bin_hz / window_power(0.5)).sqrt())
}

/// Lower quartile of the density around a bin: a floor that a comb of lines four bins apart leaves alone.
fn quarter_floor(section: &Section<'_>, centre: usize) -> f64 {
    let around = centre.saturating_sub(FLOOR_BINS)..=centre + FLOOR_BINS;
    let others = around.filter(|bin| bin.abs_diff(centre) > OWN_BINS && *bin >= BLANKED_BINS);
    let mut values: Vec<f64> = others.filter_map(|bin| section.get(bin)).collect();
    let place = values.len() / 4;
    if values.is_empty() { 0.0 } else { *values.select_nth_unstable_by(place, f64::total_cmp).1 }
}

/// Power of the Hann window's shape `d` bins off.
fn window_power(d: f64) -> f64 {
    let shape = if d.abs() < 1e-9 {
        1.0
    } else if (d.abs() - 1.0).abs() < 1e-9 {
        0.5
    } else {
        (PI * d).sin() / (PI * d * (1.0 - d * d))
    };
    shape * shape
}

/// Where a frequency shows at a sample rate.
pub(super) fn fold(frequency_hz: f64, rate_hz: f64) -> f64 {
    let rest = frequency_hz.rem_euclid(rate_hz);
    rest.min(rate_hz - rest)
}

/// The lines that lie outside a section.
fn outside(all: &[LadderLine], section: Option<&Section<'_>>) -> Vec<Outside> {
    let Some(section) = section else { return Vec::new() };
    let low_hz = (section.first_bin as f64 - 0.5) * section.bin_hz;
    let high_hz = (section.last_bin() as f64 + 0.5) * section.bin_hz;
    let is_outside = |line: &&LadderLine| !(low_hz..=high_hz).contains(&line.line.frequency_hz);
    all.iter()
        .filter(is_outside)
        .map(|line| Outside {
            frequency_hz: line.line.frequency_hz,
            half_width_hz: line.half_width_hz(),
            power_v2: line.line.rms_v.powi(2),
        })
        .collect()
}

/// Drops or joins what two rungs show of one line.
fn one_of_each(mut lines: Vec<LadderLine>) -> Vec<LadderLine> {
    lines.sort_by(|a, b| b.rung.cmp(&a.rung).then(a.line.frequency_hz.total_cmp(&b.line.frequency_hz)));
    let mut kept: Vec<LadderLine> = Vec::new();
    for line in lines {
        match kept.iter_mut().find(|other| other.rung != line.rung && is_same(other, &line)) {
            Some(other) if other.half_width_hz() > 0.0 && line.half_width_hz() > 0.0 => join(other, &line),
            Some(_) => {}
            None => kept.push(line),
        }
    }
    kept.sort_by(|a, b| a.line.frequency_hz.total_cmp(&b.line.frequency_hz));
    kept
}

fn is_same(fine: &LadderLine, coarse: &LadderLine) -> bool {
    let reach_hz = SAME_BINS * coarse.bin_hz;
    if fine.half_width_hz() > 0.0 && coarse.half_width_hz() > 0.0 {
        // Two halves of one band: they touch, give or take the bin the rungs share.
        return fine.high_hz() + 1.5 * coarse.bin_hz >= coarse.low_hz()
            && coarse.high_hz() >= fine.low_hz() - 1.5 * coarse.bin_hz;
    }
    fine.high_hz() + reach_hz >= coarse.low_hz() && coarse.high_hz() + reach_hz >= fine.low_hz()
}

fn join(fine: &mut LadderLine, coarse: &LadderLine) {
    let (low_hz, high_hz) = (fine.low_hz().min(coarse.low_hz()), fine.high_hz().max(coarse.high_hz()));
    let (a, b) = (fine.line.rms_v.powi(2), coarse.line.rms_v.powi(2));
    let line = &mut fine.line;
    line.frequency_hz = (a * line.frequency_hz + b * coarse.line.frequency_hz) / (a + b);
    line.frequency_uncertainty_hz = (high_hz - low_hz) / 2.0;
    line.rms_v = (a + b).sqrt();
    line.amplitude_v = (2.0 * (a + b)).sqrt();
    line.above_floor_db = line.above_floor_db.max(coarse.line.above_floor_db);
}
