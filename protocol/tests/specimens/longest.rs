//! The longest form of every message and every command: every varint at its longest, every option filled.

use super::{extremes, span};
use legwise_protocol::bytes::Bytes;
use legwise_protocol::command::Command;
use legwise_protocol::framing::{Delivery, Envelope};
use legwise_protocol::limits::{Limit, LimitMask, LimitSet, Window};
use legwise_protocol::message::*;
use legwise_protocol::receivers::ReceiverId;
use legwise_protocol::units::Microvolts;

/// The longest form of every message: every varint at its longest, every option filled.
pub fn longest_messages() -> Vec<Message> {
    let (low, high) = (i32::MIN, i32::MAX);
    let wide = span(low, high);
    let leg = LegScale {
        mantissa: low,
        shift: u8::MAX,
        offset_uv: low,
        rail_low_code: low,
        rail_high_code: high,
        gain_uncertainty_ppm: u32::MAX,
        offset_uncertainty_uv: u32::MAX,
    };
    let breach = Breach {
        limits: LimitMask::from_bits_cut(u8::MAX),
        worst_limit: Limit::AverageLow,
        extreme_twice_uv: low,
        extreme_sample: u64::MAX,
        outside_samples: u64::MAX,
        area_twice_uv_samples: u64::MAX,
        dm: wide,
        clipped_samples: u64::MAX,
    };
    let extreme = extremes(low, u64::MAX, high, u64::MAX);
    let totals = Totals {
        first_sample: u64::MAX,
        samples: u64::MAX,
        clipped: u64::MAX,
        outside: u64::MAX,
        outside_by_limit: [u64::MAX; 6],
        excursions: u64::MAX,
        edge_suspects: u64::MAX,
        gaps: u64::MAX,
        gap_samples: u64::MAX,
        leg_a: extreme,
        leg_b: extreme,
        twice_cm: extreme,
        dm: extreme,
    };
    let level = Some(Level { dm_uv: low, samples: u32::MAX });
    let plateau = Plateau { samples: u32::MAX, twice_cm_uv: low };
    let payload = Bytes::from_slice_cut(&[0xFF; PAYLOAD_BYTES]);
    vec![
        Message::Hello(Hello {
            wire_version: u16::MAX,
            firmware_version: (u16::MAX, u16::MAX, u16::MAX),
            board: Bytes::from_slice_cut(&[b'm'; NAME_BYTES]),
            serial: u64::MAX,
            reset_cause: ResetCause::Software,
            sample_rate_mhz: u64::MAX,
            skew_ns: low,
            legs: [leg; 2],
        }),
        Message::Settings(Settings {
            receiver: ReceiverId::Custom,
            limits: longest_limits(),
            detection: longest_detection(),
            reporting: longest_reporting(),
        }),
        Message::Summary(Summary {
            first_sample: u64::MAX,
            samples: u32::MAX,
            leg_a: wide,
            leg_b: wide,
            twice_cm: wide,
            dm: wide,
            twice_cm_mean_uv: low,
            clipped: u32::MAX,
            outside: u32::MAX,
            excursions: u32::MAX,
            alarm: true,
        }),
        Message::Excursion(Excursion {
            number: u64::MAX,
            first_sample: u64::MAX,
            samples: u32::MAX,
            breach,
            part: Part::Finish,
            is_edge_suspect: true,
            is_cut: true,
        }),
        Message::Storm(Storm {
            excursions: u32::MAX,
            edge_suspects: u32::MAX,
            first_sample: u64::MAX,
            samples: u64::MAX,
            breach,
        }),
        Message::Snippet(SnippetPart {
            excursion: u64::MAX,
            first_sample: u64::MAX,
            samples: u16::MAX,
            part: u8::MAX,
            more: true,
            blocks: payload,
        }),
        Message::Gap(Gap { first_sample: u64::MAX, samples: u64::MAX, cause: GapCause::Resynchronised }),
        Message::Levels(Levels {
            first_sample: u64::MAX,
            samples: u32::MAX,
            idle: level,
            driven_high: level,
            driven_low: level,
            mid_samples: u32::MAX,
            idle_cm: plateau,
            high_cm: plateau,
            low_cm: plateau,
        }),
        Message::Spectrum(SpectrumPart {
            first_sample: u64::MAX,
            span_samples: u64::MAX,
            mode: Mode::Differential,
            rung: u8::MAX,
            points: u16::MAX,
            segments: u32::MAX,
            skipped: u32::MAX,
            first_bin: u16::MAX,
            codes: payload,
        }),
        Message::Totals(totals),
        Message::Loss(Loss { snippet_parts: u32::MAX, records: u32::MAX }),
        Message::Reply(Reply { to: u32::MAX, outcome: Outcome::Unsupported }),
        Message::End(End { cause: EndCause::Stopped, totals }),
        Message::Spectra(SpectraPart {
            first_sample: u64::MAX,
            span_samples: u64::MAX,
            set: SegmentSet::Driven,
            rung: u8::MAX,
            points: u16::MAX,
            segments: u32::MAX,
            skipped: u32::MAX,
            other: u32::MAX,
            from_bin: u16::MAX,
            bins: u16::MAX,
            first_bin: u16::MAX,
            codes: payload,
        }),
        Message::Rate(RateChange { first_sample: u64::MAX, sample_rate_mhz: u64::MAX }),
    ]
}

/// The longest envelope.
pub fn longest_envelope() -> Envelope {
    Envelope {
        boot_id: u32::MAX,
        sequence: u32::MAX,
        sample: u64::MAX,
        delivery: Delivery::Kept { number: u32::MAX },
    }
}

fn longest_limits() -> LimitSet {
    let widest =
        Window { low: Microvolts::from_uv(-Microvolts::BOUND), high: Microvolts::from_uv(Microvolts::BOUND) };
    LimitSet { terminal: Some(widest), average: Some(widest) }
}

fn longest_detection() -> Detection {
    Detection {
        hysteresis_uv: u32::MAX,
        hold_off_samples: u32::MAX,
        longest_samples: u32::MAX,
        storm_samples: u32::MAX,
        storm_after: u32::MAX,
        idle_below_uv: u32::MAX,
        edge_step_uv: u32::MAX,
    }
}

fn longest_reporting() -> Reporting {
    Reporting {
        summary_samples: u32::MAX,
        levels_samples: u32::MAX,
        spectrum_segments: u32::MAX,
        spectrum_skip: u16::MAX,
        snippet_before: u16::MAX,
        snippet_after: u16::MAX,
        snippets_per_window: u16::MAX,
    }
}

/// The longest form of every command.
pub fn longest_commands() -> Vec<Command> {
    vec![
        Command::Identify,
        Command::Acknowledge { through: u32::MAX },
        Command::WatchLimits { receiver: ReceiverId::Custom, limits: longest_limits() },
        Command::SetDetection(longest_detection()),
        Command::SetReporting(longest_reporting()),
        Command::Start,
        Command::Stop,
    ]
}
