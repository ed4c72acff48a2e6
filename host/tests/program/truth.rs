//! The numbers of a recording, computed once more: from the text of the file, the slow way.
//!
//! * A pair is outside when a leg or the average is strictly beyond its window, in integer (half)
//!   microvolts.
//! * An excursion runs from its first sample outside to its last. It is over when every limit it broke
//!   was kept by the hysteresis (50 mV, at most a hundredth of the narrowest window) for four samples
//!   in a row.
//! * A level is the mean of the samples in the fullest stretch of VA-VB that is as wide as the five
//!   histogram bins of the device (5 * 16.384 mV).

use serde_json::Value;

/// Samples a limit must be kept for.
const HOLD_OFF: usize = 4;
/// Five bins of the device's histogram, µV.
const STRETCH_UV: i64 = 5 * 16_384;

/// What is watched for, microvolts, low then high.
#[derive(Clone, Copy, Debug, Default)]
pub struct Rules {
    pub terminal: Option<(i64, i64)>,
    pub average: Option<(i64, i64)>,
    pub rails: Option<(i64, i64)>,
    pub idle_below: i64,
}

impl Rules {
    /// TIA-485-A: -7 to +12 V for each terminal and for the average (TI SLLA272, The RS-485 Design
    /// Guide); idle up to 0.6 V is common practice, no source.
    pub fn tia485a() -> Self {
        let window = Some((-7_000_000, 12_000_000));
        Self { terminal: window, average: window, rails: None, idle_below: 600_000 }
    }

    /// Twice the distance beyond each limit of a pair; upper and lower of leg A, leg B, average.
    fn beyond_twice(&self, a: i64, b: i64) -> [Option<i64>; 6] {
        let pair = |window: Option<(i64, i64)>, twice: i64| {
            let (low, high) = window.unzip();
            [high.map(|high| twice - 2 * high), low.map(|low| 2 * low - twice)]
        };
        let legs = [pair(self.terminal, 2 * a), pair(self.terminal, 2 * b), pair(self.average, a + b)];
        [legs[0][0], legs[0][1], legs[1][0], legs[1][1], legs[2][0], legs[2][1]]
    }

    fn hysteresis_twice(&self) -> i64 {
        let widths = [self.terminal, self.average].into_iter().flatten().map(|(low, high)| high - low);
        2 * widths.min().map_or(50_000, |width| (width / 100).clamp(1, 50_000))
    }
}

/// A stretch outside.
#[derive(Clone, Debug, PartialEq)]
pub struct Stretch {
    pub first: usize,
    pub last: usize,
    pub outside: u64,
    /// Twice the voltage furthest outside, µV.
    pub extreme_twice: i64,
    pub extreme_sample: usize,
    beyond_twice: i64,
    broken: [bool; 6],
}

/// Both legs in microvolts.
#[derive(Clone, Debug, Default)]
pub struct Pairs {
    pub a: Vec<i64>,
    pub b: Vec<i64>,
}

impl Pairs {
    /// From the text of a comma-separated recording that has nothing but the two legs.
    pub fn from_csv(text: &str) -> Self {
        let mut lines = text.lines();
        assert_eq!(lines.next(), Some("leg_a_v,leg_b_v"));
        let microvolts = |field: &str| (field.parse::<f64>().unwrap() * 1e6).round() as i64;
        let rows = lines.map(|line| line.split_once(',').unwrap());
        let (a, b) = rows.map(|(a, b)| (microvolts(a), microvolts(b))).unzip();
        Self { a, b }
    }

    pub fn len(&self) -> usize {
        self.a.len()
    }

    fn each(&self) -> impl Iterator<Item = (i64, i64)> {
        self.a.iter().copied().zip(self.b.iter().copied())
    }

    fn stretches(&self, rules: &Rules) -> Vec<Stretch> {
        let judged: Vec<[Option<i64>; 6]> = self.each().map(|(a, b)| rules.beyond_twice(a, b)).collect();
        let clear = |n: usize, broken: &[bool; 6]| {
            judged[n].iter().zip(broken).all(|(beyond, &is_broken)| {
                !is_broken || beyond.is_none_or(|beyond| beyond <= -rules.hysteresis_twice())
            })
        };
        let mut stretches: Vec<Stretch> = Vec::new();
        for (n, limits) in judged.iter().enumerate() {
            let worst = (0..6).filter_map(|limit| Some((limits[limit]?, 5 - limit))).max();
            let Some((beyond_twice, limit)) = worst.map(|(beyond, mirrored)| (beyond, 5 - mirrored)) else {
                continue;
            };
            if beyond_twice <= 0 {
                continue;
            }
            let extreme_twice = [2 * self.a[n], 2 * self.b[n], self.a[n] + self.b[n]][limit / 2];
            let broken = limits.map(|beyond| beyond.is_some_and(|beyond| beyond > 0));
            let open = stretches.last_mut().filter(|open| {
                let inside: Vec<bool> = (open.last + 1..n).map(|n| clear(n, &open.broken)).collect();
                !inside.windows(HOLD_OFF).any(|run| run.iter().all(|&is_clear| is_clear))
            });
            match open {
                Some(open) => {
                    open.last = n;
                    open.outside += 1;
                    (0..6).for_each(|limit| open.broken[limit] |= broken[limit]);
                    if beyond_twice > open.beyond_twice {
                        (open.beyond_twice, open.extreme_twice) = (beyond_twice, extreme_twice);
                        open.extreme_sample = n;
                    }
                }
                None => stretches.push(Stretch {
                    first: n,
                    last: n,
                    outside: 1,
                    extreme_twice,
                    extreme_sample: n,
                    beyond_twice,
                    broken,
                }),
            }
        }
        stretches
    }

    /// Smallest distance to any limit, V; negative when outside.
    fn margin_v(&self, rules: &Rules) -> Option<f64> {
        let nearest = self.each().flat_map(|(a, b)| rules.beyond_twice(a, b)).flatten().max()?;
        Some(-nearest as f64 / 2e6)
    }

    fn clipped(&self, rules: &Rules) -> usize {
        let Some((low, high)) = rules.rails else { return 0 };
        self.each().filter(|(a, b)| a <= &low || a >= &high || b <= &low || b >= &high).count()
    }

    /// The fullest stretch of VA-VB among those `keep` lets pass: its mean, V.
    fn level_v(&self, keep: impl Fn(i64) -> bool) -> Option<f64> {
        let mut dm: Vec<i64> = self.each().map(|(a, b)| a - b).filter(|&dm| keep(dm)).collect();
        dm.sort_unstable();
        let mut from = 0;
        let mut fullest = 0..0;
        for to in 0..dm.len() {
            while dm[to] - dm[from] >= STRETCH_UV {
                from += 1;
            }
            if to + 1 - from > fullest.len() {
                fullest = from..to + 1;
            }
        }
        let held = &dm[fullest];
        (!held.is_empty()).then(|| held.iter().sum::<i64>() as f64 / held.len() as f64 / 1e6)
    }

    /// Holds a report against all of it. Voltages of single samples must be exact, levels within
    /// `level_tolerance_v`.
    pub fn assert_told_by(&self, report: &Value, rules: &Rules, level_tolerance_v: f64) {
        let stretches = self.stretches(rules);
        let legs = || self.a.iter().chain(&self.b).copied();
        let sums = || self.each().map(|(a, b)| a + b);
        let volts = |microvolts: Option<i64>| microvolts.map(|value| value as f64 / 1e6);
        assert_eq!(report["recording"]["pairs"], self.len());
        assert_eq!(report["recording"]["clipped_samples"], self.clipped(rules));
        let half = |twice: Option<i64>| volts(twice).map(|volts| volts / 2.0);
        for (key, truth) in [
            ("leg_max_v", volts(legs().max())),
            ("leg_min_v", volts(legs().min())),
            ("cm_max_v", half(sums().max())),
            ("cm_min_v", half(sums().min())),
            ("margin_v", self.margin_v(rules)),
        ] {
            assert_volts(&report["worst"][key], truth, 1e-9, key);
        }
        let outside: u64 = stretches.iter().map(|stretch| stretch.outside).sum();
        assert_eq!(report["excursions"]["samples_outside"], outside);
        assert_eq!(report["excursions"]["count"], stretches.len());
        let list = report["excursions"]["list"].as_array().unwrap();
        assert_eq!(list.len(), stretches.len());
        for (entry, stretch) in list.iter().zip(&stretches) {
            assert_eq!(entry["first_sample"], stretch.first, "{entry}");
            assert_eq!(entry["samples"], stretch.last - stretch.first + 1, "{entry}");
            assert_eq!(entry["outside_samples"], stretch.outside, "{entry}");
            assert_eq!(entry["extreme_sample"], stretch.extreme_sample, "{entry}");
            assert_volts(&entry["extreme_v"], half(volts_twice(stretch)), 1e-9, "extreme_v");
        }
        let idle = rules.idle_below;
        for (key, level_v) in [
            ("idle_v", self.level_v(|dm| dm.abs() <= idle)),
            ("driven_high_v", self.level_v(|dm| dm > idle)),
            ("driven_low_v", self.level_v(|dm| dm < -idle)),
        ] {
            assert_volts(&report["levels"][key], level_v, level_tolerance_v, key);
        }
    }

    /// The excursions, for tests that need to know that there are some.
    pub fn excursions(&self, rules: &Rules) -> usize {
        self.stretches(rules).len()
    }
}

fn volts_twice(stretch: &Stretch) -> Option<i64> {
    Some(stretch.extreme_twice)
}

/// `None` and `null` are the same.
pub fn assert_volts(found: &Value, truth: Option<f64>, tolerance_v: f64, key: &str) {
    match (found.as_f64(), truth) {
        (None, None) => assert!(found.is_null(), "{key}: {found}"),
        (Some(found), Some(truth)) => {
            assert!((found - truth).abs() <= tolerance_v, "{key}: {found} instead of {truth}");
        }
        (found, truth) => panic!("{key}: {found:?} instead of {truth:?}"),
    }
}
