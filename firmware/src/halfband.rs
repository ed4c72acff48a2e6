//! Decimation by eight: three half-band low-pass filters in cascade, each halving the rate.
//!
//! A half-band filter has 1/2 in the centre and zeros at every other tap (Mintzer, IEEE Trans. ASSP-30,
//! 1982), so `y[m] = x[c]/2 + Σ h_i (x[c−d_i] + x[c+d_i])` with odd distances `d_i`. Coefficients after the
//! one-band design of Vaidyanathan and Nguyen (IEEE Trans. CAS-34, 1987).
//!
//! | stage | taps | products | rate |
//! |---|---|---|---|
//! | 1 | 11 | 3 | 1 → 1/2 |
//! | 2 | 15 | 4 | 1/2 → 1/4 |
//! | 3 | 51 | 13 | 1/4 → 1/8 |
//!
//! From 0 to 0.4 of the new rate the response is flat to ±0.0008 dB; what could fold into that range is
//! down by 87 dB (tested). Both modes pass the same filters, so their ratio is untouched.

/// Samples that go in at once ...
pub const INPUTS: usize = 256;
/// ... and come out.
pub const OUTPUTS: usize = INPUTS / 8;
/// Outputs after a restart that still contain what was before the first sample: 238 inputs' worth.
pub const UNSETTLED: usize = 30;

/// Side coefficients, outermost first.
const FIRST: [f32; 3] = [0.006_633_361, -0.051_035_584, 0.294_404_7];
const SECOND: [f32; 4] = [-0.002_474_169_8, 0.016_965_306, -0.067_678_46, 0.303_170_3];
const THIRD: [f32; 13] = [
    0.000_110_871_53,
    -0.000_343_266_97,
    0.000_834_709_4,
    -0.001_734_503_2,
    0.003_245_821_2,
    -0.005_632_384,
    0.009_244_988,
    -0.014_589_761,
    0.022_508_845,
    -0.034_700_24,
    0.055_520_203,
    -0.101_029_04,
    0.316_585_85,
];

/// Inputs a stage remembers: one less than its taps.
const fn memory(products: usize) -> usize {
    4 * products - 2
}

const FIRST_MEMORY: usize = memory(FIRST.len());
const SECOND_MEMORY: usize = memory(SECOND.len());
const THIRD_MEMORY: usize = memory(THIRD.len());

/// What the filters of one signal remember.
#[derive(Clone, Debug)]
pub struct Memory {
    first: [f32; FIRST_MEMORY],
    second: [f32; SECOND_MEMORY],
    third: [f32; THIRD_MEMORY],
}

/// Working space, the same for every signal: each stage's memory followed by its new inputs.
#[derive(Clone, Debug)]
pub struct Bench {
    first: [f32; FIRST_MEMORY + INPUTS],
    second: [f32; SECOND_MEMORY + INPUTS / 2],
    third: [f32; THIRD_MEMORY + INPUTS / 4],
}

impl Bench {
    /// Empty.
    pub const fn new() -> Self {
        Self {
            first: [0.0; FIRST_MEMORY + INPUTS],
            second: [0.0; SECOND_MEMORY + INPUTS / 2],
            third: [0.0; THIRD_MEMORY + INPUTS / 4],
        }
    }

    /// Where the next [`INPUTS`] samples go.
    pub fn inputs(&mut self) -> &mut [f32] {
        self.first.get_mut(FIRST_MEMORY..).unwrap_or(&mut [])
    }
}

impl Default for Bench {
    fn default() -> Self {
        Self::new()
    }
}

impl Memory {
    /// Nothing before the first sample.
    pub const fn new() -> Self {
        Self { first: [0.0; FIRST_MEMORY], second: [0.0; SECOND_MEMORY], third: [0.0; THIRD_MEMORY] }
    }

    /// Forgets what came before.
    pub fn restart(&mut self) {
        self.first.fill(0.0);
        self.second.fill(0.0);
        self.third.fill(0.0);
    }

    /// Filters the samples that lie in `bench` down to an eighth of their rate.
    pub fn decimate(&mut self, bench: &mut Bench, outputs: &mut [f32; OUTPUTS]) {
        let Bench { first, second, third } = bench;
        exchange(&mut self.first, first);
        halve::<{ FIRST.len() }, { FIRST_MEMORY + 7 }>(first, &FIRST, after(second, SECOND_MEMORY));
        exchange(&mut self.second, second);
        halve::<{ SECOND.len() }, { SECOND_MEMORY + 7 }>(second, &SECOND, after(third, THIRD_MEMORY));
        exchange(&mut self.third, third);
        halve::<{ THIRD.len() }, { THIRD_MEMORY + 7 }>(third, &THIRD, outputs);
    }
}

impl Default for Memory {
    fn default() -> Self {
        Self::new()
    }
}

fn after(samples: &mut [f32], memory: usize) -> &mut [f32] {
    samples.get_mut(memory..).unwrap_or(&mut [])
}

/// Puts the memory before the new samples and remembers the newest of them instead.
fn exchange<const MEMORY: usize>(memory: &mut [f32; MEMORY], samples: &mut [f32]) {
    if let Some(front) = samples.first_chunk_mut::<MEMORY>() {
        *front = *memory;
    }
    if let Some(back) = samples.last_chunk::<MEMORY>() {
        *memory = *back;
    }
}

/// Outputs made at once: they share most of their taps.
const AT_ONCE: usize = 4;

/// One stage: an output for every second sample from the newest tap on; products outermost first. `REACH`
/// is how many samples [`AT_ONCE`] outputs look at.
///
/// Sample m of the even ones being `e[m]`, an output is a sum of `side[i] (e[m + i] + e[m + last − i])` and
/// half an odd sample. Sides go four by four, so that the compiler keeps in registers what the next ones look
/// at too.
#[inline(never)]
fn halve<const SIDES: usize, const REACH: usize>(samples: &[f32], sides: &[f32; SIDES], outputs: &mut [f32]) {
    let last = 4 * SIDES - 2;
    let (sides_of_4, sides_left) = sides.as_chunks::<4>();
    let mut rest = samples;
    for group in outputs.as_chunks_mut::<AT_ONCE>().0 {
        let Some(taps) = rest.first_chunk::<REACH>() else { return };
        let mut sums = [0, 2, 4, 6].map(|first| 0.5 * taps[first + last / 2]);
        let mut add = |i: usize, side: f32| {
            for (m, sum) in sums.iter_mut().enumerate() {
                *sum += side * (taps[2 * (m + i)] + taps[last + 2 * m - 2 * i]);
            }
        };
        for (number, sides) in sides_of_4.iter().enumerate() {
            for (i, &side) in sides.iter().enumerate() {
                add(4 * number + i, side);
            }
        }
        for (i, &side) in sides_left.iter().enumerate() {
            add(4 * sides_of_4.len() + i, side);
        }
        *group = sums;
        rest = rest.get(2 * AT_ONCE..).unwrap_or_default();
    }
}
