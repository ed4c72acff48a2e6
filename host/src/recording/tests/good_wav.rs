//! WAV files that are read.

use super::*;

#[test]
fn integer_samples_are_the_codes_and_scale_to_full_scale() {
    let room = Room::new();
    for bits in [16, 24, 32] {
        let half = 1_i64 << (bits - 1);
        let samples = [0, 1, -1, half - 1, -half, half / 2, -half / 4, 12_345].map(|sample| sample as i32);
        let path = room.wav("x.wav", bits, 250_000, &samples);
        let mut recording = open(&path, &FULL_SCALE).unwrap();
        assert_eq!(recording.pairs_total(), Some(4));
        let description = recording.describe();
        assert_eq!(description.sample_rate_mhz, 250_000_000);
        let (mut a, mut b) = ([7; 4], [7; 4]);
        assert_eq!(
            recording.take(&mut a, &mut b).unwrap(),
            Taken::Pairs { first_sample: 0, pairs: 4, gap: None }
        );
        let interleaved: Vec<i32> = a.into_iter().zip(b).flat_map(|(a, b)| [a, b]).collect();
        assert_eq!(interleaved, samples, "{bits} bits");
        assert_eq!(recording.take(&mut a, &mut b).unwrap(), Taken::Finished);
        for leg in description.legs {
            assert_eq!(i64::from(leg.rail_low_code), -half);
            assert_eq!(i64::from(leg.rail_high_code), half - 1);
            for sample in samples {
                let exact_uv = f64::from(sample) * 24e6 / half as f64;
                let error_uv = (f64::from(leg.microvolts(sample)) - exact_uv).abs();
                // Half a microvolt of rounding and 5e-10 of 24 V from the mantissa.
                assert!(error_uv <= 0.5 + 0.012, "{bits} bits, {sample}: {error_uv} µV");
            }
        }
    }
}

#[test]
fn the_scale_is_right_to_1e_9_or_a_thousandth_of_a_microvolt_at_any_full_scale() {
    for bits in [16, 24, 32] {
        let mut full_scale_v = 1e-6;
        while full_scale_v <= scale::HIGHEST_FULL_SCALE_V {
            let leg = scale::integer_scale(full_scale_v, bits);
            assert!((1..=40).contains(&leg.shift) && leg.mantissa > 0);
            let half_range = 2_f64.powi(bits as i32 - 1);
            let found_uv = f64::from(leg.mantissa) / 2_f64.powi(i32::from(leg.shift)) * half_range;
            let error_uv = (found_uv - full_scale_v * 1e6).abs();
            assert!(
                error_uv <= (full_scale_v * 1e6 * 1e-9).max(1e-3),
                "{bits} bits, {full_scale_v} V: {error_uv} µV"
            );
            full_scale_v *= 1.37;
        }
    }
}

#[test]
fn float_samples_become_microvolts_with_rails_at_full_scale() {
    let room = Room::new();
    let path = room.float_wav("x.wav", 48_000, &[0.5, -0.25, 1.0, -1.0, 1.5, 1e30, 0.0, -0.0]);
    let mut recording = open(&path, &FULL_SCALE).unwrap();
    let [leg, _] = recording.describe().legs;
    assert_eq!((leg.mantissa, leg.shift), (1 << 30, 30));
    assert_eq!((leg.rail_low_code, leg.rail_high_code), (-24_000_000, 24_000_000));
    let expected = [
        (0, 12_000_000, -6_000_000),
        (1, 24_000_000, -24_000_000),
        (2, 36_000_000, 1_000_000_000),
        (3, 0, 0),
    ];
    assert_eq!(drain(&mut recording, 3).0, expected);
    assert_eq!(recording.origin().format, "WAV, 32-bit float, full scale 24 V");
}

#[test]
fn given_rails_mark_the_codes_that_reach_them() {
    let room = Room::new();
    let path = room.wav("x.wav", 16, 1000, &[0, 0]);
    // 12-bit converter in 16-bit samples: 24 V / 32768 = 732.421875 µV per code.
    let options = OpenOptions { rails_v: Some((-1.5, 2047.0 * 732.421_875e-6)), ..FULL_SCALE };
    let [leg, _] = open(&path, &options).unwrap().describe().legs;
    assert_eq!((leg.rail_low_code, leg.rail_high_code), (-2048, 2047));
    let options = OpenOptions { rails_v: Some((-900.0, 900.0)), ..FULL_SCALE };
    let [leg, _] = open(&path, &options).unwrap().describe().legs;
    assert_eq!((leg.rail_low_code, leg.rail_high_code), (-32_768, 32_767));
}

#[test]
fn a_fractional_rate_given_replaces_the_whole_hertz_of_the_header() {
    let room = Room::new();
    let path = room.wav("x.bin", 16, 44_100, &[1, 2]);
    let options = OpenOptions { rate_hz: Some(44_100.123), ..FULL_SCALE };
    assert_eq!(open(&path, &options).unwrap().describe().sample_rate_mhz, 44_100_123);
    room.file("x.bin.toml", "full_scale_v = 5\n");
    let [leg, _] = open(&path, &OpenOptions::default()).unwrap().describe().legs;
    assert_eq!(leg.microvolts(16_384), 2_500_000);
}

#[test]
fn chunk_size_changes_nothing_in_any_coding() {
    let room = Room::new();
    let samples: Vec<i32> = (0..60_000_i32).map(|step| step * 7919 % 65_536 - 32_768).collect();
    let floats: Vec<f32> = samples.iter().map(|&sample| sample as f32 / 40_000.0).collect();
    let mut paths: Vec<PathBuf> =
        [16, 24, 32].iter().map(|&bits| room.wav(&format!("{bits}.wav"), bits, 1000, &samples)).collect();
    paths.push(room.float_wav("float.wav", 1000, &floats));
    for path in paths {
        let read = |chunk| {
            let (pairs, end) = drain(&mut open(&path, &FULL_SCALE).unwrap(), chunk);
            end.unwrap();
            pairs
        };
        let whole = read(100_000);
        assert_eq!(whole.len(), 30_000);
        for chunk in [1, 7, 1000, 16_384, 16_385] {
            assert!(read(chunk) == whole, "{path:?}, chunks of {chunk}");
        }
        let mut recording = open(&path, &FULL_SCALE).unwrap();
        drain(&mut recording, 999).1.unwrap();
        let (read, total) = recording.progress();
        assert_eq!(read, total);
    }
}
