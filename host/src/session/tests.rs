//! Sessions fed with whole, damaged, repeated and missing frames.

use super::*;
use crate::log::fixtures::*;
use legwise_protocol::framing::Envelope;
use legwise_protocol::message::{Mode, SnippetPart};
use rand::{RngExt, SeedableRng};
use rand_chacha::ChaCha8Rng;

fn session() -> Session {
    Session::new(temporary())
}

/// Receives `bytes` in pieces of at most `piece` bytes, all at one instant; returns the frames shown.
fn receive(session: &mut Session, bytes: &[u8], piece: usize) -> Vec<DeviceFrame> {
    let mut shown = Vec::new();
    for piece in bytes.chunks(piece) {
        session.receive(piece, at_ms(0), &mut |frame| shown.push(frame.clone())).unwrap();
    }
    shown
}

/// A stretch of one run: excursions with snippets, summaries, spectra; `of` frames and more.
fn night(boot_id: u32, of: u64) -> Vec<DeviceFrame> {
    let mut messages = one_of_each();
    let end = messages.pop().unwrap();
    for index in 1..=of {
        messages.push(Message::Summary(summary(500_000 * index)));
        if index % 3 == 0 {
            messages.push(Message::Excursion(excursion(index)));
            messages.push(Message::Snippet(SnippetPart { excursion: index, ..snippet() }));
        }
        messages.extend(spectrum(500_000 * index, Mode::Common, 1).map(Message::Spectrum));
    }
    messages.push(end);
    frames(boot_id, messages)
}

fn kept_of(frames: &[DeviceFrame]) -> u32 {
    frames.iter().filter(|frame| frame.message.is_kept()).count() as u32
}

fn link_rows(log: &Log) -> Vec<LinkCounts> {
    let mut statement = log.connection().prepare("SELECT * FROM link ORDER BY run").unwrap();
    let rows = statement.query_map([], |row| {
        let count = |column| row.get::<_, i64>(column).map(|count| count as u64);
        Ok(LinkCounts {
            frames: count(1)?,
            missing_frames: count(2)?,
            repeated_frames: count(3)?,
            damaged_frames: count(4)?,
            oversize_frames: count(5)?,
            unknown_frames: count(6)?,
            dropped_bytes: count(7)?,
        })
    });
    rows.unwrap().map(Result::unwrap).collect()
}

#[test]
fn a_whole_run_is_stored_shown_and_acknowledged() {
    let sent = night(BOOT, 30);
    let mut session = session();
    assert_eq!(receive(&mut session, &encode_all(&sent), 4096), sent);
    assert_eq!(session.acknowledgement(), None, "not yet on the disk");
    session.flush().unwrap();
    assert_eq!(session.acknowledgement(), Some(kept_of(&sent)));
    assert_eq!(session.acknowledgement(), None);
    assert!(!session.wants_identify(at_ms(0)));
    let log = session.finish().unwrap();
    assert_eq!(link_rows(&log), [LinkCounts { frames: sent.len() as u64, ..LinkCounts::default() }]);
    assert_eq!((count(&log, "summary"), count(&log, "excursion"), count(&log, "spectrum")), (31, 11, 32));
}

#[test]
fn frames_sent_again_are_not_shown_and_change_no_table_but_the_link() {
    let sent = night(BOOT, 9);
    let mut session = session();
    receive(&mut session, &encode_all(&sent), 4096);
    session.flush().unwrap();
    let is_table = |line: &&str| !line.starts_with("link") && !line.starts_with("note");
    let tables = |log: &Log| dump(log).lines().filter(is_table).collect::<Vec<_>>().join("\n");
    let before = tables(session.log_mut());
    // The outbox starts over: same numbers, same samples, new sequence numbers.
    let mut again: Vec<_> = sent.iter().filter(|frame| frame.message.is_kept()).cloned().collect();
    for (index, frame) in again.iter_mut().enumerate() {
        frame.envelope.sequence = (sent.len() + index) as u32;
    }
    assert_eq!(receive(&mut session, &encode_all(&again), 4096), []);
    session.flush().unwrap();
    assert_eq!(tables(session.log_mut()), before);
    assert_eq!(session.link_counts().missing_frames, 0);
    // The very same bytes once more are repeats by sequence number.
    assert_eq!(receive(&mut session, &encode_all(&sent), 4096), []);
    assert_eq!(session.link_counts().repeated_frames, sent.len() as u64);
    session.flush().unwrap();
    assert_eq!(tables(session.log_mut()), before);
}

#[test]
fn missing_frames_are_counted_and_a_lost_kept_one_stops_acknowledgement() {
    let sent = night(BOOT, 30);
    // Of 30 in a row, 7 kept or passing ones get lost in three places.
    let lost = |sequence: usize| matches!(sequence, 4 | 20..=24 | 60);
    let arrived: Vec<_> = sent
        .iter()
        .enumerate()
        .filter(|(sequence, _)| !lost(*sequence))
        .map(|(_, frame)| frame.clone())
        .collect();
    let mut session = session();
    receive(&mut session, &encode_all(&arrived), 4096);
    session.flush().unwrap();
    assert_eq!(session.link_counts().missing_frames, 7);
    // Sequence 4 is the storm, the third kept message.
    assert_eq!(session.acknowledgement(), Some(2));
    assert!(session.wants_identify(at_ms(0)));
    assert!(!session.wants_identify(at_ms(2999)), "not again at once");
    assert!(session.wants_identify(at_ms(3000)));
    // The device sends from the oldest one it holds.
    let mut again: Vec<_> = sent.iter().filter(|frame| frame.message.is_kept()).skip(2).cloned().collect();
    for (index, frame) in again.iter_mut().enumerate() {
        frame.envelope.sequence = (sent.len() + index) as u32;
    }
    let shown = receive(&mut session, &encode_all(&again), 4096);
    let lost_kept =
        sent.iter().enumerate().filter(|(sequence, frame)| lost(*sequence) && frame.message.is_kept());
    assert_eq!(shown.len(), lost_kept.count());
    session.flush().unwrap();
    assert_eq!(session.acknowledgement(), Some(kept_of(&sent)));
    assert!(!session.wants_identify(at_ms(9000)));
    let log = session.finish().unwrap();
    assert_eq!((count(&log, "excursion"), count(&log, "storm")), (11, 1));
}

#[test]
fn sequence_numbers_wrap() {
    let mut sent = night(BOOT, 3);
    for (index, frame) in sent.iter_mut().enumerate() {
        frame.envelope.sequence = (u32::MAX - 4).wrapping_add(index as u32);
    }
    sent.remove(5); // sequence number 0
    let mut session = session();
    receive(&mut session, &encode_all(&sent), 4096);
    let expected = LinkCounts { frames: sent.len() as u64, missing_frames: 1, ..LinkCounts::default() };
    assert_eq!(session.link_counts(), expected);
}

#[test]
fn joining_late_is_no_loss_but_a_restart_under_our_eyes_is() {
    let (first, second) = (night(1, 3), night(2, 3));
    let mut session = session();
    receive(&mut session, &encode_all(&first[10..]), 4096);
    assert_eq!(session.link_counts().missing_frames, 0);
    receive(&mut session, &encode_all(&second[3..]), 4096);
    assert_eq!(session.link_counts().missing_frames, 3);
    let log = session.finish().unwrap();
    assert_eq!(count(&log, "run"), 2);
    assert_eq!(link_rows(&log).iter().map(|link| link.missing_frames).collect::<Vec<_>>(), [0, 3]);
}

#[test]
fn after_a_reconnect_a_new_boot_is_joined_and_an_old_one_has_missed_frames() {
    let (first, second) = (encode_all(&night(1, 3)[..5]), night(2, 3));
    let mut session = session();
    receive(&mut session, &first[..first.len() - 7], 4096); // torn inside the fifth frame
    session.reconnected();
    receive(&mut session, &encode_all(&second[3..6]), 4096);
    session.reconnected();
    receive(&mut session, &encode_all(&second[8..]), 4096);
    let log = session.finish().unwrap();
    let links = link_rows(&log);
    assert_eq!((links[0].frames, links[0].missing_frames, links[0].damaged_frames), (4, 0, 0));
    assert_eq!(
        (links[1].frames, links[1].missing_frames, links[1].damaged_frames),
        (second.len() as u64 - 5, 2, 0)
    );
}

#[test]
fn a_missed_greeting_is_asked_for() {
    let sent = night(BOOT, 3);
    let mut session = session();
    receive(&mut session, &encode_all(&sent[1..]), 4096);
    session.flush().unwrap();
    assert_eq!(session.acknowledgement(), Some(kept_of(&sent)));
    assert!(session.wants_identify(at_ms(0)));
    receive(&mut session, &encode(&sent[0]), 4096);
    assert!(!session.wants_identify(at_ms(60_000)));
}

#[test]
fn damaged_bytes_cost_only_the_frames_they_hit_and_are_counted_in_their_run() {
    let (first, second) = (night(1, 3), night(2, 3));
    let mut bytes = vec![1, 2, 3, 0]; // noise before the first frame
    for (index, frame) in first.iter().enumerate() {
        let mut encoded = encode(frame);
        if index == 5 || index == 9 {
            encoded[7] ^= 0x40;
        }
        bytes.extend(encoded);
    }
    bytes.extend([0x55; 3000]); // longer than any frame
    bytes.push(0);
    bytes.extend(encode_all(&second));
    let mut session = session();
    receive(&mut session, &bytes, 1000);
    let log = session.finish().unwrap();
    let [link, clean] = link_rows(&log)[..] else { panic!("two runs") };
    assert_eq!((link.frames, link.missing_frames), (first.len() as u64 - 2, 2));
    assert_eq!((link.damaged_frames, link.oversize_frames), (3, 1));
    let hit = [5, 9].map(|index: usize| encode(&first[index]).len() as u64 - 1).iter().sum::<u64>();
    assert_eq!(link.dropped_bytes, 3 + hit + 3000);
    assert_eq!(clean, LinkCounts { frames: second.len() as u64, ..LinkCounts::default() });
}

#[test]
fn a_line_of_noise_alone_leaves_a_note() {
    let mut session = session();
    receive(&mut session, &[7, 7, 7, 0, 9, 9, 0], 4096);
    let log = session.finish().unwrap();
    assert_eq!(count(&log, "run"), 0);
    let text: String = log.connection().query_row("SELECT text FROM note", [], |row| row.get(0)).unwrap();
    assert_eq!(text, "no frame was understood: 2 damaged, 0 too long, 0 unknown, 5 bytes dropped");
}

#[test]
fn kept_messages_are_committed_within_a_fifth_of_a_second_and_others_within_one() {
    let directory = tempfile::tempdir().unwrap();
    let path = directory.path().join("night.log");
    let mut session = Session::new(Log::create(&path, &about()).unwrap());
    let reader = Log::open(&path).unwrap();
    let totals = frames(BOOT, (0..40).map(|_| Message::Totals(totals(1))));
    let ignore = &mut |_: &DeviceFrame| {};
    for (index, frame) in totals.iter().take(21).enumerate() {
        let expected = i64::from(index == 20);
        session.receive(&encode(frame), at_ms(50 * index as i64), ignore).unwrap();
        assert_eq!(count(&reader, "totals"), expected, "{index}");
    }
    let mut kept = frames(BOOT, [Message::Gap(gap())]).remove(0);
    kept.envelope = Envelope { sequence: 21, ..kept.envelope };
    session.receive(&encode(&kept), at_ms(2000), ignore).unwrap();
    session.receive(&[], at_ms(2199), ignore).unwrap();
    assert_eq!((count(&reader, "gap"), session.acknowledgement()), (0, None));
    session.receive(&[], at_ms(2200), ignore).unwrap();
    assert_eq!((count(&reader, "gap"), session.acknowledgement()), (1, Some(1)));
}

#[test]
fn a_full_disk_stops_acknowledgement_and_nothing_else() {
    let directory = tempfile::tempdir().unwrap();
    let log = Log::create(&directory.path().join("night.log"), &about()).unwrap();
    log.connection().pragma_update(None, "max_page_count", 60).unwrap();
    let mut session = Session::new(log);
    let sent = night(BOOT, 600);
    let mut shown = 0;
    let mut errors = 0;
    for (index, chunk) in encode_all(&sent).chunks(1500).enumerate() {
        match session.receive(chunk, at_ms(100 * index as i64), &mut |_| shown += 1) {
            Ok(()) => {}
            Err(LogError::DiskFull) => errors += 1,
            Err(other) => panic!("{other}"),
        }
    }
    assert_eq!(shown, sent.len(), "the live view goes on");
    assert!(errors > 1, "told once and by every commit since");
    let stored = session.acknowledgement();
    assert!(stored < Some(kept_of(&sent)), "{stored:?}");
    assert!(matches!(session.flush(), Err(LogError::DiskFull)));
    assert_eq!(session.acknowledgement(), None);
    session.log_mut().connection().pragma_update(None, "max_page_count", 1_000_000).unwrap();
    session.flush().unwrap();
    assert_eq!(session.acknowledgement(), Some(kept_of(&sent)));
    let log = session.finish().unwrap();
    assert_eq!((count(&log, "summary"), count(&log, "excursion"), count(&log, "snippet")), (601, 201, 201));
}

/// Design, chunk invariance: bytes cut in any way give the same log, also with damage in between.
#[test]
fn the_log_does_not_depend_on_how_the_bytes_were_cut() {
    let clean: Vec<u8> = [night(1, 6), night(2, 4)].iter().flat_map(|frames| encode_all(frames)).collect();
    let mut damaged = 0;
    for seed in 0..100 {
        let mut random = ChaCha8Rng::seed_from_u64(seed);
        let mut bytes = clean.clone();
        for _ in 0..random.random_range(0..6) {
            let index = random.random_range(0..bytes.len());
            bytes[index] ^= random.random_range(1..=255_u8);
        }
        let mut whole = session();
        let shown = receive(&mut whole, &bytes, bytes.len());
        damaged += whole.link_counts().damaged_frames;
        let (mut cut, mut shown_cut) = (session(), Vec::new());
        let longest = [3, 100, 2000][seed as usize % 3];
        let mut rest = bytes.as_slice();
        while !rest.is_empty() {
            let (piece, after) = rest.split_at(random.random_range(1..=longest).min(rest.len()));
            shown_cut.extend(receive(&mut cut, piece, piece.len()));
            rest = after;
        }
        assert_eq!(shown, shown_cut, "seed {seed}");
        assert_eq!(dump(&whole.finish().unwrap()), dump(&cut.finish().unwrap()), "seed {seed}");
    }
    assert!(damaged > 100, "the damage hit frames: {damaged}");
}
