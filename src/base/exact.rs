//! Exact rational numbers: the raster, the words and the boundaries are decided by these, never by floats.

use std::cmp::Ordering;
use std::fmt;

use num_rational::Ratio;
use num_traits::{CheckedAdd, CheckedSub, Signed, ToPrimitive, Zero};
use serde::{Serialize, Serializer};
use thiserror::Error;

/// Why an exact operation has no result.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Error)]
pub enum ExactError {
    /// Numerator or denominator passes 127 bits.
    #[error("the exact result needs more than 127 bits")]
    Overflow,
    /// Division by zero.
    #[error("division by zero")]
    DivisionByZero,
}

/// An exact rational number in lowest terms; no operation rounds or wraps.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash)]
pub struct Exact(Ratio<i128>);

impl Exact {
    /// Zero.
    pub const ZERO: Self = Self(Ratio::new_raw(0, 1));
    /// One.
    pub const ONE: Self = Self(Ratio::new_raw(1, 1));

    /// Returns `numerator / denominator` in lowest terms.
    ///
    /// # Errors
    /// `DivisionByZero` for a zero denominator; `Overflow` for `i128::MIN`, which has no negative.
    ///
    /// # Examples
    /// ```
    /// use thornmap::base::Exact;
    /// assert_eq!(Exact::new(50, 6).unwrap().to_string(), "25/3");
    /// ```
    pub fn new(numerator: i128, denominator: i128) -> Result<Self, ExactError> {
        if denominator == 0 {
            return Err(ExactError::DivisionByZero);
        }
        if numerator == i128::MIN || denominator == i128::MIN {
            return Err(ExactError::Overflow);
        }
        Ok(Self(reduced(numerator, denominator)))
    }

    /// Returns an integer as an exact number.
    #[must_use]
    pub fn from_integer(value: i128) -> Self {
        Self(Ratio::from_integer(value))
    }

    /// Returns the numerator in lowest terms; it carries the sign.
    #[must_use]
    pub fn numerator(&self) -> i128 {
        *self.0.numer()
    }

    /// Returns the positive denominator in lowest terms.
    #[must_use]
    pub fn denominator(&self) -> i128 {
        *self.0.denom()
    }

    /// Returns the sum.
    ///
    /// # Errors
    /// `Overflow` beyond 127 bits.
    pub fn plus(&self, other: &Self) -> Result<Self, ExactError> {
        if self.denominator() == other.denominator() {
            let sum = self.numerator().checked_add(other.numerator()).ok_or(ExactError::Overflow)?;
            return Ok(Self(reduced(sum, self.denominator())));
        }
        self.0.checked_add(&other.0).map(Self).ok_or(ExactError::Overflow)
    }

    /// Returns the difference.
    ///
    /// # Errors
    /// `Overflow` beyond 127 bits.
    pub fn minus(&self, other: &Self) -> Result<Self, ExactError> {
        if self.denominator() == other.denominator() {
            let difference = self.numerator().checked_sub(other.numerator()).ok_or(ExactError::Overflow)?;
            return Ok(Self(reduced(difference, self.denominator())));
        }
        self.0.checked_sub(&other.0).map(Self).ok_or(ExactError::Overflow)
    }

    /// Returns the product.
    ///
    /// # Errors
    /// `Overflow` beyond 127 bits.
    pub fn times(&self, other: &Self) -> Result<Self, ExactError> {
        product((self.numerator(), self.denominator()), (other.numerator(), other.denominator()))
    }

    /// Returns the quotient.
    ///
    /// # Errors
    /// `DivisionByZero`, or `Overflow` beyond 127 bits.
    pub fn over(&self, other: &Self) -> Result<Self, ExactError> {
        if other.0.is_zero() {
            return Err(ExactError::DivisionByZero);
        }
        let (numerator, denominator) = (other.numerator(), other.denominator());
        // The sign belongs above the line; the negative of i128::MIN does not exist and never occurs.
        let reciprocal = if numerator < 0 {
            (-denominator, numerator.checked_neg().ok_or(ExactError::Overflow)?)
        } else {
            (denominator, numerator)
        };
        product((self.numerator(), self.denominator()), reciprocal)
    }

    /// Returns the largest integer not above the number.
    #[must_use]
    pub fn floor(&self) -> i128 {
        match (i64::try_from(self.numerator()), i64::try_from(self.denominator())) {
            (Ok(numerator), Ok(denominator)) => i128::from(numerator.div_euclid(denominator)),
            _ => self.numerator().div_euclid(self.denominator()),
        }
    }

    /// Returns the nearest integer; a tie goes to the even one.
    ///
    /// # Examples
    /// ```
    /// use thornmap::base::Exact;
    /// assert_eq!(Exact::new(5, 2).unwrap().round_half_even(), 2);
    /// assert_eq!(Exact::new(7, 2).unwrap().round_half_even(), 4);
    /// ```
    #[must_use]
    pub fn round_half_even(&self) -> i128 {
        let floor = self.floor();
        let remainder = self.numerator().rem_euclid(self.denominator());
        // Compare remainder with denominator − remainder: doubling could pass 127 bits.
        match remainder.cmp(&(self.denominator() - remainder)) {
            Ordering::Less => floor,
            Ordering::Greater => floor + 1,
            Ordering::Equal => floor + floor.rem_euclid(2),
        }
    }

    /// Returns the absolute value.
    #[must_use]
    pub fn abs(&self) -> Self {
        Self(self.0.abs())
    }

    /// Returns the number with its sign turned.
    #[must_use]
    pub fn negated(&self) -> Self {
        Self(-self.0)
    }

    /// Returns whether the number is an integer.
    #[must_use]
    pub fn is_integer(&self) -> bool {
        self.denominator() == 1
    }

    /// Returns the sign: −1, 0 or 1.
    #[must_use]
    pub fn sign(&self) -> i32 {
        match self.numerator().cmp(&0) {
            Ordering::Less => -1,
            Ordering::Equal => 0,
            Ordering::Greater => 1,
        }
    }

    /// Returns the nearest double: for display and for physics, never for a decision on a word or a boundary.
    #[must_use]
    pub fn to_f64(&self) -> f64 {
        // Of integers that doubles hold exactly the quotient is correctly rounded.
        const EXACT: std::ops::RangeInclusive<i64> = -(1 << 53)..=1 << 53;
        if let (Ok(numerator), Ok(denominator)) = (i64::try_from(self.numerator()), i64::try_from(self.denominator()))
            && EXACT.contains(&numerator)
            && EXACT.contains(&denominator)
        {
            return numerator as f64 / denominator as f64;
        }
        // Both parts pass f64 only above 2^1023: `to_f64` of a Ratio<i128> is always finite.
        self.0.to_f64().unwrap_or(f64::NAN)
    }

    /// Returns the greatest common divisor of two rationals: the largest g of which both are integer multiples.
    ///
    /// # Errors
    /// `Overflow` beyond 127 bits.
    pub fn common_divisor(&self, other: &Self) -> Result<Self, ExactError> {
        let (a, b) = (self.denominator(), other.denominator());
        let shared = num_integer::gcd(a, b);
        let left = self.numerator().checked_mul(b / shared).ok_or(ExactError::Overflow)?;
        let right = other.numerator().checked_mul(a / shared).ok_or(ExactError::Overflow)?;
        let bottom = a.checked_mul(b / shared).ok_or(ExactError::Overflow)?;
        Self::new(num_integer::gcd(left, right), bottom)
    }
}

/// Returns the greatest common divisor; in 64 bits where both fit, which is most of the work in a survey.
fn gcd(a: i128, b: i128) -> i128 {
    match (u64::try_from(a.unsigned_abs()), u64::try_from(b.unsigned_abs())) {
        (Ok(a), Ok(b)) => i128::from(num_integer::gcd(a, b)),
        _ => num_integer::gcd(a, b),
    }
}

/// Returns a/b rounded towards zero; in 64 bits where both fit.
fn quotient(a: i128, b: i128) -> i128 {
    match (i64::try_from(a), i64::try_from(b)) {
        (Ok(a), Ok(b)) if b != -1 => i128::from(a / b),
        _ => a / b,
    }
}

/// Returns numerator over denominator (not zero, neither i128::MIN) in lowest terms.
fn reduced(numerator: i128, denominator: i128) -> Ratio<i128> {
    let shared = if denominator == 1 { 1 } else { gcd(numerator, denominator) };
    let shared = if denominator < 0 { -shared } else { shared };
    if shared == 1 {
        return Ratio::new_raw(numerator, denominator);
    }
    Ratio::new_raw(quotient(numerator, shared), quotient(denominator, shared))
}

/// Returns the product of two fractions in lowest terms with positive denominators.
fn product(a: (i128, i128), b: (i128, i128)) -> Result<Exact, ExactError> {
    if a.0 == 0 || b.0 == 0 {
        return Ok(Exact::ZERO);
    }
    // Divided crosswise first, the product is in lowest terms.
    let (left, right) = (gcd(a.0, b.1), gcd(b.0, a.1));
    let numerator = quotient(a.0, left).checked_mul(quotient(b.0, right));
    let denominator = quotient(a.1, right).checked_mul(quotient(b.1, left));
    match (numerator, denominator) {
        (Some(numerator), Some(denominator)) => Ok(Exact(Ratio::new_raw(numerator, denominator))),
        _ => Err(ExactError::Overflow),
    }
}

impl PartialOrd for Exact {
    fn partial_cmp(&self, other: &Self) -> Option<Ordering> {
        Some(self.cmp(other))
    }
}

impl Ord for Exact {
    fn cmp(&self, other: &Self) -> Ordering {
        if self.denominator() == other.denominator() {
            return self.numerator().cmp(&other.numerator());
        }
        // Ratio's own ordering compares by continued fractions and cannot overflow.
        self.0.cmp(&other.0)
    }
}

impl fmt::Display for Exact {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        if self.is_integer() {
            write!(f, "{}", self.numerator())
        } else {
            write!(f, "{}/{}", self.numerator(), self.denominator())
        }
    }
}

impl Serialize for Exact {
    fn serialize<S: Serializer>(&self, serializer: S) -> Result<S::Ok, S::Error> {
        serializer.serialize_str(&self.to_string())
    }
}

/// An exact frequency in hertz; it may be negative (an injection, an error).
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord, Hash)]
pub struct Frequency(Exact);

impl Frequency {
    /// Returns a frequency from its exact value in hertz.
    #[must_use]
    pub fn from_hz(hz: Exact) -> Self {
        Self(hz)
    }

    /// Returns a whole number of hertz.
    #[must_use]
    pub fn from_whole_hz(hz: i128) -> Self {
        Self(Exact::from_integer(hz))
    }

    /// Returns the exact value in hertz.
    #[must_use]
    pub fn hz(&self) -> Exact {
        self.0
    }

    /// Returns the nearest double in hertz, for display and physics.
    #[must_use]
    pub fn to_f64_hz(&self) -> f64 {
        self.0.to_f64()
    }
}

impl fmt::Display for Frequency {
    /// Writes the exact value with the largest unit that keeps it short: `433.075 MHz`, `25/3 kHz`.
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        const UNITS: [(i128, &str); 4] = [(1_000_000_000, "GHz"), (1_000_000, "MHz"), (1_000, "kHz"), (1, "Hz")];
        let magnitude = self.0.abs();
        let (scale, unit) =
            UNITS.into_iter().find(|(scale, _)| magnitude >= Exact::from_integer(*scale)).unwrap_or((1, "Hz"));
        let Ok(scaled) = self.0.over(&Exact::from_integer(scale)) else {
            return write!(f, "{} Hz", self.0);
        };
        match decimal(&scaled) {
            Some(text) => write!(f, "{text} {unit}"),
            None => write!(f, "{scaled} {unit}"),
        }
    }
}

impl Serialize for Frequency {
    fn serialize<S: Serializer>(&self, serializer: S) -> Result<S::Ok, S::Error> {
        serializer.serialize_str(&format!("{} Hz", self.0))
    }
}

/// Returns the finite decimal form, or `None` where there is none within 15 places.
fn decimal(value: &Exact) -> Option<String> {
    let mut scaled = value.denominator();
    let mut places = 0usize;
    let mut factor: i128 = 1;
    while factor % scaled != 0 {
        if places == 15 {
            return None;
        }
        factor = factor.checked_mul(10)?;
        places += 1;
        scaled = value.denominator();
    }
    let digits = value.numerator().checked_abs()?.checked_mul(factor / scaled)?;
    let sign = if value.sign() < 0 { "-" } else { "" };
    if places == 0 {
        return Some(format!("{sign}{digits}"));
    }
    let text = format!("{digits:0>width$}", width = places + 1);
    let (whole, fraction) = text.split_at(text.len() - places);
    Some(format!("{sign}{whole}.{fraction}"))
}

#[cfg(test)]
mod tests {
    use num_traits::{CheckedDiv, CheckedMul};

    use super::*;

    fn exact(numerator: i128, denominator: i128) -> Exact {
        Exact::new(numerator, denominator).unwrap()
    }

    #[test]
    fn shows_frequencies_with_the_largest_fitting_unit() {
        let cases = [
            (exact(433_075_000, 1), "433.075 MHz"),
            (exact(25_000, 3), "25/3 kHz"),
            (exact(-10_700_000, 1), "-10.7 MHz"),
            (exact(1, 2), "0.5 Hz"),
            (exact(0, 1), "0 Hz"),
            (exact(1_750_000_001, 1), "1.750000001 GHz"),
        ];
        for (value, text) in cases {
            assert_eq!(Frequency::from_hz(value).to_string(), text);
        }
    }

    #[test]
    fn rounds_ties_to_even_on_both_sides_of_zero() {
        let cases = [(5, 2, 2), (7, 2, 4), (-5, 2, -2), (-7, 2, -4), (-1, 3, 0), (-2, 3, -1), (9, 3, 3)];
        for (n, d, want) in cases {
            assert_eq!(exact(n, d).round_half_even(), want, "{n}/{d}");
        }
    }

    #[test]
    fn agrees_with_plain_rationals() {
        let mut state = 7u64;
        let mut next = |bits: u32| {
            state = state.wrapping_mul(6_364_136_223_846_793_005).wrapping_add(1_442_695_040_888_963_407);
            i128::from(state.cast_signed() >> (63 - bits))
        };
        let mut checked = 0;
        for round in 0..40_000u32 {
            // Small, 64-bit and larger parts, both signs.
            let bits = 2 + round % 61;
            let scale = if round % 3 == 0 { 1i128 << (round % 30) } else { 1 };
            let parts = [next(bits) * scale, next(bits) * scale, next(bits), next(bits)];
            let (a, b) = ((parts[0] - scale, parts[1].abs() + 1), (parts[2] - 1, parts[3].abs() + 1));
            let sign = if round % 2 == 0 { -1 } else { 1 };
            let (ours, plain) = (exact(a.0 * sign, a.1 * sign), Ratio::new(a.0 * sign, a.1 * sign));
            let (other, plain_other) = (exact(b.0, b.1), Ratio::new(b.0, b.1));
            assert_eq!(ours.0, plain);
            let same = |found: Result<Exact, ExactError>, want: Option<Ratio<i128>>| {
                assert_eq!(found.ok().map(|found| found.0), want, "{a:?} {b:?}");
            };
            same(ours.plus(&other), plain.checked_add(&plain_other));
            same(ours.minus(&other), plain.checked_sub(&plain_other));
            same(ours.times(&other), plain.checked_mul(&plain_other));
            if plain_other.is_zero() {
                assert_eq!(ours.over(&other), Err(ExactError::DivisionByZero));
            } else {
                same(ours.over(&other), plain.checked_div(&plain_other));
            }
            assert_eq!(ours.cmp(&other), plain.cmp(&plain_other));
            assert_eq!(ours.to_f64(), plain.to_f64().unwrap());
            checked += 1;
        }
        assert_eq!(checked, 40_000);
    }

    #[test]
    fn reports_overflow_instead_of_wrapping() {
        let large = exact(i128::MAX, 1);
        assert_eq!(large.plus(&Exact::ONE), Err(ExactError::Overflow));
        assert_eq!(large.times(&large), Err(ExactError::Overflow));
        assert_eq!(Exact::new(i128::MIN, 1), Err(ExactError::Overflow));
    }

    #[test]
    fn common_divisor_of_the_published_raster() {
        // 61.44 MHz with a 50 kHz step: gcd 10 kHz, modulus 6144 (published forum answer).
        let g = exact(61_440_000, 1).common_divisor(&exact(50_000, 1)).unwrap();
        assert_eq!(g, exact(10_000, 1));
        let third = exact(25_000, 3).common_divisor(&exact(12_500, 1)).unwrap();
        assert_eq!(third, exact(12_500, 3));
    }
}
