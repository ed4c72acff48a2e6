//! From the timer interrupt to the main loop: a queue of pairs that counts what it cannot hold.
//!
//! ```text
//!  timer tick ─► driver ─► PairSender ─► [ pair | pair | lost 3 | pair | ... ] ─► QueuedSource ─► pipeline
//!                          (interrupt)       8 bytes each, no lock               (main loop)
//! ```
//!
//! The sampling index is not stored with each pair. It is the number of ticks, and both halves count
//! them: a pair is one, a `lost` item stands for as many as it says. So a pair takes 8 bytes, and the
//! index stays exact for ever whatever was lost in between.
//!
//! The queue is heapless's single-producer single-consumer ring: loads and stores only, so it works on
//! cores without compare-and-swap, and the two halves need neither a lock nor `static mut`.

use crate::source::{PairSource, SourceDescription, Taken};
use core::fmt;
use embedded_hal::{digital, spi};
use heapless::spsc::{Consumer, Producer, Queue};
use legwise_protocol::message::GapCause;

/// What went wrong between the microcontroller and the converter. Sampling goes on; ask again.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum ConverterError {
    /// The bus.
    Bus(#[cfg_attr(feature = "defmt", defmt(Debug2Format))] spi::ErrorKind),
    /// The pin that starts a conversion.
    Pin(#[cfg_attr(feature = "defmt", defmt(Debug2Format))] digital::ErrorKind),
}

impl fmt::Display for ConverterError {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        match self {
            Self::Bus(kind) => {
                write!(f, "could not read the converter ({kind}); check its clock and data wires")
            }
            Self::Pin(kind) => {
                write!(f, "could not start a conversion ({kind}); check the pin's configuration")
            }
        }
    }
}

impl core::error::Error for ConverterError {}

/// One place in the queue.
#[derive(Clone, Copy, Debug)]
enum Item {
    /// The codes of one sampling instant, leg A then leg B.
    Pair([i16; 2]),
    /// Sampling instants without a pair.
    Lost { pairs: u32, is_overrun: bool },
    /// Something failed for the first time since the last pair.
    Failed(ConverterError),
}

const _: () = assert!(size_of::<Item>() == 8, "the size the documentation states");

/// The queue before it is split. It holds `N` - 1 pairs; `N` of at least twice the pipeline's block is
/// sound, and no less than the pairs of the longest stretch the main loop is busy elsewhere.
///
/// It must outlive both halves: on a board a `static` that hands out `&'static mut` once.
#[derive(Debug)]
pub struct HandOver<const N: usize>(Queue<Item, N>);

impl<const N: usize> HandOver<N> {
    /// An empty queue.
    pub const fn new() -> Self {
        const { assert!(N >= 4, "a gap and a pair must fit") };
        Self(Queue::new())
    }

    /// The half for the interrupt and the half for the main loop.
    pub fn split(&mut self, description: SourceDescription) -> (PairSender<'_>, QueuedSource<'_>) {
        let (producer, consumer) = self.0.split();
        let sender =
            PairSender { queue: producer, lost: 0, is_overrun: false, untold: None, is_failing: false };
        (sender, QueuedSource { queue: consumer, description, next_sample: 0, gap: None, held: None })
    }
}

impl<const N: usize> Default for HandOver<N> {
    fn default() -> Self {
        Self::new()
    }
}

/// The interrupt's half. Each sampling instant ends in exactly one [`PairSender::put`] or
/// [`PairSender::skip`]: that is what keeps the index.
pub struct PairSender<'a> {
    queue: Producer<'a, Item>,
    /// Instants without a pair that the other half has not been told of.
    lost: u64,
    /// Whether any of them had a pair and no room.
    is_overrun: bool,
    /// An error that found no room.
    untold: Option<ConverterError>,
    is_failing: bool,
}

impl PairSender<'_> {
    /// The pair of the next instant.
    #[inline]
    pub fn put(&mut self, pair: [i16; 2]) {
        self.is_failing = false;
        self.tell_error();
        if (self.lost > 0 && !self.tell_loss()) || self.queue.enqueue(Item::Pair(pair)).is_err() {
            self.lost = self.lost.saturating_add(1);
            self.is_overrun = true;
        }
    }

    /// The next instant has no pair.
    pub fn skip(&mut self) {
        self.lost = self.lost.saturating_add(1);
        self.tell_error();
    }

    /// Something failed. Told to the other half once until a pair succeeds, however often it fails.
    pub fn report(&mut self, error: ConverterError) {
        if !self.is_failing {
            self.is_failing = true;
            self.untold = Some(error);
        }
        self.tell_error();
    }

    fn tell_error(&mut self) {
        if let Some(error) = self.untold
            && self.queue.enqueue(Item::Failed(error)).is_ok()
        {
            self.untold = None;
        }
    }

    /// Whether the other half has been told of all loss, and a place is left for the pair after it.
    fn tell_loss(&mut self) -> bool {
        if self.queue.capacity() - self.queue.len() < 2 {
            return false;
        }
        let pairs = u32::try_from(self.lost).unwrap_or(u32::MAX);
        if self.queue.enqueue(Item::Lost { pairs, is_overrun: self.is_overrun }).is_err() {
            return false;
        }
        self.lost -= u64::from(pairs);
        self.is_overrun = false;
        self.lost == 0
    }
}

/// The main loop's half: a [`PairSource`] that takes what the interrupt has put.
pub struct QueuedSource<'a> {
    queue: Consumer<'a, Item>,
    description: SourceDescription,
    next_sample: u64,
    gap: Option<GapCause>,
    /// What ended the last delivery.
    held: Option<Item>,
}

impl PairSource for QueuedSource<'_> {
    type Error = ConverterError;

    fn describe(&self) -> SourceDescription {
        self.description
    }

    /// Pairs up to the next loss or error, which the call after brings.
    fn take(&mut self, leg_a: &mut [i32], leg_b: &mut [i32]) -> Result<Taken, ConverterError> {
        let mut slots = leg_a.iter_mut().zip(leg_b);
        let Some((slot_a, slot_b)) = slots.next() else { return Ok(Taken::Nothing) };
        let Some([a, b]) = self.first_pair()? else { return Ok(Taken::Nothing) };
        (*slot_a, *slot_b) = (i32::from(a), i32::from(b));
        let mut pairs = 1;
        for (slot_a, slot_b) in slots {
            match self.queue.dequeue() {
                Some(Item::Pair([a, b])) => (*slot_a, *slot_b) = (i32::from(a), i32::from(b)),
                other => {
                    self.held = other;
                    break;
                }
            }
            pairs += 1;
        }
        let first_sample = self.next_sample;
        self.next_sample += pairs as u64;
        Ok(Taken::Pairs { first_sample, pairs, gap: self.gap.take() })
    }
}

impl QueuedSource<'_> {
    /// The next pair, once everything before it has been dealt with.
    fn first_pair(&mut self) -> Result<Option<[i16; 2]>, ConverterError> {
        loop {
            match self.held.take().or_else(|| self.queue.dequeue()) {
                Some(Item::Pair(pair)) => return Ok(Some(pair)),
                Some(Item::Lost { pairs, is_overrun }) => {
                    self.next_sample = self.next_sample.saturating_add(u64::from(pairs));
                    if is_overrun {
                        self.gap = Some(GapCause::Overrun);
                    }
                }
                Some(Item::Failed(error)) => return Err(error),
                None => return Ok(None),
            }
        }
    }
}

#[cfg(test)]
#[allow(clippy::unwrap_used, clippy::expect_used, clippy::panic, clippy::indexing_slicing)]
mod tests {
    use super::*;
    use crate::fakes::MICROVOLT_CODES;
    use std::vec;
    use std::vec::Vec;

    const DESCRIPTION: SourceDescription =
        SourceDescription { sample_rate_mhz: 50_000_000, skew_ns: 0, legs: [MICROVOLT_CODES; 2] };
    const BUS: ConverterError = ConverterError::Bus(spi::ErrorKind::Overrun);

    /// Everything that waits, as (index, code of leg A), and whether any of it told an overrun.
    fn drain(source: &mut QueuedSource<'_>, room: usize) -> (Vec<(u64, i32)>, bool) {
        let (mut got, mut any_overrun) = (Vec::new(), false);
        let (mut a, mut b) = (vec![0; room], vec![0; room]);
        while let Taken::Pairs { first_sample, pairs, gap } = source.take(&mut a, &mut b).unwrap() {
            for (index, (&a, &b)) in (first_sample..).zip(a.iter().zip(&b)).take(pairs) {
                assert_eq!(b, -a, "both codes of a pair stay together");
                got.push((index, a));
            }
            any_overrun |= gap == Some(GapCause::Overrun);
        }
        (got, any_overrun)
    }

    #[test]
    fn pairs_come_out_in_order_with_their_index() {
        let mut hand_over = HandOver::<16>::new();
        let (mut sender, mut source) = hand_over.split(DESCRIPTION);
        assert_eq!(source.take(&mut [0; 4], &mut [0; 4]), Ok(Taken::Nothing));
        for code in 0..10 {
            sender.put([code, -code]);
        }
        let expected: Vec<_> = (0..10).map(|code| (code as u64, code)).collect();
        assert_eq!(drain(&mut source, 3), (expected, false));
    }

    #[test]
    fn what_found_no_room_is_a_jump_of_the_index_marked_as_overrun() {
        let mut hand_over = HandOver::<8>::new();
        let (mut sender, mut source) = hand_over.split(DESCRIPTION);
        for code in 0..20 {
            sender.put([code, -code]);
        }
        let (got, any_overrun) = drain(&mut source, 16);
        assert_eq!(got, (0..7).map(|code| (code as u64, code)).collect::<Vec<_>>());
        assert!(!any_overrun, "nothing was lost before those");
        sender.put([20, -20]);
        sender.put([21, -21]);
        assert_eq!(drain(&mut source, 16), (vec![(20, 20), (21, 21)], true));
    }

    #[test]
    fn every_index_is_delivered_or_jumped_over_whatever_the_pace() {
        // 5 ticks out of 7 put a pair, the loop takes at another pace; the code tells the true index.
        let mut hand_over = HandOver::<32>::new();
        let (mut sender, mut source) = hand_over.split(DESCRIPTION);
        let (mut got, mut overruns) = (Vec::new(), 0);
        for tick in 0..20_000_i32 {
            match tick % 7 {
                2 | 5 => sender.skip(),
                _ => sender.put([tick as i16, -(tick as i16)]),
            }
            if tick % 97 < 40 && tick % 3 == 0 {
                let (pairs, is_overrun) = drain(&mut source, 5);
                got.extend(pairs);
                overruns += u32::from(is_overrun);
            }
        }
        assert!(got.len() > 5_000 && overruns > 100, "{} pairs, {overruns} overruns", got.len());
        assert!(got.iter().all(|&(index, code)| index == code as u64));
        assert!(got.windows(2).all(|two| two[0].0 < two[1].0));
    }

    #[test]
    fn an_error_is_told_once_after_the_pairs_before_it_and_the_index_goes_on() {
        let mut hand_over = HandOver::<8>::new();
        let (mut sender, mut source) = hand_over.split(DESCRIPTION);
        sender.put([0, 0]);
        for _ in 0..5 {
            sender.report(BUS);
            sender.skip();
        }
        sender.put([6, -6]);
        let (mut a, mut b) = ([0; 8], [0; 8]);
        let pairs = |first_sample| Ok(Taken::Pairs { first_sample, pairs: 1, gap: None });
        assert_eq!(source.take(&mut a, &mut b), pairs(0));
        assert_eq!(source.take(&mut a, &mut b), Err(BUS));
        assert_eq!(source.take(&mut a, &mut b), pairs(6));
        assert_eq!(source.take(&mut a, &mut b), Ok(Taken::Nothing));
    }

    #[test]
    fn an_error_that_finds_the_queue_full_is_told_later() {
        let mut hand_over = HandOver::<4>::new();
        let (mut sender, mut source) = hand_over.split(DESCRIPTION);
        for code in 0..3 {
            sender.put([code, -code]);
        }
        sender.report(BUS);
        sender.skip();
        assert_eq!(drain_until_error(&mut source), None);
        sender.skip();
        assert_eq!(drain_until_error(&mut source), Some(BUS));
        sender.put([5, -5]);
        assert_eq!(drain(&mut source, 4), (vec![(5, 5)], false));
    }

    fn drain_until_error(source: &mut QueuedSource<'_>) -> Option<ConverterError> {
        loop {
            match source.take(&mut [0; 4], &mut [0; 4]) {
                Ok(Taken::Pairs { .. }) => {}
                Ok(_) => return None,
                Err(error) => return Some(error),
            }
        }
    }

    #[test]
    fn a_loss_beyond_32_bits_is_told_whole() {
        let mut hand_over = HandOver::<8>::new();
        let (mut sender, mut source) = hand_over.split(DESCRIPTION);
        sender.put([0, 0]);
        sender.lost = u64::from(u32::MAX) + 10;
        sender.put([1, -1]); // becomes part of the loss: the first item could not tell all of it
        sender.put([2, -2]);
        let index = 1 + u64::from(u32::MAX) + 10 + 1;
        assert_eq!(drain(&mut source, 4).0, vec![(0, 0), (index, 2)]);
    }
}
