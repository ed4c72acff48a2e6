//! Panels on the verdict and what it rests on: verdict, what was examined, limits, margins.

use super::layout::{Align, labelled, paragraph, table};
use super::{Report, Style};
use crate::report::figures;
use crate::report::model::{GapPart, Moment, WindowUsed, WindowVerdict};
use crate::report::reason::quantity_words;

/// Gaps listed at most.
const GAPS: usize = 20;

/// Date and time of day of an RFC 3339 text.
fn date_and_time(stamp: &str) -> Option<(&str, &str)> {
    let (date, rest) = stamp.split_once('T')?;
    Some((date, rest.get(..12)?))
}

/// A moment with all that is known of it.
pub(super) fn moment_in_full(moment: &Moment, has_runs: bool) -> String {
    let mut text = moment_in_table(moment, has_runs);
    if let (Some(local), Some(utc)) = (&moment.local, &moment.utc)
        && let (Some((date, time)), Some((utc_date, utc_time))) = (date_and_time(local), date_and_time(utc))
    {
        let offset = local.get(23..).unwrap_or("");
        let uncertainty =
            moment.uncertainty_s.map_or_else(String::new, |s| format!(", ±{}", figures::seconds(s)));
        text = format!("{date} {time} local ({offset}), {utc_date} {utc_time} UTC{uncertainty}");
    }
    if moment.within_samples > 1 {
        text.push_str(", or up to one summary interval later");
    }
    text
}

/// A moment in the room of a table cell: `03-01 03:13:04.512 (02:13:04.512 UTC)` or seconds.
pub(super) fn moment_in_table(moment: &Moment, has_runs: bool) -> String {
    if let (Some(local), Some(utc)) = (&moment.local, &moment.utc)
        && let (Some((date, time)), Some((_, utc_time))) = (date_and_time(local), date_and_time(utc))
    {
        return format!("{} {time} ({utc_time} UTC)", date.get(5..).unwrap_or(date));
    }
    moment_short(moment, has_runs)
}

/// The shortest form: local date and time, or seconds.
pub(super) fn moment_short(moment: &Moment, has_runs: bool) -> String {
    if let Some((date, time)) = moment.local.as_deref().and_then(date_and_time) {
        return format!("{} {time}", date.get(5..).unwrap_or(date));
    }
    let run = if has_runs { format!("run {}: ", moment.run) } else { String::new() };
    let digits = if moment.seconds.is_some_and(|seconds| seconds < 100.0) { 6 } else { 3 };
    moment.seconds.map_or_else(
        || format!("{run}sample {}", figures::count(moment.sample)),
        |seconds| format!("{run}{seconds:.digits$} s"),
    )
}

/// The same to the second, for what is known no better.
pub(super) fn moment_rough(moment: &Moment, has_runs: bool) -> String {
    if let Some((date, time)) = moment.local.as_deref().and_then(date_and_time) {
        return format!("{} {}", date.get(5..).unwrap_or(date), time.get(..8).unwrap_or(time));
    }
    let run = if has_runs { format!("run {}: ", moment.run) } else { String::new() };
    moment.seconds.map_or_else(
        || format!("{run}sample {}", figures::count(moment.sample)),
        |seconds| {
            if seconds < 120.0 {
                format!("{run}{seconds:.0} s")
            } else {
                format!("{run}{}", figures::span(seconds))
            }
        },
    )
}

pub(super) fn has_runs(report: &Report) -> bool {
    report.recording.runs.len() > 1
}

/// The first lines: verdict, reason, margin, worst moment, clip.
pub(super) fn verdict(report: &Report, style: Style) -> String {
    let mut text = format!("{}\n", style.verdict(report.verdict));
    text.push_str(&paragraph(&report.reason));
    let worst = &report.worst;
    if let (Some(margin_v), Some(quantity)) = (worst.margin_v, worst.quantity) {
        let uncertainty = worst
            .margin_uncertainty_v
            .map_or_else(|| "uncertainty not stated".to_string(), figures::uncertainty_volts);
        let value =
            format!("{} ({uncertainty}) at {}", figures::volts_signed(margin_v), quantity_words(quantity));
        text.push_str(&labelled("margin left", &value));
    }
    if let Some(moment) = &worst.moment {
        let mut when = moment_in_full(moment, has_runs(report));
        if moment.utc.is_none() {
            when.push_str(" into the recording (no clock)");
        }
        text.push_str(&labelled("worst moment", &when));
    }
    let clip = report.recording.point.as_deref().unwrap_or("point not named");
    text.push_str(&labelled("clip", clip));
    if !report.recording.is_complete {
        text.push_str(&labelled(
            "incomplete",
            "the end of the run is not in this log: what came after is not judged",
        ));
    }
    text
}

/// What was examined.
pub(super) fn examined(report: &Report) -> String {
    let recording = &report.recording;
    let mut text = String::new();
    let origin = match (&recording.origin, &recording.origin_name) {
        (Some(origin), Some(name)) => format!("{origin}: {name}"),
        (Some(one), None) | (None, Some(one)) => one.clone(),
        (None, None) => "not stated".to_string(),
    };
    text.push_str(&labelled("origin", &origin));
    let length = recording.duration_s.map_or_else(|| "unknown time".to_string(), figures::span);
    let rate = recording.sample_rate_hz.map_or_else(|| "unknown rate".to_string(), figures::pair_rate);
    let pairs = figures::counted(recording.pairs, "pair", "pairs");
    text.push_str(&labelled("length", &format!("{length}: {pairs} at {rate}")));
    for (label, moment) in [("from", &recording.started), ("to", &recording.ended)] {
        if let Some(moment) = moment {
            text.push_str(&labelled(label, &moment_in_full(moment, has_runs(report))));
        }
    }
    text.push_str(&runs(report));
    text.push_str(&coverage(report));
    if !recording.is_complete {
        text.push_str(&labelled(
            "end",
            "not seen: the log was cut off or still grows; counts are at least as stated",
        ));
    }
    text
}

fn runs(report: &Report) -> String {
    let runs = &report.recording.runs;
    let board = runs.iter().rev().find_map(|run| run.board.as_deref()).filter(|board| !board.is_empty());
    let firmware = runs.iter().rev().find_map(|run| run.firmware_version.as_deref());
    let device = match (board, firmware) {
        (Some(board), Some(firmware)) => format!("{board}, firmware {firmware}, "),
        (Some(board), None) => format!("{board}, "),
        _ => String::new(),
    };
    let mut text =
        labelled("device", &format!("{device}{}", figures::counted(runs.len() as u64, "start", "starts")));
    if runs.len() > 1 {
        let rows: Vec<Vec<String>> = runs
            .iter()
            .map(|run| {
                vec![
                    run.run.to_string(),
                    figures::count(run.pairs),
                    run.reset_cause.clone().unwrap_or_else(|| "unknown".to_string()),
                    run.end_cause.clone().unwrap_or_else(|| "not seen".to_string()),
                ]
            })
            .take(GAPS)
            .collect();
        let columns = [
            ("run", Align::Right),
            ("pairs", Align::Right),
            ("started after", Align::Left),
            ("end", Align::Left),
        ];
        text.push_str(&table(&columns, &rows));
    }
    text
}

fn coverage(report: &Report) -> String {
    let coverage = &report.coverage;
    let share = coverage.share.map_or_else(|| "nothing examined".to_string(), figures::share);
    let lost = match (coverage.gap_count, coverage.gap_s) {
        (0, _) => "no interval lost".to_string(),
        (count, Some(gap_s)) => {
            let length = figures::span(gap_s);
            format!("{} lost, {length} in all", figures::counted(count, "interval", "intervals"))
        }
        (count, None) => format!("{} lost", figures::counted(count, "interval", "intervals")),
    };
    let mut text = labelled("coverage", &format!("{share}; {lost}"));
    if !coverage.gaps.is_empty() {
        let rows: Vec<Vec<String>> =
            coverage.gaps.iter().take(GAPS).map(|gap| gap_row(gap, has_runs(report))).collect();
        let columns = [("lost from", Align::Left), ("for", Align::Right), ("cause", Align::Left)];
        text.push_str(&table(&columns, &rows));
        let hidden = coverage.gap_count.saturating_sub(rows.len() as u64);
        if hidden > 0 {
            text.push_str(&paragraph(&format!("... and {} more.", figures::count(hidden))));
        }
    }
    let link = &coverage.link;
    let damaged = link.damaged_frames + link.oversize_frames + link.unknown_frames;
    let value = format!(
        "{} arrived, {} missing, {} dropped as damaged or unknown ({}), {} repeated",
        figures::counted(link.frames, "frame", "frames"),
        figures::count(link.missing_frames),
        figures::count(damaged),
        figures::counted(link.dropped_bytes, "byte", "bytes"),
        figures::count(link.repeated_frames),
    );
    text.push_str(&labelled("link", &value));
    let given_up = coverage.given_up;
    if given_up.records + given_up.snippet_parts > 0 {
        let value = format!(
            "the device ran out of room and dropped {} and {}; its counts still hold them",
            figures::counted(given_up.records, "record", "records"),
            figures::counted(given_up.snippet_parts, "waveform part", "waveform parts"),
        );
        text.push_str(&labelled("given up", &value));
    }
    text
}

fn gap_row(gap: &GapPart, has_runs: bool) -> Vec<String> {
    vec![
        moment_in_table(&gap.moment, has_runs),
        gap.length_s.map_or_else(|| "unknown".to_string(), figures::seconds),
        gap.cause.clone(),
    ]
}

/// The limits that were used, and whether the converter can see them.
pub(super) fn limits(report: &Report) -> String {
    let receiver = &report.receiver;
    let custom =
        if receiver.is_custom && receiver.name != "custom" { " (windows changed by the user)" } else { "" };
    let mut text = labelled("receiver", &format!("{}: {}{custom}", receiver.name, receiver.title));
    text.push_str(&labelled("each terminal", &window(receiver.terminal.as_ref(), "not judged")));
    text.push_str(&labelled("average", &window(receiver.average.as_ref(), "not judged")));
    text.push_str(&labelled("decides", &window(receiver.threshold.as_ref(), "thresholds not known")));
    if !receiver.note.is_empty() {
        text.push_str(&labelled("note", receiver.note));
    }
    if receiver.pairs_under_other_limits > 0 {
        let value = format!(
            "{} were examined under other limits; excursions among them were counted by those",
            figures::counted(receiver.pairs_under_other_limits, "pair", "pairs"),
        );
        text.push_str(&labelled("changed", &value));
    }
    for leg in &report.converter.legs {
        let value = format!(
            "rails {} and {}, {} per code, gain within {} ppm, offset within {}",
            figures::volts_signed(leg.rail_low_v),
            figures::volts_signed(leg.rail_high_v),
            figures::volts(leg.resolution_v),
            figures::count(u64::from(leg.gain_uncertainty_ppm)),
            figures::volts(leg.offset_uncertainty_v),
        );
        text.push_str(&labelled(&format!("leg {} converter", leg.leg), &value));
    }
    text.push_str(&labelled("clipped", &clipped(report)));
    text
}

fn clipped(report: &Report) -> String {
    let pairs = figures::counted(report.recording.clipped_samples, "pair", "pairs");
    let rails = match report.converter.are_rails_inside_limits {
        Some(true) => "a rail lies inside the limits: beyond it nothing can be judged",
        Some(false) => "the rails lie beyond the limits",
        None => "rails not known, or no limit to compare with",
    };
    format!("{pairs} at a rail; {rails}")
}

fn window(window: Option<&WindowUsed>, missing: &str) -> String {
    window.map_or_else(
        || missing.to_string(),
        |window| {
            let standing = match window.standing {
                "seen" => "verified in a secondary source",
                "from-memory" => "FROM MEMORY, not verified",
                _ => "the user's own",
            };
            let volts = |value: f64| {
                if value.abs() < 1.0 { figures::volts_signed_scaled(value) } else { format!("{value:+} V") }
            };
            format!("{} to {} ({standing}: {})", volts(window.low_v), volts(window.high_v), window.source)
        },
    )
}

/// Margins of every quantity, and both verdicts.
pub(super) fn margins(report: &Report) -> String {
    if report.margins.is_empty() {
        return paragraph("No limit was judged.");
    }
    let rows: Vec<Vec<String>> = report
        .margins
        .iter()
        .map(|margin| {
            vec![
                quantity_words(margin.quantity)
                    .replace(", upper limit", " high")
                    .replace(", lower limit", " low"),
                figures::volts_signed(margin.limit_v),
                figures::volts_signed(margin.worst_v),
                figures::volts_signed(margin.margin_v),
                margin.uncertainty_v.map_or_else(|| "unknown".to_string(), figures::uncertainty_volts),
                moment_in_table(&margin.moment, has_runs(report)),
            ]
        })
        .collect();
    let columns = [
        ("", Align::Left),
        ("limit", Align::Right),
        ("worst", Align::Right),
        ("margin", Align::Right),
        ("reading", Align::Right),
        ("first reached", Align::Left),
    ];
    let mut text = table(&columns, &rows);
    text.push_str(&labelled("per terminal", &window_verdict(report.judged.terminal.as_ref())));
    text.push_str(&labelled("on the average", &window_verdict(report.judged.average.as_ref())));
    text
}

fn window_verdict(verdict: Option<&WindowVerdict>) -> String {
    let Some(verdict) = verdict else {
        return "not judged: the receiver defines no such window".to_string();
    };
    let margin = verdict.margin_v.map_or_else(|| "no reading".to_string(), figures::volts_signed);
    format!(
        "{} (margin {margin}; marginal below {} of a window of {})",
        super::verdict_words(verdict.verdict).to_lowercase(),
        figures::volts(verdict.marginal_below_v),
        figures::volts(verdict.width_v),
    )
}
