//! From a configuration to its running sequence: the one place where structures meet.

use super::cascade::{self, OutputFedStage, PlainStage, PrimeStage};
use super::checked::ModulatorConfig;
use super::config::{Modulus, Structure};
use super::error::ModulatorError;
use super::{error_feedback, mash};

/// A running modulator.
pub trait Modulator {
    /// Writes the next outputs, one for each PFD cycle. Calls of any length give one continuous sequence.
    fn fill(&mut self, outputs: &mut [i32]);

    /// Returns the ramp s_1 after the last output, 0 … M − 1, for which M·φ + s_1 is constant modulo M (without dither
    /// at stage 1); `None` where there is no first accumulator.
    fn first_residue(&self) -> Option<u64>;
}

/// A divider without modulator, or one that is held: all outputs 0.
struct Held;

impl Modulator for Held {
    fn fill(&mut self, outputs: &mut [i32]) {
        outputs.fill(0);
    }

    fn first_residue(&self) -> Option<u64> {
        None
    }
}

/// Starts a modulator at its first output.
///
/// # Examples
/// ```
/// use thornmap::modulator::{Dither, ModulatorConfig, ModulatorSettings, Modulus, Structure, start};
/// let settings = ModulatorSettings {
///     structure: Structure::Mash,
///     order: 2,
///     seeds: vec![],
///     dither: Dither::None,
///     noise_transfer: None,
///     runs_at_zero: false,
/// };
/// let config = ModulatorConfig::new(&settings, Modulus::new(16).unwrap(), 3, true).unwrap();
/// let mut outputs = [0; 10];
/// start(&config).fill(&mut outputs);
/// assert_eq!(outputs, [0, 0, 1, -1, 1, 0, 1, -1, 1, 0]);
/// ```
#[must_use]
pub fn start(config: &ModulatorConfig) -> Box<dyn Modulator + Send> {
    if config.is_held() {
        return Box::new(Held);
    }
    let modulus = config.modulus().get();
    match config.structure() {
        Structure::Integer => Box::new(Held),
        Structure::Mash => mash::start(config),
        Structure::PrimeMash => cascade::start(config, prime_stage(config)),
        Structure::OutputFed => cascade::start(config, OutputFedStage { plain: PlainStage { modulus } }),
        Structure::ErrorFeedback => error_feedback::start(config),
    }
}

/// Returns the stage of a prime-modulus MASH.
pub(super) fn prime_stage(config: &ModulatorConfig) -> PrimeStage {
    let (bits, modulus) = (config.prime_bits(), config.modulus().get());
    PrimeStage { bits, feedback: (1 << bits) - modulus, modulus }
}

/// Writes the running phase error in units of 1/M cycle: `out[n]` = M·φ\[n\] = Σ_{i ≤ n} (M·y\[i\] − K).
///
/// The slices have one length. Without dither and for a noise transfer that vanishes at zero frequency, |M·φ| stays
/// below 2^(order − 1)·M ≤ 2^52 from the first output on: the first carry follows its ramp within M, and the sum over
/// the differences of the other carries is their combination of order − 1, at most 2^(order − 2). What drifts is caught
/// when the sum passes 63 bits.
///
/// # Errors
/// `PhaseOverflow` with the index of the first output at which the sum does not fit; `out` is then filled up to it.
///
/// # Panics
/// If the slices differ in length: a broken contract of the caller.
///
/// # Examples
/// ```
/// use thornmap::modulator::{Modulus, phase_numerators};
/// let mut phase = [0; 4];
/// phase_numerators(&[0, 0, 1, 0], 1, Modulus::new(3).unwrap(), &mut phase).unwrap();
/// assert_eq!(phase, [-1, -2, 0, -1]);
/// ```
pub fn phase_numerators(outputs: &[i32], k: u64, modulus: Modulus, out: &mut [i64]) -> Result<(), ModulatorError> {
    add_up(outputs, k, modulus, (0, 0), out)
}

/// Continues [`phase_numerators`] from a sum after `made` outputs.
pub(super) fn add_up(
    outputs: &[i32],
    k: u64,
    modulus: Modulus,
    (mut sum, made): (i64, usize),
    out: &mut [i64],
) -> Result<(), ModulatorError> {
    assert_eq!(outputs.len(), out.len(), "one phase for each output");
    let m = i64::try_from(modulus.get()).expect("a modulus is at most 2^48");
    let overflow = |index| ModulatorError::PhaseOverflow { index: made + index, k, modulus: modulus.get() };
    let step_back = i64::try_from(k).map_err(|_| overflow(0))?;
    for (index, (output, phase)) in outputs.iter().zip(out).enumerate() {
        sum = i64::from(*output)
            .checked_mul(m)
            .and_then(|product| product.checked_sub(step_back))
            .and_then(|step| sum.checked_add(step))
            .ok_or_else(|| overflow(index))?;
        *phase = sum;
    }
    Ok(())
}
