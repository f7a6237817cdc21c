//! The fast multi-stage noise-shaping modulator.

use super::cascade::{self, PlainStage};
use super::checked::ModulatorConfig;
use super::sequence::Modulator;

/// Starts a MASH.
pub(super) fn start(config: &ModulatorConfig) -> Box<dyn Modulator + Send> {
    cascade::start(config, PlainStage { modulus: config.modulus().get() })
}

/// Starts a MASH from given residues with empty carry delays.
pub(super) fn start_at(config: &ModulatorConfig, residues: &[u64]) -> Box<dyn Modulator + Send> {
    let moved = config.with_seeds(residues);
    start(&moved)
}
