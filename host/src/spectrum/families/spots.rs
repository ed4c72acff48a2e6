//! One entry per frequency at which a line stands, with the levels of both modes.
//!
//! In a driven average a spot may be the data's own. What a differential source leaves in the common mode is
//! weak and coherent with it; what a common-mode source leaves in the differential mode is weak the other way
//! round. So a driven spot is *data* where the common mode has no line, or where its density is below a tenth
//! of the differential one and the two are coherent (`|S_cd|²/(S_cc·S_dd) ≥ 1/2`), or where it is so far below
//! that an imbalance of a few per cent accounts for it: a thousandth, a hundredth and more where the line is
//! ragged, a tenth where the segments are too few to tell coherence. Where both is so it is data: drivers that come and
//! go step the common mode, too. Below the mains the rhythm of the messages is all there is to expect. There a
//! driven spot is data where it is broad, as pauses and replies of varying length make it, or where the
//! differential mode has it at more than half the common mode's level: a pair does not convert that much.

use super::super::rung::{RungSpectra, SegmentSet};
use super::alias::{AliasState, Sighting};
use super::ladder::{Ladder, LadderLine};
use super::{Levels, MODES, Member, PerMode, Role};

/// Lines of the two modes this close, in bins, are one spot.
const SAME_BINS: f64 = 0.5;
/// Segments below which coherence says nothing.
const FEWEST_FOR_COHERENCE: f64 = 4.0;
/// A sharp line this far above its floor is no accident of ragged data, dB.
const SURE_DB: f64 = 18.0;
/// From this rung on the coming and going of messages makes lines of its own.
const RAGGED_FROM_RUNG: u8 = 2;
/// Below this the rhythm of messages makes lines, Hz: the mains lie above.
const RHYTHM_BELOW_HZ: f64 = 45.0;
/// Most common mode there over the differential mode, as a power ratio.
const RHYTHM_RATIO: f64 = 4.0;
/// Least uncertainty between two measurements of a steady line, bins: sources wander a little.
const STEADY_BINS: f64 = 0.1;
/// Uncertainty of the centre of a summed band: this many bins and this share of its spread.
const CENTRE_BINS: f64 = 0.5;
/// See above.
const CENTRE_SHARE: f64 = 0.3;
/// Spread of a line that is wider than the window, bins.
const SMEARED_BINS: f64 = 0.4;

/// A frequency at which a line stands.
#[derive(Clone, Debug)]
pub(super) struct Spot {
    pub frequency_hz: f64,
    /// Twice the standard deviation; half the band for a summed one.
    pub uncertainty_hz: f64,
    /// Half the band its power was summed over; 0 for an interpolated line.
    pub band_hz: f64,
    /// Standard deviation of its power about its frequency; 0 for a line no wider than the window.
    pub spread_hz: f64,
    pub bin_hz: f64,
    pub rung: u8,
    pub set: SegmentSet,
    pub levels: Levels,
    pub above_floor_db: f64,
    /// Whether it is the traffic's own.
    pub is_data: bool,
    pub alias: AliasState,
}

impl Spot {
    fn from_line(line: &LadderLine) -> Self {
        let rms_v = Some(line.line.rms_v);
        Self {
            frequency_hz: line.line.frequency_hz,
            uncertainty_hz: line.line.frequency_uncertainty_hz,
            band_hz: line.half_width_hz(),
            spread_hz: line.line.spread_hz,
            bin_hz: line.bin_hz,
            rung: line.rung,
            set: line.set,
            levels: PerMode::from_each(|mode| if mode == line.mode { rms_v } else { None }),
            above_floor_db: line.line.above_floor_db,
            is_data: false,
            alias: AliasState::Unconfirmed,
        }
    }

    /// Whether its power was summed.
    pub fn is_summed(&self) -> bool {
        self.band_hz > 0.0
    }

    /// Whether it is wider than the window.
    pub fn is_smeared(&self) -> bool {
        self.spread_hz > SMEARED_BINS * self.bin_hz
    }

    /// How far from where it should be its centre may lie, Hz.
    pub fn tolerance_hz(&self) -> f64 {
        if self.is_summed() {
            CENTRE_BINS * self.bin_hz + CENTRE_SHARE * self.spread_hz
        } else {
            self.uncertainty_hz.max(STEADY_BINS * self.bin_hz)
        }
    }

    /// The true frequency where a second rate told exactly one, else where it shows.
    pub fn true_hz(&self) -> f64 {
        match &self.alias {
            AliasState::Suspect { candidates_hz } => match candidates_hz.as_slice() {
                [one] => *one,
                _ => self.frequency_hz,
            },
            _ => self.frequency_hz,
        }
    }

    /// As the alias check sees it.
    pub fn sighting(&self) -> Sighting {
        Sighting {
            frequency_hz: self.frequency_hz,
            tolerance_hz: self.tolerance_hz().max(self.spread_hz),
            level_v: self.levels.larger_v(),
        }
    }

    /// As a line of a family.
    pub fn member(&self, role: Role) -> Member {
        Member {
            frequency_hz: self.frequency_hz,
            frequency_uncertainty_hz: self.uncertainty_hz,
            role,
            levels: self.levels,
            set: self.set,
            rung: self.rung,
            alias: self.alias.clone(),
        }
    }
}

/// The spots no family has taken yet.
pub(super) struct Free {
    spots: Vec<Spot>,
    is_taken: Vec<bool>,
}

impl Free {
    pub fn new(spots: Vec<Spot>) -> Self {
        let is_taken = vec![false; spots.len()];
        Self { spots, is_taken }
    }

    /// The free ones with their numbers, lowest frequency first.
    pub fn iter(&self) -> impl Iterator<Item = (usize, &Spot)> {
        self.spots.iter().enumerate().filter(|&(number, _)| self.is_free(number))
    }

    /// All of them, taken or not.
    pub fn all(&self) -> impl Iterator<Item = (usize, &Spot)> {
        self.spots.iter().enumerate()
    }

    pub fn get(&self, number: usize) -> Option<&Spot> {
        self.spots.get(number)
    }

    pub fn is_free(&self, number: usize) -> bool {
        self.is_taken.get(number).is_some_and(|taken| !taken)
    }

    pub fn take(&mut self, number: usize) {
        if let Some(taken) = self.is_taken.get_mut(number) {
            *taken = true;
        }
    }

    /// No spot is data: there is no traffic.
    pub fn clear_data(&mut self) {
        self.spots.iter_mut().for_each(|spot| spot.is_data = false);
    }
}

/// The spots of a ladder, lowest frequency first.
pub(super) fn gather(ladder: &Ladder<'_>) -> Vec<Spot> {
    let mut spots: Vec<Spot> = Vec::new();
    for mode in MODES {
        for line in ladder.lines(mode) {
            match spots.iter_mut().find(|spot| is_same(spot, &line)) {
                Some(spot) => merge(spot, &line),
                None => spots.push(Spot::from_line(&line)),
            }
        }
    }
    for spot in &mut spots {
        let Some(spectra) = ladder.rungs().iter().find(|spectra| spectra.rung == spot.rung) else { continue };
        if spot.set == SegmentSet::Driven {
            spot.is_data = is_data(spot, spectra);
        }
        let frequency_hz = spot.frequency_hz;
        let known = |mode| ladder.level_at(mode, frequency_hz).map(|level| level.rms_v);
        // The other mode's level at a known frequency is only its own where the bus rests.
        if spot.set == SegmentSet::Idle {
            spot.levels = PerMode::from_each(|mode| spot.levels.of(mode).or_else(|| known(mode)));
        }
    }
    spots.sort_by(|a, b| a.frequency_hz.total_cmp(&b.frequency_hz));
    spots
}

/// Whether a line of the other mode is the spot's.
fn is_same(spot: &Spot, line: &LadderLine) -> bool {
    let other = Spot::from_line(line);
    let apart_hz = (spot.frequency_hz - other.frequency_hz).abs();
    let reach_hz = (spot.tolerance_hz() + other.tolerance_hz()).max(SAME_BINS * line.bin_hz);
    spot.rung == line.rung && spot.levels.of(line.mode).is_none() && apart_hz <= reach_hz
}

fn merge(spot: &mut Spot, line: &LadderLine) {
    let other = Spot::from_line(line);
    let levels = PerMode::from_each(|mode| spot.levels.of(mode).or_else(|| other.levels.of(mode)));
    // A sine's frequency beats a band's; else the one that stands out more.
    let is_better = (!other.is_summed(), other.above_floor_db)
        .partial_cmp(&(!spot.is_summed(), spot.above_floor_db))
        == Some(std::cmp::Ordering::Greater);
    if is_better {
        *spot = other;
    }
    spot.levels = levels;
}

fn is_data(spot: &Spot, spectra: &RungSpectra) -> bool {
    let bin = (spot.frequency_hz / spot.bin_hz).round() as usize;
    let Some(bin) = bin.checked_sub(spectra.first_bin).and_then(|place| spectra.bins.get(place)) else {
        return false;
    };
    let ratio = bin.common / bin.differential.max(f64::MIN_POSITIVE);
    let coherence =
        (bin.cross.0.powi(2) + bin.cross.1.powi(2)) / (bin.common * bin.differential).max(f64::MIN_POSITIVE);
    let tells = spectra.effective_segments() >= FEWEST_FOR_COHERENCE;
    let is_coherent = tells && coherence >= 0.5;
    if spectra.rung >= RAGGED_FROM_RUNG && spot.frequency_hz < RHYTHM_BELOW_HZ {
        let is_in_both = spot.levels.differential.is_some() && ratio < RHYTHM_RATIO;
        return spot.is_smeared() || spot.levels.common.is_none() || is_in_both;
    }
    // What data leave is ragged: of few segments it has maxima of its own.
    let is_doubtful = spot.is_summed() || spot.above_floor_db < SURE_DB;
    let weak = match (tells, is_doubtful) {
        (false, true) => f64::INFINITY,
        (false, false) => 1e-1,
        (true, true) if spectra.rung >= RAGGED_FROM_RUNG => 3e-2,
        (true, true) => 1e-2,
        (true, false) => 1e-3,
    };
    spot.levels.common.is_none() || ratio < weak || (ratio < 1e-1 && is_coherent)
}
