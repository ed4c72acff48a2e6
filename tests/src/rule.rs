//! The excursion rule, written a second time and the slow way.
//!
//! From the rule's own words: a sample is outside when a limit is strictly broken; an excursion runs
//! from its first sample outside to its last; it has ended when every limit it broke was kept by the
//! hysteresis for `hold_off` samples in a row. Here two neighbouring samples outside are asked whether
//! such a run lies between them: no running state, no blocks, 64-bit integers, doubled microvolts.

use legwise_protocol::limits::{Limit, LimitSet};
use legwise_protocol::message::Detection;

/// One sample as the limits see it.
#[derive(Clone, Copy, Debug)]
struct Judged {
    /// Twice the distance beyond each limit; `None` where it is not watched.
    beyond_twice: [Option<i64>; Limit::COUNT],
    dm_uv: i64,
    is_clipped: bool,
}

/// An excursion, or a part of a long one.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Expected {
    /// First sample outside.
    pub first: usize,
    /// Last sample outside.
    pub last: usize,
    /// Bits of every limit broken.
    pub limits: u8,
    /// The limit broken by most, first such sample.
    pub worst_limit: Limit,
    /// That sample.
    pub extreme_sample: usize,
    /// Twice the voltage there.
    pub extreme_twice_uv: i64,
    /// Samples outside.
    pub outside: u64,
    /// Sum of twice the distances.
    pub area_twice: u64,
    /// DM meanwhile, samples outside only.
    pub dm_uv: (i64, i64),
    /// Clipped samples among them.
    pub clipped: u64,
    /// Whether it continues an earlier part.
    pub is_continued: bool,
}

/// What a whole waveform must give.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Verdict {
    /// Excursions and parts in order.
    pub excursions: Vec<Expected>,
    /// Every sample outside.
    pub outside: Vec<usize>,
    /// Samples outside per limit.
    pub outside_by_limit: [u64; Limit::COUNT],
    /// Whether the last excursion was still open at the end.
    pub is_open_at_end: bool,
}

/// Judges a waveform: calibrated legs of the same instants, in microvolts, and which pairs are clipped.
pub fn judge(
    limits: &LimitSet,
    detection: &Detection,
    leg_a: &[i32],
    leg_b: &[i32],
    clipped: &[bool],
) -> Verdict {
    let samples: Vec<Judged> = leg_a
        .iter()
        .zip(leg_b)
        .zip(clipped)
        .map(|((&a, &b), &is_clipped)| judge_sample(limits, a.into(), b.into(), is_clipped))
        .collect();
    let outside: Vec<usize> = (0..samples.len()).filter(|&n| broken(&samples[n]) != 0).collect();
    let mut outside_by_limit = [0; Limit::COUNT];
    for &n in &outside {
        for (bit, count) in outside_by_limit.iter_mut().enumerate() {
            *count += u64::from(broken(&samples[n]) >> bit & 1);
        }
    }
    let groups = group(&samples, &outside, detection);
    let mut excursions = Vec::new();
    for group in &groups {
        for (number, part) in parts(group, detection.longest_samples as usize).into_iter().enumerate() {
            excursions.push(describe(limits, &samples, leg_a, leg_b, part, number > 0));
        }
    }
    let is_open_at_end = groups.last().is_some_and(|group| {
        !has_quiet_run(&samples, group[group.len() - 1] + 1, samples.len(), mask(&samples, group), detection)
    });
    Verdict { excursions, outside, outside_by_limit, is_open_at_end }
}

fn judge_sample(limits: &LimitSet, a: i64, b: i64, is_clipped: bool) -> Judged {
    let high = |value: i64, limit: Option<i64>| limit.map(|limit| value - 2 * limit);
    let low = |value: i64, limit: Option<i64>| limit.map(|limit| 2 * limit - value);
    let terminal_high = limits.terminal.map(|window| i64::from(window.high.uv()));
    let terminal_low = limits.terminal.map(|window| i64::from(window.low.uv()));
    let average_high = limits.average.map(|window| i64::from(window.high.uv()));
    let average_low = limits.average.map(|window| i64::from(window.low.uv()));
    Judged {
        beyond_twice: [
            high(2 * a, terminal_high),
            low(2 * a, terminal_low),
            high(2 * b, terminal_high),
            low(2 * b, terminal_low),
            high(a + b, average_high),
            low(a + b, average_low),
        ],
        dm_uv: a - b,
        is_clipped,
    }
}

/// Bits of the limits a sample breaks.
fn broken(sample: &Judged) -> u8 {
    (0..Limit::COUNT).filter(|&bit| sample.beyond_twice[bit].is_some_and(|d| d > 0)).map(|bit| 1 << bit).sum()
}

fn mask(samples: &[Judged], group: &[usize]) -> u8 {
    group.iter().fold(0, |bits, &n| bits | broken(&samples[n]))
}

/// Cuts the samples outside into excursions.
fn group(samples: &[Judged], outside: &[usize], detection: &Detection) -> Vec<Vec<usize>> {
    let mut groups: Vec<Vec<usize>> = Vec::new();
    for &n in outside {
        match groups.last_mut() {
            Some(group)
                if !has_quiet_run(
                    samples,
                    group[group.len() - 1] + 1,
                    n,
                    mask(samples, group),
                    detection,
                ) =>
            {
                group.push(n);
            }
            _ => groups.push(vec![n]),
        }
    }
    groups
}

/// Whether `hold_off` samples in a row within `from..to` keep every limit of `mask` by the hysteresis.
fn has_quiet_run(samples: &[Judged], from: usize, to: usize, mask: u8, detection: &Detection) -> bool {
    let hysteresis_twice = 2 * i64::from(detection.hysteresis_uv);
    let keeps = |sample: &Judged| {
        (0..Limit::COUNT)
            .filter(|bit| mask >> bit & 1 == 1)
            .all(|bit| sample.beyond_twice[bit].is_none_or(|d| d <= -hysteresis_twice))
    };
    samples[from..to].windows(detection.hold_off_samples as usize).any(|run| run.iter().all(keeps))
}

/// Cuts a long excursion: a part begins with the first sample outside that lies `longest` or more
/// beyond the beginning of the part before.
fn parts(group: &[usize], longest: usize) -> Vec<&[usize]> {
    let (mut parts, mut rest) = (Vec::new(), group);
    while let Some(&first) = rest.first() {
        let end = rest.iter().position(|&n| n >= first + longest).unwrap_or(rest.len());
        let (part, after) = rest.split_at(end);
        parts.push(part);
        rest = after;
    }
    parts
}

fn describe(
    limits: &LimitSet,
    samples: &[Judged],
    leg_a: &[i32],
    leg_b: &[i32],
    part: &[usize],
    is_continued: bool,
) -> Expected {
    assert!(!limits.is_empty());
    let deepest = |n: usize| samples[n].beyond_twice.iter().flatten().copied().max().unwrap();
    // The first sample of the greatest depth, and on it the first limit of that depth.
    let greatest = part.iter().map(|&n| deepest(n)).max().unwrap();
    let extreme_sample = part.iter().copied().find(|&n| deepest(n) == greatest).unwrap();
    let bit =
        (0..Limit::COUNT).find(|&bit| samples[extreme_sample].beyond_twice[bit] == Some(greatest)).unwrap();
    let (a, b) = (i64::from(leg_a[extreme_sample]), i64::from(leg_b[extreme_sample]));
    Expected {
        first: part[0],
        last: part[part.len() - 1],
        limits: mask(samples, part),
        worst_limit: Limit::ALL[bit],
        extreme_sample,
        extreme_twice_uv: [2 * a, 2 * a, 2 * b, 2 * b, a + b, a + b][bit],
        outside: part.len() as u64,
        area_twice: part.iter().map(|&n| deepest(n) as u64).sum(),
        dm_uv: (
            part.iter().map(|&n| samples[n].dm_uv).min().unwrap(),
            part.iter().map(|&n| samples[n].dm_uv).max().unwrap(),
        ),
        clipped: part.iter().map(|&n| u64::from(samples[n].is_clipped)).sum(),
        is_continued,
    }
}
