//! Records depend on the samples and their indices only: deliveries and links may cut as they like.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

use legwise_firmware::alarm::{AlarmPin, NoPin};
use legwise_firmware::fakes::MemoryLink;
use legwise_firmware::monitor::{Identity, Memory, Monitor, Step};
use legwise_firmware::pipeline::Buffers;
use legwise_firmware::settings;
use legwise_firmware::source::SourceDescription;
use legwise_protocol::decoder::DeviceDecoder;
use legwise_protocol::framing::{Delivery, DeviceFrame};
use legwise_protocol::message::{GapCause, Message, ResetCause, Settings};
use legwise_protocol::receivers::{self, ReceiverId};
use legwise_tests::boards;
use legwise_tests::recorder::{Record, Recorder};
use legwise_tests::sources::HoledSource;
use legwise_tests::waveforms::{Data, dice, noise};
use proptest::prelude::*;
use proptest::test_runner::RngSeed;
use rand::RngExt;

const PAIRS: usize = 9_000;
const RATE_HZ: u64 = 200_000;

/// What happens at a fixed sample.
#[derive(Clone, Copy, Debug)]
enum Happening {
    /// Pairs are missing: 1 or more, told by a jump or by name.
    Jump(u16),
    Overrun(u16),
    /// Some are missing, nobody knows how many.
    Unknown,
    Change(u8),
}

/// Traffic with a dozen excursions, short and long.
fn legs(seed: u64) -> (Vec<i32>, Vec<i32>) {
    let mut dice = dice(seed);
    let data = Data::new(seed, PAIRS, 7.3, 0.4, (2.0, -2.0));
    let noise = noise(&mut dice, 2 * PAIRS);
    let mut cm = vec![2.5; PAIRS];
    for _ in 0..12 {
        let first = dice.random_range(0..PAIRS - 10);
        let last = (first + dice.random_range(1..600)).min(PAIRS);
        let push = if dice.random() { 11.0 } else { -9.0 };
        cm[first..last].iter_mut().for_each(|cm| *cm += push);
    }
    let leg = |sign: f64, noise: &[f64]| {
        (0..PAIRS)
            .map(|n| boards::microvolts(cm[n] + sign * data.at(n as f64) / 2.0 + 0.02 * noise[n]))
            .collect()
    };
    (leg(1.0, &noise[..PAIRS]), leg(-1.0, &noise[PAIRS..]))
}

fn usual_settings() -> Settings {
    let receiver = receivers::by_id(ReceiverId::Tia485A).unwrap();
    let mut settings = settings::for_receiver(receiver, RATE_HZ * 1000);
    settings.reporting.summary_samples = 512;
    settings.reporting.levels_samples = 2_048;
    settings.reporting.spectrum_segments = 3;
    settings.detection.storm_samples = 3_000;
    settings.detection.storm_after = 2;
    settings
}

fn changed(variant: u8) -> Settings {
    let mut settings = usual_settings();
    match variant % 4 {
        0 => settings.detection.hold_off_samples = 20,
        1 => settings.limits = receivers::by_id(ReceiverId::Tia422B).unwrap().limits(),
        2 => settings.reporting.spectrum_skip = 2,
        _ => settings.detection.longest_samples = 100,
    }
    settings
}

/// Runs the script, feeding between happenings in deliveries of the given lengths (repeated).
fn run(
    board: SourceDescription,
    legs: &(Vec<i32>, Vec<i32>),
    script: &[(usize, Happening)],
    deliveries: &[usize],
) -> Vec<Record> {
    let mut recorder = Recorder::new(board, usual_settings());
    let (mut at, mut cause) = (0, GapCause::Skipped);
    let mut lengths = deliveries.iter().copied().cycle();
    let stops = script.iter().map(|&(at, what)| (at, Some(what))).chain([(PAIRS, None)]);
    for (stop, what) in stops {
        while at < stop {
            let end = (at + lengths.next().unwrap()).min(stop);
            recorder.feed_at(at as u64, &legs.0[at..end], &legs.1[at..end], cause);
            at = end;
        }
        match what {
            Some(Happening::Jump(missing)) => (at, cause) = (at + usize::from(missing), GapCause::Skipped),
            Some(Happening::Overrun(missing)) => {
                (at, cause) = (at + usize::from(missing), GapCause::Overrun);
            }
            Some(Happening::Unknown) => recorder.gap(at as u64, 0, GapCause::Overrun),
            Some(Happening::Change(variant)) => recorder.change(changed(variant)),
            None => recorder.end(),
        }
    }
    recorder.records
}

fn happening() -> impl Strategy<Value = Happening> {
    prop_oneof![
        (1..700_u16).prop_map(Happening::Jump),
        (1..700_u16).prop_map(Happening::Overrun),
        Just(Happening::Unknown),
        any::<u8>().prop_map(Happening::Change),
    ]
}

fn script() -> impl Strategy<Value = Vec<(usize, Happening)>> {
    let places = prop_oneof![1..PAIRS, (1..34_usize).prop_map(|block| block * 256), Just(259), Just(515)];
    prop::collection::vec((places, happening()), 0..5).prop_map(|mut script| {
        script.sort_by_key(|&(at, _)| at);
        script
    })
}

fn deliveries() -> impl Strategy<Value = Vec<usize>> {
    let length = prop_oneof![1..8_usize, 250..262_usize, 1..3_000_usize];
    prop::collection::vec(length, 1..12)
}

proptest! {
    #![proptest_config(ProptestConfig { cases: 200, failure_persistence: None, rng_seed: RngSeed::Fixed(1), ..ProptestConfig::default() })]

    #[test]
    fn any_cut_into_deliveries_gives_the_same_records(
        seed in 0..50_u64,
        skew_ns in prop_oneof![Just(0), -4_999..4_999_i32],
        script in script(),
        deliveries in deliveries(),
    ) {
        let legs = legs(seed);
        let board = boards::skewed_board(RATE_HZ, skew_ns);
        let whole = run(board, &legs, &script, &[PAIRS]);
        let pieces = run(board, &legs, &script, &deliveries);
        prop_assert_eq!(&pieces, &whole);
        let has = |what: fn(&Message) -> bool| whole.iter().any(|(message, _)| what(message));
        prop_assert!(has(|message| matches!(message, Message::Excursion(_))));
        prop_assert!(has(|message| matches!(message, Message::Snippet(_))));
        prop_assert!(has(|message| matches!(message, Message::Spectra(_))));
    }
}

type TestMonitor = Monitor<HoledSource, MemoryLink<4_096>, NoPin, Box<Buffers>, Box<Memory<65_536, 65_536>>>;

/// Runs a whole device; `drains` are the bytes the host takes away after each step, repeated.
fn run_device(
    board: SourceDescription,
    legs: &(Vec<i32>, Vec<i32>),
    holes: &[(usize, usize, bool)],
    deliveries: &[usize],
    drains: &[usize],
) -> Vec<DeviceFrame> {
    let identity = Identity { boot_id: 7, board: "bench", serial: 1, reset_cause: ResetCause::PowerOn };
    let source = HoledSource::new(board, legs.0.clone(), legs.1.clone(), holes.to_vec(), deliveries.to_vec());
    let alarm = AlarmPin::new(NoPin, 0).unwrap();
    let mut monitor = TestMonitor::new(
        identity,
        usual_settings(),
        (source, MemoryLink::new(), alarm),
        (Box::default(), Box::default()),
    );
    let (mut decoder, mut frames) = (DeviceDecoder::new(), Vec::new());
    let mut drains = drains.iter().copied().cycle();
    loop {
        let step = monitor.step().unwrap();
        // At the end the host takes everything; before that, as little as the pattern says.
        let take = if step == Step::Finished { usize::MAX } else { drains.next().unwrap() };
        let bytes: Vec<u8> = (0..take).map_while(|_| monitor.link_mut().take_sent()).collect();
        decoder.feed_frames(&bytes, |frame| frames.push(frame));
        if step == Step::Finished && bytes.is_empty() {
            break;
        }
    }
    assert_eq!((monitor.outbox().shed(), monitor.outbox().loss()), (0, Default::default()));
    assert_eq!(decoder.counts().damaged_frames, 0);
    frames
}

/// Frames are numbered without a hole, kept ones too, and say what the pipeline said.
fn assert_whole(frames: &[DeviceFrame], expected: &[Record]) {
    let mut kept = 0;
    for (sequence, frame) in frames.iter().enumerate() {
        assert_eq!(frame.envelope.sequence as usize, sequence);
        assert_eq!(frame.envelope.boot_id, 7);
        if frame.message.is_kept() {
            kept += 1;
            assert_eq!(frame.envelope.delivery, Delivery::Kept { number: kept });
        } else {
            assert_eq!(frame.envelope.delivery, Delivery::Passing);
        }
    }
    assert!(matches!(frames[0].message, Message::Hello(_)));
    assert!(matches!(frames[1].message, Message::Settings(_)));
    let told: Vec<Record> =
        frames[2..].iter().map(|frame| (frame.message.clone(), frame.envelope.sample)).collect();
    assert_eq!(told, expected);
}

proptest! {
    #![proptest_config(ProptestConfig { cases: 60, failure_persistence: None, rng_seed: RngSeed::Fixed(1), ..ProptestConfig::default() })]

    #[test]
    fn a_device_says_the_same_whatever_its_source_and_link_cut(
        seed in 0..50_u64,
        hole in (1..4_000_usize, 1..900_usize, any::<bool>()),
        other in (5_000..8_000_usize, 1..900_usize, any::<bool>()),
        deliveries in prop::collection::vec(0..300_usize, 1..9),
        drains in prop::collection::vec(0..1_500_usize, 1..9),
    ) {
        prop_assume!(deliveries.iter().sum::<usize>() >= 8 && drains.iter().sum::<usize>() >= 200);
        let legs = legs(seed);
        let board = boards::microvolt_board(RATE_HZ);
        let holes = [hole, other];
        let script = holes.map(|(at, missing, is_overrun)| {
            let missing = missing as u16;
            (at, if is_overrun { Happening::Overrun(missing) } else { Happening::Jump(missing) })
        });
        let expected = run(board, &legs, &script, &[PAIRS]);
        let frames = run_device(board, &legs, &holes, &deliveries, &drains);
        assert_whole(&frames, &expected);
    }
}

#[test]
fn a_source_that_starts_late_has_no_gap_before_its_first_pair() {
    let mut recorder = Recorder::new(boards::microvolt_board(RATE_HZ), usual_settings());
    recorder.feed_at(12_345, &[0; 600], &[0; 600], GapCause::Skipped);
    recorder.end();
    let gaps = recorder.pick(|message| if let Message::Gap(gap) = message { Some(*gap) } else { None });
    assert_eq!(gaps, []);
    let totals = recorder.totals();
    assert_eq!((totals.first_sample, totals.samples, totals.gaps), (12_345, 600, 0));
}

#[test]
fn a_gap_cuts_an_open_excursion_and_says_what_is_missing() {
    let mut recorder = Recorder::new(boards::microvolt_board(RATE_HZ), usual_settings());
    recorder.feed(&[13_000_000; 700], &[0; 700]);
    recorder.feed_at(1_000, &[13_000_000; 300], &[0; 300], GapCause::Overrun);
    recorder.gap(1_300, 0, GapCause::Resynchronised);
    recorder.feed(&[0; 100], &[0; 100]);
    recorder.end();
    let gaps = recorder.pick(|message| if let Message::Gap(gap) = message { Some(*gap) } else { None });
    let gap = |first_sample, samples, cause| legwise_protocol::message::Gap { first_sample, samples, cause };
    assert_eq!(gaps, [gap(700, 300, GapCause::Overrun), gap(1_300, 0, GapCause::Resynchronised)]);
    let stretches: Vec<_> =
        recorder.excursions().iter().map(|one| (one.first_sample, one.samples, one.is_cut)).collect();
    assert_eq!(stretches, [(0, 700, true), (1_000, 300, true)]);
    let totals = recorder.totals();
    assert_eq!((totals.samples, totals.gaps, totals.gap_samples), (1_100, 2, 300));
}
