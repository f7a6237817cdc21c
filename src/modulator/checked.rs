//! The checked configuration of one modulator on one word.

use super::config::{Dither, ModulatorSettings, Modulus, ModulusRule, Structure};
use super::error::ModulatorError;
use super::prime::prime_feedback;
use crate::base::Exact;

/// Whether a modulus was chosen once for all channels or channel by channel.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
enum SeedRule {
    /// A seed beyond the modulus is an error.
    MustFit,
    /// A seed beyond the modulus is reduced.
    Reduced,
}

/// A modulator that can be run: every number is inside its range.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct ModulatorConfig {
    structure: Structure,
    order: u8,
    modulus: Modulus,
    k: u64,
    seeds: Vec<u64>,
    seeds_reduced: bool,
    dither: Dither,
    error_filter: Vec<i64>,
    shaping: Shaping,
    held: bool,
}

/// Whether an error filter is the plain difference or was given.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) enum Shaping {
    /// (1 − z⁻¹)^order.
    Difference,
    /// Coefficients that the user gave.
    Given,
}

impl ModulatorConfig {
    /// Returns the configuration for numerator `k` over `modulus`.
    ///
    /// The modulus is the denominator of the achieved fraction: for a prime-modulus MASH the prime itself (see
    /// [`ModulusRule::working`]), for an integer divider 1. Missing seeds are 0. With a modulus that is fixed for the
    /// plan a seed must be below it; otherwise it is reduced, and `seeds_reduced` tells.
    ///
    /// # Errors
    /// `ModulatorError`: whatever [`ModulatorSettings::check`] finds, a numerator, seed or dither weight beyond the
    /// modulus, a modulus that the structure cannot work with.
    pub fn new(
        settings: &ModulatorSettings,
        modulus: Modulus,
        k: u64,
        modulus_is_fixed: bool,
    ) -> Result<Self, ModulatorError> {
        settings.check()?;
        let m = modulus.get();
        match settings.structure {
            Structure::Integer if m != 1 => return Err(ModulatorError::IntegerModulus { found: m }),
            Structure::PrimeMash if working_prime(m) != Some(m) => {
                return Err(ModulatorError::NotAPrimeModulus { found: m });
            }
            _ => {}
        }
        if k >= m {
            return Err(ModulatorError::NumeratorOutOfRange { found: k, largest: m - 1 });
        }
        let held = settings.structure == Structure::Integer || (k == 0 && !settings.runs_at_zero);
        if let Some((_, weight)) = settings.dither.stage_and_weight()
            && weight > m
            && !held
        {
            return Err(ModulatorError::DitherWeightOutOfRange { found: weight, largest: m });
        }
        let rule = if modulus_is_fixed { SeedRule::MustFit } else { SeedRule::Reduced };
        let (seeds, seeds_reduced) = fit_seeds(settings, m, rule)?;
        let (error_filter, shaping) = error_filter(settings);
        Ok(Self {
            structure: settings.structure,
            order: settings.order,
            modulus,
            k,
            seeds,
            seeds_reduced,
            dither: settings.dither,
            error_filter,
            shaping,
            held,
        })
    }

    /// Returns the structure.
    #[must_use]
    pub fn structure(&self) -> Structure {
        self.structure
    }

    /// Returns the order, 0 for an integer divider.
    #[must_use]
    pub fn order(&self) -> u8 {
        self.order
    }

    /// Returns the modulus M: the mean is K/M.
    #[must_use]
    pub fn modulus(&self) -> Modulus {
        self.modulus
    }

    /// Returns the numerator K, below M.
    #[must_use]
    pub fn k(&self) -> u64 {
        self.k
    }

    /// Returns the start residues, one for each stage (error feedback: e\[−1\], e\[−2\], …).
    #[must_use]
    pub fn seeds(&self) -> &[u64] {
        &self.seeds
    }

    /// Returns whether a seed had to be reduced modulo M.
    #[must_use]
    pub fn seeds_reduced(&self) -> bool {
        self.seeds_reduced
    }

    /// Returns the dither that runs; `None` while the modulator is held.
    #[must_use]
    pub fn dither(&self) -> Dither {
        if self.held { Dither::None } else { self.dither }
    }

    /// Returns h_1 … h_order of an error-feedback modulator; empty for the others.
    #[must_use]
    pub fn error_filter(&self) -> &[i64] {
        &self.error_filter
    }

    /// Returns whether the modulator stands still: integer divider, or K = 0 without `runs_at_zero`.
    #[must_use]
    pub fn is_held(&self) -> bool {
        self.held
    }

    /// Returns the same modulator with other start residues, all below M.
    pub(super) fn with_seeds(&self, seeds: &[u64]) -> Self {
        Self { seeds: seeds.to_vec(), ..self.clone() }
    }

    /// Returns whether the quantisation error leaves through (1 − z⁻¹)^order, so that the shaping formula and the
    /// conditional-mean curve describe it.
    #[must_use]
    pub fn has_ideal_shaping(&self) -> bool {
        !self.held && self.shaping == Shaping::Difference
    }

    /// Returns whether the noise transfer is (1 − z⁻¹)^order or was given.
    pub(super) fn shaping(&self) -> Shaping {
        self.shaping
    }

    /// Returns the width of the accumulators of a prime-modulus MASH \[bits\]; M is the largest prime below 2^bits.
    pub(super) fn prime_bits(&self) -> u32 {
        u64::BITS - self.modulus.get().leading_zeros()
    }

    /// Returns what the dither adds to the mean output at stage 1, else 0: exact for a register,
    /// w·2^(L−1)/((2^L − 1)·M); the expected value w/(2M) for white bits.
    ///
    /// # Panics
    /// Never: the denominator has at most 31 + 48 bits.
    #[must_use]
    pub fn mean_shift(&self) -> Exact {
        match self.dither() {
            Dither::Register { stage: 1, register, weight, .. } => {
                let ones = i128::from(weight) << (register - 1);
                let period = (1i128 << register) - 1;
                Exact::new(ones, period * i128::from(self.modulus.get())).expect("the denominator is never zero")
            }
            Dither::White { stage: 1, weight, .. } => {
                let m = i128::from(self.modulus.get());
                Exact::new(i128::from(weight), 2 * m).expect("a modulus is at least 1")
            }
            Dither::Register { .. } | Dither::White { .. } | Dither::None => Exact::ZERO,
        }
    }

    /// Returns the exact mean output, K/M plus the shift by dither; `None` for an error filter whose coefficients do
    /// not sum to 1: its noise transfer does not vanish at zero frequency, so the mean depends on the sequence.
    ///
    /// # Panics
    /// Never: the sum has at most 127 bits.
    #[must_use]
    pub fn mean(&self) -> Option<Exact> {
        if self.structure == Structure::ErrorFeedback && !self.held && self.error_filter.iter().sum::<i64>() != 1 {
            return None;
        }
        let word = Exact::new(i128::from(self.k), i128::from(self.modulus.get())).expect("a modulus is never zero");
        Some(word.plus(&self.mean_shift()).expect("at most 31 + 48 + 48 bits"))
    }

    /// Returns whether the dither can whiten the quantisation error; `None` without dither.
    ///
    /// It can for a stage r ≤ order − 1 only (Pamarti & Galton 2007, from memory).
    #[must_use]
    pub fn dither_can_whiten(&self) -> Option<bool> {
        self.dither().stage_and_weight().map(|(stage, _)| stage < self.order)
    }
}

impl ModulusRule {
    /// Returns the rule with the modulus that a structure really divides by: 1 for an integer divider, the largest
    /// prime below a fixed 2^b for a prime-modulus MASH, unchanged for the others.
    ///
    /// # Errors
    /// `NotAPrimeModulus` for a prime-modulus MASH whose modulus is no 2^b (b = 3 … 48) and no such prime, or that is
    /// chosen channel by channel.
    ///
    /// # Examples
    /// ```
    /// use thornmap::modulator::{Modulus, ModulusRule, Structure};
    /// let rule = ModulusRule::Fixed(Modulus::new(1 << 24).unwrap());
    /// let prime = Modulus::new((1 << 24) - 3).unwrap();
    /// assert_eq!(rule.working(Structure::PrimeMash).unwrap(), ModulusRule::Fixed(prime));
    /// ```
    pub fn working(&self, structure: Structure) -> Result<Self, ModulatorError> {
        match structure {
            Structure::Integer => Modulus::new(1).map(Self::Fixed),
            Structure::PrimeMash => match self {
                Self::Fixed(modulus) => match working_prime(modulus.get()) {
                    Some(prime) => Modulus::new(prime).map(Self::Fixed),
                    None => Err(ModulatorError::NotAPrimeModulus { found: modulus.get() }),
                },
                Self::Largest(modulus) => Err(ModulatorError::NotAPrimeModulus { found: modulus.get() }),
                Self::Step(_) => Err(ModulatorError::PrimeModulusNotFixed),
            },
            Structure::Mash | Structure::OutputFed | Structure::ErrorFeedback => Ok(*self),
        }
    }
}

/// Returns the largest prime below 2^b for a modulus that is 2^b or this prime, b = 3 … 48.
fn working_prime(modulus: u64) -> Option<u64> {
    let bits = if modulus.is_power_of_two() { modulus.trailing_zeros() } else { u64::BITS - modulus.leading_zeros() };
    if bits < 3 {
        return None;
    }
    let prime = (1u64 << bits.min(63)) - prime_feedback(bits)?;
    (modulus.is_power_of_two() || modulus == prime).then_some(prime)
}

/// Returns one seed for each stage and whether one was reduced.
fn fit_seeds(settings: &ModulatorSettings, modulus: u64, rule: SeedRule) -> Result<(Vec<u64>, bool), ModulatorError> {
    let mut seeds = settings.seeds.clone();
    seeds.resize(usize::from(settings.order), 0);
    let mut reduced = false;
    for (index, seed) in seeds.iter_mut().enumerate() {
        if *seed >= modulus {
            if rule == SeedRule::MustFit {
                return Err(ModulatorError::SeedOutOfRange { stage: index + 1, found: *seed, largest: modulus - 1 });
            }
            *seed %= modulus;
            reduced = true;
        }
    }
    Ok((seeds, reduced))
}

/// Returns the error filter of the settings; empty where the structure has none.
fn error_filter(settings: &ModulatorSettings) -> (Vec<i64>, Shaping) {
    match (&settings.noise_transfer, settings.structure) {
        (Some(given), _) => (given.clone(), Shaping::Given),
        (None, Structure::ErrorFeedback) => (difference_filter(settings.order), Shaping::Difference),
        (None, _) => (Vec::new(), Shaping::Difference),
    }
}

/// Returns h_j = −(−1)^j·C(order, j), so that 1 − Σ h_j·z⁻ʲ = (1 − z⁻¹)^order.
fn difference_filter(order: u8) -> Vec<i64> {
    let mut coefficient = 1i64;
    (1..=i64::from(order))
        .map(|j| {
            coefficient = -coefficient * (i64::from(order) - j + 1) / j;
            -coefficient
        })
        .collect()
}
