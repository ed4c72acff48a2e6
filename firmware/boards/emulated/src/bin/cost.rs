//! What each stage costs: counted instructions per sample pair, against budgets that fail the run.
//!
//! Run under the emulator's exact clock: `qemu-system-arm -M mps2-an386 -icount shift=10,sleep=off ...`
//! (`.ci/board cost` does). Instructions are not cycles; a Cortex-M4F needs somewhat more than one
//! cycle for each (not measured here).
#![no_std]
#![no_main]

use cortex_m_rt::entry;
use cortex_m_semihosting::{debug, hprintln};
use legwise_board_emulated::counter::Counter;
use legwise_firmware::account::Account;
use legwise_firmware::block::{BLOCK_PAIRS, Block};
use legwise_firmware::fft::{BINS, Complex, POINTS, transform};
use legwise_firmware::levels::LevelMeter;
use legwise_firmware::limit_check::{LimitCheck, LimitConfig, LimitEvent};
use legwise_firmware::outbox::Outbox;
use legwise_firmware::pipeline::{Buffers, Pipeline};
use legwise_firmware::settings;
use legwise_firmware::snippet_ring::SnippetRing;
use legwise_firmware::source::SourceDescription;
use legwise_firmware::spectrum::{LOWER_RUNG_BYTES, LOWER_RUNGS, SpectrumMeter};
use legwise_firmware::staging::Staging;
use legwise_firmware::storm::StormGate;
use legwise_protocol::framing::DEVICE_FRAME_BYTES;
use legwise_protocol::message::{GapCause, LegScale, Message, Settings, Summary};
use legwise_protocol::receivers::TABLE;
use legwise_protocol::units::Span;

/// Blocks a stage is counted over.
const BLOCKS: usize = 512;
const PAIRS: u32 = (BLOCKS * BLOCK_PAIRS) as u32;
const RATE_MHZ: u64 = 500_000_000;

/// 12 bits over −16.1 .. +20.9 V, the divider of the board descriptions.
const SCALE: LegScale = LegScale {
    mantissa: 1_184_289_133,
    shift: 17,
    offset_uv: -16_100_000,
    rail_low_code: 0,
    rail_high_code: 4095,
    gain_uncertainty_ppm: 3640,
    offset_uncertainty_uv: 36_000,
};

/// What the pair does while a stage is counted.
#[derive(Clone, Copy, PartialEq, Eq)]
enum Signal {
    /// Traffic at 19 200 baud and rests, well inside the limits.
    Quiet,
    /// The same, both legs 12 V up: outside all the time.
    Outside,
    /// The same with a pulse of four pairs every 24: an excursion each.
    Storm,
}

/// Makes codes; a congruential generator for bits and noise (Numerical Recipes' "ranqd1" constants).
struct Signals {
    signal: Signal,
    state: u32,
    sample: u32,
}

impl Signals {
    const fn new(signal: Signal) -> Self {
        Self { signal, state: 1, sample: 0 }
    }

    fn fill(&mut self, code_a: &mut [i32; BLOCK_PAIRS], code_b: &mut [i32; BLOCK_PAIRS]) {
        for (a, b) in code_a.iter_mut().zip(code_b) {
            self.state = self.state.wrapping_mul(1_664_525).wrapping_add(1_013_904_223);
            let is_busy = self.sample / 4096 % 3 == 0;
            let is_high = (self.sample / 26).wrapping_mul(2_654_435_761) >> 31 == 1;
            let half = match (is_busy, is_high) {
                (true, true) => 120,
                (true, false) => -110,
                (false, _) => 15,
            };
            let noise_a = (self.state >> 30) as i32 - 1;
            let noise_b = (self.state >> 20 & 3) as i32 - 1;
            let is_pulse = self.signal == Signal::Storm && self.sample % 24 < 4;
            let lift = if self.signal == Signal::Outside || is_pulse { 1330 } else { 0 };
            *a = 2060 + half + noise_a + lift;
            *b = 2060 - half + noise_b + lift;
            self.sample = self.sample.wrapping_add(1);
        }
    }
}

/// One line of the table; `false` when the budget is broken.
fn line(name: &str, instructions: u32, pairs: u32, budget: u32) -> bool {
    let hundredths = (u64::from(instructions) * 100 / u64::from(pairs.max(1))) as u32;
    let is_kept = hundredths <= budget * 100;
    let note = if is_kept { "" } else { "  OVER BUDGET" };
    hprintln!("{:<44} {:>4}.{:02}  {:>6}{}", name, hundredths / 100, hundredths % 100, budget, note);
    is_kept
}

fn description(skew_ns: i32) -> SourceDescription {
    SourceDescription { sample_rate_mhz: RATE_MHZ, skew_ns, legs: [SCALE; 2] }
}

/// Stages blocks of a signal and counts only what `stage` does with each.
fn count(signal: Signal, skew_ns: i32, stage: &mut dyn FnMut(&Block<'_>)) -> u32 {
    let mut total = 0;
    each_block(signal, skew_ns, &mut |block| {
        let counter = Counter::start();
        stage(block);
        total += counter.instructions();
    });
    total
}

fn each_block(signal: Signal, skew_ns: i32, deal: &mut dyn FnMut(&Block<'_>)) {
    let mut staging = Staging::new();
    staging.begin(&description(skew_ns));
    let mut signals = Signals::new(signal);
    let (mut code_a, mut code_b) = ([0; BLOCK_PAIRS], [0; BLOCK_PAIRS]);
    let mut blocks = 0;
    while blocks < BLOCKS {
        signals.fill(&mut code_a, &mut code_b);
        let mut used = 0;
        while used < BLOCK_PAIRS && blocks < BLOCKS {
            used += staging.fill(&code_a[used..], &code_b[used..]);
            if staging.is_full() {
                if let Some(block) = staging.block() {
                    deal(&block);
                }
                staging.advance();
                blocks += 1;
            }
        }
    }
}

fn count_staging(skew_ns: i32) -> u32 {
    let mut staging = Staging::new();
    staging.begin(&description(skew_ns));
    let mut signals = Signals::new(Signal::Quiet);
    let (mut code_a, mut code_b) = ([0; BLOCK_PAIRS], [0; BLOCK_PAIRS]);
    let mut total = 0;
    for _ in 0..BLOCKS {
        signals.fill(&mut code_a, &mut code_b);
        let counter = Counter::start();
        let used = staging.fill(&code_a, &code_b);
        if staging.is_full() {
            core::hint::black_box(staging.block());
            staging.advance();
        }
        staging.fill(&code_a[used..], &code_b[used..]);
        total += counter.instructions();
    }
    total
}

fn count_check(signal: Signal, settings: &Settings) -> u32 {
    let config = LimitConfig::new(&settings.limits, &settings.detection, [SCALE; 2], false);
    let (mut check, mut gate) = (LimitCheck::default(), StormGate::default());
    count(signal, 0, &mut |block| {
        check.check(&config, block, &mut |event| {
            if let LimitEvent::Closed(excursion) = event {
                gate.admit(excursion, &settings.detection, &config, &mut |message| {
                    core::hint::black_box(message);
                });
            }
        });
    })
}

fn count_pipeline(signal: Signal, settings: Settings, outbox: &mut Outbox<6144, 5120>) -> u32 {
    let mut buffers = Buffers::new();
    let mut pipeline = Pipeline::new(&mut buffers, description(0), settings);
    let mut signals = Signals::new(signal);
    let (mut code_a, mut code_b) = ([0; BLOCK_PAIRS], [0; BLOCK_PAIRS]);
    let mut frame = [0; DEVICE_FRAME_BYTES];
    let mut total = 0;
    for number in 0..BLOCKS {
        signals.fill(&mut code_a, &mut code_b);
        let first_sample = (number * BLOCK_PAIRS) as u64;
        let counter = Counter::start();
        pipeline.take(first_sample, &code_a, &code_b, GapCause::Skipped, &mut |message, sample| {
            outbox.record(message, sample);
        });
        while outbox.next_frame(&mut frame) > 0 {
            core::hint::black_box(&frame);
        }
        total += counter.instructions();
        outbox.acknowledge(u32::MAX);
    }
    total
}

/// One transform of anything, its output added up.
fn count_transform() -> u32 {
    let data = [Complex { re: 1.0, im: -0.5 }; POINTS];
    let (mut work, mut sums) = ([Complex::ZERO; POINTS], [Complex::ZERO; BINS]);
    let point = |n: usize, row: usize| data[(n + POINTS / 8 * row) % POINTS];
    let counter = Counter::start();
    transform(
        &mut work,
        |n| core::array::from_fn(|row| point(n, row).sum_and_difference(point(n, row + 4))),
        |bin, x, mirror| {
            if let Some(sum) = sums.get_mut(bin) {
                *sum = x.sum_and_difference(mirror).0;
            }
        },
    );
    let instructions = counter.instructions();
    core::hint::black_box(&sums);
    instructions
}

/// A snippet of 512 pairs of traffic, and its pairs.
fn count_snippet(settings: &Settings) -> (u32, u32) {
    let mut ring = SnippetRing::default();
    let (mut instructions, mut pairs, mut blocks) = (0, 0, 0);
    each_block(Signal::Quiet, 0, &mut |block| {
        ring.take(block);
        blocks += 1;
        if blocks == 8 {
            ring.trigger(1, block.first_sample, &settings.reporting, settings.detection.storm_samples);
        }
        if blocks == 10 {
            let counter = Counter::start();
            ring.finish(&mut |message| {
                if let Message::Snippet(part) = message {
                    pairs += u32::from(part.samples);
                }
            });
            instructions += counter.instructions();
        }
    });
    (instructions, pairs)
}

/// A summary through the outbox into a frame, and the bytes of the frame.
fn count_framing() -> (u32, u32) {
    let mut outbox = Outbox::<2048, 2048>::new();
    let span = Span { low: -1_000_000, high: 1_000_000 };
    let summary = Summary {
        first_sample: 1 << 40,
        samples: 250_000,
        leg_a: span,
        leg_b: span,
        twice_cm: span,
        dm: span,
        ..Summary::default()
    };
    let mut frame = [0; DEVICE_FRAME_BYTES];
    let counter = Counter::start();
    outbox.record(&Message::Summary(summary), 1 << 40);
    let bytes = outbox.next_frame(&mut frame);
    let instructions = counter.instructions();
    core::hint::black_box(&frame);
    (instructions, bytes as u32)
}

/// All rungs of the ladder.
fn count_spectra(settings: &Settings) -> u32 {
    let (mut spectrum, mut ring) = (SpectrumMeter::default(), SnippetRing::default());
    spectrum.begin(&description(0));
    let rest = (0, settings.detection.idle_below_uv);
    let mut total = 0;
    each_block(Signal::Quiet, 0, &mut |block| {
        ring.take(block);
        let counter = Counter::start();
        spectrum.take(block, &ring, rest, &settings.reporting, &mut |message| {
            core::hint::black_box(message);
        });
        total += counter.instructions();
    });
    total
}

#[entry]
fn main() -> ! {
    let mut settings = settings::for_receiver(&TABLE[0], RATE_MHZ);
    hprintln!("{:<44} {:>7}  {:>6}", "stage", "insns", "budget");
    hprintln!("{:<44} {:>7}", "", "/pair");
    let mut is_kept = true;
    is_kept &= line("calibration, alignment, modes, extremes", count_staging(0), PAIRS, 43);
    is_kept &= line("  the same on a skewed pair", count_staging(1000), PAIRS, 63);
    is_kept &= line("limit check, quiet", count_check(Signal::Quiet, &settings), PAIRS, 1);
    is_kept &= line("limit check, outside all the time", count_check(Signal::Outside, &settings), PAIRS, 39);
    is_kept &= line("limit check, storm", count_check(Signal::Storm, &settings), PAIRS, 66);
    let mut account = Account::default();
    let cost = count(Signal::Quiet, 0, &mut |block| account.take(block, block.spans.twice_cm));
    is_kept &= line("account", cost, PAIRS, 5);
    let mut levels = LevelMeter::default();
    is_kept &= line("levels", count(Signal::Quiet, 0, &mut |block| levels.take(block, 600_000)), PAIRS, 24);
    let mut ring = SnippetRing::default();
    is_kept &= line("snippet ring", count(Signal::Quiet, 0, &mut |block| ring.take(block)), PAIRS, 8);
    let (cost, pairs) = count_snippet(&settings);
    is_kept &= line("  compression, per pair of a snippet", cost, pairs, 680);
    is_kept &= line("spectra, every segment (50 % overlap)", count_spectra(&settings), PAIRS, 166);
    settings.reporting.spectrum_skip = 7;
    is_kept &= line("spectra, one segment in eight", count_spectra(&settings), PAIRS, 73);
    settings.reporting.spectrum_skip = u16::MAX;
    is_kept &= line("  filters of the ladder alone", count_spectra(&settings), PAIRS, 56);
    settings.reporting.spectrum_skip = 0;
    is_kept &= line("  one transform, per point", count_transform(), POINTS as u32, 63);

    let (cost, bytes) = count_framing();
    is_kept &= line("message and framing, per byte sent", cost, bytes, 120);
    let mut outbox = Outbox::new();
    let cost = count_pipeline(Signal::Quiet, settings, &mut outbox);
    is_kept &= line("everything, quiet, every segment", cost, PAIRS, 248);
    settings.reporting.spectrum_skip = 7;
    let cost = count_pipeline(Signal::Quiet, settings, &mut outbox);
    is_kept &= line("everything, quiet, one segment in eight", cost, PAIRS, 150);
    let cost = count_pipeline(Signal::Storm, settings, &mut outbox);
    is_kept &= line("everything, storm, one segment in eight", cost, PAIRS, 236);
    hprintln!("RAM of the spectra: {} bytes,", size_of::<SpectrumMeter>());
    hprintln!("  of each of {} lower rungs: {} bytes", LOWER_RUNGS, LOWER_RUNG_BYTES);
    debug::exit(if is_kept { debug::EXIT_SUCCESS } else { debug::EXIT_FAILURE });
    loop {}
}
