//! Bad text files and bad settings: each gets its own message.

use super::*;

fn text_complaint(text: &str) -> String {
    let room = Room::new();
    complaint(&room.file("x.csv", text), &RATE)
}

#[test]
fn files_that_are_no_recordings_are_named_for_what_they_are() {
    let room = Room::new();
    for (name, content, expected) in [
        ("empty.csv", &b""[..], "the file is empty"),
        (
            "night.csv",
            b"SQLite format 3\0\x10\0",
            "it is an SQLite database; if it is a log, try `legwise report`",
        ),
        ("sheet.csv", b"PK\x03\x04rest", "compressed or a spreadsheet"),
        ("squeezed", b"\x1f\x8b\x08\0", "compressed or a spreadsheet"),
        ("wide.csv", b"\xff\xfel\0e\0g\0", "the text is UTF-16; try saving it as UTF-8"),
        ("image.dat", b"\x89PNG\r\n\x1a\n\0\0\0", "neither text nor WAV"),
        ("tone.wav", b"not a wave", "named .wav but does not begin with a RIFF header"),
    ] {
        let message = complaint(&room.file(name, content), &RATE);
        assert!(message.contains(expected) && message.contains(name), "{message}");
    }
    assert!(complaint(room.0.path(), &RATE).contains("it is a directory"));
    assert!(complaint(&room.path("missing.csv"), &RATE).contains("there is no such file"));
}

#[test]
fn denied_and_full_are_told_apart_from_other_failures() {
    use std::io::ErrorKind;
    let path = Path::new("x.csv");
    let reading = |kind: ErrorKind| RecordingError::from_io(path, kind.into());
    assert!(reading(ErrorKind::PermissionDenied).to_string().contains("permission denied; try"));
    assert!(reading(ErrorKind::TimedOut).to_string().contains("try copying the file to a local disk"));
    assert!(!reading(ErrorKind::TimedOut).is_about_writing());
    for (kind, fragment) in [
        (ErrorKind::NotFound, "there is no such directory; try"),
        (ErrorKind::PermissionDenied, "permission denied; try another directory"),
        (ErrorKind::StorageFull, "the disk is full; try"),
        (ErrorKind::FileTooLarge, "try another disk, or a shorter recording"),
    ] {
        let error = RecordingError::from_io_writing(path, kind.into());
        assert!(error.is_about_writing() && error.to_string().contains(fragment), "{error}");
    }
}

#[test]
fn headers_that_name_no_two_legs_are_explained() {
    for (text, expected) in [
        ("# only a comment\n\n", "there is no header line"),
        ("1.0,2.0\n1.5,2.5\n", "the first line holds numbers instead of column names"),
        ("1,0;2,0\n1,5;2,5\n", "the first line holds numbers instead of column names"),
        ("leg_a_v\n1\n", "there is no column leg_b_v, only leg_a_v;"),
        ("time_s,chan1,chan2\n0,1,2\n", "there is no column leg_a_v, only time_s, chan1, chan2;"),
        ("leg_a_mv;leg_b_mv\n1;2\n", "there is no column leg_a_v, only leg_a_mv, leg_b_mv;"),
        ("leg_a_v,leg_b_v,LEG_A_V\n1,2,3\n", "two columns leg_a_v"),
        ("leg_a_v,leg_b_v\n", "not one row of samples"),
        ("leg_a_v,leg_b_v\n\n# end\n", "not one row of samples"),
    ] {
        let message = text_complaint(text);
        assert!(message.contains(expected), "{text:?}: {message}");
    }
    assert!(text_complaint(&"leg".repeat(40_000)).contains("line 1 is longer than any header"));
}

#[test]
fn a_bad_field_is_named_by_line_and_column() {
    for (field, expected) in [
        ("NaN", "line 4, column leg_b_v: \"NaN\" is not a finite number"),
        ("-inf", "line 4, column leg_b_v: \"-inf\" is not a finite number"),
        ("1.2.3", "line 4, column leg_b_v: \"1.2.3\" is not a number"),
        ("5 V", "line 4, column leg_b_v: \"5 V\" is not a number"),
        ("", "line 4, column leg_b_v: \"\" is empty"),
        ("1000.0000006", "line 4, column leg_b_v: \"1000.0000006\" is beyond 1000 V"),
        ("-5e6", "line 4, column leg_b_v: \"-5e6\" is beyond 1000 V"),
        ("1,2", "line 4: 3 fields where the header names 2"),
        ("\"1", "line 4, column leg_b_v: \"\\\"1\" is not a number"),
    ] {
        for newline in ["\n", "\r\n"] {
            let text = format!("# bench\nleg_a_v,leg_b_v\n1,2\n3,{field}\n5,6\n").replace('\n', newline);
            // Quotes count only where they show up early; here they are a slip of one row.
            let text = if field.starts_with('"') {
                let filler = "1,2\n".repeat(100_000);
                let text = format!("leg_a_v,leg_b_v\n{filler}3,{field}\n5,6\n");
                let message = text_complaint(&text);
                assert!(message.contains(&expected.replace("line 4", "line 100002")), "{message}");
                continue;
            } else {
                text
            };
            let message = text_complaint(&text);
            assert!(message.contains(expected), "{field:?}: {message}");
        }
    }
    assert!(
        text_complaint("leg_a_v,leg_b_v\n1,2\n3\n").contains("line 3: 1 fields where the header names 2")
    );
    let late = format!("leg_a_v,leg_b_v\n{}\n\n7,x", "1,2\n".repeat(50_000));
    assert!(text_complaint(&late).contains("line 50003, column leg_b_v"), "{}", text_complaint(&late));
    let message = text_complaint("# leg_a_v,leg_b_v\n1,2\n3,x\n");
    assert!(message.contains("line 3, column leg_b_v"), "{message}");
}

#[test]
fn time_that_does_not_advance_evenly_is_named_by_line() {
    let timed = |times: &[&str]| {
        let rows: String = times.iter().map(|time| format!("{time},1,2\n")).collect();
        let room = Room::new();
        let path = room.file("x.csv", format!("time_s,leg_a_v,leg_b_v\n{rows}"));
        complaint(&path, &OpenOptions::default())
    };
    for (times, expected) in [
        (
            &["0", "0.001", "0.002", "0.001", "0.004"][..],
            "line 5: time_s runs backwards, from 0.002 to 0.001 s",
        ),
        (&["0", "0.001", "0.001", "0.002"], "line 4: time_s stands still at 0.001 s"),
        (
            &["0", "0.0010", "0.0020", "0.0034", "0.0044"],
            "line 5: time_s advances by 1.400 samples (0.0034 s)",
        ),
        (&["0", "0.0010", "0.0020", "0.0035", "0.0045"], "line 5: time_s advances by 1.500 samples"),
        (&["0", "0.001", "soon", "0.002"], "line 4, column time_s: \"soon\" is not a number"),
        (&["0", "0.001", "inf"], "line 4, column time_s: \"inf\" is not a finite number"),
        (&["7"], "the sample rate is not known"),
    ] {
        let message = timed(times);
        assert!(message.contains(expected), "{times:?}: {message}");
    }
    let mut late: Vec<String> = (0..6000).map(|row| format!("{:.3}", f64::from(row) * 1e-3)).collect();
    late[5500] = "2.000".into();
    let late: Vec<&str> = late.iter().map(String::as_str).collect();
    let message = timed(&late);
    assert!(message.contains("line 5502: time_s runs backwards, from 5.499 to 2 s"), "{message}");
}

#[test]
fn a_missing_rate_lists_the_three_ways_and_a_wrong_one_is_refused() {
    let room = Room::new();
    let bare = room.file("x.csv", "leg_a_v,leg_b_v\n1,2\n");
    let message = complaint(&bare, &OpenOptions::default());
    for way in ["a time_s column", "sample_rate_hz in ", "x.csv.toml", "--rate HZ"] {
        assert!(message.contains(way), "{message}");
    }
    for rate_hz in [0.0, -5.0, f64::NAN, f64::INFINITY, 1e12] {
        let message = complaint(&bare, &OpenOptions { rate_hz: Some(rate_hz), ..RATE });
        assert!(message.contains("could not use a sample rate of"), "{message}");
    }
    let timed = room.file("t.csv", "time_s,leg_a_v,leg_b_v\n0,1,2\n0.001,1,2\n0.002,1,2\n");
    let message = complaint(&timed, &RATE);
    assert!(message.contains("given is 1000000 Hz but time_s says 1000.000000 Hz"), "{message}");
}

#[test]
fn settings_that_make_no_sense_are_refused() {
    let room = Room::new();
    let path = room.file("x.csv", "leg_a_v,leg_b_v\n1,2\n");
    let message = complaint(&path, &OpenOptions { skew_ns: Some(1000), ..RATE });
    assert!(message.contains("below one sample period, 1000.000 ns"), "{message}");
    for rails_v in [(5.0, -5.0), (1.0, 1.0), (f64::NAN, 1.0), (-2000.0, 5.0)] {
        let message = complaint(&path, &OpenOptions { rails_v: Some(rails_v), ..RATE });
        assert!(message.contains("could not use rails of"), "{message}");
    }
}

#[test]
fn a_sidecar_with_a_slip_is_refused_with_the_key() {
    let room = Room::new();
    let path = room.file("x.csv", "leg_a_v,leg_b_v\n1,2\n");
    for (text, expected) in [
        ("sample_rate = 1000\n", "unknown field `sample_rate`"),
        ("sample_rate_hz = \"fast\"\n", "sample_rate_hz"),
        ("rail_low_v = [1, 2, 3]\n", "two numbers in brackets"),
        ("point = \n", "x.csv.toml"),
        ("gain_uncertainty_percent = -1\n", "gain_uncertainty_percent = -1 of the sidecar"),
        ("offset_uncertainty_v = [0, 5000]\n", "offset_uncertainty_v = 5000 of the sidecar"),
        ("sample_rate_hz = 1e15\n", "could not use a sample rate of"),
    ] {
        room.file("x.csv.toml", text);
        let message = complaint(&path, &OpenOptions::default());
        assert!(message.contains(expected), "{text:?}: {message}");
    }
}
