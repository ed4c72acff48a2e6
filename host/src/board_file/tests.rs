//! Round trip, refusals, warnings of a board file.

use super::*;

fn file() -> BoardFile {
    BoardFile {
        format: FORMAT.to_owned(),
        board: Some("bench \"monitor\"".to_owned()),
        serial: Some("17".to_owned()),
        sample_rate_hz: 500_000.0,
        measured_utc: Some("2026-03-01T01:00:00Z".to_owned()),
        tool_version: "0.1.0".to_owned(),
        segments: 1234,
        points: [(12.5, 3e-11), (180_000.0, 4.5e-12)]
            .map(|(frequency_hz, noise)| FloorPoint {
                frequency_hz,
                real: -0.004_987_531_172_069_825,
                imaginary: 1.0 / 3.0 * 1e-3,
                radius: 1.25e-4,
                common_noise_v2_per_hz: Some(noise),
            })
            .to_vec(),
    }
}

#[test]
fn what_was_written_is_read_back_to_the_last_bit() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("board.toml");
    file().write(&path).unwrap();
    assert_eq!(BoardFile::read(&path).unwrap(), file());
    let nameless = BoardFile { board: None, serial: None, measured_utc: None, ..file() };
    let other = folder.path().join("nameless.toml");
    nameless.write(&other).unwrap();
    assert_eq!(BoardFile::read(&other).unwrap(), nameless);
    // Never over an older one.
    assert!(matches!(nameless.write(&path), Err(BoardFileError::Exists { .. })));
    assert_eq!(BoardFile::read(&path).unwrap(), file());
}

#[test]
fn what_is_no_board_file_is_refused_with_a_reason() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("x.toml");
    let good = file().to_text().unwrap();
    for (content, reason) in [
        (good.replace("legwise-board/1", "legwise-board/9"), "its format is \"legwise-board/9\""),
        (good.replace("sample_rate_hz = 500000.0", "sample_rate_hz = nan"), "cannot be"),
        (good.replace("segments", "segmets"), "unknown field `segmets`"),
        (good.replace("frequency_hz = 12.5", "frequency_hz = -12.5"), "-12.5 Hz is not valid"),
        (good.replace("radius = 0.000125", "radius = inf"), "is not valid"),
        (good.split("[[points]]").next().unwrap().to_owned() + "points = []\n", "no points"),
        (String::new(), "missing field"),
        ("leg_a_v,leg_b_v\n1,2\n".to_owned(), "could not understand"),
    ] {
        std::fs::write(&path, &content).unwrap();
        let error = BoardFile::read(&path).unwrap_err();
        let text = match &error {
            BoardFileError::Points { source, .. } => format!("{error} {source}"),
            _ => error.to_string(),
        };
        assert!(text.contains(reason) && text.contains("try"), "'{reason}' not in: {text}");
    }
    std::fs::write(&path, b"\xff\xfe\x00").unwrap();
    assert!(BoardFile::read(&path).unwrap_err().to_string().contains("not text"));
    assert!(BoardFile::read(&folder.path().join("none")).unwrap_err().to_string().contains("try"));
}

#[test]
fn another_board_or_rate_is_told_in_words_and_a_dithered_rate_is_the_same() {
    let facts = |serial: Option<&str>, rate_hz: f64| BoardFacts {
        board: file().board,
        serial: serial.map(str::to_owned),
        sample_rate_hz: Some(rate_hz),
        created_utc: None,
    };
    assert_eq!(file().differences(&facts(Some("17"), 500_000.0)), Vec::<String>::new());
    assert_eq!(file().differences(&facts(None, 515_000.0)), Vec::<String>::new());
    let rate = file().differences(&facts(Some("17"), 200_000.0));
    assert!(
        rate.len() == 1 && rate[0].contains("500 k pairs/s") && rate[0].contains("200 k pairs/s"),
        "{rate:?}"
    );
    let serial = file().differences(&facts(Some("18"), 500_000.0));
    assert!(serial.len() == 1 && serial[0].contains("\"17\"") && serial[0].contains("\"18\""), "{serial:?}");
    let other = BoardFacts { board: Some("desktop".to_owned()), ..facts(None, 1e6) };
    assert_eq!(file().differences(&other).len(), 2);
}

/// ε of legs with gains a and b is b/a − 1, whatever they are; H of them is (a − b)/((a + b)/2).
#[test]
fn mismatch_and_conversion_say_the_same_of_two_legs() {
    for (a, b) in [((1.0, 0.0), (1.005, 0.0)), ((1.0, 0.0), (0.98, 0.01)), ((0.7, -0.4), (0.72, -0.43))] {
        let divide = |(x, y): (f64, f64), (u, v): (f64, f64)| {
            let squared = u * u + v * v;
            ((x * u + y * v) / squared, (y * u - x * v) / squared)
        };
        let mean = (((a.0 + b.0) / 2.0), ((a.1 + b.1) / 2.0));
        let h = divide((a.0 - b.0, a.1 - b.1), mean);
        let point = FloorPoint {
            frequency_hz: 1e3,
            real: h.0,
            imaginary: h.1,
            radius: 1e-3,
            common_noise_v2_per_hz: None,
        };
        let found = tied_legs::Mismatch::of(&point);
        let exact = divide(b, a);
        assert!((found.ratio.0 - (exact.0 - 1.0)).abs() < 1e-12, "{found:?} for {exact:?}");
        assert!((found.ratio.1 - exact.1).abs() < 1e-12, "{found:?} for {exact:?}");
        assert!((found.phase_degrees() - exact.1.atan2(exact.0).to_degrees()).abs() < 1e-9);
        // A small step of H moves ε by the step times radius over radius.
        let moved = tied_legs::Mismatch::of(&FloorPoint { imaginary: h.1 + 1e-7, ..point });
        let step = (moved.ratio.0 - found.ratio.0).hypot(moved.ratio.1 - found.ratio.1) / 1e-7;
        assert!((step / (found.radius / 1e-3) - 1.0).abs() < 1e-5, "{step}");
    }
}
