//! The spectral lines: the strongest of all rungs, of both sets of segments together.
//!
//! Each rung of the ladder is searched on its own. Where two overlap, the lower one tells up to 0.35 of its
//! rate and the higher one from there on; a line that shows in both near the crossover is the lower
//! rung's, whose bins are finer. Logs of devices of wire version 1 hold the full rate only.

use super::averages::Single;
use super::figures::rounded_volts;
use super::model::{ModeSpectrum, RungSpectrum, Source, SourceLine, SpectralLine};
use crate::spectrum::average::RungMean;
use crate::spectrum::families::PerMode;
use crate::spectrum::lines::{Line, LineMethod, find};
use crate::spectrum::{BLANKED_BINS, Density, HANN_ENBW_BINS};
use legwise_protocol::message::Mode;
use std::ops::Range;

/// The spectrum of each mode, where there is one.
pub(crate) type ModeSpectra = PerMode<Option<ModeSpectrum>>;

/// Lines listed per mode.
pub(crate) const LINES: usize = 8;
/// Lines looked for per rung: some of them lie where another rung tells.
const LINES_PER_RUNG: usize = 64;
/// A rung tells up to this share of its rate.
const CROSSOVER: f64 = 0.35;
/// A line this near a crossover, or two this near each other there, in bins of the higher rung.
const NEAR_BINS: f64 = 2.0;
/// A line this near the last bin published may be the skirt of one beyond it.
const END_BINS: f64 = 1.5;

/// The density of one mode at one rung.
struct Band {
    rung: u8,
    density: Density,
    /// Bins the device published.
    published: Range<usize>,
    spectra: u64,
    skipped: u64,
}

impl Band {
    fn frequency_hz(&self, bin: usize) -> f64 {
        bin as f64 * self.density.bin_hz()
    }

    fn lowest_hz(&self) -> f64 {
        self.frequency_hz(self.published.start)
    }

    fn highest_hz(&self) -> f64 {
        self.frequency_hz(self.published.end.saturating_sub(1))
    }

    /// Noise floor with lines, and what lies next to the ends of the band, left out, V/√Hz.
    fn noise_floor_v_per_rthz(&self) -> f64 {
        let end = self.density.v2_per_hz.len().saturating_sub(BLANKED_BINS).min(self.published.end);
        self.density.floor_of(self.published.start.max(BLANKED_BINS)..end).sqrt()
    }

    /// What lies next to 0 Hz: the frequency below which it lies, Hz, and its value, V rms.
    fn low_frequency_rest(&self) -> (f64, f64) {
        if self.published.start == 0 {
            return self.density.low_frequency_rest();
        }
        let (bin_hz, end) = (self.density.bin_hz(), self.published.start.max(BLANKED_BINS));
        let bins = self.density.v2_per_hz.get(self.published.start..end).unwrap_or_default();
        ((end as f64 - 0.5) * bin_hz, (bins.iter().sum::<f64>() * bin_hz).sqrt())
    }
}

/// The spectra of both modes over the rungs of the ladder, both sets together.
pub(crate) fn of_ladder(ladder: &[RungMean]) -> ModeSpectra {
    let of = |mode| {
        let band = |rung: &RungMean| {
            let mean = &rung.mean;
            let published = mean.first_bin..mean.first_bin + mean.bins.len();
            let density = mean.density(mode);
            Band { rung: mean.rung, density, published, spectra: rung.spectra, skipped: mean.skipped }
        };
        mode_spectrum(&ladder.iter().map(band).collect::<Vec<_>>())
    };
    PerMode { common: of(Mode::Common), differential: of(Mode::Differential) }
}

/// The spectra of both modes from one density each, at rung 0.
pub(crate) fn of_single(modes: &PerMode<Option<Single>>) -> ModeSpectra {
    let of = |single: &Option<Single>| {
        let single = single.as_ref()?;
        let density = single.density.clone();
        let published = 0..density.v2_per_hz.len();
        mode_spectrum(&[Band {
            rung: 0,
            density,
            published,
            spectra: single.spectra,
            skipped: single.skipped,
        }])
    };
    PerMode { common: of(&modes.common), differential: of(&modes.differential) }
}

/// The spectrum of one mode from its rungs, the highest rate first; `None` when there are none.
fn mode_spectrum(bands: &[Band]) -> Option<ModeSpectrum> {
    let (first, last) = (bands.first()?, bands.last()?);
    let crossovers = crossovers_hz(bands);
    let (unresolved_below_hz, unresolved_rms_v) = last.low_frequency_rest();
    Some(ModeSpectrum {
        spectra: first.spectra,
        segments: first.density.segments,
        skipped_segments: first.skipped,
        points: first.density.points,
        bin_hz: first.density.bin_hz(),
        noise_bandwidth_hz: HANN_ENBW_BINS * first.density.bin_hz(),
        noise_floor_v_per_rthz: first.noise_floor_v_per_rthz(),
        unresolved_below_hz,
        unresolved_rms_v: rounded_volts(unresolved_rms_v),
        rungs: bands
            .iter()
            .enumerate()
            .map(|(index, band)| {
                let from_hz = crossovers.get(index).copied().unwrap_or(0.0).max(band.lowest_hz());
                let to_hz = index.checked_sub(1).and_then(|index| crossovers.get(index)).copied();
                rung_spectrum(band, from_hz, to_hz.unwrap_or(f64::INFINITY).min(band.highest_hz()))
            })
            .collect(),
        lines: lines(bands, &crossovers),
    })
}

/// Where each rung hands over to the next one below it, Hz: within what both published where they overlap.
fn crossovers_hz(bands: &[Band]) -> Vec<f64> {
    bands
        .windows(2)
        .filter_map(|pair| {
            let [higher, lower] = pair else { return None };
            let crossover = CROSSOVER * lower.density.sample_rate_hz;
            Some(crossover.max(higher.lowest_hz()).min(lower.highest_hz()))
        })
        .collect()
}

/// A line and where it was found.
struct Found {
    line: Line,
    /// Place in the list of bands.
    band: usize,
    /// Whether its maximum may be the skirt of a line beyond the bins published.
    is_at_end: bool,
}

/// The strongest lines of all rungs, largest first.
fn lines(bands: &[Band], crossovers: &[f64]) -> Vec<SpectralLine> {
    let mut found: Vec<Found> = Vec::new();
    for (index, band) in bands.iter().enumerate() {
        let bin_hz = band.density.bin_hz();
        let from_hz = crossovers.get(index).map_or(0.0, |from| from - NEAR_BINS * bin_hz);
        // The higher rung and where it takes over.
        let above = index.checked_sub(1).and_then(|above| bands.get(above).zip(crossovers.get(above)));
        let to_hz = above.map_or(f64::INFINITY, |(above, to)| to + NEAR_BINS * above.density.bin_hz());
        let end_hz = if band.published.end < band.density.v2_per_hz.len() {
            band.highest_hz() - END_BINS * bin_hz
        } else {
            f64::INFINITY
        };
        for line in find(&band.density, LINES_PER_RUNG) {
            let at = line.frequency_hz;
            if at >= from_hz.max(band.lowest_hz() - bin_hz) && at < to_hz.min(band.highest_hz() + bin_hz) {
                found.push(Found { line, band: index, is_at_end: at > end_hz });
            }
        }
    }
    // One line told by two neighbouring rungs: the lower one's, whose bins are finer, unless it is at its end.
    let is_near = |higher: &Found, lower: &Found| {
        let near_hz = bands.get(higher.band).map_or(0.0, |band| NEAR_BINS * band.density.bin_hz());
        lower.band == higher.band + 1 && (higher.line.frequency_hz - lower.line.frequency_hz).abs() < near_hz
    };
    let is_told_better = |one: &Found| {
        found
            .iter()
            .any(|other| is_near(one, other) && !other.is_at_end || is_near(other, one) && one.is_at_end)
    };
    let mut kept: Vec<&Found> = found.iter().filter(|one| !is_told_better(one)).collect();
    kept.sort_by(|a, b| b.line.amplitude_v.total_cmp(&a.line.amplitude_v));
    let rung = |one: &Found| bands.get(one.band).map_or(0, |band| band.rung);
    kept.into_iter().take(LINES).map(|one| spectral_line(&one.line, rung(one))).collect()
}

/// Gives each line the alias state of the source's line it is.
pub(crate) fn mark_aliases(mode: &mut ModeSpectrum, sources: &[Source]) {
    for line in &mut mode.lines {
        let bin_hz = mode.rungs.iter().find(|rung| rung.rung == line.rung).map_or(0.0, |rung| rung.bin_hz);
        let apart_hz = |of_source: &SourceLine| (of_source.frequency_hz - line.frequency_hz).abs();
        let of_sources = sources.iter().flat_map(|source| &source.lines);
        let nearest = of_sources.min_by(|a, b| apart_hz(a).total_cmp(&apart_hz(b)));
        if let Some(nearest) = nearest.filter(|nearest| apart_hz(nearest) <= bin_hz / 2.0) {
            line.alias = nearest.alias;
        }
    }
}

fn rung_spectrum(band: &Band, from_hz: f64, to_hz: f64) -> RungSpectrum {
    RungSpectrum {
        rung: band.rung,
        rate_hz: band.density.sample_rate_hz,
        points: band.density.points,
        bin_hz: band.density.bin_hz(),
        from_hz,
        to_hz,
        spectra: band.spectra,
        segments: band.density.segments,
        skipped_segments: band.skipped,
        noise_floor_v_per_rthz: band.noise_floor_v_per_rthz(),
    }
}

fn spectral_line(line: &Line, rung: u8) -> SpectralLine {
    SpectralLine {
        frequency_hz: line.frequency_hz,
        frequency_uncertainty_hz: line.frequency_uncertainty_hz,
        amplitude_v: rounded_volts(line.amplitude_v),
        rms_v: rounded_volts(line.rms_v),
        above_floor_db: line.above_floor_db,
        rung,
        method: match line.method {
            LineMethod::Interpolated => "interpolated",
            LineMethod::BandPower => "band-power",
        },
        alias: "not-confirmed",
    }
}
