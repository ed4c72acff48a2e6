//! Each rule by itself, on inputs of known answer. Whole cases are in the tests of the workspace.

use super::alias::{Sighting, check};
use super::evidence::confidence;
use super::ladder::{Ladder, fold};
use super::nrz::{Curve, fit};
use super::presence::presence;
use super::*;
use crate::spectrum::HANN_ENBW_BINS;
use crate::spectrum::rung::RungBin;
use std::f64::consts::PI;

fn sighting(frequency_hz: f64, level_v: f64) -> Sighting {
    Sighting { frequency_hz, tolerance_hz: 10.0, level_v }
}

/// What a source at `true_hz` shows at both rates, and the state that follows.
fn states_of(true_hz: &[f64], rates_hz: (f64, f64)) -> Vec<AliasState> {
    let seen = |rate_hz| -> Vec<Sighting> {
        true_hz.iter().enumerate().map(|(n, &hz)| sighting(fold(hz, rate_hz), 3_f64.powi(n as i32))).collect()
    };
    check(&seen(rates_hz.0), rates_hz.0, &seen(rates_hz.1), rates_hz.1)
}

#[test]
fn a_line_that_stays_put_is_confirmed_and_a_folded_one_tells_its_true_frequency() {
    let states = states_of(&[65_000.0, 1_234_567.0], (500_000.0, 485_000.0));
    assert_eq!(states[0], AliasState::Confirmed);
    let AliasState::Suspect { candidates_hz } = &states[1] else { panic!("{states:?}") };
    assert!(candidates_hz.iter().any(|hz| (hz - 1_234_567.0).abs() < 1.0), "{candidates_hz:?}");
}

#[test]
fn a_tone_half_way_between_multiples_of_both_rates_is_not_confirmed_though_it_stays_put() {
    // 492.5 kHz folds to 7.5 kHz at 500 and at 485 kS/s.
    let states = states_of(&[492_500.0], (500_000.0, 485_000.0));
    let AliasState::Suspect { candidates_hz } = &states[0] else { panic!("{states:?}") };
    assert!(candidates_hz.iter().any(|hz| (hz - 492_500.0).abs() < 1.0));
    assert!(candidates_hz.iter().any(|hz| (hz - 7_500.0).abs() < 1.0), "nor can 7.5 kHz be excluded");
}

#[test]
fn a_line_that_moves_by_itself_or_is_seen_once_stays_unconfirmed() {
    let first = [sighting(4_000.0, 1.0), sighting(30_000.0, 0.1)];
    // The carrier moved by 1 %; a change of rate of 15 kHz moves an alias by multiples of that.
    let second = [sighting(4_040.0, 1.0)];
    let states = check(&first, 500_000.0, &second, 485_000.0);
    assert_eq!(states, [AliasState::Unconfirmed, AliasState::Unconfirmed]);
    let states = check(&first, 500_000.0, &first, 500_000.0);
    assert_eq!(states, [AliasState::Unconfirmed, AliasState::Unconfirmed], "one rate tells nothing");
}

#[test]
fn a_line_of_another_level_in_the_same_place_confirms_nothing() {
    let states = check(&[sighting(4_000.0, 1.0)], 500_000.0, &[sighting(4_000.0, 0.4)], 485_000.0);
    assert_eq!(states, [AliasState::Unconfirmed]);
}

#[test]
fn confidence_is_the_logistic_of_the_weights() {
    assert!((confidence(&[]) - 0.5).abs() < 1e-15);
    let two = [Evidence::new(Fact::Alone, -0.5), Evidence::new(Fact::InUsualRange, 1.5)];
    // 1/(1 + e^-1) = 0.731 058 578 630 004 9
    assert!((confidence(&two) - 0.731_058_578_630_004_9).abs() < 1e-15);
}

/// Density of random bits sampled at `rate_hz` by the autocorrelation `1 − |τ|·B`: independent of the folded
/// sum in the code.
fn data_density(frequency_hz: f64, rate_hz: f64, bit_rate_hz: f64) -> f64 {
    let lags = (rate_hz / bit_rate_hz) as i32 + 1;
    let r = |lag: i32| (1.0 - f64::from(lag) * bit_rate_hz / rate_hz).max(0.0);
    let term = |lag: i32| 2.0 * r(lag) * (2.0 * PI * frequency_hz / rate_hz * f64::from(lag)).cos();
    1.0 + (1..=lags).map(term).sum::<f64>()
}

#[test]
fn the_bit_rate_is_read_from_the_folded_shape() {
    for (bit_rate_hz, share) in [(9_600.0, 0.01), (38_400.0, 0.005), (115_200.0, 0.005), (250_000.0, 0.02)] {
        let rate_hz = 500_000.0;
        let points = (45..512).map(|bin| f64::from(bin) * rate_hz / 1024.0);
        let points = points.map(|hz| (hz, data_density(hz, rate_hz, bit_rate_hz).max(1e-4))).collect();
        let found = fit(&[Curve { points }], rate_hz, None).unwrap();
        assert!((found.bit_rate_hz / bit_rate_hz - 1.0).abs() < share, "{found:?} for {bit_rate_hz}");
        // Not modelled: zeros beyond twelve lobes (half the band at 9600 bit/s), depth of a zero at half the rate.
        assert!(found.explained > 0.8, "{found:?}");
    }
}

#[test]
fn a_flat_density_has_no_bit_rate() {
    let wave = |bin: i32| 1.0 + 0.1 * (f64::from(bin) * 2.7).sin();
    let points = (45..512).map(|bin| (f64::from(bin) * 488.28, wave(bin))).collect();
    let found = fit(&[Curve { points }], 500_000.0, None);
    assert!(found.is_none_or(|fit| fit.explained < 0.3), "{found:?}");
}

/// A rung with a flat floor of 1e-10 V²/Hz and Hann-shaped lines: mode, Hz, V rms.
fn rung(number: u8, set: SegmentSet, lines: &[(Mode, f64, f64)]) -> RungSpectra {
    let (points, first_bin, last_bin) = match number {
        0 => (1024, 45, 512),
        4 => (512, 1, 180),
        _ => (512, 22, 180),
    };
    let rate_hz = 500_000.0 / 8_f64.powi(number.into());
    let bin_hz = rate_hz / f64::from(points);
    let density = |mode: Mode, bin: usize| {
        let of = lines.iter().filter(|line| line.0 == mode);
        let shape = |off: f64| {
            let d = if (off.abs() - 1.0).abs() < 1e-6 { off + 1e-5 } else { off + 1e-9 };
            (PI * d).sin() / (PI * d * (1.0 - d * d))
        };
        let power = |hz: f64, v: f64| (v * shape(bin as f64 - hz / bin_hz)).powi(2);
        1e-10 + of.map(|&(_, hz, v)| power(hz, v) / (HANN_ENBW_BINS * bin_hz)).sum::<f64>()
    };
    RungSpectra {
        rung: number,
        rate_hz,
        points,
        set,
        segments: 40,
        skipped: 0,
        is_overlapped: false,
        other: 0,
        first_sample: 0,
        span_samples: 1_000_000,
        first_bin,
        bins: (first_bin..=last_bin)
            .map(|bin| RungBin {
                common: density(Mode::Common, bin),
                differential: density(Mode::Differential, bin),
                cross: (0.0, 0.0),
            })
            .collect(),
    }
}

fn rungs(set: SegmentSet, lines: &[(Mode, f64, f64)]) -> Vec<RungSpectra> {
    (0..5).map(|number| rung(number, set, lines)).collect()
}

#[test]
fn a_line_at_the_limit_of_two_rungs_is_one_line() {
    for frequency_hz in [21_700.0, 21_972.0, 22_050.0, 2_746.0, 343.0] {
        let rungs = rungs(SegmentSet::Idle, &[(Mode::Common, frequency_hz, 0.1)]);
        let lines = Ladder::quiet(&rungs).lines(Mode::Common);
        assert_eq!(lines.len(), 1, "{lines:?}");
        assert!((lines[0].line.rms_v / 0.1 - 1.0).abs() < 1e-3, "{lines:?}");
    }
}

#[test]
fn harmonics_tell_a_fundamental_that_is_missing_and_the_half_wave_share() {
    let harmonics = [(2, 0.2), (4, 0.04), (6, 0.017)];
    let mut lines: Vec<(Mode, f64, f64)> =
        harmonics.iter().map(|&(order, v)| (Mode::Common, 50.03 * f64::from(order), v)).collect();
    let families = name(&rungs(SegmentSet::Idle, &lines), &Hints::default());
    assert_eq!(families.len(), 1, "{families:?}");
    assert_eq!(families[0].source.name(), SourceName::Mains);
    assert!((families[0].fundamental_hz - 50.03).abs() < 0.02, "{families:?}");

    // Half-wave rectified sine: the second harmonic is 4/(3π) of the first.
    lines.push((Mode::Common, 50.03, 0.2 * 3.0 * PI / 4.0));
    let families = name(&rungs(SegmentSet::Idle, &lines), &Hints::default());
    let Source::Mains(shape) = &families[0].source else { panic!("{families:?}") };
    assert!((shape.half_wave_share.common.unwrap() - 1.0).abs() < 0.01, "{shape:?}");
    assert!(shape.even_rms_v.common > 10.0 * shape.odd_rms_v.common);
}

#[test]
fn two_networks_and_a_drive_with_sidebands_are_three_families() {
    let (carrier_hz, output_hz) = (4_000.0, 100.0);
    let mut lines: Vec<(Mode, f64, f64)> =
        [(50.0, 0.5), (150.0, 0.1), (60.0, 0.4), (180.0, 0.05)].map(|(hz, v)| (Mode::Common, hz, v)).into();
    for (m, n, v) in
        [(1, 0, 0.3561), (2, 3, 0.0884), (2, -3, 0.0884), (3, 0, 0.0786), (3, 6, 0.0137), (3, -6, 0.0137)]
    {
        lines.push((Mode::Common, f64::from(m) * carrier_hz + f64::from(n) * output_hz, v));
    }
    let families = name(&rungs(SegmentSet::Idle, &lines), &Hints::default());
    let names: Vec<SourceName> = families.iter().map(|family| family.source.name()).collect();
    assert_eq!(names, [SourceName::Mains, SourceName::Mains, SourceName::Drive], "{families:?}");
    let Source::Drive { output_hz: Some((found_hz, uncertainty_hz)) } = families[2].source else {
        panic!("{families:?}")
    };
    assert!((found_hz - output_hz).abs() <= uncertainty_hz.max(1.0), "{found_hz}");
    let outputs: Vec<i32> = families[2]
        .members
        .iter()
        .filter_map(|member| match member.role {
            Role::Sideband { outputs, .. } => Some(outputs),
            _ => None,
        })
        .collect();
    assert_eq!(outputs.len(), 4);
    assert!(outputs.iter().all(|outputs| outputs % 3 == 0 && *outputs != 0), "{outputs:?}");
}

#[test]
fn weak_lines_where_sidebands_of_a_drive_may_be_are_the_drives() {
    let place = |(m, n): (i32, i32)| 4_000.0 * f64::from(m) + 100.0 * f64::from(n);
    let strong = [((1, 0), 0.5), ((2, 3), 0.1), ((2, -3), 0.1), ((3, 0), 0.1)];
    // Thousandths of the carrier, beyond the reach of pairs: baseband, and far from the second multiple.
    let weak = [((0, 15), 4e-3), ((2, -27), 4e-3), ((2, 21), 4e-3)];
    let lines: Vec<(Mode, f64, f64)> =
        strong.iter().chain(&weak).map(|&(at, v)| (Mode::Common, place(at), v)).collect();
    let families = name(&rungs(SegmentSet::Idle, &lines), &Hints::default());
    let [drive] = families.as_slice() else { panic!("{families:?}") };
    for (at, _) in weak {
        let is_it = |member: &Member| (member.frequency_hz - place(at)).abs() < 5.0;
        assert!(drive.members.iter().any(is_it), "{at:?} in {drive:?}");
    }
}

#[test]
fn a_rhythm_below_the_mains_is_the_datas_and_hum_is_not() {
    let data = |lines: &[(Mode, f64, f64)]| -> Vec<RungSpectra> {
        let mut both = rungs(SegmentSet::Idle, &[]);
        both.truncate(2);
        let mut driven = rungs(SegmentSet::Driven, lines);
        // 40 dB of data over the floor.
        driven.iter_mut().flat_map(|spectra| &mut spectra.bins).for_each(|bin| bin.differential += 1e-6);
        both.append(&mut driven);
        both
    };
    let rhythm = [(Mode::Common, 12.0, 0.05), (Mode::Differential, 12.0, 0.2)];
    let hum = [(Mode::Common, 50.0, 0.2), (Mode::Common, 150.0, 0.05)];
    let families = name(&data(&[rhythm, hum].concat()), &Hints::default());
    let mut names: Vec<SourceName> = families.iter().map(|family| family.source.name()).collect();
    names.sort_unstable();
    assert_eq!(names, [SourceName::Mains, SourceName::Traffic], "{families:?}");
}

#[test]
fn a_lone_strong_tone_among_the_carriers_is_unknown() {
    let families = name(&rungs(SegmentSet::Idle, &[(Mode::Common, 5_000.0, 0.2)]), &Hints::default());
    assert_eq!(families.len(), 1);
    assert_eq!(families[0].source.name(), SourceName::Unknown);
    assert!(families[0].confidence < NAMED_FROM);
}

#[test]
fn levels_of_both_modes_stand_in_one_member() {
    let lines = [(Mode::Common, 66_000.0, 0.1), (Mode::Differential, 66_000.0, 0.002)];
    let families = name(&rungs(SegmentSet::Idle, &lines), &Hints::default());
    assert_eq!(families.len(), 1, "{families:?}");
    let levels = families[0].members[0].levels;
    assert!((levels.common.unwrap() / 0.1 - 1.0).abs() < 1e-3);
    assert!((levels.differential.unwrap() / 0.002 - 1.0).abs() < 0.02);
    assert!((families[0].total_rms_v.common / 0.1 - 1.0).abs() < 1e-3);
}

#[test]
fn nothing_at_all_has_no_families_and_no_presence() {
    assert!(name(&[], &Hints::default()).is_empty());
    assert!(name(&rungs(SegmentSet::Idle, &[]), &Hints::default()).is_empty());
    let lines = [(Mode::Common, 66_000.0, 0.1)];
    let family = &name(&rungs(SegmentSet::Idle, &lines), &Hints::default())[0];
    let found = presence(family, &[]);
    assert_eq!((found.looks, found.share(), found.stretches.len()), (0, 0.0, 0));
    let found = presence(family, &rungs(SegmentSet::Idle, &[]));
    assert_eq!((found.looks, found.seen), (1, 0));
}

/// One look at a supply, or at nothing, from `first_sample` on.
fn look(set: SegmentSet, first_sample: u64, is_there: bool) -> RungSpectra {
    let lines: &[(Mode, f64, f64)] = if is_there { &[(Mode::Common, 66_000.0, 0.1)] } else { &[] };
    RungSpectra { first_sample, ..rung(0, set, lines) }
}

fn supply() -> Family {
    name(&[look(SegmentSet::Idle, 0, true)], &Hints::default()).swap_remove(0)
}

#[test]
fn averages_that_share_half_a_segment_are_looks_of_their_own() {
    // A span of 1 000 000 pairs every 950 000.
    let sequence: Vec<RungSpectra> =
        (0..20).map(|number| look(SegmentSet::Idle, 950_000 * number, number < 5)).collect();
    let found = presence(&supply(), &sequence);
    assert_eq!((found.looks, found.seen), (20, 5));
    let stretch = found.stretches[0];
    assert_eq!((stretch.end_sample, stretch.end_resolution_samples), (4_800_000, Some(1_000_000)));
}

#[test]
fn a_look_whose_floor_would_hide_the_line_says_nothing() {
    let mut driven = look(SegmentSet::Driven, 1_000_000, true);
    driven.bins.iter_mut().for_each(|bin| bin.common += 1.0);
    let sequence = [look(SegmentSet::Idle, 0, true), driven, look(SegmentSet::Idle, 2_000_000, true)];
    let found = presence(&supply(), &sequence);
    assert_eq!((found.looks, found.seen, found.filled), (2, 2, 0));
    assert_eq!((found.share(), found.stretches.len()), (1.0, 1));
}

#[test]
fn idle_turns_between_driven_ones_are_no_absence_of_data() {
    let level = Levels { common: None, differential: Some(1.0) };
    let rest = Member {
        frequency_hz: 125_000.0,
        frequency_uncertainty_hz: 125_000.0,
        role: Role::Structure,
        levels: level,
        set: SegmentSet::Driven,
        rung: 0,
        alias: AliasState::Unconfirmed,
    };
    let certain = vec![Evidence { fact: Fact::DrivenRmsV(1.0), weight: 5.0 }];
    let data = Family::new(Source::Traffic { frame_bits: None }, (9_600.0, 1.0), vec![rest], certain);
    let sets = |letters: &str| -> Vec<RungSpectra> {
        let set = |letter| if letter == 'd' { SegmentSet::Driven } else { SegmentSet::Idle };
        let looks = letters.chars().zip(0..);
        looks.map(|(letter, number)| look(set(letter), 1_000_000 * number, false)).collect()
    };
    assert_eq!(presence(&data, &sets("ididid")).share(), 1.0);
    assert_eq!(presence(&data, &sets("dididi")).share(), 1.0);
    let found = presence(&data, &sets("didiiiididid"));
    assert_eq!((found.seen, found.stretches.len()), (8, 2), "four idle turns on end: nobody spoke");
    assert_eq!(presence(&data, &sets("iiii")).share(), 0.0);
}
