//! Sidebands of a drive: lines at equal distances from the multiples of its carrier.
//!
//! With natural sampling and a triangular carrier a leg of the bridge has lines at `m·fc ± n·fo` with `m + n`
//! odd; in the mean of three legs only multiples of three survive among the `n`. So at even `m` they stand at
//! 3, 9, 15 ... output frequencies, at odd `m` at 6, 12 ... (D. G. Holmes and T. A. Lipo, *Pulse width
//! modulation for power converters*, 2003; from memory). What is left single by chance is taken where it fits
//! the output frequency, or where it is weak.

use super::ladder::fold;
use super::spots::{Free, Spot};
use std::f64::consts::PI;

/// Multiples of the carrier looked at.
const MULTIPLES: u32 = 16;
/// Sidebands reach at most this far, Hz: fifteen times 85 Hz ...
const REACH_HZ: f64 = 1_300.0;
/// ... and no further than this share of the carrier.
const REACH_SHARE: f64 = 0.45;
/// The two of a pair differ by less than this factor.
const ALIKE: f64 = 2.0;
/// A single one has at most this share of the carrier's level: where its place fits the output frequency, where
/// that is unknown, and where it does not fit.
const SINGLE_SHARES: (f64, f64, f64) = (0.3, 0.15, 0.08);
/// Output frequency whose sidebands are allowed for, Hz: those of multiple `m` reach `π/2·m` of it and a few.
pub(super) const FASTEST_HZ: f64 = 60.0;
/// A pair tells the output frequency where its distance is known within this share.
const SHARP_SHARE: f64 = 0.1;
/// Least uncertainty of a line beside others, bins.
const OWN_BINS: f64 = 0.02;
/// Multiples of the output frequency at which weak lines are taken for sidebands at most ...
const FARTHEST: f64 = 99.0;
/// ... and how far off their place they may be, in output frequencies: the places are six apart.
const FAR_REACH: f64 = 0.5;
/// Output frequencies, Hz.
const OUTPUTS_HZ: (f64, f64) = (2.0, 200.0);

/// One line beside a multiple.
#[derive(Clone, Copy, Debug)]
pub(super) struct Side {
    pub number: usize,
    pub multiple: u32,
    pub outputs: i32,
    distance_hz: f64,
    tolerance_hz: f64,
    is_paired: bool,
    /// Half the distance to its counterpart and the uncertainty of that, Hz.
    pair_hz: (f64, f64),
}

/// What stands beside the multiples.
#[derive(Clone, Debug, Default)]
pub(super) struct Sidebands {
    pub sides: Vec<Side>,
    /// Pairs at equal distances.
    pub pairs: u32,
    /// Output frequency and its uncertainty, Hz.
    pub output_hz: Option<(f64, f64)>,
}

impl Sidebands {
    pub fn numbers(&self) -> impl Iterator<Item = usize> {
        self.sides.iter().map(|side| side.number)
    }

    pub fn has(&self, number: usize) -> bool {
        self.sides.iter().any(|side| side.number == number)
    }
}

/// How far from a multiple sidebands may be, Hz.
pub(super) fn reach_hz(carrier_hz: f64) -> f64 {
    REACH_HZ.min(REACH_SHARE * carrier_hz)
}

/// The sidebands of a carrier of `level_v` among the free spots that are `left`. A single one is none if it
/// has a comb of its `own`.
pub(super) fn find(
    free: &Free,
    (carrier_hz, uncertainty_hz): (f64, f64),
    level_v: f64,
    rate_hz: f64,
    is_left: impl Fn(usize) -> bool,
    is_own: impl Fn(usize) -> bool,
) -> Sidebands {
    let mut found = Sidebands::default();
    for multiple in 1..=MULTIPLES {
        let true_hz = f64::from(multiple) * carrier_hz;
        let place_hz = fold(true_hz, rate_hz);
        let near: Vec<Side> = free
            .iter()
            .filter(|&(number, spot)| {
                is_left(number)
                    && !found.has(number)
                    && (spot.frequency_hz - place_hz).abs() <= reach_hz(carrier_hz)
                    && spot.levels.larger_v() <= 1.5 * level_v
            })
            .map(|(number, spot)| side(number, spot, multiple, place_hz, uncertainty_hz))
            .collect();
        pair(free, near, &mut found);
    }
    found.output_hz = output(&found.sides);
    label(&mut found);
    let output_hz = found.output_hz;
    found.sides.retain(|side| {
        side.is_paired || (is_single(free, side, level_v, output_hz.is_some()) && !is_own(side.number))
    });
    found
}

fn side(number: usize, spot: &Spot, multiple: u32, place_hz: f64, uncertainty_hz: f64) -> Side {
    Side {
        number,
        multiple,
        outputs: 0,
        distance_hz: spot.frequency_hz - place_hz,
        tolerance_hz: spot.tolerance_hz().min(spot.bin_hz)
            + 0.1 * spot.bin_hz
            + f64::from(multiple) * uncertainty_hz,
        is_paired: false,
        pair_hz: (0.0, f64::INFINITY),
    }
}

/// Uncertainty of a line that others shift a little.
fn own_hz(spot: &Spot) -> f64 {
    spot.uncertainty_hz.max(OWN_BINS * spot.bin_hz)
}

/// Marks those that have a counterpart of about the same level on the other side.
fn pair(free: &Free, mut near: Vec<Side>, found: &mut Sidebands) {
    let level_v = |side: &Side| free.get(side.number).map_or(0.0, |spot| spot.levels.larger_v());
    for upper in 0..near.len() {
        let Some(one) = near.get(upper).copied().filter(|one| one.distance_hz > 0.0 && !one.is_paired) else {
            continue;
        };
        let partner = near.iter().position(|other| {
            let factor = level_v(&one).max(level_v(other)) / level_v(&one).min(level_v(other));
            !other.is_paired
                && other.distance_hz < 0.0
                && (one.distance_hz + other.distance_hz).abs() <= one.tolerance_hz + other.tolerance_hz
                && factor <= ALIKE
        });
        if let Some(partner) = partner {
            found.pairs += 1;
            let half_hz = near.get(partner).map_or(0.0, |other| (one.distance_hz - other.distance_hz) / 2.0);
            let both = [Some(one.number), near.get(partner).map(|other| other.number)];
            let within_hz = both.into_iter().flatten().filter_map(|number| free.get(number)).map(own_hz);
            let pair_hz = (half_hz, within_hz.sum::<f64>() / 2.0);
            for side in [upper, partner] {
                near.get_mut(side).into_iter().for_each(|side| {
                    side.is_paired = true;
                    side.pair_hz = pair_hz;
                });
            }
        }
    }
    found.sides.extend(near);
}

/// Multiples of the output frequency allowed beside a multiple of the carrier.
fn is_allowed(multiple: u32, outputs: i32) -> bool {
    outputs % 3 == 0 && (multiple as i32 + outputs) % 2 != 0
}

/// The multiple of `output_hz` a side stands at, if any is allowed there.
fn outputs(side: &Side, output_hz: f64) -> Option<i32> {
    let outputs = (side.distance_hz / output_hz).round();
    let apart_hz = (side.distance_hz - outputs * output_hz).abs();
    let reach_hz = side.tolerance_hz.min(0.6 * output_hz);
    (apart_hz <= reach_hz && outputs.abs() <= 30.0 && is_allowed(side.multiple, outputs as i32))
        .then_some(outputs as i32)
}

/// The output frequency that most pairs fit, of equals the highest, refined over all of them.
fn output(sides: &[Side]) -> Option<(f64, f64)> {
    // Bands that hold several sidebands tell nothing.
    let is_sharp = |side: &&Side| side.pair_hz.1 <= SHARP_SHARE * side.pair_hz.0;
    let paired = || sides.iter().filter(|side| side.is_paired && side.distance_hz > 0.0).filter(is_sharp);
    let mut best: Option<(usize, f64)> = None;
    for side in paired() {
        for order in [3, 6, 9, 12] {
            let output_hz = side.distance_hz / f64::from(order);
            if !is_allowed(side.multiple, order) || !(OUTPUTS_HZ.0..=OUTPUTS_HZ.1).contains(&output_hz) {
                continue;
            }
            let fitting = paired().filter(|other| outputs(other, output_hz).is_some()).count();
            if best.is_none_or(|best| (fitting, output_hz) > best) {
                best = Some((fitting, output_hz));
            }
        }
    }
    let (_, output_hz) = best?;
    // Half the distance between the two of a pair does not depend on the carrier.
    let (mut sum, mut weights) = (0.0, 0.0);
    for side in paired() {
        let Some(order) = outputs(side, output_hz).map(f64::from) else { continue };
        let weight = (order / side.pair_hz.1).powi(2);
        sum += weight * side.pair_hz.0 / order;
        weights += weight;
    }
    (weights > 0.0).then(|| (sum / weights, weights.sqrt().recip()))
}

/// Whether a weak line fits sidebands further out than pairs were looked for: of the multiples below and above it,
/// or of none.
pub(super) fn is_far(spot: &Spot, (carrier_hz, carrier_within_hz): (f64, f64), output: (f64, f64)) -> bool {
    let below = (spot.frequency_hz / carrier_hz).floor().max(0.0) as u32;
    [0, below, below + 1].into_iter().any(|multiple| {
        let times = f64::from(multiple);
        let distance_hz = spot.frequency_hz - times * carrier_hz;
        let order = (distance_hz / output.0).round();
        let reach_hz = spot.tolerance_hz() + times * carrier_within_hz + order.abs() * output.1;
        order.abs() <= FARTHEST
            && is_allowed(multiple, order as i32)
            && (distance_hz - order * output.0).abs() <= reach_hz.min(FAR_REACH * output.0)
    })
}

fn label(found: &mut Sidebands) {
    let Some((output_hz, _)) = found.output_hz else { return };
    for side in &mut found.sides {
        side.outputs = outputs(side, output_hz).unwrap_or(0);
    }
}

/// Whether a line without a counterpart is a sideband all the same: weak, and no further out than sidebands of
/// that multiple reach.
fn is_single(free: &Free, side: &Side, level_v: f64, is_output_known: bool) -> bool {
    let share = free.get(side.number).map_or(0.0, |spot| spot.levels.larger_v() / level_v);
    let reach_hz = FASTEST_HZ * (PI / 2.0 * f64::from(side.multiple) + 4.0);
    let limit = match (side.outputs != 0, is_output_known) {
        (true, _) => SINGLE_SHARES.0,
        (false, false) => SINGLE_SHARES.1,
        (false, true) => SINGLE_SHARES.2,
    };
    side.distance_hz.abs() <= reach_hz && share <= limit
}
