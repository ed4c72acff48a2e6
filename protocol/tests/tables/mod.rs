//! The tables of WIRE.md, and a reader of frames that knows nothing but them.
//!
//! The reader has its own COBS, checksum and varints, written from the published descriptions, so
//! that page, golden bytes and crate are three witnesses and not one.
#![allow(dead_code, reason = "each test file uses its share")]

use serde_json::{Map, Value};
use std::collections::BTreeMap;

const PAGE: &str = include_str!("../../WIRE.md");

/// The rows of the first table under `heading`: one map from column name to cell per row.
pub fn table(heading: &str) -> Vec<BTreeMap<String, String>> {
    let mut lines = PAGE
        .lines()
        .skip_while(|line| line.trim_start_matches('#').trim() != heading || !line.starts_with('#'));
    assert!(lines.next().is_some(), "WIRE.md has no heading '{heading}'");
    let mut section =
        lines.take_while(|line| !line.starts_with('#')).skip_while(|line| !line.starts_with('|'));
    let header = cells(section.next().unwrap_or_else(|| panic!("no table under '{heading}'")));
    let rule = section.next().unwrap_or_default();
    assert!(rule.starts_with("|---"), "no rule under the header of '{heading}'");
    let rows: Vec<_> = section
        .take_while(|line| line.starts_with('|'))
        .map(|line| {
            let row = cells(line);
            assert_eq!(row.len(), header.len(), "ragged row under '{heading}': {line}");
            header.iter().cloned().zip(row).collect()
        })
        .collect();
    assert!(!rows.is_empty(), "empty table under '{heading}'");
    rows
}

/// The headings that open with `prefix`, without it.
pub fn headings(prefix: &str) -> Vec<&'static str> {
    PAGE.lines().filter_map(|line| line.strip_prefix("### ")?.strip_prefix(prefix)).collect()
}

fn cells(line: &str) -> Vec<String> {
    line.trim().trim_matches('|').split('|').map(|cell| cell.trim().trim_matches('`').to_owned()).collect()
}

/// Bytes from hexadecimal digits; blanks are ignored.
pub fn bytes_of(hex: &str) -> Vec<u8> {
    let digits: Vec<u8> = hex
        .chars()
        .filter(|c| !c.is_whitespace())
        .map(|c| c.to_digit(16).expect("a hexadecimal digit") as u8)
        .collect();
    assert!(digits.len().is_multiple_of(2), "half a byte in {hex}");
    digits.chunks(2).map(|pair| pair[0] << 4 | pair[1]).collect()
}

/// Hexadecimal digits of bytes, two each.
pub fn hex_of(bytes: &[u8]) -> String {
    bytes.iter().map(|byte| format!("{byte:02x}")).collect()
}

/// COBS taken apart byte by byte (Cheshire and Baker 1999, section II-A). `stuffed` has no delimiter.
pub fn unstuff(stuffed: &[u8]) -> Option<Vec<u8>> {
    let mut plain = Vec::new();
    let mut rest = stuffed;
    while let Some((&code, after)) = rest.split_first() {
        let run = usize::from(code).checked_sub(1)?;
        plain.extend_from_slice(after.get(..run)?);
        rest = &after[run..];
        if code != 0xFF && !rest.is_empty() {
            plain.push(0);
        }
    }
    Some(plain)
}

/// CRC-32/ISO-HDLC bit by bit, reflected form.
pub fn checksum(bytes: &[u8]) -> u32 {
    !bytes.iter().fold(u32::MAX, |crc, &byte| {
        (0..8).fold(crc ^ u32::from(byte), |crc, _| crc >> 1 ^ if crc & 1 == 1 { 0xEDB8_8320 } else { 0 })
    })
}

/// The content of a whole frame on the wire.
pub fn content_of(frame: &[u8]) -> Vec<u8> {
    let (delimiter, stuffed) = frame.split_last().expect("a frame has bytes");
    assert_eq!(*delimiter, 0);
    assert!(!stuffed.contains(&0), "a delimiter inside the frame");
    let mut body = unstuff(stuffed).expect("sound stuffing");
    let crc = body.split_off(body.len() - 4);
    assert_eq!(checksum(&body).to_le_bytes(), crc[..]);
    body
}

/// Reads values by the tables of WIRE.md into the shape serde gives them in JSON.
pub struct TableReader<'a> {
    rest: &'a [u8],
}

impl<'a> TableReader<'a> {
    pub fn new(content: &'a [u8]) -> Self {
        Self { rest: content }
    }

    /// What has not been read.
    pub fn rest(&self) -> &[u8] {
        self.rest
    }

    fn byte(&mut self) -> u8 {
        let (&first, rest) = self.rest.split_first().expect("the content ends too early");
        self.rest = rest;
        first
    }

    fn varint(&mut self) -> u64 {
        let mut value = 0;
        for shift in (0..).step_by(7) {
            let byte = self.byte();
            value |= u64::from(byte & 0x7F) << shift;
            if byte < 0x80 {
                break;
            }
        }
        value
    }

    /// One value of a type as the tables name it.
    pub fn value(&mut self, kind: &str) -> Value {
        if let Some(inner) = kind.strip_prefix("option ") {
            return if self.byte() == 0 { Value::Null } else { self.value(inner) };
        }
        if let Some((inner, count)) =
            kind.strip_prefix('[').and_then(|k| k.strip_suffix(']')?.split_once("; "))
        {
            let count: usize = count.parse().expect("a count");
            return (0..count).map(|_| self.value(inner)).collect();
        }
        if let Some(most) = kind.strip_prefix("bytes(").and_then(|k| k.strip_suffix(')')) {
            let count = self.varint();
            assert!(count <= most.parse().expect("a length"), "{count} bytes in {kind}");
            return (0..count).map(|_| Value::from(self.byte())).collect();
        }
        match kind {
            "bool" => Value::from(self.byte() == 1),
            "u8" | "LimitMask" => Value::from(self.byte()),
            "u16" | "u32" | "u64" => Value::from(self.varint()),
            "i32" | "Microvolts" => {
                let zigzag = self.varint() as i64;
                Value::from(if zigzag % 2 == 0 { zigzag / 2 } else { -(zigzag + 1) / 2 })
            }
            name if headings("enum ").contains(&name) => self.choice(name),
            name => self.fields(table(name).iter().map(|row| (row["field"].clone(), row["type"].clone()))),
        }
    }

    fn fields(&mut self, fields: impl Iterator<Item = (String, String)>) -> Value {
        let read: Map<String, Value> = fields.map(|(field, kind)| (field, self.value(&kind))).collect();
        Value::from(read)
    }

    fn choice(&mut self, name: &str) -> Value {
        let number = self.varint().to_string();
        let rows = table(&format!("enum {name}"));
        let row = rows.iter().find(|row| row["number"] == number);
        let row = row.unwrap_or_else(|| panic!("{name} has no number {number} in WIRE.md"));
        let carried = &row["carries"];
        let value = if carried.is_empty() {
            return Value::from(row["name"].clone());
        } else if carried.contains(": ") {
            let fields = carried.split(", ").map(|field| field.split_once(": ").expect("field: type"));
            self.fields(fields.map(|(field, kind)| (field.to_owned(), kind.to_owned())))
        } else {
            self.value(carried)
        };
        Value::from(Map::from_iter([(row["name"].clone(), value)]))
    }
}

/// Bytes of the longest form of a type, by the tables: what tells `u64` from `u32`.
pub fn longest(kind: &str) -> usize {
    if let Some(inner) = kind.strip_prefix("option ") {
        return 1 + longest(inner);
    }
    if let Some((inner, count)) = kind.strip_prefix('[').and_then(|k| k.strip_suffix(']')?.split_once("; ")) {
        return count.parse::<usize>().expect("a count") * longest(inner);
    }
    if let Some(most) = kind.strip_prefix("bytes(").and_then(|k| k.strip_suffix(')')) {
        let most: usize = most.parse().expect("a length");
        return most + if most < 128 { 1 } else { 2 };
    }
    match kind {
        "bool" | "u8" | "LimitMask" => 1,
        "u16" => 3,
        "u32" | "i32" | "Microvolts" => 5,
        "u64" => 10,
        name if headings("enum ").contains(&name) => {
            let rows = table(&format!("enum {name}"));
            1 + rows.iter().map(|row| longest_carried(&row["carries"])).max().unwrap_or(0)
        }
        name => table(name).iter().map(|row| longest(&row["type"])).sum(),
    }
}

/// Bytes of the longest form of what an enum number carries.
pub fn longest_carried(carried: &str) -> usize {
    match carried {
        "" => 0,
        fields if fields.contains(": ") => {
            fields.split(", ").map(|field| longest(field.split_once(": ").expect("field: type").1)).sum()
        }
        kind => longest(kind),
    }
}
