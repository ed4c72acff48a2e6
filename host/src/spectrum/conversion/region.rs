//! The region that holds the true ratio: a circle in the complex plane.
//!
//! Scatter alone gives `r² = (a^(−1/(n−1)) − 1)(1 − γ²) S_yy/S_xx`, which is `F(2, 2n−2)/(n−1)` written
//! out, exact for normal noise (Bendat & Piersol, *Random Data*, chapter 9). Rounding on the wire, the
//! scatter of a noise correction and the uncertainty of the board's own ratio come on top. They are not
//! circles and not normal, so all are added as variances Σ, |error|² is taken as Gamma distributed with
//! the right mean and variance, and the radius is its quantile:
//!
//! ```text
//! mean m = tr Σ      variance v = 2 tr Σ² + fourth cumulants      shape k = m²/v      r² = m·q(k)/k
//! ```
//!
//! Scatter alone has k = 1 and gives the formula back. One even error between ±h has k = 1.25 and
//! r = 0.958 h where 0.950 h is exact; two of them k = 2.5 and 1.215 h where 1.203 h is.

use super::CONFIDENCE;
use super::floor::OwnRatio;
use super::pool::Pool;
use std::f64::consts::PI;

/// 0.95 quantile of chi-square over its degrees of freedom, which stand before it (Abramowitz & Stegun,
/// table 26.8).
const CHI_SQUARE_95: [(f64, f64); 7] = [
    (1.0, 3.841_459),
    (2.0, 2.995_732_274), // ln 20
    (3.0, 2.604_909),
    (4.0, 2.371_932),
    (5.0, 2.214_100),
    (6.0, 2.098_598),
    (8.0, 1.938_414),
];

/// Coherence that `n` independent segments of unrelated modes exceed with probability `alpha`.
pub fn coherence_level(n: f64, alpha: f64) -> f64 {
    if n > 1.0 { 1.0 - alpha.powf(1.0 / (n - 1.0)) } else { 1.0 }
}

/// A ratio and how far the true one may lie from it.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Region {
    /// Real and imaginary part.
    pub ratio: (f64, f64),
    /// Radius in the complex plane.
    pub radius: f64,
}

impl Region {
    /// The region of what was pooled.
    ///
    /// `raised` is the factor, 1 or above, by which noise in the asking mode is put right; `own` the
    /// board's own ratio, taken off.
    pub fn of(pool: &Pool, raised: f64, own: Option<OwnRatio>) -> Self {
        let n = pool.effective_segments;
        let scale = raised / pool.asking;
        let apparent = (pool.cross.0 * scale, pool.cross.1 * scale);
        let magnitude_squared = apparent.0 * apparent.0 + apparent.1 * apparent.1;
        let scatter = scatter_radius_squared(pool) * raised * raised;
        let own_radius = own.map_or(0.0, |own| own.radius);
        // Variances of a normal error in the plane with these 95 % radii.
        let round = (scatter + own_radius * own_radius) / -(1.0 - CONFIDENCE).ln();
        let along = magnitude_squared * pool.asking_rounding / (pool.asking * pool.asking)
            + magnitude_squared * (raised - 1.0) * (raised - 1.0) / n.max(1.0);
        let rounding = pool.cross_rounding;
        let error = Error {
            round,
            along,
            direction: apparent.1.atan2(apparent.0),
            rounding: (rounding.variance.0 * scale * scale, rounding.variance.1 * scale * scale),
            fourth_cumulant: rounding.fourth_cumulant * scale.powi(4),
        };
        let off = own.map_or((0.0, 0.0), |own| own.ratio);
        Self { ratio: (apparent.0 - off.0, apparent.1 - off.1), radius: error.radius() }
    }

    /// Magnitude plus radius.
    pub fn highest_magnitude(&self) -> f64 {
        self.ratio.0.hypot(self.ratio.1) + self.radius
    }
}

/// `r²` of scatter alone.
fn scatter_radius_squared(pool: &Pool) -> f64 {
    let n = pool.effective_segments;
    if n <= 1.0 {
        return f64::INFINITY;
    }
    let quantile = (1.0 - CONFIDENCE).powf(-1.0 / (n - 1.0)) - 1.0;
    quantile * unexplained(pool) * pool.answering / pool.asking
}

/// 1 − γ² as far as rounding lets it be known.
///
/// Rounding makes the computed value scatter by σ, and near full coherence even fall below 0. The value
/// here is the mean of all true values from 0 up that could have led to it.
pub fn unexplained(pool: &Pool) -> f64 {
    let product = pool.asking * pool.answering;
    let computed = 1.0 - pool.cross_squared() / product;
    let (variance_re, variance_im) = pool.cross_rounding.variance;
    let (re, im) = pool.cross;
    let sigma = 2.0 * (re * re * variance_re + im * im * variance_im).sqrt() / product;
    if sigma <= 0.0 {
        return computed.clamp(0.0, 1.0);
    }
    let z = computed / sigma;
    if z > 6.0 {
        return computed.min(1.0);
    }
    (sigma * mean_of_positive(z)).min(1.0)
}

/// Mean of a normal variable around `z` with deviation 1, known to be positive.
fn mean_of_positive(z: f64) -> f64 {
    let density = (-z * z / 2.0).exp() / (2.0 * PI).sqrt();
    if z < -5.0 {
        // Asymptotic: φ/Φ ≈ −z + 1/(−z)
        return -1.0 / z;
    }
    z + density / normal_probability(z)
}

/// Probability that a standard normal variable lies below `z`, by the series around 0
/// (Abramowitz & Stegun 26.2.11), good to 1e-9 for |z| ≤ 6.
fn normal_probability(z: f64) -> f64 {
    let (mut term, mut sum) = (z, z);
    for step in 1..200 {
        term *= z * z / f64::from(2 * step + 1);
        sum += term;
        if term.abs() < 1e-17 * sum.abs() {
            break;
        }
    }
    0.5 + sum * (-z * z / 2.0).exp() / (2.0 * PI).sqrt()
}

/// Errors of a complex ratio, as variances.
struct Error {
    /// Of both parts together, the same in every direction.
    round: f64,
    /// Along `direction` only.
    along: f64,
    /// Angle of the ratio, rad.
    direction: f64,
    /// Of the real and of the imaginary part only.
    rounding: (f64, f64),
    /// Fourth cumulants of the latter.
    fourth_cumulant: f64,
}

impl Error {
    fn radius(&self) -> f64 {
        let (sin, cos) = self.direction.sin_cos();
        let real = self.round / 2.0 + self.rounding.0 + self.along * cos * cos;
        let imaginary = self.round / 2.0 + self.rounding.1 + self.along * sin * sin;
        let mixed = self.along * sin * cos;
        let mean = real + imaginary;
        if mean <= 0.0 || !mean.is_finite() {
            return mean.max(0.0);
        }
        let normal = 2.0 * (real * real + imaginary * imaginary + 2.0 * mixed * mixed);
        let shape = mean * mean / (normal + self.fourth_cumulant);
        (mean * gamma_quantile_over_mean(shape)).sqrt()
    }
}

/// 0.95 quantile of a Gamma distribution of this shape over its mean: chi-square with 2k degrees of
/// freedom, between table values straight over 1/sqrt(degrees), which is nearly exact.
fn gamma_quantile_over_mean(shape: f64) -> f64 {
    let degrees = (2.0 * shape).clamp(1.0, 8.0);
    for pair in CHI_SQUARE_95.windows(2) {
        if let [(low, at_low), (high, at_high)] = *pair
            && degrees <= high
        {
            let along = |degrees: f64| degrees.sqrt().recip();
            let share = (along(degrees) - along(low)) / (along(high) - along(low));
            return at_low + share * (at_high - at_low);
        }
    }
    1.938_414
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn gamma_quantiles_between_table_values_are_good_to_three_thousandths() {
        // chi-square 0.95 quantiles over degrees, by the incomplete gamma function.
        for (degrees, exact) in [(1.0, 3.841_459), (2.0, 2.995_732), (7.0, 2.009_591)] {
            let found = gamma_quantile_over_mean(degrees / 2.0);
            assert!((found / exact - 1.0).abs() < 0.003, "{degrees}: {found} for {exact}");
        }
    }

    #[test]
    fn the_normal_series_meets_published_values() {
        // Abramowitz & Stegun, table 26.1.
        for (z, exact) in [(0.0, 0.5), (1.0, 0.841_344_746), (-2.0, 0.022_750_132), (3.0, 0.998_650_102)] {
            assert!((normal_probability(z) - exact).abs() < 1e-9, "{z}");
        }
    }
}
