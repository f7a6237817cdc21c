//! What can be wrong with a modulator.

use thiserror::Error;

use super::register::lengths_in_words;

/// Why a modulator cannot be set up or run as asked.
#[derive(Debug, Clone, PartialEq, Eq, Error)]
pub enum ModulatorError {
    /// The modulus is zero or above 2^48.
    #[error("modulus {found} is outside 1 … 2^48")]
    ModulusOutOfRange {
        /// The value found.
        found: u64,
    },
    /// An order that the structure does not have.
    #[error("order {found} of structure \"{structure}\" is outside {lowest} … {highest}")]
    OrderOutOfRange {
        /// The structure.
        structure: &'static str,
        /// The order found.
        found: u8,
        /// Lowest order.
        lowest: u8,
        /// Highest order.
        highest: u8,
    },
    /// More seeds than stages.
    #[error("{found} seeds for {stages} stages; give at most {stages}")]
    TooManySeeds {
        /// Number of seeds found.
        found: usize,
        /// Number of stages.
        stages: u8,
    },
    /// A seed that does not fit the fixed modulus.
    #[error("seed {found} of stage {stage} is outside 0 … {largest}")]
    SeedOutOfRange {
        /// Stage, from 1.
        stage: usize,
        /// The seed found.
        found: u64,
        /// The largest seed.
        largest: u64,
    },
    /// A numerator that is not below the modulus.
    #[error("numerator {found} is outside 0 … {largest}")]
    NumeratorOutOfRange {
        /// The numerator found.
        found: u64,
        /// The largest numerator.
        largest: u64,
    },
    /// Dither where there is no modulator.
    #[error("structure \"{structure}\" has no input for dither; set dither to \"none\"")]
    NoDitherInput {
        /// The structure.
        structure: &'static str,
    },
    /// Dither at a stage that does not exist.
    #[error("dither stage {found} is outside 1 … {highest}")]
    DitherStageOutOfRange {
        /// The stage found.
        found: u8,
        /// The last stage.
        highest: u8,
    },
    /// A register length without listed taps.
    #[error("register length {found} is not listed; listed are {}", lengths_in_words())]
    UnknownRegister {
        /// The length found.
        found: u8,
    },
    /// A register seed that is zero or too long.
    #[error("register seed {found} is outside 1 … {largest} for {register} bits")]
    RegisterSeedOutOfRange {
        /// The seed found.
        found: u64,
        /// Length of the register.
        register: u8,
        /// The largest seed.
        largest: u64,
    },
    /// A dither weight of zero or above the modulus.
    #[error("dither weight {found} is outside 1 … {largest}")]
    DitherWeightOutOfRange {
        /// The weight found.
        found: u64,
        /// The largest weight.
        largest: u64,
    },
    /// Error filter coefficients for another structure.
    #[error("structure \"{structure}\" has no error filter; coefficients belong to \"error-feedback\"")]
    NoErrorFilter {
        /// The structure.
        structure: &'static str,
    },
    /// Not as many coefficients as the order.
    #[error("{found} error filter coefficients for order {order}; give exactly {order}")]
    CoefficientCount {
        /// The number found.
        found: usize,
        /// The order.
        order: u8,
    },
    /// An error filter coefficient beyond the range.
    #[error("error filter coefficient {found} is outside −{largest} … {largest}")]
    CoefficientOutOfRange {
        /// The coefficient found.
        found: i64,
        /// The largest magnitude.
        largest: i64,
    },
    /// A modulus that a prime-modulus MASH cannot work with.
    #[error("modulus {found} does not fit \"prime-mash\": it needs 2^b with b = 3 … 48, or the largest prime below it")]
    NotAPrimeModulus {
        /// The modulus found.
        found: u64,
    },
    /// A prime-modulus MASH whose modulus would change from channel to channel.
    #[error("\"prime-mash\" needs a fixed modulus 2^b with b = 3 … 48")]
    PrimeModulusNotFixed,
    /// A modulus above 1 for an integer divider.
    #[error("modulus {found} for structure \"integer\"; it is 1")]
    IntegerModulus {
        /// The modulus found.
        found: u64,
    },
    /// No closed form for the state at a later step.
    #[error("only an undithered \"mash\" can jump to a step; found \"{structure}\" {dither}")]
    NoJump {
        /// The structure.
        structure: &'static str,
        /// `with dither` or `without dither`.
        dither: &'static str,
    },
    /// The running phase sum passes 63 bits: the outputs do not belong to the word.
    #[error("the phase sum passes 63 bits at output {index}: these outputs do not have the mean {k}/{modulus}")]
    PhaseOverflow {
        /// Index of the output.
        index: usize,
        /// Numerator.
        k: u64,
        /// Modulus.
        modulus: u64,
    },
}
