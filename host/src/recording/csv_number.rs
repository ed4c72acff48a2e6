//! The text of a voltage to integer microvolts.
//!
//! Plain decimals with up to six places, which is what this tool writes, are exact integers and taken
//! digit by digit. Everything else (more places, exponents) goes through a correctly rounding float
//! parser and is then rounded to the nearest microvolt; where both apply they agree.

use legwise_protocol::units::Microvolts;

/// Longest text of a number.
const LONGEST_BYTES: usize = 64;

/// What is wrong with a field.
#[derive(Clone, Copy, Debug, PartialEq, Eq, thiserror::Error)]
pub enum CellFault {
    /// Nothing in it.
    #[error("is empty; try removing the line, or exporting the recording without missing values")]
    Empty,
    /// Not a decimal number.
    #[error(
        "is not a number; try plain decimal numbers, with a decimal comma only where columns are separated by semicolon or tab"
    )]
    NotANumber,
    /// NaN or infinity.
    #[error(
        "is not a finite number; try removing the line, or exporting the recording without missing values"
    )]
    NotFinite,
    /// Beyond ±1000 V.
    #[error("is beyond 1000 V; try converting the column to volts")]
    BeyondBound,
}

/// Microvolts of a voltage in volts. `is_decimal_comma` where a comma cannot be a delimiter.
#[inline]
pub(crate) fn microvolts(cell: &[u8], is_decimal_comma: bool) -> Result<i32, CellFault> {
    match plain_microvolts(cell) {
        Some(microvolts) => Ok(microvolts),
        None => {
            let volts = number(cell, is_decimal_comma)?;
            Microvolts::try_from_volts(volts).map(Microvolts::uv).ok_or(CellFault::BeyondBound)
        }
    }
}

/// A finite number.
#[inline]
pub(crate) fn number(cell: &[u8], is_decimal_comma: bool) -> Result<f64, CellFault> {
    let cell = cell.trim_ascii();
    if cell.is_empty() {
        return Err(CellFault::Empty);
    }
    let parsed = if is_decimal_comma && cell.contains(&b',') {
        let mut text = [0; LONGEST_BYTES];
        let text = text.get_mut(..cell.len()).ok_or(CellFault::NotANumber)?;
        if cell.contains(&b'.') {
            return Err(CellFault::NotANumber);
        }
        for (to, &from) in text.iter_mut().zip(cell) {
            *to = if from == b',' { b'.' } else { from };
        }
        fast_float2::parse::<f64, _>(&*text)
    } else {
        fast_float2::parse::<f64, _>(cell)
    };
    match parsed {
        Ok(value) if value.is_finite() => Ok(value),
        Ok(_) => Err(CellFault::NotFinite),
        Err(_) => Err(CellFault::NotANumber),
    }
}

/// Microvolts of `[-]d{1,3}[.d{0,6}]`, exact; `None` for any other text.
#[inline]
fn plain_microvolts(cell: &[u8]) -> Option<i32> {
    let (digits, is_negative) = match cell {
        [b'-', digits @ ..] => (digits, true),
        digits => (digits, false),
    };
    if digits.len() > 10 {
        return None;
    }
    let (mut value, mut whole_digits, mut places) = (0_i32, 0, None);
    for &byte in digits {
        match (byte, places) {
            (b'.', None) => places = Some(0),
            (b'0'..=b'9', None) if whole_digits < 3 => {
                value = value * 10 + i32::from(byte - b'0');
                whole_digits += 1;
            }
            (b'0'..=b'9', Some(count)) if count < 6 => {
                value = value * 10 + i32::from(byte - b'0');
                places = Some(count + 1);
            }
            _ => return None,
        }
    }
    if whole_digits == 0 {
        return None;
    }
    let factor = [1_000_000, 100_000, 10_000, 1000, 100, 10, 1].get(places.unwrap_or(0))?;
    Some(if is_negative { -value * factor } else { value * factor })
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_exact_path_agrees_with_the_float_path_on_every_form() {
        let mut text = String::new();
        for step in 0..2_000_000_i64 {
            let uv = step * 999_983 % 1_999_999_999 - 999_999_999;
            let places = (step % 7) as usize;
            let sign = if uv < 0 { "-" } else { "" };
            let digits = format!("{:06}", uv.abs() % 1_000_000);
            text.clear();
            std::fmt::Write::write_fmt(
                &mut text,
                format_args!("{sign}{}.{}", uv.abs() / 1_000_000, &digits[..places]),
            )
            .unwrap();
            let exact = plain_microvolts(text.as_bytes()).unwrap();
            let float: f64 = text.parse().unwrap();
            assert_eq!(Some(exact), Microvolts::try_from_volts(float).map(Microvolts::uv), "{text}");
        }
    }

    #[test]
    fn every_form_of_a_number_reads_the_same_and_the_rest_is_named() {
        for text in ["1.5", " 1.5 ", "1.50000000", "15e-1", "+1.5", "1.5000004", "1.4999996"] {
            assert_eq!(microvolts(text.as_bytes(), false), Ok(1_500_000), "{text}");
        }
        assert_eq!(microvolts(b"-0,25", true), Ok(-250_000));
        assert_eq!(microvolts(b"-0,25", false), Err(CellFault::NotANumber));
        assert_eq!(microvolts(b"1.234,5", true), Err(CellFault::NotANumber));
        assert_eq!(microvolts(b"1000", false), Ok(1_000_000_000));
        assert_eq!(microvolts(b"-1000.000001", false), Err(CellFault::BeyondBound));
        for (text, fault) in [
            ("", CellFault::Empty),
            ("  ", CellFault::Empty),
            ("NaN", CellFault::NotFinite),
            ("-inf", CellFault::NotFinite),
            ("1e999", CellFault::NotFinite),
            ("2.5 V", CellFault::NotANumber),
            (".", CellFault::NotANumber),
            ("-", CellFault::NotANumber),
            ("1.2.3", CellFault::NotANumber),
            ("0x10", CellFault::NotANumber),
        ] {
            assert_eq!(microvolts(text.as_bytes(), false), Err(fault), "{text:?}");
        }
    }
}
