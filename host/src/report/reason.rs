//! The verdict's reason in one sentence.

use super::account::Account;
use super::excursions::{limit_name, limit_uv};
use super::figures;
use super::margins::{Judgement, Rules};
use super::model::Margin;
use super::verdict::Ground;
use legwise_protocol::limits::Limit;

/// Words for a quantity of the margins table.
pub(crate) fn quantity_words(quantity: &str) -> &'static str {
    match quantity {
        "leg-a-high" => "leg A, upper limit",
        "leg-a-low" => "leg A, lower limit",
        "leg-b-high" => "leg B, upper limit",
        "leg-b-low" => "leg B, lower limit",
        "average-high" => "average, upper limit",
        "average-low" => "average, lower limit",
        _ => "unknown quantity",
    }
}

/// Why the verdict is what it is.
pub(crate) fn sentence(judgement: &Judgement, account: &Account, rules: &Rules) -> String {
    let nearest = judgement.table.iter().min_by(|a, b| a.margin_v.total_cmp(&b.margin_v));
    match judgement.ground {
        Ground::BeyondLimit => beyond(nearest, account),
        Ground::NoWindow if !rules.is_known => {
            "The log does not say which limits were watched, so there is nothing to judge by.".to_string()
        }
        Ground::NoWindow => "This receiver has no window against a common, so its range cannot be judged; \
                             levels and spectra below still hold."
            .to_string(),
        Ground::NothingExamined => "Not one sample pair was examined.".to_string(),
        Ground::Clipped => format!(
            "{} stood at a rail of the converter, so how far the legs really went is not known; \
             a front end with a wider range is needed.",
            figures::counted(account.clipped, "pair", "pairs")
        ),
        Ground::SmallMargin => nearest.map_or_else(String::new, |margin| {
            format!(
                "No reading was outside, but only {} were left at {}: less than 3/19 of the window ({}).",
                figures::volts(margin.margin_v),
                quantity_words(margin.quantity),
                figures::volts(marginal_below_v(margin, rules)),
            )
        }),
        Ground::MarginUncertain => {
            let uncertain = judgement.table.iter().find(|margin| {
                margin.uncertainty_v.is_some_and(|uncertainty_v| margin.margin_v < uncertainty_v)
            });
            uncertain.map_or_else(String::new, |margin| {
                format!(
                    "No reading was outside, but the {} left at {} are less than the uncertainty of the reading.",
                    figures::volts(margin.margin_v),
                    quantity_words(margin.quantity),
                )
            })
        }
        Ground::Clear => nearest.map_or_else(String::new, |margin| {
            format!(
                "Every reading stayed inside its limit by {} or more; the nearest was {}.",
                figures::volts(margin.margin_v),
                quantity_words(margin.quantity),
            )
        }),
    }
}

fn beyond(nearest: Option<&Margin>, account: &Account) -> String {
    let often = if account.excursions > 0 {
        format!("The legs went outside {}", figures::counted(account.excursions, "time", "times"))
    } else {
        format!("{} lie outside", figures::counted(account.outside, "pair", "pairs"))
    };
    let long = account.outside_s.map_or_else(
        || format!(", for {}", figures::counted(account.outside, "pair", "pairs")),
        |seconds| format!(", for {} in all", figures::seconds(seconds)),
    );
    let far = nearest.filter(|margin| margin.margin_v < 0.0).map_or_else(String::new, |margin| {
        format!(
            "; furthest at {}: {}, which is {} beyond.",
            quantity_words(margin.quantity),
            figures::volts_signed(margin.worst_v),
            figures::volts(-margin.margin_v),
        )
    });
    let end = if far.is_empty() { "; by the limits that were watched then." } else { far.as_str() };
    format!("{often}{long}{end}")
}

fn marginal_below_v(margin: &Margin, rules: &Rules) -> f64 {
    let limit = Limit::ALL.into_iter().find(|&limit| limit_name(limit) == margin.quantity);
    let window = limit.and_then(|limit| {
        limit_uv(rules.limits, limit)?;
        if limit.is_average() { rules.limits.average } else { rules.limits.terminal }
    });
    let (numerator, denominator) = super::verdict::MARGINAL_SHARE;
    window
        .map_or(0.0, |window| figures::volts_of_uv(window.width_uv()) * numerator as f64 / denominator as f64)
}
