//! Figures as text: the rounding that makes machines agree, and the forms that readers see.

use std::fmt::{self, Write};

use super::ReportError;

/// Keys of frequencies that come from exact arithmetic: every machine finds the same double, so none is rounded.
const EXACT_KEYS: [&str; 12] = [
    "channel_hz",
    "injection_hz",
    "output_hz",
    "achieved_hz",
    "error_hz",
    "vco_hz",
    "reference_hz",
    "pfd_hz",
    "offset_hz",
    "tone_offset_hz",
    "vco_distance_hz",
    "worst_offset_hz",
];

/// Significant digits of a figure that is neither a level nor exact.
pub(crate) const SIGNIFICANT_DIGITS: usize = 10;

/// Decimals of a figure in decibels.
pub(crate) const DECIBEL_DECIMALS: usize = 4;

/// Returns what [`push_figure`] appends.
#[cfg(test)]
fn figure_text(key: &str, value: f64) -> Result<String, ReportError> {
    let mut text = String::with_capacity(24);
    push_figure(&mut text, key, value)?;
    Ok(text)
}

/// Appends a figure as JSON and CSV write it, rounded by the unit that its key names.
///
/// Decibels: 4 decimals. Exact frequencies: the nearest double in full. Everything else: 10 significant digits.
///
/// # Errors
/// `NotFinite` for NaN and infinities.
pub(crate) fn push_figure(out: &mut String, key: &str, value: f64) -> Result<(), ReportError> {
    if !value.is_finite() {
        return Err(ReportError::NotFinite { key: key.to_owned(), found: value });
    }
    if value.abs() < 1e9 && value.fract() == 0.0 {
        push_whole(out, value);
    } else if key.ends_with("_db") || key.ends_with("_dbc") || key.ends_with("_dbc_per_hz") {
        push_decimals(out, value);
    } else if EXACT_KEYS.contains(&key.strip_prefix("boundary_").unwrap_or(key)) {
        push_shortest(out, value);
    } else {
        push_digits(out, value);
    }
    Ok(())
}

/// Appends a whole number below 1e15: printing one to many digits is slow, and nothing is to be rounded.
fn push_whole(out: &mut String, value: f64) {
    #[allow(clippy::cast_possible_truncation, reason = "a whole number below 1e15")]
    let whole = value as i64;
    push(out, format_args!("{whole}"));
}

fn push(out: &mut String, figure: fmt::Arguments<'_>) {
    // A string takes whatever is written to it.
    let _ = out.write_fmt(figure);
}

/// Text of one figure on the stack.
struct Short {
    bytes: [u8; 40],
    length: usize,
}

impl Short {
    /// Returns formatted text; empty where it does not fit.
    fn new(figure: fmt::Arguments<'_>) -> Self {
        let mut short = Self { bytes: [0; 40], length: 0 };
        if short.write_fmt(figure).is_err() {
            short.length = 0;
        }
        short
    }

    fn text(&self) -> &str {
        std::str::from_utf8(&self.bytes[..self.length]).unwrap_or("")
    }
}

impl Write for Short {
    fn write_str(&mut self, text: &str) -> fmt::Result {
        let end = self.length + text.len();
        self.bytes.get_mut(self.length..end).ok_or(fmt::Error)?.copy_from_slice(text.as_bytes());
        self.length = end;
        Ok(())
    }
}

/// Appends a figure rounded to [`DECIBEL_DECIMALS`], without trailing zeros.
fn push_decimals(out: &mut String, value: f64) {
    if value.abs() >= 1e11 {
        // Beyond 15 digits the decimals may not be the shortest that read back.
        let rounded = format!("{value:.DECIBEL_DECIMALS$}").parse().unwrap_or(value);
        return push_shortest(out, rounded);
    }
    let short = Short::new(format_args!("{value:.DECIBEL_DECIMALS$}"));
    let text = short.text().trim_end_matches('0').trim_end_matches('.');
    out.push_str(if text == "-0" { "0" } else { text });
}

/// Appends a figure rounded to [`SIGNIFICANT_DIGITS`], without trailing zeros: fewer than 16 digits are the shortest
/// decimal that reads back, so they need not be read and printed again.
fn push_digits(out: &mut String, value: f64) {
    let short = Short::new(format_args!("{value:.*e}", SIGNIFICANT_DIGITS - 1));
    let Some((mantissa, exponent)) = short.text().split_once('e') else { return push_shortest(out, value) };
    let exponent: i32 = exponent.parse().unwrap_or(0);
    let mantissa = mantissa.trim_end_matches('0').trim_end_matches('.');
    let (sign, mantissa) = mantissa.strip_prefix('-').map_or(("", mantissa), |rest| ("-", rest));
    out.push_str(sign);
    if !(-5..16).contains(&exponent) {
        return push(out, format_args!("{mantissa}e{exponent}"));
    }
    let (first, rest) = mantissa.split_once('.').unwrap_or((mantissa, ""));
    match usize::try_from(exponent) {
        Err(_) => {
            out.push_str("0.");
            (exponent + 1..0).for_each(|_| out.push('0'));
            out.push_str(first);
            out.push_str(rest);
        }
        Ok(places) => {
            out.push_str(first);
            let (before, after) = rest.split_at(places.min(rest.len()));
            out.push_str(before);
            (before.len()..places).for_each(|_| out.push('0'));
            if !after.is_empty() {
                out.push('.');
                out.push_str(after);
            }
        }
    }
}

/// Appends the shortest decimal that reads back as the same double; zero has no sign.
fn push_shortest(out: &mut String, value: f64) {
    if value.abs() < 1e15 && value.fract() == 0.0 {
        push_whole(out, value);
    } else if (1e-5..1e16).contains(&value.abs()) {
        push(out, format_args!("{value}"));
    } else {
        push(out, format_args!("{value:e}"));
    }
}

/// Returns the shortest decimal that reads back as the same double; zero has no sign.
fn shortest(value: f64) -> String {
    let mut text = String::new();
    push_shortest(&mut text, value);
    text
}

/// Returns a number with a true minus sign, for readers.
pub(crate) fn signed(text: &str) -> String {
    text.replace('-', "\u{2212}")
}

/// Returns a level or margin for readers, two decimals: `−56.38`.
pub(crate) fn decibel(value: f64) -> String {
    let text = format!("{value:.2}");
    signed(if text == "-0.00" { "0.00" } else { &text })
}

/// Returns a figure for readers with so many significant digits and no trailing zeros.
pub(crate) fn significant(value: f64, digits: usize) -> String {
    let rounded = format!("{value:.*e}", digits.max(1) - 1).parse().unwrap_or(value);
    signed(&shortest(rounded))
}

/// Returns a figure with the SI prefix that brings it to 1 … 999: `12.5 kHz`.
pub(crate) fn with_prefix(value: f64, unit: &str, digits: usize) -> String {
    const PREFIXES: [(f64, &str); 8] =
        [(1e9, "G"), (1e6, "M"), (1e3, "k"), (1.0, ""), (1e-3, "m"), (1e-6, "µ"), (1e-9, "n"), (1e-12, "p")];
    if value == 0.0 {
        return format!("0 {unit}");
    }
    // The prefix is chosen after rounding, so that 999.9996 Hz with six digits is 1 kHz and not 1000 Hz.
    let rounded: f64 = format!("{value:.*e}", digits.max(1) - 1).parse().unwrap_or(value);
    let (scale, prefix) = PREFIXES.into_iter().find(|(scale, _)| rounded.abs() >= *scale).unwrap_or((1e-12, "p"));
    format!("{} {prefix}{unit}", significant(rounded / scale, digits))
}

/// Returns a count with thin spaces between thousands.
pub(crate) fn count(value: u64) -> String {
    let digits = value.to_string();
    let mut text = String::with_capacity(digits.len() + digits.len() / 3 * 3);
    for (position, digit) in digits.chars().enumerate() {
        if position > 0 && (digits.len() - position).is_multiple_of(3) {
            text.push('\u{202f}');
        }
        text.push(digit);
    }
    text
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn rounds_by_the_unit_in_the_key() {
        let cases = [
            ("level_dbc", -56.380_012_34, "-56.38"),
            ("margin_db", -0.000_01, "0"),
            ("phase_error_deg", 0.123_456_789_012_3, "0.123456789"),
            ("channel_hz", 433_333_333.333_333_3, "433333333.3333333"),
            ("boundary_tone_offset_hz", 66_666.666_666_666_67, "66666.66666666667"),
            ("jitter_s", 1.234_567_890_12e-12, "1.23456789e-12"),
            ("unity_gain_hz", 61_234.567_890_123, "61234.56789"),
            ("anything", 1e30, "1e30"),
        ];
        for (key, value, text) in cases {
            assert_eq!(figure_text(key, value).unwrap(), text, "{key}");
        }
    }

    /// Asserts that a figure is printed as its rounded value is.
    fn check_digits(value: f64) {
        let rounded: f64 = format!("{value:.*e}", SIGNIFICANT_DIGITS - 1).parse().unwrap();
        assert_eq!(figure_text("anything", value).unwrap(), shortest(rounded));
        let rounded: f64 = format!("{value:.DECIBEL_DECIMALS$}").parse().unwrap();
        assert_eq!(figure_text("level_dbc", value).unwrap(), shortest(rounded));
    }

    #[test]
    fn digits_are_those_of_the_shortest_decimal() {
        let mut state = 1u64;
        let mut checked = 0;
        for exponent in -40..40 {
            for _ in 0..200 {
                state = state.wrapping_mul(6_364_136_223_846_793_005).wrapping_add(1_442_695_040_888_963_407);
                let share = (state >> 11) as f64 / (1u64 << 53) as f64;
                check_digits((share - 0.5) * 10f64.powi(exponent));
                checked += 1;
            }
        }
        for value in [
            0.0,
            -0.0,
            1.0,
            -10.0,
            1.5,
            1e9 + 0.5,
            12_345_678_901.0,
            9.999_999_999_9e14,
            1e-5,
            9.999_999_999_9e-6,
            123.0,
        ] {
            check_digits(value);
        }
        assert_eq!(checked, 16_000);
    }

    #[test]
    fn refuses_what_is_not_finite() {
        for value in [f64::NAN, f64::INFINITY, f64::NEG_INFINITY] {
            assert!(
                matches!(figure_text("level_dbc", value), Err(ReportError::NotFinite { key, .. }) if key == "level_dbc")
            );
        }
    }

    #[test]
    fn shows_readers_units_and_signs() {
        assert_eq!(with_prefix(12_500.0, "Hz", 6), "12.5 kHz");
        assert_eq!(with_prefix(999.9999, "Hz", 6), "1 kHz");
        assert_eq!(with_prefix(-4.5e6, "Hz", 6), "−4.5 MHz");
        assert_eq!(with_prefix(0.0, "Hz", 6), "0 Hz");
        assert_eq!(with_prefix(2.2e-9, "F", 4), "2.2 nF");
        assert_eq!(decibel(-0.001), "0.00");
        assert_eq!(decibel(-56.375_1), "−56.38");
        assert_eq!(count(1_234_567), "1\u{202f}234\u{202f}567");
        assert_eq!(count(999), "999");
    }
}
