//! What is said while a log grows: one line per flagged event, and a line of state.

use crate::report::figures;
use legwise_protocol::framing::DeviceFrame;
use legwise_protocol::limits::{Limit, LimitMask};
use legwise_protocol::message::{Breach, EndCause, GapCause, Message, Part, Totals};
use legwise_protocol::units::Span;

/// Event lines beyond this many are only counted.
const MOST_LINES: u64 = 24;

/// Follows the frames of one run.
#[derive(Debug, Default)]
pub struct LiveView {
    rate_hz: f64,
    lines: u64,
    unprinted: u64,
    excursions: u64,
    pairs: u64,
    leg_span: Span,
    cm_span: Span,
}

impl LiveView {
    /// The line a frame deserves, if any.
    pub fn line(&mut self, frame: &DeviceFrame) -> Option<String> {
        let text = self.describe(&frame.message)?;
        self.lines += 1;
        if self.lines > MOST_LINES {
            self.unprinted += 1;
            return None;
        }
        Some(text)
    }

    /// How many event lines were only counted, as a sentence; `None` when none.
    pub fn unprinted(&self) -> Option<String> {
        (self.unprinted > 0)
            .then(|| format!("... and {} more events, all in the log", figures::count(self.unprinted)))
    }

    /// One line of state.
    pub fn state(&self) -> String {
        if self.pairs == 0 {
            return "no readings yet".to_owned();
        }
        format!(
            "{} pairs   legs {} .. {}   common mode {} .. {}   {}",
            figures::count(self.pairs),
            figures::volts_signed(f64::from(self.leg_span.low) * 1e-6),
            figures::volts_signed(f64::from(self.leg_span.high) * 1e-6),
            figures::volts_signed(f64::from(self.cm_span.low) * 0.5e-6),
            figures::volts_signed(f64::from(self.cm_span.high) * 0.5e-6),
            figures::counted(self.excursions, "excursion", "excursions"),
        )
    }

    fn describe(&mut self, message: &Message) -> Option<String> {
        match message {
            Message::Hello(hello) => {
                self.rate_hz = hello.sample_rate_mhz as f64 * 1e-3;
                None
            }
            Message::Summary(summary) => {
                self.pairs += u64::from(summary.samples);
                self.leg_span.merge(summary.leg_a);
                self.leg_span.merge(summary.leg_b);
                self.cm_span.merge(summary.twice_cm);
                None
            }
            Message::Totals(totals) => {
                self.take_totals(totals);
                None
            }
            Message::End(end) => {
                self.take_totals(&end.totals);
                (end.cause == EndCause::Stopped).then(|| "the board has stopped as asked".to_owned())
            }
            Message::Excursion(excursion) if excursion.is_edge_suspect => None,
            Message::Excursion(excursion) => Some(format!(
                "{}  outside for {}: {}{}",
                self.moment(excursion.first_sample),
                self.length(u64::from(excursion.samples)),
                breach(&excursion.breach),
                match excursion.part {
                    Part::Whole => "",
                    Part::Begin => ", and still outside",
                    Part::Middle => ", still outside",
                    Part::Finish => ", now back inside",
                },
            )),
            Message::Storm(storm) => Some(format!(
                "{}  {} within {}: {}",
                self.moment(storm.first_sample),
                figures::counted(u64::from(storm.excursions), "more excursion", "more excursions"),
                self.length(storm.samples),
                breach(&storm.breach),
            )),
            Message::Gap(gap) => Some(format!(
                "{}  not examined for {}: {}",
                self.moment(gap.first_sample),
                self.length(gap.samples),
                match gap.cause {
                    GapCause::Overrun => "the sampler overran",
                    GapCause::Skipped => "the source skipped samples",
                    GapCause::Stopped => "the monitor was stopped",
                    GapCause::Resynchronised => "the channel order had to be found again",
                },
            )),
            Message::Loss(loss) => Some(format!(
                "the board had to give up {} and {}; counts stay exact",
                figures::counted(loss.snippet_parts.into(), "waveform part", "waveform parts"),
                figures::counted(loss.records.into(), "record", "records"),
            )),
            Message::Settings(_)
            | Message::Snippet(_)
            | Message::Levels(_)
            | Message::Spectrum(_)
            | Message::Spectra(_)
            | Message::Rate(_)
            | Message::Reply(_) => None,
        }
    }

    fn take_totals(&mut self, totals: &Totals) {
        self.excursions = totals.excursions;
    }

    fn moment(&self, sample: u64) -> String {
        if self.rate_hz > 0.0 {
            format!("at {}", figures::seconds(sample as f64 / self.rate_hz))
        } else {
            format!("at sample {sample}")
        }
    }

    fn length(&self, samples: u64) -> String {
        if self.rate_hz > 0.0 {
            figures::span(samples as f64 / self.rate_hz)
        } else {
            figures::counted(samples, "sample", "samples")
        }
    }
}

/// Which limits were broken and how far it went.
fn breach(breach: &Breach) -> String {
    let clipped = if breach.clipped_samples > 0 { " or more (clipped)" } else { "" };
    format!(
        "{} reached {}{clipped}",
        limit_names(breach.limits),
        figures::volts_signed(f64::from(breach.extreme_twice_uv) * 0.5e-6)
    )
}

fn limit_names(limits: LimitMask) -> String {
    let is_leg = |high: Limit, low: Limit| limits.contains(high) || limits.contains(low);
    let mut names = Vec::new();
    match (is_leg(Limit::LegAHigh, Limit::LegALow), is_leg(Limit::LegBHigh, Limit::LegBLow)) {
        (true, true) => names.push("both legs"),
        (true, false) => names.push("leg A"),
        (false, true) => names.push("leg B"),
        (false, false) => {}
    }
    if is_leg(Limit::AverageHigh, Limit::AverageLow) {
        names.push("common mode");
    }
    names.join(" and ")
}
