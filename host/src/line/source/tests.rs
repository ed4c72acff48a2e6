//! The source as a whole: same codes however fetched, and voltages that follow the formulas.

use super::*;
use std::f64::consts::TAU;

/// Two nodes, a 16-bit noiseless monitor without RC pole, and `rest`.
fn bench(rest: &str) -> Scenario {
    let text = format!(
        "title = \"t\"\ndescription = \"d\"\nreceiver = \"tia485a\"\n\
         [monitor.front_end]\nnoise_uv = 0.0\nrc_us = 0.0\ninput_ohm = 1e9\ninput_rest_v = 0.0\n\
         [monitor.adc]\nbits = 16\n\
         [[nodes]]\nname = \"panel\"\ninput_ohm = 1e3\ndriver = {{}}\n\
         [[nodes]]\nname = \"oven\"\ninput_ohm = 1e9\nterminator_ohm = 120.0\ndriver = {{}}\n{rest}"
    );
    Scenario::from_toml(&text).unwrap()
}

const TALKING: &str =
    "[traffic.uart]\n\nbaud = 19200.0\nmaster = \"panel\"\npause_ms = 1.0\npolls = [{ slave = \"oven\" }]\n";

fn codes(scenario: &Scenario, seed: u64, pairs: u64, mut chunk: impl FnMut() -> usize) -> [Vec<i32>; 2] {
    let mut source = LineSource::new(scenario, seed, Length::Pairs(pairs)).unwrap();
    let mut legs = [Vec::new(), Vec::new()];
    loop {
        let size = chunk();
        let (mut a, mut b) = (vec![-1; size], vec![-1; size]);
        match source.take(&mut a, &mut b).unwrap() {
            Taken::Pairs { first_sample, pairs, gap } => {
                assert_eq!(first_sample as usize, legs[0].len());
                assert!(gap.is_none() && pairs <= size);
                legs[0].extend_from_slice(&a[..pairs]);
                legs[1].extend_from_slice(&b[..pairs]);
            }
            Taken::Nothing => assert_eq!(size, 0),
            Taken::Finished => return legs,
        }
    }
}

/// Legs in volts, by the declared scale.
fn volts(scenario: &Scenario, pairs: u64) -> [Vec<f64>; 2] {
    let scales = LineSource::new(scenario, 1, Length::Endless).unwrap().describe().legs;
    let mut legs = codes(scenario, 1, pairs, || 4096).into_iter();
    scales.map(|scale| {
        let leg = legs.next().unwrap_or_default();
        leg.into_iter()
            .map(|code| {
                let product = i64::from(code) * i64::from(scale.mantissa) + (1 << (scale.shift - 1));
                ((product >> scale.shift) + i64::from(scale.offset_uv)) as f64 * 1e-6
            })
            .collect()
    })
}

fn modes(legs: &[Vec<f64>; 2]) -> (Vec<f64>, Vec<f64>) {
    legs[0].iter().zip(&legs[1]).map(|(a, b)| (a - b, (a + b) / 2.0)).unzip()
}

/// Amplitude of a line over all of `signal`.
fn amplitude(signal: &[f64], turns_per_sample: f64) -> f64 {
    let (mut re, mut im) = (0.0, 0.0);
    for (n, value) in signal.iter().enumerate() {
        let (sin, cos) = (TAU * (turns_per_sample * n as f64).fract()).sin_cos();
        re += value * cos;
        im += value * sin;
    }
    2.0 * f64::hypot(re, im) / signal.len() as f64
}

fn everything() -> Scenario {
    let rest = format!(
        "{TALKING}{}",
        r#"
[[disturbances]]
name = "bridge"
schedule = { from_s = 0.02, for_s = 0.1, every_s = 0.3, jitter_s = 0.01 }
coupling.ground = { node = "oven", gain = 0.01 }
source.drive = { dc_link_v = 560.0, carrier_hz = 4000.0, output_hz = 43.0 }
[[disturbances]]
name = "arc"
schedule = { from_s = 0.05, for_s = 0.05, every_s = 0.2, jitter_s = 0.05 }
source.contactor = { peak_v = 9.0 }
[[disturbances]]
name = "supply"
coupling.legs = { node = "oven", source_ohm = 500.0, imbalance = 0.1 }
source.switching-supply = { hz = 65e3, peak_v = 2.0, drift_hz = 100.0 }
[[disturbances]]
name = "dip"
schedule = { from_s = 0.1, for_s = 0.05, every_s = 0.2 }
source.supply-dip = { node = "oven", share = 0.4, rise_s = 0.001 }
[[disturbances]]
name = "hum"
coupling.pair = { imbalance = 0.01 }
source.mains = { hz = 50.0, peak_v = 1.0, harmonics = [{ order = 3, share = 0.2 }] }
"#
    );
    let mut scenario = bench(&rest);
    let monitor = &mut scenario.monitor;
    (monitor.front_end.noise_uv, monitor.front_end.rc_us, monitor.front_end.rc_mismatch) =
        (2000.0, 1.6, 0.04);
    (monitor.adc.skew_ns, monitor.adc.jitter_ns) = (1700, 20.0);
    scenario
}

#[test]
fn codes_do_not_depend_on_how_they_are_fetched() {
    let scenario = everything();
    let pairs = 150_001;
    let whole = codes(&scenario, 9, pairs, || pairs as usize);
    assert_eq!(whole[0].len(), pairs as usize);
    let mut dice = crate::line::random::Dice::new(1, 1);
    let pieces = codes(&scenario, 9, pairs, move || usize::from(dice.between(0, 700)));
    assert!(whole == pieces);
    assert!(whole == codes(&scenario, 9, pairs, || 256));
    assert!(whole != codes(&scenario, 10, pairs, || 256));
}

#[test]
fn source_ends_at_its_length_and_says_so_again() {
    let scenario = bench("");
    let mut source = LineSource::new(&scenario, 1, Length::Minutes(0.01)).unwrap();
    assert_eq!(source.length_pairs(), Some(120_000));
    let (mut a, mut b) = (vec![0; 119_000], vec![0; 130_000]);
    assert_eq!(source.take(&mut a, &mut b), Ok(Taken::Pairs { first_sample: 0, pairs: 119_000, gap: None }));
    assert_eq!(
        source.take(&mut a, &mut b),
        Ok(Taken::Pairs { first_sample: 119_000, pairs: 1000, gap: None })
    );
    assert_eq!(source.take(&mut a, &mut b), Ok(Taken::Finished));
    assert_eq!(source.take(&mut a, &mut b), Ok(Taken::Finished));
    for minutes in [0.0, -1.0, f64::NAN, f64::INFINITY] {
        let error = LineSource::new(&scenario, 1, Length::Minutes(minutes)).unwrap_err();
        assert!(error.to_string().contains("minutes") && error.to_string().contains("; try "));
    }
}

/// False DM of sequential sampling: |DM/CM| = 2 |sin(pi f dt)| = 0.0628215 at 10 kHz and 1 us, CM low by
/// cos(pi f dt) = 0.9995066 (arithmetic on two sine samples).
#[test]
fn leg_b_is_really_sampled_later() {
    let line = "[[disturbances]]\nname = \"x\"\nsource.switching-supply = { hz = 10e3, peak_v = 5.0 }";
    for (skew_ns, ratio, factor) in
        [(1000, 0.062_821_5, 0.999_506_6), (-1000, 0.062_821_5, 0.999_506_6), (0, 0.0, 1.0)]
    {
        let mut scenario = bench(line);
        scenario.monitor.adc.skew_ns = skew_ns;
        scenario.monitor.front_end.noise_uv = 1000.0;
        let (dm, cm) = modes(&volts(&scenario, 200_000));
        let (dm, cm) = (amplitude(&dm, 0.05), amplitude(&cm, 0.05));
        println!("skew {skew_ns} ns: DM/5 V {:.7}, CM/5 V {:.7}", dm / 5.0, cm / 5.0);
        // Noise that dithers the converter: 1 mV per leg over 200 000 pairs leaves an amplitude error of
        // 1 mV sqrt(2) sqrt(2/200 000) = 4.5 uV in DM, 1e-6 of 5 V; five of them, and as much again for
        // the rounding of the scale.
        assert!((dm / 5.0 - ratio).abs() < 1e-5);
        assert!((cm / 5.0 - factor).abs() < 1e-5);
    }
}

/// A data edge between the two samplings is a false CM of up to dDM/4 (VB has moved dDM/2).
#[test]
fn skew_turns_data_edges_into_false_common_mode() {
    let worst = |skew_ns: i32| {
        let mut scenario = bench(TALKING);
        scenario.monitor.adc.skew_ns = skew_ns;
        let (dm, cm) = modes(&volts(&scenario, 400_000));
        let driven = |value: &f64| value.abs() > 1.5;
        // 3.6 V behind 40 ohm into 120 ohm (the two kilohms to common change CM, hardly DM).
        let plateau = |sign: f64| {
            let mut levels: Vec<f64> = dm.iter().map(|value| sign * value).filter(driven).collect();
            levels.retain(|&value| value > 0.0);
            levels.sort_by(f64::total_cmp);
            levels[levels.len() / 2]
        };
        let swing = plateau(1.0) + plateau(-1.0);
        assert!((swing - 5.4).abs() < 0.1, "{swing}");
        let moved: Vec<f64> = (1..dm.len() - 1)
            .filter(|&n| driven(&dm[n - 1]) && driven(&dm[n + 1]))
            .map(|n| (cm[n] - cm[n - 1]).abs())
            .collect();
        (moved.iter().copied().fold(0.0, f64::max), swing / 4.0, moved)
    };
    let (without, _, _) = worst(0);
    assert!(without < 2e-3, "{without}");
    let (with, quarter, moved) = worst(2000);
    println!("worst false CM {with:.4} V, a quarter of the swing {quarter:.4} V");
    assert!((with - quarter).abs() < 0.01 * quarter);
    assert!(moved.iter().filter(|&&step| step > 0.5 * quarter).count() > 100);
}

/// DM' = g DM + (gA-gB) CM: gA 1.005, gB 1, CM 7, DM 2 gives 2.0400 and 7.0200 V (arithmetic on two
/// single-ended channels).
#[test]
fn gain_mismatch_makes_the_published_false_readings() {
    let radio = "[[disturbances]]\nname = \"x\"\nsource.radio = { leg_a_v = 8.0, leg_b_v = 6.0 }";
    let mut scenario = bench(radio);
    scenario.monitor.front_end.gain_error_a = 0.005;
    let (dm, cm) = modes(&volts(&scenario, 1000));
    // One 16-bit step is 0.565 mV; each leg is rounded to half of one.
    assert!((dm[500] - 2.0400).abs() < 6e-4, "{}", dm[500]);
    assert!((cm[500] - 7.0200).abs() < 3e-4, "{}", cm[500]);
    scenario.monitor.front_end.calibrated = true;
    let (dm, cm) = modes(&volts(&scenario, 1000));
    assert!((dm[500] - 2.0).abs() < 6e-4 && (cm[500] - 7.0).abs() < 3e-4);
}

/// Mismatch m of the RC poles converts CM to DM with a peak ratio of m/2 at the corner (first-order
/// expansion of 1/(1+jx) at x = 1), of the CM at the input.
#[test]
fn rc_mismatch_converts_half_of_it_at_the_corner() {
    let (tau_us, mismatch) = (10.0, 0.04);
    let corner_hz = 1e6 / (TAU * tau_us);
    let line = format!(
        "[[disturbances]]\nname = \"x\"\nsource.switching-supply = {{ hz = {corner_hz:.6}, peak_v = 5.0 }}"
    );
    let mut scenario = bench(&line);
    let front_end = &mut scenario.monitor.front_end;
    (front_end.rc_us, front_end.rc_mismatch, front_end.noise_uv) = (tau_us, mismatch, 1000.0);
    let (dm, _) = modes(&volts(&scenario, 400_000));
    let ratio = amplitude(&dm, corner_hz / 200e3) / 5.0;
    println!(
        "DM over CM at the input, at the corner: {ratio:.5}; half of the mismatch: {:.5}",
        mismatch / 2.0
    );
    // The next term of the expansion is of order m^3.
    assert!((ratio - mismatch / 2.0).abs() < 4.0 * mismatch.powi(3));
}

/// 65 kHz at 100 kS/s reads 35 kHz: fa = min(f mod fs, fs - f mod fs).
#[test]
fn line_above_half_the_rate_folds_down() {
    let line = "[[disturbances]]\nname = \"x\"\nsource.switching-supply = { hz = 65e3, peak_v = 5.0 }";
    let mut scenario = bench(line);
    scenario.sample_rate_hz = 100e3;
    let (_, cm) = modes(&volts(&scenario, 100_000));
    assert!((amplitude(&cm, 0.35) - 5.0).abs() < 1e-3);
}

/// `imbalance` is DM over CM by definition; a supply dip of 40 % takes 40 % of the driven level.
#[test]
fn imbalance_and_supply_dip_do_what_they_say() {
    let hum = "[[disturbances]]\nname = \"x\"\ncoupling.pair = { gain = 0.5, imbalance = 0.08 }\n\
               source.mains = { hz = 50.0, peak_v = 8.0 }";
    let scenario = bench(hum);
    let (dm, cm) = modes(&volts(&scenario, 200_000));
    let (dm, cm) = (amplitude(&dm, 50.0 / 200e3), amplitude(&cm, 50.0 / 200e3));
    assert!((cm - 4.0).abs() < 1e-4 && (dm / cm - 0.08).abs() < 1e-5, "{dm} {cm}");

    let dip = "[[disturbances]]\nname = \"x\"\nschedule = { from_s = 1.0 }\n\
               source.supply-dip = { node = \"oven\", share = 0.4 }";
    let scenario = bench(&format!("{TALKING}{dip}"));
    let (dm, _) = modes(&volts(&scenario, 600_000));
    let highest = |from: usize, until: usize| dm[from..until].iter().copied().fold(0.0, f64::max);
    let lowest = |from: usize, until: usize| dm[from..until].iter().copied().fold(0.0, f64::min);
    // Both talkers' levels before; the panel's stays, so look at the share of samples at each level.
    let (before, after) = (highest(0, 200_000), highest(300_000, 600_000));
    assert!((before - after).abs() < 1e-3, "the panel still drives fully");
    let sagged = 0.6 * before;
    let near =
        |level: f64, from: usize| dm[from..].iter().filter(|value| (*value - level).abs() < 0.02).count();
    let count = near(sagged, 300_000);
    assert!(count > 10_000, "{count} samples near {sagged:.3} V");
    assert!(dm[..200_000].iter().filter(|value| (**value - sagged).abs() < 0.02).count() < 500);
    assert!(lowest(300_000, 600_000) < -2.0);
}

/// While a talker's ground is up, only its own messages carry the pair out of the window.
#[test]
fn excursions_happen_only_while_the_cause_is_on() {
    let scenario = crate::line::scenarios::by_name("press-ground").unwrap();
    let mut source = LineSource::new(&scenario, 3, Length::Minutes(2.0)).unwrap();
    let scales = source.describe().legs;
    let rate = scenario.sample_rate_hz;
    let causes: Vec<Activity> =
        source.activity(0.0, 120.0).into_iter().filter(|one| one.name == "press-ground").collect();
    assert!(!causes.is_empty());
    let limit = [0, 1].map(|leg: usize| {
        ((12e6 - f64::from(scales[leg].offset_uv)) / f64::from(scales[leg].mantissa)
            * 2_f64.powi(scales[leg].shift.into())) as i32
            + 1
    });
    let (mut a, mut b) = (vec![0; 5000], vec![0; 5000]);
    let (mut outside, mut stray) = (0, 0);
    while let Ok(Taken::Pairs { first_sample, pairs, .. }) = source.take(&mut a, &mut b) {
        for n in 0..pairs {
            if a[n] >= limit[0] || b[n] >= limit[1] {
                outside += 1;
                let at_s = (first_sample + n as u64) as f64 / rate;
                stray +=
                    usize::from(!causes.iter().any(|one| one.from_s <= at_s && at_s < one.until_s + 0.1));
            }
        }
    }
    println!("{outside} pairs outside, {stray} of them without a cause");
    assert!(outside > 10_000);
    assert_eq!(stray, 0);
}

#[test]
fn memory_does_not_grow_with_length() {
    let mut source = LineSource::new(&everything(), 1, Length::Endless).unwrap();
    let (mut a, mut b) = (vec![0; 1 << 16], vec![0; 1 << 16]);
    let mut room = Vec::new();
    for round in 0..160 {
        source.take(&mut a, &mut b).unwrap();
        if round == 40 || round == 159 {
            room.push(source.waiting_events().1);
        }
        assert!(source.waiting_events().0 < 10_000);
    }
    assert_eq!(room[0], room[1]);
}

/// One world seen at three rates: every sample is what the nominal rate has nearest to its instant, but for
/// edges of data that fall between.
#[test]
fn another_rate_sees_the_same_pair_at_the_same_time() {
    let mut scenario = crate::line::scenarios::by_name("press-ground").unwrap();
    scenario.monitor.front_end.noise_uv = 0.0;
    scenario.monitor.adc.jitter_ns = 0.0;
    let rate = scenario.sample_rate_hz;
    let second = rate as usize;
    let source = || LineSource::new(&scenario, 5, Length::Minutes(0.1)).unwrap();
    let take = |source: &mut LineSource, pairs: usize| {
        let (mut leg_a, mut leg_b) = (vec![0; pairs], vec![0; pairs]);
        assert!(matches!(source.take(&mut leg_a, &mut leg_b), Ok(Taken::Pairs { .. })));
        leg_a
    };
    let truth = take(&mut source(), 4 * second);
    let mut tuned = source();
    let mut now_s = 0.0;
    let mut first = 0;
    for (tuning, factor) in
        [(Tuning::Nominal, 1.0), (Tuning::Faster, 1.025), (Tuning::Slower, 0.975), (Tuning::Nominal, 1.0)]
    {
        if factor != 1.0 || now_s > 0.0 {
            let change = tuned.tune(tuning).unwrap();
            assert_eq!(change.first_sample, first);
            assert_eq!(change.sample_rate_mhz, (rate * factor * 1e3).round() as u64);
        }
        let codes = take(&mut tuned, second * 3 / 4);
        let nearest = |n: usize| truth[((now_s + n as f64 / (rate * factor)) * rate).round() as usize];
        let same = codes.iter().enumerate().filter(|&(n, code)| code.abs_diff(nearest(n)) <= 3).count();
        println!("{tuning:?}: {same} of {} samples the same", codes.len());
        assert!(same * 100 > codes.len() * 97, "{tuning:?}: {same} of {}", codes.len());
        now_s += codes.len() as f64 / (rate * factor);
        first += codes.len() as u64;
    }
}
