//! Combs: a line, its multiples wherever they fold to, and what stands around them. Drives and supplies.
//!
//! The strongest line that is left starts a comb, as its fundamental or as a multiple or sideband of a lower
//! line, whichever explains more of what is left. An explained line counts by how far it stands out, less the
//! probability that some line lies there by chance. Multiples fall in level, so a line that stands above the
//! last ones is not theirs.
//!
//! At one rate a fundamental `f` and its aliases `n·fs ± f` have multiples in the same places, so the comb
//! does not tell them apart; only a second rate does.

use super::Family;
use super::alias::AliasState;
use super::sidebands::{self, Sidebands};
use super::spots::{Free, Spot};

mod around;
mod follow;
mod naming;

pub(super) use around::is_carrier;

/// Least uncertainty of a fundamental from one line, bins: others nearby shift it.
const SEED_BINS: f64 = 0.04;
/// A multiple may lie this share of the fundamental off, at most.
const WIDEST_SHARE: f64 = 0.12;
/// A fundamental is at least this share of the line it explains.
const PARENT_SHARE: f64 = 0.15;
/// Orders at which the strongest line may be a multiple of its fundamental.
const PARENT_ORDERS: u32 = 4;
/// Orders at which it may be a multiple of a fundamental hidden by another family, and what that must explain
/// more.
const HIDDEN_ORDERS: u32 = 4;
/// See above.
const HIDDEN_PENALTY: f64 = 1.0;
/// Carriers of drives, Hz: printed in manuals are 0.5 to 16 kHz, general guides go to 20.
const CARRIERS_HZ: (f64, f64) = (1_000.0, 16_000.0);
/// See above.
const WIDER_CARRIERS_HZ: (f64, f64) = (800.0, 20_000.0);

/// A comb before it has a name.
struct Comb {
    /// The spot it started from, and that spot's order.
    seed: usize,
    seed_order: u32,
    fundamental_hz: f64,
    uncertainty_hz: f64,
    /// Number of the spot and its order, 2 and up.
    multiples: Vec<(usize, u32)>,
    /// Multiples that stand where another family has taken a spot.
    shared: u32,
    sidebands: Sidebands,
    /// Spots within the smear of a member.
    satellites: Vec<usize>,
    score: f64,
}

impl Comb {
    fn has(&self, number: usize) -> bool {
        number == self.seed
            || self.multiples.iter().any(|multiple| multiple.0 == number)
            || self.sidebands.has(number)
            || self.satellites.contains(&number)
    }
}

/// Takes the family of the strongest free spot.
pub(super) fn take(free: &mut Free, rate_hz: f64) -> Option<Family> {
    let (strongest, _) =
        free.iter().max_by(|a, b| a.1.levels.larger_v().total_cmp(&b.1.levels.larger_v()))?;
    let seeds = std::iter::once(strongest).chain(parents(free, strongest)).map(|seed| (seed, 1));
    let seeds = seeds.chain(hidden(free, strongest).map(|order| (strongest, order)));
    let combs = seeds.filter_map(|seed| grow(free, seed, rate_hz)).filter(|comb| comb.has(strongest));
    let best = combs.reduce(|best, comb| if comb.score > best.score { comb } else { best })?;
    let family = naming::family(free, &best)?;
    let members = best.multiples.iter().map(|multiple| multiple.0);
    let members = members.chain(best.sidebands.numbers()).chain(best.satellites.iter().copied());
    let all: Vec<usize> = std::iter::once(best.seed).chain(members).collect();
    all.into_iter().for_each(|number| free.take(number));
    Some(family)
}

/// Lower lines the spot may be a multiple or a sideband of.
fn parents(free: &Free, number: usize) -> Vec<usize> {
    let Some(line) = free.get(number) else { return Vec::new() };
    let is_parent = |spot: &Spot| {
        let is_strong = spot.levels.larger_v() >= PARENT_SHARE * line.levels.larger_v();
        let order = (line.frequency_hz / spot.frequency_hz).round();
        let apart_hz = (line.frequency_hz - order * spot.frequency_hz).abs();
        let reach_hz = sidebands::reach_hz(spot.frequency_hz) + line.spread_hz;
        is_strong && (1.0..=f64::from(PARENT_ORDERS)).contains(&order) && apart_hz <= reach_hz
    };
    free.iter().filter(|&(other, spot)| other != number && is_parent(spot)).map(|(other, _)| other).collect()
}

/// Orders at which the spot may be a multiple of a fundamental that lies under a line of another family.
fn hidden(free: &Free, number: usize) -> impl Iterator<Item = u32> {
    (2..=HIDDEN_ORDERS).filter(move |order| {
        let Some(line) = free.get(number) else { return false };
        let place_hz = line.true_hz() / f64::from(*order);
        let covers = |spot: &Spot| {
            let reach_hz = 1.5 * spot.bin_hz + 2.0 * spot.spread_hz;
            (spot.frequency_hz - place_hz).abs() <= reach_hz
                && spot.levels.larger_v() >= line.levels.larger_v()
        };
        place_hz >= CARRIERS_HZ.0 && free.all().any(|(other, spot)| !free.is_free(other) && covers(spot))
    })
}

fn grow(free: &Free, (number, order): (usize, u32), rate_hz: f64) -> Option<Comb> {
    let seed = &as_fundamental(free.get(number)?, order);
    let mut comb = Comb {
        seed: number,
        seed_order: order,
        fundamental_hz: seed.true_hz(),
        uncertainty_hz: if seed.is_summed() {
            seed.tolerance_hz() / 2.0
        } else {
            seed.uncertainty_hz.max(SEED_BINS * seed.bin_hz)
        },
        multiples: Vec::new(),
        shared: 0,
        sidebands: Sidebands::default(),
        satellites: Vec::new(),
        score: follow::merit(seed, 0.0) - if order > 1 { HIDDEN_PENALTY } else { 0.0 },
    };
    follow::follow(free, &mut comb, seed, rate_hz);
    let shared = comb.multiples.iter().filter(|multiple| !free.is_free(multiple.0)).count();
    comb.multiples.retain(|multiple| free.is_free(multiple.0));
    comb.shared = shared as u32;
    // Multiples of the spot itself speak for the spot as fundamental just as well.
    let own = comb.multiples.iter().filter(|multiple| multiple.1 % order != 0 && multiple.1 <= 6).count();
    if order > 1 && own < 2 {
        return None;
    }
    let taken: Vec<usize> = comb.multiples.iter().map(|multiple| multiple.0).collect();
    let is_left = |other: usize| other != number && !taken.contains(&other);
    if seed.is_smeared() {
        comb.satellites = around::satellites(free, &comb, seed, rate_hz, is_left);
    } else if comb.fundamental_hz < WIDER_CARRIERS_HZ.1 {
        let level_v = seed.levels.larger_v();
        let carrier = (comb.fundamental_hz, comb.uncertainty_hz);
        let is_own = |number: usize| around::has_comb(free, number, rate_hz, is_left);
        comb.sidebands = sidebands::find(free, carrier, level_v, rate_hz, is_left, is_own);
        let sides = comb.sidebands.numbers().filter_map(|number| free.get(number));
        comb.score += sides.map(|spot| follow::merit(spot, 0.3)).sum::<f64>();
        comb.satellites = around::thicket(free, &comb, rate_hz, is_left);
        let mut far = around::far_sidebands(free, &comb, level_v, rate_hz, is_left);
        far.retain(|number| !comb.satellites.contains(number));
        comb.satellites.extend(far);
    }
    Some(comb)
}

/// The fundamental a spot of some order is a multiple of.
fn as_fundamental(spot: &Spot, order: u32) -> Spot {
    let times = f64::from(order);
    let mut fundamental = spot.clone();
    if order > 1 {
        fundamental.frequency_hz = spot.true_hz() / times;
        fundamental.uncertainty_hz /= times;
        fundamental.spread_hz /= times;
        fundamental.alias = AliasState::Unconfirmed;
    }
    fundamental
}
