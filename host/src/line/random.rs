//! Random numbers of the simulated pair: one generator for decisions, one for noise.
//!
//! Decisions (bytes sent, jitter of a schedule) use SplitMix64 (Steele, Lea, Flood, *Fast splittable
//! pseudorandom number generators*, OOPSLA 2014). Noise uses eight interleaved xorshift64 generators
//! (Marsaglia, *Xorshift RNGs*, J. Stat. Software 8(14), 2003, triple 13, 7, 17) whose eight bytes are
//! added: the sum of n uniform variables (Irwin-Hall) with n = 8 has variance n (256^2 - 1)/12,
//! excess kurtosis -1.2/n = -0.15 and ends at 4.9 standard deviations. Both are written out here so
//! that a seed means the same waveform whatever crate versions are around.

use super::{BLOCK, Wave};

/// SplitMix64.
#[derive(Clone, Debug)]
pub(crate) struct Dice {
    state: u64,
}

impl Dice {
    /// A generator for `seed`; different `stream`s of one seed are unrelated.
    pub fn new(seed: u64, stream: u64) -> Self {
        let mut outer = Self { state: seed };
        let mixed = outer.next().wrapping_add(stream.wrapping_mul(0xd134_2543_de82_ef95));
        Self { state: mixed }
    }

    /// The next 64 bits.
    pub fn next(&mut self) -> u64 {
        self.state = self.state.wrapping_add(0x9e37_79b9_7f4a_7c15);
        let mut mixed = self.state;
        mixed = (mixed ^ (mixed >> 30)).wrapping_mul(0xbf58_476d_1ce4_e5b9);
        mixed = (mixed ^ (mixed >> 27)).wrapping_mul(0x94d0_49bb_1331_11eb);
        mixed ^ (mixed >> 31)
    }

    /// Uniform in 0..1.
    pub fn unit(&mut self) -> f64 {
        (self.next() >> 11) as f64 * (1.0 / (1u64 << 53) as f64)
    }

    /// Uniform in `low..=high`.
    pub fn between(&mut self, low: u16, high: u16) -> u16 {
        let span = u64::from(high.saturating_sub(low)) + 1;
        low.saturating_add((self.next() % span) as u16)
    }
}

/// A stream number for a name (FNV-1a, 64 bit; Fowler, Noll, Vo, public parameters).
pub(crate) fn stream_of(name: &str) -> u64 {
    name.bytes().fold(0xcbf2_9ce4_8422_2325, |hash, byte| {
        (hash ^ u64::from(byte)).wrapping_mul(0x0000_0100_0000_01b3)
    })
}

const LANES: usize = 8;
const EVEN_BYTES: u64 = 0x00ff_00ff_00ff_00ff;
/// Mean of the sum of eight bytes.
const MEAN: i32 = 1020;
/// Variance of the sum of eight bytes: 8 (256^2 - 1) / 12.
const VARIANCE: f64 = 8.0 * 65_535.0 / 12.0;

/// White noise, nearly Gaussian.
#[derive(Clone, Debug)]
pub(crate) struct Hiss {
    lanes: [u64; LANES],
}

impl Hiss {
    /// A generator for `seed`; different `stream`s of one seed are unrelated.
    pub fn new(seed: u64, stream: u64) -> Self {
        let mut dice = Dice::new(seed, stream);
        Self { lanes: std::array::from_fn(|_| dice.next() | 1) }
    }

    /// Adds noise of `rms` to a block.
    pub fn add(&mut self, rms: f64, wave: &mut Wave) {
        const { assert!(BLOCK.is_multiple_of(LANES)) };
        let scale = (rms / VARIANCE.sqrt()) as f32;
        for chunk in wave.chunks_exact_mut(LANES) {
            for (sample, lane) in chunk.iter_mut().zip(&mut self.lanes) {
                let mut bits = *lane;
                bits ^= bits << 13;
                bits ^= bits >> 7;
                bits ^= bits << 17;
                *lane = bits;
                let pairs = (bits & EVEN_BYTES) + ((bits >> 8) & EVEN_BYTES);
                let fours = pairs + (pairs >> 32);
                let sum = ((fours + (fours >> 16)) & 0xffff) as i32;
                *sample += (sum - MEAN) as f32 * scale;
            }
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn noise(blocks: usize) -> Vec<f64> {
        let mut hiss = Hiss::new(7, 1);
        let mut samples = Vec::new();
        for _ in 0..blocks {
            let mut wave = [0.0; BLOCK];
            hiss.add(1.0, &mut wave);
            samples.extend(wave.iter().map(|&value| f64::from(value)));
        }
        samples
    }

    /// Standard errors for N = 2^20: mean 1/sqrt(N) = 0.001, variance sqrt(2/N) = 0.0014, kurtosis
    /// sqrt(24/N) = 0.0048; four of each are allowed.
    #[test]
    fn noise_has_unit_variance_and_the_kurtosis_of_eight_bytes() {
        let samples = noise(4096);
        let count = samples.len() as f64;
        let mean = samples.iter().sum::<f64>() / count;
        let variance = samples.iter().map(|value| value * value).sum::<f64>() / count;
        let fourth = samples.iter().map(|value| value.powi(4)).sum::<f64>() / count;
        let excess = fourth / (variance * variance) - 3.0;
        println!("mean {mean:.5}, variance {variance:.5}, excess kurtosis {excess:.4}");
        assert!(mean.abs() < 4.0 * 0.001);
        assert!((variance - 1.0).abs() < 4.0 * 0.0014);
        assert!((excess + 0.15).abs() < 4.0 * 0.0048);
    }

    /// Autocorrelation of white noise has a standard error of 1/sqrt(N); 64 lags, five of them allowed.
    #[test]
    fn noise_is_white() {
        let samples = noise(4096);
        let count = samples.len();
        for lag in 1..=64 {
            let sum: f64 = samples.iter().zip(&samples[lag..]).map(|(one, other)| one * other).sum();
            let correlation = sum / count as f64;
            assert!(correlation.abs() < 5.0 / (count as f64).sqrt(), "lag {lag}: {correlation}");
        }
    }

    /// Reference output of SplitMix64 from state 0: 0xe220a8397b1dcdaf (from memory; also derivable
    /// from the three published constants).
    #[test]
    fn dice_follow_the_published_mixer() {
        assert_eq!(Dice { state: 0 }.next(), 0xe220_a839_7b1d_cdaf);
        let mut dice = Dice::new(3, 9);
        for _ in 0..1000 {
            let unit = dice.unit();
            assert!((0.0..1.0).contains(&unit));
            assert!((5..=9).contains(&dice.between(5, 9)));
        }
    }

    /// FNV-1a test vector for "a": 0xaf63dc4c8601ec8c (Noll's published test suite).
    #[test]
    fn names_hash_as_published() {
        assert_eq!(stream_of("a"), 0xaf63_dc4c_8601_ec8c);
    }
}
