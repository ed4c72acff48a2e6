//! Simulated sources on a pair, and the averaged spectra a ladder makes of them.
//!
//! * [`source`]: what each source puts on the pair, as components at an instant and as samples;
//! * [`samples`]: samples through the decimation filters of the firmware and Hann-windowed transforms;
//! * [`densities`]: the same averages put together from components, segment by segment, in less time.

pub mod cases;
pub mod densities;
pub mod judge;
pub mod samples;
pub mod source;

use legwise::spectrum::rung::RungSpectra;

/// Noise of each leg: half a step of a 12-bit converter over 24 V and as much again of the front end, V rms.
pub const LEG_NOISE_V: f64 = 2.4e-3;
/// The front end's corner, Hz.
pub const CORNER_HZ: f64 = 150_000.0;
/// Rungs simulated.
pub const RUNGS: u8 = 5;

/// Gain of the front end, a single pole.
pub fn front_end(frequency_hz: f64) -> f64 {
    (1.0 + (frequency_hz / CORNER_HZ).powi(2)).sqrt().recip()
}

/// Points per segment, first and last bin published, by rung: bins up to 0.35 of a rung's rate, except in
/// rung 0, and from 0.35 of the next one's.
pub fn published(rung: u8) -> (usize, usize, usize) {
    match rung {
        0 => (1024, 45, 512),
        _ if rung + 1 == RUNGS => (512, 1, 180),
        _ => (512, 22, 180),
    }
}

/// Averages of one scene.
pub type Averages = Vec<RungSpectra>;
