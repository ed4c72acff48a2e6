//! Gives a comb its name: drive, supply or neither, by the evidence for each.

use super::super::evidence::{Evidence, Fact, confidence};
use super::super::spots::{Free, Spot};
use super::super::{Family, Member, Mode, Role, Source};
use super::{CARRIERS_HZ, Comb, WIDER_CARRIERS_HZ, as_fundamental};

/// Switching supplies, Hz: 50..150 kHz is typical, 20 is where audible sound ends.
const SUPPLIES_HZ: (f64, f64) = (19_000.0, 160_000.0);
/// Some switch faster.
const FAST_SUPPLIES_HZ: f64 = 500_000.0;
/// A fundamental this far above the floor shows multiples, if it has any worth the name, dB.
const TELLING_DB: f64 = 36.0;

/// The family of a comb.
pub(super) fn family(free: &Free, comb: &Comb) -> Option<Family> {
    let seed = &as_fundamental(free.get(comb.seed)?, comb.seed_order);
    let drive = drive_evidence(free, comb, seed);
    let supply = supply_evidence(comb, seed);
    let is_drive = confidence(&drive) >= confidence(&supply);
    let (source, evidence) = if is_drive {
        (Source::Drive { output_hz: comb.sidebands.output_hz }, drive)
    } else {
        (Source::Supply { smear: 2.0 * seed.spread_hz / comb.fundamental_hz }, supply)
    };
    let member = |number: usize, role| free.get(number).map(|spot: &Spot| spot.member(role));
    let role = if comb.seed_order == 1 { Role::Fundamental } else { Role::Harmonic(comb.seed_order) };
    let mut members: Vec<Member> = member(comb.seed, role).into_iter().collect();
    let multiples = comb.multiples.iter();
    members.extend(multiples.filter_map(|&(number, order)| member(number, Role::Harmonic(order))));
    let sides = comb.sidebands.sides.iter();
    members.extend(sides.filter_map(|side| {
        member(side.number, Role::Sideband { multiple: side.multiple, outputs: side.outputs })
    }));
    members.extend(comb.satellites.iter().filter_map(|&number| member(number, Role::Structure)));
    Some(Family::new(source, (comb.fundamental_hz, comb.uncertainty_hz), members, evidence))
}

/// Facts that do not depend on the name.
fn common_facts(comb: &Comb, seed: &Spot) -> Vec<Evidence> {
    let mut evidence = vec![if comb.seed_order == 1 {
        Evidence::new(Fact::FundamentalAboveFloorDb(seed.above_floor_db), 0.0)
    } else {
        Evidence::new(Fact::FundamentalMissing, -0.3)
    }];
    if comb.fundamental_hz != seed.frequency_hz && seed.true_hz() != seed.frequency_hz {
        evidence.push(Evidence::new(Fact::TrueFrequencyHz(comb.fundamental_hz), 0.0));
    }
    if let (Some(common_v), Some(differential_v)) =
        (seed.levels.of(Mode::Common), seed.levels.of(Mode::Differential))
    {
        let over_db = 20.0 * (differential_v / common_v).log10();
        let weight = if over_db > 6.0 { -0.3 } else { 0.0 };
        evidence.push(Evidence::new(Fact::DifferentialOverCommonDb(over_db), weight));
    }
    evidence
}

fn drive_evidence(free: &Free, comb: &Comb, seed: &Spot) -> Vec<Evidence> {
    let mut evidence = common_facts(comb, seed);
    let is_in = |range: (f64, f64)| (range.0..=range.1).contains(&comb.fundamental_hz);
    evidence.push(match (is_in(CARRIERS_HZ), is_in(WIDER_CARRIERS_HZ)) {
        (true, _) => Evidence::new(Fact::InUsualRange, 0.5),
        (_, true) => Evidence::new(Fact::OutsideUsualRange, -0.3),
        _ => Evidence::new(Fact::OutsideUsualRange, -5.0),
    });
    let low = comb.multiples.iter().filter(|multiple| multiple.1 <= 6).count() as u32;
    let pairs = comb.sidebands.pairs;
    if low > 0 {
        evidence.push(Evidence::new(Fact::MultiplesFound(low), 0.8 * f64::from(low.min(3))));
    } else if pairs == 0 && comb.shared < 2 && seed.above_floor_db >= TELLING_DB {
        evidence.push(Evidence::new(Fact::MultiplesMissing(2), -2.0));
    }
    if comb.shared > 0 {
        evidence.push(Evidence::new(Fact::MultiplesShared(comb.shared), 0.4 * f64::from(comb.shared.min(3))));
    }
    if pairs > 0 {
        evidence.push(Evidence::new(Fact::SidebandPairs(pairs), f64::from(pairs.min(2))));
    }
    let is_spread = |number: usize| free.get(number).is_some_and(Spot::is_smeared);
    let spread = comb.multiples.iter().filter(|multiple| is_spread(multiple.0)).count() as u32;
    if spread > 0 && !seed.is_smeared() {
        evidence.push(Evidence::new(Fact::SpreadMultiples(spread), 0.7 * f64::from(spread.min(2))));
    }
    if low == 0 && pairs == 0 {
        evidence.push(Evidence::new(Fact::Alone, -0.3));
    }
    evidence
}

fn supply_evidence(comb: &Comb, seed: &Spot) -> Vec<Evidence> {
    let mut evidence = common_facts(comb, seed);
    evidence.push(if (SUPPLIES_HZ.0..=SUPPLIES_HZ.1).contains(&comb.fundamental_hz) {
        Evidence::new(Fact::InUsualRange, 1.0)
    } else if (SUPPLIES_HZ.1..=FAST_SUPPLIES_HZ).contains(&comb.fundamental_hz) {
        Evidence::new(Fact::OutsideUsualRange, 0.3)
    } else {
        Evidence::new(Fact::OutsideUsualRange, -5.0)
    });
    let multiples = comb.multiples.len() as u32 + u32::from(comb.seed_order > 1);
    if multiples > 0 {
        evidence.push(Evidence::new(Fact::MultiplesFound(multiples), 0.5 * f64::from(multiples.min(3))));
    }
    if seed.is_smeared() {
        let smear = 2.0 * seed.spread_hz / comb.fundamental_hz;
        evidence.push(Evidence::new(Fact::Smeared(smear), 0.7));
    } else if multiples == 0 {
        evidence.push(Evidence::new(Fact::Alone, -0.4));
    }
    evidence
}
