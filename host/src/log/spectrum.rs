//! Puts averaged spectra together from their parts.
//!
//! A spectrum of 1024 points and more does not fit one message; its parts come in order of their
//! first bin, those of several signals and rates in between. A row is worth storing only whole: when
//! a part is missing the spectrum is dropped and counted once.

use legwise_protocol::message::{Mode, SpectrumPart};

/// A spectrum being put together, or the memory of one that had to be dropped.
#[derive(Clone, Debug)]
struct Slot {
    mode: Mode,
    rung: u8,
    first_sample: u64,
    points: u16,
    /// Codes so far; `None` once a part was missing.
    codes: Option<Vec<u8>>,
}

/// Spectra in progress of one run: one per signal and rate.
#[derive(Clone, Debug, Default)]
pub(super) struct Assembly {
    slots: Vec<Slot>,
    dropped: u64,
}

/// Bytes of a whole spectrum: two per bin, `points / 2 + 1` bins.
fn whole_bytes(points: u16) -> usize {
    (usize::from(points) / 2 + 1) * 2
}

impl Assembly {
    /// Spectra that were begun and lost a part, those still open included when `at_end`.
    pub(super) fn dropped(&self, at_end: bool) -> u64 {
        let open = self.slots.iter().filter(|slot| slot.is_unfinished()).count() as u64;
        self.dropped + if at_end { open } else { 0 }
    }

    /// Takes a part; the codes of the whole spectrum when it was the last one.
    pub(super) fn take(&mut self, part: &SpectrumPart) -> Option<Vec<u8>> {
        let known = self.slots.iter().position(|slot| slot.mode == part.mode && slot.rung == part.rung);
        let index = known.unwrap_or(self.slots.len());
        let fresh = match self.slots.get(index) {
            Some(slot) => slot.first_sample != part.first_sample || slot.points != part.points,
            None => true,
        };
        if fresh {
            let slot = Slot::begin(part);
            match self.slots.get_mut(index) {
                Some(old) => {
                    self.dropped += u64::from(old.is_unfinished());
                    *old = slot;
                }
                None => self.slots.push(slot),
            }
        }
        let slot = self.slots.get_mut(index)?;
        let codes = slot.codes.as_mut()?;
        let (start, new) = (usize::from(part.first_bin) * 2, part.codes.as_slice());
        let whole = whole_bytes(slot.points);
        if start + new.len() <= codes.len() {
            return None; // the same part once more
        }
        if start != codes.len() || start + new.len() > whole || new.len() % 2 != 0 {
            slot.codes = None;
            self.dropped += 1;
            return None;
        }
        codes.extend_from_slice(new);
        (codes.len() == whole).then(|| codes.clone())
    }
}

impl Slot {
    fn begin(part: &SpectrumPart) -> Self {
        let codes = Some(Vec::with_capacity(whole_bytes(part.points)));
        Self { mode: part.mode, rung: part.rung, first_sample: part.first_sample, points: part.points, codes }
    }

    fn is_unfinished(&self) -> bool {
        self.codes.as_ref().is_some_and(|codes| codes.len() < whole_bytes(self.points))
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use legwise_protocol::bytes::Bytes;

    fn part(first_sample: u64, mode: Mode, first_bin: u16, bins: u16) -> SpectrumPart {
        let mut codes = Bytes::new();
        for bin in first_bin..first_bin + bins {
            assert!(codes.extend(&bin.to_le_bytes()));
        }
        SpectrumPart {
            first_sample,
            span_samples: 1000,
            mode,
            rung: 0,
            points: 512,
            segments: 8,
            skipped: 0,
            first_bin,
            codes,
        }
    }

    fn expected() -> Vec<u8> {
        (0..257_u16).flat_map(u16::to_le_bytes).collect()
    }

    #[test]
    fn interleaved_parts_of_two_signals_make_two_whole_spectra() {
        let mut assembly = Assembly::default();
        assert_eq!(assembly.take(&part(0, Mode::Common, 0, 192)), None);
        assert_eq!(assembly.take(&part(0, Mode::Differential, 0, 192)), None);
        assert_eq!(assembly.dropped(true), 2, "two are open");
        assert_eq!(assembly.take(&part(0, Mode::Common, 192, 65)), Some(expected()));
        assert_eq!(assembly.take(&part(0, Mode::Differential, 192, 65)), Some(expected()));
        assert_eq!(assembly.dropped(true), 0);
    }

    #[test]
    fn a_lost_part_drops_its_spectrum_once_and_not_the_next() {
        for lost in 0..3 {
            let mut assembly = Assembly::default();
            let mut whole = 0;
            for first_sample in [0, 5000] {
                for (index, (first_bin, bins)) in [(0, 100), (100, 100), (200, 57)].into_iter().enumerate() {
                    if first_sample == 0 && index == lost {
                        continue;
                    }
                    whole += u32::from(
                        assembly.take(&part(first_sample, Mode::Common, first_bin, bins)).is_some(),
                    );
                }
            }
            assert_eq!((whole, assembly.dropped(true)), (1, 1), "part {lost} lost");
        }
    }

    #[test]
    fn a_part_that_came_twice_or_too_long_does_no_harm() {
        let mut assembly = Assembly::default();
        assert_eq!(assembly.take(&part(0, Mode::Common, 0, 192)), None);
        assert_eq!(assembly.take(&part(0, Mode::Common, 0, 192)), None);
        assert_eq!(assembly.take(&part(0, Mode::Common, 192, 65)), Some(expected()));
        assert_eq!(assembly.take(&part(0, Mode::Common, 192, 65)), None, "a whole one is stored once");
        assert_eq!(assembly.take(&part(9000, Mode::Common, 0, 192)), None);
        assert_eq!(assembly.take(&part(9000, Mode::Common, 192, 66)), None);
        assert_eq!(assembly.dropped(false), 1);
    }
}
