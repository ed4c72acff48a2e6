//! A complex 1024-point Fourier transform: radix 4, self-sorting, real and imaginary parts apart.
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

/// Real and imaginary parts.
#[derive(Clone, Copy, Debug)]
pub struct Complexes {
    /// Real parts.
    pub re: [f32; POINTS],
    /// Imaginary parts.
    pub im: [f32; POINTS],
}

impl Complexes {
    /// All zero.
    pub const ZERO: Self = Self { re: [0.0; POINTS], im: [0.0; POINTS] };
}

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
    let [re0, re1, re2, re3] = quarters(&from.re);
    let [im0, im1, im2, im3] = quarters(&from.im);
    let inputs_re = re0
        .chunks_exact(stride)
        .zip(re1.chunks_exact(stride))
        .zip(re2.chunks_exact(stride))
        .zip(re3.chunks_exact(stride));
    let inputs_im = im0
        .chunks_exact(stride)
        .zip(im1.chunks_exact(stride))
        .zip(im2.chunks_exact(stride))
        .zip(im3.chunks_exact(stride));
    let outputs = to.re.chunks_exact_mut(4 * stride).zip(to.im.chunks_exact_mut(4 * stride));
    let twiddles = TWIDDLES.iter().step_by(stride);
    for (((inputs_re, inputs_im), (out_re, out_im)), twiddle) in
        inputs_re.zip(inputs_im).zip(outputs).zip(twiddles)
    {
        let (((a_re, b_re), c_re), d_re) = inputs_re;
        let (((a_im, b_im), c_im), d_im) = inputs_im;
        let [o0_re, o1_re, o2_re, o3_re] = quarters_mut(out_re);
        let [o0_im, o1_im, o2_im, o3_im] = quarters_mut(out_im);
        let a = a_re.iter().zip(a_im);
        let b = b_re.iter().zip(b_im);
        let c = c_re.iter().zip(c_im);
        let d = d_re.iter().zip(d_im);
        let out_low = o0_re.iter_mut().zip(o0_im).zip(o1_re.iter_mut().zip(o1_im));
        let out_high = o2_re.iter_mut().zip(o2_im).zip(o3_re.iter_mut().zip(o3_im));
        let &[w1_re, w1_im, w2_re, w2_im, w3_re, w3_im] = twiddle;
        for ((((a, b), (c, d)), ((y0_re, y0_im), (y1_re, y1_im))), ((y2_re, y2_im), (y3_re, y3_im))) in
            a.zip(b).zip(c.zip(d)).zip(out_low).zip(out_high)
        {
            let [x0, x1, x2, x3] = butterfly((*a.0, *a.1), (*b.0, *b.1), (*c.0, *c.1), (*d.0, *d.1));
            (*y0_re, *y0_im) = x0;
            (*y1_re, *y1_im) = multiply(x1, (w1_re, w1_im));
            (*y2_re, *y2_im) = multiply(x2, (w2_re, w2_im));
            (*y3_re, *y3_im) = multiply(x3, (w3_re, w3_im));
        }
    }
}

/// The pass at stride N/4: one butterfly, all its factors are 1.
fn last_pass(from: &Complexes, to: &mut Complexes) {
    let [re0, re1, re2, re3] = quarters(&from.re);
    let [im0, im1, im2, im3] = quarters(&from.im);
    let inputs =
        re0.iter().zip(im0).zip(re1.iter().zip(im1)).zip(re2.iter().zip(im2).zip(re3.iter().zip(im3)));
    let [o0_re, o1_re, o2_re, o3_re] = quarters_mut(&mut to.re);
    let [o0_im, o1_im, o2_im, o3_im] = quarters_mut(&mut to.im);
    let out_low = o0_re.iter_mut().zip(o0_im).zip(o1_re.iter_mut().zip(o1_im));
    let out_high = o2_re.iter_mut().zip(o2_im).zip(o3_re.iter_mut().zip(o3_im));
    for (((a_b, c_d), ((y0_re, y0_im), (y1_re, y1_im))), ((y2_re, y2_im), (y3_re, y3_im))) in
        inputs.zip(out_low).zip(out_high)
    {
        let ((a, b), (c, d)) = (a_b, c_d);
        let [x0, x1, x2, x3] = butterfly((*a.0, *a.1), (*b.0, *b.1), (*c.0, *c.1), (*d.0, *d.1));
        (*y0_re, *y0_im) = x0;
        (*y1_re, *y1_im) = x1;
        (*y2_re, *y2_im) = x2;
        (*y3_re, *y3_im) = x3;
    }
}

type Complex = (f32, f32);

/// The four-point transform.
#[inline(always)]
fn butterfly(a: Complex, b: Complex, c: Complex, d: Complex) -> [Complex; 4] {
    let sum_ac = (a.0 + c.0, a.1 + c.1);
    let difference_ac = (a.0 - c.0, a.1 - c.1);
    let sum_bd = (b.0 + d.0, b.1 + d.1);
    // -j (b - d)
    let turned_bd = (b.1 - d.1, d.0 - b.0);
    [
        (sum_ac.0 + sum_bd.0, sum_ac.1 + sum_bd.1),
        (difference_ac.0 + turned_bd.0, difference_ac.1 + turned_bd.1),
        (sum_ac.0 - sum_bd.0, sum_ac.1 - sum_bd.1),
        (difference_ac.0 - turned_bd.0, difference_ac.1 - turned_bd.1),
    ]
}

#[inline(always)]
fn multiply(x: Complex, w: Complex) -> Complex {
    (x.0 * w.0 - x.1 * w.1, x.0 * w.1 + x.1 * w.0)
}

fn quarters(values: &[f32; POINTS]) -> [&[f32]; 4] {
    let (low, high) = values.split_at(POINTS / 2);
    let (q0, q1) = low.split_at(QUARTER);
    let (q2, q3) = high.split_at(QUARTER);
    [q0, q1, q2, q3]
}

fn quarters_mut(values: &mut [f32]) -> [&mut [f32]; 4] {
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
            data.re.iter().zip(&data.im).map(|(&re, &im)| Complex64::new(re.into(), im.into())).collect();
        FftPlanner::new().plan_fft_forward(POINTS).process(&mut buffer);
        buffer
    }

    #[test]
    fn agrees_with_a_double_precision_reference_on_noise_with_dirty_scratch() {
        let mut seed = 1;
        let mut worst = 0.0_f64;
        for _ in 0..50 {
            let mut data = Complexes::ZERO;
            let mut scratch = Complexes::ZERO;
            for n in 0..POINTS {
                data.re[n] = noise(&mut seed);
                data.im[n] = noise(&mut seed);
                scratch.re[n] = f32::NAN;
                scratch.im[n] = noise(&mut seed);
            }
            let expected = reference(&data);
            transform(&mut data, &mut scratch);
            let data = scratch;
            let largest = expected.iter().map(|x| x.norm()).fold(0.0, f64::max);
            for (k, expected) in expected.iter().enumerate() {
                let error = Complex64::new(data.re[k].into(), data.im[k].into()) - expected;
                worst = worst.max(error.norm() / largest);
            }
        }
        // f32 unit round-off 6e-8, ten levels of additions: rms near u sqrt(10)/2, worst of 51 200 bins about 5 u.
        assert!(worst < 4e-7, "measured {worst:e}");
    }

    #[test]
    fn one_tone_lands_in_one_bin_in_natural_order() {
        for bin in [0, 1, 2, 5, 255, 256, 511, 512, 700, 1023] {
            let mut data = Complexes::ZERO;
            for n in 0..POINTS {
                let turn = core::f64::consts::TAU * ((bin * n) % POINTS) as f64 / POINTS as f64;
                data.re[n] = libm::cos(turn) as f32;
                data.im[n] = libm::sin(turn) as f32;
            }
            let mut result = Complexes::ZERO;
            transform(&mut data, &mut result);
            let data = result;
            for k in 0..POINTS {
                let expected = if k == bin { POINTS as f32 } else { 0.0 };
                assert!(
                    (data.re[k] - expected).abs() < 1e-3 && data.im[k].abs() < 1e-3,
                    "bin {bin}, output {k}"
                );
            }
        }
    }
}
