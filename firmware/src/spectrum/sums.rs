//! Sums over segments, and the messages made of them.

use super::turn::Turn;
use crate::fft::Complex;
use legwise_protocol::bytes::Bytes;
use legwise_protocol::cross::{BIN_BYTES, BinCodes};
use legwise_protocol::message::{Message, PAYLOAD_BYTES, SpectraPart};

/// Bins one message carries.
const BINS_PER_PART: usize = PAYLOAD_BYTES / BIN_BYTES;

/// Sums of one bin, in squares of µV: |4C|², |2D|² and conj(4C)·2D, with the transforms C of the common and
/// D of the differential mode.
#[derive(Clone, Copy, Debug)]
pub(super) struct Sum {
    common: f32,
    differential: f32,
    cross: Complex,
}

impl Sum {
    pub(super) const ZERO: Self = Self { common: 0.0, differential: 0.0, cross: Complex::ZERO };

    /// Adds a segment: twice the transforms of leg A and leg B.
    #[inline(always)]
    pub(super) fn add(&mut self, a: Complex, b: Complex) {
        let (c, d) = a.sum_and_difference(b);
        self.common = self.common + c.re * c.re + c.im * c.im;
        self.differential = self.differential + d.re * d.re + d.im * d.im;
        self.cross.re = self.cross.re + c.re * d.re + c.im * d.im;
        self.cross.im = self.cross.im + c.re * d.im - c.im * d.re;
    }
}

/// Twice the transforms of two real signals a and b out of that of a + jb: `x` is its bin k, `mirror` bin N−k
/// (a textbook identity).
#[inline(always)]
pub(super) fn split(x: Complex, mirror: Complex) -> (Complex, Complex) {
    let a = Complex { re: x.re + mirror.re, im: x.im - mirror.im };
    let b = Complex { re: x.im + mirror.im, im: mirror.re - x.re };
    (a, b)
}

/// What a rung is, for its messages.
#[derive(Clone, Copy, Debug)]
pub(super) struct Shape {
    pub(super) rung: u8,
    pub(super) points: u16,
    pub(super) first_bin: u16,
    /// 2/(fs Σw²), for sums of V².
    pub(super) scale: f32,
}

/// `2/(fs Σw²)` for the window `1 − cos 2πn/N`, whose squares sum to 3N/2.
pub(super) fn density_scale(rate_hz: f32, points: usize) -> f32 {
    2.0 / (rate_hz * (1.5 * points as f32))
}

/// Sends an average in parts.
pub(super) fn send(sums: &[Sum], shape: &Shape, turn: &Turn, records: &mut dyn FnMut(&Message)) {
    let Some(set) = turn.collected() else { return };
    // µV² to V².
    let scale = shape.scale * 1e-12 / turn.segments as f32;
    for (number, bins) in sums.chunks(BINS_PER_PART).enumerate() {
        let first_bin = shape.first_bin + (number * BINS_PER_PART) as u16;
        let mut codes = Bytes::new();
        for (bin, sum) in (first_bin..).zip(bins) {
            let is_single = bin == 0 || bin == shape.points / 2;
            let scale = if is_single { 0.5 * scale } else { scale };
            let cross = (sum.cross.re * (scale * 0.125), sum.cross.im * (scale * 0.125));
            let codes_of_bin =
                BinCodes::encode(sum.common * (scale * 0.0625), sum.differential * (scale * 0.25), cross);
            codes.extend(&codes_of_bin.to_bytes());
        }
        records(&Message::Spectra(SpectraPart {
            first_sample: turn.first_sample,
            span_samples: turn.end_sample - turn.first_sample,
            set,
            rung: shape.rung,
            points: shape.points,
            segments: turn.segments,
            skipped: turn.skipped,
            other: turn.other,
            from_bin: shape.first_bin,
            bins: sums.len() as u16,
            first_bin,
            codes,
        }));
    }
}
