//! The multi-stage noise-shaping modulator: by lanes without dither, else one output at a time.

use super::cascade::{self, PlainStage};
use super::checked::ModulatorConfig;
use super::config::Dither;
use super::residues::Residues;
use super::sequence::Modulator;

/// Starts a MASH.
pub(super) fn start(config: &ModulatorConfig) -> Box<dyn Modulator + Send> {
    if config.dither() == Dither::None {
        Box::new(ByLanes::new(config))
    } else {
        cascade::start(config, PlainStage { modulus: config.modulus().get() })
    }
}

/// Starts a MASH from given residues with empty carry delays.
pub(super) fn start_at(config: &ModulatorConfig, residues: &[u64]) -> Box<dyn Modulator + Send> {
    start(&config.with_seeds(residues))
}

/// An undithered MASH.
struct ByLanes {
    residues: Residues,
    /// Outputs made by the start-up, whose carry delays are empty.
    start_up: usize,
    modulus: u64,
    k: u64,
    first_seed: u64,
    /// Outputs made, modulo M.
    made: u64,
}

impl ByLanes {
    fn new(config: &ModulatorConfig) -> Self {
        Self {
            residues: Residues::new(config),
            start_up: usize::from(config.order()) - 1,
            modulus: config.modulus().get(),
            k: config.k(),
            first_seed: config.seeds()[0],
            made: 0,
        }
    }
}

impl Modulator for ByLanes {
    fn fill(&mut self, outputs: &mut [i32]) {
        self.made = (self.made + outputs.len() as u64) % self.modulus;
        let first = self.start_up.min(outputs.len());
        let (head, rest) = outputs.split_at_mut(first);
        self.residues.start_up(head);
        self.start_up -= first;
        self.residues.outputs(rest);
    }

    fn first_residue(&self) -> Option<u64> {
        let m = u128::from(self.modulus);
        let residue = (u128::from(self.first_seed) + u128::from(self.k) * u128::from(self.made)) % m;
        Some(u64::try_from(residue).expect("below a 48-bit modulus"))
    }
}
