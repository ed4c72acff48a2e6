//! Tells by a second sample rate whether a line is where it shows.
//!
//! A line below half of both rates stays put when the rate changes. One above folds: with rates `r1`, `r2` it
//! shows at `f1 = |f − n·r1|` and `f2 = |f − m·r2|`, so every pair of sightings of about the same level with
//!
//! ```text
//! n·r1 ± f1 = m·r2 ± f2        within tolerance, up to HIGHEST_HZ
//! ```
//!
//! gives a candidate. A line is **confirmed** only if it stays put *and* nothing above could look the same:
//! not if the same pair has another solution (a tone half way between multiples of the two rates folds onto
//! the same place at both), not if another sighting of that level, which did not stay put itself, is where an
//! alias would have gone, not if its tolerance is a fair part of the change of rate. What stays nowhere and folds nowhere has moved by
//! itself, or was seen once: **unconfirmed**.

/// Highest true frequency looked for, Hz.
pub const HIGHEST_HZ: f64 = 5e6;
/// Levels of one line at two times differ by less than this factor: 6 dB ...
const SAME_LEVEL: f64 = 2.0;
/// ... one that is to be confirmed stays within 2 dB ...
const CLOSE_LEVEL: f64 = 1.26;
/// ... and another sighting within 3.5 dB where an alias would have gone forbids it.
const RIVAL_LEVEL: f64 = 1.5;
/// Tolerance of the sum of both places as a share of the change of rate, at most.
const TOLERANCE_SHARE: f64 = 0.125;
/// Candidates kept per line.
const MOST_CANDIDATES: usize = 16;

/// Whether a line is where it shows.
#[derive(Clone, Debug, Default, PartialEq)]
pub enum AliasState {
    /// Seen at one rate only, or not found again.
    #[default]
    Unconfirmed,
    /// Stays put at a second rate.
    Confirmed,
    /// Moves with the rate, or cannot be told from a line that would.
    Suspect {
        /// True frequencies that show so at both rates, Hz, closest in level first.
        candidates_hz: Vec<f64>,
    },
}

/// A line as seen at one rate.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Sighting {
    /// Where it shows, Hz.
    pub frequency_hz: f64,
    /// How far off it may be, Hz.
    pub tolerance_hz: f64,
    /// Its level, V rms.
    pub level_v: f64,
}

struct Candidate {
    true_hz: f64,
    /// Larger level over the smaller one.
    level_factor: f64,
    is_folded: bool,
    /// Number of the second sighting.
    second: usize,
}

/// The state of each sighting of `first`, taken at `first_rate_hz`, given those of `second`.
pub fn check(
    first: &[Sighting],
    first_rate_hz: f64,
    second: &[Sighting],
    second_rate_hz: f64,
) -> Vec<AliasState> {
    let change_hz = (first_rate_hz - second_rate_hz).abs();
    if !(change_hz > 0.0 && first_rate_hz > 0.0 && second_rate_hz > 0.0) {
        return vec![AliasState::Unconfirmed; first.len()];
    }
    let rates = (first_rate_hz, second_rate_hz);
    let widest_hz = TOLERANCE_SHARE * change_hz;
    let stayed: Vec<bool> =
        second.iter().map(|other| first.iter().any(|one| stays_put(one, other))).collect();
    first.iter().map(|sighting| state(sighting, (second, &stayed), rates, widest_hz)).collect()
}

/// Whether `other` is `one` again, at the same place, whatever its level then and however broad.
fn stays_put(one: &Sighting, other: &Sighting) -> bool {
    (one.frequency_hz - other.frequency_hz).abs() <= one.tolerance_hz + other.tolerance_hz
}

/// Larger level over the smaller one; infinite where there is none.
fn level_factor(one: &Sighting, other: &Sighting) -> f64 {
    let factor = one.level_v.max(other.level_v) / one.level_v.min(other.level_v);
    if factor.is_nan() { f64::INFINITY } else { factor }
}

/// `stayed` tells which of `second` are sightings of lines that stay put.
fn state(
    one: &Sighting,
    (second, stayed): (&[Sighting], &[bool]),
    rates: (f64, f64),
    widest_hz: f64,
) -> AliasState {
    let mut candidates: Vec<Candidate> = Vec::new();
    let mut is_vague = false;
    for (number, other) in second.iter().enumerate() {
        let level_factor = level_factor(one, other);
        if level_factor > SAME_LEVEL {
            continue;
        }
        let tolerance_hz = one.tolerance_hz + other.tolerance_hz;
        if tolerance_hz > widest_hz {
            is_vague = true;
            continue;
        }
        let solutions = solve(one.frequency_hz, other.frequency_hz, rates, tolerance_hz);
        candidates.extend(solutions.into_iter().map(|(true_hz, is_folded)| Candidate {
            true_hz,
            level_factor,
            is_folded,
            second: number,
        }));
    }
    // A line that stays put is no image of another.
    let own = candidates.iter().find(|candidate| !candidate.is_folded).map(|own| own.second);
    candidates.retain(|candidate| {
        !candidate.is_folded || own == Some(candidate.second) || stayed.get(candidate.second) != Some(&true)
    });
    candidates.sort_by(|a, b| a.level_factor.total_cmp(&b.level_factor));
    judge(&candidates, is_vague)
}

fn judge(candidates: &[Candidate], is_vague: bool) -> AliasState {
    let stays = candidates.iter().find(|candidate| !candidate.is_folded);
    let rival = |stays: &Candidate| {
        candidates.iter().any(|other| {
            other.is_folded && (other.second == stays.second || other.level_factor <= RIVAL_LEVEL)
        })
    };
    match stays {
        Some(stays) if stays.level_factor <= CLOSE_LEVEL && !is_vague && !rival(stays) => {
            AliasState::Confirmed
        }
        _ if candidates.iter().any(|candidate| candidate.is_folded) => {
            AliasState::Suspect { candidates_hz: distinct(candidates) }
        }
        _ => AliasState::Unconfirmed,
    }
}

/// True frequencies that differ by a thousandth or more.
fn distinct(candidates: &[Candidate]) -> Vec<f64> {
    let mut all: Vec<f64> = Vec::new();
    for true_hz in candidates.iter().map(|candidate| candidate.true_hz) {
        if all.len() < MOST_CANDIDATES && all.iter().all(|known| (known - true_hz).abs() >= 1e-3 * true_hz) {
            all.push(true_hz);
        }
    }
    all
}

/// True frequencies that show at `f1` and `f2`, each with whether it folds at either rate.
fn solve(f1: f64, f2: f64, (r1, r2): (f64, f64), tolerance_hz: f64) -> Vec<(f64, bool)> {
    let mut found = Vec::new();
    let most = (HIGHEST_HZ / r1) as u32 + 1;
    for n in 0..=most {
        for sign in [1.0, -1.0] {
            let true_hz = f64::from(n) * r1 + sign * f1;
            if (n == 0 && sign < 0.0) || !(0.0..=HIGHEST_HZ).contains(&true_hz) {
                continue;
            }
            let apart_hz = (super::ladder::fold(true_hz, r2) - f2).abs();
            if apart_hz <= tolerance_hz {
                found.push((true_hz, n > 0 || true_hz > r2 / 2.0));
            }
        }
    }
    found
}
