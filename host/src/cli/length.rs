//! How long a night lasts: until Ctrl-C, for so many hours, or until a time of day.

use anyhow::Context;
use clap::Args;
use jiff::civil::Time;
use jiff::{Span, Timestamp, ToSpan, ZonedDateTime};

/// When logging ends by itself.
#[derive(Debug, Default, Args)]
#[group(multiple = false)]
pub struct LengthArguments {
    /// End after so many hours
    #[arg(long, value_name = "HOURS")]
    hours: Option<f64>,
    /// End at a local time of day, today or tomorrow, such as 06:00
    #[arg(long, value_name = "HH:MM")]
    until: Option<String>,
}

impl LengthArguments {
    /// The instant at which to end, told from `now`; `None` for a night that Ctrl-C ends.
    ///
    /// # Errors
    /// When the length is no number above 0, or the time of day is none.
    pub fn end(&self, now: &ZonedDateTime) -> anyhow::Result<Option<Timestamp>> {
        if let Some(hours) = self.hours {
            anyhow::ensure!(
                hours > 0.0 && hours <= 1e5,
                "could not log for {hours} hours; try a number above 0, such as --hours 12"
            );
            let span = Span::new().try_milliseconds((hours * 3.6e6) as i64)?;
            return Ok(Some(now.timestamp().checked_add(span)?));
        }
        let Some(text) = &self.until else { return Ok(None) };
        let advice = || format!("could not read '{text}' as a time of day; try one such as --until 06:00");
        let time: Time = text.parse().with_context(advice)?;
        // In the local calendar, so that a night with a change of the clocks ends when the clock says so.
        let today = now.date().to_datetime(time).to_zoned_datetime(now.time_zone().clone())?;
        let end = if today > *now {
            today
        } else {
            let tomorrow = now.date().checked_add(1.day())?;
            tomorrow.to_datetime(time).to_zoned_datetime(now.time_zone().clone())?
        };
        Ok(Some(end.timestamp()))
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn end(hours: Option<f64>, until: Option<&str>, now: &str) -> anyhow::Result<Option<String>> {
        let now: ZonedDateTime = now.parse().unwrap();
        let length = LengthArguments { hours, until: until.map(str::to_owned) };
        Ok(length.end(&now)?.map(|end| end.to_zoned_datetime(now.time_zone().clone()).to_string()))
    }

    #[test]
    fn a_time_of_day_is_today_or_tomorrow_and_hours_are_hours() {
        let evening = "2026-12-01T18:00:00+01:00[Europe/Berlin]";
        let told = |hours, until| end(hours, until, evening).unwrap();
        assert_eq!(told(None, None), None);
        assert_eq!(told(None, Some("06:00")).unwrap(), "2026-12-02T06:00:00+01:00[Europe/Berlin]");
        assert_eq!(told(None, Some("22:30")).unwrap(), "2026-12-01T22:30:00+01:00[Europe/Berlin]");
        assert_eq!(told(None, Some("18:00")).unwrap(), "2026-12-02T18:00:00+01:00[Europe/Berlin]");
        assert_eq!(told(Some(0.5), None).unwrap(), "2026-12-01T18:30:00+01:00[Europe/Berlin]");
    }

    /// Clocks go back an hour at 03:00 on 25 October 2026 (EU summer time, directive 2000/84/EC): that night
    /// has an hour more.
    #[test]
    fn a_night_in_which_the_clocks_change_ends_by_the_clock() {
        let evening = "2026-10-24T18:00:00+02:00[Europe/Berlin]";
        assert_eq!(
            end(None, Some("06:00"), evening).unwrap().unwrap(),
            "2026-10-25T06:00:00+01:00[Europe/Berlin]"
        );
        assert_eq!(
            end(Some(12.0), None, evening).unwrap().unwrap(),
            "2026-10-25T05:00:00+01:00[Europe/Berlin]"
        );
    }

    #[test]
    fn lengths_that_are_none_are_refused_with_advice() {
        let now = "2026-12-01T18:00:00+00:00[UTC]";
        for (hours, until) in
            [(Some(0.0), None), (Some(f64::NAN), None), (None, Some("25:00")), (None, Some("dawn"))]
        {
            let error = end(hours, until, now).unwrap_err().to_string();
            assert!(error.contains("try"), "{error}");
        }
    }
}
