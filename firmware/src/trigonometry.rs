//! Sines and cosines: while the program is built, for tables that live in flash, and a few at run time.
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

/// Sine and cosine of an angle in turns, of any size that `f32` can tell from its neighbours.
///
/// Folded to a quarter of a turn around 0 (there the next terms left out are below 3e-9), so the result is
/// good to about 2e-7.
pub(crate) fn sine_cosine(turns: f32) -> (f32, f32) {
    // Nearest quarter: truncation after moving away from 0.
    let quarters = (turns * 4.0 + if turns < 0.0 { -0.5 } else { 0.5 }) as i32;
    let angle = (turns - quarters as f32 * 0.25) * core::f32::consts::TAU;
    let square = angle * angle;
    // Taylor's terms, each a part of the one before; multiplied by the inverse, because a division is slow.
    let nested =
        |parts: [f32; 4]| parts.iter().rev().fold(1.0, |rest, part| 1.0 - square * part.recip() * rest);
    let (sine, cosine) = (angle * nested([6.0, 20.0, 42.0, 72.0]), nested([2.0, 12.0, 30.0, 56.0]));
    match quarters & 3 {
        0 => (sine, cosine),
        1 => (cosine, -sine),
        2 => (-sine, -cosine),
        _ => (-cosine, sine),
    }
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

    #[test]
    fn at_run_time_it_is_good_to_two_ten_millionths() {
        let mut worst = 0.0_f64;
        for step in -4000..=4000 {
            let turns = step as f32 / 1000.0;
            let (sine, cosine) = super::sine_cosine(turns);
            let angle = TAU * f64::from(turns);
            worst = worst.max((f64::from(sine) - libm::sin(angle)).abs());
            worst = worst.max((f64::from(cosine) - libm::cos(angle)).abs());
        }
        assert!(worst < 4e-7, "measured {worst:e}");
    }
}
