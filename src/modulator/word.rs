//! Divider words: the integers N, K, M that come closest to a wanted ratio, in exact arithmetic.

use serde::Serialize;
use thiserror::Error;

use super::config::{Modulus, ModulusRule};
use super::error::ModulatorError;
use crate::base::{Exact, ExactError, Frequency};

/// A divider word: the divider's mean is N + K/M, with 0 ≤ K < M.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, Serialize)]
pub struct Word {
    /// Integer part N.
    pub n: u64,
    /// Fractional numerator K.
    pub k: u64,
    /// Modulus M.
    pub modulus: Modulus,
}

impl Word {
    /// Returns N + K/M, exact.
    ///
    /// # Panics
    /// Never: N·M + K has at most 113 bits.
    #[must_use]
    pub fn ratio(&self) -> Exact {
        let modulus = i128::from(self.modulus.get());
        // N·M has at most 64 + 48 bits.
        Exact::new(i128::from(self.n) * modulus + i128::from(self.k), modulus).expect("a modulus is never zero")
    }

    /// Returns K/M in lowest terms as (numerator, denominator); 0/1 for K = 0.
    #[must_use]
    pub fn reduced(&self) -> (u64, u64) {
        let shared = num_integer::gcd(self.k, self.modulus.get());
        (self.k / shared, self.modulus.get() / shared)
    }
}

/// Why a ratio has no word.
#[derive(Debug, Clone, PartialEq, Eq, Error)]
pub enum WordError {
    /// A ratio that is zero or negative.
    #[error("divider ratio {found} is not above 0")]
    RatioNotPositive {
        /// The ratio found.
        found: Exact,
    },
    /// A ratio whose integer part passes 64 bits.
    #[error("divider ratio {found} passes 64 bits")]
    RatioTooLarge {
        /// The ratio found.
        found: Exact,
    },
    /// A step, a PFD frequency or an output divider that is zero or negative.
    #[error("step {step}, PFD frequency {pfd} and output divider {output_divider} must all be above 0")]
    StepNotPositive {
        /// Output step.
        step: Frequency,
        /// PFD frequency.
        pfd: Frequency,
        /// Output divider.
        output_divider: u64,
    },
    /// A step that needs a modulus above 2^48.
    #[error("an exact step of {step} needs modulus {found}, above 2^48")]
    StepModulusTooLarge {
        /// Output step.
        step: Frequency,
        /// The modulus it needs.
        found: i128,
    },
    /// Exact arithmetic ran out of bits.
    #[error("divider word: {0}")]
    Exact(#[from] ExactError),
    /// A modulus that does not exist for the structure.
    #[error(transparent)]
    Modulus(#[from] ModulatorError),
}

/// Returns the word nearest to `ratio` = f_vco/f_pfd under a modulus rule.
///
/// Fixed M and step: K is the nearest integer to M·(ratio − N), ties to even; K = M carries into N. Largest: the exact
/// reduced denominator if it fits, else the best approximation, a tie going to the smaller denominator. With M = 1
/// (integer divider) N itself is nearest, ties to even. `pfd` and `output_divider` matter for the step rule only.
///
/// # Errors
/// `WordError`: a ratio that is not positive, a step that needs a modulus above 2^48, exact arithmetic beyond 127 bits.
///
/// # Examples
/// ```
/// use thornmap::base::{Exact, Frequency};
/// use thornmap::modulator::{Modulus, ModulusRule, word};
/// let ratio = Exact::new(17323, 768).unwrap(); // 433.075 MHz · 1 / 19.2 MHz
/// let pfd = Frequency::from_whole_hz(19_200_000);
/// let rule = ModulusRule::Fixed(Modulus::new(1 << 10).unwrap());
/// let found = word::nearest(ratio, &rule, pfd, 1).unwrap();
/// assert_eq!((found.n, found.k), (22, 569));
/// let exact = word::nearest(ratio, &ModulusRule::Largest(Modulus::new(4095).unwrap()), pfd, 1).unwrap();
/// assert_eq!((exact.n, exact.k, exact.modulus.get()), (22, 427, 768));
/// ```
pub fn nearest(ratio: Exact, rule: &ModulusRule, pfd: Frequency, output_divider: u64) -> Result<Word, WordError> {
    if ratio.sign() <= 0 {
        return Err(WordError::RatioNotPositive { found: ratio });
    }
    match rule {
        ModulusRule::Fixed(modulus) => rounded(ratio, *modulus),
        ModulusRule::Largest(largest) => best_fraction(ratio, *largest),
        ModulusRule::Step(step) => rounded(ratio, step_modulus(*step, pfd, output_divider)?),
    }
}

/// Returns the modulus M = f_pfd / gcd(f_pfd, P·step) that makes an output step exact.
///
/// # Errors
/// `StepNotPositive`, `StepModulusTooLarge`, or `Exact` beyond 127 bits.
///
/// # Examples
/// ```
/// use thornmap::base::Frequency;
/// use thornmap::modulator::word;
/// let (step, pfd) = (Frequency::from_whole_hz(50_000), Frequency::from_whole_hz(61_440_000));
/// assert_eq!(word::step_modulus(step, pfd, 1).unwrap().get(), 6144);
/// ```
pub fn step_modulus(step: Frequency, pfd: Frequency, output_divider: u64) -> Result<Modulus, WordError> {
    if step.hz().sign() <= 0 || pfd.hz().sign() <= 0 || output_divider == 0 {
        return Err(WordError::StepNotPositive { step, pfd, output_divider });
    }
    let vco_step = step.hz().times(&Exact::from_integer(i128::from(output_divider)))?;
    let quotient = pfd.hz().over(&pfd.hz().common_divisor(&vco_step)?)?;
    let too_large = || WordError::StepModulusTooLarge { step, found: quotient.numerator() };
    let value = u64::try_from(quotient.numerator()).map_err(|_| too_large())?;
    Modulus::new(value).map_err(|_| too_large())
}

/// Returns the word with a given modulus.
fn rounded(ratio: Exact, modulus: Modulus) -> Result<Word, WordError> {
    let too_large = |_| WordError::RatioTooLarge { found: ratio };
    if modulus.get() == 1 {
        let n = u64::try_from(ratio.round_half_even()).map_err(too_large)?;
        return Ok(Word { n, k: 0, modulus });
    }
    let floor = ratio.floor();
    let fraction = ratio.minus(&Exact::from_integer(floor))?;
    let m = i128::from(modulus.get());
    let k = fraction.times(&Exact::from_integer(m))?.round_half_even();
    let (n, k) = if k == m { (floor + 1, 0) } else { (floor, k) };
    let n = u64::try_from(n).map_err(too_large)?;
    let k = u64::try_from(k).map_err(too_large)?;
    Ok(Word { n, k, modulus })
}

/// Returns the best approximation with a denominator up to `largest`.
fn best_fraction(ratio: Exact, largest: Modulus) -> Result<Word, WordError> {
    if largest.get() == 1 {
        return rounded(ratio, largest);
    }
    let floor = ratio.floor();
    let fraction = ratio.minus(&Exact::from_integer(floor))?;
    let limit = i128::from(largest.get());
    let (k, m) = if fraction.denominator() <= limit {
        (fraction.numerator(), fraction.denominator())
    } else {
        last_approximant(&fraction, limit)?
    };
    let (n, k) = if k == m { (floor + 1, 0) } else { (floor, k) };
    let too_large = |_| WordError::RatioTooLarge { found: ratio };
    let modulus = Modulus::new(u64::try_from(m).map_err(too_large)?)?;
    Ok(Word { n: u64::try_from(n).map_err(too_large)?, k: u64::try_from(k).map_err(too_large)?, modulus })
}

/// Returns the nearer of the last convergent and the last semiconvergent with a denominator up to `limit`, for a
/// fraction in 0 … 1 whose own denominator passes the limit. These two are the neighbours of the fraction among all
/// denominators up to the limit, so one of them is the best approximation.
fn last_approximant(fraction: &Exact, limit: i128) -> Result<(i128, i128), WordError> {
    let (mut top, mut bottom) = (fraction.numerator(), fraction.denominator());
    let (mut before, mut last) = ((0i128, 1i128), (1i128, 0i128));
    loop {
        // The denominator of the fraction passes the limit, so the expansion cannot end before the limit does.
        let quotient = top / bottom;
        let room = if last.1 == 0 { i128::MAX } else { (limit - before.1) / last.1 };
        if quotient > room {
            let semi = (before.0 + room * last.0, before.1 + room * last.1);
            let distance =
                |(k, m): (i128, i128)| -> Result<Exact, WordError> { Ok(fraction.minus(&Exact::new(k, m)?)?.abs()) };
            return if semi.1 > last.1 && distance(semi)? < distance(last)? { Ok(semi) } else { Ok(last) };
        }
        (before, last) = (last, (before.0 + quotient * last.0, before.1 + quotient * last.1));
        (top, bottom) = (bottom, top % bottom);
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn exact(a: i128, b: i128) -> Exact {
        Exact::new(a, b).unwrap()
    }

    fn word_of(ratio: Exact, rule: ModulusRule) -> (u64, u64, u64) {
        let word = nearest(ratio, &rule, Frequency::from_whole_hz(1_000_000), 1).unwrap();
        (word.n, word.k, word.modulus.get())
    }

    fn fixed(m: u64) -> ModulusRule {
        ModulusRule::Fixed(Modulus::new(m).unwrap())
    }

    #[test]
    fn ties_go_to_even_and_a_full_numerator_carries() {
        let cases = [
            (exact(161, 32), 16, (5, 0, 16)),
            (exact(163, 32), 16, (5, 2, 16)),
            (exact(191, 32), 16, (6, 0, 16)),
            (exact(599, 100), 4, (6, 0, 4)),
            (exact(5, 2), 1, (2, 0, 1)),
            (exact(7, 2), 1, (4, 0, 1)),
            (exact(1, 3), 2, (0, 1, 2)),
        ];
        for (ratio, m, want) in cases {
            assert_eq!(word_of(ratio, fixed(m)), want, "{ratio} over {m}");
        }
    }

    #[test]
    fn largest_finds_what_trying_every_denominator_finds() {
        let mut checked = 0;
        for q in 1..=90i128 {
            for p in 0..q {
                let ratio = exact(7 * q + p, q);
                for largest in [1u64, 2, 3, 5, 8, 13, 21, 40, 64, 89] {
                    let mut best: Option<(Exact, i128, i128)> = None;
                    for m in 1..=i128::from(largest) {
                        let scaled = ratio.times(&exact(m, 1)).unwrap();
                        // With one denominator the tie between two integers goes to even.
                        let top = scaled.round_half_even();
                        let distance = ratio.minus(&exact(top, m)).unwrap().abs();
                        if best.is_none_or(|(d, _, _)| distance < d) {
                            best = Some((distance, top, m));
                        }
                    }
                    let (_, top, m) = best.unwrap();
                    let (n, k, found) = word_of(ratio, ModulusRule::Largest(Modulus::new(largest).unwrap()));
                    let found_top = i128::from(n) * i128::from(found) + i128::from(k);
                    assert_eq!((found_top, i128::from(found)), (top, m), "{ratio} up to {largest}");
                    checked += 1;
                }
            }
        }
        assert_eq!(checked, 90 * 91 / 2 * 10);
    }

    #[test]
    fn step_moduli_are_rational() {
        let hz = |a, b| Frequency::from_hz(exact(a, b));
        // Published forum answer: 61.44 MHz in steps of 50 kHz has gcd 10 kHz, modulus 6144.
        assert_eq!(step_modulus(hz(50_000, 1), hz(61_440_000, 1), 1).unwrap().get(), 6144);
        // 25/3 kHz at P = 4 on 19.2 MHz: 100/3 kHz divides it 576 times.
        assert_eq!(step_modulus(hz(25_000, 3), hz(19_200_000, 1), 4).unwrap().get(), 576);
        assert_eq!(step_modulus(hz(19_200_000, 1), hz(19_200_000, 1), 3).unwrap().get(), 1);
        assert!(matches!(
            step_modulus(hz(1, 1 << 30), hz(19_200_001, 1), 1),
            Err(WordError::StepModulusTooLarge { .. })
        ));
        assert!(matches!(step_modulus(hz(0, 1), hz(1, 1), 1), Err(WordError::StepNotPositive { .. })));
    }

    #[test]
    fn a_fixed_modulus_is_missed_by_half_a_step_at_most() {
        let (half, mut checked) = (exact(1, 2), 0);
        for m in [2u64, 3, 1000, 1 << 24, (1 << 48) - 59, 1 << 48] {
            for i in 0..200i128 {
                // 25/3 kHz raster from 400 MHz at P = 4 on 19.2 MHz, and an offset that reduces to nothing.
                let hz = exact(400_000_000 * 3 + 25_000 * i, 3).plus(&exact(i, 7)).unwrap();
                let ratio = hz.times(&exact(4, 19_200_000)).unwrap();
                let word = nearest(ratio, &fixed(m), Frequency::from_whole_hz(19_200_000), 4).unwrap();
                let miss = word.ratio().minus(&ratio).unwrap().times(&exact(m.into(), 1)).unwrap().abs();
                assert!(miss <= half, "{ratio} over {m}: {miss}");
                assert!(word.k < m);
                checked += 1;
            }
        }
        assert_eq!(checked, 6 * 200);
    }

    #[test]
    fn a_step_makes_every_channel_of_its_raster_exact() {
        let (step, pfd) = (Frequency::from_hz(exact(25_000, 3)), Frequency::from_whole_hz(19_200_000));
        for i in 0..500 {
            let output = exact(433_000_000, 1).plus(&step.hz().times(&exact(i, 1)).unwrap()).unwrap();
            let ratio = output.times(&exact(4, 1)).unwrap().over(&pfd.hz()).unwrap();
            let word = nearest(ratio, &ModulusRule::Step(step), pfd, 4).unwrap();
            assert_eq!(word.modulus.get(), 576);
            // 433 MHz is 51,960 steps, so the raster lies on the grid of the step.
            assert_eq!(word.ratio(), ratio, "channel {i}");
            let (k, m) = word.reduced();
            assert_eq!(num_integer::gcd(k, m), 1);
        }
    }

    #[test]
    fn refuses_what_is_no_ratio() {
        let pfd = Frequency::from_whole_hz(1);
        let found = nearest(Exact::ZERO, &fixed(4), pfd, 1).unwrap_err().to_string();
        assert_eq!(found, "divider ratio 0 is not above 0");
        assert!(matches!(nearest(exact(1 << 70, 1), &fixed(4), pfd, 1), Err(WordError::RatioTooLarge { .. })));
    }
}
