//! Reads the stored spectra of the ladder one after another, in order of time.
//!
//! A night holds tens of thousands of them, so they pass by and are not collected: what is to last is
//! averaged ([`crate::spectrum::average`]) or noted by the caller.

use super::rate::Rates;
use super::rows;
use crate::spectrum::rung::{BinTable, RungSpectra, SegmentSet, rate_of_rung};
use rusqlite::{Connection, Row};

/// Calls `take` with the run and each of its spectra, in order of runs, then of `first_sample`, then of rung.
/// The rate is the one that held at `first_sample`; 0 where the run never said its own.
///
/// Returns how many rows were passed over because they cannot be read: an unknown set, bytes that are
/// no whole bins, numbers out of range.
///
/// # Errors
/// When the table cannot be read, and what `take` returns.
pub fn visit<E: From<rusqlite::Error>>(
    connection: &Connection,
    mut take: impl FnMut(i64, &RungSpectra) -> Result<(), E>,
) -> Result<u64, E> {
    let table = BinTable::new();
    let mut statement = connection.prepare(
        "SELECT spectra.run, first_sample, span_samples, segment_set, rung, points, segments, skipped, \
         first_bin, codes, other FROM spectra ORDER BY 1, 2, 5, 4",
    )?;
    let mut rows = statement.query([])?;
    let mut spectra = RungSpectra {
        rung: 0,
        rate_hz: 0.0,
        points: 0,
        set: SegmentSet::Idle,
        segments: 0,
        skipped: 0,
        is_overlapped: false,
        other: 0,
        first_sample: 0,
        span_samples: 0,
        first_bin: 0,
        bins: Vec::new(),
    };
    let mut passed_over = 0;
    let mut rates: Option<(i64, Option<Rates>)> = None;
    while let Some(row) = rows.next()? {
        if read(row, &table, &mut spectra)? {
            let run = row.get(0)?;
            if rates.as_ref().is_none_or(|(of, _)| *of != run) {
                rates = Some((run, Rates::load(connection, run)?));
            }
            let rate_mhz = rates.as_ref().and_then(|(_, rates)| rates.as_ref());
            let rate_mhz = rate_mhz.map_or(0, |rates| rates.at_mhz(spectra.first_sample));
            spectra.rate_hz = rate_of_rung(rate_mhz as f64 * 1e-3, spectra.rung);
            take(run, &spectra)?;
        } else {
            passed_over += 1;
        }
    }
    Ok(passed_over)
}

/// Replaces `spectra` by those of a row, the rate excepted; `false` when the row cannot be read.
fn read(row: &Row<'_>, table: &BinTable, spectra: &mut RungSpectra) -> rusqlite::Result<bool> {
    let set = row.get_ref(3)?.as_str().ok().and_then(|name| {
        [SegmentSet::Idle, SegmentSet::Driven].into_iter().find(|&set| rows::segment_set(set) == name)
    });
    let number = |column: usize| row.get::<_, i64>(column).map(|value| u64::try_from(value).ok());
    let (Some(set), Some(first_sample), Some(span_samples)) = (set, number(1)?, number(2)?) else {
        return Ok(false);
    };
    let (Some(segments), Some(skipped)) = (number(6)?, number(7)?) else {
        return Ok(false);
    };
    let small = |column: usize| row.get::<_, i64>(column).map(|value| u16::try_from(value).ok());
    let (Ok(rung), Some(points), Some(first_bin)) =
        (u8::try_from(row.get::<_, i64>(4)?), small(5)?, small(8)?)
    else {
        return Ok(false);
    };
    (spectra.rung, spectra.set, spectra.points) = (rung, set, points.into());
    (spectra.first_sample, spectra.span_samples) = (first_sample, span_samples);
    (spectra.segments, spectra.skipped) = (segments, skipped);
    spectra.is_overlapped = skipped == 0;
    spectra.other = number(10)?.unwrap_or(0);
    spectra.first_bin = first_bin.into();
    let codes = row.get_ref(9)?.as_blob().map_err(rusqlite::Error::from)?;
    Ok(table.decode_all(codes, &mut spectra.bins))
}
