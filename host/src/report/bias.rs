//! Which bias and termination would give an idle level.
//!
//! Two equal resistors RB from the legs to the bias supply VS and to its 0 V, all differential
//! resistances in parallel Rd: `VAB = VS · Rd / (2·RB + Rd)`, `CM = VS/2` (nodal analysis; TI SLLA272,
//! *The RS-485 Design Guide*, works the same network). Usual resistors and supplies: common practice,
//! no source. Different networks give the same level, so these are candidates, never findings.

use super::figures;
use super::model::BiasCandidate;

/// A terminator, ohm.
pub(crate) const TERMINATOR_OHM: f64 = 120.0;
/// What the receivers of a bus without terminators come to, ohm (some tens of light loads).
const UNTERMINATED_OHM: f64 = 10_000.0;
/// How far a level may lie from a candidate's: resistors of 5 % and a supply within 2 % (common
/// practice, no source).
const TOLERANCE_SHARE: f64 = 0.07;
/// Below this a level cannot be told from none, V.
const LEAST_IDLE_V: f64 = 0.004;
/// Candidates given at most.
const MOST_CANDIDATES: usize = 5;
/// Driver assumed for the driven level: open-circuit V and ohm (own arithmetic for orientation).
const DRIVER: (f64, f64) = (3.6, 40.0);

/// Sets of equal bias resistors met in practice: supply V, ohm, sets, terminators.
const USUAL: [(f64, f64, u32, &[u32]); 9] = [
    (5.0, 510.0, 1, &[2, 1, 3, 0]),
    (5.0, 560.0, 1, &[2, 1, 3, 0]),
    (5.0, 680.0, 1, &[2, 1, 3, 0]),
    (5.0, 1_000.0, 1, &[2, 1, 3, 0]),
    (5.0, 4_700.0, 1, &[2, 1, 3, 0]),
    (5.0, 20_000.0, 1, &[2, 1, 3, 0]),
    (3.3, 680.0, 1, &[2, 1, 3, 0]),
    (5.0, 560.0, 2, &[2]),
    (5.0, 680.0, 2, &[2]),
];

/// Differential idle voltage of the network, V.
pub(crate) fn idle_v(supply_v: f64, bias_ohm: f64, differential_ohm: f64) -> f64 {
    supply_v * differential_ohm / (2.0 * bias_ohm + differential_ohm)
}

/// All terminators and light loads in parallel, ohm.
pub(crate) fn differential_ohm(terminators: u32) -> f64 {
    if terminators == 0 { UNTERMINATED_OHM } else { TERMINATOR_OHM / f64::from(terminators) }
}

/// Candidates for an idle level, nearest first; empty when none is near or the level is next to nothing.
pub(crate) fn candidates(idle_seen_v: f64) -> Vec<BiasCandidate> {
    let seen_v = idle_seen_v.abs();
    if seen_v < LEAST_IDLE_V {
        return Vec::new();
    }
    let mut near: Vec<BiasCandidate> = all()
        .map(|mut candidate| {
            candidate.deviation_share = seen_v / candidate.expected_idle_v - 1.0;
            candidate
        })
        .filter(|candidate| candidate.deviation_share.abs() <= TOLERANCE_SHARE)
        .collect();
    near.sort_by(|a, b| a.deviation_share.abs().total_cmp(&b.deviation_share.abs()));
    near.truncate(MOST_CANDIDATES);
    near
}

fn all() -> impl Iterator<Item = BiasCandidate> {
    let usual = USUAL.iter().flat_map(|&(supply_v, bias_ohm, sets, terminators)| {
        terminators.iter().map(move |&count| usual(supply_v, bias_ohm, sets, count))
    });
    // Bus terminators with bias built in: 390, 220 and 390 ohm in series across 5 V at each end. One
    // end or two give the same level; with one end's supply pins open its 220 ohm only loads.
    let profibus = [
        ("390/220/390 ohm terminators at 5 V, powered", 195.0, 110.0),
        ("390/220/390 ohm terminators at 5 V, one of two without its supply", 390.0, 110.0),
    ];
    usual.chain(profibus.map(|(text, bias_ohm, differential_ohm)| {
        let sets = if bias_ohm < 390.0 { 2 } else { 1 };
        candidate(text.to_string(), (5.0, 390.0, sets, 2), idle_v(5.0, bias_ohm, differential_ohm))
    }))
}

fn usual(supply_v: f64, bias_ohm: f64, sets: u32, terminators: u32) -> BiasCandidate {
    let with = match terminators {
        0 => "no terminator".to_string(),
        1 => "one terminator".to_string(),
        2 => "two terminators".to_string(),
        more => format!("{more} terminators"),
    };
    let bias = match sets {
        1 => format!("one pair of {}", figures::ohms(bias_ohm)),
        more => format!("{more} pairs of {}", figures::ohms(bias_ohm)),
    };
    let expected_v = idle_v(supply_v, bias_ohm / f64::from(sets), differential_ohm(terminators));
    candidate(format!("{bias} at {supply_v} V, {with}"), (supply_v, bias_ohm, sets, terminators), expected_v)
}

fn candidate(
    description: String,
    (supply_v, bias_ohm, bias_sets, terminators): (f64, f64, u32, u32),
    expected_v: f64,
) -> BiasCandidate {
    BiasCandidate {
        description,
        supply_v,
        bias_ohm,
        bias_sets,
        terminators,
        expected_idle_v: figures::rounded_volts(expected_v),
        expected_cm_v: supply_v / 2.0,
        deviation_share: 0.0,
    }
}

/// What the driven level says where candidates differ in their terminators: a missing terminator
/// raises it, a second bias does not.
pub(crate) fn driven_hint(candidates: &[BiasCandidate], driven_v: Option<f64>) -> Option<String> {
    let first = candidates.first()?.terminators;
    if candidates.iter().all(|candidate| candidate.terminators == first) {
        return None;
    }
    let Some(driven_v) = driven_v else {
        return Some(
            "The candidates differ in terminators; a driven level would help, but none was seen.".to_string(),
        );
    };
    let nearest = (0..=4_u32).min_by(|a, b| {
        let distance = |count: &u32| (driven_level_v(*count) - driven_v).abs();
        distance(a).total_cmp(&distance(b))
    })?;
    Some(format!(
        "The candidates differ in terminators. Driven, the pair reaches {}; a driver of {} V behind {} ohm \
         would reach {} with one terminator, {} with two and {} with three, so this is nearest to {}. \
         Drivers differ: compare with the level when the bus was known good.",
        figures::volts(driven_v),
        DRIVER.0,
        DRIVER.1,
        figures::volts(driven_level_v(1)),
        figures::volts(driven_level_v(2)),
        figures::volts(driven_level_v(3)),
        ["none", "one", "two", "three", "four"].get(nearest as usize).unwrap_or(&"more"),
    ))
}

/// Driven level with so many terminators, V.
fn driven_level_v(terminators: u32) -> f64 {
    let (open_v, ohm) = DRIVER;
    let load_ohm = differential_ohm(terminators);
    open_v * load_ohm / (load_ohm + ohm)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_network_gives_the_published_idle_levels() {
        // 560 ohm at 5 V into 60 ohm: 254.237 mV, nodal analysis of the Modbus-style bias; 720 ohm give
        // exactly 200 mV (a public RS-485 calculator); 1150 ohm into 118 ohm: 244 mV (a motion-controller
        // manual); 15 kohm at 3.3 V into 120 ohm: 13.147 mV (a public design review); 390/220/390: 1.1 V
        // (a PROFIBUS manual gives "about 1 V" and legs near 2 and 3 V).
        assert!((idle_v(5.0, 560.0, 60.0) - 0.254_237).abs() < 1e-5);
        assert!((idle_v(5.0, 720.0, 60.0) - 0.2).abs() < 1e-12);
        assert!((idle_v(5.0, 1150.0, 118.0) - 0.244_0).abs() < 1e-4);
        assert!((idle_v(3.3, 15_000.0, 120.0) - 0.013_147).abs() < 1e-5);
        assert!((idle_v(5.0, 390.0, 220.0) - 1.1).abs() < 1e-12);
        assert!((idle_v(5.0, 390.0, 110.0) - 0.617_98).abs() < 1e-5);
    }

    #[test]
    fn terminators_halve_and_third_the_load() {
        assert!((differential_ohm(2) - 60.0).abs() < 1e-12);
        assert!((differential_ohm(3) - 40.0).abs() < 1e-12);
        // Own arithmetic from the formula: 680 ohm, 5 V: 211, 405, 143 mV.
        for (terminators, expected_v) in [(2, 0.2113), (1, 0.4054), (3, 0.1429)] {
            assert!((idle_v(5.0, 680.0, differential_ohm(terminators)) - expected_v).abs() < 1e-4);
        }
    }

    #[test]
    fn an_idle_level_of_484_mv_is_ambiguous_and_both_readings_are_named() {
        let near = candidates(0.484);
        let networks: Vec<_> = near.iter().map(|c| (c.bias_ohm, c.bias_sets, c.terminators)).collect();
        assert!(networks.contains(&(560.0, 1, 1)), "{networks:?}");
        assert!(networks.contains(&(560.0, 2, 2)), "{networks:?}");
        let hint = driven_hint(&near, Some(2.68)).unwrap();
        assert!(hint.contains("nearest to one."), "{hint}");
        let hint = driven_hint(&near, Some(2.2)).unwrap();
        assert!(hint.contains("nearest to two."), "{hint}");
    }

    #[test]
    fn a_bus_as_it_should_be_names_its_own_network_first() {
        let near = candidates(-0.2542);
        assert_eq!((near[0].bias_ohm, near[0].bias_sets, near[0].terminators), (560.0, 1, 2));
        assert!(near[0].deviation_share.abs() < 1e-3);
        assert_eq!(near[0].expected_cm_v, 2.5);
    }

    #[test]
    fn no_bias_names_nothing() {
        assert!(candidates(0.0).is_empty());
        assert!(candidates(0.003).is_empty());
        assert!(driven_hint(&[], Some(2.0)).is_none());
    }
}
