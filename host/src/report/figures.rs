//! Turns numbers into text: the one place where digits and units are chosen.
//!
//! Voltages a reader compares with limits keep three decimals (1 mV); everything else keeps about
//! four significant digits and takes the unit prefix that avoids leading zeros.

/// A signed voltage for comparing with limits: `+12.345 V`.
pub fn volts_signed(volts: f64) -> String {
    format!("{:+.3} V", no_negative_zero(volts, 3))
}

/// A voltage with the prefix that suits it: `2.185 V`, `254.2 mV`, `13.1 µV`.
pub fn volts(volts: f64) -> String {
    scaled(volts, &[(1.0, "V"), (1e-3, "mV"), (1e-6, "µV"), (1e-9, "nV")])
}

/// A signed voltage with the prefix that suits it: `-254.2 mV`, `+2.185 V`.
pub fn volts_signed_scaled(value: f64) -> String {
    let text = volts(value.abs());
    if value < 0.0 { format!("-{text}") } else { format!("+{text}") }
}

/// An uncertainty: `±12 mV`, two significant digits.
pub fn uncertainty_volts(volts: f64) -> String {
    let (value, unit) = prefixed(volts, &[(1.0, "V"), (1e-3, "mV"), (1e-6, "µV")]);
    format!("±{} {unit}", significant(value, 2))
}

/// An area in volt-seconds: `12.50 µV·s`.
pub fn volt_seconds(area: f64) -> String {
    scaled(area, &[(1.0, "V·s"), (1e-3, "mV·s"), (1e-6, "µV·s"), (1e-9, "nV·s")])
}

/// A short time: `2.000 µs`, `15.00 ms`, `1.500 s`; from two minutes on as [`span`].
pub fn seconds(seconds: f64) -> String {
    if seconds.abs() >= 120.0 {
        return span(seconds);
    }
    scaled(seconds, &[(1.0, "s"), (1e-3, "ms"), (1e-6, "µs"), (1e-9, "ns")])
}

/// A long time: `11 h 59 min 58 s`; below two minutes as [`seconds`].
pub fn span(length_s: f64) -> String {
    if length_s.abs() < 120.0 {
        return seconds(length_s);
    }
    let whole = length_s.round() as i64;
    let (hours, minutes, rest) = (whole / 3600, whole / 60 % 60, whole % 60);
    if hours == 0 { format!("{minutes} min {rest} s") } else { format!("{hours} h {minutes} min {rest} s") }
}

/// A frequency: `50.00 Hz`, `19.20 kHz`, `1.000 MHz`; five digits.
pub fn hertz(frequency: f64) -> String {
    let (value, unit) = prefixed(frequency, &[(1e6, "MHz"), (1e3, "kHz"), (1.0, "Hz"), (1e-3, "mHz")]);
    format!("{} {unit}", significant(value, 5))
}

/// An uncertainty of a frequency: `±8.6 Hz`, two significant digits.
pub fn uncertainty_hertz(frequency: f64) -> String {
    let (value, unit) = prefixed(frequency, &[(1e3, "kHz"), (1.0, "Hz"), (1e-3, "mHz")]);
    format!("±{} {unit}", significant(value, 2))
}

/// A sample rate: `500 k pairs/s`.
pub fn pair_rate(rate_hz: f64) -> String {
    if rate_hz >= 1e6 {
        format!("{} M pairs/s", trimmed(rate_hz / 1e6))
    } else if rate_hz >= 1e3 {
        format!("{} k pairs/s", trimmed(rate_hz / 1e3))
    } else {
        format!("{} pairs/s", trimmed(rate_hz))
    }
}

/// A level in decibels: `23.4 dB`.
pub fn decibels(level: f64) -> String {
    format!("{level:.1} dB")
}

/// A ratio of voltages: `50.1 mV/V (-26.0 dB)`.
pub fn ratio(ratio: f64) -> String {
    format!("{}/V ({:.1} dB)", volts(ratio), 20.0 * ratio.log10())
}

/// An uncertainty of an angle: `±2.1 deg`, two significant digits.
pub fn uncertainty_degrees(degrees: f64) -> String {
    format!("±{} deg", significant(degrees, 2))
}

/// A bit rate: `19.200 kbit/s`; five digits.
pub fn bit_rate(bits_per_s: f64) -> String {
    let (value, unit) = prefixed(bits_per_s, &[(1e6, "Mbit/s"), (1e3, "kbit/s"), (1.0, "bit/s")]);
    format!("{} {unit}", significant(value, 5))
}

/// A noise density: `1.250 µV/√Hz`.
pub fn noise_density(v_per_rthz: f64) -> String {
    scaled(v_per_rthz, &[(1.0, "V/√Hz"), (1e-3, "mV/√Hz"), (1e-6, "µV/√Hz"), (1e-9, "nV/√Hz")])
}

/// A share as a percentage that never rounds up to "all" or down to "nothing".
pub fn share(part: f64) -> String {
    let percent = part * 100.0;
    if part <= 0.0 || part >= 1.0 {
        format!("{percent:.0} %")
    } else if percent > 99.999 {
        "more than 99.999 %".to_string()
    } else if percent > 99.0 {
        // Cut, not rounded: 99.9996 must not become 100.
        format!("{:.3} %", (percent * 1000.0).floor() / 1000.0)
    } else if percent >= 0.001 {
        format!("{} %", significant(percent, 3))
    } else {
        format!("{percent:.1e} %")
    }
}

/// A count with its thousands set apart: `1 234 567`.
pub fn count(number: u64) -> String {
    let digits = number.to_string();
    let mut text = String::with_capacity(digits.len() + digits.len() / 3);
    for (position, digit) in digits.chars().enumerate() {
        if position > 0 && (digits.len() - position).is_multiple_of(3) {
            text.push(' ');
        }
        text.push(digit);
    }
    text
}

/// A count with its noun in the right number: `1 gap`, `3 gaps`.
pub fn counted(number: u64, one: &str, many: &str) -> String {
    format!("{} {}", count(number), if number == 1 { one } else { many })
}

/// Resistance: `560 ohm`, `4.7 kohm`.
pub fn ohms(resistance: f64) -> String {
    if resistance >= 1000.0 {
        format!("{} kohm", trimmed(resistance / 1000.0))
    } else {
        format!("{} ohm", trimmed(resistance))
    }
}

/// Rounds a computed voltage to 0.1 µV, so that stored text carries no meaningless digits.
pub fn rounded_volts(volts: f64) -> f64 {
    (volts * 1e7).round() / 1e7
}

/// Microvolts in volts: the nearest `f64` to the exact decimal.
pub fn volts_of_uv(microvolts: i64) -> f64 {
    microvolts as f64 / 1e6
}

/// Twice microvolts in volts: the nearest `f64` to the exact decimal.
pub fn volts_of_twice_uv(twice_microvolts: i64) -> f64 {
    twice_microvolts as f64 / 2e6
}

/// Exactly the nearest double to a power of ten: `powi` is off by a bit for negative ones.
pub(crate) fn power_of_ten(exponent: i32) -> f64 {
    format!("1e{exponent}").parse().unwrap_or(f64::NAN)
}

/// A round value beside an axis, with the prefix that leaves one to three digits before the point, none after where they are 0:
/// `100 mHz`, `1 kHz`, `10 µV/√Hz`.
pub fn tick(value: f64, unit: &str) -> String {
    const PREFIXES: [(i32, &str); 8] =
        [(-12, "p"), (-9, "n"), (-6, "µ"), (-3, "m"), (0, ""), (3, "k"), (6, "M"), (9, "G")];
    let exponent = if value > 0.0 { (value.log10() + 1e-9).floor() as i32 } else { 0 };
    let thousands = exponent.div_euclid(3) * 3;
    let (power, prefix) = PREFIXES
        .into_iter()
        .find(|(power, _)| *power == thousands)
        .unwrap_or(if thousands < 0 { (-12, "p") } else { (9, "G") });
    let number = format!("{:.2}", value / power_of_ten(power));
    format!("{} {prefix}{unit}", number.trim_end_matches('0').trim_end_matches('.'))
}

/// A round level beside an axis: `−40 dB`.
pub fn tick_decibels(level: f64) -> String {
    format!("{level:.0} dB").replace('-', "\u{2212}")
}

/// A small difference as a percentage: `+0.398 %`.
pub fn percent_signed(share: f64) -> String {
    format!("{:+.3} %", 100.0 * no_negative_zero(share, 5))
}

/// The uncertainty of a percentage: `±0.005 %`.
pub fn uncertainty_percent(share: f64) -> String {
    format!("±{:.3} %", 100.0 * share)
}

/// An angle with its uncertainty: `+0.058° ±0.003°`.
pub fn degrees(angle: f64, uncertainty: f64) -> String {
    format!("{:+.3}° ±{uncertainty:.3}°", no_negative_zero(angle, 3))
}

fn scaled(value: f64, units: &[(f64, &str)]) -> String {
    let (value, unit) = prefixed(value, units);
    format!("{} {unit}", significant(value, 4))
}

/// The value in the first unit (largest first) in which it does not begin with a zero.
fn prefixed<'a>(value: f64, units: &[(f64, &'a str)]) -> (f64, &'a str) {
    let fits = |factor: f64| value.abs() >= factor * 0.999_95;
    let first = units.first().copied().unwrap_or((1.0, ""));
    if value == 0.0 {
        let plain = units.iter().find(|unit| unit.0 == 1.0).copied().unwrap_or(first);
        return (0.0, plain.1);
    }
    let unit = units.iter().copied().find(|unit| fits(unit.0)).or(units.last().copied()).unwrap_or(first);
    (value / unit.0, unit.1)
}

/// `digits` significant digits, never in scientific notation.
fn significant(value: f64, digits: usize) -> String {
    if value == 0.0 {
        return "0".to_string();
    }
    let magnitude = value.abs().log10().floor() as i64;
    let decimals = (digits as i64 - 1 - magnitude).clamp(0, 9) as usize;
    let text = format!("{value:.decimals$}");
    // Rounding may have carried into one digit more: 9.9996 -> 10.000.
    let figures = text.chars().filter(char::is_ascii_digit).count();
    let leading = text.trim_start_matches('-').chars().take_while(|c| matches!(c, '0' | '.')).count();
    if decimals > 0 && leading == 0 && figures > digits {
        return format!("{value:.*}", decimals - 1);
    }
    text
}

/// Up to three decimals, none that say nothing.
fn trimmed(value: f64) -> String {
    let text = format!("{value:.3}");
    text.trim_end_matches('0').trim_end_matches('.').to_string()
}

fn no_negative_zero(value: f64, decimals: i32) -> f64 {
    if value.abs() < 0.5 * 10_f64.powi(-decimals) { 0.0 } else { value }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn voltages_take_the_prefix_that_avoids_leading_zeros() {
        assert_eq!(volts(2.1851), "2.185 V");
        assert_eq!(volts(0.254_237), "254.2 mV");
        assert_eq!(volts(0.999_96), "1.000 V");
        assert_eq!(volts(-0.013_147), "-13.15 mV");
        assert_eq!(volts(1.31e-5), "13.10 µV");
        assert_eq!(volts(0.0), "0 V");
        assert_eq!(volts_signed(-0.000_4), "+0.000 V");
        assert_eq!(volts_signed(-7.0), "-7.000 V");
        assert_eq!(volts_signed_scaled(-0.2), "-200.0 mV");
        assert_eq!(uncertainty_volts(0.0124), "±12 mV");
    }

    #[test]
    fn rounding_does_not_add_a_digit() {
        assert_eq!(volts(9.9996), "10.00 V");
        assert_eq!(seconds(0.099_999_9), "100.0 ms");
        assert_eq!(hertz(999.999_7), "1.0000 kHz");
    }

    #[test]
    fn times_are_short_or_long() {
        assert_eq!(seconds(2e-6), "2.000 µs");
        assert_eq!(seconds(0.015), "15.00 ms");
        assert_eq!(seconds(90.0), "90.00 s");
        assert_eq!(span(43_198.4), "11 h 59 min 58 s");
        assert_eq!(span(125.0), "2 min 5 s");
        assert_eq!(span(0.5), "500.0 ms");
    }

    #[test]
    fn a_share_is_never_rounded_to_all_or_nothing() {
        assert_eq!(share(1.0), "100 %");
        assert_eq!(share(0.0), "0 %");
        assert_eq!(share(0.999_999_9), "more than 99.999 %");
        assert_eq!(share(0.999_989), "99.998 %");
        assert_eq!(share(0.5), "50.0 %");
        assert_eq!(share(1e-9), "1.0e-7 %");
    }

    #[test]
    fn counts_set_thousands_apart() {
        assert_eq!(count(0), "0");
        assert_eq!(count(1_234_567), "1 234 567");
        assert_eq!(counted(1, "gap", "gaps"), "1 gap");
        assert_eq!(counted(1000, "gap", "gaps"), "1 000 gaps");
    }

    #[test]
    fn frequencies_rates_and_resistances_read_as_the_trade_writes_them() {
        assert_eq!(hertz(19_200.0), "19.200 kHz");
        assert_eq!(hertz(50.0), "50.000 Hz");
        assert_eq!(uncertainty_hertz(8.6272), "±8.6 Hz");
        assert_eq!(pair_rate(500_000.0), "500 k pairs/s");
        assert_eq!(pair_rate(487_300.0), "487.3 k pairs/s");
        assert_eq!(ohms(4700.0), "4.7 kohm");
        assert_eq!(ohms(560.0), "560 ohm");
        assert_eq!(volt_seconds(1.25e-5), "12.50 µV·s");
        assert_eq!(noise_density(1.25e-6), "1.250 µV/√Hz");
        assert_eq!(decibels(23.44), "23.4 dB");
    }

    #[test]
    fn integer_voltages_convert_to_the_nearest_double_of_their_decimal() {
        assert_eq!(volts_of_uv(12_000_001).to_string(), "12.000001");
        assert_eq!(volts_of_twice_uv(-14_000_001).to_string(), "-7.0000005");
        assert_eq!(rounded_volts(0.254_237_288_13).to_string(), "0.2542373");
    }

    #[test]
    fn values_carry_the_prefix_of_the_trade() {
        for (value, unit, text) in [
            (0.1, "Hz", "100 mHz"),
            (1.0, "Hz", "1 Hz"),
            (50.0, "Hz", "50 Hz"),
            (1e3, "Hz", "1 kHz"),
            (1e5, "Hz", "100 kHz"),
            (2.5e5, "Hz", "250 kHz"),
            (1e6, "Hz", "1 MHz"),
            (1e-9, "V/√Hz", "1 nV/√Hz"),
            (1e-6, "V/√Hz", "1 µV/√Hz"),
            (1e-4, "V/√Hz", "100 µV/√Hz"),
            (1.0, "V/√Hz", "1 V/√Hz"),
            (0.238_418_6, "Hz", "238.42 mHz"),
        ] {
            assert_eq!(tick(value, unit), text);
        }
        for exponent in -12..12 {
            let text = tick(10_f64.powi(exponent), "V");
            let digits: f64 = text.split(' ').next().unwrap().parse().unwrap();
            assert!([1.0, 10.0, 100.0].contains(&digits), "{text}");
        }
    }

    #[test]
    fn levels_and_mismatches_carry_their_sign_and_no_negative_zero() {
        assert_eq!((tick_decibels(-40.0), tick_decibels(20.0)), ("−40 dB".to_owned(), "20 dB".to_owned()));
        assert_eq!(
            (percent_signed(0.003_98), percent_signed(-1e-9)),
            ("+0.398 %".to_owned(), "+0.000 %".to_owned())
        );
        assert_eq!(uncertainty_percent(5.2e-5), "±0.005 %");
        assert_eq!(degrees(-0.000_2, 0.003), "+0.000° ±0.003°");
    }
}
