//! A pipeline whose records are kept, with shorthand for picking them.

use legwise_firmware::pipeline::{Buffers, Pipeline};
use legwise_firmware::source::SourceDescription;
use legwise_protocol::message::{
    EndCause, Excursion, GapCause, Levels, Message, Mode, Settings, SpectrumPart, Storm, Totals,
};
use legwise_protocol::power;

/// A record and the sample count at which it was made.
pub type Record = (Message, u64);

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

    /// The first whole spectrum of a mode, V²/Hz per bin.
    pub fn spectrum(&self, mode: Mode) -> Vec<f64> {
        self.spectra(mode).into_iter().next().unwrap()
    }

    /// Every whole spectrum of a mode, V²/Hz per bin.
    pub fn spectra(&self, mode: Mode) -> Vec<Vec<f64>> {
        let parts = self.spectrum_parts().into_iter().filter(|part| part.mode == mode);
        let mut spectra: Vec<Vec<f64>> = Vec::new();
        for part in parts {
            if part.first_bin == 0 {
                spectra.push(Vec::new());
            }
            let bins = spectra.last_mut().unwrap();
            assert_eq!(bins.len(), usize::from(part.first_bin), "parts come in order");
            let codes = part.codes.as_slice().chunks_exact(2);
            bins.extend(codes.map(|code| power::decode(u16::from_le_bytes([code[0], code[1]]))));
        }
        for bins in &spectra {
            assert_eq!(bins.len(), 513);
        }
        spectra
    }

    /// All parts of spectra, in order.
    pub fn spectrum_parts(&self) -> Vec<SpectrumPart> {
        self.pick(|message| if let Message::Spectrum(part) = message { Some(*part) } else { None })
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
