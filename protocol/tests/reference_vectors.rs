//! Checksum, stuffing and number forms against published vectors (`tests/vectors/framing.json`).
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

mod tables;

use crc::{CRC_16_IBM_3740, CRC_32_ISCSI, CRC_32_ISO_HDLC, Crc};
use legwise_protocol::decoder::Decoder;
use serde_json::Value;
use tables::{bytes_of, checksum, hex_of, unstuff};

fn vectors() -> Value {
    let path = concat!(env!("CARGO_MANIFEST_DIR"), "/../tests/vectors/framing.json");
    serde_json::from_str(&std::fs::read_to_string(path).unwrap()).unwrap()
}

fn number(value: &Value) -> u64 {
    u64::from_str_radix(value.as_str().unwrap().trim_start_matches("0x"), 16).unwrap()
}

/// Cook, Catalogue of parametrised CRC algorithms: check = CRC of "123456789".
#[test]
fn checksums_are_those_of_the_catalogue() {
    let vectors = vectors();
    let hdlc = Crc::<u32>::new(&CRC_32_ISO_HDLC);
    let iscsi = Crc::<u32>::new(&CRC_32_ISCSI);
    let ibm = Crc::<u16>::new(&CRC_16_IBM_3740);
    let inputs =
        [("check", &b"123456789"[..]), ("empty", b""), ("00000000", &[0; 4]), ("ffffffff", &[0xFF; 4])];
    for (key, input) in inputs {
        let expected = |name: &str| number(&vectors["crc"][name][key]);
        assert_eq!(u64::from(hdlc.checksum(input)), expected("CRC-32/ISO-HDLC"), "{key}");
        assert_eq!(
            u64::from(checksum(input)),
            expected("CRC-32/ISO-HDLC"),
            "{key}: the one written out in these tests"
        );
        assert_eq!(u64::from(iscsi.checksum(input)), expected("CRC-32/ISCSI"), "{key}");
        assert_eq!(u64::from(ibm.checksum(input)), expected("CRC-16/IBM-3740"), "{key}");
    }
    assert_eq!(checksum(b"123456789"), 0xCBF4_3926);
    // Residue of the catalogue, as CRC over message and its own CRC, low byte first: 0x2144DF1C.
    let whole = [&b"123456789"[..], &0xCBF4_3926_u32.to_le_bytes()].concat();
    assert_eq!(checksum(&whole), 0x2144_DF1C);
}

/// The decoder itself accepts the catalogue's check value and nothing next to it.
#[test]
fn the_decoder_uses_the_catalogue_checksum_low_byte_first() {
    for (crc, sound) in [(0xCBF4_3926_u32.to_le_bytes(), 1), (0xCBF4_3926_u32.to_be_bytes(), 0), ([0; 4], 0)]
    {
        let mut frame = [0; 32];
        let used = cobs::try_encode(&[&b"123456789"[..], &crc].concat(), &mut frame).unwrap();
        let mut decoder = Decoder::<32>::new();
        let mut bodies = Vec::new();
        decoder.feed(&frame[..=used], |body| bodies.push(body.to_vec()));
        assert_eq!(bodies.len(), sound);
        assert!(bodies.iter().all(|body| body == b"123456789"));
        assert_eq!(decoder.counts().damaged_frames, 1 - sound as u64);
    }
}

/// Cheshire and Baker 1999, tables and boundary cases.
#[test]
fn stuffing_is_that_of_the_paper() {
    let vectors = vectors();
    let cases = vectors["cobs"].as_array().unwrap();
    assert_eq!(cases.len(), 12);
    for case in cases {
        let raw = bytes_of(case["raw"].as_str().unwrap());
        let stuffed = case["enc"].as_str().unwrap();
        let mut output = [0xA5; 300];
        let used = cobs::try_encode(&raw, &mut output).unwrap();
        assert_eq!(hex_of(&output[..used]), stuffed);
        let length = cobs::decode_in_place(&mut output[..used]).unwrap();
        assert_eq!(output[..length], raw);
        assert_eq!(unstuff(&bytes_of(stuffed)), Some(raw), "the one written out in these tests");
    }
}

/// Some writers end a last run of 254 bytes with a further 01: both forms must be read.
#[test]
fn both_endings_of_a_full_run_are_read() {
    let raw: Vec<u8> = (1..=254).collect();
    for ending in [&[][..], &[1]] {
        let mut stuffed = [&[0xFF], raw.as_slice(), ending].concat();
        let length = cobs::decode_in_place(&mut stuffed).unwrap();
        assert_eq!(stuffed[..length], raw);
    }
}

/// The postcard book, wire format, "varint" and "signed integer encoding".
#[test]
fn varints_and_zigzag_are_those_of_the_book() {
    let vectors = vectors();
    let mut buffer = [0; 16];
    for (value, hex) in vectors["varint"].as_object().unwrap() {
        let value: u64 = value.parse().unwrap();
        assert_eq!(
            hex_of(postcard::to_slice(&value, &mut buffer).unwrap()),
            hex.as_str().unwrap(),
            "{value}"
        );
        assert_eq!(postcard::from_bytes(&bytes_of(hex.as_str().unwrap())), Ok(value));
    }
    for (value, hex) in vectors["zigzag_i16"].as_object().unwrap() {
        let value: i16 = value.parse().unwrap();
        assert_eq!(
            hex_of(postcard::to_slice(&value, &mut buffer).unwrap()),
            hex.as_str().unwrap(),
            "{value}"
        );
        assert_eq!(postcard::from_bytes(&bytes_of(hex.as_str().unwrap())), Ok(value));
    }
    // The book's table prints FF FF 02 for i16 32767, against its own zig-zag column (0xFFFE):
    // 0xFFFE is FE FF 03 as a varint. FF FF 02 would be 49151 before zig-zag, which is -24576.
    assert_eq!(postcard::from_bytes::<i16>(&[0xFE, 0xFF, 0x03]), Ok(32_767));
    assert_eq!(postcard::from_bytes::<i16>(&[0xFF, 0xFF, 0x02]), Ok(-24_576));
}

#[test]
fn longer_varints_than_needed_are_read_and_larger_than_the_type_refused() {
    assert_eq!(postcard::from_bytes::<u16>(&[0x80, 0x80, 0x00]), Ok(0));
    assert!(postcard::from_bytes::<u16>(&[0xFF, 0xFF, 0x07]).is_err());
    assert!(postcard::from_bytes::<u32>(&[0xFF, 0xFF, 0xFF, 0xFF, 0x1F]).is_err());
    assert!(postcard::from_bytes::<u16>(&[0x80, 0x80, 0x80, 0x00]).is_err());
}
