//! What is written reads back: the same microvolts, rails, rate and description.

use super::*;
use legwise_protocol::units::Microvolts;

/// A 12-bit unsigned converter behind a divider: ±12 V over 4096 codes, rails at 0 and 4095.
const TWELVE_BIT: LegScale = LegScale {
    mantissa: 1_536_000_000,
    shift: 18,
    offset_uv: -12_000_000,
    rail_low_code: 0,
    rail_high_code: 4095,
    gain_uncertainty_ppm: 5000,
    offset_uncertainty_uv: 10_000,
};

/// Codes that visit the whole range of both legs, rails included.
fn sweep(legs: [LegScale; 2], pairs: u64) -> Codes {
    let code = |leg: &LegScale, step: i64| {
        let span = i64::from(leg.rail_high_code) - i64::from(leg.rail_low_code) + 1;
        (i64::from(leg.rail_low_code) + step.rem_euclid(span)) as i32
    };
    let [a, b] = &legs;
    let pairs = (0..pairs)
        .map(|sample| (sample, code(a, sample as i64 * 4_294_967_291), code(b, -(sample as i64) * 7_919)))
        .collect();
    Codes { legs, rate_mhz: 1_000_000_000, pairs, next: 0 }
}

fn clipped(source: &mut impl PairSource<Error: std::fmt::Debug>) -> Vec<[bool; 2]> {
    let legs = source.describe().legs;
    let (mut a, mut b) = (vec![0; 512], vec![0; 512]);
    let mut clipped = Vec::new();
    while let Taken::Pairs { pairs, .. } = source.take(&mut a, &mut b).unwrap() {
        for (&a, &b) in a[..pairs].iter().zip(&b[..pairs]) {
            let is_clipped = |code, leg: LegScale| code <= leg.rail_low_code || code >= leg.rail_high_code;
            clipped.push([is_clipped(a, legs[0]), is_clipped(b, legs[1])]);
        }
    }
    clipped
}

/// Writes `source`, reads it back, compares everything; returns the summary.
fn assert_same(room: &Room, name: &str, legs: [LegScale; 2], options: &WriteOptions) -> WrittenSummary {
    let path = room.path(name);
    let summary = write(&path, &mut sweep(legs, 20_000), options).unwrap();
    let read = pairs_of(&path, &OpenOptions::default());
    let direct = drain(&mut sweep(legs, 20_000), 333).0;
    assert!(read == direct, "{name}: microvolts differ");
    let mut recording = open(&path, &OpenOptions::default()).unwrap();
    let description = recording.describe();
    assert_eq!(description.sample_rate_mhz, 1_000_000_000);
    for (read, written) in description.legs.iter().zip(&legs) {
        assert_eq!(read.gain_uncertainty_ppm, written.gain_uncertainty_ppm);
        assert_eq!(read.offset_uncertainty_uv, written.offset_uncertainty_uv);
    }
    assert_eq!(clipped(&mut recording), clipped(&mut sweep(legs, 20_000)), "{name}: clipped samples differ");
    assert_eq!((summary.pairs, summary.gaps, summary.largest_error_uv), (20_000, 0, 0));
    assert_eq!(summary.bytes, std::fs::metadata(&path).unwrap().len());
    summary
}

#[test]
fn csv_gives_back_the_very_microvolts() {
    let room = Room::new();
    let trimmed = LegScale { mantissa: 1_541_234_567, offset_uv: -12_034_567, ..TWELVE_BIT };
    let timed = WriteOptions { with_time: true, ..WriteOptions::default() };
    assert_same(&room, "plain.csv", [TWELVE_BIT; 2], &WriteOptions::default());
    assert_same(&room, "trimmed.csv", [TWELVE_BIT, trimmed], &WriteOptions::default());
    assert_same(&room, "timed.csv", [trimmed, trimmed], &timed);
    let wide = LegScale { mantissa: 1 << 30, shift: 11, offset_uv: 77, rail_low_code: -1900, ..TWELVE_BIT };
    let wide = LegScale { rail_high_code: 1900, ..wide };
    assert_same(&room, "wide.csv", [wide, wide], &timed);
}

#[test]
fn wav_is_16_bit_where_that_loses_nothing_and_wider_elsewhere() {
    let room = Room::new();
    let auto = WriteOptions::default();
    let summary = assert_same(&room, "codes.wav", [TWELVE_BIT; 2], &auto);
    assert_eq!((summary.format, summary.bytes), (WrittenFormat::Wav16, 44 + 4 * 20_000));
    let sixteen = LegScale { rail_high_code: 65_535, shift: 22, ..TWELVE_BIT };
    assert_eq!(assert_same(&room, "sixteen.wav", [sixteen; 2], &auto).format, WrittenFormat::Wav16);
    let trimmed = LegScale { offset_uv: -11_998_000, ..TWELVE_BIT };
    assert_eq!(assert_same(&room, "float.wav", [TWELVE_BIT, trimmed], &auto).format, WrittenFormat::WavFloat);
    let wide = LegScale { shift: 16, offset_uv: -48_000_123, ..TWELVE_BIT };
    assert_eq!(assert_same(&room, "wide.wav", [wide; 2], &auto).format, WrittenFormat::Wav32);
    let forced = WriteOptions { wav: WavEncoding::Int32, ..auto.clone() };
    assert_eq!(assert_same(&room, "forced.wav", [TWELVE_BIT; 2], &forced).format, WrittenFormat::Wav32);
    let unbounded = LegScale { rail_low_code: i32::MIN, rail_high_code: i32::MAX, ..scale::MICROVOLT_CODES };
    let path = room.path("unbounded.wav");
    let summary = write(&path, &mut sweep([unbounded; 2], 1000), &auto).unwrap();
    assert_eq!((summary.format, summary.largest_error_uv), (WrittenFormat::Wav32, 0));
    let saturated = drain(&mut sweep([unbounded; 2], 1000), 100).0;
    assert!(saturated.iter().any(|pair| pair.1 == Microvolts::BOUND));
    assert!(pairs_of(&path, &OpenOptions::default()) == saturated);
}

#[test]
fn forced_float_beyond_16_volts_states_its_error() {
    let room = Room::new();
    let wide = LegScale { shift: 16, offset_uv: -48_000_123, ..TWELVE_BIT };
    let options = WriteOptions { wav: WavEncoding::Float32, ..WriteOptions::default() };
    let path = room.path("x.wav");
    let summary = write(&path, &mut sweep([wide; 2], 20_000), &options).unwrap();
    let read = pairs_of(&path, &OpenOptions::default());
    let direct = drain(&mut sweep([wide; 2], 20_000), 100).0;
    let error = |(read, direct): (&Pair, &Pair)| read.1.abs_diff(direct.1).max(read.2.abs_diff(direct.2));
    let largest_error_uv = read.iter().zip(&direct).map(error).max().unwrap();
    assert_eq!(summary.largest_error_uv, largest_error_uv);
    // Floats between 2^25 and 2^26 µV (67 V) are 4 µV apart.
    assert!((1..=2).contains(&largest_error_uv), "{largest_error_uv}");
}

#[test]
fn words_of_the_sidecar_come_back() {
    let room = Room::new();
    for name in ["x.csv", "x.wav"] {
        let options = WriteOptions {
            point: Some("cabinet \"3\"".into()),
            receiver: Some("rs485".into()),
            origin: Some("made up".into()),
            expected: Some(toml::Table::from_iter([("count".to_string(), toml::Value::Integer(3))])),
            ..WriteOptions::default()
        };
        let summary = write(&room.path(name), &mut sweep([TWELVE_BIT; 2], 10), &options).unwrap();
        assert_eq!(summary.sidecar, room.path(&format!("{name}.toml")));
        let recording = open(&summary.path, &OpenOptions::default()).unwrap();
        assert_eq!(recording.point(), options.point.as_deref());
        assert_eq!(recording.receiver(), options.receiver.as_deref());
        assert_eq!(recording.origin().note, options.origin);
        assert_eq!(Sidecar::load(&summary.path).unwrap().expected, options.expected);
    }
}

#[test]
fn gaps_survive_with_time_and_are_refused_without() {
    let room = Room::new();
    let gapped = || {
        let mut codes = sweep([TWELVE_BIT; 2], 12_000);
        for pair in &mut codes.pairs {
            pair.0 += 5 + if pair.0 >= 100 { 17 } else { 0 } + if pair.0 >= 9000 { 123_456_789 } else { 0 };
        }
        codes.rate_mhz = 44_100_000;
        codes
    };
    let timed = WriteOptions { with_time: true, ..WriteOptions::default() };
    let summary = write(&room.path("x.csv"), &mut gapped(), &timed).unwrap();
    assert_eq!((summary.gaps, summary.gap_samples), (2, 17 + 123_456_789));
    let mut direct = drain(&mut gapped(), 100).0;
    // A recording is numbered from 0.
    direct.iter_mut().for_each(|pair| pair.0 -= 5);
    assert!(pairs_of(&summary.path, &OpenOptions::default()) == direct);
    std::fs::remove_file(&summary.sidecar).unwrap();
    assert_eq!(open(&summary.path, &OpenOptions::default()).unwrap().describe().sample_rate_mhz, 44_100_000);
    for name in ["y.csv", "y.wav"] {
        let error = write(&room.path(name), &mut gapped(), &WriteOptions::default()).unwrap_err();
        assert!(error.to_string().contains("the gap of 17 samples before sample 122"), "{error}");
        assert!(!room.path(name).exists());
    }
}

#[test]
fn a_recording_written_from_a_recording_is_the_same() {
    let room = Room::new();
    write(&room.path("a.wav"), &mut sweep([TWELVE_BIT; 2], 5000), &WriteOptions::default()).unwrap();
    for (from, to) in [("a.wav", "b.csv"), ("b.csv", "c.wav"), ("c.wav", "d.csv")] {
        let mut source = open(&room.path(from), &OpenOptions::default()).unwrap();
        write(&room.path(to), &mut source, &WriteOptions::default()).unwrap();
    }
    let read = |name: &str| std::fs::read_to_string(room.path(name)).unwrap();
    assert!(read("b.csv") == read("d.csv"));
    assert_eq!(read("b.csv.toml"), read("d.csv.toml"));
}

#[test]
fn what_cannot_be_written_is_refused_and_touches_nothing() {
    let room = Room::new();
    let refuse = |path: &Path, options: &WriteOptions| {
        let message = write(path, &mut sweep([TWELVE_BIT; 2], 10), options).unwrap_err().to_string();
        assert!(message.starts_with("could not ") && message.contains("try "), "{message}");
        message
    };
    let plain = WriteOptions::default();
    assert!(refuse(&room.path("x.dat"), &plain).contains("ends in .csv or .wav"));
    assert!(refuse(&room.path("nowhere/x.csv"), &plain).contains("there is no such directory"));
    let old = room.file("old.csv", "keep me");
    assert!(refuse(&old, &plain).contains("it exists already"));
    assert_eq!(std::fs::read(&old).unwrap(), b"keep me");
    std::fs::create_dir(room.path("dir.csv")).unwrap();
    assert!(refuse(&room.path("dir.csv"), &plain).contains("it exists already"));
    let long = WriteOptions { pairs: Some(1_100_000_000), ..plain.clone() };
    assert!(refuse(&room.path("long.wav"), &long).contains("ends at 4 GiB, here after 1073741759 pairs"));
    assert!(!room.path("long.wav.part").exists());
    let replace = WriteOptions { replace: true, ..plain };
    write(&old, &mut sweep([TWELVE_BIT; 2], 10), &replace).unwrap();
    assert_eq!(pairs_of(&old, &OpenOptions::default()).len(), 10);
    assert!(!room.path("old.csv.part").exists() && !room.path("old.csv.toml.part").exists());
}

#[test]
fn a_source_that_fails_leaves_the_part_file_and_the_old_recording() {
    let room = Room::new();
    let old = room.file("old.csv", "keep me");
    let rows = "1,2\n".repeat(5000);
    let bad = room.file("bad.csv", format!("leg_a_v,leg_b_v\n{rows}x,2\n"));
    let mut source = open(&bad, &RATE).unwrap();
    let options = WriteOptions { replace: true, ..WriteOptions::default() };
    let message = write(&old, &mut source, &options).unwrap_err().to_string();
    assert!(message.contains("failed after 5000 pairs"), "{message}");
    assert_eq!(std::fs::read(&old).unwrap(), b"keep me");
    assert!(room.path("old.csv.part").exists());
}

/// Takes `room` bytes, then has no space left.
struct FullDisk {
    room: usize,
}

impl std::io::Write for FullDisk {
    fn write(&mut self, bytes: &[u8]) -> std::io::Result<usize> {
        if self.room == 0 {
            return Err(std::io::ErrorKind::StorageFull.into());
        }
        let taken = bytes.len().min(self.room);
        self.room -= taken;
        Ok(taken)
    }

    fn flush(&mut self) -> std::io::Result<()> {
        Ok(())
    }
}

impl std::io::Seek for FullDisk {
    fn seek(&mut self, _: std::io::SeekFrom) -> std::io::Result<u64> {
        Ok(0)
    }
}

#[test]
fn a_full_disk_is_named_in_either_format() {
    let part = Path::new("x.part");
    let mut codes = sweep([TWELVE_BIT; 2], 20_000);
    let mut blocks = writing::Blocks::new(&mut codes, part);
    let error = csv_writing::write_csv(&mut FullDisk { room: 5000 }, &mut blocks, false).unwrap_err();
    assert!(error.to_string().contains("could not finish x.part: the disk is full"), "{error}");
    for encoding in [WavEncoding::Auto, WavEncoding::Float32, WavEncoding::Int32] {
        let mut codes = sweep([TWELVE_BIT; 2], 20_000);
        let mut blocks = writing::Blocks::new(&mut codes, part);
        let plan = wav_writing::WavPlan::choose(&[TWELVE_BIT; 2], encoding);
        let error = wav_writing::write_wav(&mut FullDisk { room: 5000 }, &mut blocks, &plan).unwrap_err();
        assert!(error.to_string().contains("could not finish x.part: the disk is full"), "{error}");
    }
}
