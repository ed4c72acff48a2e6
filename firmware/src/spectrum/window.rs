//! The window at both legs' own instants, and leg B's spectrum turned back to leg A's.
//!
//! Where leg B is sampled δ samples later, its window is evaluated there, `w(n + δ)`, and its transform is
//! turned by `exp(−j 2π k δ/N)`: exact for every frequency up to the window's own leakage (a textbook
//! property of the transform; without the shifted window an off-bin tone keeps a phase error).
//!
//! The window is twice Hann's, `1 − cos 2πn/N`, periodic; the scale of the result takes care of it.

use crate::fft::{self, Complex};
use crate::trigonometry::sine_cosine;
use core::f32::consts::FRAC_1_SQRT_2;

/// By how much leg B is late at one rate.
#[derive(Clone, Copy, Debug)]
pub(super) struct Turned {
    is_skewed: bool,
    /// δ/N, turns.
    per_bin: f32,
    /// Cosine and sine of 2πδ/N.
    shift: Complex,
}

impl Turned {
    /// No skew.
    pub(super) const NONE: Self = Self { is_skewed: false, per_bin: 0.0, shift: Complex::ZERO };

    /// Leg B late by `samples` of a transform of `points`.
    pub(super) fn new(samples: f32, points: usize) -> Self {
        let per_bin = samples / points as f32;
        let (sine, cosine) = sine_cosine(per_bin);
        Self { is_skewed: samples != 0.0, per_bin, shift: Complex { re: cosine, im: sine } }
    }

    /// Leg B's bin at leg A's instants.
    #[inline(always)]
    pub(super) fn back(&self, b: Complex, bin: usize) -> Complex {
        if !self.is_skewed {
            return b;
        }
        let (sine, cosine) = sine_cosine(bin as f32 * self.per_bin);
        Complex { re: b.re * cosine + b.im * sine, im: b.im * cosine - b.re * sine }
    }

    /// Windows of column n of 1024 points, for leg A and leg B: points n + 128 row.
    #[inline(always)]
    pub(super) fn eighth_windows(&self, n: usize) -> ([f32; 8], [f32; 8]) {
        let angle = fft::root(n);
        let window_a = eighths(angle);
        (window_a, if self.is_skewed { eighths(self.shifted(angle)) } else { window_a })
    }

    /// Windows of column n of 512 points, for leg A and leg B: points n + 128 row.
    #[inline(always)]
    pub(super) fn quarter_windows(&self, n: usize) -> ([f32; 4], [f32; 4]) {
        let Complex { re, im } = fft::root(n);
        // Twice the angle.
        let angle = Complex { re: 1.0 - 2.0 * im * im, im: 2.0 * re * im };
        let window_a = quarters(angle);
        (window_a, if self.is_skewed { quarters(self.shifted(angle)) } else { window_a })
    }

    #[inline(always)]
    fn shifted(&self, angle: Complex) -> Complex {
        Complex {
            re: angle.re * self.shift.re - angle.im * self.shift.im,
            im: angle.re * self.shift.im + angle.im * self.shift.re,
        }
    }
}

/// `1 − cos` of an angle, given by cosine and sine, and of that plus 1 .. 7 eighths of a turn.
#[inline(always)]
fn eighths(Complex { re: cosine, im: sine }: Complex) -> [f32; 8] {
    // An eighth of a turn on, and three eighths with the sign changed.
    let (one, three) = ((cosine - sine) * FRAC_1_SQRT_2, (cosine + sine) * FRAC_1_SQRT_2);
    [1.0 - cosine, 1.0 - one, 1.0 + sine, 1.0 + three, 1.0 + cosine, 1.0 + one, 1.0 - sine, 1.0 - three]
}

/// The same for quarters of a turn.
#[inline(always)]
fn quarters(Complex { re: cosine, im: sine }: Complex) -> [f32; 4] {
    [1.0 - cosine, 1.0 + sine, 1.0 + cosine, 1.0 - sine]
}
