//! The sources of the lines: families of the averaged spectra, and when each was there.
//!
//! The averages name the families ([`crate::spectrum::families`]); a second pass over the log follows the
//! strongest of them through the spectra one after another.

use super::ReportError;
use super::averages::{Averages, full_rate_hz};
use super::evidence;
use super::figures::rounded_volts;
use super::model::{Presence, PresenceStretch, Source, SourceLine};
use super::times::Calendar;
use crate::log::spectra;
use crate::spectrum::families::presence::{Presence as Seen, Watch};
use crate::spectrum::families::{self, AliasState, Family, Hints, Member, Mode, Role, SourceName};
use crate::spectrum::rung::{RungSpectra, SegmentSet};
use rusqlite::Connection;

/// Sources listed at most.
const SOURCES: usize = 8;
/// Lines listed of each at most.
const LINES: usize = 32;

/// The sources, strongest first and the bus's own data last, and how many weaker ones are left out.
pub(crate) fn read(
    connection: &Connection,
    averages: &Averages,
    calendar: &Calendar<'_>,
    list_limit: usize,
) -> Result<(Vec<Source>, u64), ReportError> {
    let mut families = name(averages);
    // The sort is stable: strongest first within each half.
    families.sort_by_key(|family| family.source.name() == SourceName::Traffic);
    let left_out = families.len().saturating_sub(SOURCES);
    let traffic = families.pop_if(|family| family.source.name() == SourceName::Traffic);
    families.truncate(SOURCES - usize::from(traffic.is_some()));
    families.extend(traffic);
    let mut presences = follow(connection, averages, &families, calendar, list_limit)?.into_iter();
    let is_single = averages.is_single();
    let mut sources: Vec<Source> =
        families.iter().map(|family| source(family, is_single, presences.next().flatten())).collect();
    let named = sources.len();
    sources.retain(is_seen);
    let left_out = left_out + named - sources.len();
    Ok((sources, left_out as u64))
}

/// Whether a source is more than a hump in the average of a whole night: seen in some spectrum by itself, or
/// again at another rate.
fn is_seen(source: &Source) -> bool {
    let is_in_none = source.presence.as_ref().is_some_and(|presence| presence.stretches == 0);
    !is_in_none || source.alias == "confirmed" || source.kind == "traffic"
}

/// No log states the bit rate of the bus, so there is no hint.
fn name(averages: &Averages) -> Vec<Family> {
    let hints = Hints::default();
    let (main, second) = (averages.main(), averages.second());
    if second.is_empty() {
        families::name(&main, &hints)
    } else {
        families::name_at_two_rates(&main, &second, &hints)
    }
}

/// The line the family stands for: its fundamental, else its strongest.
fn leading(family: &Family) -> Option<&Member> {
    let fundamental = family.members.iter().find(|member| member.role == Role::Fundamental);
    let by_level = |a: &&Member, b: &&Member| a.levels.larger_v().total_cmp(&b.levels.larger_v());
    fundamental.or_else(|| family.members.iter().max_by(by_level))
}

fn source(family: &Family, is_single: bool, presence: Option<Presence>) -> Source {
    let leading = leading(family);
    let is_traffic = family.source.name() == SourceName::Traffic;
    let told = (family.fundamental_hz > 0.0).then_some(family.fundamental_hz);
    let told_within = told.map(|_| family.fundamental_uncertainty_hz);
    let unless_traffic = |value: Option<f64>| if is_traffic { None } else { value };
    let if_traffic = |value: Option<f64>| if is_traffic { value } else { None };
    let output = if let families::Source::Drive { output_hz } = family.source { output_hz } else { None };
    let total = |mode| Some(family.total_rms_v.of(mode)).filter(|level_v| *level_v > 0.0).map(rounded_volts);
    let alias = leading.map(|member| &member.alias);
    Source {
        kind: kind(family.source.name()),
        frequency_hz: unless_traffic(told),
        frequency_uncertainty_hz: unless_traffic(told_within),
        bit_rate_hz: if_traffic(told),
        bit_rate_uncertainty_hz: if_traffic(told_within),
        output_hz: output.map(|output| output.0),
        output_uncertainty_hz: output.map(|output| output.1),
        common_rms_v: total(Mode::Common),
        differential_rms_v: total(Mode::Differential),
        set: leading.map_or("all", |member| set_name(member.set, is_single)),
        confidence: family.confidence,
        summary: evidence::summary(family),
        evidence: family.evidence.iter().map(|evidence| evidence::sentence(&evidence.fact)).collect(),
        alias: alias.map_or("not-confirmed", alias_word),
        candidates_hz: match alias {
            Some(AliasState::Suspect { candidates_hz }) => candidates_hz.clone(),
            _ => Vec::new(),
        },
        presence,
        lines: family.members.iter().take(LINES).map(|member| line(member, is_single)).collect(),
    }
}

fn line(member: &Member, is_single: bool) -> SourceLine {
    SourceLine {
        role: evidence::role(member),
        frequency_hz: member.frequency_hz,
        frequency_uncertainty_hz: member.frequency_uncertainty_hz,
        common_rms_v: member.levels.common.map(rounded_volts),
        differential_rms_v: member.levels.differential.map(rounded_volts),
        rung: member.rung,
        set: set_name(member.set, is_single),
        alias: alias_word(&member.alias),
    }
}

fn kind(name: SourceName) -> &'static str {
    match name {
        SourceName::Mains => "mains",
        SourceName::Drive => "drive",
        SourceName::Supply => "supply",
        SourceName::Traffic => "traffic",
        SourceName::Unknown => "unknown",
    }
}

/// Spectra of single modes hold all segments, whatever set they pass for.
fn set_name(set: SegmentSet, is_single: bool) -> &'static str {
    match set {
        _ if is_single => "all",
        SegmentSet::Idle => "idle",
        SegmentSet::Driven => "driven",
    }
}

/// The word for an alias state.
pub(crate) fn alias_word(state: &AliasState) -> &'static str {
    match state {
        AliasState::Unconfirmed => "not-confirmed",
        AliasState::Confirmed => "confirmed",
        AliasState::Suspect { .. } => "suspect",
    }
}

/// One family followed through all runs.
struct Follower<'a> {
    family: &'a Family,
    /// What moves with the sample rate is looked for at the main one only.
    is_bound_to_rate: bool,
    watch: Watch<'a>,
    looks: u64,
    looked_samples: u64,
    seen_samples: u64,
    stretches: u64,
    list: Vec<PresenceStretch>,
    last_stop: Option<(i64, u64)>,
}

impl<'a> Follower<'a> {
    fn new(family: &'a Family) -> Self {
        Self {
            family,
            is_bound_to_rate: leading(family)
                .is_some_and(|member| matches!(member.alias, AliasState::Suspect { .. })),
            watch: Watch::new(family),
            looks: 0,
            looked_samples: 0,
            seen_samples: 0,
            stretches: 0,
            list: Vec::new(),
            last_stop: None,
        }
    }

    /// A run is over: enters what was seen in it.
    fn end_run(&mut self, run: i64, calendar: &Calendar<'_>, list_limit: usize) {
        let watch = std::mem::replace(&mut self.watch, Watch::new(self.family));
        let Seen { looks, looked_samples, seen_samples, stretches, .. } = watch.finish();
        self.looks += looks;
        self.looked_samples += looked_samples;
        self.seen_samples += seen_samples;
        self.stretches += stretches.len() as u64;
        if let Some(last) = stretches.last() {
            self.last_stop = Some((run, last.end_sample));
        }
        let rate_hz = calendar.rate_hz(run);
        let seconds = |samples: u64| rate_hz.map(|rate_hz| samples as f64 / rate_hz);
        for stretch in stretches.iter().take(list_limit.saturating_sub(self.list.len())) {
            self.list.push(PresenceStretch {
                start: calendar.moment(run, stretch.start_sample, 1),
                start_uncertainty_s: stretch.start_resolution_samples.and_then(seconds),
                stop: calendar.moment(run, stretch.end_sample, 1),
                stop_uncertainty_s: stretch.end_resolution_samples.and_then(seconds),
                duration_s: seconds(stretch.end_sample - stretch.start_sample),
            });
        }
    }

    fn presence(self, rate_hz: Option<f64>, calendar: &Calendar<'_>) -> Option<Presence> {
        (self.looks > 0).then(|| Presence {
            share: self.seen_samples as f64 / self.looked_samples.max(1) as f64,
            looks: self.looks,
            looked_s: rate_hz.map(|rate_hz| self.looked_samples as f64 / rate_hz),
            stretches: self.stretches,
            first_start: self.list.first().map(|stretch| stretch.start.clone()),
            last_stop: self.last_stop.map(|(run, sample)| calendar.moment(run, sample, 1)),
            list_truncated: self.stretches > self.list.len() as u64,
            list: self.list,
        })
    }
}

/// Presence of each family; `None` where no spectrum could tell, and in logs without the ladder.
fn follow(
    connection: &Connection,
    averages: &Averages,
    families: &[Family],
    calendar: &Calendar<'_>,
    list_limit: usize,
) -> Result<Vec<Option<Presence>>, ReportError> {
    if averages.is_single() || families.is_empty() {
        return Ok(Vec::new());
    }
    let mut followers: Vec<Follower<'_>> = families.iter().map(Follower::new).collect();
    let main_hz = averages.rate_hz();
    let mut current: Option<i64> = None;
    spectra::visit(connection, |run, spectra| {
        if current.is_some_and(|current| current != run) {
            end_runs(&mut followers, current, calendar, list_limit);
        }
        current = Some(run);
        take(&mut followers, spectra, main_hz);
        Ok::<(), ReportError>(())
    })?;
    end_runs(&mut followers, current, calendar, list_limit);
    Ok(followers.into_iter().map(|follower| follower.presence(main_hz, calendar)).collect())
}

fn end_runs(followers: &mut [Follower<'_>], run: Option<i64>, calendar: &Calendar<'_>, list_limit: usize) {
    let Some(run) = run else { return };
    followers.iter_mut().for_each(|follower| follower.end_run(run, calendar, list_limit));
}

fn take(followers: &mut [Follower<'_>], spectra: &RungSpectra, main_hz: Option<f64>) {
    if spectra.rate_hz.is_nan() || spectra.rate_hz <= 0.0 {
        return;
    }
    let is_main = Some(full_rate_hz(spectra)) == main_hz;
    for follower in followers.iter_mut().filter(|follower| is_main || !follower.is_bound_to_rate) {
        follower.watch.take(spectra);
    }
}
