//! Storm coalescing: a night of chatter must not drown the link, and no count may be lost.
//!
//! Time is cut into storm windows of fixed length. The first excursions of a window are reported one
//! by one; the rest of that window become one [`Storm`] record with exact sums.
//!
//! ```text
//!  window k                                  window k+1
//!  |e1 e2 ... e16 (one by one)  e17 ... e900 |
//!                               \__ one Storm record, sent when the window has passed
//! ```
//! Windows are counted from sample 0, so the cut does not depend on how blocks fell.

use crate::limit_check::{LimitConfig, merge_breach};
use legwise_protocol::message::{Detection, Excursion, Message, Part, Storm};

/// The running coalescer.
#[derive(Clone, Copy, Debug, Default)]
pub struct StormGate {
    window: u64,
    reported: u32,
    storm: Option<Storm>,
}

impl StormGate {
    /// Takes one closed excursion: on to `records` as it is, or into the window's storm.
    pub fn admit(
        &mut self,
        excursion: Excursion,
        detection: &Detection,
        config: &LimitConfig,
        records: &mut dyn FnMut(&Message),
    ) {
        // Not only a later one: a change of settings may number the windows anew.
        if !self.is_within(excursion.first_sample, detection) {
            self.finish(records);
            self.window = excursion.first_sample / length(detection);
            self.reported = 0;
        }
        // Parts of a long excursion are already thinned out and must stay in one piece.
        if self.reported < detection.storm_after || excursion.part != Part::Whole {
            self.reported += 1;
            records(&Message::Excursion(excursion));
            return;
        }
        let edge_suspects = u32::from(excursion.is_edge_suspect);
        match &mut self.storm {
            None => {
                self.storm = Some(Storm {
                    excursions: 1,
                    edge_suspects,
                    first_sample: excursion.first_sample,
                    samples: u64::from(excursion.samples),
                    breach: excursion.breach,
                });
            }
            Some(storm) => {
                storm.excursions += 1;
                storm.edge_suspects += edge_suspects;
                storm.samples = excursion.first_sample + u64::from(excursion.samples) - storm.first_sample;
                merge_breach(&mut storm.breach, &excursion.breach, config);
            }
        }
    }

    /// Sends the storm of a window that `sample` does not lie in.
    pub fn pass(&mut self, sample: u64, detection: &Detection, records: &mut dyn FnMut(&Message)) {
        if self.storm.is_some() && !self.is_within(sample, detection) {
            self.finish(records);
        }
    }

    /// Whether a sample lies in the present window; a product, because a division takes far longer.
    fn is_within(&self, sample: u64, detection: &Detection) -> bool {
        let length = length(detection);
        let offset = self.window.checked_mul(length).and_then(|first| sample.checked_sub(first));
        offset.is_some_and(|offset| offset < length)
    }

    /// Sends what is held.
    pub fn finish(&mut self, records: &mut dyn FnMut(&Message)) {
        if let Some(storm) = self.storm.take() {
            records(&Message::Storm(storm));
        }
    }
}

/// Samples in a storm window.
fn length(detection: &Detection) -> u64 {
    u64::from(detection.storm_samples.max(1))
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::settings;
    use legwise_protocol::limits::LimitSet;

    #[test]
    fn a_sample_is_within_the_window_that_a_division_gives() {
        let mut detection = settings::for_limits(LimitSet::default(), 500_000_000).detection;
        let edges = [0, 1, 99, 100, 101, 1 << 32, u64::MAX / 2, u64::MAX - 1, u64::MAX];
        for storm_samples in [0, 1, 2, 99, 100, 65_536, u32::MAX] {
            detection.storm_samples = storm_samples;
            let length = u64::from(storm_samples.max(1));
            let near = |sample: u64| [-1, 0, 1].map(|step| sample.saturating_add_signed(step));
            let samples = || edges.into_iter().flat_map(|edge| near(edge / length * length));
            for window in samples().map(|sample| sample / length).chain([u64::MAX]) {
                let gate = StormGate { window, ..StormGate::default() };
                for sample in samples() {
                    let is_within = gate.is_within(sample, &detection);
                    assert_eq!(is_within, sample / length == window, "{sample} by {length}: {window}");
                }
            }
        }
    }
}
