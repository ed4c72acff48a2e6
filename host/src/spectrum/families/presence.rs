//! When a family was there: share of the time, starts and stops.
//!
//! Each average of the rung in which the family's strongest lines lie is a *look*. A look sees the family if
//! one of those lines stands out where it should be, wide enough for the source's own wandering, at a level
//! that is a fair part of its mean. A look whose floor would hide such a level says nothing and is passed
//! over: data hide what shows while the bus rests. One look without it between two with it is a miss, not an
//! absence. A start or stop is only observed between two looks that follow each other; its resolution is a look
//! and what lies between. Traffic is seen by a driven average that holds segments; as idle and driven averages
//! take turns, only two idle ones in a row tell that there was none.
//!
//! A [`Watch`] takes the averages of a night one after another and keeps the stretches alone.
//!
//! Places in time are numbers of pairs since the board began, which go on through changes of the rate.

use super::super::lines::Section;
use super::super::rung::{RungSpectra, SegmentSet};
use super::ladder::{FLOOR_BINS, detectable, known_level, section_of};
use super::{Family, MODES, Member, Mode, Role, Source};

/// Lines a look goes by.
const TELLING: usize = 3;
/// Level a look must find, as a share of the family's mean level.
const LEAST_SHARE: f64 = 0.25;
/// Looks further apart than this many of their spans have a gap between them.
const GAP_SPANS: u64 = 2;
/// Averages that overlap by this part of the shorter one are one look: those of the two sets of one time.
const SAME_TIME: f64 = 0.5;
/// Bins beyond the reach of a line that its floor is taken from.
const MARGIN_BINS: usize = FLOOR_BINS + 2;

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
    /// Length of all looks, pairs.
    pub looked_samples: u64,
    /// Length of those that saw it, pairs.
    pub seen_samples: u64,
    /// Stretches, in order.
    pub stretches: Vec<Stretch>,
}

#[derive(Clone, Copy, Debug)]
struct Look {
    first: u64,
    end: u64,
    is_seen: bool,
}

impl Presence {
    /// Share of the time looked at in which it was there, 0..1.
    pub fn share(&self) -> f64 {
        self.seen_samples as f64 / self.looked_samples.max(1) as f64
    }
}

/// When `family` was there, from averages in order of time.
pub fn presence(family: &Family, sequence: &[RungSpectra]) -> Presence {
    let mut watch = Watch::new(family);
    sequence.iter().for_each(|spectra| watch.take(spectra));
    watch.finish()
}

/// Looks for one family in averages that pass by.
#[derive(Clone, Debug)]
pub struct Watch<'a> {
    family: &'a Family,
    telling: Vec<&'a Member>,
    /// The look that may still grow, the one before it that may still be a miss, and the last that is judged.
    open: Option<Look>,
    waiting: Option<Look>,
    before: Option<Look>,
    presence: Presence,
}

impl<'a> Watch<'a> {
    /// A watch for `family` that has seen nothing yet.
    pub fn new(family: &'a Family) -> Self {
        Self {
            family,
            telling: telling(family),
            open: None,
            waiting: None,
            before: None,
            presence: Presence::default(),
        }
    }

    /// Takes the next average in order of time. Those of other rungs than the family's strongest lines' are
    /// passed over.
    pub fn take(&mut self, spectra: &RungSpectra) {
        let is_mine = self.telling.first().is_some_and(|member| member.rung == spectra.rung);
        if !is_mine || spectra.span_samples == 0 {
            return;
        }
        let is_seen = if self.is_traffic() {
            // An average of idle segments counts the driven ones it left out.
            match spectra.set {
                SegmentSet::Driven => spectra.segments > 0,
                SegmentSet::Idle => spectra.other > 0,
            }
        } else {
            let Some(is_seen) = self.sees(spectra) else { return };
            is_seen
        };
        let first = spectra.first_sample;
        let look = Look { first, end: first.saturating_add(spectra.span_samples), is_seen };
        match &mut self.open {
            Some(open) if is_same_time(open, &look) => {
                open.first = open.first.min(look.first);
                open.end = open.end.max(look.end);
                open.is_seen |= look.is_seen;
            }
            open => {
                let closed = open.replace(look);
                self.close(closed);
            }
        }
    }

    fn is_traffic(&self) -> bool {
        matches!(self.family.source, Source::Traffic { .. })
    }

    /// What was seen.
    pub fn finish(mut self) -> Presence {
        let last = self.open.take();
        self.close(last);
        let mut waiting = self.waiting.take();
        if let (Some(before), Some(turn)) = (&self.before, &mut waiting) {
            turn.is_seen |= self.is_traffic() && before.is_seen;
        }
        self.settle(waiting);
        self.presence
    }

    /// Whether one of the lines is there; `None` where all of them may be hidden.
    fn sees(&self, spectra: &RungSpectra) -> Option<bool> {
        if spectra.segments == 0 {
            return None;
        }
        let each = self.telling.iter().flat_map(|member| MODES.map(|mode| (member, mode)));
        let found = each.filter_map(|(member, mode)| sees(&self.family.source, member, mode, spectra));
        found.reduce(|any, one| any || one)
    }

    /// A look is complete: the one before it may have been a miss.
    fn close(&mut self, look: Option<Look>) {
        let Some(look) = look else { return };
        let mut settled = self.waiting.replace(look);
        if let (Some(before), Some(missed)) = (&self.before, &mut settled) {
            let is_between = before.is_seen && look.is_seen && !missed.is_seen;
            if is_between && !is_apart(before, missed) && !is_apart(missed, &look) {
                missed.is_seen = true;
                self.presence.filled += 1;
            }
        }
        if let (None, Some(first)) = (&self.before, &mut settled) {
            first.is_seen |= self.is_traffic() && look.is_seen;
        }
        self.settle(settled);
    }

    /// Enters a look into the account.
    fn settle(&mut self, look: Option<Look>) {
        let Some(look) = look else { return };
        let length = look.end - look.first;
        self.presence.looks += 1;
        self.presence.looked_samples += length;
        if look.is_seen {
            self.presence.seen += 1;
            self.presence.seen_samples += length;
        }
        let stretches = &mut self.presence.stretches;
        let joined = self.before.filter(|before| !is_apart(before, &look));
        match (joined, look.is_seen) {
            (Some(before), true) if before.is_seen => {
                stretches.last_mut().into_iter().for_each(|stretch| stretch.end_sample = look.end);
            }
            (Some(before), false) if before.is_seen => {
                let resolution = before.end - before.first + look.first.saturating_sub(before.end);
                let last = stretches.last_mut();
                last.into_iter().for_each(|stretch| stretch.end_resolution_samples = Some(resolution));
            }
            (_, true) => stretches.push(Stretch {
                start_sample: look.first,
                end_sample: look.end,
                start_resolution_samples: joined
                    .map(|before| look.end - look.first + look.first.saturating_sub(before.end)),
                end_resolution_samples: None,
            }),
            (_, false) => {}
        }
        self.before = Some(look);
    }
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

/// Whether a line is there in one mode; `None` where it is weak in that mode anyway, where its bins are not
/// published, or where the floor would hide it.
fn sees(source: &Source, member: &Member, mode: Mode, spectra: &RungSpectra) -> Option<bool> {
    let level_v = member.levels.of(mode).filter(|level_v| *level_v >= 0.5 * member.levels.larger_v())?;
    let bin_hz = spectra.bin_hz();
    let reach_hz = member.frequency_uncertainty_hz + wander(source) * member.frequency_hz;
    let bins = |frequency_hz: f64| (frequency_hz / bin_hz).round().max(0.0) as usize;
    let place = bins(member.frequency_hz);
    let (low, high) = (bins(member.frequency_hz - reach_hz).min(place), bins(member.frequency_hz + reach_hz));
    let section: Section<'_> =
        section_of(spectra, mode, low.saturating_sub(MARGIN_BINS)..=high.saturating_add(MARGIN_BINS));
    let density = |bin: usize| section.get(bin).unwrap_or(0.0);
    let highest = (low..=high).max_by(|&a, &b| density(a).total_cmp(&density(b)))?;
    let frequency_hz = if highest == place { member.frequency_hz } else { highest as f64 * bin_hz };
    let spread = ((reach_hz / bin_hz) / 1.5).max(1.0).sqrt();
    let least_v = LEAST_SHARE * level_v / spread;
    if known_level(&section, frequency_hz).is_some_and(|known| known.rms_v >= least_v) {
        return Some(true);
    }
    (detectable(&section, highest)? <= least_v).then_some(false)
}

fn is_same_time(a: &Look, b: &Look) -> bool {
    let shared = a.end.min(b.end).saturating_sub(a.first.max(b.first)) as f64;
    let shorter = (a.end - a.first).min(b.end - b.first) as f64;
    shared > SAME_TIME * shorter
}

fn is_apart(a: &Look, b: &Look) -> bool {
    b.first.saturating_sub(a.end) > GAP_SPANS * (a.end - a.first).max(b.end - b.first)
}
