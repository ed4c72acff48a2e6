//! The multiples of a fundamental: where they fold to, how strong and how wide they may be.

use super::super::ladder::fold;
use super::super::sidebands::FASTEST_HZ;
use super::super::spots::{Free, Spot};
use super::{Comb, WIDEST_SHARE};
use std::f64::consts::PI;

/// Multiples followed of a narrow line, and of a smeared one.
const ORDERS: (u32, u32) = (200, 12);
/// Multiples missing in a row that end a comb.
const MISSES: u32 = 12;
/// A multiple has at most this many times the level of the last four.
pub(super) const RISE: f64 = 1.4;
/// A band that is summed over 33 bins spreads no further, bins.
const WIDEST_SPREAD_BINS: f64 = 6.0;

/// Follows the multiples upwards, refining the fundamental on the way.
pub(super) fn follow(free: &Free, comb: &mut Comb, seed: &Spot, rate_hz: f64) {
    let is_narrow = !seed.is_smeared();
    let orders = if is_narrow { ORDERS.0 } else { ORDERS.1 };
    let mut weight = comb.uncertainty_hz.powi(-2);
    let mut levels = vec![seed.levels.larger_v()];
    let mut misses = 0;
    for order in 2..=orders {
        let times = f64::from(order);
        let reach_hz = times * comb.uncertainty_hz;
        if misses >= MISSES || reach_hz > WIDEST_SHARE * comb.fundamental_hz {
            break;
        }
        let place_hz = fold(times * comb.fundamental_hz, rate_hz);
        let limit_v = RISE * levels.iter().rev().take(4).fold(0.0_f64, |most, level| most.max(*level));
        let found = free
            .all()
            .filter(|&(number, spot)| {
                let own_hz = own_reach_hz(spot).min(WIDEST_SHARE * comb.fundamental_hz);
                number != comb.seed
                    && order != comb.seed_order
                    && !comb.multiples.iter().any(|multiple| multiple.0 == number)
                    && (spot.frequency_hz - place_hz).abs() <= reach_hz + own_hz
                    && spot.levels.larger_v() <= limit_v
                    && is_as_wide(seed, spot, order)
            })
            .max_by(|a, b| a.1.levels.larger_v().total_cmp(&b.1.levels.larger_v()));
        let Some((number, spot)) = found else {
            misses += 1;
            continue;
        };
        misses = 0;
        levels.push(spot.levels.larger_v());
        comb.multiples.push((number, order));
        if free.is_free(number) {
            comb.score += merit(spot, chance(free, spot, reach_hz + own_reach_hz(spot)));
        }
        let is_sure = (spot.frequency_hz - place_hz).abs() <= reach_hz + 2.0 * spot.uncertainty_hz;
        if is_narrow && !spot.is_summed() && is_sure {
            refine(comb, &mut weight, spot, order, rate_hz);
        }
    }
}

/// Whether a spot is as wide as a multiple must be: of a smeared line wider by its order; of a carrier as
/// wide as its sidebands, whose reach grows by `π/2` output frequencies of at most 60 Hz per order.
fn is_as_wide(seed: &Spot, spot: &Spot, order: u32) -> bool {
    let times = f64::from(order);
    if !seed.is_smeared() {
        let hidden_hz = 0.4 * times * seed.bin_hz;
        return spot.spread_hz <= 0.6 * FASTEST_HZ * (PI / 2.0 * times + 4.0) + spot.bin_hz + hidden_hz;
    }
    let (least_hz, most_hz) =
        (0.4 * times * seed.spread_hz, 2.0 * times * seed.spread_hz + 2.0 * spot.bin_hz);
    let is_resolved = least_hz > spot.bin_hz;
    (!is_resolved || spot.is_smeared())
        && spot.spread_hz <= most_hz
        && (!is_resolved || spot.spread_hz >= least_hz.min(WIDEST_SPREAD_BINS * spot.bin_hz))
}

/// How far a spot may lie from a place.
pub(super) fn own_reach_hz(spot: &Spot) -> f64 {
    spot.tolerance_hz() + 0.1 * spot.bin_hz
}

/// Probability that a free spot of the same rung lies within `reach_hz` of a place by chance.
fn chance(free: &Free, spot: &Spot, reach_hz: f64) -> f64 {
    let near_hz = 60.0 * spot.bin_hz;
    let is_near = |other: &Spot| (other.frequency_hz - spot.frequency_hz).abs() < near_hz;
    let others = free.iter().filter(|(_, other)| is_near(other)).count() as f64 - 1.0;
    (others * reach_hz / near_hz).min(1.0)
}

/// Puts a sharp multiple's frequency into the weighted mean.
fn refine(comb: &mut Comb, weight: &mut f64, spot: &Spot, order: u32, rate_hz: f64) {
    let expected_hz = f64::from(order) * comb.fundamental_hz;
    let zone = (expected_hz / rate_hz).round() * rate_hz;
    let true_hz = if expected_hz >= zone { zone + spot.frequency_hz } else { zone - spot.frequency_hz };
    let uncertainty_hz = spot.uncertainty_hz.max(0.02 * spot.bin_hz) / f64::from(order);
    let added = uncertainty_hz.powi(-2);
    comb.fundamental_hz =
        (*weight * comb.fundamental_hz + added * true_hz / f64::from(order)) / (*weight + added);
    *weight += added;
    comb.uncertainty_hz = weight.sqrt().recip();
}

/// What explaining a spot is worth when one lies there by chance with this probability.
pub(super) fn merit(spot: &Spot, by_chance: f64) -> f64 {
    spot.above_floor_db.min(40.0) / 10.0 * (1.0 - by_chance).max(0.0)
}
