//! From what the user and the sidecar say to [`LegScale`]s.
//!
//! A scale is a mantissa of about 2^30 with a binary point, so that `µV = code * mantissa / 2^shift`
//! is right to 2^-31 (5e-10) of the reading where the shift permits, and in any case to a thousandth
//! of a microvolt at full scale (see [`integer_scale`]).

use super::{HIGHEST_RATE_HZ, LOWEST_RATE_HZ, OpenOptions, PerLeg, RecordingError, Sidecar};
use legwise_protocol::message::LegScale;
use legwise_protocol::units::Microvolts;
use std::path::Path;

/// Highest full scale, volts. Readings saturate at 1000 V whatever the full scale.
pub(crate) const HIGHEST_FULL_SCALE_V: f64 = 10_000.0;
/// Lowest full scale, volts: one microvolt.
const LOWEST_FULL_SCALE_V: f64 = 1e-6;
/// Largest shift a [`LegScale`] takes.
const LARGEST_SHIFT: i32 = 40;

/// What applies to a recording, options before sidecar, checked.
#[derive(Clone, Copy, Debug)]
pub(crate) struct Calibration {
    /// Given rate, Hz.
    pub(crate) rate_hz: Option<f64>,
    /// Given full scale, volts.
    pub(crate) full_scale_v: Option<f64>,
    pub(crate) skew_ns: i32,
    /// Rails of each leg in microvolts, where given.
    rail_low_uv: [Option<i32>; 2],
    rail_high_uv: [Option<i32>; 2],
    gain_uncertainty_ppm: [u32; 2],
    offset_uncertainty_uv: [u32; 2],
}

impl Calibration {
    /// Merges and checks.
    pub(crate) fn resolve(
        path: &Path,
        options: &OpenOptions,
        sidecar: &Sidecar,
    ) -> Result<Self, RecordingError> {
        let rate_hz = options.rate_hz.or(sidecar.sample_rate_hz);
        if let Some(rate_hz) = rate_hz {
            check_rate(path, rate_hz)?;
        }
        let full_scale_v = options.full_scale_v.or(sidecar.full_scale_v);
        if let Some(full_scale_v) = full_scale_v
            && !(LOWEST_FULL_SCALE_V..=HIGHEST_FULL_SCALE_V).contains(&full_scale_v)
        {
            let highest_v = HIGHEST_FULL_SCALE_V;
            return Err(RecordingError::FullScaleOutOfRange { path: path.into(), full_scale_v, highest_v });
        }
        let low_v = options.rails_v.map(|rails| PerLeg::Both(rails.0)).or(sidecar.rail_low_v);
        let high_v = options.rails_v.map(|rails| PerLeg::Both(rails.1)).or(sidecar.rail_high_v);
        let (rail_low_uv, rail_high_uv) = rails(path, low_v, high_v)?;
        let gain = uncertainty(path, sidecar.gain_uncertainty_percent, GAIN_UNCERTAINTY)?;
        let offset = uncertainty(path, sidecar.offset_uncertainty_v, OFFSET_UNCERTAINTY)?;
        Ok(Self {
            rate_hz,
            full_scale_v,
            skew_ns: options.skew_ns.or(sidecar.skew_ns).unwrap_or(0),
            rail_low_uv,
            rail_high_uv,
            gain_uncertainty_ppm: gain,
            offset_uncertainty_uv: offset,
        })
    }

    /// Refuses a skew of one sample period or more.
    pub(crate) fn check_skew(&self, path: &Path, rate_hz: f64) -> Result<(), RecordingError> {
        let period_ns = 1e9 / rate_hz;
        if f64::from(self.skew_ns).abs() < period_ns {
            return Ok(());
        }
        Err(RecordingError::SkewTooLarge { path: path.into(), skew_ns: self.skew_ns, period_ns })
    }

    /// Scales of codes that are microvolts; `full_scale_uv` is a rail of its own on both sides.
    pub(crate) fn microvolt_legs(&self, full_scale_uv: Option<i32>) -> [LegScale; 2] {
        [0, 1].map(|leg| {
            let scale = self.uncertain(leg, MICROVOLT_CODES);
            let (low, high) = full_scale_uv.map_or((i32::MIN, i32::MAX), |uv| (-uv, uv));
            self.railed(leg, scale, low, high)
        })
    }

    /// Scales of codes that are samples of `bits` bits.
    pub(crate) fn integer_legs(&self, full_scale_v: f64, bits: u32) -> [LegScale; 2] {
        [0, 1].map(|leg| {
            let scale = self.uncertain(leg, integer_scale(full_scale_v, bits));
            self.railed(leg, scale, scale.rail_low_code, scale.rail_high_code)
        })
    }

    fn uncertain(&self, leg: usize, scale: LegScale) -> LegScale {
        LegScale {
            gain_uncertainty_ppm: pick(&self.gain_uncertainty_ppm, leg),
            offset_uncertainty_uv: pick(&self.offset_uncertainty_uv, leg),
            ..scale
        }
    }

    /// The tighter of the format's rails and the given ones.
    fn railed(&self, leg: usize, scale: LegScale, low: i32, high: i32) -> LegScale {
        let given_low = pick(&self.rail_low_uv, leg).map(|uv| last_code_at_or_below(&scale, uv));
        let given_high = pick(&self.rail_high_uv, leg).map(|uv| first_code_at_or_above(&scale, uv));
        LegScale {
            rail_low_code: given_low.map_or(low, |code| code.max(low)),
            rail_high_code: given_high.map_or(high, |code| code.min(high)),
            ..scale
        }
    }
}

/// Codes that are microvolts: `(code * 2^30 + 2^29) >> 30` is `code`.
pub(crate) const MICROVOLT_CODES: LegScale = LegScale {
    mantissa: 1 << 30,
    shift: 30,
    offset_uv: 0,
    rail_low_code: i32::MIN,
    rail_high_code: i32::MAX,
    gain_uncertainty_ppm: 0,
    offset_uncertainty_uv: 0,
};

/// The scale of signed samples of `bits` bits (16..=32) whose value 2^(bits-1) stands for `full_scale_v`.
///
/// The mantissa lies in [2^30, 2^31): relative error below 2^-31. Only where that would need a shift
/// beyond 40 (below 2^-10 µV per code) it is smaller; then half a unit of it is, at full scale,
/// `2^(bits-1) / 2^41 <= 2^-10` µV.
pub(crate) fn integer_scale(full_scale_v: f64, bits: u32) -> LegScale {
    let half_range = 2_f64.powi(bits as i32 - 1);
    let uv_per_code = full_scale_v * 1e6 / half_range;
    let mut shift = (30 - uv_per_code.log2().floor() as i32).clamp(1, LARGEST_SHIFT);
    let mut mantissa = (uv_per_code * 2_f64.powi(shift)).round();
    if mantissa > f64::from(i32::MAX) && shift > 1 {
        shift -= 1;
        mantissa = (uv_per_code * 2_f64.powi(shift)).round();
    }
    LegScale {
        mantissa: mantissa as i32,
        shift: shift as u8,
        rail_low_code: (-half_range) as i32,
        rail_high_code: (half_range - 1.0) as i32,
        ..MICROVOLT_CODES
    }
}

/// The lowest code that reads `uv` or more. The mantissa must be positive.
pub(crate) fn first_code_at_or_above(scale: &LegScale, uv: i32) -> i32 {
    let (mut below, mut above) = (i64::from(i32::MIN) - 1, i64::from(i32::MAX));
    while above - below > 1 {
        let middle = below + (above - below) / 2;
        if scale.microvolts(middle as i32) >= uv {
            above = middle;
        } else {
            below = middle;
        }
    }
    above as i32
}

/// The highest code that reads `uv` or less. The mantissa must be positive.
pub(crate) fn last_code_at_or_below(scale: &LegScale, uv: i32) -> i32 {
    // No leg reads more than the bound, so the sum cannot overflow and the search is the mirror image.
    first_code_at_or_above(scale, uv + 1).saturating_sub(1)
}

/// Refuses a rate outside what the room reads.
pub(crate) fn check_rate(path: &Path, rate_hz: f64) -> Result<(), RecordingError> {
    if (LOWEST_RATE_HZ..=HIGHEST_RATE_HZ).contains(&rate_hz) {
        return Ok(());
    }
    Err(RecordingError::RateOutOfRange { path: path.into(), rate_hz })
}

type RailsUv = [Option<i32>; 2];

fn rails(
    path: &Path,
    low_v: Option<PerLeg>,
    high_v: Option<PerLeg>,
) -> Result<(RailsUv, RailsUv), RecordingError> {
    let mut rails = ([None; 2], [None; 2]);
    let lows = low_v.map(PerLeg::legs);
    let highs = high_v.map(PerLeg::legs);
    let legs = rails.0.iter_mut().zip(rails.1.iter_mut());
    for (leg, (low_uv, high_uv)) in legs.enumerate() {
        let low_v = lows.map_or(f64::NEG_INFINITY, |values| pick(&values, leg));
        let high_v = highs.map_or(f64::INFINITY, |values| pick(&values, leg));
        *low_uv = Microvolts::try_from_volts(low_v).map(Microvolts::uv);
        *high_uv = Microvolts::try_from_volts(high_v).map(Microvolts::uv);
        let is_unusable = low_uv.is_none() != lows.is_none() || high_uv.is_none() != highs.is_none();
        if is_unusable || matches!((*low_uv, *high_uv), (Some(low), Some(high)) if low >= high) {
            return Err(RecordingError::RailsOutOfRange { path: path.into(), low_v, high_v });
        }
    }
    Ok(rails)
}

/// An uncertainty key: name, factor to the unit of [`LegScale`], highest value, and that in words.
struct Uncertainty {
    key: &'static str,
    factor: f64,
    highest: f64,
    permitted: &'static str,
}

const GAIN_UNCERTAINTY: Uncertainty = Uncertainty {
    key: "gain_uncertainty_percent",
    factor: 1e4,
    highest: 100.0,
    permitted: "a percentage from 0 to 100",
};

const OFFSET_UNCERTAINTY: Uncertainty = Uncertainty {
    key: "offset_uncertainty_v",
    factor: 1e6,
    highest: 1000.0,
    permitted: "a voltage from 0 to 1000, in volts",
};

fn uncertainty(
    path: &Path,
    given: Option<PerLeg>,
    Uncertainty { key, factor, highest, permitted }: Uncertainty,
) -> Result<[u32; 2], RecordingError> {
    let values = given.map_or([0.0; 2], PerLeg::legs);
    match values.into_iter().find(|value| !(0.0..=highest).contains(value)) {
        Some(value) => Err(RecordingError::SidecarValue { path: path.into(), key, value, permitted }),
        None => Ok(values.map(|value| (value * factor).round() as u32)),
    }
}

fn pick<T: Copy>(values: &[T; 2], leg: usize) -> T {
    let [a, b] = *values;
    if leg == 0 { a } else { b }
}
