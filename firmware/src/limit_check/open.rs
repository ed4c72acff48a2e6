//! An excursion while it is open.

use super::add_sums;
use super::config::LimitConfig;
use legwise_protocol::limits::LimitMask;
use legwise_protocol::message::{Breach, Excursion, Part};

/// What a stretch of samples adds to an excursion.
#[derive(Clone, Copy, Debug)]
pub(super) struct Piece {
    /// First and last sample outside.
    pub(super) first_sample: u64,
    pub(super) last_outside: u64,
    pub(super) breach: Breach,
    /// Twice the distance of the extreme beyond its limit.
    pub(super) worst: i32,
}

/// An open excursion (of its current part).
#[derive(Clone, Copy, Debug)]
pub(super) struct Open {
    number: u64,
    /// All of the part so far.
    piece: Piece,
    /// Every limit broken since the excursion began, earlier parts included.
    pub(super) limits: LimitMask,
    /// Samples in a row, up to the latest, that are clear of these limits.
    pub(super) clear_run: u32,
    pub(super) has_earlier_part: bool,
    /// Whether every sample outside so far may be a data edge seen through the skew.
    pub(super) is_suspect: bool,
}

impl Open {
    pub(super) const fn new(number: u64, piece: &Piece, is_suspect: bool) -> Self {
        let limits = piece.breach.limits;
        Self { number, piece: *piece, limits, clear_run: 0, has_earlier_part: false, is_suspect }
    }

    /// Begins the next part.
    pub(super) const fn begin_part(&mut self, piece: &Piece) {
        self.piece = *piece;
        self.limits = self.limits.with(piece.breach.limits);
        self.clear_run = 0;
        self.has_earlier_part = true;
    }

    /// Takes a piece into the present part.
    pub(super) fn take(&mut self, piece: &Piece) {
        let breach = &mut self.piece.breach;
        if piece.worst > self.piece.worst {
            self.piece.worst = piece.worst;
            breach.worst_limit = piece.breach.worst_limit;
            breach.extreme_twice_uv = piece.breach.extreme_twice_uv;
            breach.extreme_sample = piece.breach.extreme_sample;
        }
        add_sums(breach, &piece.breach);
        self.piece.last_outside = piece.last_outside;
        self.clear_run = 0;
        self.limits = self.limits.with(piece.breach.limits);
    }

    /// How many samples the part may still take from `index` on: none if it is as long as one may be.
    pub(super) const fn room(&self, config: &LimitConfig, index: u64) -> u64 {
        (config.longest_samples as u64).saturating_sub(index - self.piece.first_sample)
    }

    /// Whether it is still a suspect with one more sample outside: a peak that stands alone.
    pub(super) const fn remains_suspect(&self, index: u64, is_suspicious: bool) -> bool {
        self.is_suspect && is_suspicious && index > self.piece.last_outside + 1
    }

    pub(super) fn record(&self, part: Part, is_cut: bool) -> Excursion {
        let Piece { first_sample, last_outside, breach, .. } = self.piece;
        // A part is at most longest_samples (a u32) long, plus nothing: the next one begins beyond it.
        let samples = u32::try_from(last_outside - first_sample + 1).unwrap_or(u32::MAX);
        let (number, is_edge_suspect) = (self.number, self.is_suspect);
        Excursion { number, first_sample, samples, breach, part, is_edge_suspect, is_cut }
    }
}
