//! Content of later versions, and content no version writes: counted, skipped, never guessed at.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

mod specimens;
mod tables;

use legwise_protocol::command::Command;
use legwise_protocol::decoder::{Decoder, DecoderCounts, DeviceDecoder, RequestDecoder};
use legwise_protocol::framing::{DEVICE_FRAME_BYTES, DeviceFrame, Envelope, encode_device_frame};
use legwise_protocol::message::{self, Message, SpectraPart};
use serde::Deserialize;
use tables::{bytes_of, checksum, content_of, table};

/// A sound frame around any content.
fn sealed(content: &[u8]) -> Vec<u8> {
    let body = [content, &checksum(content).to_le_bytes()].concat();
    let mut frame = vec![0; body.len() + 16];
    let used = cobs::try_encode(&body, &mut frame).unwrap();
    frame.truncate(used);
    frame.push(0);
    frame
}

fn golden_content(heading: &str, name: &str) -> Vec<u8> {
    let rows = table(heading);
    let row = rows.iter().find(|row| row["name"] == name).unwrap();
    content_of(&bytes_of(&row["frame"]))
}

fn read(content: &[u8]) -> (Vec<(Envelope, Option<Message>)>, DecoderCounts) {
    let mut decoder = DeviceDecoder::new();
    let mut items = Vec::new();
    decoder.feed_envelopes(&sealed(content), |envelope, message| items.push((envelope, message)));
    (items, decoder.counts())
}

fn read_frames(content: &[u8]) -> (Vec<DeviceFrame>, DecoderCounts) {
    let mut decoder = DeviceDecoder::new();
    let mut frames = Vec::new();
    decoder.feed_frames(&sealed(content), |frame| frames.push(frame));
    (frames, decoder.counts())
}

const SOUND: DecoderCounts = DecoderCounts {
    sound_frames: 1,
    damaged_frames: 0,
    oversize_frames: 0,
    unknown_frames: 0,
    dropped_bytes: 0,
};
const UNKNOWN: DecoderCounts = DecoderCounts { unknown_frames: 1, ..SOUND };

#[test]
fn a_later_message_is_skipped_but_its_kept_number_is_seen() {
    let envelope = specimens::kept(9, 1_000, 41);
    let mut buffer = [0; 64];
    let used = postcard::to_slice(&envelope, &mut buffer).unwrap().len();
    buffer[used] = 15;
    assert_eq!(read(&buffer[..used + 20]), (vec![(envelope, None)], UNKNOWN));
    assert_eq!(read_frames(&buffer[..used + 20]), (vec![], UNKNOWN));
}

/// The messages of version 1, in its order.
#[derive(Debug, Deserialize)]
#[allow(dead_code, reason = "only which of them was read matters")]
enum MessageOfVersion1 {
    Hello(message::Hello),
    Settings(message::Settings),
    Summary(message::Summary),
    Excursion(message::Excursion),
    Storm(message::Storm),
    Snippet(message::SnippetPart),
    Gap(message::Gap),
    Levels(message::Levels),
    Spectrum(message::SpectrumPart),
    Totals(message::Totals),
    Loss(message::Loss),
    Reply(message::Reply),
    End(message::End),
}
/// The longest frame of version 1.
const FRAME_BYTES_OF_VERSION_1: usize = 458;

/// What a reader of version 1 makes of a frame: its envelope and whether it knows the message; and counts.
fn read_by_version_1(frame: &[u8]) -> (Vec<(Envelope, bool)>, DecoderCounts) {
    let mut decoder = Decoder::<FRAME_BYTES_OF_VERSION_1>::new();
    let mut items = Vec::new();
    decoder.feed(frame, |body| {
        let (envelope, rest) = postcard::take_from_bytes(body).unwrap();
        items.push((envelope, postcard::from_bytes::<MessageOfVersion1>(rest).is_ok()));
    });
    (items, decoder.counts())
}

#[test]
fn a_reader_of_version_1_skips_later_messages_and_reads_the_rest() {
    for (name, frame) in specimens::device_frames() {
        let golden = sealed(&golden_content("Golden messages", name));
        let is_known = !["Spectra", "Rate"].contains(&name);
        assert_eq!(read_by_version_1(&golden), (vec![(frame.envelope, is_known)], SOUND), "{name}");
    }
}

/// A full payload of spectra still fits the buffer of version 1 after a month at a million pairs a
/// second; with numbers longer than that it is counted as oversize, and the next frame is read.
#[test]
fn a_reader_of_version_1_stays_in_step_behind_the_longest_spectra() {
    let mut messages = specimens::longest_messages().into_iter();
    let mut spectra = messages.find(|message| matches!(message, Message::Spectra(_))).unwrap();
    let mut read = |envelope| {
        let mut bytes = [0; DEVICE_FRAME_BYTES];
        let frame = DeviceFrame { envelope, message: spectra.clone() };
        let used = encode_device_frame(&frame, &mut bytes).unwrap();
        let gap = sealed(&golden_content("Golden messages", "Gap"));
        let read = read_by_version_1(&[&bytes[..used], &gap].concat());
        let Message::Spectra(part) = &mut spectra else { panic!("it is Spectra") };
        let month = 30 * 86_400 * 1_000_000;
        *part = SpectraPart { first_sample: month, span_samples: month, segments: 1 << 27, ..*part };
        (part.skipped, part.other) = (1 << 27, 1 << 27);
        read
    };
    let (items, counts) = read(specimens::longest_envelope());
    assert_eq!((items.len(), items[0].1), (1, true), "the gap alone");
    assert_eq!((counts.oversize_frames, counts.sound_frames), (1, 1));
    let (items, counts) = read(specimens::passing(u32::MAX, 30 * 86_400 * 1_000_000));
    assert_eq!(items.iter().map(|item| item.1).collect::<Vec<_>>(), [false, true]);
    assert_eq!((counts.oversize_frames, counts.sound_frames), (0, 2));
}

#[test]
fn a_later_enum_number_inside_a_known_message_makes_it_unknown() {
    let mut content = golden_content("Golden messages", "Gap");
    assert_eq!(content.pop(), Some(0), "the cause is the last field of a gap");
    content.push(4);
    let (items, counts) = read(&content);
    assert_eq!((items.len(), items[0].1.is_none(), counts), (1, true, UNKNOWN));
}

#[test]
fn a_later_delivery_class_leaves_nothing_to_read() {
    let mut content = golden_content("Golden messages", "Summary of nothing");
    assert_eq!(content[7], 0, "delivery stands behind boot id (5), sequence and sample (1 each)");
    content[7] = 2;
    assert_eq!(read(&content), (vec![], UNKNOWN));
}

#[test]
fn a_later_command_is_skipped_but_can_be_answered() {
    let mut decoder = RequestDecoder::new();
    let mut seen = Vec::new();
    decoder.feed_sequences(&sealed(&[0xAC, 0x02, 7, 1, 2, 3]), |sequence, command| {
        seen.push((sequence, command))
    });
    decoder.feed_sequences(&sealed(&[1, 5]), |sequence, command| seen.push((sequence, command)));
    assert_eq!(seen, [(300, None), (1, Some(Command::Start))]);
    assert_eq!(decoder.counts(), DecoderCounts { sound_frames: 2, ..UNKNOWN });
    decoder.feed_requests(&sealed(&[2, 7]), |request| panic!("invented {request:?}"));
    assert_eq!(decoder.counts().unknown_frames, 2);
}

#[test]
fn bytes_behind_the_last_field_are_ignored() {
    for (name, frame) in specimens::device_frames() {
        let longer = [golden_content("Golden messages", name), vec![0xFF; 5]].concat();
        assert_eq!(read_frames(&longer), (vec![frame], SOUND), "{name}");
    }
}

#[test]
fn every_content_cut_short_is_unknown() {
    for (name, _) in specimens::device_frames() {
        let content = golden_content("Golden messages", name);
        for length in 0..content.len() {
            assert_eq!(read_frames(&content[..length]), (vec![], UNKNOWN), "{name} cut to {length} bytes");
        }
    }
}

#[test]
fn voltages_beyond_the_bound_are_refused() {
    // WatchLimits, receiver Custom, no terminal window, average from 0 to `high`.
    let with_high = |high: i32| {
        let mut buffer = [0; 8];
        [&[1, 2, 13, 0, 1, 0], &*postcard::to_slice(&high, &mut buffer).unwrap()].concat()
    };
    for (high, known) in
        [(1_000_000_000, 1), (1_000_000_001, 0), (-1_000_000_001, 0), (i32::MIN, 0), (i32::MAX, 0)]
    {
        let mut decoder = RequestDecoder::new();
        let mut requests = 0;
        decoder.feed_requests(&sealed(&with_high(high)), |_| requests += 1);
        assert_eq!((requests, decoder.counts().unknown_frames), (known, 1 - known), "{high} µV");
    }
}

#[test]
fn a_bool_that_is_neither_and_a_string_too_long_are_refused() {
    let mut content = golden_content("Golden messages", "Summary");
    assert_eq!(content.pop(), Some(1), "the alarm is the last field of a summary");
    content.push(2);
    assert_eq!(read_frames(&content), (vec![], UNKNOWN));

    let content = golden_content("Golden messages", "Spectrum");
    let bytes = content.len() - 6;
    for (length, counts) in [(384_usize, SOUND), (385, UNKNOWN)] {
        let mut longer = content[..bytes - 1].to_vec();
        longer.extend([(length & 0x7F) as u8 | 0x80, (length >> 7) as u8]);
        longer.resize(longer.len() + length, 9);
        assert_eq!(read_frames(&longer).1, counts, "{length} bytes of codes");
    }
}
