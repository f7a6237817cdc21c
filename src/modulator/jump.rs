//! Starting in the middle: an undithered MASH at any step.

use super::checked::ModulatorConfig;
use super::closed_form::residues_at;
use super::config::{Dither, Structure};
use super::error::ModulatorError;
use super::mash;
use super::sequence::{Modulator, start};

/// Returns the modulator as it stands after `step` outputs: its next output is number `step` (from 0).
///
/// # Errors
/// `NoJump` for dither and for structures other than MASH (and what is held).
///
/// # Panics
/// Never: the transient that is run is at most four outputs.
pub fn jump_to(config: &ModulatorConfig, step: u128) -> Result<Box<dyn Modulator + Send>, ModulatorError> {
    if config.is_held() {
        return Ok(start(config));
    }
    if config.structure() != Structure::Mash || config.dither() != Dither::None {
        let dither = if config.dither() == Dither::None { "without dither" } else { "with dither" };
        return Err(ModulatorError::NoJump { structure: config.structure().word(), dither });
    }
    // The carry delays see the last m − 1 cycles only: run these from the residues before them.
    let history = step.min(u128::from(config.order() - 1));
    let history = usize::try_from(history).expect("at most four");
    let residues = residues_at(config, step - history as u128);
    let mut modulator = mash::start_at(config, &residues[..usize::from(config.order())]);
    modulator.fill(&mut vec![0; history]);
    Ok(modulator)
}
