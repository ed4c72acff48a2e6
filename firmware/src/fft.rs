//! A complex 1024-point Fourier transform in one buffer: radix 8, 8, 4, 4.
//!
//! Decimation in time (Cooley and Tukey, *An algorithm for the machine calculation of complex Fourier
//! series*, Math. Comp. 19(90), 1965; Van Loan, *Computational Frameworks for the Fast Fourier
//! Transform*, 1992, chapter 1). The first pass fetches its points from wherever the caller has them,
//! two passes work in place, and the last one deals out the result: no second buffer, no permutation.
//!
//! * Sign: `X[k] = Σ x[n] exp(−j 2π k n / N)`, not normalised.
//! * Output in pairs `X[k]`, `X[N−k]`, as two real signals in one transform need it.
//! * Point n = 128 r + 16 s + 4 t + u, bin k = d + 8e + 64f + 256g (digits r, s, d, e below 8, the others
//!   below 4). The passes replace r by d, s by e, t by f, u by g. What belongs to column r, s, t, u lies
//!   at 256 t + 32 s + 4 r + u: before the last pass the four terms of bin k are neighbours, in the
//!   order of k, and everything but t is near enough for the short offsets of a load.
//! * Factors of a column and of its mirror image are the same numbers: with w = exp(−j 2π k/N),
//!   `w^r(N/4−k) = (−j)^r conj(w^rk)`. The last pass, which takes both columns together, uses the
//!   conjugate factors: they give the outputs moved on by one.
//! * Only additions and multiplications in a fixed order, nothing fused: the same bits on a
//!   Cortex-M4F and on a desktop.
//! * Rounding error grows with log N; against an `f64` transform it stays below 1e-6 of the largest
//!   output (tested).

/// Points of the transform.
pub const POINTS: usize = 1024;
/// Bins k that have a mirror image N−k: from 0 to N/2, which are their own.
pub const BINS: usize = POINTS / 2 + 1;
/// The first pass combines points this far apart.
pub const COLUMNS: usize = POINTS / 8;
const QUARTER: usize = POINTS / 4;

/// A complex number.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct Complex {
    /// Real part.
    pub re: f32,
    /// Imaginary part.
    pub im: f32,
}

impl Complex {
    /// Zero.
    pub const ZERO: Self = Self { re: 0.0, im: 0.0 };
}

/// Working space.
pub type Complexes = [Complex; POINTS];

/// Factors of the radix-4 passes: w, w², w³ for w = exp(−j 2π k/N), k = 0 .. N/8.
static FINE: [[Complex; 3]; COLUMNS + 1] = powers(POINTS);
/// Factors of the radix-8 pass: w .. w⁷ for w = exp(−j 2π k/64).
static COARSE: [[Complex; 7]; 8] = powers(64);

/// Powers of exp(−j 2π k / `whole`) for k = 0, 1, .., computed when the program is built.
const fn powers<const COUNT: usize, const LENGTH: usize>(whole: usize) -> [[Complex; COUNT]; LENGTH] {
    let mut table = [[Complex::ZERO; COUNT]; LENGTH];
    let mut entry = 0;
    while entry < COUNT * LENGTH {
        let (k, power) = (entry / COUNT, entry % COUNT);
        let (sine, cosine) = crate::trigonometry::sine_cosine_of_turn(k * (power + 1), whole);
        table[k][power] = Complex { re: cosine as f32, im: -sine as f32 };
        entry += 1;
    }
    table
}

/// Cosine and sine of n/N of a turn, n < N/8.
#[inline(always)]
pub(crate) fn root(n: usize) -> Complex {
    let [root, ..] = FINE[n % COLUMNS];
    root.conjugate()
}

/// Factors for k < N/4.
#[inline(always)]
fn fine(k: usize) -> [Complex; 3] {
    let k = k % QUARTER;
    let [w1, w2, w3] = FINE[k.min(QUARTER - k)];
    if k <= COLUMNS {
        return [w1, w2, w3];
    }
    [Complex { re: -w1.im, im: -w1.re }, Complex { re: -w2.re, im: w2.im }, Complex { re: w3.im, im: w3.re }]
}

/// Transforms what `column` gives for n < N/8: sums and differences of the points n + row N/8 and
/// n + (row + 4) N/8 for row = 0 .. 3. `take` gets every bin k from 0 to N/2, in some order, with `X[k]` and
/// `X[N−k]`. `work` may hold anything before and holds nothing of use after.
#[inline(always)]
pub fn transform(
    work: &mut Complexes,
    column: impl Fn(usize) -> [(Complex, Complex); 4],
    take: impl FnMut(usize, Complex, Complex),
) {
    first_pass(work, column);
    // Twice four rows of 32, four times; then four rows of 64 times 4.
    for [low, high] in work.as_chunks_mut().0.as_chunks_mut().0.as_chunks_mut().0 {
        combine_8(low, high);
    }
    if let [r0, r1, r2, r3] = work.as_chunks_mut().0.as_chunks_mut().0 {
        combine_4(r0, r1, r2, r3);
    }
    last_pass(work, take);
}

// None of the passes is inlined: where the compiler sees that rows are parts of one buffer it addresses
// them all from one register, with offsets too large for a load.

#[inline(never)]
fn first_pass(work: &mut Complexes, column: impl Fn(usize) -> [(Complex, Complex); 4]) {
    let (groups, _) = work.as_chunks_mut::<4>().0.as_chunks_mut::<8>();
    for (t, groups) in groups.as_chunks_mut::<8>().0.iter_mut().enumerate() {
        for (s, rows) in groups.iter_mut().enumerate() {
            for u in 0..4 {
                let x = butterfly_8(column(16 * s + 4 * t + u));
                for (row, x) in rows.iter_mut().zip(x) {
                    row[u] = x;
                }
            }
        }
    }
}

/// Combines eight transforms of 8 points into one of 64, four times.
#[inline(never)]
fn combine_8([r0, r1, r2, r3]: &mut [[Complex; 32]; 4], [r4, r5, r6, r7]: &mut [[Complex; 32]; 4]) {
    for n in 0..32 {
        let [w1, w2, w3, w4, w5, w6, w7] = COARSE[n / 4];
        let (b, c, d) = (r1[n].times(w1), r2[n].times(w2), r3[n].times(w3));
        let (e, f, g, h) = (r4[n].times(w4), r5[n].times(w5), r6[n].times(w6), r7[n].times(w7));
        let pairs = [(r0[n], e), (b, f), (c, g), (d, h)].map(|(low, high)| low.sum_and_difference(high));
        [r0[n], r1[n], r2[n], r3[n], r4[n], r5[n], r6[n], r7[n]] = butterfly_8(pairs);
    }
}

/// What combines four transforms of 64 points into one of 256, four times.
type Row = [[Complex; 4]; 64];

#[inline(never)]
fn combine_4(r0: &mut Row, r1: &mut Row, r2: &mut Row, r3: &mut Row) {
    let rows = r0.iter_mut().zip(r1).zip(r2.iter_mut().zip(r3));
    for (k, ((r0, r1), (r2, r3))) in rows.enumerate() {
        let factors = fine(4 * k);
        for n in 0..4 {
            [r0[n], r1[n], r2[n], r3[n]] = twisted_4([r0[n], r1[n], r2[n], r3[n]], factors);
        }
    }
}

/// Combines four transforms of 256 points, columns k and N/4−k together.
#[inline(never)]
fn last_pass(work: &Complexes, mut take: impl FnMut(usize, Complex, Complex)) {
    const MIDDLE: usize = COLUMNS;
    let Some(blocks) = work.as_chunks::<4>().0.as_array::<QUARTER>() else { return };
    let [x0, x1, x2, x3] = butterfly_4(blocks[0]);
    take(0, x0, x0);
    take(QUARTER, x1, x3);
    take(2 * QUARTER, x2, x2);
    for k in 1..MIDDLE {
        let (mirror, factors) = (QUARTER - k, FINE[k]);
        let [x0, x1, x2, x3] = twisted_4(blocks[k], factors);
        let [y3, y0, y1, y2] = twisted_4(blocks[mirror], factors.map(Complex::conjugate));
        take(k, x0, y3);
        take(mirror + QUARTER, y1, x2);
        take(mirror, y0, x3);
        take(k + QUARTER, x1, y2);
    }
    let [x0, x1, x2, x3] = twisted_4(blocks[MIDDLE], FINE[MIDDLE]);
    take(MIDDLE, x0, x3);
    take(MIDDLE + QUARTER, x1, x2);
}

/// Four points, the factors of all but the first, and their transform.
#[inline(always)]
fn twisted_4([a, b, c, d]: [Complex; 4], [w1, w2, w3]: [Complex; 3]) -> [Complex; 4] {
    butterfly_4([a, b.times(w1), c.times(w2), d.times(w3)])
}

/// The four-point transform.
#[inline(always)]
fn butterfly_4([a, b, c, d]: [Complex; 4]) -> [Complex; 4] {
    let (sum_ac, difference_ac) = a.sum_and_difference(c);
    let (sum_bd, difference_bd) = b.sum_and_difference(d);
    let (x0, x2) = sum_ac.sum_and_difference(sum_bd);
    let (x1, x3) = difference_ac.sum_and_difference(difference_bd.turned());
    [x0, x1, x2, x3]
}

/// The eight-point transform, from sums and differences of points four apart.
#[inline(always)]
fn butterfly_8([(a, b), (c, d), (e, f), (g, h)]: [(Complex, Complex); 4]) -> [Complex; 8] {
    const ROOT: f32 = core::f32::consts::FRAC_1_SQRT_2;
    let (even0, even2) = a.sum_and_difference(e);
    let (odd0, odd2) = c.sum_and_difference(g);
    let (even1, even3) = b.sum_and_difference(f.turned());
    let (odd1, odd3) = d.sum_and_difference(h.turned());
    // An eighth of a turn and three.
    let odd1 = Complex { re: (odd1.re + odd1.im) * ROOT, im: (odd1.im - odd1.re) * ROOT };
    let odd3 = Complex { re: (odd3.im - odd3.re) * ROOT, im: (odd3.re + odd3.im) * -ROOT };
    let (x0, x4) = even0.sum_and_difference(odd0);
    let (x1, x5) = even1.sum_and_difference(odd1);
    let (x2, x6) = even2.sum_and_difference(odd2.turned());
    let (x3, x7) = even3.sum_and_difference(odd3);
    [x0, x1, x2, x3, x4, x5, x6, x7]
}

impl Complex {
    /// The two-point transform.
    #[inline(always)]
    pub fn sum_and_difference(self, other: Self) -> (Self, Self) {
        let sum = Self { re: self.re + other.re, im: self.im + other.im };
        (sum, Self { re: self.re - other.re, im: self.im - other.im })
    }

    #[inline(always)]
    fn times(self, factor: Self) -> Self {
        let re = self.re * factor.re - self.im * factor.im;
        Self { re, im: self.re * factor.im + self.im * factor.re }
    }

    /// −j times it: a quarter of a turn back.
    #[inline(always)]
    fn turned(self) -> Self {
        Self { re: self.im, im: -self.re }
    }

    #[inline(always)]
    fn conjugate(self) -> Self {
        Self { re: self.re, im: -self.im }
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use rustfft::{FftPlanner, num_complex::Complex64};

    /// A repeatable sequence in ±1 (multiplicative congruential, Lewis, Goodman and Miller 1969).
    fn noise(seed: &mut u64) -> f32 {
        *seed = *seed * 16_807 % 2_147_483_647;
        (*seed as f64 / 1_073_741_823.5 - 1.0) as f32
    }

    /// The whole output in natural order; the transform's working space is dirty before.
    fn transformed(data: &Complexes, dirt: &Complexes) -> Complexes {
        let (mut work, mut result) = (*dirt, [Complex::ZERO; POINTS]);
        let point = |n: usize, row: usize| data[n + COLUMNS * row];
        let column = |n| core::array::from_fn(|row| point(n, row).sum_and_difference(point(n, row + 4)));
        transform(&mut work, column, |bin, x, mirror| {
            result[(POINTS - bin) % POINTS] = mirror;
            result[bin] = x;
        });
        result
    }

    fn reference(data: &Complexes) -> std::vec::Vec<Complex64> {
        let mut buffer: std::vec::Vec<_> =
            data.iter().map(|x| Complex64::new(x.re.into(), x.im.into())).collect();
        FftPlanner::new().plan_fft_forward(POINTS).process(&mut buffer);
        buffer
    }

    #[test]
    fn agrees_with_a_double_precision_reference_on_noise_with_dirty_scratch() {
        let mut seed = 1;
        let mut worst = 0.0_f64;
        for _ in 0..50 {
            let mut data = [Complex::ZERO; POINTS];
            let mut scratch = [Complex::ZERO; POINTS];
            for n in 0..POINTS {
                data[n].re = noise(&mut seed);
                data[n].im = noise(&mut seed);
                scratch[n].re = f32::NAN;
                scratch[n].im = noise(&mut seed);
            }
            let expected = reference(&data);
            let data = transformed(&data, &scratch);
            let largest = expected.iter().map(|x| x.norm()).fold(0.0, f64::max);
            for (k, expected) in expected.iter().enumerate() {
                let error = Complex64::new(data[k].re.into(), data[k].im.into()) - expected;
                worst = worst.max(error.norm() / largest);
            }
        }
        // f32 unit round-off 6e-8, ten levels of additions: rms near u sqrt(10)/2, worst of 51 200 bins about 5 u.
        assert!(worst < 4e-7, "measured {worst:e}");
    }

    #[test]
    fn one_tone_lands_in_one_bin_in_natural_order() {
        for bin in [0, 1, 2, 5, 255, 256, 511, 512, 700, 1023] {
            let mut data = [Complex::ZERO; POINTS];
            for (n, slot) in data.iter_mut().enumerate() {
                let turn = core::f64::consts::TAU * ((bin * n) % POINTS) as f64 / POINTS as f64;
                *slot = Complex { re: libm::cos(turn) as f32, im: libm::sin(turn) as f32 };
            }
            let data = transformed(&data, &[Complex::ZERO; POINTS]);
            for (k, out) in data.iter().enumerate() {
                let expected = if k == bin { POINTS as f32 } else { 0.0 };
                assert!((out.re - expected).abs() < 1e-3 && out.im.abs() < 1e-3, "bin {bin}, output {k}");
            }
        }
    }
}
