//! A thousand million clean samples right at the limits: no excursion is invented.
//!
//! Two halves, so that two cores share the work. Spectra are off; every other stage runs.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

use legwise_firmware::settings;
use legwise_firmware::source::SourceDescription;
use legwise_protocol::message::{Message, Settings};
use legwise_protocol::receivers::{self, ReceiverId};
use legwise_tests::boards;
use legwise_tests::recorder::Recorder;
use legwise_tests::waveforms::{Data, dice, noise};
use std::time::Instant;

const PAIRS: usize = 1 << 20;
const ROUNDS: usize = 477;

fn quiet_settings(id: ReceiverId) -> Settings {
    let mut settings = settings::for_receiver(receivers::by_id(id).unwrap(), 500_000_000);
    settings.reporting.spectrum_segments = 0;
    settings
}

/// Feeds the same pairs again and again; nothing but summaries, levels and totals may come out.
fn examine_clean(board: SourceDescription, settings: Settings, code_a: &[i32], code_b: &[i32]) -> Recorder {
    let start = Instant::now();
    let mut recorder = Recorder::new(board, settings);
    for _ in 0..ROUNDS {
        recorder.feed(code_a, code_b);
        for (message, sample) in recorder.records.drain(..) {
            match message {
                Message::Summary(summary) => assert!(summary.outside == 0 && !summary.alarm),
                Message::Levels(_) | Message::Totals(_) => {}
                other => panic!("invented at {sample}: {other:?}"),
            }
        }
        assert!(!recorder.pipeline.take_alarm());
    }
    recorder.end();
    let totals = recorder.totals();
    assert_eq!(totals.samples, (PAIRS * ROUNDS) as u64);
    assert_eq!((totals.outside, totals.excursions, totals.edge_suspects, totals.gaps), (0, 0, 0, 0));
    let seconds = start.elapsed().as_secs_f64();
    println!(
        "{} pairs in {seconds:.1} s: {:.0} M pairs/s",
        totals.samples,
        totals.samples as f64 / seconds / 1e6
    );
    recorder
}

const _: () = assert!(2 * PAIRS * ROUNDS >= 1_000_000_000);

#[test]
fn legs_and_average_on_the_limit_to_the_microvolt_invent_nothing() {
    // TIA-485-A, -7 to 12 V on legs and average. In turn: A at 12 V, B at -7 V, both at 12 V, both at
    // -7 V, each with noise that only reaches inward, and hence at the limit in half of all samples.
    let board = boards::microvolt_board(500_000);
    let mut dice = dice(1_000_000_000);
    let inward: Vec<i32> =
        noise(&mut dice, PAIRS).iter().map(|volts| boards::microvolts(volts.max(0.0) * 0.02)).collect();
    let (high, low) = (12_000_000, -7_000_000);
    let legs = |n: usize| match n / 4_096 % 4 {
        0 => (high - inward[n], high - 3_000_000),
        1 => (low + 2_500_000, low + inward[n]),
        2 => (high - inward[n], high - inward[PAIRS - 1 - n]),
        _ => (low + inward[n], low + inward[PAIRS - 1 - n]),
    };
    let (code_a, code_b): (Vec<i32>, Vec<i32>) = (0..PAIRS).map(legs).unzip();
    let recorder = examine_clean(board, quiet_settings(ReceiverId::Tia485A), &code_a, &code_b);
    let totals = recorder.totals();
    // It was as near as near can be.
    assert_eq!((totals.leg_a.high.value, totals.leg_a.low.value), (high, low));
    assert_eq!((totals.leg_b.high.value, totals.leg_b.low.value), (high, low));
    assert_eq!((totals.twice_cm.high.value, totals.twice_cm.low.value), (2 * high, 2 * low));
}

#[test]
fn noisy_traffic_up_to_the_last_code_inside_invents_nothing() {
    // ISO 11898-2:2003, average -2 to 7 V: recessive 0 V and dominant 2 V at 500 kbit/s, average noise
    // cut at the limit, 12-bit codes over 24 V. A sum of two codes never lies on 14 V exactly, so the
    // nearest to the limit is less than one code below it.
    let scale = boards::converter(12, 24.0, 2.0);
    let board = boards::converter_board(4_000_000, scale);
    let mut dice = dice(1_000_000_001);
    let data = Data::new(7, PAIRS, 8.0, 0.5, (2.0, 0.0));
    let wander = noise(&mut dice, PAIRS);
    let (mut code_a, mut code_b) = (Vec::new(), Vec::new());
    for (n, wander) in wander.iter().enumerate() {
        let (cm, dm) = ((6.9 + 0.1 * wander).min(7.0), data.at(n as f64));
        let (mut a, b) = (boards::code_of(&scale, cm + dm / 2.0), boards::code_of(&scale, cm - dm / 2.0));
        while scale.microvolts(a) + scale.microvolts(b) > 14_000_000 {
            a -= 1;
        }
        code_a.push(a);
        code_b.push(b);
    }
    let recorder = examine_clean(board, quiet_settings(ReceiverId::CanHighSpeed2003), &code_a, &code_b);
    let highest = recorder.totals().twice_cm.high.value;
    assert!((13_990_000..=14_000_000).contains(&highest), "{highest}");
    assert!(recorder.totals().dm.high.value > 1_900_000);
}
