//! A log with chosen rows, and a whole night's example.

use crate::log::{About, Log, Origin};
use crate::report::{Options, Report};
use jiff::tz::{Offset, TimeZone};
use legwise_protocol::cross::BinCodes;
use legwise_protocol::limits::{Limit, LimitMask, LimitSet};
use legwise_protocol::message::{Detection, Extremes, LegScale, Moment, Reporting, Settings, Totals};
use legwise_protocol::power;
use legwise_protocol::receivers::{ReceiverId, by_id};
use rusqlite::params;
use std::f64::consts::PI;

/// Pairs per second of all example runs.
pub const RATE_HZ: f64 = 500_000.0;
/// 2026-03-01 01:00:00 UTC.
pub const START_NS: i64 = 1_772_326_800_000_000_000;

/// A log under construction.
pub struct Fixture {
    pub log: Log,
    number: i64,
}

/// One excursion row; the rest is filled in.
#[derive(Clone, Copy)]
pub struct ExcursionRow {
    pub excursion: i64,
    pub part: i64,
    pub first_sample: i64,
    pub samples: i64,
    pub limit: Limit,
    pub extreme_twice_uv: i64,
    pub edge_suspect: bool,
    pub cut: bool,
}

impl ExcursionRow {
    pub fn whole(
        excursion: i64,
        first_sample: i64,
        samples: i64,
        limit: Limit,
        extreme_twice_uv: i64,
    ) -> Self {
        let (part, edge_suspect, cut) = (0, false, false);
        Self { excursion, part, first_sample, samples, limit, extreme_twice_uv, edge_suspect, cut }
    }
}

/// 12 bits over ±15 V, 0.1 % and 5 mV.
pub fn scale() -> LegScale {
    LegScale {
        mantissa: 7_500_000,
        shift: 10,
        offset_uv: -15_000_000,
        rail_low_code: 0,
        rail_high_code: 4095,
        gain_uncertainty_ppm: 1_000,
        offset_uncertainty_uv: 5_000,
    }
}

pub fn extremes(low: (i32, u64), high: (i32, u64)) -> Extremes {
    let moment = |(value, sample)| Moment { value, sample };
    Extremes { low: moment(low), high: moment(high) }
}

/// Totals of a quiet bus: legs 1 to 4 V, hence the average 2 to 3 V.
pub fn quiet_totals(samples: u64) -> Totals {
    Totals {
        samples,
        leg_a: extremes((1_000_000, 10), (4_000_000, 20)),
        leg_b: extremes((1_100_000, 30), (3_900_000, 40)),
        twice_cm: extremes((4_000_000, 50), (6_000_000, 60)),
        dm: extremes((-2_500_000, 70), (2_600_000, 80)),
        ..Totals::default()
    }
}

impl Fixture {
    pub fn new(origin: Origin, point: Option<&str>) -> Self {
        let about = About {
            origin,
            origin_name: "line 3".to_string(),
            point: point.map(str::to_string),
            tool_version: "0.1.0".to_string(),
            created_utc_ns: START_NS,
            stores_clock: true,
        };
        Self { log: Log::temporary(&about).unwrap(), number: 0 }
    }

    /// A log with one finished run under `receiver`.
    pub fn single(receiver: ReceiverId, totals: &Totals) -> Self {
        let mut fixture = Self::new(Origin::Recording, None);
        fixture.run(1, 0);
        fixture.settings(1, 0, receiver);
        fixture.totals(1, totals, Some("exhausted"));
        fixture
    }

    pub fn sql(&self, sql: &str, values: impl rusqlite::Params) {
        self.log.connection().execute(sql, values).unwrap();
    }

    fn next_number(&mut self) -> i64 {
        self.number += 1;
        self.number
    }

    pub fn run(&mut self, run: i64, skew_ns: i64) {
        self.sql(
            "INSERT INTO run (run, boot_id, wire_version, firmware_version, board, serial, reset_cause,
             sample_rate_mhz, skew_ns, legs) VALUES (?1, ?2, 1, '0.1.0', 'example board', NULL, 'power-on', ?3, ?4, ?5)",
            params![run, 1000 + run, (RATE_HZ * 1000.0) as i64, skew_ns, legs_json()],
        );
    }

    pub fn settings(&mut self, run: i64, sample: i64, receiver: ReceiverId) {
        let limits = by_id(receiver).map_or(LimitSet::default(), |receiver| receiver.limits());
        self.settings_with(run, sample, receiver, limits);
    }

    pub fn settings_with(&mut self, run: i64, sample: i64, receiver: ReceiverId, limits: LimitSet) {
        let settings = Settings {
            receiver,
            limits,
            detection: Detection {
                hysteresis_uv: 100_000,
                hold_off_samples: 16,
                longest_samples: 500_000,
                storm_samples: 500_000,
                storm_after: 16,
                idle_below_uv: 600_000,
                edge_step_uv: 1_000_000,
            },
            reporting: Reporting {
                summary_samples: 250_000,
                levels_samples: 1_000_000,
                spectrum_segments: 100,
                spectrum_skip: 0,
                snippet_before: 256,
                snippet_after: 256,
                snippets_per_window: 4,
            },
        };
        let number = self.next_number();
        let name = by_id(receiver).map_or("custom", |receiver| receiver.name);
        self.sql(
            "INSERT INTO settings VALUES (?1, ?2, ?3, ?4, ?5)",
            params![run, number, sample, name, serde_json::to_string(&settings).unwrap()],
        );
    }

    pub fn totals(&self, run: i64, totals: &Totals, end_cause: Option<&str>) {
        let sample = (totals.first_sample + totals.samples + totals.gap_samples) as i64;
        self.sql(
            "INSERT INTO totals VALUES (?1, ?2, ?3, ?4)",
            params![run, sample, serde_json::to_string(totals).unwrap(), end_cause],
        );
    }

    /// A clock without error: sample 0 at `start_ns`.
    pub fn clock(&self, run: i64, start_ns: i64, seconds: i64) {
        for second in 0..seconds {
            let sample = second * RATE_HZ as i64;
            let ns = second * 1_000_000_000;
            self.sql("INSERT INTO clock VALUES (?1, ?2, ?3, ?4)", params![run, sample, start_ns + ns, ns]);
        }
    }

    pub fn excursion(&mut self, run: i64, row: ExcursionRow) {
        let number = self.next_number();
        self.sql(
            "INSERT INTO excursion VALUES (?1, ?2, ?3, ?4, ?5, ?6, ?7, ?8, ?9, ?5, ?6, 5000000, -2000000, 2100000,
             0, ?10, ?11)",
            params![
                run,
                number,
                row.excursion,
                row.part,
                row.first_sample,
                row.samples,
                LimitMask::only(row.limit).bits(),
                row.limit as u8,
                row.extreme_twice_uv,
                row.edge_suspect,
                row.cut
            ],
        );
    }

    /// A storm of `excursions` from `first_sample` on, average high.
    pub fn storm(&mut self, run: i64, first_sample: i64, (excursions, suspects): (i64, i64), twice_uv: i64) {
        let number = self.next_number();
        self.sql(
            "INSERT INTO storm VALUES (?1, ?2, ?3, ?4, ?5, 10000, ?6, ?7, ?8, ?5, ?3, 4000000, -2000000, 2000000, 3)",
            params![
                run,
                number,
                excursions,
                suspects,
                first_sample,
                LimitMask::only(Limit::AverageHigh).bits(),
                Limit::AverageHigh as u8,
                twice_uv
            ],
        );
    }

    pub fn snippet(&mut self, run: i64, excursion: i64, first_sample: i64) {
        let number = self.next_number();
        self.sql(
            "INSERT INTO snippet VALUES (?1, ?2, ?3, ?4, 64, 0, 0, x'00')",
            params![run, number, excursion, first_sample],
        );
    }

    pub fn gap(&mut self, run: i64, first_sample: i64, samples: i64, cause: &str) {
        let number = self.next_number();
        self.sql(
            "INSERT INTO gap VALUES (?1, ?2, ?3, ?4, ?5)",
            params![run, number, first_sample, samples, cause],
        );
    }

    /// A summary; extremes as (low, high) of leg A, leg B, twice CM, DM.
    pub fn summary(&self, run: i64, first_sample: i64, samples: i64, spans: [(i64, i64); 4], outside: i64) {
        let [a, b, cm, dm] = spans;
        self.sql(
            "INSERT INTO summary VALUES (?1, ?2, ?3, ?4, ?5, ?6, ?7, ?8, ?9, ?10, ?11, 5000000, 0, ?12, 0, 0)",
            params![run, first_sample, samples, a.0, a.1, b.0, b.1, cm.0, cm.1, dm.0, dm.1, outside],
        );
    }

    /// Levels in µV with the samples at each: idle, high, low; the average is 2.5 V throughout.
    pub fn levels(&self, run: i64, first_sample: i64, levels: [Option<(i64, i64)>; 3]) {
        let [idle, high, low] = levels;
        let value = |level: Option<(i64, i64)>| level.map(|level| level.0);
        let samples = |level: Option<(i64, i64)>| level.map(|level| level.1);
        self.sql(
            "INSERT INTO levels VALUES (?1, ?2, 1000000, ?3, ?4, ?5, ?6, ?7, ?8, 1000, 100, 5000000, 100, 5100000,
             100, 4900000)",
            params![
                run,
                first_sample,
                value(idle),
                samples(idle),
                value(high),
                samples(high),
                value(low),
                samples(low)
            ],
        );
    }

    pub fn spectrum(&self, run: i64, first_sample: i64, mode: i64, v2_per_hz: &[f64], segments: i64) {
        let codes: Vec<u8> = v2_per_hz.iter().flat_map(|&p| power::encode(p as f32).to_le_bytes()).collect();
        let points = 2 * (v2_per_hz.len() as i64 - 1);
        self.sql(
            "INSERT INTO spectrum VALUES (?1, ?2, ?3, 0, 50000, ?4, ?5, 0, ?6)",
            params![run, first_sample, mode, points, segments, codes],
        );
    }

    /// Spectra of the ladder: `rung`, 1024 points, densities of both modes from `first_bin` on, no cross density.
    pub fn spectra(&self, set: &str, (rung, first_bin): (u8, i64), modes: [&[f64]; 2], segments: i64) {
        let bins = modes[0].iter().zip(modes[1]);
        let codes: Vec<u8> =
            bins.flat_map(|(&c, &d)| BinCodes::encode(c as f32, d as f32, (0.0, 0.0)).to_bytes()).collect();
        self.sql(
            "INSERT INTO spectra VALUES (1, 0, 819200, ?1, ?2, 1024, ?3, 0, 7, ?4, ?5)",
            params![set, rung, segments, first_bin, codes],
        );
    }

    pub fn report(&self) -> Report {
        Report::from_log(&self.log, &options(10_000)).unwrap()
    }
}

/// Options with a fixed zone, one hour east.
pub fn options(list_limit: usize) -> Options {
    Options { list_limit, zone: TimeZone::fixed(Offset::constant(1)), floor: None }
}

fn legs_json() -> String {
    serde_json::to_string(&[scale(), scale()]).unwrap()
}

/// Power density of a floor and a tone of `amplitude_v` on `bin`: the three bins of the Hann window.
pub fn tone_density(floor: f64, bin: usize, amplitude_v: f64) -> Vec<f64> {
    rung_density(0, floor, bin, amplitude_v)
}

/// The same at a rung of the ladder.
pub fn rung_density(rung: u8, floor: f64, bin: usize, amplitude_v: f64) -> Vec<f64> {
    let rate_hz = RATE_HZ / 8_f64.powi(rung.into());
    let on_bin = amplitude_v * amplitude_v / 2.0 * 1024.0 / (1.5 * rate_hz);
    let mut density = vec![floor; 513];
    for (offset, share) in [(0, 0.25), (1, 1.0), (2, 0.25)] {
        density[bin - 1 + offset] += share * on_bin;
    }
    density
}

/// Power density of a floor and a line of `amplitude_v` anywhere: the Hann line shape
/// sinc(d)/(1 - d²) (Harris 1978) in every bin, so side lobes too.
pub fn hann_line(rung: u8, floor: f64, frequency_hz: f64, amplitude_v: f64) -> Vec<f64> {
    let bin_hz = RATE_HZ / 8_f64.powi(rung.into()) / 1024.0;
    let peak = amplitude_v * amplitude_v / 2.0 / (1.5 * bin_hz);
    let shape = |bin: usize| {
        let d = bin as f64 - frequency_hz / bin_hz;
        let sinc = if d == 0.0 { 1.0 } else { (PI * d).sin() / (PI * d) };
        if (d.abs() - 1.0).abs() < 1e-9 { 0.5 } else { sinc / (1.0 - d * d) }
    };
    (0..513).map(|bin| floor + peak * shape(bin).powi(2)).collect()
}

/// A night on an RS-485 pair with a bit of everything in it: two starts, excursions whole and in
/// parts, a storm, gaps, losses, levels, spectra, a clock.
pub fn night() -> Fixture {
    let mut fixture = Fixture::new(Origin::Serial, Some("cabinet 7, node 12"));
    for run in [1, 2] {
        fixture.run(run, 0);
        fixture.settings(run, 0, ReceiverId::Tia485A);
    }
    fixture.clock(1, START_NS, 60);
    fixture.clock(2, START_NS + 70_000_000_000, 60);
    let first = Totals {
        samples: 29_990_000,
        outside: 190,
        outside_by_limit: [30, 0, 0, 0, 160, 0],
        excursions: 44,
        gaps: 1,
        gap_samples: 10_000,
        leg_a: extremes((1_000_000, 10), (13_214_000, 1_000_015)),
        leg_b: extremes((1_100_000, 30), (11_900_000, 2_000_000)),
        twice_cm: extremes((4_000_000, 50), (24_500_000, 2_000_000)),
        ..quiet_totals(0)
    };
    fixture.totals(1, &first, Some("stopped"));
    fixture.totals(2, &quiet_totals(30_000_000), None);
    fixture.excursion(1, ExcursionRow::whole(1, 1_000_000, 20, Limit::LegAHigh, 26_428_000));
    fixture.snippet(1, 1, 999_900);
    for (part, extreme) in [(1, 24_200_000), (2, 24_260_000), (3, 24_100_000)] {
        let first_sample = 1_200_000 + 100 * (part - 1);
        let row = ExcursionRow::whole(2, first_sample, 10, Limit::LegAHigh, extreme);
        fixture.excursion(1, ExcursionRow { part, cut: part == 3, ..row });
    }
    fixture.storm(1, 2_000_000, (42, 0), 24_500_000);
    fixture.gap(1, 5_000_000, 10_000, "overrun");
    for interval in 0..20 {
        let idle_uv = 254_000 + interval * 100;
        fixture.levels(
            1,
            interval * 1_000_000,
            [Some((idle_uv, 600_000)), Some((2_185_000, 200_000)), Some((-2_150_000, 199_000))],
        );
    }
    fixture.spectrum(1, 0, 0, &tone_density(1e-10, 41, 0.75), 100);
    fixture.spectrum(1, 0, 1, &tone_density(4e-10, 41, 0.012), 100);
    fixture.sql("INSERT INTO link VALUES (1, 9000, 3, 1, 2, 0, 0, 120)", []);
    fixture.sql("INSERT INTO loss VALUES (1, 5, 0)", []);
    fixture
}
