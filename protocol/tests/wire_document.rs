//! WIRE.md and the code say the same: numbers, fields, lengths, classes, bytes, worked examples.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

mod specimens;
mod tables;

use legwise_protocol::command::Command;
use legwise_protocol::decoder::{DecoderCounts, DeviceDecoder, RequestDecoder};
use legwise_protocol::framing::*;
use legwise_protocol::limits::{Limit, LimitMask};
use legwise_protocol::message::*;
use legwise_protocol::receivers::ReceiverId;
use legwise_protocol::{WIRE_VERSION, cross, power, snippet};
use serde::Serialize;
use serde::de::DeserializeOwned;
use std::collections::BTreeMap;
use std::fmt::Debug;
use tables::{TableReader, bytes_of, content_of, hex_of, longest, longest_carried, table};

const JUNK: u8 = 0xA5;

fn encoded<T: Serialize>(value: &T) -> Vec<u8> {
    let mut buffer = [JUNK; 1024];
    postcard::to_slice(value, &mut buffer).unwrap().to_vec()
}

/// Pins number and name of every variant, and that there is none beyond: the next number is refused.
fn pin<T: Serialize + DeserializeOwned + Debug>(name: &str, values: &[T]) {
    let rows = table(&format!("enum {name}"));
    assert_eq!(rows.len(), values.len(), "{name}");
    for (number, (row, value)) in rows.iter().zip(values).enumerate() {
        let words = format!("{value:?}");
        let variant = words.split(|c: char| !c.is_alphanumeric()).next().unwrap();
        assert_eq!(usize::from(encoded(value)[0]), number, "{name}::{variant}");
        assert_eq!(
            (row["number"].as_str(), row["name"].as_str()),
            (number.to_string().as_str(), variant),
            "{name}"
        );
    }
    let mut beyond = [0; 600];
    beyond[0] = values.len() as u8;
    assert!(postcard::from_bytes::<T>(&beyond).is_err(), "{name} has a number that WIRE.md does not list");
}

#[test]
fn every_enum_number_is_the_documented_one() {
    use ReceiverId::*;
    pin("Delivery", &[Delivery::Passing, Delivery::Kept { number: 7 }]);
    pin("Message", &specimens::longest_messages());
    pin("Command", &specimens::longest_commands());
    pin("Outcome", &[Outcome::Done, Outcome::OutOfRange, Outcome::Unsupported]);
    pin("GapCause", &[GapCause::Overrun, GapCause::Skipped, GapCause::Stopped, GapCause::Resynchronised]);
    pin("Part", &[Part::Whole, Part::Begin, Part::Middle, Part::Finish]);
    pin("Mode", &[Mode::Common, Mode::Differential]);
    pin("SegmentSet", &[SegmentSet::Idle, SegmentSet::Driven]);
    pin("EndCause", &[EndCause::SourceExhausted, EndCause::Stopped]);
    pin("Limit", &Limit::ALL);
    let causes = [ResetCause::Unknown, ResetCause::PowerOn, ResetCause::Pin, ResetCause::Watchdog];
    pin("ResetCause", &[&causes[..], &[ResetCause::BrownOut, ResetCause::Software]].concat());
    let older = [Tia485A, Tia422B, V11, CanHighSpeed2003, CanHighSpeed2016, CanFaultTolerant, J1939];
    pin(
        "ReceiverId",
        &[&older[..], &[Lvds644A, MlvdsType1, MlvdsType2, FlexRay, Mil1553B, Mbp, Custom]].concat(),
    );
    assert_eq!(tables::headings("enum ").len(), 12, "an enum in WIRE.md is not pinned here");
}

#[test]
fn limit_numbers_are_the_mask_bits() {
    for (bit, limit) in Limit::ALL.into_iter().enumerate() {
        assert_eq!((limit as usize, LimitMask::only(limit).bits()), (bit, 1 << bit));
    }
}

#[test]
fn class_and_length_of_every_message_are_the_documented_ones() {
    for (row, message) in table("enum Message").iter().zip(specimens::longest_messages()) {
        assert_eq!(row["class"], if message.is_kept() { "kept" } else { "passing" }, "{}", row["name"]);
        assert_eq!(row["longest"], encoded(&message).len().to_string(), "{}", row["name"]);
    }
    for (row, command) in table("enum Command").iter().zip(specimens::longest_commands()) {
        assert_eq!(row["longest"], encoded(&command).len().to_string(), "{}", row["name"]);
    }
}

/// Varints look alike, so a wrong width in a table would go unseen in short values: it shows here.
#[test]
fn types_in_the_tables_give_the_longest_lengths_of_the_code() {
    for heading in ["enum Message", "enum Command"] {
        for row in table(heading) {
            assert_eq!(row["longest"], (1 + longest_carried(&row["carries"])).to_string(), "{}", row["name"]);
        }
    }
    assert_eq!(longest("Envelope"), ENVELOPE_BYTES);
    assert_eq!(longest("DeviceFrame") + CRC_BYTES, DEVICE_BODY_BYTES);
    assert_eq!(longest("Request") + CRC_BYTES, REQUEST_BODY_BYTES);
}

#[test]
fn lengths_are_the_documented_ones() {
    let code = [
        ("CRC_BYTES", CRC_BYTES),
        ("NAME_BYTES", NAME_BYTES),
        ("PAYLOAD_BYTES", PAYLOAD_BYTES),
        ("MESSAGE_BYTES", MESSAGE_BYTES),
        ("ENVELOPE_BYTES", ENVELOPE_BYTES),
        ("DEVICE_BODY_BYTES", DEVICE_BODY_BYTES),
        ("DEVICE_FRAME_BYTES", DEVICE_FRAME_BYTES),
        ("REQUEST_BODY_BYTES", REQUEST_BODY_BYTES),
        ("REQUEST_FRAME_BYTES", REQUEST_FRAME_BYTES),
        ("BLOCK_PAIRS", snippet::BLOCK_PAIRS),
        ("BLOCK_BYTES", snippet::BLOCK_BYTES),
        ("BIN_BYTES", cross::BIN_BYTES),
        ("WIRE_VERSION", usize::from(WIRE_VERSION)),
    ];
    let code: BTreeMap<String, String> =
        code.map(|(name, bytes)| (name.to_owned(), bytes.to_string())).into();
    let page: BTreeMap<_, _> =
        table("Lengths").iter().map(|row| (row["what"].clone(), row["bytes"].clone())).collect();
    assert_eq!(page, code);
}

/// The rows of a golden table: name and bytes.
fn goldens(heading: &str) -> Vec<(String, Vec<u8>)> {
    table(heading).iter().map(|row| (row["name"].clone(), bytes_of(&row["frame"]))).collect()
}

fn assert_golden(name: &str, made: &[u8], buffer: &[u8], golden: &[u8]) {
    assert_eq!(hex_of(made), hex_of(golden), "{name}");
    assert!(
        buffer[made.len()..].iter().all(|&byte| byte == JUNK),
        "{name}: bytes behind the frame were touched"
    );
}

#[test]
fn golden_messages_are_what_the_code_writes_and_reads() {
    let (rows, frames) = (goldens("Golden messages"), specimens::device_frames());
    assert_eq!(rows.len(), frames.len());
    for ((name, golden), (specimen, frame)) in rows.iter().zip(frames) {
        assert_eq!(name, specimen);
        let mut buffer = [JUNK; DEVICE_FRAME_BYTES + 16];
        let used = encode_device_frame(&frame, &mut buffer).unwrap();
        assert_golden(name, &buffer[..used], &buffer, golden);

        let mut decoder = DeviceDecoder::new();
        let mut read = Vec::new();
        decoder.feed_frames(golden, |frame| read.push(frame));
        assert_eq!(read, [frame], "{name}");
        assert_eq!(decoder.counts(), DecoderCounts { sound_frames: 1, ..DecoderCounts::default() });
    }
}

#[test]
fn golden_requests_are_what_the_code_writes_and_reads() {
    let (rows, requests) = (goldens("Golden requests"), specimens::requests());
    assert_eq!(rows.len(), requests.len());
    for ((name, golden), (specimen, request)) in rows.iter().zip(requests) {
        assert_eq!(name, specimen);
        let mut buffer = [JUNK; REQUEST_FRAME_BYTES + 16];
        let used = encode_request(&request, &mut buffer).unwrap();
        assert_golden(name, &buffer[..used], &buffer, golden);

        let mut decoder = RequestDecoder::new();
        let mut read = Vec::new();
        decoder.feed_requests(golden, |request| read.push(request));
        assert_eq!(read, [request], "{name}");
        assert_eq!(decoder.counts(), DecoderCounts { sound_frames: 1, ..DecoderCounts::default() });
    }
}

/// The tables alone suffice to read a frame, and they name every field as the code does.
#[test]
fn golden_frames_can_be_read_with_the_tables_alone() {
    let frames = specimens::device_frames();
    let requests = specimens::requests();
    let frames = frames.iter().map(|(_, frame)| serde_json::to_value(frame).unwrap());
    let requests = requests.iter().map(|(_, request)| serde_json::to_value(request).unwrap());
    for ((name, golden), value) in goldens("Golden messages").iter().zip(frames) {
        read_with_tables(name, "DeviceFrame", golden, &value);
    }
    for ((name, golden), value) in goldens("Golden requests").iter().zip(requests) {
        read_with_tables(name, "Request", golden, &value);
    }
}

fn read_with_tables(name: &str, kind: &str, golden: &[u8], value: &serde_json::Value) {
    let content = content_of(golden);
    let mut reader = TableReader::new(&content);
    assert_eq!(&reader.value(kind), value, "{name}");
    assert!(reader.rest().is_empty(), "{name}: the tables leave bytes over");
}

#[test]
fn every_message_and_command_has_a_golden_frame() {
    for (heading, golden) in [("enum Message", "Golden messages"), ("enum Command", "Golden requests")] {
        let names: Vec<String> = goldens(golden).into_iter().map(|(name, _)| name).collect();
        for row in table(heading) {
            assert!(names.contains(&row["name"]), "{} has no golden frame", row["name"]);
        }
    }
    assert!(matches!(specimens::requests()[0].1.command, Command::Identify));
}

#[test]
fn worked_power_codes_hold() {
    for row in table("Worked codes") {
        let (power, code): (f32, u16) = (row["power"].parse().unwrap(), row["code"].parse().unwrap());
        let back: f64 = row["back"].parse().unwrap();
        assert_eq!(power::encode(power), code, "{power:e}");
        assert!((power::decode(code) - back).abs() <= 1e-15 * back, "{:e}", power::decode(code));
    }
}

#[test]
fn worked_cross_codes_hold() {
    for row in table("Worked cross codes") {
        let number = |name: &str| -> f64 { row[name].parse().unwrap() };
        let code = |name: &str| u16::from_str_radix(&row[name], 16).unwrap();
        let (real, imaginary) = (code("real code"), code("imaginary code"));
        assert_eq!(cross::encode(number("real") as f32), real, "{row:?}");
        assert_eq!(cross::encode(number("imaginary") as f32), imaginary, "{row:?}");
        assert_eq!(hex_of(&cross::pack(real, imaginary)), row["bytes"]);
        let bytes = bytes_of(&row["bytes"]).try_into().unwrap();
        assert_eq!(cross::unpack(bytes), (real, imaginary));
        for (code, back) in [(real, number("real back")), (imaginary, number("imaginary back"))] {
            assert!((cross::decode(code) - back).abs() <= 1e-15 * back.abs(), "{:e}", cross::decode(code));
        }
    }
}

/// The examples obey the stated rule in exact rational arithmetic (nearest, ties upward, bounded), and
/// so does the code.
#[test]
fn worked_scales_hold() {
    for row in table("Worked scales") {
        let number = |name: &str| -> i128 { row[name].parse().unwrap() };
        // floor(x + 1/2) with x = code * mantissa / 2^shift, by Euclidean division.
        let denominator = 1_i128 << number("shift").clamp(1, 40);
        let twice = 2 * number("code") * number("mantissa") + denominator;
        let nearest = twice.div_euclid(2 * denominator);
        let bounded = (nearest + number("offset_uv")).clamp(-1_000_000_000, 1_000_000_000);
        assert_eq!(bounded, number("result_uv"), "{row:?}");
        let scale = LegScale {
            mantissa: number("mantissa") as i32,
            shift: number("shift") as u8,
            offset_uv: number("offset_uv") as i32,
            ..specimens::scale()
        };
        assert_eq!(i128::from(scale.microvolts(number("code") as i32)), bounded, "{row:?}");
    }
}

#[test]
fn worked_blocks_are_what_the_code_writes_and_reads() {
    let codes =
        |cell: &str| -> Vec<i32> { cell.split_whitespace().map(|code| code.parse().unwrap()).collect() };
    for row in table("Worked blocks") {
        let (leg_a, leg_b, golden) = (codes(&row["leg A"]), codes(&row["leg B"]), bytes_of(&row["block"]));
        let mut buffer = [JUNK; snippet::BLOCK_BYTES];
        let used = snippet::encode_block(&leg_a, &leg_b, &mut buffer).unwrap();
        assert_golden(&row["leg A"], &buffer[..used], &buffer, &golden);
        let (mut a, mut b) = ([0; snippet::BLOCK_PAIRS], [0; snippet::BLOCK_PAIRS]);
        assert_eq!(snippet::decode_block(&golden, &mut a, &mut b), Ok((leg_a.len(), golden.len())));
        assert_eq!((&a[..leg_a.len()], &b[..leg_b.len()]), (&leg_a[..], &leg_b[..]));
    }
}
