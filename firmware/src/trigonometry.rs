//! Sines and cosines while the program is built, for tables that live in flash.
//!
//! Taylor series around 0 after folding into one eighth of a turn: there eleven terms leave less
//! than 1e-17, so the result is the correctly rounded `f64` to within two units.

use core::f64::consts::TAU;

/// Sine and cosine of `part / whole` of a turn. `whole` must be a positive multiple of 8.
pub(crate) const fn sine_cosine_of_turn(part: usize, whole: usize) -> (f64, f64) {
    let part = part % whole;
    let eighth = whole / 8;
    // Fold by octants; `rest` is at most one eighth of a turn.
    let octant = part / eighth;
    let into = part % eighth;
    let rest = if octant.is_multiple_of(2) { into } else { eighth - into };
    let angle = TAU * rest as f64 / whole as f64;
    let (sine, cosine) = (series(angle, angle, 1), series(1.0, angle, 0));
    match octant {
        0 => (sine, cosine),
        1 => (cosine, sine),
        2 => (cosine, -sine),
        3 => (sine, -cosine),
        4 => (-sine, -cosine),
        5 => (-cosine, -sine),
        6 => (-cosine, sine),
        _ => (-sine, cosine),
    }
}

/// `first` − `first`·x²/((n+1)(n+2)) + ..., smallest term first.
const fn series(first: f64, angle: f64, start: u32) -> f64 {
    let square = angle * angle;
    let mut nested = 1.0;
    let mut term = 10;
    while term > 0 {
        let below = (start + 2 * term) as f64 * (start + 2 * term - 1) as f64;
        nested = 1.0 - square / below * nested;
        term -= 1;
    }
    first * nested
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn agrees_with_the_mathematical_library_all_around() {
        for part in 0..2048 {
            let (sine, cosine) = sine_cosine_of_turn(part, 1024);
            let angle = TAU * (part % 1024) as f64 / 1024.0;
            // The reference's own argument is rounded to half a unit of 2π: 4.4e-16; plus a unit each.
            let worst = (sine - libm::sin(angle)).abs().max((cosine - libm::cos(angle)).abs());
            assert!(worst < 7e-16, "{part}: {worst:e}");
        }
    }
}
