//! The supply network: a fundamental in 45..65 Hz, found from the lines, and its harmonics.
//!
//! Every low line is taken as one of the first harmonics; the fundamental that explains most wins and is
//! refined over all of its harmonics. Harmonics are then measured at their known frequencies, three bins
//! each: *like* the harmonic subgroups of IEC 61000-4-7, with a Hann window and no synchronisation. They are
//! measured while they lie more than three bins apart.

use super::comb;
use super::evidence::{Evidence, Fact};
use super::ladder::Ladder;
use super::spots::{Free, Spot};
use super::{Family, Levels, MainsShape, Member, PerMode, Role, Source, root_sum};
use crate::spectrum::families::alias::AliasState;
use crate::spectrum::rung::SegmentSet;
use std::f64::consts::PI;

/// Where a fundamental is looked for, Hz.
const RANGE_HZ: (f64, f64) = (45.0, 65.0);
/// Lines up to here may tell the fundamental, Hz.
const TELLING_BELOW_HZ: f64 = 430.0;
/// Harmonics a line may be when the fundamental is looked for.
const TELLING_ORDERS: u32 = 7;
/// Harmonics followed: as far as IEC 61000-4-7 goes at 60 Hz and beyond its 40 at 50 Hz.
const ORDERS: u32 = 50;
/// Score of the fundamental itself, of any harmonic, and the least to go by.
const FUNDAMENTAL_SCORE: f64 = 3.0;
/// See above.
const LEAST_SCORE: f64 = 3.0;
/// Harmonics missing in a row that end them: a rectifier of twelve pulses leaves ten out.
const MISSES: u32 = 12;
/// Harmonics at least this many bins apart are measured.
const APART_BINS: f64 = 3.2;
/// From this order on a harmonic is not stronger than the strongest from a third of its order up, with a margin.
const FALLING_FROM: u32 = 8;
/// That margin.
const RISE: f64 = 1.2;
/// Where none of those was found: share of the fundamental.
const ALONE_SHARE: f64 = 0.04;
/// A line this close to its place, bins, may stand out by a further factor.
const EXACT_BINS: f64 = 0.05;
/// That factor.
const EXACT_SHARE: f64 = 2.0;
/// Harmonics closer than this shift each other's lines, bins ...
const CROWDED_BINS: f64 = 5.0;
/// ... by this much at most, bins.
const SHIFT_BINS: f64 = 0.5;
/// A band holds several of them.
const BAND_SHARE: f64 = 2.0;

struct Grid {
    fundamental_hz: f64,
    uncertainty_hz: f64,
}

impl Grid {
    /// The free spot at a harmonic.
    fn spot<'a>(&self, free: &'a Free, order: u32) -> Option<(usize, &'a Spot)> {
        let place_hz = f64::from(order) * self.fundamental_hz;
        let reach_hz = |spot: &Spot| {
            let reach_hz = spot.tolerance_hz() + 0.1 * spot.bin_hz + f64::from(order) * self.uncertainty_hz;
            reach_hz.min(0.2 * self.fundamental_hz)
        };
        free.iter()
            .filter(|(_, spot)| !spot.is_data && (spot.frequency_hz - place_hz).abs() <= reach_hz(spot))
            .max_by(|a, b| a.1.levels.larger_v().total_cmp(&b.1.levels.larger_v()))
    }

    fn score(&self, free: &Free) -> f64 {
        let fundamental = self.spot(free, 1).map_or(0.0, |_| FUNDAMENTAL_SCORE);
        let harmonics = (2..=12).filter(|&order| self.spot(free, order).is_some()).count();
        fundamental + harmonics as f64
    }

    /// The grid that fits the harmonics' frequencies best, each weighted by how well it tells the
    /// fundamental.
    fn refined(&self, free: &Free) -> Self {
        let (mut sum, mut weights) = (0.0, 0.0);
        for order in 1..=TELLING_ORDERS {
            let Some((_, spot)) = self.spot(free, order).filter(|(_, spot)| !spot.is_summed()) else {
                continue;
            };
            let uncertainty_hz = spot.uncertainty_hz.max(0.002 * spot.bin_hz) / f64::from(order);
            let weight = uncertainty_hz.powi(-2);
            sum += weight * spot.frequency_hz / f64::from(order);
            weights += weight;
        }
        if weights == 0.0 {
            return Self { ..*self };
        }
        Self { fundamental_hz: sum / weights, uncertainty_hz: weights.sqrt().recip() }
    }
}

/// Takes the mains out of the free spots, if it is there.
pub(super) fn take(ladder: &Ladder<'_>, free: &mut Free) -> Option<Family> {
    let grid = find(free)?.refined(free);
    let rate_hz = ladder.full_rate_hz()?;
    let mut members: Vec<(u32, Member, f64)> = Vec::new();
    let mut taken = Vec::new();
    for order in 1..=ORDERS {
        if members.last().is_some_and(|(last, ..)| order > last + MISSES) {
            break;
        }
        let limit_v = level_limit(&members, order);
        let spot = grid.spot(free, order).filter(|(number, spot)| {
            let apart_hz = (spot.frequency_hz - f64::from(order) * grid.fundamental_hz).abs();
            let is_resolved = grid.fundamental_hz >= APART_BINS * spot.bin_hz;
            let is_own = !is_resolved && comb::is_carrier(free, *number, rate_hz);
            let is_exact = is_resolved && !spot.is_summed() && apart_hz <= EXACT_BINS * spot.bin_hz;
            !is_own && spot.levels.larger_v() <= if is_exact { EXACT_SHARE * limit_v } else { limit_v }
        });
        if let Some((number, spot)) = spot {
            taken.push(number);
            members.push((order, spot.member(role(order)), spot.above_floor_db));
        } else if let Some((member, above_db)) = measured(ladder, free, &grid, order, limit_v) {
            members.push((order, member, above_db));
        }
    }
    taken.extend(crowded(free, &grid, &members, rate_hz));
    taken.into_iter().for_each(|number| free.take(number));
    let evidence = evidence(&grid, &members);
    let shape = shape(&members);
    let members = members.into_iter().map(|(_, member, _)| member).collect();
    Some(Family::new(Source::Mains(shape), (grid.fundamental_hz, grid.uncertainty_hz), members, evidence))
}

fn role(order: u32) -> Role {
    if order == 1 { Role::Fundamental } else { Role::Harmonic(order) }
}

fn find(free: &Free) -> Option<Grid> {
    let mut best: Option<(f64, f64, Grid)> = None;
    for (_, spot) in free.iter().filter(|(_, spot)| !spot.is_data && spot.frequency_hz < TELLING_BELOW_HZ) {
        for order in 1..=TELLING_ORDERS {
            let fundamental_hz = spot.frequency_hz / f64::from(order);
            if !(RANGE_HZ.0..=RANGE_HZ.1).contains(&fundamental_hz) {
                continue;
            }
            let uncertainty_hz = spot.tolerance_hz().min(spot.bin_hz) / f64::from(order);
            let grid = Grid { fundamental_hz, uncertainty_hz };
            let (score, level_v) = (grid.score(free), spot.levels.larger_v());
            if best.as_ref().is_none_or(|best| (score, level_v) > (best.0, best.1)) {
                best = Some((score, level_v, grid));
            }
        }
    }
    best.filter(|(score, ..)| *score >= LEAST_SCORE).map(|(_, _, grid)| grid)
}

/// A harmonic too weak to be found as a line, at its known place.
fn measured(
    ladder: &Ladder<'_>,
    free: &Free,
    grid: &Grid,
    order: u32,
    limit_v: f64,
) -> Option<(Member, f64)> {
    let frequency_hz = f64::from(order) * grid.fundamental_hz;
    let spectra = ladder.rung_at(frequency_hz)?;
    let bin_hz = spectra.bin_hz();
    let is_beside = |spot: &Spot| (spot.frequency_hz - frequency_hz).abs() < 3.0 * bin_hz + spot.band_hz;
    // Of a driven average only lines of their own count: the data fill every bin.
    let is_out = grid.fundamental_hz < APART_BINS * bin_hz || spectra.set == SegmentSet::Driven;
    if is_out || order == 1 || free.all().any(|(_, spot)| is_beside(spot)) {
        return None;
    }
    let known = PerMode::from_each(|mode| ladder.level_at(mode, frequency_hz));
    let levels: Levels = PerMode::from_each(|mode| known.of(mode).map(|level| level.rms_v));
    let above_db = PerMode::from_each(|mode| known.of(mode).map_or(0.0, |level| level.above_floor_db));
    let is_level = levels.larger_v() > 0.0 && levels.larger_v() <= limit_v;
    is_level.then_some((
        Member {
            frequency_hz,
            frequency_uncertainty_hz: f64::from(order) * grid.uncertainty_hz,
            role: role(order),
            levels,
            set: spectra.set,
            rung: spectra.rung,
            alias: AliasState::Unconfirmed,
        },
        above_db.common.max(above_db.differential),
    ))
}

/// Most a harmonic may have, V rms.
fn level_limit(members: &[(u32, Member, f64)], order: u32) -> f64 {
    if order < FALLING_FROM {
        return f64::INFINITY;
    }
    let level = |(_, member, _): &(u32, Member, f64)| member.levels.larger_v();
    let before = members.iter().filter(|(other, ..)| *other < order && 3 * *other >= order);
    let alone_v = members.iter().find(|(other, ..)| *other == 1).map_or(0.0, level) * ALONE_SHARE;
    before.map(level).reduce(f64::max).map_or(alone_v, |most_v| RISE * most_v)
}

/// Lines among crowded harmonics that none accounts for alone: summed bands, and what their skirts shift.
fn crowded(free: &Free, grid: &Grid, members: &[(u32, Member, f64)], rate_hz: f64) -> Vec<usize> {
    let is_one = |number: usize, spot: &Spot| {
        let order = (spot.frequency_hz / grid.fundamental_hz).round();
        let apart_hz = (spot.frequency_hz - order * grid.fundamental_hz).abs();
        let limit_v = level_limit(members, (order as u32).max(FALLING_FROM));
        let is_near = if spot.is_summed() {
            apart_hz <= spot.band_hz
        } else {
            grid.fundamental_hz < CROWDED_BINS * spot.bin_hz && apart_hz <= SHIFT_BINS * spot.bin_hz
        };
        let share = if spot.is_summed() { BAND_SHARE } else { 1.0 };
        !spot.is_data
            && (1.0..=f64::from(ORDERS)).contains(&order)
            && is_near
            && spot.levels.larger_v() <= share * limit_v
            && !comb::is_carrier(free, number, rate_hz)
    };
    free.iter().filter(|&(number, spot)| is_one(number, spot)).map(|(number, _)| number).collect()
}

fn shape(members: &[(u32, Member, f64)]) -> MainsShape {
    let level = |order: u32, mode| {
        members.iter().find(|(other, ..)| *other == order).and_then(|(_, member, _)| member.levels.of(mode))
    };
    let sum = |parity: u32, mode| {
        let chosen = members.iter().filter(|(order, ..)| *order > 1 && order % 2 == parity);
        root_sum(chosen.map(|(_, member, _)| member.levels.of(mode)))
    };
    MainsShape {
        odd_rms_v: PerMode::from_each(|mode| sum(1, mode)),
        even_rms_v: PerMode::from_each(|mode| sum(0, mode)),
        half_wave_share: PerMode::from_each(|mode| {
            let ideal = 4.0 / (3.0 * PI);
            level(1, mode).map(|first| (level(2, mode).unwrap_or(0.0) / first / ideal).min(1.0))
        }),
    }
}

fn evidence(grid: &Grid, members: &[(u32, Member, f64)]) -> Vec<Evidence> {
    let fundamental = members.iter().find(|(order, ..)| *order == 1);
    let multiples = members.iter().filter(|(order, ..)| *order > 1).count() as u32;
    let mut evidence = vec![match fundamental {
        Some((_, _, above_db)) => Evidence::new(Fact::FundamentalAboveFloorDb(*above_db), 2.0),
        None => Evidence::new(Fact::FundamentalMissing, -1.5),
    }];
    if multiples > 0 {
        evidence.push(Evidence::new(Fact::MultiplesFound(multiples), (0.7 * f64::from(multiples)).min(2.8)));
    }
    // Networks are kept within a few tenths of a hertz; small generators within one.
    let is_usual = [50.0, 60.0].iter().any(|usual| (grid.fundamental_hz - usual).abs() <= 1.0);
    evidence.push(if is_usual {
        Evidence::new(Fact::InUsualRange, 0.5)
    } else {
        Evidence::new(Fact::OutsideUsualRange, -0.5)
    });
    evidence
}
