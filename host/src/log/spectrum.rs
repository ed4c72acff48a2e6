//! Puts averaged spectra together from their parts.
//!
//! A spectrum does not fit one message; its parts come in order of their first bin, those of several
//! signals, sets and rungs in between. A row is worth storing only whole: when a part is missing the
//! spectrum is dropped and counted once.

use legwise_protocol::cross::BIN_BYTES;
use legwise_protocol::message::{Mode, SegmentSet, SpectraPart, SpectrumPart};

/// Bytes of a power code.
const POWER_BYTES: usize = 2;

/// What is put together side by side.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
enum Kind {
    /// One mode, by devices of wire version 1.
    Mode(Mode),
    /// Both modes and their cross density.
    Set(SegmentSet),
}

/// Which spectrum a part belongs to, and how long that is.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
struct Whole {
    kind: Kind,
    rung: u8,
    first_sample: u64,
    points: u16,
    from_bin: u16,
    /// Codes of all bins.
    bytes: usize,
}

/// A part of either message: where its codes begin in the whole, in bytes; `None` before its beginning.
struct Piece<'a> {
    whole: Whole,
    start: Option<usize>,
    bin_bytes: usize,
    codes: &'a [u8],
}

impl<'a> From<&'a SpectrumPart> for Piece<'a> {
    fn from(part: &'a SpectrumPart) -> Self {
        let whole = Whole {
            kind: Kind::Mode(part.mode),
            rung: part.rung,
            first_sample: part.first_sample,
            points: part.points,
            from_bin: 0,
            bytes: (usize::from(part.points) / 2 + 1) * POWER_BYTES,
        };
        let start = Some(usize::from(part.first_bin) * POWER_BYTES);
        Self { whole, start, bin_bytes: POWER_BYTES, codes: part.codes.as_slice() }
    }
}

impl<'a> From<&'a SpectraPart> for Piece<'a> {
    fn from(part: &'a SpectraPart) -> Self {
        let whole = Whole {
            kind: Kind::Set(part.set),
            rung: part.rung,
            first_sample: part.first_sample,
            points: part.points,
            from_bin: part.from_bin,
            bytes: usize::from(part.bins) * BIN_BYTES,
        };
        let start = part.first_bin.checked_sub(part.from_bin).map(|bin| usize::from(bin) * BIN_BYTES);
        Self { whole, start, bin_bytes: BIN_BYTES, codes: part.codes.as_slice() }
    }
}

/// A spectrum being put together, or the memory of one that was stored or had to be dropped.
#[derive(Clone, Debug)]
struct Slot {
    whole: Whole,
    progress: Progress,
}

#[derive(Clone, Debug)]
enum Progress {
    /// Codes so far.
    Open(Vec<u8>),
    Stored,
    Dropped,
}

/// Spectra in progress of one run: one per signal or set, and rung.
#[derive(Clone, Debug, Default)]
pub(super) struct Assembly {
    slots: Vec<Slot>,
    dropped: u64,
}

impl Assembly {
    /// Spectra that were begun and lost a part, those still open included when `at_end`.
    pub(super) fn dropped(&self, at_end: bool) -> u64 {
        let open = self.slots.iter().filter(|slot| slot.is_open()).count() as u64;
        self.dropped + if at_end { open } else { 0 }
    }

    /// Takes a part of one mode; the codes of the whole spectrum when it was the last one.
    pub(super) fn take_mode(&mut self, part: &SpectrumPart) -> Option<Vec<u8>> {
        self.take(&Piece::from(part))
    }

    /// Takes a part of both modes; the codes of the whole when it was the last one.
    pub(super) fn take_set(&mut self, part: &SpectraPart) -> Option<Vec<u8>> {
        self.take(&Piece::from(part))
    }

    fn take(&mut self, piece: &Piece<'_>) -> Option<Vec<u8>> {
        let whole = piece.whole;
        let is_same = |slot: &Slot| slot.whole.kind == whole.kind && slot.whole.rung == whole.rung;
        let index = self.slots.iter().position(is_same).unwrap_or(self.slots.len());
        if self.slots.get(index).is_none_or(|slot| slot.whole != whole) {
            let slot = Slot { whole, progress: Progress::Open(Vec::new()) };
            match self.slots.get_mut(index) {
                Some(old) => {
                    self.dropped += u64::from(old.is_open());
                    *old = slot;
                }
                None => self.slots.push(slot),
            }
        }
        let slot = self.slots.get_mut(index)?;
        let Progress::Open(codes) = &mut slot.progress else { return None };
        let end = piece.start.map(|start| start + piece.codes.len());
        if end.is_some_and(|end| end <= codes.len() && end > 0) {
            return None; // the same part once more
        }
        let fits = piece.start == Some(codes.len()) && end.is_some_and(|end| end <= whole.bytes);
        if !fits || piece.codes.is_empty() || !piece.codes.len().is_multiple_of(piece.bin_bytes) {
            slot.progress = Progress::Dropped;
            self.dropped += 1;
            return None;
        }
        codes.extend_from_slice(piece.codes);
        if codes.len() < whole.bytes {
            return None;
        }
        let codes = std::mem::take(codes);
        slot.progress = Progress::Stored;
        Some(codes)
    }
}

impl Slot {
    fn is_open(&self) -> bool {
        matches!(self.progress, Progress::Open(_))
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
        assert_eq!(assembly.take_mode(&part(0, Mode::Common, 0, 192)), None);
        assert_eq!(assembly.take_mode(&part(0, Mode::Differential, 0, 192)), None);
        assert_eq!(assembly.dropped(true), 2, "two are open");
        assert_eq!(assembly.take_mode(&part(0, Mode::Common, 192, 65)), Some(expected()));
        assert_eq!(assembly.take_mode(&part(0, Mode::Differential, 192, 65)), Some(expected()));
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
                        assembly.take_mode(&part(first_sample, Mode::Common, first_bin, bins)).is_some(),
                    );
                }
            }
            assert_eq!((whole, assembly.dropped(true)), (1, 1), "part {lost} lost");
        }
    }

    #[test]
    fn a_part_that_came_twice_or_too_long_does_no_harm() {
        let mut assembly = Assembly::default();
        assert_eq!(assembly.take_mode(&part(0, Mode::Common, 0, 192)), None);
        assert_eq!(assembly.take_mode(&part(0, Mode::Common, 0, 192)), None);
        assert_eq!(assembly.take_mode(&part(0, Mode::Common, 192, 65)), Some(expected()));
        assert_eq!(assembly.take_mode(&part(0, Mode::Common, 192, 65)), None, "a whole one is stored once");
        assert_eq!(assembly.take_mode(&part(9000, Mode::Common, 0, 192)), None);
        assert_eq!(assembly.take_mode(&part(9000, Mode::Common, 192, 66)), None);
        assert_eq!(assembly.dropped(false), 1);
    }

    /// Parts of 54 bins of a whole from bin 20 to 163; every byte tells its place.
    fn parts(first_sample: u64, set: SegmentSet, rung: u8) -> Vec<SpectraPart> {
        let (from_bin, bins) = (20, 144);
        (0..bins)
            .step_by(54)
            .map(|start| {
                let end = bins.min(start + 54);
                let bytes = usize::from(start) * BIN_BYTES..usize::from(end) * BIN_BYTES;
                let codes: Vec<u8> = bytes.map(|place| (place * 31 % 251) as u8).collect();
                SpectraPart {
                    first_sample,
                    span_samples: 1000,
                    set,
                    rung,
                    points: 1024,
                    segments: 8,
                    skipped: 0,
                    other: 3,
                    from_bin,
                    bins,
                    first_bin: from_bin + start,
                    codes: Bytes::from_slice_cut(&codes),
                }
            })
            .collect()
    }

    #[test]
    fn parts_of_two_sets_and_two_rungs_in_between_make_four_wholes() {
        let kinds =
            [(SegmentSet::Idle, 0), (SegmentSet::Driven, 0), (SegmentSet::Idle, 2), (SegmentSet::Driven, 2)];
        let all = kinds.map(|(set, rung)| parts(0, set, rung));
        let expected: Vec<u8> = (0..144 * BIN_BYTES).map(|place| (place * 31 % 251) as u8).collect();
        let mut assembly = Assembly::default();
        for place in 0..3 {
            for part in &all {
                let whole = assembly.take_set(&part[place]);
                assert_eq!(whole, (place == 2).then(|| expected.clone()));
            }
        }
        assert_eq!(assembly.dropped(true), 0);
        assert_eq!(all[0].iter().map(|part| part.codes.as_slice().len()).max(), Some(378), "parts are full");
    }

    #[test]
    fn any_lost_part_of_both_modes_drops_its_whole_once_and_not_the_next() {
        for lost in 0..3 {
            let mut assembly = Assembly::default();
            let mut whole = 0;
            for first_sample in [0, 5000] {
                for (index, part) in parts(first_sample, SegmentSet::Idle, 1).iter().enumerate() {
                    if first_sample > 0 || index != lost {
                        whole += u32::from(assembly.take_set(part).is_some());
                    }
                }
            }
            assert_eq!((whole, assembly.dropped(true)), (1, 1), "part {lost} lost");
        }
    }

    #[test]
    fn parts_that_contradict_themselves_are_dropped() {
        let [first, second, _] = parts(0, SegmentSet::Idle, 0).try_into().unwrap();
        let cut = |bytes: usize| Bytes::from_slice_cut(&first.codes.as_slice()[..bytes]);
        for (what, part) in [
            ("before its beginning", SpectraPart { first_bin: 19, ..first }),
            ("nothing", SpectraPart { codes: Bytes::new(), ..first }),
            ("no bins at all", SpectraPart { bins: 0, codes: Bytes::new(), ..first }),
            ("half a bin", SpectraPart { codes: cut(6), ..first }),
            ("beyond its end", SpectraPart { bins: 53, ..first }),
        ] {
            let mut assembly = Assembly::default();
            assert_eq!((assembly.take_set(&part), assembly.dropped(false)), (None, 1), "{what}");
        }
        // Another length in mid-course is another whole.
        let mut assembly = Assembly::default();
        assembly.take_set(&first);
        assembly.take_set(&SpectraPart { bins: 143, ..second });
        assert_eq!(assembly.dropped(true), 2);
    }
}
