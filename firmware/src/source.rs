//! Where sample pairs come from: the first of the two hardware traits.

use legwise_protocol::message::{GapCause, LegScale, RateChange};

/// What a source is, as far as the pipeline must know. Constant while the source lives, but for the rate
/// ([`PairSource::tune`]).
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct SourceDescription {
    /// Nominal pairs per second, in millihertz.
    pub sample_rate_mhz: u64,
    /// How much later than leg A leg B is sampled; 0 for simultaneous sampling. Less than one
    /// sample period in magnitude.
    pub skew_ns: i32,
    /// How codes become microvolts, leg A then leg B.
    pub legs: [LegScale; 2],
}

/// What a call to [`PairSource::take`] brought.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum Taken {
    /// No pair is ready yet; ask again.
    Nothing,
    /// Pairs were written to the front of both buffers.
    Pairs {
        /// Index of the first. A jump past the last index plus the last count is a gap.
        first_sample: u64,
        /// How many, at most the length of the buffers.
        pairs: usize,
        /// Why pairs before these are missing, or may be; `None` when none are known to be.
        gap: Option<GapCause>,
    },
    /// There will be no more pairs.
    Finished,
}

/// Where a source can move its rate: by two or three per cent, always to the same rates.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum Tuning {
    /// The rate of [`SourceDescription`].
    Nominal,
    /// Above it.
    Faster,
    /// Below it, by as much.
    Slower,
}

/// A source of sample pairs: a dual converter, an external converter, a recording, a simulated line.
///
/// # For driver authors
/// * Pairs are numbered from the start of sampling by a 64-bit index that counts *every* sampling
///   instant, taken away or not: the index is the clock of everything downstream.
/// * `take` never waits. Called at least once per half of the sampling buffer, it must not lose pairs;
///   when it does, the next call says [`GapCause::Overrun`] and jumps the index by the number lost (by
///   none where the number is not known). A channel order found again is [`GapCause::Resynchronised`].
/// * Both legs of a pair belong to the same index. A leg sampled later says so by `skew_ns`.
/// * Codes are raw: do not calibrate, filter or clip them.
///
/// # For callers
/// Both buffers must have the same length; a source writes the same number of codes to each.
pub trait PairSource {
    /// What can go wrong.
    type Error: core::fmt::Debug;

    /// What this source is.
    fn describe(&self) -> SourceDescription;

    /// Fetches pairs into the front of `leg_a` and `leg_b`.
    ///
    /// # Errors
    /// When the hardware or the recording fails; the caller may try again.
    fn take(&mut self, leg_a: &mut [i32], leg_b: &mut [i32]) -> Result<Taken, Self::Error>;

    /// Goes over to another rate and says which and from which pair on, the index going on; `None` when the
    /// source has one rate only. The first pair at the new rate may be one still to be taken.
    fn tune(&mut self, _tuning: Tuning) -> Option<RateChange> {
        None
    }
}
