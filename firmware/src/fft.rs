//! A complex 1024-point Fourier transform: radix 4, self-sorting.
//!
//! Decimation in frequency in the Stockham order (Cochran et al., *What is the fast Fourier
//! transform?*, Proc. IEEE 55(10), 1967; Van Loan, *Computational Frameworks for the Fast Fourier
//! Transform*, 1992, section 1.7): each of the five passes reads one pair of arrays and writes the
//! other, and the output comes in natural order without a permutation.
//!
//! * Sign: `X[k] = Σ x[n] exp(−j 2π k n / N)`, not normalised. Order: k = 0 .. N−1.
//! * Only additions and multiplications in a fixed order, nothing fused: the same bits on a
//!   Cortex-M4F and on a desktop.
//! * Rounding error grows with log N; against an `f64` transform it stays below 1e-6 of the largest
//!   output (tested).

/// Points of the transform.
pub const POINTS: usize = 1024;
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

/// What is transformed, and the result.
pub type Complexes = [Complex; POINTS];

/// Three powers of one root of unity: (re, im) of w, w², w³ with w = exp(−j 2π k/N).
type Twiddle = [f32; 6];

/// w^k for k = 0 .. N/4, computed when the program is built.
static TWIDDLES: [Twiddle; QUARTER] = {
    let mut table = [[0.0; 6]; QUARTER];
    let mut k = 0;
    while k < QUARTER {
        let mut power = 1;
        while power <= 3 {
            let (sine, cosine) = crate::trigonometry::sine_cosine_of_turn(k * power, POINTS);
            table[k][2 * power - 2] = cosine as f32;
            table[k][2 * power - 1] = -sine as f32;
            power += 1;
        }
        k += 1;
    }
    table
};

/// Transforms `data` into `result` (of any content before). `data` is used as working space and lost.
pub fn transform(data: &mut Complexes, result: &mut Complexes) {
    pass(data, result, 1);
    pass(result, data, 4);
    pass(data, result, 16);
    pass(result, data, 64);
    last_pass(data, result);
}

/// One radix-4 pass at stride `stride`: butterfly p, column q reads x[q + stride (p + m r)] for
/// r = 0..4 with m = N/(4 stride), and writes y[q + stride (4p + r)].
fn pass(from: &Complexes, to: &mut Complexes, stride: usize) {
    let [from0, from1, from2, from3] = quarters(from).map(|quarter| quarter.chunks_exact(stride));
    let inputs = from0.zip(from1).zip(from2.zip(from3));
    let outputs = to.chunks_exact_mut(4 * stride);
    for ((((a, b), (c, d)), out), twiddle) in inputs.zip(outputs).zip(TWIDDLES.iter().step_by(stride)) {
        let &[w1_re, w1_im, w2_re, w2_im, w3_re, w3_im] = twiddle;
        let [out0, out1, out2, out3] = quarters_mut(out);
        let inputs = a.iter().zip(b).zip(c.iter().zip(d));
        let outputs = out0.iter_mut().zip(out1).zip(out2.iter_mut().zip(out3));
        for (((a, b), (c, d)), ((y0, y1), (y2, y3))) in inputs.zip(outputs) {
            let [x0, x1, x2, x3] = butterfly(*a, *b, *c, *d);
            *y0 = x0;
            *y1 = multiply(x1, w1_re, w1_im);
            *y2 = multiply(x2, w2_re, w2_im);
            *y3 = multiply(x3, w3_re, w3_im);
        }
    }
}

/// The pass at stride N/4: all factors are 1.
fn last_pass(from: &Complexes, to: &mut Complexes) {
    let [a, b, c, d] = quarters(from);
    let [out0, out1, out2, out3] = quarters_mut(to);
    let inputs = a.iter().zip(b).zip(c.iter().zip(d));
    let outputs = out0.iter_mut().zip(out1).zip(out2.iter_mut().zip(out3));
    for (((a, b), (c, d)), ((y0, y1), (y2, y3))) in inputs.zip(outputs) {
        [*y0, *y1, *y2, *y3] = butterfly(*a, *b, *c, *d);
    }
}

/// The four-point transform.
#[inline(always)]
fn butterfly(a: Complex, b: Complex, c: Complex, d: Complex) -> [Complex; 4] {
    let sum_ac = Complex { re: a.re + c.re, im: a.im + c.im };
    let difference_ac = Complex { re: a.re - c.re, im: a.im - c.im };
    let sum_bd = Complex { re: b.re + d.re, im: b.im + d.im };
    // -j (b - d)
    let turned_bd = Complex { re: b.im - d.im, im: d.re - b.re };
    [
        Complex { re: sum_ac.re + sum_bd.re, im: sum_ac.im + sum_bd.im },
        Complex { re: difference_ac.re + turned_bd.re, im: difference_ac.im + turned_bd.im },
        Complex { re: sum_ac.re - sum_bd.re, im: sum_ac.im - sum_bd.im },
        Complex { re: difference_ac.re - turned_bd.re, im: difference_ac.im - turned_bd.im },
    ]
}

#[inline(always)]
fn multiply(x: Complex, re: f32, im: f32) -> Complex {
    Complex { re: x.re * re - x.im * im, im: x.re * im + x.im * re }
}

fn quarters(values: &Complexes) -> [&[Complex]; 4] {
    let (low, high) = values.split_at(POINTS / 2);
    let (q0, q1) = low.split_at(QUARTER);
    let (q2, q3) = high.split_at(QUARTER);
    [q0, q1, q2, q3]
}

fn quarters_mut(values: &mut [Complex]) -> [&mut [Complex]; 4] {
    let length = values.len();
    let (low, high) = values.split_at_mut(length / 2);
    let (q0, q1) = low.split_at_mut(length / 4);
    let (q2, q3) = high.split_at_mut(length / 4);
    [q0, q1, q2, q3]
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
            transform(&mut data, &mut scratch);
            let data = scratch;
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
            let mut result = [Complex::ZERO; POINTS];
            transform(&mut data, &mut result);
            let data = result;
            for (k, out) in data.iter().enumerate() {
                let expected = if k == bin { POINTS as f32 } else { 0.0 };
                assert!((out.re - expected).abs() < 1e-3 && out.im.abs() < 1e-3, "bin {bin}, output {k}");
            }
        }
    }
}
