//! What a source was told by, in words: a few for the page, one sentence per observation for the JSON form.

use super::figures::{decibels, hertz, share, uncertainty_hertz, volts};
use crate::spectrum::families::{Fact, Family, Member, Mode, Role, Source};

/// Harmonics named one by one; more are counted.
const NAMED_HARMONICS: usize = 4;
/// From this share of a half-wave rectified sine's on, the second harmonic is worth a word.
const HALF_WAVE: f64 = 0.3;
/// Over so many decibels a floor is no floor but nothing: noise of the converter left no trace.
const MOST_DB: f64 = 120.0;

/// What the family was told by, in a few words.
pub(crate) fn summary(family: &Family) -> String {
    match &family.source {
        Source::Mains(shape) => {
            let mut text = multiples(family, "harmonic", "harmonics");
            let half_wave = [Mode::Common, Mode::Differential].map(|mode| shape.half_wave_share.of(mode));
            if half_wave.into_iter().flatten().any(|share| share >= HALF_WAVE) {
                text.push_str("; even harmonics as from a half-wave rectifier");
            }
            text
        }
        Source::Drive { output_hz } => {
            let sidebands = count(family, |role| matches!(role, Role::Sideband { .. }));
            let mut parts = vec![multiples(family, "multiple", "multiples")];
            if sidebands > 0 {
                parts.push(format!("{sidebands} {}", if sidebands == 1 { "sideband" } else { "sidebands" }));
            }
            if let Some((hz, uncertainty_hz)) = output_hz {
                parts.push(format!("output {} {}", hertz(*hz), uncertainty_hertz(*uncertainty_hz)));
            }
            parts.join(", ")
        }
        Source::Supply { smear } => {
            let multiples = multiples(family, "multiple", "multiples");
            if *smear > 0.0 { format!("{multiples}, {} wide", share(*smear)) } else { multiples }
        }
        Source::Traffic { frame_bits } => {
            let over_idle = family.evidence.iter().find_map(|evidence| match evidence.fact {
                Fact::DrivenOverIdleDb(level) => Some(format!("{} above the idle floor", decibels(level))),
                Fact::BroadbandOverCommonDb(level) => {
                    Some(format!("{} above the common mode", decibels(level)))
                }
                _ => None,
            });
            let bits = frame_bits.map(|bits| format!("{bits} bits per character"));
            let parts: Vec<String> = over_idle.into_iter().chain(bits).collect();
            parts.join(", ")
        }
        Source::Unknown => match family.members.len() {
            1 => "a single line".to_string(),
            lines => format!("{lines} lines that fit no known source"),
        },
    }
}

fn count(family: &Family, is_one: impl Fn(Role) -> bool) -> usize {
    family.members.iter().filter(|member| is_one(member.role)).count()
}

/// The multiples of the fundamental: the few by their number, many counted.
fn multiples(family: &Family, one: &str, many: &str) -> String {
    let mut orders: Vec<u32> = family
        .members
        .iter()
        .filter_map(|member| if let Role::Harmonic(order) = member.role { Some(order) } else { None })
        .collect();
    orders.sort_unstable();
    let listed: Vec<String> = orders.iter().map(u32::to_string).collect();
    match (orders.as_slice(), orders.last()) {
        ([], _) | (_, None) => format!("no {many} found"),
        ([order], _) => format!("{one} {order}"),
        (few, _) if few.len() <= NAMED_HARMONICS => format!("{many} {}", listed.join(", ")),
        (all, Some(last)) => format!("{} {many} up to {last}", all.len()),
    }
}

/// What a line is to its family.
pub(crate) fn role(member: &Member) -> String {
    match member.role {
        Role::Fundamental => "fundamental".to_string(),
        Role::Harmonic(order) => format!("{order} x fundamental"),
        Role::Sideband { multiple, outputs: 0 } => format!("beside {multiple} x fundamental"),
        Role::Sideband { multiple, outputs } => format!("{multiple} x fundamental {outputs:+} x output"),
        Role::CharacterMultiple(order) => format!("{order} x character rate"),
        Role::Structure => "structure".to_string(),
    }
}

/// One observation as a sentence without its full stop.
pub(crate) fn sentence(fact: &Fact) -> String {
    let counted = |number: &u32, what: &str| format!("{number} {what}");
    match fact {
        Fact::FundamentalAboveFloorDb(level) if *level > MOST_DB => {
            "fundamental found, no floor around it".to_string()
        }
        Fact::FundamentalAboveFloorDb(level) => format!("fundamental {} above the floor", decibels(*level)),
        Fact::FundamentalMissing => "no line at the fundamental itself".to_string(),
        Fact::MultiplesFound(number) => counted(number, "multiples of the fundamental found"),
        Fact::MultiplesMissing(number) => counted(number, "multiples missing that such a source would show"),
        Fact::MultiplesShared(number) => counted(number, "multiples fall on lines of another source"),
        Fact::SidebandPairs(number) => counted(number, "pairs of sidebands"),
        Fact::SpreadMultiples(number) => counted(number, "multiples spread to both sides like sidebands"),
        Fact::InUsualRange => "frequency usual for such a source".to_string(),
        Fact::OutsideUsualRange => "frequency not usual for such a source".to_string(),
        Fact::Smeared(width) => format!("fundamental smeared over {} of its frequency", share(*width)),
        Fact::Alone => "a single narrow line and nothing else".to_string(),
        Fact::DifferentialOverCommonDb(level) => {
            format!("{level:+.1} dB in the differential against the common mode")
        }
        Fact::DrivenOverIdleDb(level) => {
            format!("differential mode {level:+.1} dB while driven against idle")
        }
        Fact::BroadbandOverCommonDb(level) => {
            format!("differential floor {level:+.1} dB against the common mode's")
        }
        Fact::DrivenRmsV(level_v) => format!("{} rms in the differential mode while driven", volts(*level_v)),
        Fact::DataShapeExplains(part) => {
            format!("random data of the bit rate explain {} of the shape", share(*part))
        }
        Fact::BitRateOverHint(ratio) => format!("bit rate {ratio:.3} of the expected one"),
        Fact::CharacterLines(part) => {
            format!("{} of the lines at multiples of the character rate", share(*part))
        }
        Fact::TrueFrequencyHz(hz) => format!("a second sample rate puts it at {}", hertz(*hz)),
    }
}
