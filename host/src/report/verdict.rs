//! The rules that turn margins and counts into a verdict. All of them are in this file.
//!
//! In this order; the first that holds decides:
//!
//! 1. **outside**: any excursion that is not merely an edge suspect, or more pairs outside than edge
//!    suspects account for (an edge suspect is one sample long), or a negative margin.
//! 2. **cannot judge**: no window is defined for the receiver; nothing was examined; a leg stood at
//!    its converter's rail, so that the true voltage, and with it the average, may lie beyond the
//!    limit (had the rail been beyond a terminal limit, rule 1 would have decided).
//! 3. **marginal**: the margin of a window is smaller than 3/19 of its width (3 V of the 19 V of
//!    TIA-485-A; common practice, no source), or smaller than the uncertainty of the reading.
//! 4. **within** otherwise.

use serde::Serialize;

/// A margin below this share of its window is marginal: numerator and denominator.
pub const MARGINAL_SHARE: (i64, i64) = (3, 19);

/// The answer.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum Verdict {
    /// Every reading inside every limit, with room.
    Within,
    /// Inside, with little room.
    Marginal,
    /// A receiver was pushed outside its range.
    Outside,
    /// The log does not allow an answer.
    CannotJudge,
}

/// Which rule decided.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Ground {
    /// Excursions were counted, or a margin is negative.
    BeyondLimit,
    /// The receiver defines no window.
    NoWindow,
    /// No pair was examined.
    NothingExamined,
    /// A leg was at its converter's rail.
    Clipped,
    /// The margin is a small share of the window.
    SmallMargin,
    /// The margin is smaller than its uncertainty.
    MarginUncertain,
    /// Nothing against.
    Clear,
}

impl Ground {
    /// The verdict that follows.
    pub const fn verdict(self) -> Verdict {
        match self {
            Self::BeyondLimit => Verdict::Outside,
            Self::NoWindow | Self::NothingExamined | Self::Clipped => Verdict::CannotJudge,
            Self::SmallMargin | Self::MarginUncertain => Verdict::Marginal,
            Self::Clear => Verdict::Within,
        }
    }
}

/// The margin of one quantity, as the rules need it. Twice microvolts, so that averages are exact.
#[derive(Clone, Copy, Debug)]
pub(crate) struct MarginFact {
    /// Distance left to the limit; negative when beyond.
    pub margin_twice_uv: i64,
    /// Width of the window.
    pub width_uv: i64,
    /// Uncertainty of the reading, µV; `None` when unknown (then rule 3 uses the share alone).
    pub uncertainty_uv: Option<f64>,
}

/// Everything the rules look at.
#[derive(Clone, Copy, Debug)]
pub(crate) struct Evidence<'a> {
    /// Whether any window is defined.
    pub has_window: bool,
    /// Pairs examined.
    pub pairs: u64,
    /// Excursions that are not edge suspects.
    pub excursions: u64,
    /// Pairs outside.
    pub outside_samples: u64,
    /// Edge suspects.
    pub edge_suspects: u64,
    /// Pairs at a rail.
    pub clipped_samples: u64,
    /// All margins.
    pub margins: &'a [MarginFact],
}

/// Applies the rules.
pub(crate) fn judge(evidence: &Evidence<'_>) -> Ground {
    let is_beyond = evidence.excursions > 0
        || evidence.outside_samples > evidence.edge_suspects
        || evidence.margins.iter().any(|fact| fact.margin_twice_uv < 0);
    if is_beyond {
        Ground::BeyondLimit
    } else if !evidence.has_window {
        Ground::NoWindow
    } else if evidence.pairs == 0 || evidence.margins.is_empty() {
        Ground::NothingExamined
    } else if evidence.clipped_samples > 0 {
        Ground::Clipped
    } else if evidence.margins.iter().any(is_small) {
        Ground::SmallMargin
    } else if evidence.margins.iter().any(is_uncertain) {
        Ground::MarginUncertain
    } else {
        Ground::Clear
    }
}

fn is_small(fact: &MarginFact) -> bool {
    let (numerator, denominator) = MARGINAL_SHARE;
    fact.margin_twice_uv * denominator < 2 * fact.width_uv * numerator
}

fn is_uncertain(fact: &MarginFact) -> bool {
    fact.uncertainty_uv.is_some_and(|uncertainty| fact.margin_twice_uv as f64 / 2.0 < uncertainty)
}

#[cfg(test)]
mod tests {
    use super::*;

    fn fact(margin_uv: i64) -> MarginFact {
        MarginFact { margin_twice_uv: 2 * margin_uv, width_uv: 19_000_000, uncertainty_uv: Some(20_000.0) }
    }

    fn ground(change: impl Fn(&mut Evidence<'_>), margins: &[MarginFact]) -> Ground {
        let mut evidence = Evidence {
            has_window: true,
            pairs: 1000,
            excursions: 0,
            outside_samples: 0,
            edge_suspects: 0,
            clipped_samples: 0,
            margins,
        };
        change(&mut evidence);
        judge(&evidence)
    }

    #[test]
    fn three_volts_of_the_485_window_divide_within_from_marginal() {
        assert_eq!(ground(|_| (), &[fact(3_000_000), fact(9_000_000)]), Ground::Clear);
        assert_eq!(ground(|_| (), &[fact(2_999_999), fact(9_000_000)]), Ground::SmallMargin);
    }

    #[test]
    fn a_reading_on_the_limit_is_marginal_and_one_beyond_is_outside() {
        assert_eq!(ground(|_| (), &[fact(0)]).verdict(), Verdict::Marginal);
        assert_eq!(ground(|_| (), &[fact(-1)]).verdict(), Verdict::Outside);
    }

    #[test]
    fn a_margin_below_its_uncertainty_is_marginal_however_narrow_the_window() {
        let wide = MarginFact { uncertainty_uv: Some(4_000_000.0), ..fact(3_500_000) };
        assert_eq!(ground(|_| (), &[wide]), Ground::MarginUncertain);
        assert_eq!(ground(|_| (), &[MarginFact { uncertainty_uv: None, ..wide }]), Ground::Clear);
    }

    #[test]
    fn edge_suspects_alone_do_not_put_a_bus_outside() {
        let margins = [fact(5_000_000)];
        let suspects = |e: &mut Evidence<'_>| (e.outside_samples, e.edge_suspects) = (7, 7);
        assert_eq!(ground(suspects, &margins), Ground::Clear);
        let one_more = |e: &mut Evidence<'_>| (e.outside_samples, e.edge_suspects) = (8, 7);
        assert_eq!(ground(one_more, &margins), Ground::BeyondLimit);
    }

    #[test]
    fn what_cannot_be_judged_is_said_unless_it_is_outside_anyway() {
        let margins = [fact(5_000_000)];
        assert_eq!(ground(|e| e.has_window = false, &[]), Ground::NoWindow);
        assert_eq!(ground(|e| e.pairs = 0, &margins), Ground::NothingExamined);
        assert_eq!(ground(|e| e.clipped_samples = 1, &margins), Ground::Clipped);
        assert_eq!(ground(|e| (e.clipped_samples, e.excursions) = (1, 1), &margins), Ground::BeyondLimit);
        for ground in [Ground::NoWindow, Ground::NothingExamined, Ground::Clipped] {
            assert_eq!(ground.verdict(), Verdict::CannotJudge);
        }
    }

    #[test]
    fn verdicts_are_spelled_as_documented() {
        let spelled = |verdict: Verdict| serde_json::to_value(verdict).unwrap();
        assert_eq!(spelled(Verdict::Within), "within");
        assert_eq!(spelled(Verdict::Marginal), "marginal");
        assert_eq!(spelled(Verdict::Outside), "outside");
        assert_eq!(spelled(Verdict::CannotJudge), "cannot-judge");
    }
}
