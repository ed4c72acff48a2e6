//! Full disks.

use super::*;
use std::process::Command;

/// Excursions, numbered from `first`, with their snippets and a summary each.
fn storm_of(first: u32, excursions: u32) -> Vec<DeviceFrame> {
    let messages = (0..excursions).flat_map(|index| {
        let number = u64::from(first + index);
        let part = SnippetPart { excursion: number, ..snippet() };
        [
            Message::Excursion(excursion(number)),
            Message::Snippet(part),
            Message::Summary(summary(1000 * number)),
        ]
    });
    frames(BOOT, messages)
}

/// Stores and commits a few frames at a time until it fails; returns the error, the dump after the
/// last good commit and the number of frames handed over.
fn fill(log: &mut Log, sent: &[DeviceFrame]) -> (LogError, String, usize) {
    let mut committed = dump(log);
    for (index, batch) in sent.chunks(30).enumerate() {
        let mut failed = None;
        for frame in batch {
            match log.store(frame, at_ms(index as i64 * 1000)) {
                Ok(_) => {}
                Err(error) => failed = Some(error),
            }
        }
        match failed.map_or_else(|| log.commit(), Err) {
            Ok(()) => committed = dump(log),
            Err(error) => return (error, committed, (index + 1) * 30),
        }
    }
    panic!("{} frames fitted", sent.len());
}

fn assert_all_there(log: &Log, excursions: i64) {
    for table in ["excursion", "snippet", "summary"] {
        assert_eq!(count(log, table), excursions, "{table}");
    }
}

#[test]
fn a_full_database_keeps_what_is_committed_and_goes_on_when_there_is_room() {
    let directory = tempfile::tempdir().unwrap();
    let path = directory.path().join("night.log");
    let mut log = Log::create(&path, &about()).unwrap();
    log.connection().pragma_update(None, "max_page_count", 120).unwrap();
    let sent = storm_of(1, 2000);
    let (error, committed, handed) = fill(&mut log, &sent);
    assert!(matches!(error, LogError::DiskFull), "{error:?}");
    assert!(error.to_string().contains("; try "));
    assert_eq!(dump(&log), committed, "memory shows what the file holds");
    assert_eq!(dump(&Log::open(&path).unwrap()), committed);
    // Still full: the error is told again by each commit, nothing is thrown away meanwhile.
    let waiting = log.waiting();
    assert!(matches!(log.commit(), Err(LogError::DiskFull)));
    assert_eq!(log.waiting(), waiting);

    log.connection().pragma_update(None, "max_page_count", 1_000_000).unwrap();
    for frame in &sent[handed..] {
        log.store(frame, at_ms(0)).unwrap();
    }
    log.commit().unwrap();
    assert_eq!(log.waiting(), 0);
    assert_all_there(&log, 2000);
    drop(log);
    assert_all_there(&Log::open(&path).unwrap(), 2000);
}

#[test]
fn while_nothing_can_be_stored_passing_messages_go_first_and_are_counted() {
    let directory = tempfile::tempdir().unwrap();
    let path = directory.path().join("night.log");
    let mut log = Log::create(&path, &about()).unwrap();
    log.limit_pending(90);
    let other = Connection::open(&path).unwrap();
    other.execute_batch("BEGIN IMMEDIATE").unwrap();
    let sent = storm_of(1, 100);
    let mut refused = 0;
    for frame in &sent {
        match log.store(frame, at_ms(0)) {
            Ok(Stored::Waiting) => {}
            Err(LogError::Busy) => assert_eq!(frame.envelope.sequence, 0, "told once, then by commits"),
            Err(LogError::TooManyWaiting { frames: 90 }) => {
                assert!(frame.message.is_kept());
                refused += 1;
            }
            other => panic!("{other:?}"),
        }
    }
    assert_eq!(refused, 200 - 90);
    other.execute_batch("ROLLBACK").unwrap();
    log.commit().unwrap();
    assert_eq!((count(&log, "excursion"), count(&log, "snippet"), count(&log, "summary")), (45, 45, 0));
    let text: String = only(&log, "SELECT text FROM note WHERE kind = 'given up'", |row| row.get_unwrap(0));
    assert_eq!(text, "100 passing messages were given up while nothing could be stored");
    // The device sends the refused ones again.
    for frame in sent.iter().filter(|frame| frame.message.is_kept()) {
        log.store(frame, at_ms(0)).unwrap();
    }
    log.commit().unwrap();
    assert_eq!((count(&log, "excursion"), count(&log, "snippet")), (100, 100));
}

/// A file system of its own in memory, gone with the value.
struct SmallDisk(tempfile::TempDir);

impl SmallDisk {
    /// `None` where mounting is not permitted.
    fn mount() -> Option<Self> {
        let directory = tempfile::tempdir().unwrap();
        let mounted = Command::new("mount")
            .args(["-t", "tmpfs", "-o", "size=600k", "tmpfs"])
            .arg(directory.path())
            .output()
            .is_ok_and(|output| output.status.success());
        mounted.then_some(Self(directory))
    }
}

impl Drop for SmallDisk {
    fn drop(&mut self) {
        let _ = Command::new("umount").arg(self.0.path()).status();
    }
}

#[test]
fn a_full_disk_keeps_what_is_committed_and_goes_on_when_there_is_room() {
    let Some(disk) = SmallDisk::mount() else {
        println!("not permitted to mount a small disk: the test with a bounded database stands alone");
        return;
    };
    let ballast = disk.0.path().join("ballast");
    std::fs::write(&ballast, vec![1; 200_000]).unwrap();
    let path = disk.0.path().join("night.log");
    let mut log = Log::create(&path, &about()).unwrap();
    let sent = storm_of(1, 700);
    let (error, committed, handed) = fill(&mut log, &sent);
    assert!(matches!(error, LogError::DiskFull), "{error:?}");
    assert_eq!(dump(&Log::open(&path).unwrap()), committed);
    let refused = Log::create(&disk.0.path().join("second.log"), &about()).map(|_| ());
    println!("a second log on the full disk: {refused:?}; {handed} frames handed over to the first");

    // The rest waits in memory; more room than before lets all of it in.
    std::fs::remove_file(&ballast).unwrap();
    let enlarged =
        Command::new("mount").args(["-o", "remount,size=20m"]).arg(disk.0.path()).status().unwrap();
    assert!(enlarged.success());
    for frame in &sent[handed..] {
        log.store(frame, at_ms(0)).unwrap();
    }
    log.commit().unwrap();
    assert_all_there(&log, 700);
    drop(log);
    assert_all_there(&Log::open(&path).unwrap(), 700);
}

#[test]
fn a_log_on_a_medium_that_may_only_be_read_opens_unless_rows_would_be_left_out() {
    let Some(disk) = SmallDisk::mount() else {
        println!("not permitted to mount a small disk");
        return;
    };
    let remount = |options: &str| {
        let done = Command::new("mount").args(["-o", options]).arg(disk.0.path()).status().unwrap();
        assert!(done.success());
    };
    let path = disk.0.path().join("50% night #1?.log");
    let mut log = Log::create(&path, &about()).unwrap();
    store_all(&mut log, &frames(BOOT, one_of_each()));
    log.commit().unwrap();
    let copy = disk.0.path().join("copy.log");
    std::fs::copy(&path, &copy).unwrap();
    std::fs::copy(disk.0.path().join("50% night #1?.log-wal"), disk.0.path().join("copy.log-wal")).unwrap();
    let stored = dump(&log);
    drop(log); // closed, but not finished: the file is still in WAL mode
    remount("remount,ro");
    assert_eq!(dump(&Log::open(&path).unwrap()), stored);
    let error = Log::open(&copy).expect_err("its newest rows lie in the -wal file");
    assert!(matches!(error, LogError::ReadOnly), "{error:?}");
    let refused = Log::create(&disk.0.path().join("new.log"), &about()).expect_err("read-only");
    assert!(matches!(refused, LogError::CannotMake { .. }), "{refused:?}");
    remount("remount,rw");
    assert_eq!(dump(&Log::open(&copy).unwrap()), stored);
}
