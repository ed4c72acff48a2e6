//! The tables whose rows hold packed data: spectra by bin, snippets by pair.

use super::{Clocks, RowError, Sheet};
use crate::log::{Log, spectra};
use legwise_protocol::message::{LegScale, SegmentSet};
use legwise_protocol::power;
use legwise_protocol::snippet::{BLOCK_PAIRS, decode_block};

/// One line per bin of every average of the ladder.
pub(super) fn spectra(log: &Log, clocks: &Clocks, sheet: &mut Sheet) -> Result<(), RowError> {
    sheet.write_record([
        "run",
        "first_sample",
        "time_utc",
        "set",
        "rung",
        "segments",
        "bin",
        "frequency_hz",
        "cm_v2_per_hz",
        "dm_v2_per_hz",
        "cross_re_v2_per_hz",
        "cross_im_v2_per_hz",
    ])?;
    let mut time = (None, String::new());
    spectra::visit(log.connection(), |run, spectra| {
        let place = Some((run, spectra.first_sample));
        if time.0 != place {
            let first_sample = i64::try_from(spectra.first_sample).unwrap_or(i64::MAX);
            time = (place, clocks.text(run, first_sample));
        }
        let [run, first_sample, rung, segments] = [
            run.to_string(),
            spectra.first_sample.to_string(),
            spectra.rung.to_string(),
            spectra.segments.to_string(),
        ];
        let set = match spectra.set {
            SegmentSet::Idle => "idle",
            SegmentSet::Driven => "driven",
        };
        for (place, bin) in spectra.bins.iter().enumerate() {
            let is_known = spectra.rate_hz > 0.0;
            let frequency = if is_known { spectra.frequency_hz(place).to_string() } else { String::new() };
            let number = (spectra.first_bin + place).to_string();
            // Eleven bits are coded, of the cross density six: no digit is hidden.
            let [cm, dm, re, im] = [bin.common, bin.differential, bin.cross.0, bin.cross.1]
                .map(|density| format!("{density:.5e}"));
            sheet.write_record([
                &run,
                &first_sample,
                &time.1,
                set,
                &rung,
                &segments,
                &number,
                &frequency,
                &cm,
                &dm,
                &re,
                &im,
            ])?;
        }
        Ok::<(), RowError>(())
    })?;
    Ok(())
}

/// One line per bin of every spectrum of a single mode.
pub(super) fn single_spectra(log: &Log, clocks: &Clocks, sheet: &mut Sheet) -> Result<(), RowError> {
    sheet.write_record([
        "run",
        "first_sample",
        "time_utc",
        "mode",
        "rung",
        "bin",
        "frequency_hz",
        "psd_v2_per_hz",
    ])?;
    let mut statement = log.connection().prepare(
        "SELECT spectrum.run, first_sample, mode, rung, points, codes, sample_rate_mhz \
         FROM spectrum LEFT JOIN run USING (run) ORDER BY 1, 2, 3, 4",
    )?;
    let mut rows = statement.query([])?;
    while let Some(row) = rows.next()? {
        let (run, first_sample, rung): (i64, i64, i32) = (row.get(0)?, row.get(1)?, row.get(3)?);
        let mode = if row.get::<_, i64>(2)? == 0 { "common" } else { "differential" };
        let points: u32 = row.get(4)?;
        let codes: Vec<u8> = row.get(5)?;
        let rate_mhz: Option<i64> = row.get(6)?;
        let bin_hz = rate_mhz
            .filter(|_| points > 0)
            .map(|rate| rate as f64 * 1e-3 / 2_f64.powi(rung) / f64::from(points));
        let (run, rung) = (run.to_string(), rung.to_string());
        let time = clocks.text(row.get(0)?, first_sample);
        let first_sample = first_sample.to_string();
        for (bin, code) in codes.as_chunks::<2>().0.iter().enumerate() {
            let frequency = bin_hz.map(|step| (step * bin as f64).to_string()).unwrap_or_default();
            // Eleven bits are coded: six digits hide nothing.
            let density = format!("{:.5e}", power::decode(u16::from_le_bytes(*code)));
            let bin = bin.to_string();
            sheet.write_record([&run, &first_sample, &time, mode, &rung, &bin, &frequency, &density])?;
        }
    }
    Ok(())
}

/// One line per pair of every snippet.
pub(super) fn snippets(log: &Log, clocks: &Clocks, sheet: &mut Sheet) -> Result<(), RowError> {
    sheet.write_record(["run", "excursion", "sample", "time_utc", "leg_a_v", "leg_b_v"])?;
    let mut statement = log.connection().prepare(
        "SELECT snippet.run, excursion, first_sample, samples, blocks, legs \
         FROM snippet LEFT JOIN run USING (run) ORDER BY 1, 2, 3",
    )?;
    let mut rows = statement.query([])?;
    while let Some(row) = rows.next()? {
        let (run, excursion, first_sample): (i64, i64, i64) = (row.get(0)?, row.get(1)?, row.get(2)?);
        let (samples, blocks): (usize, Vec<u8>) = (row.get::<_, u32>(3)? as usize, row.get(4)?);
        let scales = row.get::<_, Option<String>>(5)?.and_then(|legs| serde_json::from_str(&legs).ok());
        let pairs = decode(&blocks, samples);
        for index in 0..samples {
            let sample = first_sample.saturating_add(index as i64);
            let [leg_a_v, leg_b_v] = volts(scales.as_ref(), pairs.get(index));
            sheet.write_record([
                run.to_string(),
                excursion.to_string(),
                sample.to_string(),
                clocks.text(run, sample),
                leg_a_v,
                leg_b_v,
            ])?;
        }
    }
    Ok(())
}

/// The pairs of codes up to the first block that cannot be read, at most `samples`.
fn decode(blocks: &[u8], samples: usize) -> Vec<[i32; 2]> {
    let mut pairs = Vec::with_capacity(samples);
    let (mut leg_a, mut leg_b) = ([0; BLOCK_PAIRS], [0; BLOCK_PAIRS]);
    let mut rest = blocks;
    while pairs.len() < samples {
        let Ok((count, used)) = decode_block(rest, &mut leg_a, &mut leg_b) else { break };
        pairs.extend(leg_a.iter().zip(&leg_b).take(count).map(|(&a, &b)| [a, b]));
        rest = rest.get(used..).unwrap_or(&[]);
    }
    pairs.truncate(samples);
    pairs
}

/// Volts of both legs, exact to the microvolt; empty where unknown.
fn volts(scales: Option<&[LegScale; 2]>, pair: Option<&[i32; 2]>) -> [String; 2] {
    match (scales, pair) {
        (Some([scale_a, scale_b]), Some(&[a, b])) => {
            [scale_a.microvolts(a), scale_b.microvolts(b)].map(|uv| (f64::from(uv) / 1e6).to_string())
        }
        _ => [String::new(), String::new()],
    }
}
