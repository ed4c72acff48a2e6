//! Times that text has rounded, gaps of every length, and times that are no clock.

use super::*;

/// Times of `samples` at `rate_hz`, rounded to `resolution_s` as text would be.
fn rounded_times(samples: impl Iterator<Item = u64>, rate_hz: f64, resolution_s: f64) -> Vec<f64> {
    samples.map(|sample| (sample as f64 / rate_hz / resolution_s).round() * resolution_s).collect()
}

#[test]
fn the_rate_behind_rounded_times_is_found_and_no_gap_is_invented() {
    for rate_hz in [1000.0, 44_100.0, 123_456.7, 300e3, 600e3, 700e3, 900e3, 901_234.5, 1e6] {
        let times_s = rounded_times(0..1_000_000, rate_hz, 1e-6);
        let estimate = RateEstimate::from_rows(&times_s[..4096], 1e-6).unwrap().unwrap();
        assert!((estimate.rate_hz / rate_hz - 1.0).abs() <= estimate.uncertainty, "{rate_hz} {estimate:?}");
        println!("{rate_hz} Hz found as {}", estimate.rate_hz);
        let mut clock = SampleClock::new(&estimate, None);
        for (row, &time_s) in times_s.iter().enumerate() {
            assert_eq!(clock.index_of(time_s), Ok(row as u64), "{rate_hz} Hz");
        }
    }
}

#[test]
fn gaps_keep_their_length_however_long_and_wherever_they_begin() {
    for (rate_hz, gap_samples) in [(1e6, 1), (44_100.0, 1), (1e5, 3_600_000_000), (123_456.0, 77_777)] {
        for gap_at in [1_u64, 50, 3000, 200_000] {
            let samples = (0..300_000_u64).map(|row| if row < gap_at { row } else { row + gap_samples });
            let times_s = rounded_times(samples.clone(), rate_hz, 1e-9);
            let estimate = RateEstimate::from_rows(&times_s[..4096], 1e-9).unwrap().unwrap();
            let mut clock = SampleClock::new(&estimate, None);
            for (sample, &time_s) in samples.zip(&times_s) {
                assert_eq!(clock.index_of(time_s), Ok(sample), "{rate_hz} Hz, gap at {gap_at}");
            }
        }
    }
}

#[test]
fn steps_that_are_no_whole_number_of_samples_are_refused() {
    let times_s: Vec<f64> = (0..40).map(|row| f64::from(row) + if row >= 20 { 0.5 } else { 0.0 }).collect();
    let estimate = RateEstimate::from_rows(&times_s[..20], 1e-3).unwrap().unwrap();
    let mut clock = SampleClock::new(&estimate, None);
    let first_bad = times_s.iter().position(|&time_s| clock.index_of(time_s).is_err());
    assert_eq!(first_bad, Some(20));
    let scattered: Vec<f64> = (0..400).map(|row| f64::from(row * row)).collect();
    assert!(matches!(RateEstimate::from_rows(&scattered, 1e-3), Err((_, ClockFault::Irregular { .. }))));
}

#[test]
fn the_last_digit_of_the_texts_is_their_resolution() {
    for (texts, unit) in [
        (&["0.0010", "0.002"][..], 1e-4),
        (&["12", "13"], 1.0),
        (&["-2,50"], 1e-2),
        (&["0.0000e+00", "1.0000e-6", "1.0000e-03"], 1e-7),
        (&["3E+2"], 100.0),
        (&["1e-06", "1.1e-05", "0.0001", "0.000101"], 1e-6),
        (&[], 0.0),
    ] {
        let mut resolution = TextResolution::default();
        texts.iter().for_each(|text| resolution.see(text.as_bytes(), b','));
        assert!((resolution.unit() - unit).abs() <= 1e-12 * unit, "{texts:?}: {}", resolution.unit());
    }
}

#[test]
fn a_rounder_rate_is_chosen_only_inside_the_uncertainty() {
    assert_eq!(roundest_within(44_100.13, 1e-5), 44_100.0);
    assert_eq!(roundest_within(44_100.13, 1e-9), 44_100.13);
    assert_eq!(roundest_within(999_999.999_9, 1e-9), 1e6);
}
