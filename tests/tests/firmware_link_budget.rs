//! The stream against the speed of the link: what every scenario asks for, and what goes first when the
//! link is too slow. Budgets: 4 kB/s on the wire for the continuous stream, and a line of 115 200 baud
//! (10 bits a byte) for the worst.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

use legwise::line::scenarios;
use legwise_protocol::framing::DeviceFrame;
use legwise_protocol::message::{Message, Settings, Totals};
use legwise_tests::boards;
use legwise_tests::link_budget::{Demand, Shed, USUAL_BYTES_PER_S, play, without_reports};
use legwise_tests::replay::{Delivery, Replay};
use legwise_tests::waveforms::dice;
use rand::RngExt;

/// The continuous stream may ask for this much.
const CONTINUOUS_BYTES_PER_S: f64 = 4000.0;
/// 9 600 baud: too slow for any scenario.
const LOW_BYTES_PER_S: u32 = 960;
/// Long enough for a slow link to fill the queue of passing messages in the quietest scenario.
const SECONDS: f64 = 16.0;

/// Every scenario from 2 s before its first disturbance on.
fn recordings() -> impl Iterator<Item = (&'static str, Replay, Settings)> {
    scenarios::NAMES.iter().map(|(name, _)| {
        let replay = Replay::of_scenario(name, 7, 2.0, SECONDS).unwrap();
        let settings = replay.settings();
        (*name, replay, settings)
    })
}

/// Kept messages as they were made, the accounts of losses left out.
fn kept(frames: &[DeviceFrame]) -> Vec<(u64, &Message)> {
    let is_kept =
        |frame: &&DeviceFrame| frame.message.is_kept() && !matches!(frame.message, Message::Loss(_));
    frames.iter().filter(is_kept).map(|frame| (frame.envelope.sample, &frame.message)).collect()
}

fn totals_at_the_end(frames: &[DeviceFrame]) -> Totals {
    let end = frames.iter().find_map(|frame| match frame.message {
        Message::End(end) => Some(end.totals),
        _ => None,
    });
    end.expect("End arrives on any link")
}

#[test]
fn every_scenario_fits_a_line_of_115_200_baud() {
    for (name, replay, settings) in recordings() {
        let (frames, _) = play(&replay, settings, 0);
        let demand = Demand::of(&frames, &replay);
        println!(
            "{name:<16} {:>5.0} bytes/s, busiest {:>5.0}, {:>5}",
            demand.mean, demand.busiest_eight, demand.busiest
        );
        assert!(demand.mean <= CONTINUOUS_BYTES_PER_S, "{name}: {demand:?}");
        assert!(demand.busiest <= USUAL_BYTES_PER_S as usize, "{name}: {demand:?}");
        if name == "quiet-night" {
            assert!(demand.busiest_eight <= CONTINUOUS_BYTES_PER_S, "{name}: {demand:?}");
        }
        let (slower, shed) = play(&replay, settings, USUAL_BYTES_PER_S);
        assert_eq!(shed, Shed::default(), "{name}");
        assert_eq!(kept(&slower), kept(&frames), "{name}");
        assert_eq!(slower.len(), frames.len(), "{name}");
    }
}

#[test]
fn a_storm_without_end_on_noise_that_does_not_compress_fits_it_too() {
    let board = boards::converter_board(200_000, boards::converter(12, 40.0, 0.0));
    let mut dice = dice(3);
    let mut leg = || (0..256).map(|_| dice.random_range(0..4096)).collect::<Vec<i32>>();
    let deliveries = (0..10 * 200_000 / 256_u64).map(|block| Delivery {
        first_sample: 256 * block,
        is_overrun: false,
        leg_a: leg(),
        leg_b: leg(),
    });
    let replay = Replay::of_deliveries(board, deliveries.collect());
    let (frames, _) = play(&replay, replay.settings(), 0);
    let demand = Demand::of(&frames, &replay);
    println!("{demand:?}");
    let storms = frames.iter().filter(|frame| matches!(frame.message, Message::Storm(_))).count();
    assert!(storms >= 9, "one for every second: {storms}");
    assert!(demand.busiest <= USUAL_BYTES_PER_S as usize, "{demand:?}");
    let (_, shed) = play(&replay, replay.settings(), USUAL_BYTES_PER_S);
    assert_eq!(shed, Shed::default());
}

#[test]
fn a_link_too_slow_costs_passing_messages_and_no_kept_ones_that_it_could_carry() {
    let mut overfull = Vec::new();
    for (name, replay, settings) in recordings() {
        let (frames, _) = play(&replay, settings, 0);
        let (slow, shed) = play(&replay, settings, LOW_BYTES_PER_S);
        let (_, alone) = play(&replay, without_reports(settings), LOW_BYTES_PER_S);
        println!("{name:<16} passing {:>3}, {:?}; alone {:?}", shed.passing, shed.kept, alone.kept);
        assert!(shed.passing > 0, "{name}: 9 600 baud are too few");
        assert_eq!(Shed::seen_in(&slow), shed, "{name}: the host sees what was not sent");
        assert_eq!(totals_at_the_end(&slow), totals_at_the_end(&frames), "{name}: counts survive");
        if alone.kept_messages() == 0 {
            assert_eq!(shed.kept_messages(), 0, "{name}: lost to passing messages");
            assert_eq!(kept(&slow), kept(&frames), "{name}");
        } else {
            // The kept messages alone are too many. What did not arrive was counted, one by one.
            overfull.push(name);
            assert_eq!(kept(&slow).len() + shed.kept_messages() as usize, kept(&frames).len(), "{name}");
        }
    }
    assert_eq!(overfull, ["can-weak-ground"], "its snippets ask for more than 9 600 baud");
}

#[test]
fn on_a_slow_link_averages_go_on_for_longer_until_nothing_is_shed() {
    let replay = Replay::of_scenario("quiet-night", 7, 2.0, 150.0).unwrap();
    let (frames, shed) = play(&replay, replay.settings(), LOW_BYTES_PER_S);
    // Holes in the sequence numbers, by the half of the recording in which the next frame was made.
    let half = replay.pairs() as u64 / 2;
    let mut missing = [0, 0];
    for pair in frames.windows(2) {
        let hole = pair[1].envelope.sequence - pair[0].envelope.sequence - 1;
        missing[usize::from(pair[1].envelope.sample > half)] += hole;
    }
    let lengths: Vec<u32> = frames
        .iter()
        .filter_map(|frame| match &frame.message {
            Message::Spectra(part) if part.rung == 0 && part.first_bin == 0 => {
                Some(part.segments + part.skipped + part.other)
            }
            _ => None,
        })
        .collect();
    println!("missing in each half {missing:?}, segments per average {lengths:?}");
    assert_eq!(missing[0] + missing[1], shed.passing);
    assert!(missing[0] > 0, "the link was fast enough");
    assert!(missing[1] * 10 <= missing[0], "{missing:?}");
    assert!(lengths.iter().max() >= Some(&(4 * lengths[0])), "{lengths:?}");
}
