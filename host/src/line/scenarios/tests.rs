//! Each built-in scenario does what its line says.

use super::*;
use crate::line::{Length, LineSource};
use legwise_firmware::source::{PairSource, Taken};
use legwise_protocol::receivers;

/// What a run of a scenario shows.
struct Shown {
    /// Pairs outside the terminal window, outside the average window.
    outside: [u64; 2],
    /// Distance from the nearest limit at the worst moment, volts; negative when outside.
    margin_v: f64,
    idle_dm_v: f64,
    high_dm_v: f64,
}

fn show(name: &str, seconds: f64) -> Shown {
    let scenario = by_name(name).unwrap();
    let limits = receivers::by_name(&scenario.receiver).unwrap().limits();
    let mut source = LineSource::new(&scenario, 1, Length::Minutes(seconds / 60.0)).unwrap();
    let scales = source.describe().legs;
    let microvolts = |leg: usize, code: i32| {
        let product = i64::from(code) * i64::from(scales[leg].mantissa) + (1 << (scales[leg].shift - 1));
        (product >> scales[leg].shift) + i64::from(scales[leg].offset_uv)
    };
    let (mut a, mut b) = (vec![0; 8192], vec![0; 8192]);
    let mut outside = [0; 2];
    let mut margin_uv = i64::MAX;
    let mut histogram = vec![0_u64; 8000];
    while let Ok(Taken::Pairs { pairs, .. }) = source.take(&mut a, &mut b) {
        for (&a, &b) in a[..pairs].iter().zip(&b[..pairs]) {
            let (a, b) = (microvolts(0, a), microvolts(1, b));
            let checks = [(limits.terminal, a.min(b), a.max(b)), (limits.average, (a + b) / 2, (a + b) / 2)];
            for (count, (window, low, high)) in outside.iter_mut().zip(checks) {
                if let Some(window) = window {
                    let margin = (low - i64::from(window.low.uv())).min(i64::from(window.high.uv()) - high);
                    *count += u64::from(margin < 0);
                    margin_uv = margin_uv.min(margin);
                }
            }
            histogram[((a - b) / 1000 + 4000).clamp(0, 7999) as usize] += 1;
        }
    }
    let commonest = |from_mv: usize, until_mv: usize| {
        let place = (from_mv + 4000..until_mv + 4000).max_by_key(|&place| histogram[place]).unwrap();
        (place - 4000) as f64 * 1e-3
    };
    Shown {
        outside,
        margin_v: margin_uv as f64 * 1e-6,
        idle_dm_v: commonest(0, 1000),
        high_dm_v: commonest(1500, 3500),
    }
}

#[test]
fn every_built_in_scenario_reads_and_has_a_known_receiver() {
    for (name, line) in NAMES {
        let scenario =
            Scenario::from_toml(text_of(name).unwrap()).unwrap_or_else(|error| panic!("{name}: {error}"));
        assert!(!line.is_empty() && !scenario.title.is_empty() && scenario.description.len() > 40);
        assert!(receivers::by_name(&scenario.receiver).is_some());
        assert_eq!(by_name(&name.to_uppercase()), Some(scenario));
    }
    assert!(NAMES.len() >= 8);
    assert_eq!(by_name("no-such-scenario"), None);
}

/// Pass means more than 3 V left, marginal 1 to 3 V (common practice, no source).
#[test]
fn clean_scenarios_stay_well_inside_their_limits() {
    for name in ["quiet-night", "lost-replies", "no-bias", "one-terminator", "radio", "charger"] {
        let shown = show(name, 60.0);
        println!("{name}: {:.2} V left, idle {:.3} V", shown.margin_v, shown.idle_dm_v);
        assert_eq!(shown.outside, [0, 0], "{name}");
        assert!(shown.margin_v > 3.0, "{name}: {} V left", shown.margin_v);
    }
}

#[test]
fn drive_bay_is_marginal_but_inside() {
    let shown = show("drive-bay", 40.0);
    assert_eq!(shown.outside, [0, 0]);
    assert!((1.0..3.0).contains(&shown.margin_v), "{} V left", shown.margin_v);
}

#[test]
fn offending_scenarios_leave_their_windows() {
    let press = show("press-ground", 60.0);
    assert!(press.outside[0] > 1000 && press.outside[1] == 0, "terminal only: {:?}", press.outside);
    let contactor = show("contactor", 60.0);
    println!("contactor: {:?}, {:.2} V", contactor.outside, contactor.margin_v);
    assert!(contactor.outside[0] > 0 && contactor.outside[0] < 1000);
    let can = show("can-weak-ground", 30.0);
    println!("can: {:?}", can.outside);
    assert!(can.outside[1] > 1000);
}

/// One step of the 12-bit converter is 9 mV; idle levels of the divider arithmetic: 5 V, 510 ohm, both
/// terminators 289 mV, one 513 mV, none of the bias about 0.
#[test]
fn idle_levels_tell_bias_and_terminators_apart() {
    for (name, idle_v) in [("quiet-night", 0.289), ("one-terminator", 0.513), ("no-bias", 0.0)] {
        let shown = show(name, 5.0);
        println!("{name}: idle {:.3} V, driven {:.3} V", shown.idle_dm_v, shown.high_dm_v);
        assert!((shown.idle_dm_v - idle_v).abs() < 0.010, "{name}: {}", shown.idle_dm_v);
    }
}

#[test]
fn unanswered_questions_are_the_scenarios_own() {
    let scenario = by_name("lost-replies").unwrap();
    let mut source = LineSource::new(&scenario, 1, Length::Minutes(2.0)).unwrap();
    let (mut a, mut b) = (vec![0; 65_536], vec![0; 65_536]);
    while let Ok(Taken::Pairs { .. }) = source.take(&mut a, &mut b) {}
    let polls = source.polls();
    println!("{polls:?}");
    // One of five slaves never answers, another misses one in fifty.
    let share = polls.answered as f64 / polls.asked as f64;
    assert!((0.78..0.801).contains(&share), "{share}");
}
