//! Exported tables against what was stored.

use super::*;
use crate::log::About;
use crate::log::fixtures::*;
use legwise_protocol::bytes::Bytes;
use legwise_protocol::message::{Message, SnippetPart};
use legwise_protocol::{cross, power};

fn stored(about: &About, messages: Vec<Message>) -> Log {
    let mut log = Log::temporary(about).unwrap();
    for frame in frames(BOOT, messages) {
        log.store(&frame, at_ms(frame.envelope.sample as i64 / 500)).unwrap();
    }
    log.finish().unwrap();
    log
}

/// Header and records of one exported table.
fn exported(log: &Log, table: &str) -> (Vec<String>, Vec<Vec<String>>) {
    let directory = tempfile::tempdir().unwrap();
    let paths = write_tables(log, &directory.path().join("new"), Some(&[table.to_owned()])).unwrap();
    assert_eq!(paths, [directory.path().join("new").join(format!("{table}.csv"))]);
    let mut reader = csv::Reader::from_path(&paths[0]).unwrap();
    let header = reader.headers().unwrap().iter().map(str::to_owned).collect();
    let records =
        reader.records().map(|record| record.unwrap().iter().map(str::to_owned).collect()).collect();
    (header, records)
}

fn field<'a>(table: &'a (Vec<String>, Vec<Vec<String>>), row: usize, column: &str) -> &'a str {
    let index =
        table.0.iter().position(|name| name == column).unwrap_or_else(|| panic!("no column {column}"));
    &table.1[row][index]
}

#[test]
fn every_table_becomes_a_file_with_its_columns() {
    let log = stored(&about(), one_of_each());
    let directory = tempfile::tempdir().unwrap();
    let paths = write_tables(&log, directory.path(), None).unwrap();
    let names: Vec<_> = paths.iter().map(|path| path.file_stem().unwrap().to_str().unwrap()).collect();
    assert_eq!(names, TABLES);
    for (table, path) in TABLES.iter().zip(&paths) {
        if matches!(*table, "spectrum" | "spectra" | "snippet") {
            continue;
        }
        let mut reader = csv::Reader::from_path(path).unwrap();
        let header: Vec<_> = reader.headers().unwrap().iter().filter(|&name| name != "time_utc").collect();
        let statement = log.connection().prepare(&format!("SELECT * FROM {table}")).unwrap();
        assert_eq!(header, statement.column_names().collect::<Vec<_>>(), "{table}");
        assert_eq!(reader.records().count() as i64, count(&log, table), "{table}");
    }
}

#[test]
fn values_null_json_and_times_are_written_as_they_are() {
    let quiet =
        Message::Summary(legwise_protocol::message::Summary { first_sample: 500_000, ..Default::default() });
    let mut messages = one_of_each();
    messages.push(quiet);
    let log = stored(&about(), messages);
    let summary = exported(&log, "summary");
    assert_eq!(field(&summary, 0, "leg_b_low_uv"), "-3");
    assert_eq!(field(&summary, 1, "leg_b_low_uv"), "");
    // One second of samples after the beginning, to the millisecond the test device counts in.
    assert_eq!(field(&summary, 0, "time_utc"), "2023-11-14T22:13:20.002000Z");
    assert_eq!(field(&summary, 1, "time_utc"), "2023-11-14T22:13:21.000000Z");
    let runs = exported(&log, "run");
    let legs: [legwise_protocol::message::LegScale; 2] =
        serde_json::from_str(field(&runs, 0, "legs")).unwrap();
    assert_eq!(legs, hello().legs);
    let info = exported(&log, "info");
    assert_eq!(info.0, ["key", "value"]);
    let notes = exported(&log, "note");
    assert_eq!(field(&notes, 0, "time_utc"), "2023-11-14T22:13:20.018000Z");
}

#[test]
fn spectra_are_written_by_bin_with_frequency_and_density() {
    let log = stored(&about(), one_of_each());
    let spectra = exported(&log, "spectrum");
    assert_eq!(spectra.1.len(), 2 * 257);
    for (row, bin, mode, seed) in
        [(0, 0_u16, "common", 5), (256, 256, "common", 5), (257 + 100, 100, "differential", 9)]
    {
        assert_eq!(field(&spectra, row, "bin"), bin.to_string());
        assert_eq!(field(&spectra, row, "mode"), mode);
        // Rung 3 of 500 kS/s is 62.5 kS/s; 512 points.
        let frequency: f64 = field(&spectra, row, "frequency_hz").parse().unwrap();
        assert_eq!(frequency, f64::from(bin) * 62_500.0 / 512.0);
        let density: f64 = field(&spectra, row, "psd_v2_per_hz").parse().unwrap();
        let expected = power::decode(bin + seed);
        // Six digits: half a unit of the last one.
        assert!((density / expected - 1.0).abs() <= 5e-6, "{density:e} {expected:e}");
    }
}

#[test]
fn spectra_of_the_ladder_are_written_by_bin_with_both_modes_and_cross_density() {
    let log = stored(&about(), one_of_each());
    let spectra = exported(&log, "spectra");
    assert_eq!(spectra.1.len(), 2 * 100);
    for (row, bin, set, seed) in [(0, 30_u16, "driven", 9), (99, 129, "driven", 9), (100 + 41, 71, "idle", 5)]
    {
        assert_eq!(field(&spectra, row, "bin"), bin.to_string());
        assert_eq!((field(&spectra, row, "set"), field(&spectra, row, "rung")), (set, "1"));
        assert_eq!((field(&spectra, row, "segments"), field(&spectra, row, "first_sample")), ("65", "1000"));
        assert!(field(&spectra, row, "time_utc").starts_with("2023-11-14T22:13:"));
        // Rung 1 of 500 kS/s is 62.5 kS/s; 256 points.
        let frequency: f64 = field(&spectra, row, "frequency_hz").parse().unwrap();
        assert_eq!(frequency, f64::from(bin) * 62_500.0 / 256.0);
        let codes = bin_codes(bin, seed);
        for (column, expected) in [
            ("cm_v2_per_hz", power::decode(codes.common)),
            ("dm_v2_per_hz", power::decode(codes.differential)),
            ("cross_re_v2_per_hz", cross::decode(codes.cross.0)),
            ("cross_im_v2_per_hz", cross::decode(codes.cross.1)),
        ] {
            let density: f64 = field(&spectra, row, column).parse().unwrap();
            // Six digits: half a unit of the last one.
            assert!((density / expected - 1.0).abs() <= 5e-6, "{column}: {density:e} {expected:e}");
        }
        assert!(field(&spectra, row, "cross_im_v2_per_hz").starts_with('-'));
    }
}

#[test]
fn snippets_are_written_by_pair_in_volts() {
    let log = stored(&about(), one_of_each());
    let table = exported(&log, "snippet");
    let (leg_a, leg_b) = snippet_codes();
    assert_eq!(table.1.len(), leg_a.len());
    for row in 0..leg_a.len() {
        assert_eq!(field(&table, row, "sample"), (snippet().first_sample + row as u64).to_string());
        assert_eq!(field(&table, row, "excursion"), "31");
        // Scale of the fixture: 15 mV per code, offsets -30.72 V and 17 uV.
        let [a, b] = ["leg_a_v", "leg_b_v"].map(|column| field(&table, row, column).parse::<f64>().unwrap());
        assert!((a - (f64::from(leg_a[row]) * 0.015 - 30.72)).abs() < 1e-9, "{a}");
        assert!((b - (f64::from(leg_b[row]) * 0.015 + 17e-6)).abs() < 1e-9, "{b}");
    }
}

#[test]
fn a_broken_block_leaves_its_volts_empty_and_the_rest_whole() {
    let whole = snippet();
    let half = &whole.blocks.as_slice()[..whole.blocks.as_slice().len() - 30];
    let broken = SnippetPart { blocks: Bytes::from_slice_cut(half), ..whole };
    let later = SnippetPart { first_sample: whole.first_sample + 100, ..whole };
    let messages = vec![Message::Hello(hello()), Message::Snippet(broken), Message::Snippet(later)];
    let table = exported(&stored(&about(), messages), "snippet");
    let known = (0..200).filter(|&row| !field(&table, row, "leg_a_v").is_empty()).count();
    assert_eq!((table.1.len(), known), (200, 64 + 100));
}

#[test]
fn without_clock_or_greeting_times_and_scales_stay_empty() {
    let mut messages = one_of_each();
    messages.remove(0);
    let log = stored(&About { stores_clock: false, ..about() }, messages);
    for (table, columns) in [
        ("summary", &["time_utc"][..]),
        ("snippet", &["time_utc", "leg_a_v", "leg_b_v"]),
        ("spectrum", &["time_utc", "frequency_hz"]),
        ("spectra", &["time_utc", "frequency_hz"]),
    ] {
        let table = exported(&log, table);
        assert!(!table.1.is_empty());
        for column in columns {
            assert_eq!(field(&table, 0, column), "");
        }
    }
}

#[test]
fn nothing_is_overwritten_and_unknown_tables_are_named() {
    let log = stored(&about(), one_of_each());
    let directory = tempfile::tempdir().unwrap();
    let taken = directory.path().join("gap.csv");
    fs::write(&taken, "mine").unwrap();
    let error = write_tables(&log, directory.path(), None).expect_err("gap.csv exists");
    assert!(matches!(&error, ExportError::Exists { path } if *path == taken), "{error}");
    assert_eq!(fs::read(&taken).unwrap(), b"mine");
    assert_eq!(fs::read_dir(directory.path()).unwrap().count(), 1, "told before anything is written");
    let error = write_tables(&log, directory.path(), Some(&["gaps".into()])).expect_err("no such table");
    assert!(error.to_string().contains("try one of info, run"), "{error}");
    let error = write_tables(&log, &taken.join("below"), None).expect_err("a file is no directory");
    assert!(matches!(error, ExportError::Write { .. }) && error.to_string().contains("; try "), "{error}");
}
