//! Bins taken together, and how many independent segments they are worth.
//!
//! With asking mode x and answering mode y, a pool holds ΣS_xx, ΣS_yy and ΣS_xy over its bins. The ratio
//! ΣS_xy/ΣS_xx scatters by the part e of y that x does not explain. Two values of a spectrum, `d` bins
//! and `j` segments apart, are correlated by the Hann window with
//!
//! ```text
//! ρ(d, j) = Σ w[n] w[n + jN/2] e^(-j2πdn/N) / Σ w²        d      0       1        2       3
//!                                                   j = 0  |ρ|   1       2/3      1/6     0
//!                                                   j = 1  |ρ|   1/6     4/(9π)   1/12    4/(45π)
//! ```
//!
//! (closed forms of the integrals of cos⁴, and of sin²·cos², with e^(-j2πdx)). The variance of ΣS_xy is the
//! sum over all pairs of values of the products of both correlations, hence
//!
//! ```text
//! n = K · ΣS_xx · ΣS_ee / Σ_kl sqrt(S_xx,k S_xx,l S_ee,k S_ee,l) · g(|k − l|)
//! g(d) = |ρ(d,0)|² + 2 (1 − 1/K) |ρ(d,1)|²                (the second term with half overlap only)
//! ```
//!
//! One bin: Welch's 36K²/(38K − 2). Many bins of level densities: K/2.11 each instead of K/1.06.
//!
//! The asking mode of a line does not scatter: its values in overlapping segments hang together fully, but
//! for the turn `cos(πδ)` between segments when it lies δ bins off the bin's middle. Then one correlation
//! is left where noise has the product of two, and `n = K / (1 + 2 (1 − 1/K) cos(πδ)/6)`, 3K/4 on a bin.

use super::{Coding, Direction, PointKind, Record};
use crate::spectrum::rung::RungBin;
use legwise_protocol::power;
use std::f64::consts::PI;

/// |ρ(d, 0)|²: Hann bins d apart, same segment.
const SAME_SEGMENT: [f64; 4] = [1.0, 4.0 / 9.0, 1.0 / 36.0, 0.0];
/// |ρ(d, 1)|²: Hann bins d apart, segments half a length apart.
const NEXT_SEGMENT: [f64; 4] = [1.0 / 36.0, 16.0 / (81.0 * PI * PI), 1.0 / 144.0, 16.0 / (2025.0 * PI * PI)];
/// Largest relative error of each part of a coded cross density: half a step of a 5-bit fraction.
const CROSS_RELATIVE_ERROR: f64 = 1.0 / 64.0;

/// Sums over the bins of one place.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Pool {
    /// Density of the asking mode, summed over bins, V²/Hz.
    pub asking: f64,
    /// Density of the answering mode, summed over bins, V²/Hz.
    pub answering: f64,
    /// Cross density, asking conjugated, summed over bins, V²/Hz.
    pub cross: (f64, f64),
    /// Bins.
    pub bins: usize,
    /// Independent segments in time, as of one bin.
    pub time_segments: f64,
    /// Independent segments the whole is worth.
    pub effective_segments: f64,
    /// Rounding of the cross density on the wire.
    pub cross_rounding: Rounding,
    /// Rounding of the asking density on the wire: variance, (V²/Hz)².
    pub asking_rounding: f64,
}

/// What rounding does to a complex sum: errors evenly spread between minus and plus half a step.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct Rounding {
    /// Variance of the real and of the imaginary part: half step squared over 3.
    pub variance: (f64, f64),
    /// Fourth cumulant of both, summed: −2/15 of the half step to the fourth.
    pub fourth_cumulant: f64,
}

impl Pool {
    /// Sums over the bins with these numbers that the record holds, or the values at a line's bin.
    pub fn of(record: Record, kind: PointKind, numbers: &[usize], direction: Direction) -> Self {
        let spectra = record.spectra;
        let bin_at = |number: &usize| spectra.bins.get(number.checked_sub(spectra.first_bin)?);
        let bins: Vec<(usize, Sides)> = numbers
            .iter()
            .filter_map(|number| Some((*number, Sides::of(bin_at(number)?, direction))))
            .collect();
        let sum = |part: fn(&Sides) -> f64| bins.iter().map(|(_, sides)| part(sides)).sum::<f64>();
        let mut pool = Self {
            asking: sum(|sides| sides.asking),
            answering: sum(|sides| sides.answering),
            cross: (sum(|sides| sides.cross.0), sum(|sides| sides.cross.1)),
            bins: bins.len(),
            time_segments: spectra.effective_segments(),
            effective_segments: 0.0,
            cross_rounding: Rounding::default(),
            asking_rounding: 0.0,
        };
        let unexplained = 1.0 - pool.coherence();
        pool.effective_segments = match (kind, numbers) {
            (PointKind::Line, [bin]) => segments_of_line(record, *bin, direction),
            _ => pool.segments_of(&bins, spectra.segments as f64, spectra.is_overlapped),
        };
        if let Coding::Wire { averages } = record.coding {
            for (_, sides) in &bins {
                pool.round(sides, unexplained, averages.max(1) as f64);
            }
        }
        pool
    }

    /// Whether both modes hold anything.
    pub fn is_measured(&self) -> bool {
        self.bins > 0 && self.asking > 0.0 && self.answering > 0.0
    }

    /// Coherence of the sums, 0 to 1.
    pub fn coherence(&self) -> f64 {
        let product = self.asking * self.answering;
        if product > 0.0 { (self.cross_squared() / product).min(1.0) } else { 0.0 }
    }

    /// |ΣS_xy|².
    pub fn cross_squared(&self) -> f64 {
        self.cross.0 * self.cross.0 + self.cross.1 * self.cross.1
    }

    /// The formula at the head of this file, for bins by their numbers and `count` segments.
    ///
    /// Square roots of averaged densities are low by `1/(8n)`, two of one mode in neighbouring bins by
    /// `(1 − |ρ|²)/(4n)` together, both modes twice that: put right to first order.
    fn segments_of(&self, bins: &[(usize, Sides)], count: f64, is_overlapped: bool) -> f64 {
        let overlap = if is_overlapped && count >= 1.0 { 2.0 * (1.0 - 1.0 / count) } else { 0.0 };
        let scale = if self.asking > 0.0 { 1.0 / self.asking } else { 0.0 };
        let ratio = (self.cross.0 * scale, self.cross.1 * scale);
        let rest: Vec<(usize, f64, f64)> =
            bins.iter().map(|(number, sides)| (*number, sides.asking, sides.unexplained(ratio))).collect();
        let (mut asking, mut unexplained, mut pairs) = (0.0, 0.0, 0.0);
        for (place, (number, x, e)) in rest.iter().enumerate() {
            asking += x;
            unexplained += e;
            for (other, other_x, other_e) in rest.iter().skip(place) {
                let distance = other.abs_diff(*number);
                let (Some(same), Some(next)) = (SAME_SEGMENT.get(distance), NEXT_SEGMENT.get(distance))
                else {
                    break;
                };
                let twice =
                    if distance == 0 { 1.0 } else { 2.0 + (1.0 - same) / self.time_segments.max(1.0) };
                pairs += twice * (x * e * other_x * other_e).sqrt() * (same + overlap * next);
            }
        }
        if pairs > 0.0 { count * asking * unexplained / pairs } else { 0.0 }
    }

    /// Adds what rounding one bin on the wire does.
    ///
    /// Averages that scatter by more than a step round independently and their errors average out; ones
    /// that do not, round alike. The correlation of two rounding errors under normal scatter σ is
    /// exp(−4π²σ²/step²) to first order (B. Widrow, I. Kollár, *Quantization Noise*, chapter 5).
    fn round(&mut self, sides: &Sides, unexplained: f64, averages: f64) {
        let scatter_squared =
            sides.asking * sides.answering * unexplained * averages / (2.0 * self.time_segments.max(1.0));
        let half_steps = (half_step(sides.cross.0), half_step(sides.cross.1));
        for (half, variance) in [
            (half_steps.0, &mut self.cross_rounding.variance.0),
            (half_steps.1, &mut self.cross_rounding.variance.1),
        ] {
            if half > 0.0 {
                let alike = (-PI * PI * scatter_squared / (half * half)).exp();
                *variance += half * half / 3.0 * (alike + (1.0 - alike) / averages);
                self.cross_rounding.fourth_cumulant -= 2.0 / 15.0 * half.powi(4) * alike * alike;
            }
        }
        self.asking_rounding += (sides.asking * power::RELATIVE_ERROR).powi(2) / 3.0;
    }
}

/// Effective segments at the highest bin of a line: the formula at the head of this file.
///
/// δ comes from the larger neighbour, as `(2a − 1)/(a + 1)` of its amplitude (Grandke 1983).
fn segments_of_line(record: Record, bin: usize, direction: Direction) -> f64 {
    let spectra = record.spectra;
    let asking = |number: Option<usize>| {
        let place = number.and_then(|number| number.checked_sub(spectra.first_bin));
        let bin = place.and_then(|place| spectra.bins.get(place));
        bin.map_or(0.0, |bin| Sides::of(bin, direction).asking)
    };
    let count = spectra.segments as f64;
    if !spectra.is_overlapped || count < 1.0 {
        return count;
    }
    let neighbour = asking(bin.checked_sub(1)).max(asking(bin.checked_add(1)));
    let amplitude = (neighbour / asking(Some(bin))).sqrt();
    let offset = ((2.0 * amplitude - 1.0) / (amplitude + 1.0)).clamp(0.0, 0.5);
    let alike = ((PI * offset).cos() / 6.0).max(NEXT_SEGMENT[0]);
    count / (1.0 + 2.0 * (1.0 - 1.0 / count) * alike)
}

/// Half a step of the code of a cross part.
fn half_step(part: f64) -> f64 {
    if part == 0.0 { 0.0 } else { part.abs().log2().floor().exp2() * CROSS_RELATIVE_ERROR }
}

/// One bin with its modes as asking and answering.
#[derive(Clone, Copy, Debug)]
struct Sides {
    asking: f64,
    answering: f64,
    cross: (f64, f64),
}

impl Sides {
    fn of(bin: &RungBin, direction: Direction) -> Self {
        match direction {
            Direction::Conversion => {
                Self { asking: bin.common, answering: bin.differential, cross: bin.cross }
            }
            Direction::DriverImbalance => {
                let cross = (bin.cross.0, -bin.cross.1);
                Self { asking: bin.differential, answering: bin.common, cross }
            }
        }
    }

    /// Density of y − H·x, not below what rounding of the cross density leaves open.
    fn unexplained(&self, (real, imaginary): (f64, f64)) -> f64 {
        let explained = 2.0 * (real * self.cross.0 + imaginary * self.cross.1)
            - (real * real + imaginary * imaginary) * self.asking;
        (self.answering - explained).max(self.answering * CROSS_RELATIVE_ERROR)
    }
}
