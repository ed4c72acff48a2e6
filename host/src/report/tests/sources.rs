//! Sources, presence and conversion in the report of logs with known lines.

use super::fixture::{self, Fixture, night, options, tone_density};
use super::ladder::{self, RATE_HZ, Scene, Tone, log_of, night_of_ladder};
use crate::report::model::Source;
use crate::report::text::{self, Style};
use crate::report::{Options, Report};
use crate::spectrum::conversion::{ConversionFloor, FloorPoint};

fn of_kind<'a>(report: &'a Report, kind: &str) -> &'a Source {
    let sources = &report.spectrum.sources;
    sources.iter().find(|source| source.kind == kind).unwrap_or_else(|| panic!("no {kind} in {sources:?}"))
}

/// The text of the panel on the spectra.
fn panel(report: &Report) -> String {
    let text = text::render(report, Style::PLAIN);
    let from = text.find("── Sources in the spectrum").unwrap();
    let length = text[from..].find("── What could not").unwrap();
    text[from..from + length].to_string()
}

fn one_scene(tones: Vec<Tone>) -> Fixture {
    let fixture = log_of(&[RATE_HZ]);
    ladder::add(&fixture, 1, RATE_HZ, &["idle"], &vec![Scene { tones, bit_rate_hz: None }; 10]);
    fixture
}

#[test]
fn each_source_is_named_with_its_frequency_and_level() {
    let report = night_of_ladder().report();
    println!("{}", panel(&report));
    let drive = of_kind(&report, "drive");
    assert!((drive.frequency_hz.unwrap() - 4_000.0).abs() < drive.frequency_uncertainty_hz.unwrap().max(0.2));
    assert!(
        (drive.output_hz.unwrap() - 43.0).abs() < drive.output_uncertainty_hz.unwrap().max(0.05),
        "{drive:?}"
    );
    // There for a quarter of the first run; the main averages are of that run alone.
    let all: f64 = ladder::drive(0.0).iter().map(|tone| tone.common_rms_v.powi(2)).sum();
    assert!((drive.common_rms_v.unwrap() / (all / 4.0).sqrt() - 1.0).abs() < 0.02, "{drive:?}");
    let mains = of_kind(&report, "mains");
    assert!((mains.frequency_hz.unwrap() - 50.01).abs() < 0.01, "{mains:?}");
    assert!((mains.lines[0].common_rms_v.unwrap() - 0.5).abs() < 0.005, "{mains:?}");
    let traffic = of_kind(&report, "traffic");
    assert!((traffic.bit_rate_hz.unwrap() / 19_200.0 - 1.0).abs() < 0.03, "{traffic:?}");
    assert_eq!(report.spectrum.sources.last().unwrap().kind, "traffic", "own data come last");
}

#[test]
fn presence_tells_share_start_and_stop_of_what_comes_and_goes() {
    let report = night_of_ladder().report();
    let presence = of_kind(&report, "drive").presence.clone().unwrap();
    // Looks of two seconds: 10 of 40 in the first run, 10 of 20 in the second.
    assert_eq!((presence.looks, presence.stretches), (60, 2), "{presence:?}");
    assert!((presence.share - 20.0 / 60.0).abs() < 0.01, "{presence:?}");
    let [first, second] = presence.list.as_slice() else { panic!("{presence:?}") };
    assert_eq!((first.start.run, first.start.seconds, first.stop.seconds), (1, Some(20.0), Some(40.0)));
    assert_eq!((first.start_uncertainty_s, first.stop_uncertainty_s), (Some(2.0), Some(2.0)));
    assert_eq!(second.stop_uncertainty_s, None, "the end of the log is no stop");
    let mains = of_kind(&report, "mains").presence.clone().unwrap();
    assert_eq!((mains.share, mains.stretches), (1.0, 2), "one stretch in each run");
    let text = panel(&report);
    assert!(text.contains("33.2 % of the time") && text.contains("2 stretches, first run 1: 20 s"), "{text}");
}

#[test]
fn stretches_beyond_the_limit_of_lists_are_counted() {
    let fixture = log_of(&[RATE_HZ]);
    let scene =
        |on: bool| Scene { tones: if on { ladder::drive(0.0) } else { Vec::new() }, bit_rate_hz: None };
    let scenes: Vec<Scene> = (0..60).map(|look| scene(look % 6 < 3)).collect();
    ladder::add(&fixture, 1, RATE_HZ, &["idle"], &scenes);
    let report = Report::from_log(&fixture.log, &options(4)).unwrap();
    let presence = of_kind(&report, "drive").presence.clone().unwrap();
    assert_eq!((presence.stretches, presence.list.len(), presence.list_truncated), (10, 4, true));
    assert_eq!(presence.last_stop.unwrap().seconds, Some(114.0));
}

#[test]
fn a_second_rate_confirms_what_stays_and_suspects_what_moves() {
    let report = night_of_ladder().report();
    assert_eq!(report.spectrum.second_rate_hz, Some(0.97 * RATE_HZ));
    assert_eq!(report.spectrum.left_out, 0, "spectra of the second rate are of use");
    assert_eq!(of_kind(&report, "mains").alias, "confirmed");
    let moving = report.spectrum.sources.iter().find(|source| source.alias == "suspect").unwrap();
    assert!(moving.candidates_hz.iter().any(|hz| (hz - 1_234_567.0).abs() < 200.0), "{moving:?}");
    let raw = &report.spectrum.common.as_ref().unwrap().lines;
    assert!(raw.iter().any(|line| line.alias == "confirmed"), "{raw:?}");
    let folded = raw.iter().find(|line| line.alias == "suspect").unwrap();
    assert!((folded.frequency_hz - 34_567.0).abs() < 200.0, "{folded:?}");
    assert!(
        panel(&report).contains("ALIAS SUSPECT: shows at 34.567 kHz, truly 1.2346 MHz"),
        "{}",
        panel(&report)
    );
}

#[test]
fn with_one_rate_nothing_is_confirmed_and_the_panel_says_why() {
    let report = one_scene(ladder::drive(0.05)).report();
    assert!(report.spectrum.sources.iter().all(|source| source.alias == "not-confirmed"));
    assert!(panel(&report).contains("One sample rate only"), "{}", panel(&report));
    assert!(report.blind.statements.iter().any(|statement| statement.contains("one sample rate")));
}

#[test]
fn conversion_is_claimed_with_a_region_that_holds_it() {
    let report = one_scene(ladder::drive(0.05)).report();
    let conversion = &report.spectrum.conversion;
    assert_eq!((conversion.finding, conversion.is_board_known), ("significant", false));
    for point in &conversion.points {
        let (low, high) = (point.magnitude_low.unwrap(), point.magnitude_high.unwrap());
        // Codes of the cross density are good for 1.6 %.
        assert!(low < 0.05 * 1.016 && high > 0.05 / 1.016, "{point:?}");
        assert!(point.phase_deg.unwrap().abs() <= point.phase_uncertainty_deg.unwrap() + 0.9, "{point:?}");
    }
    assert_eq!(report.spectrum.driver_imbalance.finding, "not-known", "nobody drove");
    let text = panel(&report);
    assert!(text.contains("run legwise trim") && text.contains("mV/V, -2"), "{text}");
}

#[test]
fn conversion_below_the_boards_own_is_not_claimed() {
    let fixture = one_scene(ladder::drive(0.05));
    let point = |frequency_hz| FloorPoint {
        frequency_hz,
        real: 0.05,
        imaginary: 0.0,
        radius: 0.01,
        common_noise_v2_per_hz: None,
    };
    let floor = ConversionFloor::new(vec![point(1.0), point(RATE_HZ / 2.0)]).unwrap();
    let with_floor = Options { floor: Some(floor), ..options(10) };
    let report = Report::from_log(&fixture.log, &with_floor).unwrap();
    let conversion = &report.spectrum.conversion;
    assert_eq!((conversion.significant, conversion.is_board_known), (0, true), "{conversion:?}");
    let limit = conversion.points.iter().find(|point| point.verdict == "below-board").unwrap();
    assert!(limit.magnitude.is_none() && limit.board_floor == Some(0.06_f64.max(0.05 + 0.01)), "{limit:?}");
    assert!(!panel(&report).contains("legwise trim"), "{}", panel(&report));
}

#[test]
fn a_pair_without_lines_names_nothing() {
    let report = one_scene(Vec::new()).report();
    assert!(report.spectrum.sources.is_empty(), "{:?}", report.spectrum.sources);
    assert_ne!(report.spectrum.conversion.finding, "significant");
    assert!(panel(&report).contains("No line stands out"));
}

#[test]
fn a_log_of_devices_before_the_ladder_names_sources_without_times() {
    let fixture: Fixture = night();
    // Strong multiples of 4 kHz at the full rate.
    fixture.spectrum(1, 60_000, 0, &tone_density(1e-10, 41, 0.75), 100);
    let report = fixture.report();
    let source = &report.spectrum.sources[0];
    assert!((source.frequency_hz.unwrap() - 41.0 * fixture::RATE_HZ / 1024.0).abs() < 25.0, "{source:?}");
    assert_eq!((source.set, &source.presence), ("all", &None));
    assert_eq!(report.spectrum.conversion.finding, "not-known");
    assert!(panel(&report).contains("not known from this log"), "{}", panel(&report));
}

#[test]
fn the_panel_is_short_and_keeps_to_the_page() {
    let text = panel(&night_of_ladder().report());
    assert!(text.lines().count() <= 20 && text.lines().all(|line| line.chars().count() <= 100), "{text}");
}
