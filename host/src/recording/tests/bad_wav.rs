//! Bad WAV files: each gets its own message.

use super::*;

#[test]
fn files_of_another_shape_are_refused() {
    let room = Room::new();
    let check = |path: &Path, expected: &str| {
        let message = complaint(path, &FULL_SCALE);
        assert!(message.contains(expected), "{message}");
    };
    check(&room.wav_of("mono.wav", 1, 16, 1000, &[1, 2, 3]), "it has 1 channel(s) where two are needed");
    check(&room.wav_of("many.wav", 4, 16, 1000, &[1, 2, 3, 4]), "it has 4 channel(s) where two are needed");
    check(&room.wav("eight.wav", 8, 1000, &[1, 2]), "it has 8-bit samples in 8-bit words");
    check(&room.wav("none.wav", 16, 1000, &[]), "it holds not one sample");
    check(&room.file("stub.wav", b"RIFF\0\0"), "the WAV header is not usable");
    check(&room.file("film.wav", b"RIFF\x24\0\0\0AVI LIST"), "the WAV header is not usable");
    let sound = room.wav("sound.wav", 16, 1000, &[1, 2]);
    let message = complaint(&sound, &OpenOptions::default());
    assert!(message.contains("--full-scale VOLTS, or full_scale_v in"), "{message}");
}

#[test]
fn samples_in_wider_words_are_refused_because_their_place_is_ambiguous() {
    let room = Room::new();
    let path = room.path("wide.wav");
    let sample_format = hound::SampleFormat::Int;
    let spec = hound::WavSpec { channels: 2, sample_rate: 1000, bits_per_sample: 24, sample_format };
    let spec = hound::WavSpecEx { spec, bytes_per_sample: 4 };
    let file = std::fs::File::create(&path).unwrap();
    let mut writer = hound::WavWriter::new_with_spec_ex(file, spec).unwrap();
    writer.write_sample(1).unwrap();
    writer.write_sample(2).unwrap();
    writer.finalize().unwrap();
    assert!(complaint(&path, &FULL_SCALE).contains("it has 24-bit samples in 32-bit words"));
}

#[test]
fn a_file_cut_short_is_refused_with_both_counts() {
    let room = Room::new();
    let path = room.wav("cut.wav", 16, 1000, &[5; 2000]);
    let whole = std::fs::read(&path).unwrap();
    std::fs::write(&path, &whole[..whole.len() - 1001]).unwrap();
    let message = complaint(&path, &FULL_SCALE);
    assert!(message.contains("promises 1000 pairs but the file ends after 749"), "{message}");
    // Three bytes of data: no whole number of samples.
    let mut odd = whole.clone();
    let length = odd.windows(4).position(|four| four == b"data").unwrap() + 4;
    odd[length..length + 4].copy_from_slice(&3_u32.to_le_bytes());
    std::fs::write(&path, odd).unwrap();
    let message = complaint(&path, &FULL_SCALE);
    assert!(message.contains("the WAV header is not usable"), "{message}");
}

#[test]
fn a_file_that_shrinks_while_it_is_read_is_noticed() {
    let room = Room::new();
    let path = room.wav("cut.wav", 16, 1000, &vec![5; 400_000]);
    let mut recording = open(&path, &FULL_SCALE).unwrap();
    std::fs::OpenOptions::new().write(true).open(&path).unwrap().set_len(500_000).unwrap();
    let (pairs, end) = drain(&mut recording, 1000);
    assert!(pairs.len() < 130_000);
    assert!(end.unwrap_err().to_string().contains("promises 200000 pairs but the file ends after"));
}

#[test]
fn a_float_that_is_no_number_is_named_by_pair_and_leg() {
    let room = Room::new();
    for (at, float, expected) in [
        (20_001, f32::NAN, "sample 10000 of leg B is not a finite number"),
        (40_000, f32::INFINITY, "sample 20000 of leg A is not a finite number"),
    ] {
        let mut samples = vec![0.25; 60_000];
        samples[at] = float;
        let path = room.float_wav("x.wav", 1000, &samples);
        assert!(complaint(&path, &FULL_SCALE).contains(expected));
        let (pairs, _) = drain(&mut open(&path, &FULL_SCALE).unwrap(), 777);
        assert_eq!(pairs.len(), at / 2);
    }
}

#[test]
fn a_full_scale_or_rate_that_cannot_be_is_refused() {
    let room = Room::new();
    let integer = room.wav("x.wav", 16, 1000, &[1, 2]);
    for full_scale_v in [0.0, -1.0, f64::NAN, 1e9] {
        let message = complaint(&integer, &OpenOptions { full_scale_v: Some(full_scale_v), ..FULL_SCALE });
        assert!(message.contains("could not use a full scale of"), "{message}");
    }
    let float = room.float_wav("f.wav", 1000, &[0.0, 0.0]);
    let message = complaint(&float, &OpenOptions { full_scale_v: Some(5000.0), ..FULL_SCALE });
    assert!(message.contains("try a value from 0.000001 to 2147 V"), "{message}");
    let message = complaint(&integer, &OpenOptions { rate_hz: Some(2000.0), ..FULL_SCALE });
    assert!(message.contains("given is 2000 Hz but the WAV header says 1000.000000 Hz"), "{message}");
}
