//! A picture of the averaged spectra: both modes, and what the pair makes of one in the other.
//!
//! ```text
//!  log ─ report (who, when, where) ─┐
//!  log ─ ladder (means by set) ─────┼─ Plot (what is shown) ─ layout ─ Scene ─┬─ svg
//!  board file (its own conversion) ─┘                                         └─ png
//! ```
//!
//! The upper part shows amplitude densities over frequency, both axes logarithmic, idle and driven segments
//! apart; the lower one conversion in dB over the same frequencies. What could not be seen is hatched.
//! Lines differ by weight and dash, so that a black and white print says the same.

use crate::log::LogError;
use crate::report::{Report, ReportError, figures};
use crate::spectrum::conversion::{
    self, ConversionFloor, Input, Point, PointKind, Refusal, Settings, Verdict,
};
use crate::spectrum::ladder::Ladder;
use legwise_protocol::message::{Mode, SegmentSet};
use std::collections::BTreeMap;
use std::path::{Path, PathBuf};

pub mod axis;
mod layout;
pub mod png;
pub mod scene;
pub mod svg;

pub use layout::layout;

/// Ratio of one leg alone, x against x/2: no pair makes more, and a limit above says nothing.
const ONE_LEG: f64 = 2.0;

/// Why there is no picture.
#[derive(Debug, thiserror::Error)]
#[non_exhaustive]
pub enum PlotError {
    /// Nothing to draw.
    #[error(
        "could not plot: there are no averaged spectra of both modes in it; try a longer recording (some seconds) \
         or a board with firmware of wire version 2 or later"
    )]
    NoSpectra,
    /// Neither of the two kinds of picture.
    #[error("could not plot to {}: a picture's name ends in .svg or .png; try one of these", path.display())]
    UnknownFormat {
        /// The file named.
        path: PathBuf,
    },
    /// The picture could not be written.
    #[error("could not write the picture to {}: {source}; try another folder or name", path.display())]
    Write {
        /// The file.
        path: PathBuf,
        /// What the system said.
        source: std::io::Error,
    },
    /// No memory for a picture of pixels.
    #[error("could not make the picture of pixels; try a name that ends in .svg")]
    Picture,
    /// The log could not be read.
    #[error(transparent)]
    Log(#[from] LogError),
    /// The report could not be made.
    #[error(transparent)]
    Report(#[from] ReportError),
}

/// Kind of picture.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Format {
    /// Lines and text.
    Svg,
    /// Pixels.
    Png,
}

impl Format {
    /// The kind that the ending of a file's name asks for.
    ///
    /// # Errors
    /// When it is neither.
    pub fn of(path: &Path) -> Result<Self, PlotError> {
        let ending = path.extension().map(|ending| ending.to_string_lossy().to_ascii_lowercase());
        match ending.as_deref() {
            Some("svg") => Ok(Self::Svg),
            Some("png") => Ok(Self::Png),
            _ => Err(PlotError::UnknownFormat { path: path.to_path_buf() }),
        }
    }
}

/// One curve of the upper part.
#[derive(Clone, Debug, PartialEq)]
pub struct Series {
    /// Common or differential mode.
    pub mode: Mode,
    /// Idle or driven segments.
    pub set: SegmentSet,
    /// Frequency in Hz and amplitude density in V/√Hz, by rising frequency; densities are above 0.
    pub points: Vec<(f64, f64)>,
}

/// What the lower part shows at one frequency.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum Mark {
    /// A claimed value, dB, with the ends of its region.
    Value {
        /// Magnitude.
        db: f64,
        /// Lowest of the region.
        low_db: f64,
        /// Highest of the region.
        high_db: f64,
    },
    /// The true one is at most this, dB.
    Limit {
        /// Highest magnitude.
        db: f64,
    },
    /// Nothing is said, or nothing that is not true of every pair.
    Refused,
}

/// A mark at its frequency.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct PlacedMark {
    /// Hz.
    pub frequency_hz: f64,
    /// From where to where it reaches, Hz.
    pub band_hz: (f64, f64),
    /// Whether it stands for one line of the common mode instead of a band.
    pub is_line: bool,
    /// What is shown.
    pub mark: Mark,
}

/// All that a picture shows.
#[derive(Clone, Debug, PartialEq)]
pub struct Plot {
    /// The place.
    pub title: String,
    /// When, with what, how much.
    pub subtitles: Vec<String>,
    /// Curves of the upper part: common mode idle, driven, differential mode idle, driven, as far as there are.
    pub series: Vec<Series>,
    /// Marks of the lower part, by rising frequency.
    pub marks: Vec<PlacedMark>,
    /// Why the lower part is empty, if it is.
    pub marks_missing: Option<String>,
    /// The board's own conversion: frequency in Hz and dB with its radius.
    pub floor: Vec<(f64, f64)>,
    /// Lowest and highest frequency that densities are told for, Hz.
    pub seen_hz: (f64, f64),
    /// Lowest and highest frequency that conversion is asked for, Hz.
    pub judged_hz: (f64, f64),
    /// Half the sample rate, Hz.
    pub half_rate_hz: f64,
    /// What to know for reading it.
    pub notes: Vec<String>,
}

impl Plot {
    /// What to show of a ladder whose log has this report.
    ///
    /// # Errors
    /// When the ladder holds nothing above 0.
    pub fn new(report: &Report, ladder: &Ladder, board: Option<&ConversionFloor>) -> Result<Self, PlotError> {
        let series = series_of(ladder);
        let ends = |pick: fn(f64, f64) -> f64, start: f64| {
            series.iter().flat_map(|one| one.points.iter().map(|point| point.0)).fold(start, pick)
        };
        let seen_hz = (ends(f64::min, f64::INFINITY), ends(f64::max, 0.0));
        if seen_hz.0 >= seen_hz.1 {
            return Err(PlotError::NoSpectra);
        }
        let records = ladder.records();
        let input = Input { records: &records, board, common_noise_v2_per_hz: None };
        let skew_samples =
            report.recording.sample_rate_hz.unwrap_or(0.0) * report.recording.skew_ns as f64 * 1e-9;
        let settings = Settings { skew_samples, ..Settings::default() };
        let points = conversion::conversion(&input, &settings);
        let low_hz = points.iter().map(|point| point.band_hz.0).fold(f64::INFINITY, f64::min);
        let high_hz = points.iter().map(|point| point.band_hz.1).fold(0.0, f64::max);
        let floor = board.map(|board| floor_of(board, seen_hz)).unwrap_or_default();
        Ok(Self {
            title: title_of(report),
            subtitles: subtitles_of(report, ladder),
            series,
            marks: marks_of(&points),
            marks_missing: missing(&points),
            floor,
            seen_hz,
            judged_hz: if low_hz < high_hz { (low_hz, high_hz) } else { seen_hz },
            half_rate_hz: ladder.sample_rate_hz / 2.0,
            notes: notes(board.is_some()),
        })
    }
}

impl Plot {
    /// Writes the picture to a file, in place of an older one of that name.
    ///
    /// # Errors
    /// When the name ends otherwise than in .svg or .png, or the file cannot be written.
    pub fn write(&self, path: &Path) -> Result<(), PlotError> {
        let format = Format::of(path)?;
        let scene = layout(self);
        let bytes = match format {
            Format::Svg => svg::render(&scene).into_bytes(),
            Format::Png => png::render(&scene)?,
        };
        std::fs::write(path, bytes).map_err(|source| PlotError::Write { path: path.to_path_buf(), source })
    }
}

/// The four curves, without those that have no points.
fn series_of(ladder: &Ladder) -> Vec<Series> {
    let mut all = Vec::new();
    for mode in [Mode::Common, Mode::Differential] {
        for set in [SegmentSet::Idle, SegmentSet::Driven] {
            let curve = ladder.curve(set);
            let densities = curve.iter().map(|point| (point.frequency_hz, point.bin.of(mode).sqrt()));
            let points: Vec<(f64, f64)> = densities.filter(|(_, density)| *density > 0.0).collect();
            if points.len() > 1 {
                all.push(Series { mode, set, points });
            }
        }
    }
    all
}

fn marks_of(points: &[Point]) -> Vec<PlacedMark> {
    let mut marks: Vec<PlacedMark> = points
        .iter()
        .map(|point| {
            let (low_db, high_db) = point.magnitude_range_db();
            let mark = match point.verdict {
                Verdict::Significant => Mark::Value { db: point.magnitude_db(), low_db, high_db },
                Verdict::UpperLimit { magnitude, .. } if magnitude < ONE_LEG => {
                    Mark::Limit { db: 20.0 * magnitude.log10() }
                }
                Verdict::UpperLimit { .. } | Verdict::Refused(_) => Mark::Refused,
            };
            let (frequency_hz, band_hz) = (point.frequency_hz, point.band_hz);
            PlacedMark { frequency_hz, band_hz, is_line: point.kind == PointKind::Line, mark }
        })
        .collect();
    marks.sort_by(|a, b| a.frequency_hz.total_cmp(&b.frequency_hz));
    marks
}

/// Why a curve has neither a value nor a limit: its reasons, the commonest first.
fn missing(points: &[Point]) -> Option<String> {
    let mut reasons: BTreeMap<&str, usize> = BTreeMap::new();
    for point in points {
        let reason = match point.verdict {
            Verdict::Refused(refusal) => words(refusal),
            Verdict::UpperLimit { magnitude, .. } if magnitude >= ONE_LEG => words(Refusal::NoiseOnly),
            _ => return None,
        };
        *reasons.entry(reason).or_default() += 1;
    }
    let mut reasons: Vec<(&str, usize)> = reasons.into_iter().collect();
    reasons.sort_by_key(|(_, count)| std::cmp::Reverse(*count));
    let reasons: Vec<&str> = reasons.into_iter().map(|(words, _)| words).collect();
    let reasons =
        if reasons.is_empty() { "no frequency to judge".to_owned() } else { reasons.join("; elsewhere ") };
    Some(format!("nothing claimed: {reasons}"))
}

fn words(refusal: Refusal) -> &'static str {
    match refusal {
        Refusal::TooFewSegments { .. } => "fewer than 8 segments with the bus idle",
        Refusal::NothingMeasured => "a mode holds nothing at all",
        Refusal::NoiseOnly => "the common mode is lost in the board's noise",
        Refusal::OtherDirection => "what is coherent comes from the differential mode",
    }
}

/// The board's own magnitude with its radius where densities are told.
fn floor_of(board: &ConversionFloor, (low_hz, high_hz): (f64, f64)) -> Vec<(f64, f64)> {
    let decibels = |magnitude: f64| 20.0 * magnitude.max(1e-12).log10();
    let points = board.points().iter().filter(|point| (low_hz..=high_hz).contains(&point.frequency_hz));
    points
        .map(|point| {
            let own = point.of(conversion::Direction::Conversion);
            (point.frequency_hz, decibels(own.magnitude_with_radius()))
        })
        .collect()
}

fn title_of(report: &Report) -> String {
    let recording = &report.recording;
    let named = recording.point.as_deref().or(recording.origin_name.as_deref());
    named.unwrap_or("a point without a name").to_owned()
}

/// Time, receiver and board; then what was averaged.
fn subtitles_of(report: &Report, ladder: &Ladder) -> Vec<String> {
    let recording = &report.recording;
    // RFC 3339 to the second: "2026-03-01T01:00:00".
    let utc = |moment: &Option<crate::report::model::Moment>| {
        let text = moment.as_ref().and_then(|moment| moment.utc.clone())?;
        Some(text.get(..19)?.replace('T', " "))
    };
    let length =
        recording.duration_s.map_or_else(String::new, |length_s| format!("{} ", figures::span(length_s)));
    let time = match (utc(&recording.started), utc(&recording.ended)) {
        (Some(from), Some(to)) => format!("{from} to {to} UTC"),
        _ => format!("{length}without a clock (no UTC)"),
    };
    let origin = match (&recording.point, &recording.origin_name, &recording.origin) {
        (Some(_), Some(name), Some(origin)) => format!("{origin}: {name} · "),
        _ => String::new(),
    };
    let board =
        recording.runs.iter().find_map(|run| run.board.clone()).unwrap_or_else(|| "not named".to_owned());
    let more =
        if recording.runs.len() > 1 { format!(", {} runs", recording.runs.len()) } else { String::new() };
    let rate = figures::pair_rate(ladder.sample_rate_hz);
    vec![
        format!("{origin}{time}"),
        format!("receiver {} · board {board}{more} · {rate} · {}", report.receiver.name, segments_of(ladder)),
    ]
}

/// Segments of both sets at the full rate and at the slowest rung.
fn segments_of(ladder: &Ladder) -> String {
    let count = |rung: u8, set: SegmentSet| {
        let mean = ladder.of_set(set).find(|mean| mean.mean.rung == rung);
        figures::count(mean.map_or(0, |mean| mean.mean.segments))
    };
    let both = |rung: u8| {
        format!("{} idle, {} driven", count(rung, SegmentSet::Idle), count(rung, SegmentSet::Driven))
    };
    let slowest = ladder.means.iter().map(|mean| mean.mean.rung).max().unwrap_or(0);
    let full = format!("segments: {} at the full rate", both(0));
    if slowest == 0 { full } else { format!("{full}; {} at the slowest", both(slowest)) }
}

fn notes(has_floor: bool) -> Vec<String> {
    let board = if has_floor {
        "The dotted line is the board's own conversion with its uncertainty; it is taken off, and nothing below it is claimed."
    } else {
        "The board's own conversion is not known: what it adds is in the values. 'legwise trim' measures it."
    };
    vec![
        "One-sided densities, Hann window, mean of each segment removed. Rungs join at 0.35 of the lower one's rate; driven \
         segments of a slower rung hold more rest: their curves step there."
            .to_owned(),
        "A line may be the image of one above half the rate; the report says which were checked. Near half the rate levels read low by what the front end \
         takes away; its corner is not in the log."
            .to_owned(),
        format!("Conversion: differential volt per common volt, from idle segments. {board}"),
    ]
}

#[cfg(test)]
mod tests;
