//! Axes: where a value lies, where the ticks are, and what is written beside them.
//!
//! A logarithmic axis puts `v` at `from + (to − from)·log(v/low)/log(high/low)`, a linear one at
//! `from + (to − from)·(v − low)/(high − low)`. Places are in px and may run either way.

use crate::report::figures;

/// What an axis does with values.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Scale {
    /// Equal distance for equal ratio; values are above 0.
    Logarithmic,
    /// Equal distance for equal difference.
    Linear,
}

/// An axis: a range of values on a range of places.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Axis {
    /// Kind of axis.
    pub scale: Scale,
    /// Lowest value.
    pub low: f64,
    /// Highest value.
    pub high: f64,
    /// Place of the lowest value, px.
    pub from_px: f64,
    /// Place of the highest value, px.
    pub to_px: f64,
}

/// A mark on an axis.
#[derive(Clone, Debug, PartialEq)]
pub struct Tick {
    /// Where, as a value.
    pub value: f64,
    /// What stands there; `None` for a minor one.
    pub label: Option<String>,
}

impl Axis {
    /// Place of a value, px; values beyond the ends lie at them.
    pub fn place_px(&self, value: f64) -> f64 {
        let share = match self.scale {
            Scale::Logarithmic if value <= 0.0 => 0.0,
            Scale::Logarithmic => (value / self.low).ln() / (self.high / self.low).ln(),
            Scale::Linear => (value - self.low) / (self.high - self.low),
        };
        self.from_px + share.clamp(0.0, 1.0) * (self.to_px - self.from_px)
    }

    /// Whether a value lies on the axis.
    pub fn holds(&self, value: f64) -> bool {
        (self.low..=self.high).contains(&value)
    }

    /// Ticks of a logarithmic axis: powers of ten with a label, 2 to 9 times these without.
    pub fn decades(&self, label: impl Fn(f64) -> String) -> Vec<Tick> {
        let (first, last) = (self.low.log10().floor() as i32, self.high.log10().ceil() as i32);
        let mut ticks = Vec::new();
        for decade in first..=last {
            for step in 1..10 {
                let value = f64::from(step) * figures::power_of_ten(decade);
                if self.holds(value) {
                    ticks.push(Tick { value, label: (step == 1).then(|| label(value)) });
                }
            }
        }
        ticks
    }

    /// Ticks of a linear axis, every `step`, each with a label.
    pub fn steps(&self, step: f64, label: impl Fn(f64) -> String) -> Vec<Tick> {
        let (first, last) = ((self.low / step).ceil() as i64, (self.high / step).floor() as i64);
        (first..=last)
            .map(|count| {
                let value = count as f64 * step;
                Tick { value, label: Some(label(value)) }
            })
            .collect()
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn equal_ratios_are_equal_distances_and_ends_hold_what_lies_beyond() {
        let axis = Axis { scale: Scale::Logarithmic, low: 0.1, high: 1e6, from_px: 100.0, to_px: 800.0 };
        for decade in 0..8 {
            let place = axis.place_px(0.1 * 10_f64.powi(decade));
            assert!((place - (100.0 + 100.0 * f64::from(decade))).abs() < 1e-9, "{decade}: {place}");
        }
        // log10(2) of a decade.
        assert!((axis.place_px(2.0) - 200.0 - 30.103).abs() < 1e-3);
        assert_eq!((axis.place_px(0.0), axis.place_px(1e-3), axis.place_px(1e9)), (100.0, 100.0, 800.0));
        let down = Axis { from_px: 500.0, to_px: 100.0, ..axis };
        assert!(down.place_px(10.0) > down.place_px(100.0));
    }

    #[test]
    fn a_linear_axis_puts_zero_decibels_where_they_belong() {
        let axis = Axis { scale: Scale::Linear, low: -80.0, high: 20.0, from_px: 300.0, to_px: 100.0 };
        assert_eq!((axis.place_px(0.0), axis.place_px(-80.0), axis.place_px(-30.0)), (140.0, 300.0, 200.0));
        let labels: Vec<String> =
            axis.steps(20.0, |value| format!("{value}")).into_iter().filter_map(|tick| tick.label).collect();
        assert_eq!(labels, ["-80", "-60", "-40", "-20", "0", "20"]);
    }

    #[test]
    fn decades_are_labelled_and_what_lies_between_is_not() {
        let axis = Axis { scale: Scale::Logarithmic, low: 0.5, high: 3e3, from_px: 0.0, to_px: 1.0 };
        let ticks = axis.decades(|value| figures::tick(value, "Hz"));
        let labels: Vec<&str> = ticks.iter().filter_map(|tick| tick.label.as_deref()).collect();
        assert_eq!(labels, ["1 Hz", "10 Hz", "100 Hz", "1 kHz"]);
        // 0.5 to 0.9, thrice 2 to 9, 2000 and 3000.
        assert_eq!(ticks.len() - labels.len(), 5 + 24 + 2);
        assert!(ticks.windows(2).all(|pair| pair[0].value < pair[1].value));
    }
}
