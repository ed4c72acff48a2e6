//! Settings that make sense: defaults for a source, and the check every change must pass.

use crate::block::BLOCK_PAIRS;
use crate::snippet_ring::{LONGEST_AFTER, LONGEST_BEFORE};
use legwise_protocol::limits::{LimitSet, Window};
use legwise_protocol::message::{Detection, Reporting, Settings};
use legwise_protocol::receivers::{Receiver, ReceiverId};

/// |DM| at or below which a pair counts as not driven, for limits the user brought: 0.6 V.
const CUSTOM_IDLE_BELOW_UV: u32 = 600_000;
/// Longest interval for levels, so that no histogram sum overflows (see [`crate::levels`]).
pub const LONGEST_LEVELS_SAMPLES: u32 = 1 << 22;

/// Settings for a receiver at a sample rate, reporting at a pace that fits a 115 200 baud link:
/// readings every 0.5 s, levels, totals and spectra every 2 s.
pub fn for_receiver(receiver: &Receiver, sample_rate_mhz: u64) -> Settings {
    let limits = receiver.limits();
    Settings {
        receiver: receiver.id,
        limits,
        detection: detection_for(&limits, receiver.idle_below_mv.saturating_mul(1000), sample_rate_mhz),
        reporting: reporting_for(sample_rate_mhz),
    }
}

/// Settings for windows the user brought.
pub fn for_limits(limits: LimitSet, sample_rate_mhz: u64) -> Settings {
    Settings {
        receiver: ReceiverId::Custom,
        limits,
        detection: detection_for(&limits, CUSTOM_IDLE_BELOW_UV, sample_rate_mhz),
        reporting: reporting_for(sample_rate_mhz),
    }
}

fn detection_for(limits: &LimitSet, idle_below_uv: u32, sample_rate_mhz: u64) -> Detection {
    // 50 mV, but never more than a hundredth of the narrowest window.
    let narrowest = [limits.terminal, limits.average].into_iter().flatten().map(Window::width_uv).min();
    let hysteresis_uv = narrowest.map_or(50_000, |width| (width / 100).clamp(1, 50_000)) as u32;
    let second = samples_in(sample_rate_mhz, 1000);
    Detection {
        hysteresis_uv,
        hold_off_samples: 4,
        longest_samples: second.saturating_mul(10),
        storm_samples: second,
        storm_after: 16,
        idle_below_uv,
        edge_step_uv: idle_below_uv,
    }
}

fn reporting_for(sample_rate_mhz: u64) -> Reporting {
    Reporting {
        summary_samples: whole_blocks(samples_in(sample_rate_mhz, 500)),
        levels_samples: whole_blocks(samples_in(sample_rate_mhz, 2000)).min(LONGEST_LEVELS_SAMPLES),
        spectrum_segments: (samples_in(sample_rate_mhz, 2000) / (crate::fft::POINTS as u32 / 2)).max(1),
        spectrum_skip: 0,
        snippet_before: 128,
        snippet_after: 384,
        snippets_per_window: 2,
    }
}

/// Pairs in `milliseconds`, at least 1.
fn samples_in(sample_rate_mhz: u64, milliseconds: u64) -> u32 {
    let samples = sample_rate_mhz.saturating_mul(milliseconds) / 1_000_000;
    samples.clamp(1, u64::from(u32::MAX / 16)) as u32
}

/// `samples` rounded up to whole blocks.
fn whole_blocks(samples: u32) -> u32 {
    samples.div_ceil(BLOCK_PAIRS as u32).max(1).saturating_mul(BLOCK_PAIRS as u32)
}

/// Whether windows are in order and wide enough for the hysteresis.
pub fn are_limits_valid(limits: &LimitSet, hysteresis_uv: u32) -> bool {
    [limits.terminal, limits.average]
        .into_iter()
        .flatten()
        .all(|window| window.width_uv() > 2 * i64::from(hysteresis_uv))
}

/// Whether the numbers of a [`Detection`] are in range.
pub const fn is_detection_valid(detection: &Detection) -> bool {
    detection.hysteresis_uv <= 100_000_000
        && detection.hold_off_samples >= 1
        && detection.longest_samples >= 1
        && detection.storm_samples >= 1
        && detection.storm_after >= 1
        && detection.idle_below_uv >= 1
        && detection.idle_below_uv <= 100_000_000
        && detection.edge_step_uv >= 1
}

/// Whether the numbers of a [`Reporting`] are in range: lengths are whole blocks.
pub const fn is_reporting_valid(reporting: &Reporting) -> bool {
    let block = BLOCK_PAIRS as u32;
    reporting.summary_samples >= block
        && reporting.summary_samples.is_multiple_of(block)
        && reporting.levels_samples >= block
        && reporting.levels_samples.is_multiple_of(block)
        && reporting.levels_samples <= LONGEST_LEVELS_SAMPLES
        && reporting.spectrum_segments <= 1 << 20
        && reporting.snippet_before as usize <= LONGEST_BEFORE
        && reporting.snippet_after as usize <= LONGEST_AFTER
}

/// Whether all of a [`Settings`] is in range.
pub fn is_valid(settings: &Settings) -> bool {
    is_detection_valid(&settings.detection)
        && is_reporting_valid(&settings.reporting)
        && are_limits_valid(&settings.limits, settings.detection.hysteresis_uv)
}

#[cfg(test)]
mod tests {
    use super::*;
    use legwise_protocol::receivers::TABLE;

    #[test]
    fn defaults_pass_their_own_check_for_every_receiver_and_rate() {
        for receiver in &TABLE {
            for rate_hz in [1_000, 9_600, 200_000, 500_000, 10_000_000] {
                assert!(is_valid(&for_receiver(receiver, rate_hz * 1000)), "{} at {rate_hz}", receiver.name);
            }
        }
        assert!(is_valid(&for_limits(LimitSet::default(), 1)));
    }

    #[test]
    fn a_window_narrower_than_its_hysteresis_is_refused() {
        let window = Window::from_millivolts(0, 100);
        let limits = LimitSet { terminal: Some(window), average: None };
        assert!(!are_limits_valid(&limits, 50_000));
        assert!(are_limits_valid(&limits, 49_999));
        let reversed = LimitSet { terminal: None, average: Some(Window::from_millivolts(12, -7)) };
        assert!(!are_limits_valid(&reversed, 0));
    }
}
