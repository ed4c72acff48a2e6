//! Tests of the room as a whole: what is read, what is refused and in which words, what round-trips.

mod bad_csv;
mod bad_wav;
mod good_csv;
mod good_wav;
mod round_trip;

use super::*;
use legwise_protocol::message::LegScale;
use std::path::PathBuf;

/// A directory that is removed with the value, and files in it.
struct Room(tempfile::TempDir);

impl Room {
    fn new() -> Self {
        Self(tempfile::tempdir().unwrap())
    }

    fn path(&self, name: &str) -> PathBuf {
        self.0.path().join(name)
    }

    fn file(&self, name: &str, content: impl AsRef<[u8]>) -> PathBuf {
        let path = self.path(name);
        std::fs::write(&path, content).unwrap();
        path
    }

    /// A stereo file by the WAV library.
    fn wav(&self, name: &str, bits: u16, rate_hz: u32, samples: &[i32]) -> PathBuf {
        self.wav_of(name, 2, bits, rate_hz, samples)
    }

    fn wav_of(&self, name: &str, channels: u16, bits: u16, rate_hz: u32, samples: &[i32]) -> PathBuf {
        let sample_format = hound::SampleFormat::Int;
        let spec = hound::WavSpec { channels, sample_rate: rate_hz, bits_per_sample: bits, sample_format };
        let path = self.path(name);
        let mut writer = hound::WavWriter::create(&path, spec).unwrap();
        samples.iter().for_each(|&sample| writer.write_sample(sample).unwrap());
        writer.finalize().unwrap();
        path
    }

    fn float_wav(&self, name: &str, rate_hz: u32, samples: &[f32]) -> PathBuf {
        let sample_format = hound::SampleFormat::Float;
        let spec = hound::WavSpec { channels: 2, sample_rate: rate_hz, bits_per_sample: 32, sample_format };
        let path = self.path(name);
        let mut writer = hound::WavWriter::create(&path, spec).unwrap();
        samples.iter().for_each(|&sample| writer.write_sample(sample).unwrap());
        writer.finalize().unwrap();
        path
    }
}

const RATE: OpenOptions =
    OpenOptions { rate_hz: Some(1e6), full_scale_v: None, skew_ns: None, rails_v: None };
const FULL_SCALE: OpenOptions =
    OpenOptions { rate_hz: None, full_scale_v: Some(24.0), skew_ns: None, rails_v: None };

/// Index and microvolts of one pair.
type Pair = (u64, i32, i32);

/// All pairs of a source, taken `chunk` at a time into dirty buffers, and how it ended.
fn drain<S: PairSource>(source: &mut S, chunk: usize) -> (Vec<Pair>, Result<(), S::Error>) {
    let [scale_a, scale_b] = source.describe().legs;
    let (mut a, mut b) = (vec![i32::MIN; chunk], vec![i32::MAX; chunk]);
    let mut pairs = Vec::new();
    loop {
        match source.take(&mut a, &mut b) {
            Ok(Taken::Nothing) => {}
            Ok(Taken::Finished) => return (pairs, Ok(())),
            Err(error) => return (pairs, Err(error)),
            Ok(Taken::Pairs { first_sample, pairs: count, gap }) => {
                assert!(gap.is_none() && count <= chunk);
                let codes = a[..count].iter().zip(&b[..count]);
                pairs.extend((first_sample..).zip(codes).map(|(sample, (&code_a, &code_b))| {
                    (sample, scale_a.microvolts(code_a), scale_b.microvolts(code_b))
                }));
            }
        }
    }
}

/// All pairs of a recording that must be sound.
fn pairs_of(path: &Path, options: &OpenOptions) -> Vec<Pair> {
    let (pairs, end) = drain(&mut open(path, options).unwrap(), 1000);
    end.unwrap();
    pairs
}

/// The message of whatever goes wrong first, opening or reading; it must end with what to try.
fn complaint(path: &Path, options: &OpenOptions) -> String {
    let error = match open(path, options) {
        Err(error) => error,
        Ok(mut recording) => drain(&mut recording, 1000).1.unwrap_err(),
    };
    let message = error.to_string();
    assert!(message.starts_with("could not "), "{message}");
    assert!(message.contains("try "), "{message}");
    message
}

/// A source of made-up codes.
struct Codes {
    legs: [LegScale; 2],
    rate_mhz: u64,
    pairs: Vec<(u64, i32, i32)>,
    next: usize,
}

impl PairSource for Codes {
    type Error = std::convert::Infallible;

    fn describe(&self) -> SourceDescription {
        SourceDescription { sample_rate_mhz: self.rate_mhz, skew_ns: 0, legs: self.legs }
    }

    fn take(&mut self, leg_a: &mut [i32], leg_b: &mut [i32]) -> Result<Taken, Self::Error> {
        let Some(&(first_sample, ..)) = self.pairs.get(self.next) else {
            return Ok(Taken::Finished);
        };
        let due = first_sample..;
        let run = self.pairs[self.next..].iter().zip(due).take_while(|(pair, sample)| pair.0 == *sample);
        let mut count = 0;
        for ((pair, _), (a, b)) in run.zip(leg_a.iter_mut().zip(leg_b.iter_mut())) {
            (*a, *b) = (pair.1, pair.2);
            count += 1;
        }
        self.next += count;
        Ok(Taken::Pairs { first_sample, pairs: count, gap: None })
    }
}
