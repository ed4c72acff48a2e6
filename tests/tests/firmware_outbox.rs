//! What the outbox promises: nothing kept is lost in silence, nothing passing is lost unseen.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

use legwise_firmware::outbox::Outbox;
use legwise_protocol::bytes::Bytes;
use legwise_protocol::decoder::DeviceDecoder;
use legwise_protocol::framing::{DEVICE_FRAME_BYTES, Delivery, DeviceFrame, MESSAGE_BYTES};
use legwise_protocol::message::{Gap, GapCause, Loss, Message, SnippetPart, Summary};

/// Twice the longest message and some: small, so that it fills.
const SMALL: usize = 2 * MESSAGE_BYTES + 200;
type SmallBox = Outbox<SMALL, SMALL>;

fn gap(at: u64) -> Message {
    Message::Gap(Gap { first_sample: at, samples: 1, cause: GapCause::Overrun })
}

fn summary(at: u64) -> Message {
    Message::Summary(Summary { first_sample: at, samples: 256, ..Summary::default() })
}

fn snippet() -> Message {
    let blocks = Bytes::from_slice_cut(&[0xa5; 300]);
    Message::Snippet(SnippetPart { excursion: 1, first_sample: 9, samples: 64, part: 0, more: false, blocks })
}

/// Sends everything that waits.
fn drain<const KEPT: usize, const PASSING: usize>(outbox: &mut Outbox<KEPT, PASSING>) -> Vec<DeviceFrame> {
    let (mut decoder, mut frames) = (DeviceDecoder::new(), Vec::new());
    let mut buffer = [0xee; DEVICE_FRAME_BYTES];
    loop {
        let length = outbox.next_frame(&mut buffer);
        if length == 0 {
            return frames;
        }
        decoder.feed_frames(&buffer[..length], |frame| frames.push(frame));
    }
}

fn numbers(frames: &[DeviceFrame]) -> Vec<u32> {
    frames
        .iter()
        .filter_map(|frame| match frame.envelope.delivery {
            Delivery::Kept { number } => Some(number),
            Delivery::Passing => None,
        })
        .collect()
}

fn losses(frames: &[DeviceFrame]) -> Vec<Loss> {
    let loss = |frame: &DeviceFrame| if let Message::Loss(loss) = frame.message { Some(loss) } else { None };
    frames.iter().filter_map(loss).collect()
}

/// An empty outbox of boot 5.
fn outbox<const KEPT: usize, const PASSING: usize>() -> Outbox<KEPT, PASSING> {
    let mut outbox = Outbox::new();
    outbox.begin(5);
    outbox
}

#[test]
fn both_classes_leave_in_the_order_they_were_made() {
    let mut outbox = outbox::<8_192, 8_192>();
    let made = [gap(0), summary(1), summary(2), gap(3), snippet(), summary(5), gap(6)];
    for (sample, message) in made.iter().enumerate() {
        outbox.record(message, sample as u64);
    }
    let frames = drain(&mut outbox);
    let said: Vec<Message> = frames.iter().map(|frame| frame.message.clone()).collect();
    assert_eq!(said, made);
    assert!(frames.iter().enumerate().all(|(n, frame)| frame.envelope.sequence == n as u32
        && frame.envelope.sample == n as u64
        && frame.envelope.boot_id == 5));
    assert_eq!(numbers(&frames), [1, 2, 3, 4]);
    assert!(outbox.is_sent());
}

#[test]
fn kept_messages_are_sent_again_with_their_numbers_until_acknowledged() {
    let mut outbox = outbox::<8_192, 8_192>();
    for at in 0..6 {
        outbox.record(&gap(at), at);
        outbox.record(&summary(at), at);
    }
    let first = drain(&mut outbox);
    assert_eq!(numbers(&first), [1, 2, 3, 4, 5, 6]);
    assert!(drain(&mut outbox).is_empty());
    outbox.acknowledge(2);
    outbox.send_again();
    let again = drain(&mut outbox);
    assert_eq!(numbers(&again), [3, 4, 5, 6]);
    // The same but for the sequence number, which counts frames; passing ones come once.
    assert_eq!(again.len(), 4);
    assert_eq!(again[0].envelope.sequence, 12);
    for frame in &again {
        let twin = first.iter().find(|one| one.envelope.delivery == frame.envelope.delivery).unwrap();
        assert_eq!((&twin.message, twin.envelope.sample), (&frame.message, frame.envelope.sample));
    }
    outbox.acknowledge(6);
    outbox.send_again();
    assert!(drain(&mut outbox).is_empty());
}

#[test]
fn acknowledgements_of_numbers_never_sent_or_long_forgotten_change_nothing() {
    let mut outbox = outbox::<8_192, 8_192>();
    for at in 0..4 {
        outbox.record(&gap(at), at);
    }
    outbox.acknowledge(1);
    let mut buffer = [0; DEVICE_FRAME_BYTES];
    assert!(outbox.next_frame(&mut buffer) > 0 && outbox.next_frame(&mut buffer) > 0);
    for through in [3, 4, 5, 1_000, u32::MAX, 0] {
        outbox.acknowledge(through);
    }
    outbox.send_again();
    assert_eq!(numbers(&drain(&mut outbox)), [1, 2, 3, 4]);
    outbox.acknowledge(3);
    outbox.acknowledge(3);
    outbox.acknowledge(1);
    outbox.record(&gap(9), 9);
    outbox.send_again();
    assert_eq!(numbers(&drain(&mut outbox)), [4, 5]);
}

#[test]
fn a_number_sent_before_a_repetition_may_still_be_acknowledged() {
    // WIRE.md section 8 rule 8: only beyond the highest number sent is an acknowledgement ignored.
    let mut outbox = outbox::<8_192, 8_192>();
    for at in 0..5 {
        outbox.record(&gap(at), at);
    }
    drain(&mut outbox);
    outbox.send_again();
    let mut buffer = [0; DEVICE_FRAME_BYTES];
    assert!(outbox.next_frame(&mut buffer) > 0);
    outbox.acknowledge(3);
    assert_eq!(numbers(&drain(&mut outbox)), [4, 5]);
    outbox.acknowledge(5);
    outbox.record(&gap(7), 7);
    assert_eq!(numbers(&drain(&mut outbox)), [6]);
}

#[test]
fn oldest_passing_messages_are_shed_first_and_leave_holes_in_the_sequence() {
    let mut outbox: SmallBox = outbox();
    outbox.record(&gap(0), 0);
    let made = 100;
    for at in 1..=made {
        outbox.record(&summary(at), at);
    }
    let frames = drain(&mut outbox);
    let shed = outbox.shed();
    assert!(shed > 10, "the queue must have overflowed: {shed}");
    assert_eq!(frames.len() as u64 + u64::from(shed), made + 1);
    // The kept one is there, and the newest passing ones without a hole among them.
    assert_eq!(frames[0].message, gap(0));
    let samples: Vec<u64> = frames[1..].iter().map(|frame| frame.envelope.sample).collect();
    assert_eq!(samples, (u64::from(shed) + 1..=made).collect::<Vec<_>>());
    // Sequence numbers used up: frames sent plus messages shed.
    outbox.record(&summary(0), 0);
    let next = drain(&mut outbox);
    assert_eq!(u64::from(next[0].envelope.sequence), made + 1);
    let sequences: Vec<u32> = frames.iter().chain(&next).map(|frame| frame.envelope.sequence).collect();
    let missing = sequences[sequences.len() - 1] + 1 - sequences.len() as u32;
    assert_eq!(missing, shed, "{sequences:?}");
}

#[test]
fn snippets_are_refused_before_other_kept_messages_and_the_loss_is_told() {
    let mut outbox: SmallBox = outbox();
    for at in 0..5 {
        outbox.record(&snippet(), at);
    }
    let refused = outbox.loss().snippet_parts;
    assert!(refused >= 3 && outbox.loss().records == 0, "{:?}", outbox.loss());
    // There is still room for what matters more.
    outbox.record(&gap(7), 7);
    assert_eq!(outbox.loss(), Loss { snippet_parts: refused, records: 0 });
    let mut frames = drain(&mut outbox);
    assert!(frames.iter().any(|frame| frame.message == gap(7)));
    outbox.acknowledge(*numbers(&frames).last().unwrap());
    frames.extend(drain(&mut outbox));
    // Told when there was room, perhaps in steps; the last account is the whole.
    let told = losses(&frames);
    assert_eq!(told.last(), Some(&Loss { snippet_parts: refused, records: 0 }), "{told:?}");
}

#[test]
fn a_loss_is_told_as_soon_as_an_acknowledgement_makes_room_though_nothing_else_happens() {
    let mut outbox: SmallBox = outbox();
    let made = 300;
    for at in 0..made {
        outbox.record(&gap(at), at);
    }
    let lost = outbox.loss().records;
    assert!(lost > 10);
    let frames = drain(&mut outbox);
    let last = *numbers(&frames).last().unwrap();
    outbox.acknowledge(last);
    let after = drain(&mut outbox);
    assert_eq!(losses(&after).last(), Some(&Loss { snippet_parts: 0, records: lost }), "{after:?}");
    assert_eq!(numbers(&after), [last + 1], "numbers have no hole: what was lost never had one");
    // Told once.
    outbox.acknowledge(last + 1);
    outbox.record(&gap(made), made);
    assert_eq!(losses(&drain(&mut outbox)), []);
    let gaps = frames.iter().filter(|frame| matches!(frame.message, Message::Gap(_))).count();
    assert_eq!(gaps as u64 + u64::from(lost), made);
}
