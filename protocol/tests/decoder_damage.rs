//! Ten million random and mutated byte strings: no panic, fixed memory, no intact frame lost.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

mod specimens;
mod streams;
mod tables;

use legwise_protocol::decoder::{DeviceDecoder, RequestDecoder};
use legwise_protocol::framing::{DEVICE_FRAME_BYTES, REQUEST_FRAME_BYTES};
use streams::{Damage, Model, Reader};

// Memory does not depend on the input: a decoder is its buffer, an index, a flag and five counts.
const _: () = assert!(size_of::<DeviceDecoder>() <= DEVICE_FRAME_BYTES + 64);
const _: () = assert!(size_of::<RequestDecoder>() <= REQUEST_FRAME_BYTES + 64);

/// Feeds `strings` strings; after each, exactly the intact frames must have come out.
fn survive<R: Reader>(strings: u64, seed: u64) {
    let sent = R::sent(seed);
    let mut damage = Damage::new(&sent, R::LONGEST, seed + 1);
    let mut model = Model::new(&sent, R::LONGEST);
    let mut reader = R::default();
    let (mut string, mut expected) = (Vec::new(), Vec::new());
    for round in 0..strings {
        damage.next(&mut string);
        expected.clear();
        model.take(&string, &mut expected);
        let mut due = expected.iter();
        reader.take(&string, |item| {
            let index = *due.next().unwrap_or_else(|| panic!("string {round}: invented {item:?}"));
            assert_eq!(item, sent[index].0, "string {round}");
        });
        assert_eq!(due.len(), 0, "string {round}: an intact frame was lost");
        model.settle_chance(reader.seen().unknown_frames);
        if round % 1024 == 0 || round + 1 == strings {
            assert_eq!(reader.seen(), model.counts().0, "string {round}");
        }
    }
    let (counts, held_bytes) = model.counts();
    assert_eq!(model.fed_bytes, model.zeros + model.sound_bytes + counts.dropped_bytes + held_bytes);
    // The mixture must have had everything in it, in numbers.
    assert!(counts.sound_frames > strings / 4 && counts.damaged_frames > strings / 4, "{counts:?}");
    assert!(counts.oversize_frames > strings / 20, "{counts:?}");
    println!("{strings} strings, {} bytes: {counts:?}", model.fed_bytes);
}

#[test]
fn host_decoder_survives_ten_million_strings_and_loses_no_intact_frame() {
    survive::<DeviceDecoder>(10_000_000, 0x00DD_BA11);
}

#[test]
fn device_decoder_survives_two_million_strings_and_loses_no_intact_request() {
    survive::<RequestDecoder>(2_000_000, 0x00DD_BA12);
}

#[test]
fn a_delimiter_first_saves_the_frame_after_a_half_sent_one() {
    let sent = DeviceDecoder::sent(1);
    let (half, whole) = (&sent[0].1[..20], &sent[1].1);
    let mut decoder = DeviceDecoder::new();
    let mut read = Vec::new();
    decoder.feed_frames(half, |frame| read.push(frame));
    decoder.feed_frames(&[0], |frame| read.push(frame));
    decoder.feed_frames(whole, |frame| read.push(frame));
    assert_eq!(read, [sent[1].0.clone()]);
    assert_eq!((decoder.counts().damaged_frames, decoder.counts().dropped_bytes), (1, 20));
}

#[test]
fn restart_forgets_half_a_frame_without_counting_it() {
    let sent = DeviceDecoder::sent(1);
    for length in [20, 2 * DEVICE_FRAME_BYTES] {
        let mut decoder = DeviceDecoder::new();
        let mut read = Vec::new();
        decoder.feed_frames(&vec![7; length], |_| panic!("there is no frame yet"));
        let before = decoder.counts();
        decoder.restart();
        assert_eq!(decoder.counts(), before);
        decoder.feed_frames(&sent[1].1, |frame| read.push(frame));
        assert_eq!(read, [sent[1].0.clone()]);
        assert_eq!(decoder.counts().damaged_frames, 0);
    }
}
