//! Pairs to CSV: calibrated volts with six decimals, so that the text is the integer microvolts.

use super::RecordingError;
use super::writing::Blocks;
use legwise_firmware::source::PairSource;
use std::io::Write;

/// Writes header and rows. A gap needs `with_time`.
pub(crate) fn write_csv<S: PairSource>(
    output: &mut impl Write,
    blocks: &mut Blocks<'_, S>,
    with_time: bool,
) -> Result<(), RecordingError> {
    let part = blocks.part;
    let refuse = |error| RecordingError::from_io_writing(part, error);
    let [scale_a, scale_b] = blocks.description.legs;
    let rate_mhz = u128::from(blocks.description.sample_rate_mhz.max(1));
    let header: &[u8] = if with_time { b"time_s,leg_a_v,leg_b_v\n" } else { b"leg_a_v,leg_b_v\n" };
    output.write_all(header).map_err(refuse)?;
    let mut text = Vec::new();
    while let Some(block) = blocks.next_block()? {
        if block.gap_samples > 0 && !with_time {
            return Err(RecordingError::GapWithoutTime {
                path: part.into(),
                first_sample: block.first_sample,
                samples: block.gap_samples,
            });
        }
        text.clear();
        for (sample, (&a, &b)) in (block.first_sample..).zip(block.leg_a.iter().zip(block.leg_b)) {
            if with_time {
                // sample / rate in nanoseconds, to the nearest.
                let time_ns = (u128::from(sample) * 1_000_000_000_000 + rate_mhz / 2) / rate_mhz;
                push_decimal(&mut text, u64::try_from(time_ns).unwrap_or(u64::MAX), 9);
                text.push(b',');
            }
            push_volts(&mut text, scale_a.microvolts(a));
            text.push(b',');
            push_volts(&mut text, scale_b.microvolts(b));
            text.push(b'\n');
        }
        output.write_all(&text).map_err(refuse)?;
    }
    Ok(())
}

fn push_volts(text: &mut Vec<u8>, microvolts: i32) {
    if microvolts < 0 {
        text.push(b'-');
    }
    push_decimal(text, u64::from(microvolts.unsigned_abs()), 6);
}

/// `value / 10^places` with exactly `places` decimals.
fn push_decimal(text: &mut Vec<u8>, value: u64, places: usize) {
    // 20 digits hold any u64; one more byte for the point.
    let mut digits = [b'0'; 21];
    let (mut rest, mut used) = (value, 0);
    for slot in digits.iter_mut().rev() {
        if used == places {
            *slot = b'.';
        } else {
            *slot = b'0' + (rest % 10) as u8;
            rest /= 10;
        }
        used += 1;
        if rest == 0 && used > places + 1 {
            break;
        }
    }
    text.extend_from_slice(digits.get(digits.len() - used..).unwrap_or_default());
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn decimals_are_exact_at_every_length() {
        for (value, places, expected) in [
            (0, 6, "0.000000"),
            (1, 6, "0.000001"),
            (999_999, 6, "0.999999"),
            (1_000_000_000, 6, "1000.000000"),
            (12_345_678_901, 9, "12.345678901"),
            (u64::MAX, 9, "18446744073.709551615"),
        ] {
            let mut text = Vec::new();
            push_decimal(&mut text, value, places);
            assert_eq!(String::from_utf8(text).unwrap(), expected);
        }
    }
}
