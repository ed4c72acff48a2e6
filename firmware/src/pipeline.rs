//! The path of a sample pair, from raw codes to records.
//!
//! ```text
//!  codes ─► staging ─► block ─┬─► extremes ─► limits ─► storm gate ─► Excursion, Storm   (kept)
//!  (calibrated, aligned,      ├─► account ──────────────────────────► Summary, Totals
//!   split into modes)         ├─► levels ───────────────────────────► Levels
//!                             ├─► snippet ring ─────────────────────► Snippet            (kept)
//!                             └─► spectra ──────────────────────────► Spectra
//! ```
//!
//! Records depend on the samples and their indices only: any way of cutting the input into
//! deliveries gives the same records in the same order.

use crate::account::Account;
use crate::block::Block;
use crate::extremes::settled_twice_cm;
use crate::levels::LevelMeter;
use crate::limit_check::{LimitCheck, LimitConfig, LimitEvent};
use crate::snippet_ring::SnippetRing;
use crate::source::SourceDescription;
use crate::spectrum::SpectrumMeter;
use crate::staging::Staging;
use crate::storm::StormGate;
use crate::trace;
use core::ops::DerefMut;
use legwise_protocol::message::{End, EndCause, Gap, GapCause, Message, RateChange, Settings, Totals};

/// A record and the sample count at which it was made go to one of these.
pub type Records<'a> = dyn FnMut(&Message, u64) + 'a;

/// The stages that hold samples. All bytes of a new one are 0, so that a static one takes no flash.
#[derive(Debug, Default)]
pub struct Buffers {
    staging: Staging,
    meters: Meters,
}

#[derive(Debug, Default)]
struct Meters {
    levels: LevelMeter,
    snippets: SnippetRing,
    spectrum: SpectrumMeter,
}

impl Buffers {
    /// Empty ones.
    pub const fn new() -> Self {
        let meters = Meters {
            levels: LevelMeter::new(),
            snippets: SnippetRing::new(),
            spectrum: SpectrumMeter::new(),
        };
        Self { staging: Staging::new(), meters }
    }
}

/// All stages. `B` holds the large ones: a `Box`, a `&'static mut`.
#[derive(Debug)]
pub struct Pipeline<B> {
    buffers: B,
    stages: Stages,
}

/// The stages that hold a few numbers, and what is watched for.
#[derive(Debug)]
struct Stages {
    source: SourceDescription,
    settings: Settings,
    config: LimitConfig,
    is_skewed: bool,
    limits: LimitCheck,
    storm: StormGate,
    account: Account,
    /// Whether a limit was confirmed broken since [`Pipeline::take_alarm`].
    alarm: bool,
}

impl<B: DerefMut<Target = Buffers>> Pipeline<B> {
    /// A pipeline for a source; what `buffers` held before is forgotten. Settings must have passed
    /// [`crate::settings::is_valid`]; numbers out of range are bounded, not trusted.
    pub fn new(mut buffers: B, source: SourceDescription, settings: Settings) -> Self {
        let Buffers { staging, meters } = &mut *buffers;
        staging.begin(&source);
        meters.begin(&source);
        let is_skewed = staging.is_skewed();
        let stages = Stages {
            config: LimitConfig::new(&settings.limits, &settings.detection, source.legs, is_skewed),
            source,
            settings,
            is_skewed,
            limits: LimitCheck::default(),
            storm: StormGate::default(),
            account: Account::default(),
            alarm: false,
        };
        Self { buffers, stages }
    }

    /// The settings in force.
    pub const fn settings(&self) -> &Settings {
        &self.stages.settings
    }

    /// Index of the pair expected next.
    pub fn next_sample(&self) -> u64 {
        self.buffers.staging.next_sample()
    }

    /// Counts and extremes since the start.
    pub fn totals(&self) -> Totals {
        self.stages.account.totals(&self.stages.limits.counts())
    }

    /// Whether a limit is broken, or was since the last call. Edge suspects do not count.
    pub fn take_alarm(&mut self) -> bool {
        core::mem::take(&mut self.stages.alarm) | self.stages.limits.is_confirmed_outside()
    }

    /// Takes pairs; a `first_sample` beyond the expected one is a gap.
    pub fn take(
        &mut self,
        first_sample: u64,
        code_a: &[i32],
        code_b: &[i32],
        cause: GapCause,
        records: &mut Records<'_>,
    ) {
        let expected = self.next_sample();
        if first_sample != expected {
            self.gap(first_sample, first_sample.saturating_sub(expected), cause, records);
        }
        let (mut code_a, mut code_b) = (code_a, code_b);
        loop {
            let used = self.buffers.staging.fill(code_a, code_b);
            code_a = code_a.get(used..).unwrap_or(&[]);
            code_b = code_b.get(used..).unwrap_or(&[]);
            if !self.buffers.staging.is_full() {
                return;
            }
            self.deal(records);
        }
    }

    /// `samples` pairs are missing (0: some, not known how many); the next pair has index `next_sample`.
    pub fn gap(&mut self, next_sample: u64, samples: u64, cause: GapCause, records: &mut Records<'_>) {
        self.flush(records);
        let at = self.next_sample();
        // Before the first sample there is nothing to miss: the source simply starts there.
        if at > 0 || self.stages.account.totals(&self.stages.limits.counts()).samples > 0 {
            self.stages.account.gap(samples);
            records(&Message::Gap(Gap { first_sample: at, samples, cause }), at);
        }
        self.buffers.staging.restart(next_sample);
        self.buffers.meters.spectrum.break_off();
    }

    /// From a pair on the source takes pairs at another rate. The index goes on;
    /// lengths in the settings stay what they are in pairs.
    pub fn change_rate(&mut self, rate: RateChange, records: &mut Records<'_>) {
        self.buffers.meters.spectrum.change_rate(rate.first_sample, rate.sample_rate_mhz);
        records(&Message::Rate(rate), self.next_sample());
    }

    /// The link could not take everything: spectra become fewer for a while.
    pub fn note_shedding(&mut self) {
        self.buffers.meters.spectrum.note_shedding();
    }

    /// Deals with all staged pairs and sends one of the averages of spectra, for [`Self::end`] to come; `false`
    /// when there is none left.
    pub fn send_average(&mut self, records: &mut Records<'_>) -> bool {
        while self.deal(records) {}
        let sample = self.next_sample();
        self.buffers.meters.spectrum.send_average(&mut |message| records(message, sample))
    }

    /// Changes what is watched for, from the next pair on. Everything open is finished first.
    pub fn change(&mut self, settings: Settings, records: &mut Records<'_>) {
        self.flush(records);
        let stages = &mut self.stages;
        stages.settings = settings;
        stages.config =
            LimitConfig::new(&settings.limits, &settings.detection, stages.source.legs, stages.is_skewed);
        self.buffers.meters.spectrum.wind_up();
        records(&Message::Settings(settings), self.next_sample());
    }

    /// Finishes everything open and says `End`.
    pub fn end(&mut self, cause: EndCause, records: &mut Records<'_>) {
        while self.send_average(records) {}
        self.buffers.meters.spectrum.wind_up();
        self.flush(records);
        let totals = self.totals();
        records(&Message::End(End { cause, totals }), self.next_sample());
    }

    /// Deals with all staged pairs and finishes every interval, averages of spectra excepted.
    fn flush(&mut self, records: &mut Records<'_>) {
        while self.deal(records) {}
        let sample = self.buffers.staging.next_sample();
        self.stages.finish(&mut self.buffers.meters, sample, records);
    }

    /// Deals with one block; `false` when nothing was staged.
    fn deal(&mut self, records: &mut Records<'_>) -> bool {
        let Buffers { staging, meters } = &mut *self.buffers;
        let Some(block) = staging.block() else { return false };
        self.stages.deal(meters, &block, records);
        staging.advance();
        true
    }
}

impl Meters {
    fn begin(&mut self, source: &SourceDescription) {
        self.levels.restart();
        self.snippets.restart();
        self.spectrum.begin(source);
    }
}

impl Stages {
    fn deal(&mut self, meters: &mut Meters, block: &Block<'_>, records: &mut Records<'_>) {
        let sample = block.end_sample();
        let records = &mut |message: &Message| records(message, sample);
        let edge_step = i32::try_from(self.settings.detection.edge_step_uv).unwrap_or(i32::MAX);
        let settled = if self.is_skewed { settled_twice_cm(block, edge_step) } else { block.spans.twice_cm };

        meters.snippets.take(block);
        self.check_limits(&mut meters.snippets, block, records);
        meters.snippets.pass(records);
        self.storm.pass(sample, &self.settings.detection, records);

        self.account.take(block, settled);
        let reporting = self.settings.reporting;
        if self.account.interval_samples() >= reporting.summary_samples {
            self.finish_summary(records);
        }
        meters.levels.take(block, self.settings.detection.idle_below_uv);
        if meters.levels.samples() >= reporting.levels_samples {
            self.finish_levels(&mut meters.levels, records);
        }
        if reporting.spectrum_segments > 0 {
            let rest = (meters.levels.rest_uv(), self.settings.detection.idle_below_uv);
            meters.spectrum.take(block, &meters.snippets, rest, &reporting, records);
        }
    }

    fn check_limits(
        &mut self,
        snippets: &mut SnippetRing,
        block: &Block<'_>,
        records: &mut dyn FnMut(&Message),
    ) {
        let Self { limits, storm, settings, config, alarm, .. } = self;
        limits.check(config, block, &mut |event| match event {
            LimitEvent::Begun { number, sample } => {
                trace::begun(number, sample);
                snippets.trigger(number, sample, &settings.reporting, settings.detection.storm_samples);
            }
            LimitEvent::Closed(excursion) => {
                // One that begins and ends within a block is never seen open from out here.
                *alarm |= !excursion.is_edge_suspect;
                storm.admit(excursion, &settings.detection, config, records);
            }
        });
        self.alarm |= self.limits.is_confirmed_outside();
    }

    fn finish_summary(&mut self, records: &mut dyn FnMut(&Message)) {
        let alarm = self.limits.is_confirmed_outside();
        records(&Message::Summary(self.account.finish_interval(&self.limits.counts(), alarm)));
    }

    fn finish_levels(&mut self, levels: &mut LevelMeter, records: &mut dyn FnMut(&Message)) {
        records(&Message::Levels(levels.finish(self.settings.detection.idle_below_uv)));
        records(&Message::Totals(self.account.totals(&self.limits.counts())));
    }

    /// Finishes whatever is open: a gap, a change of settings or the end follows.
    fn finish(&mut self, meters: &mut Meters, sample: u64, records: &mut Records<'_>) {
        let records = &mut |message: &Message| records(message, sample);
        let Self { limits, storm, settings, config, alarm, .. } = self;
        limits.cut(&mut |event| {
            if let LimitEvent::Closed(excursion) = event {
                *alarm |= !excursion.is_edge_suspect;
                storm.admit(excursion, &settings.detection, config, records);
            }
        });
        self.storm.finish(records);
        meters.snippets.finish(records);
        if self.account.interval_samples() > 0 {
            self.finish_summary(records);
        }
        if meters.levels.samples() > 0 {
            self.finish_levels(&mut meters.levels, records);
        }
    }
}
