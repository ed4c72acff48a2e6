//! Compares what was named with what was there.

use super::cases::Case;
use super::source::{Coupled, Source};
use legwise::spectrum::families::{Family, SourceName};
use std::collections::BTreeMap;

/// How far a fundamental may be off: mains, Hz; drives and bit rates, shares.
const MAINS_HZ: f64 = 0.1;
const DRIVE_SHARE: f64 = 0.005;
const BIT_RATE_SHARE: f64 = 0.02;
/// Bit rates up to this share of the sample rate leave a shape to tell them by.
const TELLABLE: f64 = 0.5;

/// Where a frequency shows.
pub fn fold(frequency_hz: f64, rate_hz: f64) -> f64 {
    let rest = frequency_hz.rem_euclid(rate_hz);
    rest.min(rate_hz - rest)
}

/// One thing that is there.
#[derive(Clone, Debug)]
pub struct Truth {
    pub name: SourceName,
    /// Where its fundamental shows, and how far off it may be named.
    pub place_hz: f64,
    pub reach_hz: f64,
    is_place_asked: bool,
}

impl Truth {
    pub fn of(coupled: &Coupled, rate_hz: f64) -> Self {
        let (name, frequency_hz, reach_hz) = match &coupled.source {
            Source::Mains { fundamental_hz, .. } => (SourceName::Mains, *fundamental_hz, MAINS_HZ),
            Source::Drive { carrier_hz, .. } => (SourceName::Drive, *carrier_hz, DRIVE_SHARE * carrier_hz),
            Source::Supply { fundamental_hz, drift, ripple, .. } => {
                let share = 0.5 * drift.abs() + ripple + DRIVE_SHARE;
                (SourceName::Supply, *fundamental_hz, share * fundamental_hz)
            }
            Source::Tone { frequency_hz, .. } | Source::Steady { frequency_hz, .. } => {
                (SourceName::Unknown, *frequency_hz, 0.001 * frequency_hz)
            }
        };
        Self { name, place_hz: fold(frequency_hz, rate_hz), reach_hz, is_place_asked: true }
    }

    fn is_met(&self, family: &Family, rate_hz: f64) -> bool {
        let shown_hz = fold(family.fundamental_hz, rate_hz);
        let shown_hz = if self.name == SourceName::Traffic { family.fundamental_hz } else { shown_hz };
        family.source.name() == self.name
            && (!self.is_place_asked || (shown_hz - self.place_hz).abs() <= self.reach_hz)
    }
}

/// All that is there.
pub fn truths(case: &Case) -> Vec<Truth> {
    let mut truths: Vec<Truth> = case.sources.iter().map(|source| Truth::of(source, case.rate_hz)).collect();
    if let Some(traffic) = &case.traffic {
        truths.push(Truth {
            name: SourceName::Traffic,
            place_hz: traffic.bit_rate_hz,
            reach_hz: BIT_RATE_SHARE * traffic.bit_rate_hz,
            is_place_asked: traffic.bit_rate_hz <= TELLABLE * case.rate_hz,
        });
    }
    truths
}

/// What became of one truth.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord)]
pub enum Outcome {
    Named(SourceName),
    /// The right name at a wrong place.
    Misplaced,
    Missed,
}

/// The table: row is what was there (`None`: nothing more), column what it was called.
#[derive(Default)]
pub struct Table {
    counts: BTreeMap<(Option<SourceName>, Outcome), u32>,
    pub cases: u32,
    pub right: u32,
}

/// Result of one case.
#[derive(Debug)]
pub struct Verdict {
    pub outcomes: Vec<(SourceName, Outcome)>,
    pub extra: Vec<SourceName>,
}

impl Verdict {
    /// Everything there was named, and nothing else; unknown lines count as something else.
    pub fn is_right(&self) -> bool {
        self.extra.is_empty() && self.outcomes.iter().all(|(name, outcome)| *outcome == Outcome::Named(*name))
    }
}

/// Compares families with the truth.
pub fn judge(truths: &[Truth], families: &[Family], rate_hz: f64) -> Verdict {
    let mut is_used = vec![false; families.len()];
    let mut outcomes: Vec<Option<Outcome>> = vec![None; truths.len()];
    for (truth, outcome) in truths.iter().zip(&mut outcomes) {
        let met = (0..families.len()).find(|&n| !is_used[n] && truth.is_met(&families[n], rate_hz));
        if let Some(n) = met {
            is_used[n] = true;
            *outcome = Some(Outcome::Named(truth.name));
        }
    }
    for (truth, outcome) in truths.iter().zip(&mut outcomes).filter(|(_, outcome)| outcome.is_none()) {
        // What the fundamental was called instead: by its place, else by its name.
        let near = |n: &usize| {
            let family = &families[*n];
            let is_at = |hz: f64, own_hz: f64| (hz - truth.place_hz).abs() <= truth.reach_hz + own_hz;
            family
                .members
                .iter()
                .any(|member| is_at(member.frequency_hz, member.frequency_uncertainty_hz.min(truth.reach_hz)))
        };
        let free = |n: &usize| !is_used[*n];
        let other = (0..families.len()).filter(free).find(near).or_else(|| (0..families.len()).find(near));
        let same = (0..families.len()).filter(free).find(|&n| families[n].source.name() == truth.name);
        *outcome = Some(match other.or(same) {
            Some(n) => {
                is_used[n] = true;
                let name = families[n].source.name();
                if name == truth.name { Outcome::Misplaced } else { Outcome::Named(name) }
            }
            None => Outcome::Missed,
        });
    }
    let extra = families.iter().zip(&is_used).filter(|(_, used)| !**used);
    Verdict {
        outcomes: truths.iter().zip(outcomes).filter_map(|(t, outcome)| Some((t.name, outcome?))).collect(),
        extra: extra.map(|(family, _)| family.source.name()).collect(),
    }
}

impl Table {
    pub fn add(&mut self, verdict: &Verdict) {
        self.cases += 1;
        self.right += u32::from(verdict.is_right());
        for (name, outcome) in &verdict.outcomes {
            *self.counts.entry((Some(*name), *outcome)).or_default() += 1;
        }
        for name in &verdict.extra {
            *self.counts.entry((None, Outcome::Named(*name))).or_default() += 1;
        }
    }

    pub fn right_share(&self) -> f64 {
        f64::from(self.right) / f64::from(self.cases.max(1))
    }

    /// Share of the sources that were called what they are.
    pub fn named_share(&self) -> f64 {
        let sources = self.counts.iter().filter(|((name, _), _)| name.is_some());
        let right = sources.clone().filter(|((name, outcome), _)| *name == named(*outcome));
        let sum = |counts: &mut dyn Iterator<Item = u32>| f64::from(counts.sum::<u32>());
        sum(&mut right.map(|(_, count)| *count)) / sum(&mut sources.map(|(_, count)| *count)).max(1.0)
    }

    pub fn print(&self) {
        const NAMES: [SourceName; 5] = [
            SourceName::Mains,
            SourceName::Drive,
            SourceName::Supply,
            SourceName::Traffic,
            SourceName::Unknown,
        ];
        print!("{:>14}", "there \\ named");
        NAMES.iter().for_each(|name| print!("{name:>9}"));
        println!("{:>11}{:>8}", "misplaced", "missed");
        for row in NAMES.iter().map(|name| Some(*name)).chain([None]) {
            print!("{:>14}", row.map_or("nothing more".to_owned(), |name| name.to_string()));
            let count = |outcome| self.counts.get(&(row, outcome)).copied().unwrap_or(0);
            NAMES.iter().for_each(|name| print!("{:>9}", count(Outcome::Named(*name))));
            println!("{:>11}{:>8}", count(Outcome::Misplaced), count(Outcome::Missed));
        }
    }
}

fn named(outcome: Outcome) -> Option<SourceName> {
    match outcome {
        Outcome::Named(name) => Some(name),
        _ => None,
    }
}
