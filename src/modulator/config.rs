//! The checked description of a modulator.

use serde::Serialize;

use super::error::ModulatorError;
use super::register::tap_pair;
use crate::base::Frequency;

/// The circuit that turns a constant numerator into a sequence of integers with mean `K/M`.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum Structure {
    /// No modulator: the fraction is zero (order 0).
    Integer,
    /// Cascade of first-order accumulators (multi-stage noise shaping), orders 1–5.
    Mash,
    /// MASH whose carry is fed back so that the working modulus is a prime (Hosseini & Kennedy 2007).
    PrimeMash,
    /// MASH whose stages take residue plus carry of the stage before.
    OutputFed,
    /// One quantiser with an error filter, orders 1–4.
    ErrorFeedback,
}

impl Structure {
    /// Returns the word used in plans and outputs.
    #[must_use]
    pub const fn word(self) -> &'static str {
        match self {
            Self::Integer => "integer",
            Self::Mash => "mash",
            Self::PrimeMash => "prime-mash",
            Self::OutputFed => "output-fed",
            Self::ErrorFeedback => "error-feedback",
        }
    }

    /// Returns the lowest and the highest order, both allowed.
    #[must_use]
    pub const fn orders(self) -> (u8, u8) {
        match self {
            Self::Integer => (0, 0),
            Self::Mash | Self::PrimeMash | Self::OutputFed => (1, 5),
            Self::ErrorFeedback => (1, 4),
        }
    }

    /// Returns the last stage whose input can take dither: an error-feedback modulator has one
    /// quantiser, so one input; an integer divider has none.
    #[must_use]
    pub const fn last_dither_stage(self, order: u8) -> u8 {
        match self {
            Self::Integer => 0,
            Self::Mash | Self::PrimeMash | Self::OutputFed => order,
            Self::ErrorFeedback => 1,
        }
    }
}

/// A one-bit sequence added to the input of a stage.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum Dither {
    /// Nothing is added.
    None,
    /// A bit of a maximal-length register.
    Register {
        /// Stage whose input takes the bit, from 1.
        stage: u8,
        /// Length of the register in bits; its taps are looked up.
        register: u8,
        /// Start value of the register, 1 … 2^length − 1.
        seed: u64,
        /// Value added for a one, in least significant bits of the accumulator.
        weight: u64,
    },
    /// Independent fair bits of a seeded generator, for statistics over seeds; no hardware has them.
    White {
        /// Stage whose input takes the bit, from 1.
        stage: u8,
        /// Seed of the generator.
        seed: u64,
        /// Value added for a one, in least significant bits of the accumulator.
        weight: u64,
    },
}

impl Dither {
    /// Returns the dither in words.
    #[must_use]
    pub fn words(self) -> String {
        match self {
            Self::None => "no dither".to_owned(),
            Self::Register { stage, register, seed, weight } => {
                format!("{register}-bit dither at stage {stage} (seed {seed}, weight {weight})")
            }
            Self::White { stage, seed, weight } => {
                format!("white dither at stage {stage} (generator seed {seed}, weight {weight})")
            }
        }
    }

    /// Returns the stage whose input takes the bit and the value of a one; `None` without dither.
    #[must_use]
    pub const fn stage_and_weight(self) -> Option<(u8, u64)> {
        match self {
            Self::None => None,
            Self::Register { stage, weight, .. } | Self::White { stage, weight, .. } => Some((stage, weight)),
        }
    }
}

/// A modulus, 1 … 2^48.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord, Hash, Serialize)]
pub struct Modulus(u64);

impl Modulus {
    /// The largest modulus: products of two residues still leave room in 128 bits.
    pub const LARGEST: u64 = 1 << 48;

    /// Returns a checked modulus.
    ///
    /// # Errors
    /// `ModulusOutOfRange` outside 1 … 2^48.
    pub fn new(value: u64) -> Result<Self, ModulatorError> {
        if (1..=Self::LARGEST).contains(&value) {
            Ok(Self(value))
        } else {
            Err(ModulatorError::ModulusOutOfRange { found: value })
        }
    }

    /// Returns the plain number.
    #[must_use]
    pub const fn get(self) -> u64 {
        self.0
    }
}

/// How the modulus of a channel is found.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum ModulusRule {
    /// The same for every channel.
    Fixed(Modulus),
    /// The best fraction with a denominator up to this one.
    Largest(Modulus),
    /// The modulus that makes this output step exact.
    Step(Frequency),
}

/// What a plan states once about its modulator; word and modulus are added channel by channel.
#[derive(Debug, Clone, PartialEq, Eq, Serialize)]
pub struct ModulatorSettings {
    /// Circuit.
    pub structure: Structure,
    /// Order, 0 for `integer`.
    pub order: u8,
    /// Start residues by stage; missing ones are 0.
    pub seeds: Vec<u64>,
    /// Dither.
    pub dither: Dither,
    /// Coefficients h_1 … h_order of the error filter (`error-feedback` only): y = ⌊(K + Σ h_j·e[n − j])/M⌋, so the
    /// noise transfer is 1 − Σ h_j·z⁻ʲ. `None` is (1 − z⁻¹)^order, for example h = \[2, −1\] at order 2.
    pub noise_transfer: Option<Vec<i64>>,
    /// Whether the modulator keeps running at K = 0.
    pub runs_at_zero: bool,
}

impl ModulatorSettings {
    /// The largest magnitude of an error filter coefficient: outputs stay far inside 32 bits.
    pub const LARGEST_COEFFICIENT: i64 = 1024;

    /// Checks all that can be known without a word: order, stages, dither, error filter.
    ///
    /// # Errors
    /// The first `ModulatorError` found, in the order of the fields.
    ///
    /// # Examples
    /// ```
    /// use thornmap::modulator::{Dither, ModulatorSettings, Structure};
    /// let mut settings = ModulatorSettings {
    ///     structure: Structure::Mash,
    ///     order: 3,
    ///     seeds: vec![1],
    ///     dither: Dither::None,
    ///     noise_transfer: None,
    ///     runs_at_zero: false,
    /// };
    /// assert!(settings.check().is_ok());
    /// settings.order = 9;
    /// assert_eq!(settings.check().unwrap_err().to_string(), "order 9 of structure \"mash\" is outside 1 … 5");
    /// ```
    pub fn check(&self) -> Result<(), ModulatorError> {
        let (lowest, highest) = self.structure.orders();
        if !(lowest..=highest).contains(&self.order) {
            return Err(ModulatorError::OrderOutOfRange {
                structure: self.structure.word(),
                found: self.order,
                lowest,
                highest,
            });
        }
        if self.seeds.len() > usize::from(self.order) {
            return Err(ModulatorError::TooManySeeds { found: self.seeds.len(), stages: self.order });
        }
        self.check_dither()?;
        self.check_noise_transfer()
    }

    /// Checks stage, register and weight of the dither.
    fn check_dither(&self) -> Result<(), ModulatorError> {
        let Some((stage, weight)) = self.dither.stage_and_weight() else {
            return Ok(());
        };
        let highest = self.structure.last_dither_stage(self.order);
        if highest == 0 {
            return Err(ModulatorError::NoDitherInput { structure: self.structure.word() });
        }
        if !(1..=highest).contains(&stage) {
            return Err(ModulatorError::DitherStageOutOfRange { found: stage, highest });
        }
        if let Dither::Register { register, seed, .. } = self.dither {
            if tap_pair(register).is_none() {
                return Err(ModulatorError::UnknownRegister { found: register });
            }
            let largest = (1u64 << register) - 1;
            if !(1..=largest).contains(&seed) {
                return Err(ModulatorError::RegisterSeedOutOfRange { found: seed, register, largest });
            }
        }
        if !(1..=Modulus::LARGEST).contains(&weight) {
            return Err(ModulatorError::DitherWeightOutOfRange { found: weight, largest: Modulus::LARGEST });
        }
        Ok(())
    }

    /// Checks the coefficients of the error filter.
    fn check_noise_transfer(&self) -> Result<(), ModulatorError> {
        let Some(coefficients) = &self.noise_transfer else {
            return Ok(());
        };
        if self.structure != Structure::ErrorFeedback {
            return Err(ModulatorError::NoErrorFilter { structure: self.structure.word() });
        }
        if coefficients.len() != usize::from(self.order) {
            return Err(ModulatorError::CoefficientCount { found: coefficients.len(), order: self.order });
        }
        let largest = Self::LARGEST_COEFFICIENT;
        match coefficients.iter().find(|h| !(-largest..=largest).contains(*h)) {
            Some(&found) => Err(ModulatorError::CoefficientOutOfRange { found, largest }),
            None => Ok(()),
        }
    }
}
