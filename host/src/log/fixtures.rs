//! Messages, frames and logs for the tests of this crate. Every field has a value of its own, so that
//! swapped columns show.

use super::{About, Arrival, Log, Origin};
use legwise_protocol::bytes::Bytes;
use legwise_protocol::cross::BinCodes;
use legwise_protocol::framing::{DEVICE_FRAME_BYTES, Delivery, DeviceFrame, Envelope, encode_device_frame};
use legwise_protocol::limits::{Limit, LimitMask};
use legwise_protocol::message::*;
use legwise_protocol::receivers::{self, ReceiverId};
use legwise_protocol::snippet::{BLOCK_BYTES, encode_block};
use legwise_protocol::units::Span;
use rusqlite::types::ValueRef;

pub(crate) const BOOT: u32 = 0x0BAD_CAFE;
pub(crate) const RATE_MHZ: u64 = 500_000_000;
/// 2023-11-14T22:13:20Z.
pub(crate) const NOW_NS: i64 = 1_700_000_000_000_000_000;

pub(crate) fn about() -> About {
    About {
        origin: Origin::Simulated,
        origin_name: "a quiet night".into(),
        point: Some("west end".into()),
        tool_version: "0.0.0".into(),
        created_utc_ns: NOW_NS,
        stores_clock: true,
    }
}

pub(crate) fn temporary() -> Log {
    Log::temporary(&about()).unwrap()
}

/// `ms` milliseconds after the beginning.
pub(crate) fn at_ms(ms: i64) -> Arrival {
    Arrival { utc_ns: NOW_NS + ms * 1_000_000, monotonic_ns: 5_000_000_000 + ms * 1_000_000 }
}

pub(crate) fn scale() -> LegScale {
    LegScale {
        mantissa: 15_000 << 8,
        shift: 8,
        offset_uv: -30_720_000,
        rail_low_code: 0,
        rail_high_code: 4095,
        gain_uncertainty_ppm: 1500,
        offset_uncertainty_uv: 2500,
    }
}

pub(crate) fn hello() -> Hello {
    Hello {
        wire_version: 1,
        firmware_version: (2, 3, 4),
        board: Bytes::from_slice_cut("bench board".as_bytes()),
        serial: u64::MAX,
        reset_cause: ResetCause::BrownOut,
        sample_rate_mhz: RATE_MHZ,
        skew_ns: -250,
        legs: [scale(), LegScale { offset_uv: 17, ..scale() }],
    }
}

pub(crate) fn settings() -> Settings {
    Settings {
        receiver: ReceiverId::Tia485A,
        limits: receivers::by_id(ReceiverId::Tia485A).unwrap().limits(),
        detection: Detection {
            hysteresis_uv: 1,
            hold_off_samples: 2,
            longest_samples: 3,
            storm_samples: 4,
            storm_after: 5,
            idle_below_uv: 6,
            edge_step_uv: 7,
        },
        reporting: Reporting {
            summary_samples: 8,
            levels_samples: 9,
            spectrum_segments: 10,
            spectrum_skip: 11,
            snippet_before: 12,
            snippet_after: 13,
            snippets_per_window: 14,
        },
    }
}

pub(crate) fn summary(first_sample: u64) -> Summary {
    Summary {
        first_sample,
        samples: 500_000,
        leg_a: Span { low: -1, high: 2 },
        leg_b: Span { low: -3, high: 4 },
        twice_cm: Span { low: -5, high: 6 },
        dm: Span { low: -7, high: 8 },
        twice_cm_mean_uv: -9,
        clipped: 10,
        outside: 11,
        excursions: 12,
        alarm: true,
    }
}

pub(crate) fn breach() -> Breach {
    Breach {
        limits: LimitMask::only(Limit::LegBLow).with(LimitMask::only(Limit::AverageLow)),
        worst_limit: Limit::LegBLow,
        extreme_twice_uv: -20_000_001,
        extreme_sample: 1_234_567_890_123,
        outside_samples: 21,
        area_twice_uv_samples: i64::MAX as u64,
        dm: Span { low: -22, high: 23 },
        clipped_samples: 24,
    }
}

pub(crate) fn excursion(number: u64) -> Excursion {
    Excursion {
        number,
        first_sample: 1_234_567_890_000,
        samples: 333,
        breach: breach(),
        part: Part::Finish,
        is_edge_suspect: true,
        is_cut: false,
    }
}

/// The pairs in [`snippet`].
pub(crate) fn snippet_codes() -> ([i32; 100], [i32; 100]) {
    let leg_a = std::array::from_fn(|index| 2048 + (index as i32 * 37) % 101);
    let leg_b = std::array::from_fn(|index| 2048 - (index as i32 * 53) % 89);
    (leg_a, leg_b)
}

/// Two blocks: 64 pairs and 36 pairs.
pub(crate) fn snippet() -> SnippetPart {
    let (leg_a, leg_b) = snippet_codes();
    let mut blocks = Bytes::new();
    for range in [0..64, 64..100] {
        let mut block = [0; BLOCK_BYTES];
        let used = encode_block(&leg_a[range.clone()], &leg_b[range], &mut block).unwrap();
        assert!(blocks.extend(&block[..used]));
    }
    SnippetPart { excursion: 31, first_sample: 1_234_567_889_950, samples: 100, part: 2, more: true, blocks }
}

pub(crate) fn levels() -> Levels {
    Levels {
        first_sample: 41,
        samples: 42,
        idle: Some(Level { dm_uv: 43, samples: 44 }),
        driven_high: Some(Level { dm_uv: 45, samples: 46 }),
        driven_low: Some(Level { dm_uv: -47, samples: 48 }),
        mid_samples: 49,
        idle_cm: Plateau { samples: 50, twice_cm_uv: -51 },
        high_cm: Plateau { samples: 52, twice_cm_uv: 53 },
        low_cm: Plateau { samples: 54, twice_cm_uv: -55 },
    }
}

/// A spectrum of 257 bins in two parts; code of a bin = bin number + `seed`.
pub(crate) fn spectrum(first_sample: u64, mode: Mode, seed: u16) -> [SpectrumPart; 2] {
    [(0, 192), (192, 257)].map(|(first_bin, end)| {
        let mut codes = Bytes::new();
        for bin in first_bin..end {
            assert!(codes.extend(&(bin + seed).to_le_bytes()));
        }
        SpectrumPart {
            first_sample,
            span_samples: 61,
            mode,
            rung: 3,
            points: 512,
            segments: 62,
            skipped: 63,
            first_bin,
            codes,
        }
    })
}

/// Spectra of bins 30 to 129 in two parts; the codes of each bin are its number + `seed`, and beyond.
pub(crate) fn spectra(first_sample: u64, set: SegmentSet, seed: u16) -> [SpectraPart; 2] {
    [(30, 84), (84, 130)].map(|(first_bin, end)| {
        let mut codes = Bytes::new();
        for bin in first_bin..end {
            assert!(codes.extend(&bin_codes(bin, seed).to_bytes()));
        }
        SpectraPart {
            first_sample,
            span_samples: 64,
            set,
            rung: 1,
            points: 256,
            segments: 65,
            skipped: 66,
            other: 67,
            from_bin: 30,
            bins: 100,
            first_bin,
            codes,
        }
    })
}

/// The codes of a bin of [`spectra`].
pub(crate) fn bin_codes(bin: u16, seed: u16) -> BinCodes {
    let common = bin + seed + 30_000;
    BinCodes { common, differential: common + 1_000, cross: (bin + seed + 0x300, bin + seed + 0xB00) }
}

pub(crate) fn totals(samples: u64) -> Totals {
    let moment = |value| Moment { value, sample: 70 + value.unsigned_abs() as u64 };
    let extremes = |low, high| Extremes { low: moment(low), high: moment(high) };
    Totals {
        first_sample: 71,
        samples,
        clipped: 73,
        outside: 74,
        outside_by_limit: [75, 76, 77, 78, 79, 80],
        excursions: 81,
        edge_suspects: 82,
        gaps: 83,
        gap_samples: 84,
        leg_a: extremes(-1, 2),
        leg_b: extremes(-3, 4),
        twice_cm: extremes(-5, 6),
        dm: Extremes::EMPTY,
    }
}

pub(crate) fn storm() -> Storm {
    Storm { excursions: 91, edge_suspects: 92, first_sample: 93, samples: 94, breach: breach() }
}

pub(crate) fn gap() -> Gap {
    Gap { first_sample: 101, samples: 102, cause: GapCause::Resynchronised }
}

/// Every kind of message, in the order a device would say them.
pub(crate) fn one_of_each() -> Vec<Message> {
    let [common, common_rest] = spectrum(1000, Mode::Common, 5).map(Message::Spectrum);
    let [differential, differential_rest] = spectrum(1000, Mode::Differential, 9).map(Message::Spectrum);
    let [idle, idle_rest] = spectra(1000, SegmentSet::Idle, 5).map(Message::Spectra);
    let [driven, driven_rest] = spectra(1000, SegmentSet::Driven, 9).map(Message::Spectra);
    vec![
        Message::Hello(hello()),
        Message::Settings(settings()),
        Message::Summary(summary(1000)),
        Message::Excursion(excursion(1)),
        Message::Storm(storm()),
        Message::Snippet(snippet()),
        Message::Gap(gap()),
        Message::Levels(levels()),
        common,
        differential,
        common_rest,
        differential_rest,
        idle,
        driven,
        idle_rest,
        driven_rest,
        Message::Totals(totals(72)),
        Message::Loss(Loss { snippet_parts: 111, records: 112 }),
        Message::Reply(Reply { to: 121, outcome: Outcome::Unsupported }),
        Message::Rate(RateChange { first_sample: 1 << 40, sample_rate_mhz: 131 }),
        Message::End(End { cause: EndCause::Stopped, totals: totals(7200) }),
    ]
}

/// Messages as a device that starts at `boot_id` sends them: numbered, a millisecond of samples apart.
pub(crate) fn frames(boot_id: u32, messages: impl IntoIterator<Item = Message>) -> Vec<DeviceFrame> {
    let mut number = 0;
    let frame = |(sequence, message): (usize, Message)| {
        let delivery = if message.is_kept() {
            number += 1;
            Delivery::Kept { number }
        } else {
            Delivery::Passing
        };
        let sample = 500 * sequence as u64;
        DeviceFrame { envelope: Envelope { boot_id, sequence: sequence as u32, sample, delivery }, message }
    };
    messages.into_iter().enumerate().map(frame).collect()
}

pub(crate) fn encode(frame: &DeviceFrame) -> Vec<u8> {
    let mut bytes = [0; DEVICE_FRAME_BYTES];
    let used = encode_device_frame(frame, &mut bytes).unwrap();
    bytes[..used].to_vec()
}

pub(crate) fn encode_all(frames: &[DeviceFrame]) -> Vec<u8> {
    frames.iter().flat_map(encode).collect()
}

/// Rows of `table`.
pub(crate) fn count(log: &Log, table: &str) -> i64 {
    log.connection().query_row(&format!("SELECT count(*) FROM {table}"), [], |row| row.get(0)).unwrap()
}

/// All rows of all tables as text, in a fixed order: equal logs give equal dumps.
pub(crate) fn dump(log: &Log) -> String {
    let mut text = String::new();
    for table in super::TABLES {
        let mut statement = log.connection().prepare(&format!("SELECT * FROM {table}")).unwrap();
        let columns = statement.column_count();
        let mut rows = statement.query([]).unwrap();
        while let Some(row) = rows.next().unwrap() {
            text.push_str(table);
            for column in 0..columns {
                let value = match row.get_ref(column).unwrap() {
                    ValueRef::Text(bytes) => format!(" {}", String::from_utf8_lossy(bytes)),
                    other => format!(" {other:?}"),
                };
                text.push_str(&value);
            }
            text.push('\n');
        }
    }
    text
}
