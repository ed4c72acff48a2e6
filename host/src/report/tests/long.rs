//! A long log: counts stay exact and lists stay short. (How long it takes is measured, not tested.)

use super::fixture::{ExcursionRow, Fixture, RATE_HZ, START_NS, quiet_totals, tone_density};
use crate::log::Origin;
use crate::report::{Report, Verdict};
use legwise_protocol::limits::Limit;
use legwise_protocol::message::Totals;
use legwise_protocol::receivers::ReceiverId;

/// `seconds` of a bus with a summary every half second, levels every two, spectra of both modes every
/// two, and two excursions a second. The end was not seen, so that summaries count.
pub(crate) fn long_log(seconds: i64) -> Fixture {
    let mut fixture = Fixture::new(Origin::Serial, Some("end of the line"));
    let rate = RATE_HZ as i64;
    fixture.log.connection().execute_batch("BEGIN").unwrap();
    fixture.run(1, 0);
    fixture.settings(1, 0, ReceiverId::Tia485A);
    fixture.clock(1, START_NS, seconds);
    let spans =
        [(1_000_000, 12_500_000), (1_000_000, 4_000_000), (4_000_000, 6_000_000), (-2_500_000, 2_600_000)];
    let densities = [tone_density(1e-10, 41, 0.5), tone_density(1e-9, 100, 0.05)];
    for second in 0..seconds {
        for half in 0..2 {
            let first_sample = second * rate + half * rate / 2;
            fixture.summary(1, first_sample, rate / 2, spans, 3);
            let row = ExcursionRow::whole(
                2 * second + half + 1,
                first_sample + 1000,
                3,
                Limit::LegAHigh,
                24_500_000,
            );
            fixture.excursion(1, ExcursionRow { extreme_twice_uv: row.extreme_twice_uv + second, ..row });
        }
        if second % 2 == 0 {
            fixture.levels(
                1,
                second * rate,
                [
                    Some((254_000 + second % 100, 500_000)),
                    Some((2_100_000, 250_000)),
                    Some((-2_100_000, 250_000)),
                ],
            );
            for (mode, density) in (0..).zip(&densities) {
                fixture.spectrum(1, second * rate, mode, density, 100);
            }
        }
    }
    let early = Totals { outside: 600, excursions: 200, ..quiet_totals(100 * rate as u64) };
    fixture.totals(1, &early, None);
    fixture.log.connection().execute_batch("COMMIT").unwrap();
    fixture
}

#[test]
fn an_hours_log_is_counted_exactly_and_listed_briefly() {
    let report = long_log(3600).report();
    assert_long(&report, 3600);
    assert!(!report.excursions.list_truncated);
    assert_eq!(report.excursions.list.len(), 7200);
}

pub(crate) fn assert_long(report: &Report, seconds: u64) {
    assert_eq!(report.verdict, Verdict::Outside);
    assert_eq!(report.recording.pairs, seconds * RATE_HZ as u64);
    assert_eq!(report.excursions.count, 2 * seconds);
    assert_eq!(report.excursions.samples_outside, 6 * seconds);
    assert_eq!(report.excursions.furthest.len(), 20);
    let last = report.excursions.furthest.last().unwrap();
    assert!(last.moment.seconds.unwrap() > seconds as f64 - 1.0, "the extreme grows to the end");
    let common = report.spectrum.common.as_ref().unwrap();
    assert_eq!(common.spectra, seconds / 2);
    assert!((common.lines[0].amplitude_v / 0.5 - 1.0).abs() < 1e-3);
    assert_eq!(report.levels.intervals, seconds / 2);
}
