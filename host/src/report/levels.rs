//! The levels audit: what the pair rests at, what drivers reach, and what a receiver makes of it.
//!
//! Each interval brings its own levels; a night's level is the median over intervals, each weighted
//! by the samples found at that level, so that one odd interval moves nothing. Thresholds come from
//! the receiver table.

use super::ReportError;
use super::bias;
use super::figures::{self, volts_of_twice_uv, volts_of_uv};
use super::model::{LevelJudgement, LevelSpread, Levels};
use legwise_protocol::receivers::{Decision, Receiver, ReceiverId, Threshold};
use rusqlite::{Connection, Row};

/// Mean of the legs at rest on high-speed CAN, V: recessive 2.0 to 3.0 V per wire (TI TCAN1044V and
/// SN65HVD23x data sheets).
const CAN_RECESSIVE_CM_V: (f64, f64) = (2.0, 3.0);

/// What an undriven pair of this kind should rest at.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
enum Rest {
    /// Beyond a threshold, held there by bias.
    Biased,
    /// Where it reads as the low (recessive) state.
    Low,
    /// At 0 V, which no receiver takes for data.
    Zero,
}

const fn rest(id: ReceiverId) -> Option<Rest> {
    match id {
        ReceiverId::Tia485A
        | ReceiverId::Tia422B
        | ReceiverId::V11
        | ReceiverId::Lvds644A
        | ReceiverId::MlvdsType1 => Some(Rest::Biased),
        ReceiverId::CanHighSpeed2003
        | ReceiverId::CanHighSpeed2016
        | ReceiverId::J1939
        | ReceiverId::CanFaultTolerant
        | ReceiverId::MlvdsType2 => Some(Rest::Low),
        ReceiverId::FlexRay | ReceiverId::Mil1553B | ReceiverId::Mbp => Some(Rest::Zero),
        ReceiverId::Custom => None,
    }
}

const fn is_high_speed_can(id: ReceiverId) -> bool {
    matches!(id, ReceiverId::CanHighSpeed2003 | ReceiverId::CanHighSpeed2016 | ReceiverId::J1939)
}

/// One level over all intervals: (value, samples at it).
#[derive(Debug, Default)]
struct Series(Vec<(i64, u64)>);

impl Series {
    fn push(&mut self, value: Option<i64>, samples: Option<i64>) {
        if let (Some(value), Some(samples @ 1..)) = (value, samples) {
            self.0.push((value, samples.unsigned_abs()));
        }
    }

    /// Median weighted by samples. Sorts.
    fn median(&mut self) -> Option<i64> {
        self.0.sort_unstable();
        let half = self.samples().div_ceil(2);
        let mut passed = 0;
        self.0.iter().find_map(|&(value, samples)| {
            passed += samples;
            (passed >= half).then_some(value)
        })
    }

    /// 5 and 95 % of the intervals, by nearest rank; after [`Self::median`] has sorted.
    fn spread(&self, to_volts: impl Fn(i64) -> f64) -> Option<LevelSpread> {
        let rank = |percent: usize| (self.0.len() * percent).div_ceil(100).saturating_sub(1);
        let at = |percent| self.0.get(rank(percent)).map(|&(value, _)| to_volts(value));
        Some(LevelSpread { p5_v: at(5)?, p95_v: at(95)? })
    }

    fn samples(&self) -> u64 {
        self.0.iter().map(|(_, samples)| samples).sum()
    }
}

/// Everything the table holds.
#[derive(Debug, Default)]
struct Table {
    intervals: u64,
    samples: u64,
    mid_samples: u64,
    idle: Series,
    high: Series,
    low: Series,
    cm_idle: Series,
    cm_high: Series,
    cm_low: Series,
}

impl Table {
    fn take(&mut self, row: &Row<'_>) -> rusqlite::Result<()> {
        self.intervals += 1;
        self.samples += row.get::<_, i64>(0)?.max(0).unsigned_abs();
        self.mid_samples += row.get::<_, i64>(1)?.max(0).unsigned_abs();
        let series = [
            &mut self.idle,
            &mut self.high,
            &mut self.low,
            &mut self.cm_idle,
            &mut self.cm_high,
            &mut self.cm_low,
        ];
        for (position, series) in series.into_iter().enumerate() {
            series.push(row.get(2 + 2 * position)?, row.get(3 + 2 * position)?);
        }
        Ok(())
    }
}

/// Reads and judges the levels of all runs.
pub(crate) fn read(connection: &Connection, receiver: Option<&Receiver>) -> Result<Levels, ReportError> {
    let mut statement = connection.prepare(
        "SELECT samples, mid_samples, idle_uv, idle_samples, high_uv, high_samples, low_uv, low_samples,
                cm_idle_twice_uv, cm_idle_samples, cm_high_twice_uv, cm_high_samples,
                cm_low_twice_uv, cm_low_samples FROM levels",
    )?;
    let mut rows = statement.query([])?;
    let mut table = Table::default();
    while let Some(row) = rows.next()? {
        table.take(row)?;
    }
    let share = |samples: u64| (table.samples > 0).then(|| samples as f64 / table.samples as f64);
    let mut levels = Levels {
        intervals: table.intervals,
        idle_share: share(table.idle.samples()),
        driven_share: share(table.high.samples() + table.low.samples()),
        mid_level_share: share(table.mid_samples),
        idle_v: table.idle.median().map(volts_of_uv),
        driven_high_v: table.high.median().map(volts_of_uv),
        driven_low_v: table.low.median().map(volts_of_uv),
        cm_idle_v: table.cm_idle.median().map(volts_of_twice_uv),
        cm_driven_high_v: table.cm_high.median().map(volts_of_twice_uv),
        cm_driven_low_v: table.cm_low.median().map(volts_of_twice_uv),
        idle_spread: table.idle.spread(volts_of_uv),
        driven_high_spread: table.high.spread(volts_of_uv),
        driven_low_spread: table.low.spread(volts_of_uv),
        cm_idle_spread: table.cm_idle.spread(volts_of_twice_uv),
        judgements: Vec::new(),
        bias_candidates: Vec::new(),
        driven_hint: None,
    };
    levels.judgements = judge(&levels, receiver);
    let is_biased_by_resistors = receiver
        .is_none_or(|row| matches!(row.id, ReceiverId::Tia485A | ReceiverId::Tia422B | ReceiverId::V11));
    if let (true, Some(idle_v)) = (is_biased_by_resistors, levels.idle_v) {
        levels.bias_candidates = bias::candidates(idle_v);
        levels.driven_hint = bias::driven_hint(&levels.bias_candidates, driven_size_v(&levels));
    }
    Ok(levels)
}

/// Mean size of the driven levels seen, V.
fn driven_size_v(levels: &Levels) -> Option<f64> {
    let sizes: Vec<f64> =
        [levels.driven_high_v, levels.driven_low_v].into_iter().flatten().map(f64::abs).collect();
    (!sizes.is_empty()).then(|| sizes.iter().sum::<f64>() / sizes.len() as f64)
}

fn judge(levels: &Levels, receiver: Option<&Receiver>) -> Vec<LevelJudgement> {
    let Some(receiver) = receiver else {
        let text = "No decision threshold is known for these limits, so levels are given without judgement.";
        return vec![LevelJudgement { subject: "idle", finding: "not-judged", text: text.to_string() }];
    };
    let threshold = receiver.threshold.value;
    let mut judgements = vec![judge_idle(levels.idle_v, receiver)];
    if levels.driven_high_v.is_none() && levels.driven_low_v.is_none() {
        let text = "No driven level was found: nobody talked, or too briefly to tell.".to_string();
        judgements.push(LevelJudgement { subject: "driven-high", finding: "not-judged", text });
    }
    if let Some(high_v) = levels.driven_high_v {
        judgements.push(judge_driven("driven-high", high_v, Decision::High, threshold));
    }
    if let Some(low_v) = levels.driven_low_v {
        judgements.push(judge_driven("driven-low", low_v, Decision::Low, threshold));
    }
    if let (true, Some(cm_v)) = (is_high_speed_can(receiver.id), levels.cm_idle_v) {
        judgements.push(judge_can_cm(cm_v));
    }
    judgements
}

fn decide(threshold: Threshold, level_v: f64) -> Decision {
    threshold.decide((level_v * 1e6).round() as i32)
}

fn range(threshold: Threshold) -> String {
    format!("{} to {} mV", threshold.low_mv, threshold.high_mv)
}

fn judge_idle(idle_v: Option<f64>, receiver: &Receiver) -> LevelJudgement {
    let subject = "idle";
    let Some(idle_v) = idle_v else {
        let text = "No resting level was found: the pair was driven all the time, or too noisy to tell.";
        return LevelJudgement { subject, finding: "not-judged", text: text.to_string() };
    };
    let threshold = receiver.threshold.value;
    let decision = decide(threshold, idle_v);
    let idle = figures::volts_signed_scaled(idle_v);
    let range = range(threshold);
    let side = if idle_v < 0.0 { "below" } else { "above" };
    let (finding, text) = match (rest(receiver.id), decision) {
        (Some(Rest::Biased), Decision::Undefined) => (
            "weak",
            format!(
                "Idle {idle} lies within {range}, where a receiver may decide either way: bias missing or weak \
                 bias for the terminators. Receivers with a built-in fail-safe bear it."
            ),
        ),
        (Some(Rest::Biased), _) => (
            "good",
            format!(
                "Idle {idle} lies beyond {range}: every receiver decides alike. VA rests {side} VB; that must be \
                 the sign of the stop bit."
            ),
        ),
        (Some(Rest::Low), Decision::Low) => (
            "good",
            format!("Idle {idle} reads as the low (recessive) state, as it should: this bus has no bias."),
        ),
        (Some(Rest::Low), Decision::Undefined) => {
            ("weak", format!("Idle {idle} lies within {range}, where a receiver may decide either way."))
        }
        (Some(Rest::Low), Decision::High) => {
            ("wrong", format!("Idle {idle} reads as the high (dominant) state: held, biased or swapped."))
        }
        (Some(Rest::Zero), Decision::Undefined) => {
            ("good", format!("Idle {idle} lies within {range}, as it should: this pair rests near 0 V."))
        }
        (Some(Rest::Zero), _) => {
            ("wrong", format!("Idle {idle} lies beyond {range}, yet this pair should rest near 0 V."))
        }
        (None, _) => ("not-judged", format!("Idle {idle}.")),
    };
    LevelJudgement { subject, finding, text }
}

fn judge_driven(
    subject: &'static str,
    level_v: f64,
    wanted: Decision,
    threshold: Threshold,
) -> LevelJudgement {
    let decision = decide(threshold, level_v);
    let level = figures::volts_signed_scaled(level_v);
    let name = if wanted == Decision::High { "high" } else { "low" };
    let edge_mv = if wanted == Decision::High { threshold.high_mv } else { threshold.low_mv };
    let (finding, text) = if decision == wanted {
        let beyond_v = (level_v - f64::from(edge_mv) / 1000.0).abs();
        (
            "good",
            format!("Driven {name} {level}: {} beyond the {edge_mv} mV threshold.", figures::volts(beyond_v)),
        )
    } else if decision == Decision::Undefined {
        ("weak", format!("Driven {name} {level} does not reach the {edge_mv} mV threshold."))
    } else {
        ("wrong", format!("Driven {name} {level} reads as the opposite state."))
    };
    LevelJudgement { subject, finding, text }
}

fn judge_can_cm(cm_v: f64) -> LevelJudgement {
    let (low_v, high_v) = CAN_RECESSIVE_CM_V;
    let cm = figures::volts_signed(cm_v);
    let (finding, text) = if (low_v..=high_v).contains(&cm_v) {
        (
            "good",
            format!("At rest the legs average {cm}, inside the {low_v} to {high_v} V of a recessive bus."),
        )
    } else {
        (
            "wrong",
            format!(
                "At rest the legs average {cm}, not {low_v} to {high_v} V: the clip's 0 V is not that of the nodes, \
                 or a node pulls the pair away."
            ),
        )
    };
    LevelJudgement { subject: "cm", finding, text }
}
