//! What stands around the lines of a comb without being one of its multiples, and what only seems to.

use super::super::ladder::fold;
use super::super::sidebands::{self, FASTEST_HZ};
use super::super::spots::{Free, Spot};
use super::follow::{RISE, own_reach_hz};
use super::{Comb, SEED_BINS, WIDER_CARRIERS_HZ, WIDEST_SHARE};
use std::f64::consts::PI;

/// Levels of the first multiples of a comb over the fundamental.
const OWN_SHARES: (f64, f64) = (0.02, 0.9);
/// The two of a pair about a multiple differ by less than this share.
const PAIR_SHARE: f64 = 0.1;
/// A narrow line is within a smear by chance; it may have this share of the smeared one's level.
const NARROW_SHARE: f64 = 0.03;
/// A sideband far out has at most this share of the carrier's level.
const FAR_SHARE: f64 = 0.01;
/// Where sidebands meet the floor itself is theirs and hides some: multiples of the carrier to the next known.
const THICKET_REACH: f64 = 6.0;

/// Whether two of the first multiples of a spot are there, weaker, and not explained already.
pub(super) fn has_comb(free: &Free, number: usize, rate_hz: f64, is_left: impl Fn(usize) -> bool) -> bool {
    let Some(own) = free.get(number) else { return false };
    let level_v = own.levels.larger_v();
    let is_there = |order: &u32| {
        let place_hz = fold(f64::from(*order) * own.true_hz(), rate_hz);
        free.iter().any(|(other, spot)| {
            let own_hz = if own.is_summed() { own.tolerance_hz() } else { own.uncertainty_hz };
            let reach_hz = f64::from(*order) * own_hz + own_reach_hz(spot);
            let share = spot.levels.larger_v() / level_v;
            other != number
                && is_left(other)
                && (spot.frequency_hz - place_hz).abs() <= reach_hz.min(WIDEST_SHARE * own.frequency_hz)
                && (OWN_SHARES.0..=OWN_SHARES.1).contains(&share)
        })
    };
    (2..=4).filter(is_there).count() >= 2
}

/// Whether a spot that might as well be a harmonic of the mains is a carrier: two of its first multiples, or
/// pairs about them, are there.
pub(in super::super) fn is_carrier(free: &Free, number: usize, rate_hz: f64) -> bool {
    let Some(own) = free.get(number).filter(|own| own.frequency_hz >= WIDER_CARRIERS_HZ.0) else {
        return false;
    };
    let level_v = own.levels.larger_v();
    let own_hz = own.tolerance_hz().max(SEED_BINS * own.bin_hz);
    let is_weaker = |spot: &Spot| (OWN_SHARES.0..=OWN_SHARES.1).contains(&(spot.levels.larger_v() / level_v));
    let weaker: Vec<&Spot> = free
        .iter()
        .filter(|&(other, spot)| other != number && is_weaker(spot))
        .map(|(_, spot)| spot)
        .collect();
    let is_marked = |order: &u32| {
        let place_hz = fold(f64::from(*order) * own.true_hz(), rate_hz);
        let off_hz = |spot: &Spot| spot.frequency_hz - place_hz;
        let reach_hz = f64::from(*order) * own_hz;
        let is_on = weaker.iter().any(|spot| off_hz(spot).abs() <= reach_hz + own_reach_hz(spot));
        let is_pair = |a: &Spot, b: &Spot| {
            let widest_hz = sidebands::reach_hz(own.frequency_hz);
            off_hz(a) > 0.0
                && off_hz(a) <= widest_hz
                && (off_hz(a) + off_hz(b)).abs() <= 2.0 * reach_hz + own_reach_hz(a)
                && (a.levels.larger_v() / b.levels.larger_v() - 1.0).abs() <= PAIR_SHARE
        };
        is_on || weaker.iter().any(|a| weaker.iter().any(|b| is_pair(a, b)))
    };
    (2..=5).filter(is_marked).count() >= 2
}

/// Spots within the smear of a member, weaker than the fundamental.
pub(super) fn satellites(
    free: &Free,
    comb: &Comb,
    seed: &Spot,
    rate_hz: f64,
    is_left: impl Fn(usize) -> bool,
) -> Vec<usize> {
    let is_one = |spot: &Spot| {
        (1..=6).any(|order| {
            let place_hz = fold(f64::from(order) * comb.fundamental_hz, rate_hz);
            let reach_hz = 2.5 * f64::from(order) * seed.spread_hz + 3.0 * seed.bin_hz + spot.spread_hz;
            let reach_hz = reach_hz.min(2.0 * WIDEST_SHARE * comb.fundamental_hz);
            let share = if spot.is_smeared() { 0.7 / f64::from(order).sqrt() } else { NARROW_SHARE };
            let limit_v = share * seed.levels.larger_v();
            (spot.frequency_hz - place_hz).abs() <= reach_hz && spot.levels.larger_v() <= limit_v
        })
    };
    let is_own = |number: usize, spot: &Spot| !spot.is_smeared() && has_comb(free, number, rate_hz, &is_left);
    free.iter()
        .filter(|&(number, spot)| is_left(number) && is_one(spot) && !is_own(number, spot))
        .map(|(number, _)| number)
        .collect()
}

/// Weak lines at sidebands far out, once the output frequency is known.
pub(super) fn far_sidebands(
    free: &Free,
    comb: &Comb,
    level_v: f64,
    rate_hz: f64,
    is_left: impl Fn(usize) -> bool,
) -> Vec<usize> {
    let Some(output) = comb.sidebands.output_hz else { return Vec::new() };
    let carrier = (comb.fundamental_hz, comb.uncertainty_hz);
    let is_one = |number: usize, spot: &Spot| {
        is_left(number)
            && !comb.sidebands.has(number)
            && spot.levels.larger_v() <= FAR_SHARE * level_v
            && sidebands::is_far(spot, carrier, output)
            && !has_comb(free, number, rate_hz, &is_left)
    };
    free.iter().filter(|&(number, spot)| is_one(number, spot)).map(|(number, _)| number).collect()
}

/// What stands between high multiples of a carrier, where the sidebands of neighbours meet: outwards from the
/// known lines, no stronger than those nearby.
pub(super) fn thicket(free: &Free, comb: &Comb, rate_hz: f64, is_left: impl Fn(usize) -> bool) -> Vec<usize> {
    let carrier_hz = comb.fundamental_hz;
    let from = ((carrier_hz / 2.0 / FASTEST_HZ - 4.0) / (PI / 2.0)).max(2.5);
    let numbers = comb.multiples.iter().map(|multiple| multiple.0).chain(comb.sidebands.numbers());
    let place = |spot: &Spot| (spot.frequency_hz, spot.levels.larger_v());
    let mut known: Vec<(f64, f64)> = numbers.filter_map(|number| free.get(number)).map(place).collect();
    let mut found = Vec::new();
    for (number, spot) in free.iter().filter(|&(number, _)| is_left(number) && !comb.sidebands.has(number)) {
        let is_within = (from * carrier_hz..=rate_hz / 2.0).contains(&spot.frequency_hz);
        let reach_hz = THICKET_REACH * carrier_hz + spot.band_hz;
        let near = known.iter().filter(|known| (known.0 - spot.frequency_hz).abs() <= reach_hz);
        let level_v = near.map(|near| near.1).fold(0.0, f64::max);
        // A band may hold several multiples.
        let several = (2.0 * spot.band_hz / carrier_hz).max(1.0).sqrt();
        let is_own = has_comb(free, number, rate_hz, &is_left);
        if is_within && spot.levels.larger_v() <= RISE * several * level_v && !is_own {
            known.push(place(spot));
            found.push(number);
        }
    }
    found
}
