//! What a CSV file may look like.

use super::*;

const PAIRS: [Pair; 3] = [(0, 2_500_000, -1_000_001), (1, 0, 1), (2, -7_000_000, 12_000_000)];

#[test]
fn every_layout_of_the_same_samples_reads_alike() {
    let room = Room::new();
    for (name, text) in [
        ("plain", "leg_a_v,leg_b_v\n2.5,-1.000001\n0,0.000001\n-7,12\n"),
        ("no_last_newline", "leg_a_v,leg_b_v\n2.5,-1.000001\n0,0.000001\n-7,12"),
        ("crlf", "leg_a_v,leg_b_v\r\n2.5,-1.000001\r\n0,0.000001\r\n-7,12\r\n"),
        ("bom_and_comments", "\u{feff}# bench\n\n#x,y\nleg_a_v,leg_b_v\n2.5,-1.000001\n0,1e-6\n-7,12\n"),
        ("order_case_extra", "note, LEG_B_V ,Leg_A_v\nx,-1.000001,2.5\n,0.000001,0\n7,12,-7\n"),
        ("semicolon", "leg_a_v;leg_b_v\n2.5;-1.000001\n0;0.000001\n-7;12\n"),
        ("decimal_comma", "leg_a_v;leg_b_v\r\n2,5;-1,000001\r\n0,0;0,000001\r\n-7,0;12,000\r\n"),
        ("tab", "leg_a_v\tleg_b_v\n2.5\t-1.000001\n0\t0.000001\n-7\t12\n"),
        ("tab_decimal_comma", "leg_a_v\tleg_b_v\n2,5\t-1,000001\n0\t0,000001\n-7\t12\n"),
        (
            "quoted",
            "\"leg_a_v\",\"leg_b_v\",\"a, b\"\n\"2.5\",-1.000001,\"x, y\"\n0,0.000001,\n-7,\"12\",1\n",
        ),
        ("quoted_decimal_comma", "leg_a_v;leg_b_v\n\"2,5\";\"-1,000001\"\n0;\"0,000001\"\n-7;12\n"),
        ("header_in_comment", "# leg_a_v,leg_b_v\n2.5e+00,-1.000001e+00\n0,1e-6\n-7.0e0,1.2e1\n"),
        ("blank_lines", "leg_a_v,leg_b_v\n\n2.5,-1.000001\n\r\n0,0.000001\n-7,12\n\n\n"),
    ] {
        let path = room.file(&format!("{name}.csv"), text);
        assert_eq!(pairs_of(&path, &RATE), PAIRS, "{name}");
    }
}

#[test]
fn codes_are_microvolts_and_the_rest_of_the_description_comes_from_the_options() {
    let room = Room::new();
    let path = room.file("x.csv", "leg_a_v,leg_b_v\n1,2\n");
    let options = OpenOptions { skew_ns: Some(-300), rails_v: Some((-12.0, 11.5)), ..RATE };
    let description = open(&path, &options).unwrap().describe();
    assert_eq!((description.sample_rate_mhz, description.skew_ns), (1_000_000_000, -300));
    let [leg, other] = description.legs;
    assert_eq!(leg, other);
    assert_eq!((leg.mantissa, leg.shift, leg.offset_uv), (1 << 30, 30, 0));
    assert_eq!((leg.rail_low_code, leg.rail_high_code), (-12_000_000, 11_500_000));
    let [leg, _] = open(&path, &RATE).unwrap().describe().legs;
    assert_eq!((leg.rail_low_code, leg.rail_high_code), (i32::MIN, i32::MAX));
    assert!((0..1000).all(|code| leg.microvolts(code * 999_983) == code * 999_983));
}

#[test]
fn the_rate_comes_from_time_the_sidecar_or_the_option_and_the_option_wins() {
    let room = Room::new();
    let rate_of =
        |path: &Path, options: &OpenOptions| open(path, options).unwrap().describe().sample_rate_mhz;
    let timed = room.file("timed.csv", "time_s,leg_a_v,leg_b_v\n5.000,1,2\n5.002,1,2\n5.004,1,2\n");
    assert_eq!(rate_of(&timed, &OpenOptions::default()), 500_000);
    let bare = room.file("bare.csv", "leg_a_v,leg_b_v\n1,2\n");
    room.file("bare.csv.toml", "sample_rate_hz = 250000\n");
    assert_eq!(rate_of(&bare, &OpenOptions::default()), 250_000_000);
    assert_eq!(rate_of(&bare, &RATE), 1_000_000_000);
    let other = room.file("other.csv", "leg_a_v,leg_b_v\n1,2\n");
    room.file("other.toml", "sample_rate_hz = 1234.567\n");
    assert_eq!(rate_of(&other, &OpenOptions::default()), 1_234_567);
    let close = OpenOptions { rate_hz: Some(502.0), ..OpenOptions::default() };
    assert_eq!(rate_of(&timed, &close), 502_000);
}

#[test]
fn a_jump_of_time_by_whole_samples_moves_the_index() {
    let room = Room::new();
    let mut text = String::from("leg_a_v;time_s;leg_b_v\n");
    let samples: Vec<u64> = (0..10).chain([11]).chain(20..9000).chain(1_000_000..1_000_100).collect();
    for sample in &samples {
        let time_s = (1000.0 + *sample as f64 / 250_000.0).to_string().replace('.', ",");
        text.push_str(&format!("{sample}e-6;{time_s};0\n"));
    }
    let path = room.file("gaps.csv", text);
    let mut recording = open(&path, &OpenOptions::default()).unwrap();
    assert_eq!(recording.describe().sample_rate_mhz, 250_000_000);
    let (pairs, end) = drain(&mut recording, 64);
    end.unwrap();
    assert_eq!(pairs, samples.iter().map(|&sample| (sample, sample as i32, 0)).collect::<Vec<_>>());
}

#[test]
fn the_sidecar_describes_the_recording_and_unused_expectations_do_no_harm() {
    let room = Room::new();
    let path = room.file("x.csv", "leg_a_v,leg_b_v\n1,2\n");
    room.file(
        "x.csv.toml",
        "sample_rate_hz = 1e6\nskew_ns = 120\npoint = \"X2\"\nreceiver = \"rs485\"\norigin = \"bench\"\n\
         rail_low_v = -12\nrail_high_v = [12.0, 12.5]\ngain_uncertainty_percent = 0.5\n\
         offset_uncertainty_v = [0.01, 0.02]\n[expected]\nverdict = \"within\"\n",
    );
    let recording = open(&path, &OpenOptions::default()).unwrap();
    assert_eq!((recording.point(), recording.receiver()), (Some("X2"), Some("rs485")));
    let origin = Origin {
        file_name: "x.csv".into(),
        format: "CSV, comma-separated".into(),
        note: Some("bench".into()),
    };
    assert_eq!(recording.origin(), &origin);
    let description = recording.describe();
    assert_eq!(description.skew_ns, 120);
    let [a, b] = description.legs;
    assert_eq!((a.rail_low_code, a.rail_high_code), (-12_000_000, 12_000_000));
    assert_eq!((b.rail_low_code, b.rail_high_code), (-12_000_000, 12_500_000));
    assert_eq!((a.gain_uncertainty_ppm, a.offset_uncertainty_uv), (5000, 10_000));
    assert_eq!((b.gain_uncertainty_ppm, b.offset_uncertainty_uv), (5000, 20_000));
}

#[test]
fn progress_ends_at_the_size_of_the_file() {
    let room = Room::new();
    let path = room.file("x.csv", format!("leg_a_v,leg_b_v\n{}", "1.5,-0.25\n".repeat(100_000)));
    let mut recording = open(&path, &RATE).unwrap();
    let (at_start, total) = recording.progress();
    assert!(at_start < total && total == std::fs::metadata(&path).unwrap().len());
    assert_eq!(drain(&mut recording, 4096).0.len(), 100_000);
    assert_eq!(recording.progress(), (total, total));
}

#[test]
fn chunk_size_changes_neither_pairs_nor_the_place_of_an_error() {
    let room = Room::new();
    let mut text = String::from("time_s,leg_a_v,leg_b_v\n");
    for row in 0..6000 {
        let sample = if row < 5000 { row } else { row + 37 };
        text.push_str(&format!("{:.6},{}e-6,{}e-6\n", f64::from(sample) * 1e-5, row * 7, -row));
    }
    text.push_str("0.060370,nan,1\n0.060380,1,1\n");
    let path = room.file("x.csv", text);
    let read = |chunk| {
        let (pairs, end) = drain(&mut open(&path, &OpenOptions::default()).unwrap(), chunk);
        (pairs, end.unwrap_err().to_string())
    };
    let whole = read(100_000);
    assert_eq!(whole.0.len(), 6000);
    assert_eq!(whole.0.last().map(|pair| pair.0), Some(6036));
    for chunk in [1, 2, 7, 64, 4096, 4097] {
        assert!(read(chunk) == whole, "chunks of {chunk}");
    }
}

#[test]
fn after_an_error_the_source_is_finished() {
    let room = Room::new();
    let rows = "1,2\n".repeat(5000);
    let path = room.file("x.csv", format!("leg_a_v,leg_b_v\n{rows}bad,2\n{rows}"));
    let mut recording = open(&path, &RATE).unwrap();
    assert!(drain(&mut recording, 100).1.is_err());
    let (pairs, end) = drain(&mut recording, 100);
    assert!(pairs.is_empty() && end.is_ok());
}
