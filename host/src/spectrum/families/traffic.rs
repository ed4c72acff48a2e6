//! The bus's own data: what the differential mode shows while driven and not while idle.
//!
//! Data spread over the band, so the sign of them is a raised median density, not a line; a strong
//! disturbance in the differential mode makes lines and leaves the median alone. The bit rate comes from the
//! shape ([`super::nrz`]); lines stand at multiples of the rate of characters where characters follow each
//! other without a pause.

use super::super::rung::{RungSpectra, SegmentSet};
use super::alias::AliasState;
use super::evidence::{Evidence, Fact, confidence};
use super::ladder::{Ladder, LadderLine};
use super::nrz::{Curve, Fit, fit};
use super::spots::Free;
use super::{Family, Hints, Levels, Member, Mode, NAMED_FROM, Role, Source};
use crate::spectrum::lines::LineMethod;

/// Rungs whose shape tells the bit rate.
const SHAPE_RUNGS: u8 = 2;
/// Lines listed.
const MOST_LINES: usize = 16;
/// Decision level of a receiver, V (TIA/EIA-485-A): data are larger.
const DECISION_V: f64 = 0.2;
/// Most common mode that data make, as a share of the differential mode's power: one leg alone.
const MOST_COMMON: f64 = 0.25;
/// Bins averaged into a point of the shape, by rung: zeros of slow data are twenty bins apart in rung 0.
const POINT_BINS: [usize; 2] = [3, 2];

/// Takes the traffic out of the free spots. Without traffic no spot is data.
pub(super) fn take(rungs: &[RungSpectra], free: &mut Free, hints: &Hints) -> Option<Family> {
    let driven = Ladder::of_set(rungs, SegmentSet::Driven);
    let idle = Ladder::of_set(rungs, SegmentSet::Idle);
    let fitted = shape_fit(&driven, &idle, hints);
    let evidence = evidence(&driven, &idle, fitted, hints);
    if evidence.is_empty() || confidence(&evidence) < NAMED_FROM {
        free.clear_data();
        return None;
    }
    let told = fitted.filter(|fit| fit.explained >= 0.3);
    let bit_rate_hz = told.map(|fit| fit.bit_rate_hz);
    let lines = data_lines(&driven, &idle);
    let frame_bits = bit_rate_hz.and_then(|rate_hz| frame_bits(&lines, rate_hz));
    let character_hz = bit_rate_hz.zip(frame_bits).map(|(rate_hz, (bits, _))| rate_hz / f64::from(bits));
    let mut evidence = evidence;
    evidence.extend(frame_bits.map(|(_, share)| Evidence::new(Fact::CharacterLines(share), 1.0)));
    let mut members: Vec<Member> = lines.iter().map(|line| member(line, character_hz)).collect();
    members.insert(0, rest(&driven, &members));
    let of_data: Vec<usize> =
        free.iter().filter(|(_, spot)| spot.is_data).map(|(number, _)| number).collect();
    of_data.into_iter().for_each(|number| free.take(number));
    let source = Source::Traffic { frame_bits: frame_bits.map(|(bits, _)| bits) };
    let fundamental = told.map_or((0.0, 0.0), |fit| (fit.bit_rate_hz, fit.uncertainty_hz));
    Some(Family::new(source, fundamental, members, evidence))
}

/// Median over the bins of a rung.
fn median(spectra: &RungSpectra, mode: Mode) -> f64 {
    let mut values: Vec<f64> = spectra.bins.iter().map(|bin| bin.of(mode)).collect();
    let middle = values.len() / 2;
    if values.is_empty() { 0.0 } else { *values.select_nth_unstable_by(middle, f64::total_cmp).1 }
}

fn decibels(ratio: f64) -> f64 {
    10.0 * ratio.max(f64::MIN_POSITIVE).log10()
}

/// Rung `number` of a ladder.
fn rung<'a>(ladder: &Ladder<'a>, number: u8) -> Option<&'a RungSpectra> {
    ladder.rungs().iter().copied().find(|spectra| spectra.rung == number)
}

fn evidence(driven: &Ladder<'_>, idle: &Ladder<'_>, fitted: Option<Fit>, hints: &Hints) -> Vec<Evidence> {
    let mut evidence = Vec::new();
    let over_idle = (0..SHAPE_RUNGS).filter_map(|number| {
        let (driven, idle) = (rung(driven, number)?, rung(idle, number)?);
        let mode = Mode::Differential;
        Some(decibels(median(driven, mode) / median(idle, mode)))
    });
    let over_common = (0..SHAPE_RUNGS).filter_map(|number| {
        let spectra = rung(driven, number)?;
        Some(decibels(median(spectra, Mode::Differential) / median(spectra, Mode::Common)))
    });
    if let Some(over_db) = over_idle.reduce(f64::max) {
        let weight = if over_db >= 10.0 { 3.0 } else { -4.0 };
        evidence.push(Evidence::new(Fact::DrivenOverIdleDb(over_db), weight));
    } else if let Some(over_db) = over_common.reduce(f64::max) {
        // Noise of equal legs puts 6 dB more into the difference than into the mean.
        let weight = if over_db >= 20.0 { 2.5 } else { -4.0 };
        evidence.push(Evidence::new(Fact::BroadbandOverCommonDb(over_db), weight));
    } else {
        return evidence;
    }
    let rms_v = power_v2(driven).sqrt();
    let weight = if rms_v >= DECISION_V { 0.5 } else { -1.0 };
    evidence.push(Evidence::new(Fact::DrivenRmsV(rms_v), weight));
    if let Some(fit) = fitted {
        let weight = if fit.explained >= 0.5 { 1.5 } else { -0.5 };
        evidence.push(Evidence::new(Fact::DataShapeExplains(fit.explained), weight));
        if let Some(hint_hz) = hints.bit_rate_hz {
            let weight = if fit.explained >= 0.5 { 1.0 } else { 0.0 };
            evidence.push(Evidence::new(Fact::BitRateOverHint(fit.bit_rate_hz / hint_hz), weight));
        }
    }
    evidence
}

/// Power of the differential mode over all published bins, V².
fn power_v2(ladder: &Ladder<'_>) -> f64 {
    let of_rung = |spectra: &&RungSpectra| {
        spectra.bins.iter().map(|bin| bin.differential).sum::<f64>() * spectra.bin_hz()
    };
    ladder.rungs().iter().map(of_rung).sum()
}

fn shape_fit(driven: &Ladder<'_>, idle: &Ladder<'_>, hints: &Hints) -> Option<Fit> {
    let curves: Vec<Curve> = (0..SHAPE_RUNGS)
        .filter_map(|number| {
            let spectra = rung(driven, number)?;
            let floor = rung(idle, number).map_or(0.0, |idle| median(idle, Mode::Differential));
            let width = POINT_BINS.get(usize::from(number)).copied().unwrap_or(1);
            let points = spectra.bins.chunks(width).enumerate().filter_map(|(chunk, bins)| {
                let place = chunk * width + bins.len() / 2;
                let mean = bins.iter().map(|bin| bin.differential).sum::<f64>() / bins.len() as f64;
                (mean > 2.0 * floor && mean > 0.0).then(|| (spectra.frequency_hz(place), mean - floor))
            });
            Some(Curve { points: points.collect() })
        })
        .collect();
    let rate_hz = driven.full_rate_hz()?;
    fit(&curves, rate_hz, hints.bit_rate_hz).or_else(|| fit(&curves, rate_hz, None))
}

/// The strongest lines of the driven differential mode that the idle one lacks.
fn data_lines(driven: &Ladder<'_>, idle: &Ladder<'_>) -> Vec<LadderLine> {
    let mut lines = driven.lines(Mode::Differential);
    lines.retain(|line| {
        let is_idle = idle.level_at(Mode::Differential, line.line.frequency_hz);
        is_idle.is_none_or(|level| level.rms_v < 0.5 * line.line.rms_v)
    });
    lines.sort_by(|a, b| b.line.rms_v.total_cmp(&a.line.rms_v));
    lines.truncate(MOST_LINES);
    lines
}

/// Bits per character whose multiples most of the sharp lines are, and the share that is.
fn frame_bits(lines: &[LadderLine], bit_rate_hz: f64) -> Option<(u32, f64)> {
    let sharp: Vec<&LadderLine> =
        lines.iter().filter(|line| line.line.method == LineMethod::Interpolated).collect();
    let share = |bits: u32| {
        let character_hz = bit_rate_hz / f64::from(bits);
        let is_on = |line: &&&LadderLine| {
            let order = (line.line.frequency_hz / character_hz).round();
            let reach_hz = (0.5 * line.bin_hz).min(0.12 * character_hz);
            order > 0.0 && (line.line.frequency_hz - order * character_hz).abs() <= reach_hz
        };
        sharp.iter().filter(is_on).count() as f64 / sharp.len().max(1) as f64
    };
    let shares = (9..=12).map(|bits| (bits, share(bits)));
    shares.max_by(|a, b| a.1.total_cmp(&b.1)).filter(|&(_, share)| sharp.len() >= 4 && share >= 0.6)
}

fn member(line: &LadderLine, character_hz: Option<f64>) -> Member {
    let order = character_hz.map(|character_hz| (line.line.frequency_hz / character_hz, character_hz));
    let is_on = |&(order, character_hz): &(f64, f64)| {
        (order - order.round()).abs() * character_hz <= 0.5 * line.bin_hz && order >= 0.5
    };
    Member {
        frequency_hz: line.line.frequency_hz,
        frequency_uncertainty_hz: line.line.frequency_uncertainty_hz,
        role: order
            .filter(is_on)
            .map_or(Role::Structure, |(order, _)| Role::CharacterMultiple(order.round() as u32)),
        levels: Levels { common: None, differential: Some(line.line.rms_v) },
        set: line.set,
        rung: line.rung,
        alias: AliasState::Unconfirmed,
    }
}

/// What is spread over the band: all power of the differential mode without the lines, and the part of the
/// common mode that is coherent with it, `|S_cd|²/S_dd` less its bias of `S_cc/n`. One leg alone makes `S_dd/4`:
/// where more is coherent, a source of common mode is.
fn rest(driven: &Ladder<'_>, lines: &[Member]) -> Member {
    let listed: f64 = lines.iter().filter_map(|line| line.levels.differential).map(|v| v * v).sum();
    let mut common = 0.0;
    for spectra in driven.rungs() {
        let n = spectra.effective_segments().max(1.0);
        for bin in spectra.bins.iter().filter(|bin| bin.differential > 0.0) {
            let coherent = (bin.cross.0.powi(2) + bin.cross.1.powi(2)) / bin.differential;
            if coherent <= MOST_COMMON * bin.differential {
                common += (coherent - bin.common / n).max(0.0) * spectra.bin_hz();
            }
        }
    }
    let half_hz = driven.full_rate_hz().unwrap_or(0.0) / 4.0;
    Member {
        frequency_hz: half_hz,
        frequency_uncertainty_hz: half_hz,
        role: Role::Structure,
        levels: Levels {
            common: (common > 0.0).then(|| common.sqrt()),
            differential: Some((power_v2(driven) - listed).max(0.0).sqrt()),
        },
        set: SegmentSet::Driven,
        rung: 0,
        alias: AliasState::Unconfirmed,
    }
}
