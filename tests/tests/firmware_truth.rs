//! Injected truth: what was put outside is reported, to the sample, and nothing else is.
//!
//! Each scenario draws a receiver, a converter, settings, traffic, noise and excursions from its seed.
//! The records are held against two independent truths: the places where samples were pushed out, and
//! the excursion rule written a second time (`legwise_tests::rule`).
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

mod scenario;

use legwise_firmware::settings;
use legwise_protocol::limits::Limit;
use legwise_protocol::message::{Excursion, Message, Part};
use legwise_protocol::receivers::{self, ReceiverId};
use legwise_tests::boards;
use legwise_tests::recorder::{Recorder, examine};
use legwise_tests::rule::{self, Expected, Verdict};
use legwise_tests::waveforms::dice;
use rand::RngExt;
use scenario::{Injected, PAIRS, Push, Scenario};

const SCENARIOS: u64 = 240;

fn verdict(scenario: &Scenario) -> Verdict {
    let [scale_a, scale_b] = scenario.board.legs;
    let leg_a: Vec<i32> = scenario.code_a.iter().map(|&code| scale_a.microvolts(code)).collect();
    let leg_b: Vec<i32> = scenario.code_b.iter().map(|&code| scale_b.microvolts(code)).collect();
    let is_at_rail = |code: i32| code <= scale_a.rail_low_code || code >= scale_a.rail_high_code;
    let clipped: Vec<bool> =
        scenario.code_a.iter().zip(&scenario.code_b).map(|(&a, &b)| is_at_rail(a) || is_at_rail(b)).collect();
    let settings = &scenario.settings;
    rule::judge(&settings.limits, &settings.detection, &leg_a, &leg_b, &clipped)
}

/// Feeds a scenario in random deliveries from a random first index on.
fn run(scenario: &Scenario, seed: u64) -> (Recorder, u64) {
    let mut dice = dice(seed ^ 0x5eed);
    let first = [0, 3, 1 << 40][dice.random_range(..3_usize)];
    let mut recorder = Recorder::new(scenario.board, scenario.settings);
    let mut at = 0;
    while at < PAIRS {
        let end = (at + dice.random_range(1..700)).min(PAIRS);
        let cause = legwise_protocol::message::GapCause::Skipped;
        recorder.feed_at(first + at as u64, &scenario.code_a[at..end], &scenario.code_b[at..end], cause);
        at = end;
    }
    recorder.end();
    (recorder, first)
}

/// An excursion record in the words of the second rule.
fn in_words(record: &Excursion, first: u64) -> Expected {
    let breach = &record.breach;
    Expected {
        first: (record.first_sample - first) as usize,
        last: (record.first_sample - first) as usize + record.samples as usize - 1,
        limits: breach.limits.bits(),
        worst_limit: breach.worst_limit,
        extreme_sample: (breach.extreme_sample - first) as usize,
        extreme_twice_uv: breach.extreme_twice_uv.into(),
        outside: breach.outside_samples,
        area_twice: breach.area_twice_uv_samples,
        dm_uv: (breach.dm.low.into(), breach.dm.high.into()),
        clipped: breach.clipped_samples,
        is_continued: matches!(record.part, Part::Middle | Part::Finish),
    }
}

#[test]
fn every_excursion_is_reported_to_the_sample_and_none_is_invented() {
    let mut seen = Seen::default();
    for seed in 0..SCENARIOS {
        let scenario = Scenario::new(seed);
        let verdict = verdict(&scenario);
        // The scenario is what it says: outside are exactly the samples that were pushed out.
        let pushed: Vec<usize> =
            scenario.injected.iter().flat_map(|one| one.first..one.first + one.samples).collect();
        let stray: Vec<_> = verdict.outside.iter().filter(|n| pushed.binary_search(n).is_err()).collect();
        assert_eq!((verdict.outside.len(), stray), (pushed.len(), vec![]), "seed {seed}");

        let (recorder, first) = run(&scenario, seed);
        let records = recorder.excursions();
        let words: Vec<Expected> = records.iter().map(|record| in_words(record, first)).collect();
        assert_eq!(words, verdict.excursions, "seed {seed}, {}", scenario.receiver.name);
        assert!(records.iter().all(|record| !record.is_edge_suspect), "seed {seed}");
        let cut = records.iter().filter(|record| record.is_cut).count();
        assert_eq!(cut, usize::from(verdict.is_open_at_end), "seed {seed}");

        let totals = recorder.totals();
        assert_eq!(totals.samples, PAIRS as u64);
        assert_eq!(totals.outside, verdict.outside.len() as u64);
        assert_eq!(totals.outside_by_limit, verdict.outside_by_limit, "seed {seed}");
        let begun = verdict.excursions.iter().filter(|one| !one.is_continued).count();
        assert_eq!(totals.excursions, begun as u64, "seed {seed}");
        assert_eq!((totals.edge_suspects, totals.gaps), (0, 0));
        compare_with_volts(&scenario, &records, first, &mut seen);
        seen.count(&scenario, &verdict);
    }
    println!("{SCENARIOS} scenarios: {seen:?}");
    seen.assert_variety();
}

/// What the scenarios had in them, so that a claim about all of them is a claim about something.
#[derive(Debug, Default)]
struct Seen {
    injected: usize,
    records: usize,
    alone: usize,
    clipped: u64,
    touching: usize,
    touching_exactly: usize,
    continued: usize,
    by_limit: [u64; Limit::COUNT],
    pushes: [usize; 3],
    at_block_edge: usize,
    worst_error_lsb: f64,
}

impl Seen {
    fn count(&mut self, scenario: &Scenario, verdict: &Verdict) {
        self.injected += scenario.injected.len();
        self.records += verdict.excursions.len();
        self.touching += scenario.touching;
        self.touching_exactly += scenario.touching_exactly;
        self.clipped += verdict.excursions.iter().map(|one| one.clipped).sum::<u64>();
        self.continued += verdict.excursions.iter().filter(|one| one.is_continued).count();
        for (sum, count) in self.by_limit.iter_mut().zip(verdict.outside_by_limit) {
            *sum += count;
        }
        for one in &scenario.injected {
            self.pushes[one.push as usize] += 1;
            self.at_block_edge += usize::from((one.first + 2) % 256 < 4);
        }
    }

    fn assert_variety(&self) {
        assert!(self.injected > 3_000 && self.alone > 300, "{self:?}");
        assert!(self.records - self.continued < self.injected, "rows must merge: {self:?}");
        assert!(self.clipped > 100 && self.continued > 100, "{self:?}");
        assert!(self.touching > 200 && self.touching_exactly > 60, "{self:?}");
        assert!(self.at_block_edge > 300, "{self:?}");
        assert!(self.by_limit.iter().all(|&count| count > 1_000), "{self:?}");
        assert!(self.pushes.iter().all(|&count| count > 300), "{self:?}");
        let all = [Push::LegA, Push::LegB, Push::Common];
        assert_eq!(all.map(|push| push as usize), [0, 1, 2]);
    }
}

/// Excursions that stand alone, against the voltages before the converter.
fn compare_with_volts(scenario: &Scenario, records: &[Excursion], first: u64, seen: &mut Seen) {
    let guard = 3 * scenario.settings.detection.hold_off_samples as usize;
    let end = |one: &Injected| one.first + one.samples;
    for (number, one) in scenario.injected.iter().enumerate() {
        let is_alone = (number == 0 || end(&scenario.injected[number - 1]) + guard < one.first)
            && scenario.injected.get(number + 1).is_none_or(|next| end(one) + guard < next.first);
        if !is_alone || one.samples as u64 > u64::from(scenario.settings.detection.longest_samples) {
            continue;
        }
        let found: Vec<&Excursion> =
            records.iter().filter(|record| record.first_sample == first + one.first as u64).collect();
        assert_eq!(found.len(), 1, "{one:?}");
        assert_eq!(found[0].samples as usize, one.samples, "{one:?}");
        assert_eq!(found[0].breach.outside_samples, one.samples as u64, "{one:?}");
        seen.alone += 1;
        compare_extreme(scenario, found[0], one, seen);
    }
}

/// The extreme: nearest code (half an LSB), then the rounding of the calibration (half a microvolt per
/// leg) and of the scale's mantissa (2^-31 of the reading). Rails may hide more.
fn compare_extreme(scenario: &Scenario, record: &Excursion, one: &Injected, seen: &mut Seen) {
    let breach = &record.breach;
    let range = one.first..one.first + one.samples;
    let (a, b) = (&scenario.leg_a_v[range.clone()], &scenario.leg_b_v[range]);
    let average: Vec<f64> = a.iter().zip(b).map(|(a, b)| (a + b) / 2.0).collect();
    let highest = |values: &[f64]| values.iter().copied().fold(f64::MIN, f64::max);
    let lowest = |values: &[f64]| values.iter().copied().fold(f64::MAX, f64::min);
    let truth = match breach.worst_limit {
        Limit::LegAHigh => highest(a),
        Limit::LegALow => lowest(a),
        Limit::LegBHigh => highest(b),
        Limit::LegBLow => lowest(b),
        Limit::AverageHigh => highest(&average),
        Limit::AverageLow => lowest(&average),
    };
    let reading = f64::from(breach.extreme_twice_uv) / 2.0 * 1e-6;
    if breach.clipped_samples > 0 {
        let is_understated = if breach.worst_limit.is_high() { reading <= truth } else { reading >= truth };
        assert!(is_understated || (reading - truth).abs() < boards::step_v(&scenario.board.legs[0]));
        return;
    }
    let step_v = boards::step_v(&scenario.board.legs[0]);
    let rounding_v = 0.5e-6 + truth.abs() * 2_f64.powi(-31);
    let error_v = (reading - truth).abs();
    assert!(error_v <= 0.5 * step_v + rounding_v + 1e-12, "{reading} against {truth}, step {step_v}");
    seen.worst_error_lsb = seen.worst_error_lsb.max(error_v / step_v);
}

#[test]
fn storms_coalesce_without_losing_a_count() {
    let (mut storms, mut coalesced) = (0, 0);
    for seed in 0..SCENARIOS {
        let mut scenario = Scenario::new(seed);
        let mut dice = dice(seed ^ 0x5708);
        scenario.settings.detection.longest_samples = u32::MAX;
        let verdict = verdict(&scenario);
        scenario.settings.detection.storm_after = dice.random_range(1..4);
        scenario.settings.detection.storm_samples = dice.random_range(300..3_000);
        let (recorder, first) = run(&scenario, seed);
        let (records, sums) = (recorder.excursions(), recorder.storms());

        let single = records.iter().map(|record| record.breach);
        let together: Vec<_> = single.chain(sums.iter().map(|storm| storm.breach)).collect();
        let sum = |of: fn(&Expected) -> u64| verdict.excursions.iter().map(of).sum::<u64>();
        let outside: u64 = together.iter().map(|breach| breach.outside_samples).sum();
        assert_eq!(outside, sum(|one| one.outside), "seed {seed}");
        let area: u64 = together.iter().map(|breach| breach.area_twice_uv_samples).sum();
        assert_eq!(area, sum(|one| one.area_twice), "seed {seed}");
        let clipped: u64 = together.iter().map(|breach| breach.clipped_samples).sum();
        assert_eq!(clipped, sum(|one| one.clipped), "seed {seed}");
        let count: u32 = sums.iter().map(|storm| storm.excursions).sum();
        assert_eq!(records.len() + count as usize, verdict.excursions.len(), "seed {seed}");
        let totals = recorder.totals();
        assert_eq!(totals.excursions, verdict.excursions.len() as u64);
        assert_eq!(totals.outside_by_limit, verdict.outside_by_limit, "seed {seed}");
        compare_storms(&verdict, &recorder, first);
        storms += sums.len();
        coalesced += count;
    }
    println!("{storms} storms of {coalesced} excursions");
    assert!(storms > 200 && coalesced > 1_000, "{storms} storms of {coalesced}");
}

/// Every storm against the excursions it stands for: those between its ends without a record.
fn compare_storms(verdict: &Verdict, recorder: &Recorder, first: u64) {
    let reported: Vec<u64> = recorder.excursions().iter().map(|record| record.first_sample).collect();
    for storm in recorder.storms() {
        let within: Vec<&Expected> = verdict
            .excursions
            .iter()
            .filter(|one| {
                let start = first + one.first as u64;
                (storm.first_sample..storm.first_sample + storm.samples).contains(&start)
                    && !reported.contains(&start)
            })
            .collect();
        assert_eq!(within.len(), storm.excursions as usize);
        assert_eq!(within[0].first as u64 + first, storm.first_sample);
        let last = within[within.len() - 1].last as u64;
        assert_eq!(first + last + 1, storm.first_sample + storm.samples);
        assert_eq!(storm.breach.outside_samples, within.iter().map(|one| one.outside).sum::<u64>());
        assert_eq!(storm.breach.limits.bits(), within.iter().fold(0, |bits, one| bits | one.limits));
        let low = within.iter().map(|one| one.dm_uv.0).min().unwrap();
        let high = within.iter().map(|one| one.dm_uv.1).max().unwrap();
        assert_eq!((i64::from(storm.breach.dm.low), i64::from(storm.breach.dm.high)), (low, high));
        assert!(within.iter().any(|one| {
            one.extreme_sample as u64 + first == storm.breach.extreme_sample
                && one.extreme_twice_uv == i64::from(storm.breach.extreme_twice_uv)
        }));
    }
}

#[test]
fn a_longer_storm_window_does_not_silence_what_follows() {
    // Windows are numbered by their length: after a change the present one may have a lower number.
    let board = boards::microvolt_board(500_000);
    let mut settings = settings::for_receiver(receivers::by_id(ReceiverId::Tia485A).unwrap(), 500_000_000);
    settings.reporting.spectrum_segments = 0;
    settings.detection.storm_samples = 512;
    let mut recorder = Recorder::new(board, settings);
    let quiet = vec![2_000_000; 100_000];
    let mut first = quiet.clone();
    first[90_000] = 13_000_000;
    recorder.feed(&first, &quiet);
    settings.detection.storm_samples = 50_000;
    settings.detection.storm_after = 2;
    recorder.change(settings);
    let mut burst = quiet.clone();
    for at in (1_000..90_000).step_by(10_000) {
        burst[at..at + 3].fill(13_000_000);
    }
    recorder.feed(&burst, &quiet);
    // One excursion before the change. Then windows of 50 000 from sample 100 000 on: five excursions in
    // the first, four in the second.
    let shape: Vec<u32> = recorder.pick(|message| match message {
        Message::Excursion(_) => Some(1),
        Message::Storm(storm) => Some(storm.excursions),
        _ => None,
    });
    assert_eq!(shape, [1, 1, 1, 3, 1, 1], "the storm of the second window is still open");
    recorder.end();
    assert_eq!(recorder.storms().iter().map(|storm| storm.excursions).collect::<Vec<_>>(), [3, 2]);
}

#[test]
fn an_alarm_is_raised_by_every_excursion_however_short() {
    let board = boards::microvolt_board(500_000);
    let mut settings = settings::for_receiver(receivers::by_id(ReceiverId::Tia485A).unwrap(), 500_000_000);
    settings.reporting.spectrum_segments = 0;
    for samples in [1, 2, 3, 40, 400] {
        for first in [0, 10, 200, 250, 255, 256, 300] {
            let mut leg_a = vec![1_000_000; 2_048];
            leg_a[first..first + samples].fill(12_000_001);
            let mut recorder = Recorder::new(board, settings);
            let mut has_alarmed = false;
            for (a, b) in leg_a.chunks(64).zip(vec![0; 2_048].chunks(64)) {
                recorder.feed(a, b);
                has_alarmed |= recorder.pipeline.take_alarm();
            }
            assert!(has_alarmed, "{samples} samples from {first}");
            assert!(!recorder.pipeline.take_alarm(), "over again");
        }
    }
    let mut quiet = examine(board, settings, &[12_000_000; 4_096], &[9_000_000; 4_096]);
    assert!(!quiet.pipeline.take_alarm());
}
