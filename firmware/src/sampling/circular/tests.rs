//! A converter that is not there, driven into every kind of trouble.

use super::*;
use crate::sampling::scan::{AlternatingLayout, BAD_CONVERSION, CodeWindow};
use proptest::prelude::*;
use proptest::test_runner::RngSeed;
use std::vec;
use std::vec::Vec;

const RING: usize = 100; // not a multiple of the scan: scans lie across the seam
const WORDS: u64 = 3;
const MARKER: u16 = 876;
const LAYOUT: AlternatingLayout = AlternatingLayout { marker: CodeWindow { low: 740, high: 1000 } };
/// Pairs per delivery.
const WANTED: usize = 8;

/// Codes of the legs at an instant: never the marker's, and every instant differs.
fn truth(instant: u64) -> [u16; 3] {
    [1100 + (instant % 1400) as u16, 2600 + (instant % 1399) as u16, MARKER]
}

/// Writes the truth into a ring, one word per tick; a scan per three ticks.
struct FakeConverter {
    ring: Vec<u16>,
    /// Ticks of the clock since power-on.
    ticks: u64,
    /// Tick of the first word after the restart.
    first_tick: u64,
    written: u64,
    /// Words that vanish before they reach the ring.
    vanishing: u64,
    /// Whether a vanished word raises the failure flag.
    is_honest: bool,
    has_failed: bool,
    is_stalled: bool,
    is_marker_cut: bool,
    /// Instant whose leg B conversion fails.
    bad_instant: Option<u64>,
    /// Ticks that pass while scans are copied, at the next look at `position`.
    ticks_during_copy: u64,
    restarts: u32,
}

impl FakeConverter {
    fn new() -> Self {
        Self {
            ring: vec![0; RING],
            ticks: 0,
            first_tick: 0,
            written: 0,
            vanishing: 0,
            is_honest: true,
            has_failed: false,
            is_stalled: false,
            is_marker_cut: false,
            bad_instant: None,
            ticks_during_copy: 0,
            restarts: 0,
        }
    }

    fn pass(&mut self, ticks: u64) {
        for _ in 0..ticks {
            let tick = self.ticks;
            self.ticks += 1;
            if tick < self.first_tick || self.is_stalled {
                continue;
            }
            if self.vanishing > 0 {
                self.vanishing -= 1;
                self.has_failed |= self.is_honest;
                continue;
            }
            let (instant, channel) = (tick / WORDS, (tick % WORDS) as usize);
            let mut word = truth(instant)[channel];
            if channel == 2 && self.is_marker_cut {
                word = 2000;
            }
            if channel == 1 && self.bad_instant == Some(instant) {
                word |= BAD_CONVERSION;
            }
            self.ring[(self.written % RING as u64) as usize] = word;
            self.written += 1;
        }
    }
}

impl CircularConverter for FakeConverter {
    type Word = u16;

    fn ring_words(&self) -> usize {
        RING
    }

    fn position(&mut self) -> usize {
        let position = (self.written % RING as u64) as usize;
        let ticks = core::mem::take(&mut self.ticks_during_copy);
        self.pass(ticks);
        position
    }

    fn word(&self, place: usize) -> u16 {
        self.ring[place]
    }

    fn elapsed_scans(&mut self) -> u64 {
        self.ticks / WORDS
    }

    fn has_failed(&mut self) -> bool {
        self.has_failed
    }

    fn restart(&mut self) -> u64 {
        self.has_failed = false;
        self.vanishing = 0;
        self.written = 0;
        self.restarts += 1;
        let instant = self.ticks / WORDS + 1;
        self.first_tick = instant * WORDS;
        instant
    }
}

type FakeSource = CircularSource<FakeConverter, AlternatingLayout>;

fn source() -> FakeSource {
    let legs = [crate::fakes::MICROVOLT_CODES; 2];
    let description = SourceDescription { sample_rate_mhz: 166_666_667, skew_ns: 2000, legs };
    CircularSource::new(FakeConverter::new(), LAYOUT, description)
}

/// Asks once; a delivery's index, length and overrun mark, after every pair was held against the truth.
fn take(source: &mut FakeSource) -> Result<Option<(u64, usize, Option<GapCause>)>, CircularError> {
    let (mut a, mut b) = ([0; WANTED], [0; WANTED]);
    match source.take(&mut a, &mut b)? {
        Taken::Pairs { first_sample, pairs, gap } => {
            for (n, instant) in (first_sample..).take(pairs).enumerate() {
                let [true_a, true_b, _] = truth(instant).map(i32::from);
                assert_eq!((a[n], b[n]), (true_a, true_b), "instant {instant}");
            }
            Ok(Some((first_sample, pairs, gap)))
        }
        Taken::Nothing => Ok(None),
        Taken::Finished => unreachable!("a converter has no end"),
    }
}

/// Lets scans pass one by one and takes whatever comes; deliveries in order.
fn run(source: &mut FakeSource, scans: u64) -> Vec<(u64, usize, Option<GapCause>)> {
    let mut deliveries = Vec::new();
    for _ in 0..scans {
        source.converter_mut().pass(WORDS);
        deliveries.extend(take(source).ok().flatten());
    }
    deliveries
}

#[test]
fn a_reader_in_time_gets_every_pair_in_order() {
    let mut source = source();
    let deliveries = run(&mut source, 5000);
    let first = deliveries[0].0;
    for (n, &(index, pairs, gap)) in deliveries.iter().enumerate() {
        assert_eq!((index, pairs, gap), (first + (n * WANTED) as u64, WANTED, None));
    }
    assert!(deliveries.len() > 600);
    assert_eq!(source.counts(), CircularCounts::default());
    assert_eq!(source.converter.restarts, 1);
}

#[test]
fn an_overrun_of_any_number_of_laps_jumps_the_index_by_what_was_lost() {
    for late_ticks in [101_u64, 250, 1000, 12_345, 1_000_000] {
        let mut source = source();
        let (index, pairs, _) = *run(&mut source, 100).last().unwrap();
        source.converter_mut().pass(late_ticks);
        // The truth of every delivered pair is checked by `take`: the index alone could lie.
        let (next, _, gap) = run(&mut source, 30)[0];
        assert!(gap == Some(GapCause::Overrun) && next > index + pairs as u64, "{late_ticks} ticks");
        assert_eq!(source.counts().overruns, 1);
        assert_eq!(run(&mut source, 30)[0].2, None, "said once");
    }
}

#[test]
fn a_reading_lost_by_the_converter_is_an_overrun_and_never_a_swap() {
    let mut source = source();
    run(&mut source, 50);
    source.converter_mut().vanishing = 1;
    let deliveries = run(&mut source, 100);
    assert_eq!(deliveries.iter().filter(|delivery| delivery.2 == Some(GapCause::Overrun)).count(), 1);
    assert_eq!((source.counts().overruns, source.converter.restarts), (1, 2));
}

#[test]
fn a_slip_nobody_reported_is_caught_by_the_marker_before_a_swapped_pair_gets_out() {
    for vanishing in [1, 2, 4, 5] {
        let mut source = source();
        run(&mut source, 50);
        source.converter_mut().is_honest = false;
        source.converter_mut().vanishing = vanishing;
        let deliveries = run(&mut source, 100); // every pair is held against the truth
        let gaps: Vec<_> = deliveries.iter().filter_map(|delivery| delivery.2).collect();
        assert_eq!(gaps, [GapCause::Resynchronised], "{vanishing}");
        assert_eq!((source.counts().wrong_markers, source.converter.restarts), (1, 2), "{vanishing}");
    }
}

#[test]
fn a_void_conversion_costs_its_own_pair_only() {
    let mut source = source();
    source.converter_mut().bad_instant = Some(500);
    let deliveries = run(&mut source, 1000);
    let mut expected = deliveries[0].0;
    let mut missing = Vec::new();
    for (index, pairs, gap) in deliveries {
        missing.extend(expected..index);
        expected = index + pairs as u64;
        assert_eq!(gap, None);
    }
    assert_eq!(missing, [500]);
    assert_eq!((source.counts().bad_conversions, source.converter.restarts), (1, 1));
}

#[test]
fn a_copy_that_is_overtaken_is_thrown_away() {
    let mut source = source();
    run(&mut source, 50);
    for ticks in [70, 95, 99, 150, 400] {
        // More passes between the first look at the position and the copy than the ring holds.
        source.converter_mut().pass(WORDS * WANTED as u64);
        source.converter_mut().ticks_during_copy = ticks;
        run(&mut source, 20);
    }
    assert!(source.counts().overruns >= 2);
}

#[test]
fn a_marker_that_never_comes_is_reported_and_its_scans_still_feed_the_watchdog() {
    let mut source = source();
    source.converter_mut().is_marker_cut = true;
    let mut error = None;
    for _ in 0..400 {
        source.converter_mut().pass(WORDS);
        error = error.or(take(&mut source).err());
    }
    assert_eq!(error, Some(CircularError::MarkerLost));
    assert!(source.progress() > 10);
    source.converter_mut().is_marker_cut = false;
    assert!(!run(&mut source, 50).is_empty(), "it recovers by itself");
}

#[test]
fn a_converter_that_stands_still_is_reported_and_feeds_no_watchdog() {
    let mut source = source();
    run(&mut source, 50);
    source.converter_mut().is_stalled = true;
    let mut error = None;
    let before = source.progress();
    for _ in 0..400 {
        source.converter_mut().pass(WORDS);
        error = error.or(take(&mut source).err());
    }
    assert_eq!(error, Some(CircularError::NotSampling));
    assert!(source.progress() - before <= WANTED as u64);
    source.converter_mut().is_stalled = false;
    assert_eq!(run(&mut source, 50)[0].2, Some(GapCause::Overrun), "and the gap is told");
}

proptest! {
    #![proptest_config(ProptestConfig {
        failure_persistence: None, rng_seed: RngSeed::Fixed(1), ..ProptestConfig::with_cases(2000)
    })]

    /// Any mixture of lateness, lost readings and silent slips: no pair is ever wrong, numbered twice
    /// or out of order (`take` holds each against the truth of its index).
    #[test]
    fn no_trouble_makes_a_wrong_pair(
        steps in prop::collection::vec((0_u64..60, 0_u64..20, 0_u64..40, any::<bool>(), 0_u64..900), 1..150),
    ) {
        let mut source = source();
        let mut expected = 0;
        for (scans, kind, words, is_honest, late) in steps {
            let converter = source.converter_mut();
            match kind {
                0 if is_honest => {
                    converter.is_honest = true;
                    converter.vanishing = words;
                }
                0 => {
                    converter.is_honest = false;
                    converter.vanishing = 1 + words % 2;
                    // Silent slips come singly: two that add up to a whole scan leave no trace to see.
                    converter.pass(3 * WORDS);
                }
                1 => converter.pass(late),
                2 => converter.ticks_during_copy = late / 4,
                _ => {}
            }
            for _ in 0..scans {
                source.converter_mut().pass(WORDS);
                if let Ok(Some((index, pairs, _))) = take(&mut source) {
                    prop_assert!(index >= expected);
                    expected = index + pairs as u64;
                }
            }
        }
    }
}
