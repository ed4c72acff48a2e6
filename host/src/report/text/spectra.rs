//! The panel on the spectra: the sources of the lines, when they were there, and conversion.

use super::layout::{Align, detail, labelled, paragraph, table};
use super::panels::{has_runs, moment_rough};
use crate::report::Report;
use crate::report::figures;
use crate::report::model::{Conversion, Source, Spectra};

/// Sources shown, the bus's own data not counted.
const SHOWN: usize = 3;
/// Candidates of an alias shown.
const CANDIDATES: usize = 3;

/// What the spectra show, sources first.
pub(super) fn sources(report: &Report) -> String {
    let spectrum = &report.spectrum;
    if spectrum.common.is_none() && spectrum.differential.is_none() {
        return paragraph("No spectra are in the log.");
    }
    let is_data = |source: &&Source| source.kind == "traffic";
    let disturbing = spectrum.sources.iter().filter(|source| !is_data(source)).take(SHOWN);
    let shown: Vec<&Source> = disturbing.chain(spectrum.sources.iter().filter(is_data)).collect();
    let mut text = if shown.is_empty() {
        paragraph("No line stands out of the floor in either mode.")
    } else {
        listed(&shown, spectrum.second_rate_hz.is_some(), has_runs(report))
    };
    let hidden = spectrum.sources.len() - shown.len() + spectrum.sources_not_listed as usize;
    if hidden > 0 {
        let weaker = figures::counted(hidden as u64, "weaker source", "weaker sources");
        text.push_str(&paragraph(&format!("and {weaker}: see the JSON form.")));
    }
    text.push_str(&labelled("common to diff.", &spectrum.conversion.text));
    text.push_str(&labelled("data to common", &spectrum.driver_imbalance.text));
    text.push_str(&notes(spectrum));
    text
}

/// A row of numbers for each source, with what it was told by under it.
fn listed(shown: &[&Source], is_checked: bool, has_runs: bool) -> String {
    let level = |level_v: Option<f64>| level_v.map_or_else(|| "-".to_string(), figures::volts);
    let row = |source: &&Source| {
        vec![
            name(source).to_string(),
            place(source),
            level(source.common_rms_v),
            level(source.differential_rms_v),
            source.set.to_string(),
            if source.kind == "unknown" { "-".to_string() } else { sure(source.confidence) },
        ]
    };
    let columns = [
        ("source", Align::Left),
        ("at", Align::Left),
        ("common", Align::Right),
        ("differential", Align::Right),
        ("bus was", Align::Left),
        ("sure", Align::Right),
    ];
    let rows: Vec<Vec<String>> = shown.iter().map(row).collect();
    let table = table(&columns, &rows);
    let mut lines = table.lines();
    let mut text = format!("{}\n", lines.next().unwrap_or_default());
    for (line, source) in lines.zip(shown) {
        text.push_str(&format!("{line}\n"));
        text.push_str(&detail(&told(source, is_checked, has_runs)));
    }
    text
}

fn name(source: &Source) -> &'static str {
    match source.kind {
        "mains" => "mains",
        "drive" => "drive carrier",
        "supply" => "switching supply",
        "traffic" => "own bus data",
        _ => "unknown",
    }
}

fn place(source: &Source) -> String {
    match (source.frequency_hz, source.frequency_uncertainty_hz) {
        (Some(hz), Some(within_hz)) => {
            return format!("{} {}", figures::hertz(hz), figures::uncertainty_hertz(within_hz));
        }
        (Some(hz), None) => return figures::hertz(hz),
        (None, _) => {}
    }
    match (source.bit_rate_hz, source.bit_rate_uncertainty_hz) {
        (Some(rate), Some(within)) => {
            format!("{} ±{:.1} %", figures::bit_rate(rate), (100.0 * within / rate).max(0.1))
        }
        _ => "bit rate not told".to_string(),
    }
}

/// The confidence in whole percent, never all.
fn sure(confidence: f64) -> String {
    format!("{:.0} %", (100.0 * confidence).floor().min(99.0))
}

fn told(source: &Source, is_checked: bool, has_runs: bool) -> String {
    let mut parts = vec![when(source, has_runs)];
    if !source.summary.is_empty() {
        parts.push(source.summary.clone());
    }
    if is_checked && source.kind != "traffic" {
        parts.push(alias(source));
    }
    parts.join("; ")
}

fn alias(source: &Source) -> String {
    match source.alias {
        "confirmed" => "stays put at the second rate".to_string(),
        "suspect" => {
            let candidates: Vec<String> =
                source.candidates_hz.iter().take(CANDIDATES).map(|hz| figures::hertz(*hz)).collect();
            let shows = source.lines.first().map_or(0.0, |line| line.frequency_hz);
            format!("ALIAS SUSPECT: shows at {}, truly {}", figures::hertz(shows), candidates.join(" or "))
        }
        _ => "not confirmed: not found again while the rate was moved".to_string(),
    }
}

/// How much of the time, how strong then, how often, since when.
fn when(source: &Source, has_runs: bool) -> String {
    let Some(presence) = &source.presence else { return "when: not known from this log".to_string() };
    let Some(first) = &presence.first_start else {
        return "too weak to be seen in any one spectrum".to_string();
    };
    if presence.share >= 1.0 {
        return "all the time".to_string();
    }
    let level_v = source.common_rms_v.unwrap_or(0.0).max(source.differential_rms_v.unwrap_or(0.0));
    format!(
        "{} of the time (about {} then), {}, first {}",
        figures::share(presence.share),
        figures::volts(level_v / presence.share.sqrt()),
        figures::counted(presence.stretches, "stretch", "stretches"),
        moment_rough(first, has_runs)
    )
}

fn notes(spectrum: &Spectra) -> String {
    let mut text = String::new();
    if spectrum.left_out > 0 {
        let value = figures::counted(spectrum.left_out, "spectrum", "spectra");
        text.push_str(&labelled("left out", &format!("{value} of another rate, length or kind")));
    }
    let mut notes = Vec::new();
    if !spectrum.sources.is_empty() {
        notes.push("Levels: V rms of all lines of a source, averaged over the whole time; ± without the sample clock.");
        notes.push("Sure: a rule, not a probability.");
        if spectrum.second_rate_hz.is_none() {
            notes.push("One sample rate only: no line is confirmed against folding.");
        }
    }
    let is_told = |conversion: &Conversion| conversion.finding != "not-known";
    if !spectrum.conversion.is_board_known && is_told(&spectrum.conversion) {
        notes.push("The board's own conversion is not known and may be in this: run legwise trim.");
    }
    text.push_str(&paragraph(&notes.join(" ")));
    text
}
