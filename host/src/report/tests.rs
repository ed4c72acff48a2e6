//! Logs of known content, reported.

use super::*;
use crate::log::Origin;
use fixture::{ExcursionRow, Fixture, START_NS, extremes, night, options, quiet_totals};
use legwise_protocol::limits::{Limit, LimitSet, Window};
use legwise_protocol::message::Totals;
use legwise_protocol::receivers::ReceiverId;

pub(crate) mod fixture;
mod ladder;
mod lines;
mod long;
mod schema;
mod sources;

fn verdict_of(receiver: ReceiverId, totals: &Totals) -> Verdict {
    Fixture::single(receiver, totals).report().verdict
}

#[test]
fn a_quiet_bus_is_within_and_the_margin_is_that_of_the_nearest_leg() {
    let report = Fixture::single(ReceiverId::Tia485A, &quiet_totals(1_000_000)).report();
    assert_eq!(report.verdict, Verdict::Within);
    // Legs 1 to 4 V in -7..+12 V: 8 V above, 8 V below (leg A first in order); average 2 to 3 V: 9 V.
    assert_eq!(report.worst.margin_v, Some(8.0));
    assert_eq!((report.worst.leg_max_v, report.worst.leg_min_v), (Some(4.0), Some(1.0)));
    assert_eq!((report.worst.cm_max_v, report.worst.cm_min_v), (Some(3.0), Some(2.0)));
    assert_eq!(report.margins.len(), 6);
    assert_eq!(report.judged.terminal.as_ref().unwrap().margin_v, Some(8.0));
    assert_eq!(report.judged.average.as_ref().unwrap().margin_v, Some(9.0));
    assert!((report.recording.duration_s.unwrap() - 2.0).abs() < 1e-12);
}

#[test]
fn uncertainty_is_gain_offset_and_half_a_code() {
    let report = Fixture::single(ReceiverId::Tia485A, &quiet_totals(1000)).report();
    let of =
        |quantity| report.margins.iter().find(|m| m.quantity == quantity).unwrap().uncertainty_v.unwrap();
    // 0.1 % of 4 V, 5 mV, half of 7500000/2^10 = 7324.2 µV.
    assert!((of("leg-a-high") - (0.004 + 0.005 + 0.003_662_1)).abs() < 1e-7);
    // The average of 3 V: both legs alike, and |DM|/2 = 1.3 V is smaller.
    assert!((of("average-high") - (0.003 + 0.005 + 0.003_662_1)).abs() < 1e-7);
}

#[test]
fn a_small_margin_is_marginal_and_a_terminal_can_be_outside_while_the_average_is_not() {
    let high = |uv| Totals { leg_a: extremes((0, 1), (uv, 2)), ..quiet_totals(1000) };
    assert_eq!(verdict_of(ReceiverId::Tia485A, &high(9_000_000)), Verdict::Within);
    assert_eq!(verdict_of(ReceiverId::Tia485A, &high(9_000_001)), Verdict::Marginal);
    // 485 with VOS 2.5 V, 3 V differential and a ground 8.5 V off: VA 12.5 V, average 11 V.
    let beyond = Totals {
        outside: 5,
        outside_by_limit: [5, 0, 0, 0, 0, 0],
        excursions: 1,
        twice_cm: extremes((4_000_000, 1), (22_000_000, 2)),
        ..high(12_500_000)
    };
    let report = Fixture::single(ReceiverId::Tia485A, &beyond).report();
    assert_eq!(report.verdict, Verdict::Outside);
    assert_eq!(report.worst.margin_v, Some(-0.5));
    assert_eq!(report.judged.terminal.unwrap().verdict, Verdict::Outside);
    assert_eq!(report.judged.average.unwrap().verdict, Verdict::Marginal);
}

#[test]
fn what_allows_no_answer_is_not_called_within() {
    assert_eq!(verdict_of(ReceiverId::CanFaultTolerant, &quiet_totals(1000)), Verdict::CannotJudge);
    assert_eq!(verdict_of(ReceiverId::Tia485A, &Totals::default()), Verdict::CannotJudge);
    let clipped = Totals { clipped: 1, ..quiet_totals(1000) };
    assert_eq!(verdict_of(ReceiverId::Tia485A, &clipped), Verdict::CannotJudge);
    let empty = Fixture::new(Origin::Serial, None).report();
    assert_eq!((empty.verdict, empty.receiver.name), (Verdict::CannotJudge, "unknown"));
}

#[test]
fn edge_suspects_are_counted_apart_and_never_raise_the_verdict() {
    let mut fixture = Fixture::new(Origin::Recording, None);
    fixture.run(1, 800);
    fixture.settings(1, 0, ReceiverId::CanHighSpeed2003);
    let totals =
        Totals { outside: 2, outside_by_limit: [0, 0, 0, 0, 2, 0], edge_suspects: 2, ..quiet_totals(1000) };
    fixture.totals(1, &totals, Some("exhausted"));
    for number in [1, 2] {
        let row = ExcursionRow::whole(number, 100 * number, 1, Limit::AverageHigh, 15_000_000);
        fixture.excursion(1, ExcursionRow { edge_suspect: true, ..row });
    }
    let report = fixture.report();
    assert_eq!(report.verdict, Verdict::Within);
    assert_eq!((report.excursions.count, report.excursions.edge_suspects), (0, 2));
    assert_eq!(report.excursions.samples_outside, 2);
    assert!(report.excursions.list.iter().all(|entry| entry.is_edge_suspect));
    assert_eq!(report.worst.cm_max_v, Some(3.0));
    assert!(report.blind.statements.iter().any(|text| text.contains("800 ns apart")));
}

#[test]
fn parts_of_one_excursion_become_one_entry() {
    let report = night().report();
    let entry = &report.excursions.list[1];
    // Parts of 10 samples at 1 200 000, ..100 and ..200; the middle one went furthest.
    assert_eq!((entry.number, entry.first_sample, entry.samples), (Some(2), 1_200_000, 210));
    assert_eq!((entry.extreme_v, entry.extreme_sample), (12.13, 1_200_100));
    assert_eq!((entry.outside_samples, entry.is_cut, entry.has_waveform), (30, true, false));
    assert!((entry.area_v_s.unwrap() - 3.0 * 5e6 / 2e6 / fixture::RATE_HZ).abs() < 1e-15);
    let storm = &report.excursions.list[2];
    assert_eq!((storm.number, storm.coalesced, storm.beyond_v), (None, 42, Some(0.25)));
    assert!(report.excursions.list[0].has_waveform);
    assert_eq!((report.excursions.count, report.excursions.coalesced), (44, 42));
}

#[test]
fn lists_are_cut_but_counts_and_the_furthest_are_not() {
    let mut fixture = night();
    for number in 10..60 {
        let row = ExcursionRow::whole(
            number,
            3_000_000 + 1000 * number,
            5,
            Limit::LegBLow,
            -14_000_000 - 2 * number,
        );
        fixture.excursion(2, row);
    }
    let report = Report::from_log(&fixture.log, &options(7)).unwrap();
    assert_eq!((report.excursions.list.len(), report.excursions.list_truncated), (7, true));
    let first: Vec<_> =
        report.excursions.list.iter().map(|entry| (entry.moment.run, entry.first_sample)).collect();
    assert!(first.is_sorted(), "{first:?}");
    assert_eq!(report.excursions.furthest.len(), 20);
    assert!(report.excursions.furthest.iter().any(|entry| entry.extreme_v == 13.214));
    // 50 more in run 2, whose end was not seen: its totals are older than these rows.
    assert_eq!(report.excursions.count, 94);
}

#[test]
fn a_log_cut_off_counts_what_came_after_its_last_totals() {
    let mut fixture = Fixture::new(Origin::Recording, None);
    fixture.run(1, 0);
    fixture.settings(1, 0, ReceiverId::Tia485A);
    fixture.totals(1, &quiet_totals(1_000_000), None);
    let quiet = [(1_000_000, 4_000_000), (1_000_000, 4_000_000), (4_000_000, 6_000_000), (-3, 3)];
    fixture.summary(1, 750_000, 250_000, quiet, 9);
    fixture.summary(1, 1_000_000, 250_000, quiet, 0);
    let worse = [(1_000_000, 11_500_000), quiet[1], quiet[2], quiet[3]];
    fixture.summary(1, 1_250_000, 250_000, worse, 0);
    let report = fixture.report();
    assert_eq!(report.recording.pairs, 1_500_000);
    assert!(!report.recording.is_complete);
    assert_eq!(report.excursions.samples_outside, 0, "summaries inside the totals are not counted again");
    assert_eq!((report.worst.margin_v, report.verdict), (Some(0.5), Verdict::Marginal));
    let moment = report.worst.moment.unwrap();
    assert_eq!((moment.sample, moment.within_samples), (1_250_000, 250_000));
}

#[test]
fn without_any_totals_summaries_and_excursions_make_the_account() {
    let mut fixture = Fixture::new(Origin::Recording, None);
    fixture.run(1, 0);
    fixture.settings(1, 0, ReceiverId::Tia485A);
    let spans = [(1_000_000, 12_500_000), (1_000_000, 4_000_000), (4_000_000, 6_000_000), (-3, 3)];
    fixture.summary(1, 0, 250_000, spans, 12);
    fixture.excursion(1, ExcursionRow::whole(1, 5000, 12, Limit::LegAHigh, 25_000_000));
    let report = fixture.report();
    assert_eq!(report.verdict, Verdict::Outside);
    assert_eq!((report.excursions.count, report.excursions.samples_outside), (1, 12));
    // The excursion knows the sample; the summary knew only the interval.
    let moment = report.worst.moment.unwrap();
    assert_eq!((moment.sample, moment.within_samples), (5000, 1));
}

#[test]
fn runs_add_up_and_the_time_between_them_is_lost_time() {
    let report = night().report();
    assert_eq!(report.recording.pairs, 59_990_000);
    assert_eq!(report.recording.runs.len(), 2);
    // 10 000 pairs by overrun; 10 s between the runs.
    assert_eq!((report.coverage.gap_count, report.coverage.gap_samples), (2, 10_000));
    assert!((report.coverage.gap_s.unwrap() - 10.02).abs() < 1e-9);
    assert!((report.coverage.share.unwrap() - 119.98 / 130.0).abs() < 1e-9);
    let causes: Vec<_> = report.coverage.gaps.iter().map(|gap| gap.cause.as_str()).collect();
    assert_eq!(causes, ["overrun", "restart"]);
    assert_eq!(report.coverage.link.missing_frames, 3);
    assert_eq!(report.coverage.given_up.snippet_parts, 5);
}

#[test]
fn moments_are_given_in_utc_and_local_time() {
    let report = night().report();
    let moment = report.worst.moment.unwrap();
    // Sample 1 000 015 at 500 000 per second: two seconds (and 30 µs) after 01:00:00 UTC; zone one hour
    // east.
    assert_eq!(START_NS % 1_000_000_000, 0);
    assert_eq!(moment.utc.as_deref(), Some("2026-03-01T01:00:02.000Z"));
    assert_eq!(moment.local.as_deref(), Some("2026-03-01T02:00:02.000+01:00"));
    assert_eq!(moment.uncertainty_s, Some(0.002));
    let without = Fixture::single(ReceiverId::Tia485A, &quiet_totals(1000)).report();
    let moment = without.worst.moment.unwrap();
    // Leg A's upper limit is the first of the two with 8 V left; its reading was sample 20.
    assert_eq!((moment.utc, moment.seconds), (None, Some(20.0 / fixture::RATE_HZ)));
}

#[test]
fn limits_of_the_users_own_are_marked_and_a_change_is_told() {
    let mut fixture = Fixture::new(Origin::Recording, None);
    fixture.run(1, 0);
    fixture.settings(1, 0, ReceiverId::Tia485A);
    let own = LimitSet { terminal: Some(Window::from_millivolts(-15_000, 15_000)), average: None };
    fixture.settings_with(1, 400, ReceiverId::Custom, own);
    fixture.totals(1, &quiet_totals(1000), Some("exhausted"));
    let report = fixture.report();
    assert_eq!((report.receiver.name, report.receiver.is_custom), ("custom", true));
    assert_eq!(report.receiver.pairs_under_other_limits, 400);
    assert!(report.receiver.threshold.is_none() && report.judged.average.is_none());
    assert_eq!(report.levels.judgements[0].finding, "not-judged");
    // Rails of the example board, -15 and +14.993 V, lie on and inside these limits.
    assert_eq!(report.converter.are_rails_inside_limits, Some(true));
    assert_eq!(report.margins.len(), 4);
}

#[test]
fn levels_are_medians_weighted_by_samples() {
    let fixture = Fixture::single(ReceiverId::Tia485A, &quiet_totals(1000));
    // One interval with a wild level but few samples moves nothing.
    for (interval, (idle_uv, samples)) in
        [(20_000, 500_000), (21_000, 500_000), (900_000, 10)].iter().enumerate()
    {
        fixture.levels(1, interval as i64 * 1_000_000, [Some((*idle_uv, *samples)), None, None]);
    }
    let report = fixture.report();
    assert_eq!(report.levels.idle_v, Some(0.021));
    assert_eq!(report.levels.driven_high_v, None);
    assert_eq!(report.levels.idle_spread.unwrap().p95_v, 0.9);
    let idle = &report.levels.judgements[0];
    assert_eq!((idle.subject, idle.finding), ("idle", "weak"));
    assert!(idle.text.contains("weak bias"), "{}", idle.text);
}

#[test]
fn an_idle_can_bus_near_zero_is_as_it_should_be() {
    let fixture = Fixture::single(ReceiverId::CanHighSpeed2003, &quiet_totals(1000));
    fixture.levels(1, 0, [Some((8_000, 800_000)), Some((2_000_000, 200_000)), None]);
    let report = fixture.report();
    let findings: Vec<_> = report.levels.judgements.iter().map(|j| (j.subject, j.finding)).collect();
    // Recessive at 0.5 V or less, dominant from 0.9 V on (TI SN65HVD23x); recessive mean 2.5 V.
    assert_eq!(findings, [("idle", "good"), ("driven-high", "good"), ("cm", "good")]);
    assert!(report.levels.bias_candidates.is_empty());
}

#[test]
fn lines_come_out_of_the_stored_spectra_with_their_amplitude() {
    let report = night().report();
    let common = report.spectrum.common.unwrap();
    assert_eq!(common.lines.len(), 1);
    // 0.75 V on bin 41 of 1024 at 500 kHz; power codes are good for 0.024 % of the amplitude.
    assert!((common.lines[0].amplitude_v / 0.75 - 1.0).abs() < 1e-3, "{:?}", common.lines[0]);
    assert!((common.lines[0].frequency_hz - 41.0 * 500_000.0 / 1024.0).abs() < 1.0);
    let differential = report.spectrum.differential.unwrap();
    assert!((differential.lines[0].amplitude_v / 0.012 - 1.0).abs() < 1e-3);
    // Floor 4e-10 V²/Hz: 20 µV/√Hz.
    assert!((differential.noise_floor_v_per_rthz / 2e-5 - 1.0).abs() < 5e-3);
}
