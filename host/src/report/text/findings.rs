//! Panels on the signal itself: excursions, levels, blind spots, cautions.

use super::layout::{Align, fitting_table, item, labelled, paragraph, table};
use super::panels::{has_runs, moment_short};
use crate::report::Report;
use crate::report::figures;
use crate::report::model::{ExcursionEntry, LevelSpread};

/// Exact totals and the entries furthest out.
pub(super) fn excursions(report: &Report) -> String {
    let excursions = &report.excursions;
    let mut text = labelled("excursions", &totals(report));
    if excursions.edge_suspects > 0 {
        let value = format!(
            "{} besides: one-sample peaks of the average on a data edge, where the skew between the legs invents them",
            figures::count(excursions.edge_suspects),
        );
        text.push_str(&labelled("edge suspects", &value));
    }
    if excursions.storms > 0 {
        let value = format!(
            "{}, holding {}",
            figures::counted(excursions.storms, "record", "records"),
            figures::counted(excursions.coalesced, "excursion", "excursions"),
        );
        text.push_str(&labelled("storms", &value));
    }
    if excursions.furthest.is_empty() {
        return text;
    }
    let rows: Vec<Vec<String>> =
        excursions.furthest.iter().map(|entry| entry_row(entry, has_runs(report))).collect();
    let columns = [
        ("began", Align::Left),
        ("lasted", Align::Right),
        ("limits", Align::Left),
        ("extreme", Align::Right),
        ("beyond", Align::Right),
        ("area", Align::Right),
        ("DM meanwhile, V", Align::Left),
        ("", Align::Left),
    ];
    // Where the page is too narrow the area goes last.
    text.push_str(&fitting_table(&columns, &rows, &[6, 5]));
    if excursions.list_truncated || excursions.list.len() > rows.len() {
        let more = if excursions.list_truncated {
            "These are the furthest out; there are more than could be listed.".to_string()
        } else {
            let hidden = excursions.list.len() - rows.len();
            format!(
                "These are the furthest out; {} more are in the JSON form.",
                figures::count(hidden as u64)
            )
        };
        text.push_str(&paragraph(&more));
    }
    text.push_str(&paragraph(
        "A+ A- B+ B- : leg above or below its limit; avg: average. C clipped, G cut by a gap or the end, \
         S storm of so many, E edge suspect, W waveform kept.",
    ));
    text
}

fn totals(report: &Report) -> String {
    let excursions = &report.excursions;
    if excursions.count == 0 && excursions.samples_outside == 0 {
        return "none".to_string();
    }
    let pairs = figures::counted(excursions.samples_outside, "pair", "pairs");
    let time = match (excursions.time_outside_s, excursions.share_outside) {
        (Some(seconds), Some(share)) => {
            format!(
                "; {pairs} outside, {} or {} of the time",
                figures::seconds(seconds),
                figures::share(share)
            )
        }
        _ => format!("; {pairs} outside"),
    };
    format!("{}{time}", figures::count(excursions.count))
}

fn entry_row(entry: &ExcursionEntry, has_runs: bool) -> Vec<String> {
    let limits: Vec<&str> = entry.limits.iter().map(|limit| limit_mark(limit)).collect();
    let dm = match (entry.dm_min_v, entry.dm_max_v) {
        (Some(low), Some(high)) => format!("{low:+.1} to {high:+.1}"),
        _ => "unknown".to_string(),
    };
    vec![
        moment_short(&entry.moment, has_runs),
        entry.duration_s.map_or_else(|| format!("{} pairs", entry.samples), figures::seconds),
        limits.join(""),
        format!("{:+.3} V", entry.extreme_v),
        entry.beyond_v.map_or_else(|| "unknown".to_string(), figures::volts),
        entry.area_v_s.map_or_else(|| "unknown".to_string(), figures::volt_seconds),
        dm,
        flags(entry),
    ]
}

fn limit_mark(limit: &str) -> &'static str {
    match limit {
        "leg-a-high" => "A+",
        "leg-a-low" => "A-",
        "leg-b-high" => "B+",
        "leg-b-low" => "B-",
        "average-high" => "avg+",
        "average-low" => "avg-",
        _ => "?",
    }
}

fn flags(entry: &ExcursionEntry) -> String {
    let mut text = String::new();
    let marks = [
        (entry.clipped_samples > 0, 'C'),
        (entry.is_cut, 'G'),
        (entry.is_edge_suspect, 'E'),
        (entry.has_waveform, 'W'),
    ];
    text.extend(marks.iter().filter(|(is_set, _)| *is_set).map(|(_, mark)| mark));
    if entry.coalesced > 0 {
        text.push_str(&format!("S{}", entry.coalesced));
    }
    text
}

/// Levels, what the receiver makes of them, and networks that would give them.
pub(super) fn levels(report: &Report) -> String {
    let levels = &report.levels;
    if levels.intervals == 0 {
        return paragraph("No levels were reported.");
    }
    let row = |name: &str, level_v: Option<f64>, spread: Option<LevelSpread>, cm_v: Option<f64>| {
        let spread = spread.map_or_else(String::new, |spread| {
            let ends = [spread.p5_v, spread.p95_v].map(figures::volts_signed_scaled);
            format!("{} to {}", ends[0], ends[1])
        });
        vec![
            name.to_string(),
            level_v.map_or_else(|| "not found".to_string(), figures::volts_signed_scaled),
            spread,
            cm_v.map_or_else(|| "not found".to_string(), figures::volts_signed),
        ]
    };
    let columns = [
        ("", Align::Left),
        ("VA-VB", Align::Right),
        ("nine intervals in ten", Align::Left),
        ("average", Align::Right),
    ];
    let rows = [
        row("idle", levels.idle_v, levels.idle_spread, levels.cm_idle_v),
        row("driven high", levels.driven_high_v, levels.driven_high_spread, levels.cm_driven_high_v),
        row("driven low", levels.driven_low_v, levels.driven_low_spread, levels.cm_driven_low_v),
    ];
    let mut text = table(&columns, &rows);
    let shares = [
        ("idle", levels.idle_share),
        ("driven", levels.driven_share),
        ("between 0.3 and 0.7 of the driven level", levels.mid_level_share),
    ];
    let shares: Vec<String> = shares
        .into_iter()
        .filter_map(|(name, share)| Some(format!("{name} {}", figures::share(share?))))
        .collect();
    text.push_str(&labelled("time spent", &shares.join(", ")));
    for judgement in &levels.judgements {
        let mark = match judgement.finding {
            "good" => "good:",
            "weak" => "WEAK:",
            "wrong" => "WRONG:",
            _ => "not judged:",
        };
        text.push_str(&item(&format!("{mark} {}", judgement.text)));
    }
    text.push_str(&bias(report));
    text
}

fn bias(report: &Report) -> String {
    let levels = &report.levels;
    if levels.bias_candidates.is_empty() {
        return String::new();
    }
    let mut text = paragraph("The idle level is consistent with (several networks give the same level):");
    let rows: Vec<Vec<String>> = levels
        .bias_candidates
        .iter()
        .map(|candidate| {
            vec![
                candidate.description.clone(),
                figures::volts(candidate.expected_idle_v),
                format!("{:+.1} %", candidate.deviation_share * 100.0),
            ]
        })
        .collect();
    let columns = [("network", Align::Left), ("gives", Align::Right), ("seen", Align::Right)];
    text.push_str(&table(&columns, &rows));
    if let Some(hint) = &levels.driven_hint {
        text.push_str(&paragraph(hint));
    }
    text
}

/// What could not be seen.
pub(super) fn blind(report: &Report) -> String {
    report.blind.statements.iter().map(|statement| item(statement)).collect()
}

/// What to mind.
pub(super) fn cautions(report: &Report) -> String {
    report.cautions.iter().map(|caution| item(caution)).collect()
}
