//! Arrivals with known delays, drifts and steps: instants lie within what is claimed.

use super::*;
use rand::{RngExt, SeedableRng};
use rand_chacha::ChaCha8Rng;
use rand_distr::{Distribution, Exp, Gamma};

const NOON_NS: i64 = 1_700_000_000_000_000_000;
const RATE_MHZ: u64 = 500_000_000;
const SECOND_NS: f64 = 1e9;

fn clock_of(arrivals: impl IntoIterator<Item = Arrived>) -> Option<RunClock> {
    let mut fit = Fit::default();
    arrivals.into_iter().for_each(|arrived| fit.take(arrived));
    let pieces = fit.finish();
    (!pieces.is_empty()).then(|| RunClock { rates: Rates::new(RATE_MHZ, []), pieces })
}

fn arrived(sample: u64, utc_ns: i64, monotonic_ns: i64) -> Arrived {
    Arrived { sample, elapsed_ns: Rates::new(RATE_MHZ, []).elapsed_ns(sample), utc_ns, monotonic_ns }
}

/// How late a frame is, nanoseconds (models of signal.md section 12, restated: delay, jitter, tails).
#[derive(Clone, Copy, Debug)]
enum Link {
    /// 0.2 ms, up to 1 ms more, now and then some ten.
    Usb,
    /// The same behind a latency timer of 16 ms.
    Bridge,
    /// 1 ms and what a busy scheduler adds.
    LoadedHost,
}

impl Link {
    fn delay_ns(self, dice: &mut ChaCha8Rng) -> f64 {
        let tail = if dice.random_bool(0.02) { Exp::new(1.0 / 20e6).unwrap().sample(dice) } else { 0.0 };
        match self {
            Self::Usb => 0.2e6 + 1e6 * dice.random::<f64>() + tail,
            Self::Bridge => 0.2e6 + 16e6 * dice.random::<f64>() + tail,
            Self::LoadedHost => 1e6 + Gamma::new(1.5, 3e6).unwrap().sample(dice) + tail,
        }
    }
}

/// A crystal that is `skew_ppm` slow and swings by `swing_ppm` over eight hours: true time of device time.
fn true_ns(device_s: f64, skew_ppm: f64, swing_ppm: f64) -> f64 {
    let turn = std::f64::consts::TAU * device_s / 28_800.0;
    let swing_s = swing_ppm * 1e-6 * 28_800.0 / std::f64::consts::TAU * (1.0 - turn.cos());
    (device_s * (1.0 + skew_ppm * 1e-6) + swing_s) * SECOND_NS
}

#[test]
fn at_least_95_of_100_instants_lie_within_what_is_claimed_on_every_link() {
    let mut dice = ChaCha8Rng::seed_from_u64(12);
    for link in [Link::Usb, Link::Bridge, Link::LoadedHost] {
        for (skew_ppm, swing_ppm) in [(23.0, 0.0), (-50.0, 3.0), (50.0, 10.0)] {
            let clock = clock_of((0..28_800_u64).map(|second| {
                let true_ns = true_ns(second as f64, skew_ppm, swing_ppm) + link.delay_ns(&mut dice);
                arrived(second * 500_000, NOON_NS + true_ns as i64, true_ns as i64)
            }))
            .unwrap();
            let (mut held, mut worst_ns, mut widest_ns) = (0, 0, 0);
            for second in 0..28_800_u64 {
                let instant = clock.at(second * 500_000 + 250_000);
                let truth_ns = NOON_NS + true_ns(second as f64 + 0.5, skew_ppm, swing_ppm) as i64;
                let off_ns = (instant.utc_ns - truth_ns).abs();
                held += usize::from(off_ns <= instant.uncertainty_ns);
                worst_ns = worst_ns.max(off_ns);
                widest_ns = widest_ns.max(instant.uncertainty_ns);
            }
            println!(
                "{link:?}, {skew_ppm} ppm, swing {swing_ppm} ppm: {:.2} % held, worst {:.3} ms, claimed up to {:.3} ms",
                held as f64 / 288.0,
                worst_ns as f64 / 1e6,
                widest_ns as f64 / 1e6
            );
            assert!(held * 100 >= 28_800 * 95, "{link:?}: {held} of 28800");
            if matches!(link, Link::Usb) {
                assert!(worst_ns <= 2_000_000, "{worst_ns} ns");
            }
        }
    }
}

#[test]
fn a_clock_that_is_set_moves_only_what_comes_after() {
    // Set back by an hour at the 1000th second: daylight saving in a clock that runs on local time.
    let step_ns = -3_600_000_000_000;
    let utc_ns = |second: i64| NOON_NS + second * 1_000_000_000 + if second >= 1000 { step_ns } else { 0 };
    let clock = clock_of((0..4000_i64).map(|second| {
        arrived(second as u64 * 500_000, utc_ns(second) + 300_000 * (second % 7), second * 1_000_000_000)
    }))
    .unwrap();
    for second in [0, 500, 999, 1000, 1001, 2500, 3999] {
        let instant = clock.at(second as u64 * 500_000);
        let off_ns = (instant.utc_ns - utc_ns(second)).abs();
        assert!(
            off_ns <= instant.uncertainty_ns && instant.uncertainty_ns < 5_000_000,
            "{second}: {instant:?}"
        );
    }
}

#[test]
fn a_computer_that_sleeps_leaves_the_times_right() {
    // The monotonic clock stands still for 20 minutes of sleep; no frame arrives meanwhile.
    let seconds = (0..1500_i64).chain(2700..4000);
    let clock = clock_of(seconds.map(|second| {
        let monotonic_s = if second < 1500 { second } else { second - 1200 };
        let utc_ns = NOON_NS + second * 1_000_000_000;
        arrived(second as u64 * 500_000, utc_ns + 300_000 * (second % 7), monotonic_s * 1_000_000_000)
    }))
    .unwrap();
    for second in [10, 1499, 2000, 2700, 3999] {
        let instant = clock.at(second as u64 * 500_000);
        let off_ns = (instant.utc_ns - NOON_NS - second * 1_000_000_000).abs();
        assert!(off_ns <= instant.uncertainty_ns, "{second}: {instant:?}, off by {off_ns} ns");
    }
}

/// Arrivals a second apart, delayed by 0.2 ms plus a saw-tooth of up to 16 ms, on a crystal that is `ppm` slow.
fn short(seconds: i64, ppm: f64) -> Vec<Arrived> {
    let utc_ns = |second: i64| {
        NOON_NS
            + second * 1_000_000_000
            + 200_000
            + second * 7 % 16 * 1_000_000
            + (second as f64 * ppm * 1e3) as i64
    };
    (0..seconds)
        .map(|second| arrived(second as u64 * 500_000, utc_ns(second), utc_ns(second) - NOON_NS))
        .collect()
}

#[test]
fn in_a_short_run_the_least_delayed_arrival_anchors_the_nominal_rate() {
    let instant = clock_of(short(100, 0.0)).unwrap().at(25_000_000);
    assert_eq!(instant.utc_ns, NOON_NS + 50_000_000_000 + 200_000);
    assert_eq!(instant.uncertainty_ns, LEAST_UNCERTAINTY_NS);
    let slow = clock_of(short(100, 300.0)).unwrap();
    let off_ns = (slow.at(49_500_000).utc_ns - (NOON_NS + 99_000_000_000 + 29_700_000)).abs();
    assert!(off_ns > 20_000_000 && off_ns <= slow.at(0).uncertainty_ns, "{off_ns}");
}

#[test]
fn one_pair_is_enough_and_none_is_no_clock() {
    assert_eq!(clock_of([]), None);
    let clock = clock_of([arrived(0, 5, 5)]).unwrap();
    assert_eq!(clock.at(500_000).utc_ns, 1_000_000_005);
}

#[test]
fn instants_are_written_to_the_microsecond() {
    // 1 700 000 000 s after the epoch is 2023-11-14T22:13:20Z (POSIX time, arithmetic).
    assert_eq!(rfc3339(NOON_NS + 123_456_789), "2023-11-14T22:13:20.123456Z");
    assert_eq!(rfc3339(0), "1970-01-01T00:00:00.000000Z");
    assert!(rfc3339(i64::MAX).starts_with("2262-04-11T23:47:16"));
}
