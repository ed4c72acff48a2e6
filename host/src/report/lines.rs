//! The spectral part: averages what is stored at the full rate and lists the strongest lines.

use super::ReportError;
use super::figures::rounded_volts;
use super::model::{ModeSpectrum, Spectra, SpectralLine};
use super::runs::{Run, count};
use crate::spectrum::lines::{Line, LineMethod, find};
use crate::spectrum::{HANN_ENBW_BINS, PowerTable, SpectrumAverage};
use rusqlite::Connection;
use std::collections::BTreeMap;

/// Lines listed per mode.
pub(crate) const LINES: usize = 8;

/// Spectra of one shape: rate and points per segment, then mode.
type Shape = (u64, u32);

#[derive(Default)]
struct Shaped {
    /// Common, then differential.
    modes: [Option<(SpectrumAverage, u64)>; 2],
    spectra: u64,
    segments: u64,
}

/// Averages all spectra of rung 0. Where shapes differ, the one with most segments is taken.
pub(crate) fn read(connection: &Connection, runs: &[Run]) -> Result<Spectra, ReportError> {
    let table = PowerTable::new();
    let mut shapes: BTreeMap<Shape, Shaped> = BTreeMap::new();
    let (mut stored, mut last_run) = (0_u64, None);
    let mut statement = connection
        .prepare("SELECT run, mode, points, segments, skipped, codes FROM spectrum WHERE rung = 0")?;
    let mut rows = statement.query([])?;
    while let Some(row) = rows.next()? {
        stored += 1;
        let run: i64 = row.get(0)?;
        if last_run.is_none_or(|(number, _)| number != run) {
            let rate = runs.iter().find(|facts| facts.number == run).and_then(|run| run.rate_mhz);
            last_run = Some((run, rate));
        }
        let Some((_, Some(rate_mhz))) = last_run else {
            continue;
        };
        let (mode, points, segments): (i64, u32, u32) = (row.get(1)?, row.get(2)?, row.get(3)?);
        let codes = row.get_ref(5)?.as_blob().map_err(rusqlite::Error::from)?;
        let shaped = shapes.entry((rate_mhz, points)).or_default();
        let Some(slot) = usize::try_from(mode).ok().and_then(|mode| shaped.modes.get_mut(mode)) else {
            continue;
        };
        let rate_hz = rate_mhz as f64 / 1000.0;
        let (average, skipped) = slot.get_or_insert_with(|| (SpectrumAverage::new(points, rate_hz), 0));
        if average.add(&table, codes, segments) {
            *skipped += count(row, 4)?;
            shaped.spectra += 1;
            shaped.segments += u64::from(segments);
        }
    }
    let Some(best) = shapes.into_values().max_by_key(|shaped| shaped.segments) else {
        return Ok(Spectra { common: None, differential: None, left_out: stored });
    };
    let [common, differential] = &best.modes;
    Ok(Spectra {
        common: common.as_ref().and_then(mode_spectrum),
        differential: differential.as_ref().and_then(mode_spectrum),
        left_out: stored - best.spectra,
    })
}

fn mode_spectrum((average, skipped): &(SpectrumAverage, u64)) -> Option<ModeSpectrum> {
    let density = average.density()?;
    let (unresolved_below_hz, unresolved_rms_v) = density.low_frequency_rest();
    Some(ModeSpectrum {
        spectra: average.spectra(),
        segments: average.segments(),
        skipped_segments: *skipped,
        points: density.points,
        bin_hz: density.bin_hz(),
        noise_bandwidth_hz: HANN_ENBW_BINS * density.bin_hz(),
        noise_floor_v_per_rthz: density.noise_floor_v_per_rthz(),
        unresolved_below_hz,
        unresolved_rms_v: rounded_volts(unresolved_rms_v),
        lines: find(&density, LINES).iter().map(spectral_line).collect(),
    })
}

fn spectral_line(line: &Line) -> SpectralLine {
    SpectralLine {
        frequency_hz: line.frequency_hz,
        frequency_uncertainty_hz: line.frequency_uncertainty_hz,
        amplitude_v: rounded_volts(line.amplitude_v),
        rms_v: rounded_volts(line.rms_v),
        above_floor_db: line.above_floor_db,
        method: match line.method {
            LineMethod::Interpolated => "interpolated",
            LineMethod::BandPower => "band-power",
        },
        alias: "not-confirmed",
    }
}
