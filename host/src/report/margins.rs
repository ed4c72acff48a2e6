//! Margins: how far each reading stayed from each limit, with its uncertainty.
//!
//! Uncertainty of a leg reading V: `gain · |V| + offset + half a code`, from the scale of the run it
//! was taken in. The average takes the mean of both legs' terms, with the larger of |CM| and |DM|/2
//! for |V|: gain errors of opposite sign add up to that.

use super::account::{Account, Reading};
use super::excursions::{limit_name, limit_uv};
use super::figures::{rounded_volts, volts_of_twice_uv, volts_of_uv};
use super::model::{Converter, Judged, LegPart, Margin, ReceiverUsed, WindowUsed, WindowVerdict, Worst};
use super::runs::Run;
use super::times::Calendar;
use super::verdict::{self, Evidence, Ground, MARGINAL_SHARE, MarginFact};
use legwise_protocol::limits::{Limit, LimitSet, Window};
use legwise_protocol::message::LegScale;
use legwise_protocol::receivers::{self, Receiver, Sourced, Standing};

/// The limits judged by: those in force last.
pub(crate) struct Rules {
    /// The table's row; `None` for limits of the user's own, or when the log does not say.
    pub receiver: Option<&'static Receiver>,
    pub limits: LimitSet,
    /// Whether the log says what was watched at all.
    pub is_known: bool,
    /// Whether the windows differ from the table's.
    pub is_custom: bool,
    pub pairs_under_other_limits: u64,
}

impl Rules {
    pub(crate) fn of(runs: &[Run]) -> Self {
        let last = runs.iter().rev().find_map(|run| run.settings.last()).map(|(_, settings)| settings);
        let limits = last.map_or(LimitSet::default(), |settings| settings.limits);
        let receiver = last.and_then(|settings| receivers::by_id(settings.receiver));
        Self {
            receiver,
            limits,
            is_known: last.is_some(),
            is_custom: last.is_some() && receiver.is_none_or(|receiver| receiver.limits() != limits),
            pairs_under_other_limits: runs.iter().map(|run| pairs_under_other(run, limits)).sum(),
        }
    }
}

/// Pairs of `run` examined while limits other than `limits` were in force (gaps inside counted along).
fn pairs_under_other(run: &Run, limits: LimitSet) -> u64 {
    let ends = run.settings.iter().skip(1).map(|(from, _)| *from).chain([run.end_sample()]);
    let epochs = run.settings.iter().zip(ends);
    let others = epochs.filter(|((_, settings), _)| settings.limits != limits);
    let lengths = others.map(|((from, _), to)| to.saturating_sub((*from).max(run.first_sample())));
    lengths.sum::<u64>().min(run.pairs())
}

/// Everything that follows from readings and limits.
pub(crate) struct Judgement {
    pub ground: Ground,
    pub table: Vec<Margin>,
    pub judged: Judged,
    pub worst: Worst,
    pub converter: Converter,
}

/// Judges the account by the rules.
pub(crate) fn judge(rules: &Rules, account: &Account, runs: &[Run], calendar: &Calendar<'_>) -> Judgement {
    let facts: Vec<(Limit, Reading, MarginFact)> =
        Limit::ALL.into_iter().filter_map(|limit| fact(limit, rules.limits, account, runs)).collect();
    let table = facts.iter().map(|item| margin(item, rules.limits, account, calendar)).collect();
    let margins: Vec<MarginFact> = facts.iter().map(|(_, _, fact)| *fact).collect();
    let smallest = facts.iter().min_by_key(|(_, _, fact)| fact.margin_twice_uv);
    let extreme = |reading: Option<Reading>| reading.map(|reading| volts_of_twice_uv(reading.twice_uv));
    let larger = |a: Option<f64>, b: Option<f64>| a.into_iter().chain(b).reduce(f64::max);
    let smaller = |a: Option<f64>, b: Option<f64>| a.into_iter().chain(b).reduce(f64::min);
    Judgement {
        ground: verdict::judge(&Evidence {
            has_window: !rules.limits.is_empty(),
            pairs: account.pairs,
            excursions: account.excursions,
            outside_samples: account.outside,
            edge_suspects: account.edge_suspects,
            clipped_samples: account.clipped,
            margins: &margins,
        }),
        table,
        judged: Judged {
            terminal: rules.limits.terminal.map(|window| window_verdict(window, false, &facts, account)),
            average: rules.limits.average.map(|window| window_verdict(window, true, &facts, account)),
        },
        worst: Worst {
            leg_max_v: larger(extreme(account.leg_a.high), extreme(account.leg_b.high)),
            leg_min_v: smaller(extreme(account.leg_a.low), extreme(account.leg_b.low)),
            cm_max_v: extreme(account.cm.high),
            cm_min_v: extreme(account.cm.low),
            dm_max_v: extreme(account.dm.high),
            dm_min_v: extreme(account.dm.low),
            margin_v: smallest.map(|(_, _, fact)| volts_of_twice_uv(fact.margin_twice_uv)),
            margin_uncertainty_v: smallest.and_then(|(_, _, fact)| fact.uncertainty_uv).map(uv_to_volts),
            quantity: smallest.map(|(limit, _, _)| limit_name(*limit)),
            moment: smallest.map(|(_, reading, _)| moment(calendar, reading)),
        },
        converter: converter(rules, runs),
    }
}

fn fact(
    limit: Limit,
    limits: LimitSet,
    account: &Account,
    runs: &[Run],
) -> Option<(Limit, Reading, MarginFact)> {
    let limit_twice_uv = 2 * limit_uv(limits, limit)?;
    let window = if limit.is_average() { limits.average } else { limits.terminal }?;
    let reading = account.reading(limit)?;
    let distance = limit_twice_uv - reading.twice_uv;
    let margin_twice_uv = if limit.is_high() { distance } else { -distance };
    let uncertainty_uv = uncertainty_uv(limit, &reading, account, runs);
    Some((limit, reading, MarginFact { margin_twice_uv, width_uv: window.width_uv(), uncertainty_uv }))
}

fn uncertainty_uv(limit: Limit, reading: &Reading, account: &Account, runs: &[Run]) -> Option<f64> {
    let [leg_a, leg_b] = runs.iter().find(|run| run.number == reading.run)?.legs?;
    let volts_uv = reading.twice_uv.abs() as f64 / 2.0;
    Some(match limit {
        Limit::LegAHigh | Limit::LegALow => leg_uncertainty_uv(&leg_a, volts_uv),
        Limit::LegBHigh | Limit::LegBLow => leg_uncertainty_uv(&leg_b, volts_uv),
        Limit::AverageHigh | Limit::AverageLow => {
            let ends = [account.dm.low, account.dm.high].into_iter().flatten();
            let half_dm_uv = ends.map(|end| end.twice_uv.abs() as f64 / 4.0).fold(0.0, f64::max);
            let size_uv = volts_uv.max(half_dm_uv);
            (leg_uncertainty_uv(&leg_a, size_uv) + leg_uncertainty_uv(&leg_b, size_uv)) / 2.0
        }
    })
}

fn leg_uncertainty_uv(leg: &LegScale, size_uv: f64) -> f64 {
    f64::from(leg.gain_uncertainty_ppm) * 1e-6 * size_uv
        + f64::from(leg.offset_uncertainty_uv)
        + code_uv(leg) / 2.0
}

/// Microvolts per code.
fn code_uv(leg: &LegScale) -> f64 {
    f64::from(leg.mantissa).abs() / 2.0_f64.powi(i32::from(leg.shift))
}

/// Microvolts of a code, by the wire's formula (`LegScale`).
fn scaled_uv(leg: &LegScale, code: i32) -> i64 {
    let half = 1_i64 << u32::from(leg.shift.clamp(1, 40)).saturating_sub(1);
    let product = i64::from(code) * i64::from(leg.mantissa);
    (product.saturating_add(half) >> leg.shift.min(63)) + i64::from(leg.offset_uv)
}

fn uv_to_volts(microvolts: f64) -> f64 {
    rounded_volts(microvolts / 1e6)
}

fn moment(calendar: &Calendar<'_>, reading: &Reading) -> super::model::Moment {
    calendar.moment(reading.run, reading.sample, reading.within_samples)
}

fn margin(
    (limit, reading, fact): &(Limit, Reading, MarginFact),
    limits: LimitSet,
    account: &Account,
    calendar: &Calendar<'_>,
) -> Margin {
    Margin {
        quantity: limit_name(*limit),
        window: if limit.is_average() { "average" } else { "terminal" },
        limit_v: volts_of_uv(limit_uv(limits, *limit).unwrap_or(0)),
        worst_v: volts_of_twice_uv(reading.twice_uv),
        margin_v: volts_of_twice_uv(fact.margin_twice_uv),
        uncertainty_v: fact.uncertainty_uv.map(uv_to_volts),
        outside_samples: account.outside_by_limit.and_then(|by| by.get(*limit as usize).copied()),
        moment: moment(calendar, reading),
    }
}

fn window_verdict(
    window: Window,
    is_average: bool,
    facts: &[(Limit, Reading, MarginFact)],
    account: &Account,
) -> WindowVerdict {
    let of_window = facts.iter().filter(|(limit, _, _)| limit.is_average() == is_average);
    let margins: Vec<MarginFact> = of_window.map(|(_, _, fact)| *fact).collect();
    let outside_samples = account.outside_by_limit.map_or(0, |by| {
        let counts = Limit::ALL.into_iter().zip(by).filter(|(limit, _)| limit.is_average() == is_average);
        counts.map(|(_, samples)| samples).sum()
    });
    let ground = verdict::judge(&Evidence {
        has_window: true,
        pairs: account.pairs,
        excursions: 0,
        outside_samples,
        edge_suspects: if is_average { account.edge_suspects } else { 0 },
        clipped_samples: account.clipped,
        margins: &margins,
    });
    let (numerator, denominator) = MARGINAL_SHARE;
    let width_v = volts_of_uv(window.width_uv());
    WindowVerdict {
        verdict: ground.verdict(),
        margin_v: margins.iter().map(|fact| fact.margin_twice_uv).min().map(volts_of_twice_uv),
        width_v,
        marginal_below_v: rounded_volts(width_v * numerator as f64 / denominator as f64),
    }
}

fn converter(rules: &Rules, runs: &[Run]) -> Converter {
    let Some(scales) = runs.iter().rev().find_map(|run| run.legs) else {
        return Converter { legs: Vec::new(), are_rails_inside_limits: None };
    };
    let legs = scales.iter().zip(["A", "B"]).map(|(scale, leg)| {
        let ends = [scaled_uv(scale, scale.rail_low_code), scaled_uv(scale, scale.rail_high_code)];
        LegPart {
            leg,
            rail_low_v: volts_of_uv(ends[0].min(ends[1])),
            rail_high_v: volts_of_uv(ends[0].max(ends[1])),
            resolution_v: code_uv(scale) / 1e6,
            gain_uncertainty_ppm: scale.gain_uncertainty_ppm,
            offset_uncertainty_v: volts_of_uv(i64::from(scale.offset_uncertainty_uv)),
        }
    });
    let legs: Vec<LegPart> = legs.collect();
    let window = rules.limits.terminal.or(rules.limits.average);
    let are_rails_inside_limits = window.map(|window| {
        let (low_v, high_v) = (window.low.volts(), window.high.volts());
        legs.iter().any(|leg| leg.rail_low_v >= low_v || leg.rail_high_v <= high_v)
    });
    Converter { legs, are_rails_inside_limits }
}

/// The limits part of the report.
pub(crate) fn receiver_used(rules: &Rules) -> ReceiverUsed {
    let row = rules.receiver;
    let window = |window: Option<Window>, sourced: Option<Sourced<Window>>| {
        window.map(|window| {
            let sourced = sourced.filter(|sourced| sourced.value == window);
            WindowUsed {
                low_v: volts_of_uv(i64::from(window.low.uv())),
                high_v: volts_of_uv(i64::from(window.high.uv())),
                source: sourced.map_or("brought by the user", |sourced| sourced.source),
                standing: sourced.map_or("user", |sourced| standing(sourced.standing)),
            }
        })
    };
    let (name, title, note) = match row {
        Some(row) => (row.name, row.title, row.note),
        None if rules.is_known => ("custom", "limits of the user's own", ""),
        None => ("unknown", "the log does not say what was watched", ""),
    };
    ReceiverUsed {
        name,
        title,
        is_custom: rules.is_custom,
        terminal: window(rules.limits.terminal, row.and_then(|row| row.terminal)),
        average: window(rules.limits.average, row.and_then(|row| row.average)),
        threshold: row.map(|row| WindowUsed {
            low_v: f64::from(row.threshold.value.low_mv) / 1000.0,
            high_v: f64::from(row.threshold.value.high_mv) / 1000.0,
            source: row.threshold.source,
            standing: standing(row.threshold.standing),
        }),
        note,
        pairs_under_other_limits: rules.pairs_under_other_limits,
    }
}

/// How a standing is spelled in JSON.
pub(crate) const fn standing(standing: Standing) -> &'static str {
    match standing {
        Standing::Seen => "seen",
        Standing::FromMemory => "from-memory",
    }
}
