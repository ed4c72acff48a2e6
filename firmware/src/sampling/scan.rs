//! What one scan of the converter means: two leg codes, and whether the marker is where it belongs.
//!
//! ```text
//!  two converters, one 32-bit word per conversion       one converter, 16-bit words
//!   bit 31       16 15        0                          word 0   leg A
//!   word 0   leg B  |  leg A                              word 1   leg B
//!   word 1 marker B | marker A                            word 2   marker (optional)
//!   (first converter in the low half)                     bit 15 of each: this conversion failed
//! ```

/// A window of codes, both ends included.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct CodeWindow {
    /// Lowest code inside.
    pub low: u16,
    /// Highest code inside.
    pub high: u16,
}

impl CodeWindow {
    /// Whether `code` lies inside.
    pub const fn contains(self, code: u16) -> bool {
        self.low <= code && code <= self.high
    }
}

/// What a scan turned out to be.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Scan {
    /// A pair of codes in good order.
    Pair {
        /// Leg A.
        code_a: u16,
        /// Leg B.
        code_b: u16,
    },
    /// The converter itself says that a conversion of this scan is void.
    BadConversion,
    /// The marker is not where it belongs: the readings have slipped or the channels are swapped.
    WrongMarker,
}

/// How a converter lays out a scan.
pub trait ScanLayout {
    /// What it writes at a time.
    type Word: Copy + Default;
    /// How many of them per scan; at most [`LONGEST_SCAN`].
    const WORDS: usize;

    /// Reads one scan of [`Self::WORDS`] words. Fewer words count as a wrong marker.
    fn read(&self, words: &[Self::Word]) -> Scan;
}

/// Most words a scan may have.
pub const LONGEST_SCAN: usize = 4;

/// Two converters started together: leg and marker of each, two words per scan.
#[derive(Clone, Copy, Debug)]
pub struct SimultaneousLayout {
    /// What the first converter's marker reads.
    pub marker_a: CodeWindow,
    /// What the second converter's marker reads. Must not overlap `marker_a`: then swapped converters
    /// show as well as slipped readings.
    pub marker_b: CodeWindow,
}

impl ScanLayout for SimultaneousLayout {
    type Word = u32;
    const WORDS: usize = 2;

    fn read(&self, words: &[u32]) -> Scan {
        let &[legs, markers] = words else { return Scan::WrongMarker };
        if self.marker_a.contains(low_half(markers)) && self.marker_b.contains(high_half(markers)) {
            Scan::Pair { code_a: low_half(legs), code_b: high_half(legs) }
        } else {
            Scan::WrongMarker
        }
    }
}

const fn low_half(word: u32) -> u16 {
    (word & 0xffff) as u16
}

const fn high_half(word: u32) -> u16 {
    (word >> 16) as u16
}

/// Set in a word of [`AlternatingLayout`] when its conversion failed.
pub const BAD_CONVERSION: u16 = 1 << 15;

/// One converter that reads leg A, leg B and a marker in turn: three words per scan.
///
/// One slip shows at its first scan. Several that nobody reports and that add up to a whole scan leave
/// the marker in its place: they cannot be seen, and the scan in which they meet may hold a wrong pair.
#[derive(Clone, Copy, Debug)]
pub struct AlternatingLayout {
    /// What the marker reads.
    pub marker: CodeWindow,
}

impl ScanLayout for AlternatingLayout {
    type Word = u16;
    const WORDS: usize = 3;

    fn read(&self, words: &[u16]) -> Scan {
        let &[code_a, code_b, marker] = words else { return Scan::WrongMarker };
        if (code_a | code_b | marker) & BAD_CONVERSION != 0 {
            Scan::BadConversion
        } else if self.marker.contains(marker) {
            Scan::Pair { code_a, code_b }
        } else {
            Scan::WrongMarker
        }
    }
}

/// One converter that reads leg A and leg B in turn, without a marker: faster, and blind to a swap.
#[derive(Clone, Copy, Debug)]
pub struct UnmarkedLayout;

impl ScanLayout for UnmarkedLayout {
    type Word = u16;
    const WORDS: usize = 2;

    fn read(&self, words: &[u16]) -> Scan {
        let &[code_a, code_b] = words else { return Scan::WrongMarker };
        if (code_a | code_b) & BAD_CONVERSION != 0 {
            Scan::BadConversion
        } else {
            Scan::Pair { code_a, code_b }
        }
    }
}

const _: () = assert!(SimultaneousLayout::WORDS <= LONGEST_SCAN && AlternatingLayout::WORDS <= LONGEST_SCAN);

#[cfg(test)]
mod tests {
    use super::*;

    const DUAL: SimultaneousLayout = SimultaneousLayout {
        marker_a: CodeWindow { low: 4000, high: 4095 },
        marker_b: CodeWindow { low: 0, high: 95 },
    };
    const SINGLE: AlternatingLayout = AlternatingLayout { marker: CodeWindow { low: 740, high: 1000 } };

    #[test]
    fn the_first_converter_is_in_the_low_half() {
        assert_eq!(DUAL.read(&[0x0222_0111, 0x0003_0ffd]), Scan::Pair { code_a: 0x111, code_b: 0x222 });
    }

    #[test]
    fn swapped_converters_and_slipped_readings_both_show() {
        let (legs, markers) = (0x0222_0111_u32, 0x0003_0ffd_u32);
        assert_eq!(DUAL.read(&[legs.rotate_left(16), markers.rotate_left(16)]), Scan::WrongMarker);
        assert_eq!(DUAL.read(&[markers, legs]), Scan::WrongMarker);
        assert_eq!(DUAL.read(&[legs]), Scan::WrongMarker);
    }

    #[test]
    fn any_slip_of_a_three_channel_scan_shows() {
        let stream = [2000, 1500, 876, 2001, 1501, 877_u16];
        assert_eq!(SINGLE.read(&stream[0..3]), Scan::Pair { code_a: 2000, code_b: 1500 });
        assert_eq!(SINGLE.read(&stream[1..4]), Scan::WrongMarker);
        assert_eq!(SINGLE.read(&stream[2..5]), Scan::WrongMarker);
        assert_eq!(SINGLE.read(&stream[3..6]), Scan::Pair { code_a: 2001, code_b: 1501 });
    }

    #[test]
    fn a_failed_conversion_in_any_place_voids_the_scan() {
        for place in 0..3 {
            let mut words = [2000, 1500, 876];
            words[place] |= BAD_CONVERSION;
            assert_eq!(SINGLE.read(&words), Scan::BadConversion, "word {place}");
        }
        assert_eq!(UnmarkedLayout.read(&[2000, 1500 | BAD_CONVERSION]), Scan::BadConversion);
        assert_eq!(UnmarkedLayout.read(&[2000, 1500]), Scan::Pair { code_a: 2000, code_b: 1500 });
    }
}
