//! A source with holes at fixed places, however its deliveries fall.

use core::convert::Infallible;
use legwise_firmware::source::{PairSource, SourceDescription, Taken};
use legwise_protocol::message::GapCause;

/// Plays two slices in deliveries of given lengths; pairs inside a hole are never handed out.
#[derive(Clone, Debug)]
pub struct HoledSource {
    board: SourceDescription,
    leg_a: Vec<i32>,
    leg_b: Vec<i32>,
    /// First missing pair, pairs missing, whether the source calls it an overrun. In order.
    holes: Vec<(usize, usize, bool)>,
    deliveries: Vec<usize>,
    next_delivery: usize,
    next_sample: usize,
}

impl HoledSource {
    /// Plays both legs once. A delivery of 0 stands for "nothing ready yet"; the lengths repeat.
    pub fn new(
        board: SourceDescription,
        leg_a: Vec<i32>,
        leg_b: Vec<i32>,
        holes: Vec<(usize, usize, bool)>,
        deliveries: Vec<usize>,
    ) -> Self {
        assert!(deliveries.iter().any(|&length| length > 0), "a source must move on");
        Self { board, leg_a, leg_b, holes, deliveries, next_delivery: 0, next_sample: 0 }
    }
}

impl PairSource for HoledSource {
    type Error = Infallible;

    fn describe(&self) -> SourceDescription {
        self.board
    }

    fn take(&mut self, leg_a: &mut [i32], leg_b: &mut [i32]) -> Result<Taken, Infallible> {
        let length = self.deliveries[self.next_delivery % self.deliveries.len()].min(leg_a.len());
        self.next_delivery += 1;
        if length == 0 {
            return Ok(Taken::Nothing);
        }
        let mut gap = None;
        if let Some(&(_, missing, is_called_overrun)) =
            self.holes.iter().find(|hole| hole.0 == self.next_sample && hole.1 > 0)
        {
            self.next_sample += missing;
            gap = is_called_overrun.then_some(GapCause::Overrun);
        }
        let until_hole = self.holes.iter().map(|hole| hole.0).find(|&at| at > self.next_sample);
        let end = until_hole.unwrap_or(self.leg_a.len()).min(self.leg_a.len());
        let pairs = length.min(end.saturating_sub(self.next_sample));
        if pairs == 0 {
            return Ok(Taken::Finished);
        }
        let range = self.next_sample..self.next_sample + pairs;
        leg_a[..pairs].copy_from_slice(&self.leg_a[range.clone()]);
        leg_b[..pairs].copy_from_slice(&self.leg_b[range.clone()]);
        self.next_sample = range.end;
        Ok(Taken::Pairs { first_sample: range.start as u64, pairs, gap })
    }
}
