//! The checked description of a modulator.

use serde::Serialize;
use thiserror::Error;

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
    /// Coefficients h_1 … h_n of the error filter (`error-feedback` only); `None` is (1 − z⁻¹)^order.
    pub noise_transfer: Option<Vec<i64>>,
    /// Whether the modulator keeps running at K = 0.
    pub runs_at_zero: bool,
}

/// Why a modulator cannot be set up.
#[derive(Debug, Clone, PartialEq, Eq, Error)]
pub enum ModulatorError {
    /// The modulus is zero or above 2^48.
    #[error("modulus {found} is outside 1 … 2^48")]
    ModulusOutOfRange {
        /// The value found.
        found: u64,
    },
}
