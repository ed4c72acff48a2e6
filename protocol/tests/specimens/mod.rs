//! One value of every message and every command, by the name it has in WIRE.md.
//!
//! Values are invented; they mix signs, varint lengths and absent options so that a swapped or
//! missing field shows.
#![allow(dead_code, unused_imports, reason = "each test file uses its share")]

mod longest;

pub use longest::*;

use legwise_protocol::bytes::Bytes;
use legwise_protocol::command::{Command, Request};
use legwise_protocol::cross::BinCodes;
use legwise_protocol::framing::{Delivery, DeviceFrame, Envelope};
use legwise_protocol::limits::{Limit, LimitMask, LimitSet, Window};
use legwise_protocol::message::*;
use legwise_protocol::receivers::ReceiverId;
use legwise_protocol::units::Span;

pub const BOOT_ID: u32 = 0x5EED_0001;

pub fn passing(sequence: u32, sample: u64) -> Envelope {
    Envelope { boot_id: BOOT_ID, sequence, sample, delivery: Delivery::Passing }
}

pub fn kept(sequence: u32, sample: u64, number: u32) -> Envelope {
    Envelope { boot_id: BOOT_ID, sequence, sample, delivery: Delivery::Kept { number } }
}

fn span(low: i32, high: i32) -> Span {
    Span { low, high }
}

fn extremes(low: i32, low_sample: u64, high: i32, high_sample: u64) -> Extremes {
    Extremes {
        low: Moment { value: low, sample: low_sample },
        high: Moment { value: high, sample: high_sample },
    }
}

pub fn scale() -> LegScale {
    LegScale {
        mantissa: 96_000_000,
        shift: 14,
        offset_uv: -12_000_000,
        rail_low_code: 0,
        rail_high_code: 4095,
        gain_uncertainty_ppm: 2_500,
        offset_uncertainty_uv: 6_000,
    }
}

pub fn hello() -> Hello {
    Hello {
        wire_version: 1,
        firmware_version: (0, 1, 300),
        board: Bytes::from_slice_cut("Prüfstand".as_bytes()),
        serial: 0x0123_4567_89AB,
        reset_cause: ResetCause::PowerOn,
        sample_rate_mhz: 500_000_000,
        skew_ns: -250,
        legs: [scale(), LegScale { mantissa: -96_000_001, shift: 40, offset_uv: 63, ..scale() }],
    }
}

pub fn limits() -> LimitSet {
    LimitSet {
        terminal: Some(Window::from_millivolts(-7_000, 12_000)),
        average: Some(Window::from_millivolts(-7_001, 12_001)),
    }
}

pub fn detection() -> Detection {
    Detection {
        hysteresis_uv: 100_000,
        hold_off_samples: 16,
        longest_samples: 500_000,
        storm_samples: 250_000,
        storm_after: 8,
        idle_below_uv: 600_000,
        edge_step_uv: 400_000,
    }
}

pub fn reporting() -> Reporting {
    Reporting {
        summary_samples: 128_000,
        levels_samples: 4_992_000,
        spectrum_segments: 200,
        spectrum_skip: 3,
        snippet_before: 256,
        snippet_after: 768,
        snippets_per_window: 4,
    }
}

pub fn breach() -> Breach {
    Breach {
        limits: LimitMask::only(Limit::LegBLow).with(LimitMask::only(Limit::AverageLow)),
        worst_limit: Limit::AverageLow,
        extreme_twice_uv: -17_250_002,
        extreme_sample: 3_000_000_123,
        outside_samples: 41,
        area_twice_uv_samples: 77_000_000_000,
        dm: span(-1_900_000, 2_100_000),
        clipped_samples: 2,
    }
}

pub fn totals() -> Totals {
    Totals {
        first_sample: 256,
        samples: 21_600_000_000,
        clipped: 5,
        outside: 300,
        outside_by_limit: [1, 20, 300, 4_000, 50_000, 600_000],
        excursions: 9,
        edge_suspects: 7,
        gaps: 2,
        gap_samples: 1_024,
        leg_a: extremes(-1_200_000, 11, 5_100_000, 1_000_000),
        leg_b: extremes(-1_300_000, 12, 5_200_000, 1_000_001),
        twice_cm: extremes(-17_250_002, 3_000_000_123, 9_800_000, 13),
        dm: Extremes::EMPTY,
    }
}

fn excursion() -> Excursion {
    Excursion {
        number: 9,
        first_sample: 3_000_000_100,
        samples: 64,
        breach: breach(),
        part: Part::Finish,
        is_edge_suspect: false,
        is_cut: true,
    }
}

fn snippet() -> SnippetPart {
    let mut blocks = [0; 64];
    let used = legwise_protocol::snippet::encode_block(&[2048, 2050, 1990], &[2040, 2041, 2100], &mut blocks);
    SnippetPart {
        excursion: 9,
        first_sample: 2_999_999_844,
        samples: 3,
        part: 1,
        more: true,
        blocks: Bytes::from_slice_cut(&blocks[..used.unwrap()]),
    }
}

fn levels() -> Levels {
    Levels {
        first_sample: 4_992_000,
        samples: 4_992_000,
        idle: Some(Level { dm_uv: 210_000, samples: 3_900_000 }),
        driven_high: Some(Level { dm_uv: 2_050_000, samples: 500_000 }),
        driven_low: None,
        mid_samples: 77,
        idle_cm: Plateau { samples: 3_899_990, twice_cm_uv: 4_700_001 },
        high_cm: Plateau { samples: 499_000, twice_cm_uv: -3 },
        low_cm: Plateau { samples: 0, twice_cm_uv: 0 },
    }
}

fn spectrum() -> SpectrumPart {
    SpectrumPart {
        first_sample: 512,
        span_samples: 103_000,
        mode: Mode::Differential,
        rung: 0,
        points: 1024,
        segments: 200,
        skipped: 600,
        first_bin: 192,
        codes: Bytes::from_slice_cut(&[0x00, 0x00, 0x34, 0x12, 0xFF, 0xFF]),
    }
}

fn spectra() -> SpectraPart {
    let mut codes = Bytes::new();
    for bin in [
        BinCodes::encode(2.5e-9, 4.0e-13, (-3.1e-11, 2.0e-12)),
        BinCodes::encode(0.0, 1.0, (0.0, -0.5)),
        BinCodes { common: 0x1234, differential: 0xFFFF, cross: (0xFFF, 0x001) },
    ] {
        assert!(codes.extend(&bin.to_bytes()));
    }
    SpectraPart {
        first_sample: 512,
        span_samples: 819_200,
        set: SegmentSet::Driven,
        rung: 1,
        points: 1024,
        segments: 199,
        skipped: 0,
        other: 1_000,
        from_bin: 47,
        bins: 312,
        first_bin: 101,
        codes,
    }
}

fn summary() -> Summary {
    Summary {
        first_sample: 128_000,
        samples: 128_000,
        leg_a: span(-1_200_000, 5_100_000),
        leg_b: span(-1_300_000, 5_200_000),
        twice_cm: span(-2_500_000, 10_300_000),
        dm: span(-2_200_000, 2_300_000),
        twice_cm_mean_uv: 4_999_999,
        clipped: 1,
        outside: 200,
        excursions: 3,
        alarm: true,
    }
}

fn storm() -> Storm {
    Storm { excursions: 992, edge_suspects: 12, first_sample: 70_000, samples: 249_000, breach: breach() }
}

/// A frame of every message, in the order of the message numbers, with further forms behind.
pub fn device_frames() -> Vec<(&'static str, DeviceFrame)> {
    let settings = Settings {
        receiver: ReceiverId::Tia485A,
        limits: limits(),
        detection: detection(),
        reporting: reporting(),
    };
    let unjudged = Settings { receiver: ReceiverId::Mbp, limits: LimitSet::default(), ..settings };
    let gap = Gap { first_sample: 900_000, samples: 1_024, cause: GapCause::Overrun };
    let reply = Reply { to: 70_000, outcome: Outcome::OutOfRange };
    let end = End { cause: EndCause::Stopped, totals: totals() };
    let rate = RateChange { first_sample: 30_000_128, sample_rate_mhz: 512_820_512 };
    [
        ("Hello", passing(0, 0), Message::Hello(hello())),
        ("Settings", kept(1, 0, 1), Message::Settings(settings)),
        ("Summary", passing(2, 256_000), Message::Summary(summary())),
        ("Excursion", kept(3, 3_000_000_180, 2), Message::Excursion(excursion())),
        ("Storm", kept(4, 3_000_250_000, 300), Message::Storm(storm())),
        ("Snippet", kept(5, 3_000_250_256, 301), Message::Snippet(snippet())),
        ("Gap", kept(6, 3_000_250_512, u32::MAX), Message::Gap(gap)),
        ("Levels", passing(127, 9_984_000), Message::Levels(levels())),
        ("Spectrum", passing(128, 103_512), Message::Spectrum(spectrum())),
        ("Totals", passing(16_384, 21_600_001_280), Message::Totals(totals())),
        ("Loss", kept(16_385, 21_600_001_280, 303), Message::Loss(Loss { snippet_parts: 130, records: 1 })),
        ("Reply", passing(u32::MAX, u64::MAX), Message::Reply(reply)),
        ("End", kept(0, 21_600_001_280, 304), Message::End(end)),
        ("Spectra", passing(129, 820_224), Message::Spectra(spectra())),
        ("Rate", kept(131, 30_000_128, 305), Message::Rate(rate)),
        ("Settings that judge nothing", kept(1, 0, 1), Message::Settings(unjudged)),
        ("Summary of nothing", passing(9, 5), Message::Summary(Summary::default())),
    ]
    .into_iter()
    .map(|(name, envelope, message)| (name, DeviceFrame { envelope, message }))
    .collect()
}

/// A request of every command, in the order of the command numbers, with further forms behind.
pub fn requests() -> Vec<(&'static str, Request)> {
    let average_only = LimitSet { terminal: None, ..limits() };
    [
        ("Identify", 0, Command::Identify),
        ("Acknowledge", 1, Command::Acknowledge { through: 300 }),
        ("WatchLimits", 2, Command::WatchLimits { receiver: ReceiverId::Tia485A, limits: limits() }),
        ("SetDetection", 3, Command::SetDetection(detection())),
        ("SetReporting", 4, Command::SetReporting(reporting())),
        ("Start", 127, Command::Start),
        ("Stop", 128, Command::Stop),
        (
            "WatchLimits, average only",
            u32::MAX,
            Command::WatchLimits { receiver: ReceiverId::Custom, limits: average_only },
        ),
    ]
    .into_iter()
    .map(|(name, sequence, command)| (name, Request { sequence, command }))
    .collect()
}
