//! Lossless compression of sample pairs: mid/side, first difference, Rice codes.
//!
//! Method: Rice 1979 and CCSDS 121.0-B for the codes, Kiely, *Selecting the Golomb parameter in
//! Rice coding*, IPN Progress Report 42-159, 2004 for bounding the parameter. Each block stands on
//! its own, so a lost message costs that message only.
//!
//! ```text
//!  block = header, mid stream, side stream        bits most significant first, zero-padded to a byte
//!
//!  header: pairs-1 (6 bits) | k_mid (5) | k_side (5) | width_mid (6) | width_side (6)
//!          | first mid (33 bits, two's complement) | first side (33 bits, two's complement)
//!  stream: for pairs 2..n the zig-zag u of the first difference:
//!          k = 31  -> every u as `width` raw bits
//!          else q = u >> k; q < 8: q ones, a zero, k low bits;  q >= 8: eight ones, `width` raw bits
//!  mid M = (A+B) >> 1, side D = A-B;   A = M + ((D+1) >> 1), B = A - D   (arithmetic shifts)
//! ```

/// Pairs in one block at most.
pub const BLOCK_PAIRS: usize = 64;
/// Bytes one block can take at most, for codes anywhere in an `i32`.
pub const BLOCK_BYTES: usize = longest_block_bytes(32, BLOCK_PAIRS);
const HEADER_BITS: usize = 6 + 5 + 5 + 6 + 6 + 33 + 33;
const ESCAPE_QUOTIENT: u64 = 8;
const RAW: u32 = 31;

/// Bytes a block of `pairs` pairs can take at most when every code fits `code_bits` bits.
///
/// Header, then raw differences: no stream is ever longer than raw. Mid differences of n-bit codes
/// take n+1 bits in zig-zag form, side differences n+2. Saturates.
pub const fn longest_block_bytes(code_bits: usize, pairs: usize) -> usize {
    let pair_bits = code_bits.saturating_mul(2).saturating_add(3);
    let stream_bits = pairs.saturating_sub(1).saturating_mul(pair_bits);
    HEADER_BITS.saturating_add(stream_bits).div_ceil(8)
}

/// Why a block could not be read.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum BlockError {
    /// The bytes end inside a block.
    Truncated,
    /// A value does not fit the code range.
    OutOfRange,
}

impl core::fmt::Display for BlockError {
    fn fmt(&self, f: &mut core::fmt::Formatter<'_>) -> core::fmt::Result {
        f.write_str(match self {
            Self::Truncated => "could not decode waveform block: it ends too early",
            Self::OutOfRange => "could not decode waveform block: a value is outside the code range",
        })
    }
}

impl core::error::Error for BlockError {}

/// Writes up to [`BLOCK_PAIRS`] pairs as one block; returns the bytes used.
///
/// `None` when there is nothing to write, more than one block, or `output` is too small
/// ([`BLOCK_BYTES`] always suffice).
pub fn encode_block(leg_a: &[i32], leg_b: &[i32], output: &mut [u8]) -> Option<usize> {
    let pairs = leg_a.len();
    if pairs == 0 || pairs > BLOCK_PAIRS || leg_b.len() != pairs {
        return None;
    }
    let mut mid = [0_u64; BLOCK_PAIRS];
    let mut side = [0_u64; BLOCK_PAIRS];
    let (mut last_mid, mut last_side) = mid_side(*leg_a.first()?, *leg_b.first()?);
    let (first_mid, first_side) = (last_mid, last_side);
    let rest = leg_a.iter().zip(leg_b).skip(1);
    for ((&a, &b), (mid, side)) in rest.zip(mid.iter_mut().zip(side.iter_mut())) {
        let (this_mid, this_side) = mid_side(a, b);
        *mid = zigzag(this_mid - last_mid);
        *side = zigzag(this_side - last_side);
        (last_mid, last_side) = (this_mid, this_side);
    }
    let (mid, side) = (mid.get(..pairs - 1)?, side.get(..pairs - 1)?);
    let (mid_code, side_code) = (Code::choose(mid), Code::choose(side));

    let mut bits = BitWriter { output, used_bits: 0 };
    bits.put(pairs as u64 - 1, 6)?;
    bits.put(u64::from(mid_code.k), 5)?;
    bits.put(u64::from(side_code.k), 5)?;
    bits.put(u64::from(mid_code.width), 6)?;
    bits.put(u64::from(side_code.width), 6)?;
    bits.put(first_mid as u64, 33)?;
    bits.put(first_side as u64, 33)?;
    for &value in mid {
        mid_code.put(value, &mut bits)?;
    }
    for &value in side {
        side_code.put(value, &mut bits)?;
    }
    Some(bits.used_bits.div_ceil(8))
}

/// Reads one block from the front of `input` into the two legs; returns pairs and bytes used.
///
/// # Errors
/// When the bytes end too early or hold values no encoder writes.
pub fn decode_block(
    input: &[u8],
    leg_a: &mut [i32; BLOCK_PAIRS],
    leg_b: &mut [i32; BLOCK_PAIRS],
) -> Result<(usize, usize), BlockError> {
    let mut bits = BitReader { input, used_bits: 0 };
    let pairs = bits.take(6)? as usize + 1;
    let (k_mid, k_side) = (bits.take(5)? as u32, bits.take(5)? as u32);
    let (width_mid, width_side) = (bits.take(6)? as u32, bits.take(6)? as u32);
    let first_mid = sign_extend(bits.take(33)?, 33);
    let first_side = sign_extend(bits.take(33)?, 33);
    let mut mids = [first_mid; BLOCK_PAIRS];
    read_stream(&mut bits, Code { k: k_mid, width: width_mid }, &mut mids, pairs)?;
    let mut sides = [first_side; BLOCK_PAIRS];
    read_stream(&mut bits, Code { k: k_side, width: width_side }, &mut sides, pairs)?;
    let legs = leg_a.iter_mut().zip(leg_b.iter_mut());
    for ((a, b), (&mid, &side)) in legs.zip(mids.iter().zip(&sides)).take(pairs) {
        let wide_a = mid + ((side + 1) >> 1);
        *a = i32::try_from(wide_a).map_err(|_| BlockError::OutOfRange)?;
        *b = i32::try_from(wide_a - side).map_err(|_| BlockError::OutOfRange)?;
    }
    Ok((pairs, bits.used_bits.div_ceil(8)))
}

fn mid_side(a: i32, b: i32) -> (i64, i64) {
    let (a, b) = (i64::from(a), i64::from(b));
    ((a + b) >> 1, a - b)
}

/// 0, -1, 1, -2 ... to 0, 1, 2, 3 ...
fn zigzag(value: i64) -> u64 {
    ((value << 1) ^ (value >> 63)) as u64
}

fn unzigzag(value: u64) -> i64 {
    (value >> 1) as i64 ^ -((value & 1) as i64)
}

fn sign_extend(value: u64, bits: u32) -> i64 {
    ((value << (64 - bits)) as i64) >> (64 - bits)
}

fn read_stream(
    bits: &mut BitReader<'_>,
    code: Code,
    values: &mut [i64; BLOCK_PAIRS],
    pairs: usize,
) -> Result<(), BlockError> {
    let [first, rest @ ..] = values;
    let mut last = *first;
    for value in rest.iter_mut().take(pairs - 1) {
        last += unzigzag(code.take(bits)?);
        if last.unsigned_abs() > 1 << 33 {
            return Err(BlockError::OutOfRange);
        }
        *value = last;
    }
    Ok(())
}

/// floor(log2(0.69 mean)), at least 0 (Kiely 2004); no division: the sum is compared with the count scaled up.
fn k_of_mean(values: &[u64]) -> u32 {
    let sum = values.iter().fold(0_u64, |sum, &value| sum.saturating_add(value));
    let scaled = sum.saturating_mul(177) >> 8; // 0.69 = 177/256
    let mut k = 0;
    while k < 30 && (values.len() as u64) << (k + 1) <= scaled {
        k += 1;
    }
    k
}

/// Parameter of one Rice stream.
#[derive(Clone, Copy)]
struct Code {
    /// Low bits sent as they are; [`RAW`] sends all of them.
    k: u32,
    /// Bits of an escaped value.
    width: u32,
}

impl Code {
    /// The k that makes the stream shortest; raw where that is no longer.
    ///
    /// The k of the mean is right for noise alone. Data edges are few and large: they pull the mean
    /// up, cost no more than an escape each, and the best k lies below; hence the search from 0 up to
    /// just above the mean's.
    fn choose(values: &[u64]) -> Self {
        let largest = values.iter().copied().max().unwrap_or(0);
        let width = 64 - largest.leading_zeros();
        let most = (k_of_mean(values) + 1).min(30);
        let length = |k| Self { k, width }.stream_bits(values);
        let k = (0..=most).min_by_key(|&k| length(k)).unwrap_or(0);
        let raw_bits = u64::from(width) * values.len() as u64;
        Self { k: if length(k) >= raw_bits { RAW } else { k }, width }
    }

    fn stream_bits(self, values: &[u64]) -> u64 {
        values.iter().map(|&value| self.bits_of(value)).sum()
    }

    fn bits_of(self, value: u64) -> u64 {
        let quotient = value >> self.k;
        if quotient < ESCAPE_QUOTIENT {
            quotient + 1 + u64::from(self.k)
        } else {
            ESCAPE_QUOTIENT + u64::from(self.width)
        }
    }

    fn put(self, value: u64, bits: &mut BitWriter<'_>) -> Option<()> {
        if self.k == RAW {
            return bits.put(value, self.width);
        }
        let quotient = value >> self.k;
        if quotient < ESCAPE_QUOTIENT {
            bits.put((1 << (quotient + 1)) - 2, quotient as u32 + 1)?;
            bits.put(value, self.k)
        } else {
            bits.put((1 << ESCAPE_QUOTIENT) - 1, ESCAPE_QUOTIENT as u32)?;
            bits.put(value, self.width)
        }
    }

    fn take(self, bits: &mut BitReader<'_>) -> Result<u64, BlockError> {
        if self.k == RAW {
            return bits.take(self.width);
        }
        let mut quotient = 0;
        while quotient < ESCAPE_QUOTIENT && bits.take(1)? == 1 {
            quotient += 1;
        }
        if quotient < ESCAPE_QUOTIENT {
            Ok(quotient << self.k | bits.take(self.k)?)
        } else {
            bits.take(self.width)
        }
    }
}

struct BitWriter<'a> {
    output: &'a mut [u8],
    used_bits: usize,
}

impl BitWriter<'_> {
    /// Appends the low `count` bits of `value`, most significant first.
    fn put(&mut self, value: u64, count: u32) -> Option<()> {
        let mut left = count;
        while left > 0 {
            let inside = (self.used_bits % 8) as u32;
            let byte = self.output.get_mut(self.used_bits / 8)?;
            if inside == 0 {
                *byte = 0;
            }
            let now = left.min(8 - inside);
            let chunk = (value >> (left - now)) as u8 & (0xFF_u16 >> (8 - now)) as u8;
            *byte |= chunk << (8 - inside - now);
            self.used_bits += now as usize;
            left -= now;
        }
        Some(())
    }
}

struct BitReader<'a> {
    input: &'a [u8],
    used_bits: usize,
}

impl BitReader<'_> {
    fn take(&mut self, count: u32) -> Result<u64, BlockError> {
        let mut value = 0;
        let mut left = count;
        while left > 0 {
            let inside = (self.used_bits % 8) as u32;
            let byte = self.input.get(self.used_bits / 8).ok_or(BlockError::Truncated)?;
            let now = left.min(8 - inside);
            let chunk = byte >> (8 - inside - now) & (0xFF_u16 >> (8 - now)) as u8;
            value = value << now | u64::from(chunk);
            self.used_bits += now as usize;
            left -= now;
        }
        Ok(value)
    }
}

#[cfg(test)]
mod tests;
