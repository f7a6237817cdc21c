//! Numbers with units, as people type them in a plan or on the command line.

use thiserror::Error;

use super::exact::Exact;

/// The largest magnitude a typed number may have.
const LARGEST: i128 = 10i128.pow(30);
/// Digits after the point, or negative exponent, that a typed number may have.
const MOST_PLACES: u32 = 36;

/// What a value measures; decides which units are accepted.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash)]
pub enum Dimension {
    /// Hertz.
    Frequency,
    /// Seconds.
    Time,
    /// Volts.
    Voltage,
    /// Amperes.
    Current,
    /// Farads.
    Capacitance,
    /// Ohms.
    Resistance,
    /// Degrees.
    Angle,
    /// A pure ratio: %, ppm or ppb, stored as 1 = 100 %.
    Ratio,
    /// Hertz per volt.
    TuningGain,
    /// dBc.
    Level,
    /// dB.
    LevelDifference,
    /// dBc/Hz.
    NoiseLevel,
    /// Watts, milliwatts.
    Power,
    /// Kelvin.
    Temperature,
    /// Amperes per square root of hertz.
    CurrentNoise,
}

/// A unit symbol, the decimal exponent of its factor to the base unit, and whether SI prefixes go before it.
struct Unit {
    symbol: &'static str,
    exponent: i32,
    prefixed: bool,
}

const fn unit(symbol: &'static str, exponent: i32, prefixed: bool) -> Unit {
    Unit { symbol, exponent, prefixed }
}

/// SI prefixes f…T with their decimal exponents; micro may be written µ (either code point) or u.
const PREFIXES: [(&str, i32); 11] = [
    ("f", -15),
    ("p", -12),
    ("n", -9),
    ("\u{b5}", -6),
    ("\u{3bc}", -6),
    ("u", -6),
    ("m", -3),
    ("k", 3),
    ("M", 6),
    ("G", 9),
    ("T", 12),
];

impl Dimension {
    fn units(self) -> &'static [Unit] {
        const FREQUENCY: &[Unit] = &[unit("Hz", 0, true)];
        const TIME: &[Unit] = &[unit("s", 0, true)];
        const VOLTAGE: &[Unit] = &[unit("V", 0, true)];
        const CURRENT: &[Unit] = &[unit("A", 0, true)];
        const CAPACITANCE: &[Unit] = &[unit("F", 0, true)];
        const RESISTANCE: &[Unit] = &[unit("ohm", 0, true), unit("\u{3a9}", 0, true), unit("\u{2126}", 0, true)];
        const ANGLE: &[Unit] = &[unit("deg", 0, false), unit("\u{b0}", 0, false)];
        const RATIO: &[Unit] = &[unit("%", -2, false), unit("ppm", -6, false), unit("ppb", -9, false)];
        const GAIN: &[Unit] = &[unit("Hz/V", 0, true)];
        const LEVEL: &[Unit] = &[unit("dBc", 0, false)];
        const DIFFERENCE: &[Unit] = &[unit("dB", 0, false)];
        const NOISE: &[Unit] = &[unit("dBc/Hz", 0, false)];
        const POWER: &[Unit] = &[unit("W", 0, true)];
        const TEMPERATURE: &[Unit] = &[unit("K", 0, false)];
        const CURRENT_NOISE: &[Unit] =
            &[unit("A/sqrt(Hz)", 0, true), unit("A/\u{221a}Hz", 0, true), unit("A/rtHz", 0, true)];
        match self {
            Self::Frequency => FREQUENCY,
            Self::Time => TIME,
            Self::Voltage => VOLTAGE,
            Self::Current => CURRENT,
            Self::Capacitance => CAPACITANCE,
            Self::Resistance => RESISTANCE,
            Self::Angle => ANGLE,
            Self::Ratio => RATIO,
            Self::TuningGain => GAIN,
            Self::Level => LEVEL,
            Self::LevelDifference => DIFFERENCE,
            Self::NoiseLevel => NOISE,
            Self::Power => POWER,
            Self::Temperature => TEMPERATURE,
            Self::CurrentNoise => CURRENT_NOISE,
        }
    }

    /// Returns the accepted units in words, with an example, for messages and the schema.
    #[must_use]
    pub const fn accepted(self) -> &'static str {
        match self {
            Self::Frequency => "Hz, kHz, MHz, GHz (as in \"19.2 MHz\")",
            Self::Time => "s, ms, us, ns, ps (as in \"120 ps\")",
            Self::Voltage => "V, mV (as in \"1.2 V\")",
            Self::Current => "A, mA, uA, nA (as in \"2.5 mA\")",
            Self::Capacitance => "F, uF, nF, pF (as in \"2.2 nF\")",
            Self::Resistance => "ohm, kohm, Mohm (as in \"510 ohm\")",
            Self::Angle => "deg (as in \"50 deg\")",
            Self::Ratio => "%, ppm, ppb (as in \"2 %\")",
            Self::TuningGain => "Hz/V, kHz/V, MHz/V, GHz/V (as in \"32 MHz/V\")",
            Self::Level => "dBc (as in \"-52 dBc\")",
            Self::LevelDifference => "dB (as in \"6 dB\")",
            Self::NoiseLevel => "dBc/Hz (as in \"-145 dBc/Hz\")",
            Self::Power => "W, mW, uW (as in \"1 mW\")",
            Self::Temperature => "K (as in \"290 K\")",
            Self::CurrentNoise => "A/sqrt(Hz) with a prefix (as in \"12 pA/sqrt(Hz)\")",
        }
    }

    /// Returns the accepted units as a regular expression in the common core of ECMA 262 and PCRE, for the schema.
    ///
    /// # Examples
    /// ```
    /// use thornmap::base::Dimension;
    /// assert_eq!(Dimension::Ratio.unit_pattern(), "(%|ppm|ppb)");
    /// ```
    #[must_use]
    pub fn unit_pattern(self) -> String {
        let prefixes = PREFIXES.map(|(symbol, _)| symbol).join("|");
        let escaped = |symbol: &str| symbol.replace('(', "\\(").replace(')', "\\)");
        let units = self.units().iter().map(|unit| match unit.prefixed {
            true => format!("({prefixes})?{}", escaped(unit.symbol)),
            false => unit.symbol.to_owned(),
        });
        format!("({})", units.collect::<Vec<_>>().join("|"))
    }

    /// Returns the decimal exponent of a unit as typed, or `None` where it is no unit of this dimension.
    fn exponent_of(self, typed: &str) -> Option<i32> {
        for unit in self.units() {
            if typed == unit.symbol {
                return Some(unit.exponent);
            }
            if unit.prefixed
                && let Some(prefix) = typed.strip_suffix(unit.symbol)
                && let Some((_, exponent)) = PREFIXES.iter().find(|(symbol, _)| *symbol == prefix)
            {
                return Some(unit.exponent + exponent);
            }
        }
        None
    }
}

/// Why a typed value cannot be read; every variant shows what was typed.
#[derive(Debug, Clone, PartialEq, Eq, Error)]
pub enum QuantityError {
    /// No number at the start.
    #[error("\"{found}\" is not a number; write a decimal, a fraction a/b or an exponent form")]
    NotANumber {
        /// What was typed.
        found: String,
    },
    /// A number too large, too finely written, or not finite.
    #[error("\"{found}\" is outside what is read here: at most 1e30 in magnitude and 36 decimal places")]
    OutOfRange {
        /// What was typed.
        found: String,
    },
    /// A number without a unit where one is due.
    #[error("\"{found}\" has no unit; accepted are {accepted}")]
    MissingUnit {
        /// What was typed.
        found: String,
        /// The units of the dimension.
        accepted: &'static str,
    },
    /// A unit of another dimension, or unknown.
    #[error("\"{unit}\" in \"{found}\" is not accepted here; accepted are {accepted}{hint}")]
    WrongUnit {
        /// What was typed.
        found: String,
        /// The unit part.
        unit: String,
        /// The units of the dimension.
        accepted: &'static str,
        /// A remark on letter case, or empty.
        hint: String,
    },
}

/// Returns the exact value of a bare number: decimal, fraction `a/b`, or exponent form.
///
/// # Errors
/// `NotANumber`, or `OutOfRange` above 1e30 or beyond 36 places.
///
/// # Examples
/// ```
/// use thornmap::base::parse_number;
/// assert_eq!(parse_number("25/3").unwrap().to_string(), "25/3");
/// assert_eq!(parse_number("1.5e3").unwrap().to_string(), "1500");
/// assert!(parse_number("NaN").is_err());
/// ```
pub fn parse_number(text: &str) -> Result<Exact, QuantityError> {
    let text = text.trim();
    let out_of_range = || QuantityError::OutOfRange { found: text.to_owned() };
    let value = match text.split_once('/') {
        Some((top, bottom)) => {
            let (top, bottom) = (parse_decimal(top.trim_end(), text)?, parse_decimal(bottom.trim_start(), text)?);
            top.over(&bottom).map_err(|_| out_of_range())?
        }
        None => parse_decimal(text, text)?,
    };
    if value.abs() > Exact::from_integer(LARGEST) {
        return Err(out_of_range());
    }
    Ok(value)
}

/// Reads sign, digits, point, digits, exponent; `whole` is what the message shows.
fn parse_decimal(text: &str, whole: &str) -> Result<Exact, QuantityError> {
    let not_a_number = || QuantityError::NotANumber { found: whole.to_owned() };
    let out_of_range = || QuantityError::OutOfRange { found: whole.to_owned() };
    let (negative, digits) = match text.as_bytes().first() {
        Some(b'-') => (true, &text[1..]),
        Some(b'+') => (false, &text[1..]),
        _ => (false, text),
    };
    let (mantissa, exponent) = match digits.find(['e', 'E']) {
        Some(at) => {
            let exponent = &digits[at + 1..];
            let plain = exponent.strip_prefix(['+', '-']).unwrap_or(exponent);
            if plain.is_empty() || !plain.bytes().all(|b| b.is_ascii_digit()) {
                return Err(not_a_number());
            }
            (&digits[..at], exponent.parse::<i32>().map_err(|_| out_of_range())?)
        }
        None => (digits, 0),
    };
    let (integral, fraction) = mantissa.split_once('.').unwrap_or((mantissa, ""));
    if integral.is_empty() && fraction.is_empty() {
        return Err(not_a_number());
    }
    let mut value: i128 = 0;
    for byte in integral.bytes().chain(fraction.bytes()) {
        // Underscores group digits, as TOML itself allows.
        if byte == b'_' {
            continue;
        }
        if !byte.is_ascii_digit() {
            return Err(not_a_number());
        }
        value = value.checked_mul(10).and_then(|v| v.checked_add(i128::from(byte - b'0'))).ok_or_else(out_of_range)?;
    }
    let places = i32::try_from(fraction.bytes().filter(u8::is_ascii_digit).count()).map_err(|_| out_of_range())?;
    let shift = exponent.checked_sub(places).ok_or_else(out_of_range)?;
    let signed = Exact::from_integer(if negative { -value } else { value });
    scale_by_ten(&signed, shift).ok_or_else(out_of_range)
}

/// Returns `value·10^exponent`, or `None` where it does not fit.
fn scale_by_ten(value: &Exact, exponent: i32) -> Option<Exact> {
    if value.sign() == 0 {
        return Some(Exact::ZERO);
    }
    if exponent.unsigned_abs() > MOST_PLACES {
        return None;
    }
    let factor = Exact::from_integer(10i128.pow(exponent.unsigned_abs()));
    if exponent < 0 { value.over(&factor).ok() } else { value.times(&factor).ok() }
}

/// Returns the exact value in the base unit of `dimension`.
///
/// # Errors
/// `QuantityError`, naming what was typed and the units that are accepted.
///
/// # Examples
/// ```
/// use thornmap::base::{Dimension, parse_quantity};
/// assert_eq!(parse_quantity("25/3 kHz", Dimension::Frequency).unwrap().to_string(), "25000/3");
/// assert_eq!(parse_quantity("2 %", Dimension::Ratio).unwrap().to_string(), "1/50");
/// assert!(parse_quantity("19.2", Dimension::Frequency).is_err());
/// ```
pub fn parse_quantity(text: &str, dimension: Dimension) -> Result<Exact, QuantityError> {
    let text = text.trim();
    let (number, unit) = split_unit(text);
    if number.is_empty() {
        return Err(QuantityError::NotANumber { found: text.to_owned() });
    }
    let value = parse_number(number).map_err(|error| match error {
        QuantityError::NotANumber { .. } => QuantityError::NotANumber { found: text.to_owned() },
        other => other,
    })?;
    if unit.is_empty() {
        return Err(QuantityError::MissingUnit { found: text.to_owned(), accepted: dimension.accepted() });
    }
    let Some(exponent) = dimension.exponent_of(unit) else {
        return Err(QuantityError::WrongUnit {
            found: text.to_owned(),
            unit: unit.to_owned(),
            accepted: dimension.accepted(),
            hint: case_hint(unit, dimension),
        });
    };
    let out_of_range = || QuantityError::OutOfRange { found: text.to_owned() };
    let scaled = scale_by_ten(&value, exponent).ok_or_else(out_of_range)?;
    if scaled.abs() > Exact::from_integer(LARGEST) {
        return Err(out_of_range());
    }
    Ok(scaled)
}

/// Splits `"25/3 kHz"` into number and unit; a unit may follow without a space.
fn split_unit(text: &str) -> (&str, &str) {
    let mut end = 0;
    let bytes = text.as_bytes();
    while end < bytes.len() {
        let byte = bytes[end];
        let is_exponent = matches!(byte, b'e' | b'E')
            && end > 0
            && bytes.get(end + 1).is_some_and(|next| next.is_ascii_digit() || matches!(next, b'+' | b'-'));
        let continues = byte.is_ascii_digit() || matches!(byte, b'.' | b'/' | b'+' | b'-' | b'_' | b' ') || is_exponent;
        if !continues {
            break;
        }
        end += 1;
    }
    (text[..end].trim(), text[end..].trim())
}

/// Returns a remark when only the letter case is wrong.
fn case_hint(unit: &str, dimension: Dimension) -> String {
    let prefixes = PREFIXES.iter().map(|(symbol, _)| *symbol).chain([""]);
    for prefix in prefixes {
        for known in dimension.units() {
            if !known.prefixed && !prefix.is_empty() {
                continue;
            }
            let spelled = format!("{prefix}{}", known.symbol);
            if spelled.eq_ignore_ascii_case(unit) {
                return format!("; units are case-sensitive: did you mean \"{spelled}\"?");
            }
        }
    }
    String::new()
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn reads_every_form_exactly() {
        let cases = [
            ("19.2 MHz", Dimension::Frequency, "19200000"),
            ("25/3 kHz", Dimension::Frequency, "25000/3"),
            ("-10.7MHz", Dimension::Frequency, "-10700000"),
            ("1e-3 MHz", Dimension::Frequency, "1000"),
            ("1.5E+2 Hz", Dimension::Frequency, "150"),
            ("976 MHz", Dimension::Frequency, "976000000"),
            ("12_500 Hz", Dimension::Frequency, "12500"),
            ("2.5 µA", Dimension::Current, "1/400000"),
            ("2.5 uA", Dimension::Current, "1/400000"),
            ("510 Ω", Dimension::Resistance, "510"),
            ("4.7 kohm", Dimension::Resistance, "4700"),
            ("2 ppm", Dimension::Ratio, "1/500000"),
            ("-118 dBc/Hz", Dimension::NoiseLevel, "-118"),
            ("12 pA/sqrt(Hz)", Dimension::CurrentNoise, "3/250000000000"),
            ("0 uA", Dimension::Current, "0"),
            ("1 fF", Dimension::Capacitance, "1/1000000000000000"),
        ];
        for (text, dimension, want) in cases {
            assert_eq!(parse_quantity(text, dimension).unwrap().to_string(), want, "{text}");
        }
    }

    #[test]
    fn refuses_what_is_no_quantity() {
        let cases = [
            "",
            "MHz",
            "NaN MHz",
            "inf Hz",
            "19.2",
            "19.2 mhz",
            "19.2 V",
            "1e31 Hz",
            "1/0 Hz",
            "--1 Hz",
            "1.2.3 Hz",
            "1e400 Hz",
            "1e-40 Hz",
            "1 / / 2 Hz",
            "e5 Hz",
            "0x10 Hz",
        ];
        for text in cases {
            assert!(parse_quantity(text, Dimension::Frequency).is_err(), "{text}");
        }
    }

    #[test]
    fn tells_about_letter_case() {
        let error = parse_quantity("19.2 mhz", Dimension::Frequency).unwrap_err().to_string();
        assert!(error.contains("did you mean \"mHz\"") || error.contains("did you mean \"MHz\""), "{error}");
    }
}
