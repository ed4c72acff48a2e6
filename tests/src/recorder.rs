//! A pipeline whose records are kept, with shorthand for picking them.

use legwise_firmware::pipeline::{Buffers, Pipeline};
use legwise_firmware::source::SourceDescription;
use legwise_protocol::cross::{self, BinCodes};
use legwise_protocol::message::{
    EndCause, Excursion, GapCause, Levels, Message, Mode, Settings, SpectraPart, Storm, Totals,
};
use legwise_protocol::power;

/// A record and the sample count at which it was made.
pub type Record = (Message, u64);

/// One bin of an average, V²/Hz.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Bin {
    /// Common mode.
    pub common: f64,
    /// Differential mode.
    pub differential: f64,
    /// Between them, `conj(C)·D`.
    pub cross: (f64, f64),
}

/// A whole average.
#[derive(Clone, Debug, PartialEq)]
pub struct Average {
    /// 0 is the full rate.
    pub rung: u8,
    /// Its first part: set, segments, place in time.
    pub part: SpectraPart,
    /// Its bins, from `part.from_bin` on.
    pub bins: Vec<Bin>,
}

/// A pipeline and everything it said.
#[derive(Debug)]
pub struct Recorder {
    /// The pipeline.
    pub pipeline: Pipeline<Box<Buffers>>,
    /// What it said, in order.
    pub records: Vec<Record>,
}

impl Recorder {
    /// A fresh pipeline.
    pub fn new(board: SourceDescription, settings: Settings) -> Self {
        Self { pipeline: Pipeline::new(Box::default(), board, settings), records: Vec::new() }
    }

    /// Feeds pairs that follow without a hole.
    pub fn feed(&mut self, code_a: &[i32], code_b: &[i32]) {
        self.feed_at(self.pipeline.next_sample(), code_a, code_b, GapCause::Skipped);
    }

    /// Feeds pairs from `first_sample` on.
    pub fn feed_at(&mut self, first_sample: u64, code_a: &[i32], code_b: &[i32], cause: GapCause) {
        let records = &mut self.records;
        self.pipeline.take(first_sample, code_a, code_b, cause, &mut |message, sample| {
            records.push((message.clone(), sample));
        });
    }

    /// Reports a gap.
    pub fn gap(&mut self, next_sample: u64, samples: u64, cause: GapCause) {
        let records = &mut self.records;
        self.pipeline.gap(next_sample, samples, cause, &mut |message, sample| {
            records.push((message.clone(), sample));
        });
    }

    /// Changes the settings.
    pub fn change(&mut self, settings: Settings) {
        let records = &mut self.records;
        self.pipeline.change(settings, &mut |message, sample| records.push((message.clone(), sample)));
    }

    /// Ends the run.
    pub fn end(&mut self) {
        let records = &mut self.records;
        self.pipeline.end(EndCause::SourceExhausted, &mut |message, sample| {
            records.push((message.clone(), sample));
        });
    }

    /// All excursions, in order.
    pub fn excursions(&self) -> Vec<Excursion> {
        self.pick(|message| if let Message::Excursion(excursion) = message { Some(*excursion) } else { None })
    }

    /// All storms, in order.
    pub fn storms(&self) -> Vec<Storm> {
        self.pick(|message| if let Message::Storm(storm) = message { Some(*storm) } else { None })
    }

    /// All levels, in order.
    pub fn levels(&self) -> Vec<Levels> {
        self.pick(|message| if let Message::Levels(levels) = message { Some(*levels) } else { None })
    }

    /// The totals so far.
    pub fn totals(&self) -> Totals {
        self.pipeline.totals()
    }

    /// The first whole spectrum of a mode at the full rate, V²/Hz per bin.
    pub fn spectrum(&self, mode: Mode) -> Vec<f64> {
        self.spectra(mode).into_iter().next().unwrap()
    }

    /// Every whole spectrum of a mode at the full rate, V²/Hz per bin.
    pub fn spectra(&self, mode: Mode) -> Vec<Vec<f64>> {
        let of_bin = |bin: &Bin| match mode {
            Mode::Common => bin.common,
            Mode::Differential => bin.differential,
        };
        let whole = self.averages().into_iter().filter(|average| average.rung == 0);
        whole.map(|average| average.bins.iter().map(of_bin).collect()).collect()
    }

    /// Every average of every rung, put together from its parts.
    pub fn averages(&self) -> Vec<Average> {
        let mut averages: Vec<Average> = Vec::new();
        for part in self.pick(|message| if let Message::Spectra(part) = message { Some(*part) } else { None })
        {
            if part.first_bin == part.from_bin {
                averages.push(Average { rung: part.rung, part, bins: Vec::new() });
            }
            let average = averages.last_mut().unwrap();
            assert_eq!(usize::from(part.first_bin), usize::from(part.from_bin) + average.bins.len());
            let (codes, rest) = part.codes.as_slice().as_chunks::<{ cross::BIN_BYTES }>();
            assert!(rest.is_empty());
            average.bins.extend(codes.iter().map(|bytes| {
                let codes = BinCodes::from_bytes(*bytes);
                Bin {
                    common: power::decode(codes.common),
                    differential: power::decode(codes.differential),
                    cross: (cross::decode(codes.cross.0), cross::decode(codes.cross.1)),
                }
            }));
        }
        for average in &averages {
            assert_eq!(average.bins.len(), usize::from(average.part.bins));
        }
        averages
    }

    /// All parts of spectra at the full rate, in order.
    pub fn spectrum_parts(&self) -> Vec<SpectraPart> {
        self.pick(|message| match message {
            Message::Spectra(part) if part.rung == 0 => Some(*part),
            _ => None,
        })
    }

    /// What `choose` finds in the records.
    pub fn pick<T>(&self, choose: impl FnMut(&Message) -> Option<T>) -> Vec<T> {
        self.records.iter().map(|(message, _)| message).filter_map(choose).collect()
    }
}

/// Runs a whole waveform and ends.
pub fn examine(board: SourceDescription, settings: Settings, code_a: &[i32], code_b: &[i32]) -> Recorder {
    let mut recorder = Recorder::new(board, settings);
    recorder.feed(code_a, code_b);
    recorder.end();
    recorder
}
