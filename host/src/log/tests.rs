//! The log against what it promises: everything comes back, nothing committed gets lost.

use super::fixtures::*;
use super::*;
use crate::spectrum::rung::{BinTable, RungSpectra};
use legwise_protocol::bytes::Bytes;
use legwise_protocol::framing::DeviceFrame;
use legwise_protocol::limits::{Limit, LimitMask};
use legwise_protocol::message::*;
use legwise_protocol::units::Span;
use rusqlite::{Connection, Row};
use std::path::Path;

mod disk;
mod files;

fn store_all(log: &mut Log, frames: &[DeviceFrame]) {
    for (index, frame) in frames.iter().enumerate() {
        log.store(frame, at_ms(index as i64)).unwrap();
    }
}

fn only<T>(log: &Log, sql: &str, read: impl FnOnce(&Row<'_>) -> T) -> T {
    log.connection().query_row(sql, [], |row| Ok(read(row))).unwrap()
}

fn get<T: rusqlite::types::FromSql>(row: &Row<'_>, column: &str) -> T {
    row.get(column).unwrap_or_else(|error| panic!("{column}: {error}"))
}

fn unsigned(row: &Row<'_>, column: &str) -> u64 {
    get::<i64>(row, column) as u64
}

fn span(row: &Row<'_>, low: &str, high: &str) -> Span {
    match (get(row, low), get(row, high)) {
        (Some(low), Some(high)) => Span { low, high },
        _ => Span::EMPTY,
    }
}

fn read_breach(row: &Row<'_>) -> Breach {
    Breach {
        limits: LimitMask::from_bits_cut(get(row, "limits")),
        worst_limit: Limit::ALL[get::<u8>(row, "worst_limit") as usize],
        extreme_twice_uv: get(row, "extreme_twice_uv"),
        extreme_sample: unsigned(row, "extreme_sample"),
        outside_samples: unsigned(row, "outside_samples"),
        area_twice_uv_samples: unsigned(row, "area_twice_uv_samples"),
        dm: span(row, "dm_low_uv", "dm_high_uv"),
        clipped_samples: unsigned(row, "clipped_samples"),
    }
}

fn read_hello(row: &Row<'_>) -> Hello {
    let version: String = get(row, "firmware_version");
    let mut numbers = version.split('.').map(|number| number.parse().unwrap());
    let mut next = || numbers.next().unwrap();
    Hello {
        wire_version: get(row, "wire_version"),
        firmware_version: (next(), next(), next()),
        board: Bytes::from_slice_cut(get::<String>(row, "board").as_bytes()),
        serial: get::<Option<String>>(row, "serial").map_or(0, |serial| serial.parse().unwrap()),
        reset_cause: match get::<String>(row, "reset_cause").as_str() {
            "brown-out" => ResetCause::BrownOut,
            other => panic!("{other}"),
        },
        sample_rate_mhz: unsigned(row, "sample_rate_mhz"),
        skew_ns: get(row, "skew_ns"),
        legs: serde_json::from_str(&get::<String>(row, "legs")).unwrap(),
    }
}

fn read_summary(row: &Row<'_>) -> Summary {
    Summary {
        first_sample: unsigned(row, "first_sample"),
        samples: get(row, "samples"),
        leg_a: span(row, "leg_a_low_uv", "leg_a_high_uv"),
        leg_b: span(row, "leg_b_low_uv", "leg_b_high_uv"),
        twice_cm: span(row, "cm_low_twice_uv", "cm_high_twice_uv"),
        dm: span(row, "dm_low_uv", "dm_high_uv"),
        twice_cm_mean_uv: get::<Option<i32>>(row, "cm_mean_twice_uv").unwrap_or(0),
        clipped: get(row, "clipped"),
        outside: get(row, "outside"),
        excursions: get(row, "excursions"),
        alarm: get(row, "alarm"),
    }
}

fn read_excursion(row: &Row<'_>) -> Excursion {
    Excursion {
        number: unsigned(row, "excursion"),
        first_sample: unsigned(row, "first_sample"),
        samples: get(row, "samples"),
        breach: read_breach(row),
        part: [Part::Whole, Part::Begin, Part::Middle, Part::Finish][get::<u8>(row, "part") as usize],
        is_edge_suspect: get(row, "edge_suspect"),
        is_cut: get(row, "cut"),
    }
}

fn read_levels(row: &Row<'_>) -> Levels {
    let level = |dm_uv, samples| {
        get::<Option<i32>>(row, dm_uv).map(|dm_uv| Level { dm_uv, samples: get(row, samples) })
    };
    let plateau = |samples, uv| Plateau { samples: get(row, samples), twice_cm_uv: get(row, uv) };
    Levels {
        first_sample: unsigned(row, "first_sample"),
        samples: get(row, "samples"),
        idle: level("idle_uv", "idle_samples"),
        driven_high: level("high_uv", "high_samples"),
        driven_low: level("low_uv", "low_samples"),
        mid_samples: get(row, "mid_samples"),
        idle_cm: plateau("cm_idle_samples", "cm_idle_twice_uv"),
        high_cm: plateau("cm_high_samples", "cm_high_twice_uv"),
        low_cm: plateau("cm_low_samples", "cm_low_twice_uv"),
    }
}

fn read_snippet(row: &Row<'_>) -> SnippetPart {
    SnippetPart {
        excursion: unsigned(row, "excursion"),
        first_sample: unsigned(row, "first_sample"),
        samples: get(row, "samples"),
        part: get(row, "part"),
        more: get(row, "more"),
        blocks: Bytes::from_slice_cut(&get::<Vec<u8>>(row, "blocks")),
    }
}

fn read_storm(row: &Row<'_>) -> Storm {
    Storm {
        excursions: get(row, "excursions"),
        edge_suspects: get(row, "edge_suspects"),
        first_sample: unsigned(row, "first_sample"),
        samples: unsigned(row, "samples"),
        breach: read_breach(row),
    }
}

#[test]
fn every_message_comes_back_as_it_was() {
    let mut log = temporary();
    store_all(&mut log, &frames(BOOT, one_of_each()));
    log.commit().unwrap();

    assert_eq!(only(&log, "SELECT * FROM run", read_hello), hello());
    assert_eq!(only(&log, "SELECT boot_id FROM run", |row| row.get_unwrap::<_, u32>(0)), BOOT);
    let (receiver, stored): (String, String) =
        only(&log, "SELECT receiver, settings FROM settings", |row| (row.get_unwrap(0), row.get_unwrap(1)));
    assert_eq!(receiver, "tia485a");
    assert_eq!(serde_json::from_str::<Settings>(&stored).unwrap(), settings());
    assert_eq!(only(&log, "SELECT * FROM summary", read_summary), summary(1000));
    assert_eq!(only(&log, "SELECT * FROM excursion", read_excursion), excursion(1));
    assert_eq!(only(&log, "SELECT * FROM storm", read_storm), storm());
    assert_eq!(only(&log, "SELECT * FROM snippet", read_snippet), snippet());
    let cause: String =
        only(&log, "SELECT cause FROM gap WHERE first_sample = 101 AND samples = 102", |row| {
            row.get_unwrap(0)
        });
    assert_eq!(cause, "resynchronised");
    assert_eq!(only(&log, "SELECT * FROM levels", read_levels), levels());
    let account: (String, String) =
        only(&log, "SELECT totals, end_cause FROM totals", |row| (row.get_unwrap(0), row.get_unwrap(1)));
    assert_eq!(serde_json::from_str::<Totals>(&account.0).unwrap(), totals(7200));
    assert_eq!(account.1, "stopped");
    let given_up =
        only(&log, "SELECT snippet_parts, records FROM loss", |row| (row.get_unwrap(0), row.get_unwrap(1)));
    assert_eq!(given_up, (111_u32, 112_u32));
    let reply: String = only(&log, "SELECT text FROM note WHERE kind = 'reply'", |row| row.get_unwrap(0));
    assert_eq!(reply, "request 121 was answered Unsupported");
}

#[test]
fn spectra_come_back_whole() {
    let mut log = temporary();
    store_all(&mut log, &frames(BOOT, one_of_each()));
    for (mode, seed) in [(0, 5_u16), (1, 9)] {
        let sql = format!("SELECT * FROM spectrum WHERE mode = {mode}");
        let (codes, figures) = only(&log, &sql, |row| {
            let figures = ["first_sample", "rung", "span_samples", "points", "segments", "skipped"];
            (get::<Vec<u8>>(row, "codes"), figures.map(|column| get::<i64>(row, column)))
        });
        assert_eq!(figures, [1000, 3, 61, 512, 62, 63]);
        assert_eq!(codes, (0..257).flat_map(|bin: u16| (bin + seed).to_le_bytes()).collect::<Vec<_>>());
    }
}

#[test]
fn spectra_of_both_modes_come_back_whole_in_order_of_time() {
    let mut log = temporary();
    store_all(&mut log, &frames(BOOT, one_of_each()));
    // An earlier boot is an earlier run; within a run by sample, whatever the order of arrival.
    let later = spectra(900, SegmentSet::Driven, 11).map(Message::Spectra);
    let first = spectra(70, SegmentSet::Idle, 13).map(Message::Spectra);
    store_all(&mut log, &frames(BOOT + 1, later.into_iter().chain(first)));
    assert_eq!(only(&log, "SELECT DISTINCT other FROM spectra", |row| row.get_unwrap::<_, i64>(0)), 67);
    let mut seen = Vec::new();
    let passed_over = spectra::visit(log.connection(), |run, spectra: &RungSpectra| {
        seen.push((run, spectra.clone()));
        Ok::<(), rusqlite::Error>(())
    });
    assert_eq!(passed_over.unwrap(), 0);
    let expected = |first_sample, set, seed, rate_hz| RungSpectra {
        rung: 1,
        rate_hz,
        points: 256,
        set,
        segments: 65,
        skipped: 66,
        is_overlapped: false,
        other: 67,
        first_sample,
        span_samples: 64,
        first_bin: 30,
        bins: (30..130).map(|bin| BinTable::new().decode(bin_codes(bin, seed).to_bytes())).collect(),
    };
    let all = [
        (1, expected(1000, SegmentSet::Driven, 9, 62_500.0)),
        (1, expected(1000, SegmentSet::Idle, 5, 62_500.0)),
        (2, expected(70, SegmentSet::Idle, 13, 0.0)),
        (2, expected(900, SegmentSet::Driven, 11, 0.0)),
    ];
    assert_eq!(seen, all);
}

#[test]
fn stored_spectra_that_cannot_be_read_are_counted_and_passed_over() {
    let mut log = temporary();
    for first_sample in 0..7 {
        let parts = spectra(first_sample, SegmentSet::Idle, 1).map(Message::Spectra);
        store_all(&mut log, &frames(BOOT, parts));
    }
    log.commit().unwrap();
    for (first_sample, change) in [
        (0, "segment_set = 'resting'"),
        (1, "codes = x'0011223344556677'"),
        (2, "first_bin = -1"),
        (3, "rung = 256"),
        (4, "segments = -7"),
        (5, "skipped = 0"),
    ] {
        let sql = format!("UPDATE spectra SET {change} WHERE first_sample = {first_sample}");
        assert_eq!(log.connection().execute(&sql, []).unwrap(), 1);
    }
    let mut seen = Vec::new();
    let passed_over = spectra::visit(log.connection(), |_, spectra: &RungSpectra| {
        seen.push((spectra.first_sample, spectra.is_overlapped));
        Ok::<(), LogError>(())
    });
    assert_eq!((passed_over.unwrap(), seen), (5, vec![(5, true), (6, false)]));
    let stopped = spectra::visit(log.connection(), |_, _| Err(LogError::Busy));
    assert!(matches!(stopped, Err(LogError::Busy)), "the caller can stop");
}

#[test]
fn empty_spans_and_missing_levels_are_null_and_come_back_empty() {
    let quiet = Summary { first_sample: 7, ..Summary::default() };
    let mut log = temporary();
    store_all(&mut log, &frames(BOOT, [Message::Summary(quiet), Message::Levels(Levels::default())]));
    assert_eq!(only(&log, "SELECT * FROM summary WHERE leg_a_low_uv IS NULL", read_summary), quiet);
    assert_eq!(only(&log, "SELECT * FROM levels WHERE idle_uv IS NULL", read_levels), Levels::default());
}

#[test]
fn kept_messages_sent_again_change_nothing() {
    let mut log = temporary();
    let sent = frames(BOOT, one_of_each());
    store_all(&mut log, &sent);
    log.commit().unwrap();
    let before = dump(&log);
    let kept: Vec<_> = sent.into_iter().filter(|frame| frame.message.is_kept()).collect();
    assert_eq!(kept.len(), 8);
    for frame in &kept {
        let stored = log.store(frame, at_ms(15)).unwrap();
        let expected = if matches!(frame.message, Message::End(_)) { Stored::New } else { Stored::Repeated };
        assert_eq!(stored, expected);
    }
    log.commit().unwrap();
    assert_eq!(dump(&log), before);
}

#[test]
fn each_boot_has_its_run_also_without_a_greeting() {
    let mut log = temporary();
    store_all(&mut log, &frames(1, [Message::Summary(summary(0))]));
    store_all(&mut log, &frames(2, [Message::Hello(hello()), Message::Summary(summary(0))]));
    store_all(&mut log, &frames(1, [Message::Gap(gap())]));
    assert_eq!(count(&log, "run"), 2);
    let unknown: i64 =
        only(&log, "SELECT run FROM run WHERE boot_id = 1 AND legs IS NULL", |row| row.get_unwrap(0));
    assert_eq!(only(&log, "SELECT run FROM gap", |row| row.get_unwrap::<_, i64>(0)), unknown);
    assert_eq!(count(&log, "summary"), 2);
}

#[test]
fn the_newest_account_stays_whatever_the_order() {
    let mut log = temporary();
    let mut sent = frames(BOOT, [10, 20, 30].map(|samples| Message::Totals(totals(samples))));
    sent.swap(1, 2);
    store_all(&mut log, &sent);
    let stored: String = only(&log, "SELECT totals FROM totals", |row| row.get_unwrap(0));
    assert_eq!(serde_json::from_str::<Totals>(&stored).unwrap(), totals(30));
}

#[test]
fn a_clock_row_a_second_holds_the_least_delayed_frame() {
    let mut log = temporary();
    // A frame per 100 ms of counter; arrivals are late by 0, 30, 60 and 90 ms in turn.
    let mut sent = frames(BOOT, [Message::Hello(hello())]);
    sent.extend(frames(BOOT, (0..50).map(|_| Message::Totals(totals(1)))));
    for (index, frame) in sent.iter_mut().enumerate() {
        frame.envelope.sample = 50_000 * index as u64;
        log.store(frame, at_ms(100 * index as i64 + 30 * (index as i64 % 4))).unwrap();
    }
    log.finish().unwrap();
    let mut statement = log.connection().prepare("SELECT sample, utc_ns FROM clock").unwrap();
    let pairs: Vec<(i64, i64)> =
        statement.query_map([], |row| Ok((row.get(0)?, row.get(1)?))).unwrap().map(Result::unwrap).collect();
    assert!((5..=7).contains(&pairs.len()), "{} rows in 5 s", pairs.len());
    for (sample, utc_ns) in &pairs {
        assert_eq!(utc_ns - NOW_NS, sample * 2000, "2 us per sample and no delay");
    }
    let clock = clock::RunClock::load(&log, 1).unwrap().unwrap();
    assert_eq!(clock.at(500_000).utc_ns, NOW_NS + 1_000_000_000);
    assert_eq!(count(&log, "note"), 0);
}

#[test]
fn a_step_of_the_computer_clock_is_noted() {
    let mut log = temporary();
    for (index, frame) in frames(BOOT, (0..30).map(|_| Message::Totals(totals(1)))).iter().enumerate() {
        let mut arrival = at_ms(200 * index as i64);
        arrival.utc_ns -= if index >= 15 { 3_600_000_000_000 } else { 0 };
        log.store(frame, arrival).unwrap();
    }
    let text: String = only(&log, "SELECT text FROM note WHERE kind = 'clock step'", |row| row.get_unwrap(0));
    assert_eq!(text, "the computer's clock moved by -3600.000 s");
    assert_eq!(count(&log, "note"), 1);
}

#[test]
fn a_log_of_a_recording_has_no_clock() {
    let mut log = Log::temporary(&About { stores_clock: false, ..about() }).unwrap();
    store_all(&mut log, &frames(BOOT, one_of_each()));
    log.finish().unwrap();
    assert_eq!(count(&log, "clock"), 0);
    assert_eq!(clock::RunClock::load(&log, 1).unwrap(), None);
}

#[test]
fn spectra_that_lost_a_part_are_noted_at_the_end() {
    let mut log = temporary();
    let [first, _] = spectrum(0, Mode::Common, 0).map(Message::Spectrum);
    let [_, last] = spectrum(9000, Mode::Common, 0).map(Message::Spectrum);
    let [open, _] = spectrum(18_000, Mode::Common, 0).map(Message::Spectrum);
    let [_, both] = spectra(0, SegmentSet::Idle, 0).map(Message::Spectra);
    store_all(&mut log, &frames(BOOT, [first, last, open, both]));
    log.finish().unwrap();
    assert_eq!((count(&log, "spectrum"), count(&log, "spectra")), (0, 0));
    let text: String = only(&log, "SELECT text FROM note WHERE kind = 'spectra'", |row| row.get_unwrap(0));
    assert_eq!(text, "4 spectra were dropped because a part was missing");
}

#[test]
fn a_kept_message_without_a_number_is_not_lost_silently() {
    let mut log = temporary();
    let mut sent = frames(BOOT, [Message::Gap(gap())]);
    sent[0].envelope.delivery = legwise_protocol::framing::Delivery::Passing;
    assert_eq!(log.store(&sent[0], at_ms(0)).unwrap(), Stored::NotStored);
    let text: String = only(&log, "SELECT text FROM note WHERE kind = 'protocol'", |row| row.get_unwrap(0));
    assert!(text.contains("Gap"), "{text}");
}
