//! When a family was there: share of the time, starts and stops.
//!
//! Each average of the rung in which the family's strongest lines lie is a *look*. A look sees the family if
//! one of those lines stands out where it should be, wide enough for the source's own wandering, at a level
//! that is a fair part of its mean. One look without it between two with it is a miss, not an absence. A start
//! or stop is only observed between two looks that follow each other; its resolution is a look and what lies
//! between. Traffic is seen by a driven average that holds segments.
//!
//! Places in time are numbers of pairs since the board began, which go on through changes of the rate.

use super::super::rung::{RungSpectra, SegmentSet};
use super::ladder::{known_level, section};
use super::{Family, Member, Mode, Role, Source};

/// Lines a look goes by.
const TELLING: usize = 3;
/// Level a look must find, as a share of the family's mean level.
const LEAST_SHARE: f64 = 0.25;
/// Looks further apart than this many of their spans have a gap between them.
const GAP_SPANS: u64 = 2;

/// One stretch of presence.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Stretch {
    /// First pair of the first look that saw it.
    pub start_sample: u64,
    /// One past the last pair of the last look that saw it.
    pub end_sample: u64,
    /// Where the look before did not see it: how far the start may be off, pairs. `None`: there is no such
    /// look, it was there from the beginning or from the end of a gap.
    pub start_resolution_samples: Option<u64>,
    /// The same of the stop.
    pub end_resolution_samples: Option<u64>,
}

/// When a family was there.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct Presence {
    /// Looks taken.
    pub looks: u64,
    /// Looks that saw it, single misses filled in.
    pub seen: u64,
    /// Single misses filled in.
    pub filled: u64,
    /// Share of the time looked at in which it was there, 0..1.
    pub share: f64,
    /// Stretches, in order.
    pub stretches: Vec<Stretch>,
}

#[derive(Clone, Copy)]
struct Look {
    first: u64,
    end: u64,
    is_seen: bool,
}

/// When `family` was there, from averages in order of time. Averages of other rungs than its strongest lines'
/// are passed over.
pub fn presence(family: &Family, sequence: &[RungSpectra]) -> Presence {
    let mut looks = looks(family, sequence);
    let filled = fill(&mut looks);
    let length = |look: &Look| (look.end - look.first) as f64;
    let whole: f64 = looks.iter().map(length).sum();
    let seen_length: f64 = looks.iter().filter(|look| look.is_seen).map(length).sum();
    Presence {
        looks: looks.len() as u64,
        seen: looks.iter().filter(|look| look.is_seen).count() as u64,
        filled,
        share: if whole > 0.0 { seen_length / whole } else { 0.0 },
        stretches: stretches(&looks),
    }
}

fn looks(family: &Family, sequence: &[RungSpectra]) -> Vec<Look> {
    let is_traffic = matches!(family.source, Source::Traffic { .. });
    let telling = telling(family);
    let Some(rung) = telling.first().map(|member| member.rung) else { return Vec::new() };
    let mut looks: Vec<Look> = Vec::new();
    for spectra in sequence.iter().filter(|spectra| spectra.rung == rung && spectra.span_samples > 0) {
        let is_seen = if is_traffic {
            spectra.set == SegmentSet::Driven && spectra.segments > 0
        } else if spectra.segments > 0 {
            telling.iter().any(|member| sees(family, member, spectra))
        } else {
            continue;
        };
        let look =
            Look { first: spectra.first_sample, end: spectra.first_sample + spectra.span_samples, is_seen };
        // The idle and the driven average of one time are one look.
        match looks.last_mut() {
            Some(last) if look.first < last.end => {
                last.first = last.first.min(look.first);
                last.end = last.end.max(look.end);
                last.is_seen |= look.is_seen;
            }
            _ => looks.push(look),
        }
    }
    looks
}

/// The strongest lines, all of one rung.
fn telling(family: &Family) -> Vec<&Member> {
    let is_line = |member: &&Member| {
        member.role != Role::Structure || matches!(family.source, Source::Traffic { .. } | Source::Unknown)
    };
    let mut lines: Vec<&Member> = family.members.iter().filter(is_line).collect();
    lines.sort_by(|a, b| b.levels.larger_v().total_cmp(&a.levels.larger_v()));
    let rung = lines.first().map(|member| member.rung);
    lines.retain(|member| Some(member.rung) == rung);
    lines.truncate(TELLING);
    lines
}

/// How far a line of the source wanders in a night, as a share of its frequency: networks are kept within
/// 1 %; carriers run from a crystal; supplies follow load and warmth.
fn wander(source: &Source) -> f64 {
    match source {
        Source::Mains(_) => 0.01,
        Source::Supply { .. } => 0.03,
        Source::Drive { .. } | Source::Traffic { .. } | Source::Unknown => 0.002,
    }
}

fn sees(family: &Family, member: &Member, spectra: &RungSpectra) -> bool {
    Mode::BOTH.into_iter().any(|mode| {
        let Some(level_v) =
            member.levels.of(mode).filter(|level_v| *level_v >= 0.5 * member.levels.larger_v())
        else {
            return false;
        };
        let section = section(spectra, mode);
        let reach_hz = member.frequency_uncertainty_hz + wander(&family.source) * member.frequency_hz;
        let bins = |frequency_hz: f64| (frequency_hz / section.bin_hz).round().max(0.0) as usize;
        let place = bins(member.frequency_hz);
        let range = bins(member.frequency_hz - reach_hz).min(place)..=bins(member.frequency_hz + reach_hz);
        let density = |bin: usize| section.get(bin).unwrap_or(0.0);
        let Some(highest) = range.max_by(|&a, &b| density(a).total_cmp(&density(b))) else { return false };
        let frequency_hz =
            if highest == place { member.frequency_hz } else { highest as f64 * section.bin_hz };
        known_level(&section, frequency_hz).is_some_and(|known| {
            let spread = ((reach_hz / section.bin_hz) / 1.5).max(1.0).sqrt();
            known.rms_v * spread >= LEAST_SHARE * level_v
        })
    })
}

fn is_apart(a: &Look, b: &Look) -> bool {
    b.first.saturating_sub(a.end) > GAP_SPANS * (a.end - a.first).max(b.end - b.first)
}

/// Fills single misses between two looks that saw it.
fn fill(looks: &mut [Look]) -> u64 {
    let mut filled = 0;
    for place in 1..looks.len().saturating_sub(1) {
        let Some([before, look, after]) = looks.get_mut(place - 1..=place + 1) else { continue };
        if before.is_seen
            && !look.is_seen
            && after.is_seen
            && !is_apart(before, look)
            && !is_apart(look, after)
        {
            look.is_seen = true;
            filled += 1;
        }
    }
    filled
}

fn stretches(looks: &[Look]) -> Vec<Stretch> {
    let mut stretches: Vec<Stretch> = Vec::new();
    let mut before: Option<&Look> = None;
    for look in looks {
        let joined = before.filter(|before| !is_apart(before, look));
        let between = |other: &Look| look.end - look.first + look.first.saturating_sub(other.end);
        match (joined, look.is_seen) {
            (Some(before), true) if before.is_seen => {
                stretches.last_mut().into_iter().for_each(|stretch| stretch.end_sample = look.end);
            }
            (Some(before), false) if before.is_seen => {
                let resolution = before.end - before.first + look.first.saturating_sub(before.end);
                stretches
                    .last_mut()
                    .into_iter()
                    .for_each(|stretch| stretch.end_resolution_samples = Some(resolution));
            }
            (_, true) => stretches.push(Stretch {
                start_sample: look.first,
                end_sample: look.end,
                start_resolution_samples: joined.map(between),
                end_resolution_samples: None,
            }),
            (_, false) => {}
        }
        before = Some(look);
    }
    stretches
}
