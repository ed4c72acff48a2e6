//! The text says what the report holds, on a page of 100 columns, with and without colour.

use super::layout::{WIDTH, width};
use super::*;
use crate::log::Origin;
use crate::report::tests::fixture::{ExcursionRow, Fixture, night, quiet_totals};
use legwise_protocol::limits::Limit;
use legwise_protocol::message::Totals;
use legwise_protocol::receivers::{ReceiverId, TABLE};

fn without_colour(text: &str) -> String {
    let mut plain = String::new();
    let mut rest = text;
    while let Some((before, after)) = rest.split_once('\u{1b}') {
        plain.push_str(before);
        rest = after.split_once('m').map_or("", |(_, rest)| rest);
    }
    plain + rest
}

#[test]
fn every_kind_of_report_keeps_to_the_page() {
    let mut reports = vec![night().report(), Fixture::new(Origin::Serial, None).report()];
    for receiver in &TABLE {
        let fixture = Fixture::single(receiver.id, &quiet_totals(1_000_000));
        fixture.levels(1, 0, [Some((254_000, 500_000)), Some((2_000_000, 9)), Some((-2_000_000, 9))]);
        reports.push(fixture.report());
    }
    let mut wide = night();
    for number in 100..150 {
        let row =
            ExcursionRow::whole(number, number * 100_000, 90_000_000, Limit::AverageLow, -1_999_000_000);
        wide.excursion(2, row);
        wide.storm(2, number * 100_000 + 50_000, (123_456, 0), 1_999_000_000);
    }
    reports.push(wide.report());
    for report in &reports {
        let text = render(report, Style::PLAIN);
        let too_wide: Vec<_> = text.lines().filter(|line| width(line) > WIDTH).collect();
        assert!(too_wide.is_empty(), "{too_wide:#?}");
        assert!(text.lines().all(|line| line == line.trim_end()), "no line ends in blanks");
    }
}

#[test]
fn colour_adds_nothing_but_colour() {
    let report = night().report();
    let plain = render(&report, Style::PLAIN);
    let coloured = render(&report, Style::COLOURED);
    assert!(!plain.contains('\u{1b}'));
    assert!(coloured.contains('\u{1b}'));
    assert_eq!(without_colour(&coloured), plain);
}

#[test]
fn the_first_lines_answer_the_question() {
    let text = render(&night().report(), Style::PLAIN);
    let top: String = text.lines().take(6).collect::<Vec<_>>().join("\n");
    assert!(top.starts_with("OUTSIDE LIMITS\n"), "{top}");
    assert!(top.contains("44 times") && top.contains("leg A, upper limit: +13.214 V"), "{top}");
    assert!(top.contains("-1.214 V (±22 mV)"), "{top}");
    assert!(
        top.contains("2026-03-01 02:00:02.000 local (+01:00), 2026-03-01 01:00:02.000 UTC, ±2.000 ms"),
        "{top}"
    );
    assert!(top.contains("cabinet 7, node 12"), "{top}");
}

#[test]
fn each_verdict_is_said_in_words_with_its_reason() {
    let say = |receiver, totals: &Totals| render(&Fixture::single(receiver, totals).report(), Style::PLAIN);
    let within = say(ReceiverId::Tia485A, &quiet_totals(1000));
    assert!(within.starts_with("WITHIN LIMITS\n") && within.contains("by 8.000 V or more"), "{within}");
    assert!(within.contains("point not named") && within.contains("into the recording (no clock)"));
    let near = Totals {
        leg_b: crate::report::tests::fixture::extremes((-6_500_000, 1), (4_000_000, 2)),
        ..quiet_totals(1000)
    };
    let marginal = say(ReceiverId::Tia485A, &near);
    assert!(marginal.starts_with("MARGINAL\n") && marginal.contains("only 500.0 mV"), "{marginal}");
    let clipped = say(ReceiverId::Tia485A, &Totals { clipped: 1, ..quiet_totals(1000) });
    assert!(clipped.starts_with("CANNOT JUDGE\n") && clipped.contains("1 pair stood at a rail"), "{clipped}");
    let windowless = say(ReceiverId::CanFaultTolerant, &quiet_totals(1000));
    assert!(windowless.contains("no window against a common"), "{windowless}");
}

#[test]
fn all_sections_are_there_in_order() {
    let text = render(&night().report(), Style::PLAIN);
    let mut rest = text.as_str();
    for title in [
        "── Examined ─",
        "── Limits ─",
        "── Margins ─",
        "── Excursions ─",
        "── Levels ─",
        "── Sources in the spectrum ─",
        "── What could not be seen ─",
        "── Before acting on this ─",
    ] {
        rest = rest.split_once(title).unwrap_or_else(|| panic!("{title} is missing or out of order")).1;
    }
    for phrase in ["Protective earth stays connected", "power off", "licensed people"] {
        assert!(text.contains(phrase), "{phrase}");
    }
}

#[test]
fn limits_from_memory_are_marked() {
    let report = Fixture::single(ReceiverId::Tia422B, &quiet_totals(1000)).report();
    let text = render(&report, Style::PLAIN);
    let terminal = text.lines().find(|line| line.contains("each terminal")).unwrap();
    assert!(terminal.contains("FROM MEMORY"), "{terminal}");
    let average = text.lines().find(|line| line.trim_start().starts_with("average  ")).unwrap();
    assert!(average.contains("verified in a secondary source"), "{average}");
}
