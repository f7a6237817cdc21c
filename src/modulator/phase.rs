//! The phase error of a running modulator, without its outputs where these are not needed.

use super::checked::ModulatorConfig;
use super::closed_form::residues_at;
use super::config::{Dither, Structure};
use super::error::ModulatorError;
use super::range::transient;
use super::residues::Residues;
use super::sequence::{Modulator, add_up, start};

/// Outputs that are summed at a time.
const BLOCK: usize = 1024;

/// The phase error φ of a modulator from its first periodic output on, in units of 1/M cycle.
///
/// The numbers are those of [`super::phase_numerators`] after the [`transient`], counted from the modulator's start. An
/// undithered MASH gives them from its last residue alone, `M·φ = const − (1 − z⁻¹)^(m−1) s_m`, several times faster.
///
/// # Examples
/// ```
/// use thornmap::modulator::{
///     Dither, ModulatorConfig, ModulatorSettings, Modulus, PhaseRun, Structure, phase_numerators, start,
/// };
/// let settings = ModulatorSettings {
///     structure: Structure::Mash,
///     order: 3,
///     seeds: vec![1],
///     dither: Dither::None,
///     noise_transfer: None,
///     runs_at_zero: false,
/// };
/// let config = ModulatorConfig::new(&settings, Modulus::new(1000).unwrap(), 37, true).unwrap();
/// let (mut outputs, mut sums, mut phase) = ([0; 22], [0; 22], [0.0; 20]);
/// start(&config).fill(&mut outputs);
/// phase_numerators(&outputs, 37, config.modulus(), &mut sums).unwrap();
/// PhaseRun::new(&config).unwrap().fill(&mut phase).unwrap();
/// assert_eq!(phase, std::array::from_fn(|n| sums[n + 2] as f64));
/// ```
pub struct PhaseRun<'a> {
    config: &'a ModulatorConfig,
    source: Source,
}

/// Where the numbers come from.
#[allow(clippy::large_enum_variant, reason = "a box would allocate for every channel")]
enum Source {
    Residues(Residues),
    Outputs { modulator: Box<dyn Modulator + Send>, sum: i64, made: usize },
}

impl<'a> PhaseRun<'a> {
    /// Returns the phase error at the end of the transient.
    ///
    /// # Errors
    /// `PhaseOverflow` where the sum leaves 63 bits within the transient.
    pub fn new(config: &'a ModulatorConfig) -> Result<Self, ModulatorError> {
        if !config.is_held() && config.structure() == Structure::Mash && config.dither() == Dither::None {
            return Ok(Self { config, source: Source::Residues(Residues::new(config)) });
        }
        let source = Source::Outputs { modulator: start(config), sum: 0, made: 0 };
        let mut run = Self { config, source };
        let mut left = transient(config);
        while left > 0 {
            let count = left.min(BLOCK);
            run.fill(&mut [0.0; BLOCK][..count])?;
            left -= count;
        }
        Ok(run)
    }

    /// Writes the next values of M·φ. Calls of any length give one continuous sequence.
    ///
    /// Whole numbers, exact up to 2^53: always so for a MASH.
    ///
    /// # Errors
    /// `PhaseOverflow` where the sum leaves 63 bits, which only a drifting noise transfer does; the output's index is
    /// counted from the modulator's start.
    pub fn fill(&mut self, numerators: &mut [f64]) -> Result<(), ModulatorError> {
        match &mut self.source {
            Source::Residues(residues) => residues.phase_numerators(numerators),
            Source::Outputs { modulator, sum, made } => {
                let (mut outputs, mut sums) = ([0; BLOCK], [0; BLOCK]);
                for part in numerators.chunks_mut(BLOCK) {
                    let (outputs, sums) = (&mut outputs[..part.len()], &mut sums[..part.len()]);
                    modulator.fill(outputs);
                    add_up(outputs, self.config.k(), self.config.modulus(), (*sum, *made), sums)?;
                    (*sum, *made) = (sums[part.len() - 1], *made + part.len());
                    part.iter_mut().zip(sums).for_each(|(numerator, sum)| *numerator = *sum as f64);
                }
            }
        }
        Ok(())
    }

    /// Returns the mean of the first `count` values, without running; `None` where there is no closed form: order 1,
    /// dither, and other structures than MASH.
    ///
    /// The differences of s_m telescope: their sum is a difference of order m − 2 at both ends.
    ///
    /// # Panics
    /// For no values.
    #[must_use]
    pub fn mean_numerator(&self, count: u64) -> Option<f64> {
        assert!(count > 0, "a mean needs at least one value");
        let Source::Residues(residues) = &self.source else { return None };
        let degree = usize::from(self.config.order()).checked_sub(2)?;
        let first = u128::from(self.config.order()) - 1;
        let gained = self.difference_at(first + u128::from(count), degree) - self.difference_at(first, degree);
        Some(residues.phase_sum() - gained as f64 / count as f64)
    }

    /// Returns Δ^degree s_m after `step` outputs.
    fn difference_at(&self, step: u128, degree: usize) -> i64 {
        let order = usize::from(self.config.order());
        let m = self.config.modulus().get();
        let mut residues = residues_at(self.config, step);
        let mut sum = 0;
        let mut coefficient = 1;
        for back in 0..=degree {
            sum += coefficient * i64::try_from(residues[order - 1]).expect("residues are below 2^48");
            coefficient = -coefficient * i64::try_from(degree - back).expect("at most 3")
                / (1 + i64::try_from(back).expect("at most 3"));
            // One cycle back: s_i[n − 1] = s_i[n] − s_{i−1}[n].
            for stage in (0..order).rev() {
                let input = if stage == 0 { self.config.k() } else { residues[stage - 1] };
                let own = residues[stage];
                residues[stage] = if own < input { own + m - input } else { own - input };
            }
        }
        sum
    }
}
