//! Distances to fractions p/q of the PFD or reference frequency, in exact arithmetic (PHYSICS: one tone per exact offset).

use num_integer::Integer;

use crate::base::{Exact, ExactError, Frequency};

/// Returns the smallest signed residue of `value` modulo `modulus`, in (−modulus/2, modulus/2].
///
/// # Panics
/// When `modulus` is not positive.
///
/// # Examples
/// ```
/// use thornmap::tones::signed_residue;
/// assert_eq!(signed_residue(9, 10), -1);
/// assert_eq!(signed_residue(5, 10), 5);
/// assert_eq!(signed_residue(-12, 10), -2);
/// ```
#[must_use]
pub fn signed_residue(value: i128, modulus: i128) -> i128 {
    assert!(modulus > 0, "the modulus of a residue is positive");
    if let (Ok(value), Ok(modulus)) = (i64::try_from(value), i64::try_from(modulus)) {
        let residue = value.rem_euclid(modulus);
        return i128::from(if residue > modulus - residue { residue - modulus } else { residue });
    }
    let residue = value.rem_euclid(modulus);
    // `residue − (modulus − residue)` instead of doubling: no overflow near 2^127.
    if residue > modulus - residue { residue - modulus } else { residue }
}

/// The fraction p/q nearest to a frequency, and how far the frequency is from it.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct NearFraction {
    /// Numerator p of the nearest multiple p·base/q.
    pub p: i128,
    /// Denominator q.
    pub q: u64,
    /// `q·frequency mod± base`, signed \[Hz\]; its size is the tone offset d.
    pub signed_offset: Frequency,
    /// Whether p/q is in lowest terms: only then it is a boundary of its own.
    pub lowest_terms: bool,
}

impl NearFraction {
    /// Returns the tone offset d \[Hz\], at or above zero.
    #[must_use]
    pub fn tone_offset(&self) -> Frequency {
        Frequency::from_hz(self.signed_offset.hz().abs())
    }

    /// Returns the distance of the frequency from p·base/q, d/q \[Hz\].
    #[must_use]
    pub fn distance_hz(&self) -> f64 {
        #[allow(clippy::cast_precision_loss, reason = "q is a small integer")]
        let q = self.q as f64;
        self.tone_offset().to_f64_hz() / q
    }
}

/// Returns the multiple p·base/q nearest to `frequency`; a tie takes the lower p.
///
/// # Errors
/// `ExactError` beyond 127 bits or for a base of zero.
///
/// # Examples
/// 540.01 MHz against 20 MHz is 10 kHz from 27 (a published example):
/// ```
/// use thornmap::base::Frequency;
/// use thornmap::tones::nearest_fraction;
/// let near = nearest_fraction(Frequency::from_whole_hz(540_010_000), Frequency::from_whole_hz(20_000_000), 1).unwrap();
/// assert_eq!((near.p, near.tone_offset()), (27, Frequency::from_whole_hz(10_000)));
/// ```
pub fn nearest_fraction(frequency: Frequency, base: Frequency, q: u64) -> Result<NearFraction, ExactError> {
    if let Some(near) = nearest_by_integers(frequency.hz(), base.hz(), q) {
        return near;
    }
    nearest_by_rationals(frequency, base, q)
}

/// The search in integers with one reduction at its end; `None` where a product passes 127 bits or the base is not
/// positive.
fn nearest_by_integers(frequency: Exact, base: Exact, q: u64) -> Option<Result<NearFraction, ExactError>> {
    if base.sign() <= 0 {
        return None;
    }
    // q·(a/b) over c/d is q·a·d/(b·c).
    let top = frequency.numerator().checked_mul(i128::from(q))?.checked_mul(base.denominator())?;
    let bottom = frequency.denominator().checked_mul(base.numerator())?;
    let whole = frequency.denominator().checked_mul(base.denominator())?;
    let floor = match (i64::try_from(top), i64::try_from(bottom)) {
        (Ok(top), Ok(bottom)) => i128::from(top.div_euclid(bottom)),
        _ => top.div_euclid(bottom),
    };
    let rest = top - floor * bottom;
    let (p, rest) = if rest > bottom - rest { (floor + 1, rest - bottom) } else { (floor, rest) };
    let lowest_terms = match i64::try_from(p) {
        Ok(p) => p.unsigned_abs().gcd(&q) == 1,
        Err(_) => p.gcd(&i128::from(q)) == 1,
    };
    // The rest over b·c, times c/d.
    Some(Exact::new(rest, whole).map(|signed| NearFraction {
        p,
        q,
        signed_offset: Frequency::from_hz(signed),
        lowest_terms,
    }))
}

/// The search in rationals: the slow definition.
fn nearest_by_rationals(frequency: Frequency, base: Frequency, q: u64) -> Result<NearFraction, ExactError> {
    let cycles = frequency.hz().times(&Exact::from_integer(i128::from(q)))?.over(&base.hz())?;
    let floor = cycles.floor();
    let fraction = cycles.minus(&Exact::from_integer(floor))?;
    let half = Exact::new(1, 2)?;
    let (p, signed) = if fraction > half { (floor + 1, fraction.minus(&Exact::ONE)?) } else { (floor, fraction) };
    Ok(NearFraction {
        p,
        q,
        signed_offset: Frequency::from_hz(signed.times(&base.hz())?),
        lowest_terms: p.gcd(&i128::from(q)) == 1,
    })
}

#[cfg(test)]
mod tests {
    use super::*;

    fn hz(value: i128) -> Frequency {
        Frequency::from_whole_hz(value)
    }

    #[test]
    fn published_distances() {
        // Published articles: 2001 MHz at 100 MHz → 1 MHz; 540.01 MHz at 20 MHz → 10 kHz; fraction 0.0024 at
        // 100 MHz → 240 kHz; hobby measurement: fraction 0.51 at 100 kHz, q = 2 → 2 kHz.
        let cases = [
            (hz(2_001_000_000), hz(100_000_000), 1, hz(1_000_000)),
            (hz(540_010_000), hz(20_000_000), 1, hz(10_000)),
            (hz(100_240_000), hz(100_000_000), 1, hz(240_000)),
            (hz(1_051_000), hz(100_000), 2, hz(2_000)),
        ];
        for (frequency, base, q, want) in cases {
            assert_eq!(nearest_fraction(frequency, base, q).unwrap().tone_offset(), want);
        }
    }

    #[test]
    fn integers_and_rationals_find_the_same_fraction() {
        let mut state = 3u64;
        let mut next = || {
            state = state.wrapping_mul(6_364_136_223_846_793_005).wrapping_add(1_442_695_040_888_963_407);
            i128::from(state >> 30)
        };
        let mut checked = 0;
        for round in 0..20_000u64 {
            let sign = if round % 5 == 0 { -1 } else { 1 };
            let frequency = Exact::new(sign * (next() + 1), next() % (1 << (round % 30)) + 1).unwrap();
            let base = Exact::new(next() % 40_000_000 + 1, next() % 9 + 1).unwrap();
            let q = round % 7 + 1;
            let found = nearest_by_integers(frequency, base, q).unwrap().unwrap();
            let slow = nearest_by_rationals(Frequency::from_hz(frequency), Frequency::from_hz(base), q).unwrap();
            assert_eq!(found, slow);
            checked += 1;
        }
        // A tie takes the lower p on both routes.
        let (half, one) = (Exact::new(5, 2).unwrap(), Exact::ONE);
        assert_eq!(nearest_by_integers(half, one, 1).unwrap().unwrap().p, 2);
        assert_eq!(nearest_by_rationals(Frequency::from_hz(half), Frequency::from_hz(one), 1).unwrap().p, 2);
        assert_eq!(checked, 20_000);
    }

    #[test]
    fn agrees_with_residues_of_words() {
        let mut cases = 0;
        for m in [7u64, 16, 30] {
            for k in 0..m {
                for q in 1..=5u64 {
                    let base = hz(i128::from(m));
                    let near = nearest_fraction(hz(i128::from(3 * m + k)), base, q).unwrap();
                    let residue = signed_residue(i128::from(q * k), i128::from(m));
                    assert_eq!(near.signed_offset, hz(residue), "m {m} k {k} q {q}");
                    assert_eq!(i128::from(q * (3 * m + k)) - near.p * i128::from(m), residue);
                    cases += 1;
                }
            }
        }
        assert_eq!(cases, (7 + 16 + 30) * 5);
    }
}
