//! Reference frequencies tried one after the other, by position.

use rayon::prelude::*;
use serde::Serialize;

use crate::assess::{AssessError, Setup};
use crate::base::{Frequency, db_from_power};
use crate::plan::Plan;

use super::positions::Positions;
use super::settings::PfdSetting;

/// One reference frequency tried.
#[derive(Debug, Clone, Serialize)]
pub struct Hunted {
    /// The setting: this reference with the plan's own doubler and divider.
    pub setting: PfdSetting,
    /// Channels that are bad by position: no legal word, or a tone inside the guard; `None` where the loop fails.
    pub bad: Option<u64>,
    /// Detector noise in the loop against the plan's own PFD frequency \[dB\]: −10·log10 of the ratio; positive is worse.
    pub noise_penalty_db: f64,
    /// Why there is no count.
    pub refused: Option<String>,
}

/// Returns the references ranked: fewest bad channels, then the smaller noise penalty, then the lower frequency.
///
/// # Errors
/// `AssessError` where the plan itself fails.
pub fn hunt(
    plan: &Plan,
    board: &Setup,
    references: &[Frequency],
    done: &(dyn Fn() + Sync),
) -> Result<Vec<Hunted>, AssessError> {
    let own_hz = board.pfd().to_f64_hz();
    let mut ranked = references
        .par_iter()
        .map(|reference| {
            let setting = PfdSetting { reference: *reference, ..PfdSetting::of(plan) };
            let candidate = setting.applied(plan);
            let pfd = candidate.reference.pfd().map_err(|source| AssessError::Exact { channel: *reference, source })?;
            let counted = Positions::new(&candidate, board).and_then(|positions| positions.count_bad());
            done();
            let (bad, refused) = match counted {
                Ok(bad) => (Some(bad), None),
                Err(error @ AssessError::Exact { .. }) => return Err(error),
                Err(error) => (None, Some(error.to_string())),
            };
            Ok(Hunted { setting, bad, noise_penalty_db: db_from_power(own_hz / pfd.to_f64_hz()), refused })
        })
        .collect::<Result<Vec<_>, AssessError>>()?;
    ranked.sort_by(|a, b| {
        a.bad
            .unwrap_or(u64::MAX)
            .cmp(&b.bad.unwrap_or(u64::MAX))
            .then(a.noise_penalty_db.total_cmp(&b.noise_penalty_db))
            .then(a.setting.reference.cmp(&b.setting.reference))
    });
    Ok(ranked)
}
