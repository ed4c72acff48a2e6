//! What could not be seen, printed with the claim; and what to mind before acting on it.
//!
//! Sampling: a rectangular pulse of width w meets a sample with probability `min(1, w·fs)`, two with
//! `max(0, min(1, w·fs − 1))` (random phase).

use super::figures;
use super::margins::Judgement;
use super::model::{Blind, Coverage, Recording, Spectra};

/// Width of the pulse the probability is given for: the half-width of the fast-transient pulse of
/// IEC 61000-4-4, ns.
const SHORT_PULSE_NS: f64 = 50.0;

/// What to mind before acting on the report. General practice; local codes and the judgement of
/// licensed people on the site come first.
pub(crate) const CAUTIONS: [&str; 8] = [
    "Local electrical codes, the site's rules and licensed people come before anything in this report.",
    "The monitor belongs on extra-low-voltage signal pairs only. It carries no measurement category: \
     nothing that is, or may become, mains goes on its clips.",
    "Protective earth stays connected, always. Shields and signal references are changed only by the \
     site's rule.",
    "Resistance is measured with the power off and the bus idle. Insulation and high-voltage testers \
     come nowhere near a bus with electronics on it.",
    "Before joining two 0 V points, measure between them, AC and DC, then through 10 kohm. More than \
     the bus bears means: isolate, do not join.",
    "Nodes of a running process, and anything on a safety system, are touched only with its owner's \
     consent. Do not clip onto vehicles in motion or flight systems.",
    "In explosive atmospheres: not unless everything clipped on is certified for it.",
    "Open cabinets under the site's lockout rules, and clip on with the panel made safe.",
];

/// Probability that the short pulse meets a sample.
fn meets(rate_hz: f64) -> f64 {
    (SHORT_PULSE_NS * rate_hz / 1e9).min(1.0)
}

/// The blind part of the report.
pub(crate) fn statements(
    recording: &Recording,
    coverage: &Coverage,
    judgement: &Judgement,
    spectrum: &Spectra,
) -> Blind {
    let rate_hz = recording.sample_rate_hz;
    let mut statements = Vec::new();
    if let Some(rate_hz) = rate_hz {
        statements.extend(of_sampling(rate_hz));
    }
    statements.extend(of_aliases(spectrum));
    statements.extend(of_the_point(recording));
    statements.extend(of_lost_time(coverage));
    statements.extend(of_the_converter(recording, judgement));
    Blind {
        half_rate_hz: rate_hz.map(|rate| rate / 2.0),
        shortest_certain_s: rate_hz.map(|rate| 1.0 / rate),
        shortest_certain_two_samples_s: rate_hz.map(|rate| 2.0 / rate),
        probability_50_ns: rate_hz.map(meets),
        statements,
    }
}

fn of_sampling(rate_hz: f64) -> [String; 2] {
    [
        format!(
            "Nothing above {} (half the sample rate) is seen as what it is; the bandwidth of the analog front end \
             ahead of it is not known to this report and may be lower.",
            figures::hertz(rate_hz / 2.0)
        ),
        format!(
            "A pulse of {} or longer meets a sample for certain, of {} two. One of 50 ns is met with a probability \
             of {}, and its height is understated: finding none says nothing about such pulses.",
            figures::seconds(1.0 / rate_hz),
            figures::seconds(2.0 / rate_hz),
            figures::share(meets(rate_hz)),
        ),
    ]
}

fn of_aliases(spectrum: &Spectra) -> Option<String> {
    if spectrum.common.is_none() && spectrum.differential.is_none() {
        return None;
    }
    Some(match spectrum.second_rate_hz {
        None => "Spectra are of one sample rate: any line may be a folded image of one above half the rate, so none \
                 is confirmed. A second recording at another rate would tell."
            .to_string(),
        Some(second_hz) => format!(
            "Lines were checked against folded images by spectra at {}. One that is not confirmed changed meanwhile, \
             or was too weak or too wide to tell.",
            figures::pair_rate(second_hz)
        ),
    })
}

fn of_the_point(recording: &Recording) -> Vec<String> {
    let place = recording
        .point
        .as_ref()
        .map_or_else(|| "The point was not named.".to_string(), |point| format!("The clip was at: {point}."));
    let mut statements = vec![format!(
        "{place} A receiver's range is against its own common, and this report knows the one at the clip: a pass \
         here is no pass elsewhere on the bus."
    )];
    if recording.skew_ns != 0 {
        statements.push(format!(
            "The legs are sampled {} ns apart. Lowest and highest average leave data edges out, where the skew invents \
             peaks; one-sample peaks there are counted as edge suspects and raise no alarm.",
            recording.skew_ns.abs()
        ));
    }
    statements
}

fn of_lost_time(coverage: &Coverage) -> Vec<String> {
    let mut statements = Vec::new();
    if coverage.gap_count > 0 {
        let length =
            coverage.gap_s.map_or_else(String::new, |gap_s| format!(" of {} in all", figures::span(gap_s)));
        statements.push(format!(
            "What happened in {}{length} is not known.",
            figures::counted(coverage.gap_count, "lost interval", "lost intervals")
        ));
    }
    if coverage.gaps_of_unknown_length > 0 {
        statements.push(format!(
            "{} of unknown length: the true coverage is smaller than stated.",
            figures::counted(coverage.gaps_of_unknown_length, "interval is", "intervals are")
        ));
    }
    statements
}

fn of_the_converter(recording: &Recording, judgement: &Judgement) -> Vec<String> {
    let mut statements = Vec::new();
    if judgement.converter.legs.is_empty() {
        statements
            .push("The converter did not describe itself: rails and uncertainty are not known.".to_string());
    }
    if judgement.converter.are_rails_inside_limits == Some(true) {
        statements.push(
            "A rail of the converter lies inside the limits: a voltage beyond the limit on that side cannot be read, \
             only seen as clipping."
                .to_string(),
        );
    }
    if recording.clipped_samples > 0 {
        statements.push(format!(
            "{} at a converter rail: true extremes may lie further out than any number here.",
            figures::counted(recording.clipped_samples, "pair was", "pairs were")
        ));
    }
    statements
}
