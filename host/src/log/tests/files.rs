//! Files that are no log, logs left by a crash, logs read meanwhile.

use super::*;
use crate::report::{Options, Report};

fn try_open(path: &Path) -> LogError {
    let error = Log::open(path).expect_err("this must not open");
    assert!(error.to_string().contains("; try "), "an error says what to try: {error}");
    error
}

/// A log with one of each message at `path`.
fn make(path: &Path) -> Log {
    let mut log = Log::create(path, &about()).unwrap();
    store_all(&mut log, &frames(BOOT, one_of_each()));
    log.commit().unwrap();
    log
}

#[test]
fn a_log_says_what_it_is() {
    let directory = tempfile::tempdir().unwrap();
    let path = directory.path().join("night.log");
    drop(make(&path));
    let log = Log::open(&path).unwrap();
    for (key, value) in [
        ("format", Some("legwise log")),
        ("origin", Some("simulated")),
        ("origin_name", Some("a quiet night")),
        ("point", Some("west end")),
        ("created_utc", Some("2023-11-14T22:13:20.000000Z")),
        ("tool_version", Some("0.0.0")),
        ("nothing", None),
    ] {
        assert_eq!(log.info(key).unwrap().as_deref(), value);
    }
}

#[test]
fn other_files_are_refused_as_no_log() {
    let directory = tempfile::tempdir().unwrap();
    let noise: Vec<u8> =
        (0..100_000_u32).map(|index| (index.wrapping_mul(2_654_435_761) >> 13) as u8).collect();
    for (name, content) in [
        ("empty", &b""[..]),
        ("short", b"x"),
        ("text", b"time_s,leg_a_v,leg_b_v\n0,1.0,2.0\n"),
        ("noise", &noise),
        ("noise of one page", &noise[..4096]),
    ] {
        let path = directory.path().join(name);
        std::fs::write(&path, content).unwrap();
        assert!(matches!(try_open(&path), LogError::NotALog { .. }), "{name}");
        assert_eq!(std::fs::read(&path).unwrap(), content, "{name} was touched");
    }
    let other = directory.path().join("other.sqlite");
    Connection::open(&other).unwrap().execute_batch("CREATE TABLE t (x); PRAGMA user_version = 1").unwrap();
    assert!(matches!(try_open(&other), LogError::NotALog { .. }));
    let folder = try_open(directory.path());
    assert!(matches!(folder, LogError::NotALog { .. }), "{folder:?}");
    assert!(matches!(try_open(&directory.path().join("absent")), LogError::Missing { .. }));
    let below = try_open(&other.join("below a file"));
    assert!(matches!(below, LogError::Missing { .. }) && !below.is_about_storing(), "{below:?}");
}

#[test]
fn a_log_of_a_newer_schema_is_refused_with_both_numbers() {
    let directory = tempfile::tempdir().unwrap();
    let path = directory.path().join("night.log");
    drop(make(&path));
    Connection::open(&path).unwrap().pragma_update(None, "user_version", 7).unwrap();
    let error = try_open(&path);
    assert!(matches!(error, LogError::NewerSchema { found: 7, known: SCHEMA_VERSION, .. }));
}

#[test]
fn a_log_with_a_broken_page_is_damaged_not_something_else() {
    let directory = tempfile::tempdir().unwrap();
    let path = directory.path().join("night.log");
    make(&path).finish().unwrap();
    let mut bytes = std::fs::read(&path).unwrap();
    bytes[100..4096].fill(0xA5);
    std::fs::write(&path, bytes).unwrap();
    assert!(matches!(try_open(&path), LogError::Damaged));

    let lacking = directory.path().join("lacking.log");
    make(&lacking).finish().unwrap();
    Connection::open(&lacking).unwrap().execute_batch("DROP TABLE summary").unwrap();
    assert!(matches!(try_open(&lacking), LogError::Damaged));
}

#[test]
fn a_file_that_exists_is_never_overwritten() {
    let directory = tempfile::tempdir().unwrap();
    let path = directory.path().join("night.log");
    std::fs::write(&path, "precious").unwrap();
    let error = Log::create(&path, &about()).expect_err("it exists");
    assert!(matches!(error, LogError::Exists { .. }) && error.to_string().contains("; try "), "{error}");
    assert_eq!(std::fs::read(&path).unwrap(), b"precious");
    let nowhere = directory.path().join("absent").join("night.log");
    let error = Log::create(&nowhere, &about()).expect_err("no such directory");
    assert!(matches!(error, LogError::NoDirectory { .. }) && error.is_about_storing(), "{error}");
    let error = Log::create(&path.join("below a file"), &about()).expect_err("a file is no directory");
    assert!(matches!(error, LogError::NoDirectory { .. }), "{error:?}");
}

#[test]
fn a_killed_writer_leaves_all_that_was_committed() {
    let directory = tempfile::tempdir().unwrap();
    let path = directory.path().join("night.log");
    let mut log = make(&path);
    let committed = dump(&log);
    store_all(&mut log, &frames(BOOT + 1, one_of_each().into_iter().filter(Message::is_kept)));
    // What a power cut leaves: the files as they are now, copied while the transaction is open.
    let copy = directory.path().join("copy.log");
    std::fs::copy(&path, &copy).unwrap();
    std::fs::copy(directory.path().join("night.log-wal"), directory.path().join("copy.log-wal")).unwrap();
    drop(log);
    assert_eq!(dump(&Log::open(&copy).unwrap()), committed);
    assert_eq!(dump(&Log::open(&path).unwrap()), committed, "dropped without a commit");
}

#[test]
fn the_file_alone_opens_when_its_write_ahead_log_is_left_behind() {
    let directory = tempfile::tempdir().unwrap();
    let path = directory.path().join("night.log");
    let log = make(&path);
    let copy = directory.path().join("copy.log");
    std::fs::copy(&path, &copy).unwrap();
    drop(log);
    let alone = Log::open(&copy).unwrap();
    assert_eq!(alone.info("format").unwrap().as_deref(), Some("legwise log"));
}

#[test]
fn a_report_reads_while_the_log_is_written() {
    let directory = tempfile::tempdir().unwrap();
    let path = directory.path().join("night.log");
    let mut log = make(&path);
    let reader = Log::open(&path).unwrap();
    assert_eq!(count(&reader, "excursion"), 1);
    store_all(&mut log, &frames(BOOT + 1, one_of_each()));
    assert_eq!(count(&reader, "excursion"), 1, "not committed yet");
    log.commit().unwrap();
    assert_eq!(count(&reader, "excursion"), 2);
    log.finish().unwrap();
    assert_eq!(count(&reader, "excursion"), 2, "finishing waits for no reader");
}

#[test]
fn a_finished_log_is_one_plain_file() {
    let directory = tempfile::tempdir().unwrap();
    let path = directory.path().join("night.log");
    let mut log = make(&path);
    log.finish().unwrap();
    let names: Vec<_> =
        std::fs::read_dir(directory.path()).unwrap().map(|entry| entry.unwrap().file_name()).collect();
    assert_eq!(names, ["night.log"]);
    // It can still be written: a note of what came after.
    log.note(NOW_NS, "note", "unplugged").unwrap();
    log.commit().unwrap();
    assert_eq!(count(&Log::open(&path).unwrap(), "note"), 2);
}

#[test]
fn a_log_opened_for_reading_cannot_be_written() {
    let directory = tempfile::tempdir().unwrap();
    let path = directory.path().join("night.log");
    make(&path).finish().unwrap();
    let mut log = Log::open(&path).unwrap();
    let refused = log.store(&frames(BOOT, one_of_each())[0], at_ms(0));
    assert!(matches!(refused, Err(LogError::ReadOnly)), "{refused:?}");
}

#[test]
fn another_writer_delays_and_loses_nothing() {
    let directory = tempfile::tempdir().unwrap();
    let path = directory.path().join("night.log");
    let mut log = Log::create(&path, &about()).unwrap();
    let other = Connection::open(&path).unwrap();
    other.execute_batch("BEGIN IMMEDIATE").unwrap();
    let sent = frames(BOOT, one_of_each());
    let first = log.store(&sent[0], at_ms(0));
    assert!(matches!(first, Err(LogError::Busy)), "{first:?}");
    for frame in &sent[1..] {
        assert_eq!(log.store(frame, at_ms(0)).unwrap(), Stored::Waiting);
    }
    assert!(matches!(log.commit(), Err(LogError::Busy)));
    other.execute_batch("ROLLBACK").unwrap();
    log.commit().unwrap();
    let mut straight = temporary();
    for frame in &sent {
        straight.store(frame, at_ms(0)).unwrap();
    }
    assert_eq!(dump(&log), dump(&straight));
}

#[test]
fn transactions_with_kept_messages_are_synced_and_others_are_not() {
    let directory = tempfile::tempdir().unwrap();
    let path = directory.path().join("night.log");
    let mut log = Log::create(&path, &about()).unwrap();
    let reader = Log::open(&path).unwrap();
    // PRAGMA synchronous: 1 is NORMAL, 2 is FULL (sqlite.org/pragma.html#pragma_synchronous).
    let level = |log: &Log| only(log, "PRAGMA synchronous", |row| row.get_unwrap::<_, i64>(0));
    let sent =
        frames(BOOT, [Message::Summary(summary(0)), Message::Gap(gap()), Message::Summary(summary(1))]);
    log.store(&sent[0], at_ms(0)).unwrap();
    assert_eq!((level(&log), count(&reader, "summary")), (1, 0));
    log.store(&sent[1], at_ms(1)).unwrap();
    assert_eq!(
        (level(&log), count(&reader, "summary")),
        (2, 1),
        "the level cannot change inside a transaction"
    );
    assert_eq!(log.waiting(), 1);
    log.commit().unwrap();
    log.store(&sent[2], at_ms(2)).unwrap();
    assert_eq!(level(&log), 1);
    log.commit().unwrap();
    assert_eq!((count(&reader, "summary"), count(&reader, "gap")), (2, 1));
}

/// The bytes of logs that older schemas wrote: one of each message they knew, by two boots 100 ms a frame.
const OLD_LOGS: [(i64, &[u8]); 2] =
    [(1, include_bytes!("schema_1.sqlite")), (2, include_bytes!("schema_2.sqlite"))];

#[test]
fn a_log_of_an_older_schema_reads_as_it_did_and_lacks_what_is_new() {
    for (schema, bytes) in OLD_LOGS {
        let directory = tempfile::tempdir().unwrap();
        let path = directory.path().join("old.log");
        std::fs::write(&path, bytes).unwrap();
        let old = Log::open(&path).unwrap();
        assert_eq!(only(&old, "PRAGMA user_version", |row| row.get_unwrap::<_, i64>(0)), schema);
        let is_old = |message: &Message| match message {
            Message::Spectra(_) => schema >= 2,
            Message::Rate(_) => false,
            _ => true,
        };
        let mut same = temporary();
        let sent: Vec<_> = [BOOT, BOOT + 1]
            .into_iter()
            .flat_map(|boot| frames(boot, one_of_each().into_iter().filter(is_old)))
            .collect();
        for (index, frame) in sent.iter().enumerate() {
            same.store(frame, at_ms(100 * index as i64)).unwrap();
        }
        same.finish().unwrap();
        assert_eq!(dump(&old), dump(&same), "schema {schema}");
        let spectra = if schema >= 2 { 4 } else { 0 };
        assert_eq!((count(&old, "spectrum"), count(&old, "spectra"), count(&old, "rate")), (4, spectra, 0));
        let report = Report::from_log(&old, &Options::default()).unwrap();
        assert_eq!((report.recording.pairs, report.excursions.count), (14_400, 162));
        drop(old);
        assert_eq!(std::fs::read(&path).unwrap(), bytes, "the file was touched");
    }
}

#[test]
fn an_older_log_that_lacks_a_table_of_its_own_is_damaged() {
    let directory = tempfile::tempdir().unwrap();
    let path = directory.path().join("old.log");
    std::fs::write(&path, OLD_LOGS[0].1).unwrap();
    Connection::open(&path).unwrap().execute_batch("DROP TABLE spectrum").unwrap();
    assert!(matches!(try_open(&path), LogError::Damaged), "its own tables must be there");
}

#[test]
fn a_log_of_this_schema_without_its_newest_table_is_damaged() {
    let directory = tempfile::tempdir().unwrap();
    let path = directory.path().join("lacking.log");
    make(&path).finish().unwrap();
    Connection::open(&path).unwrap().execute_batch("DROP TABLE spectra").unwrap();
    assert!(matches!(try_open(&path), LogError::Damaged));
}
