//! The run's own check: lines from the shared curve against direct correlation over the whole exact period.

use num_traits::ToPrimitive;
use rayon::prelude::*;

use crate::assess::{AssessError, ChannelResult, LineCheck, Method, Setup, Tone};

use super::result::MethodCheck;

/// Channels checked in every run.
const CHECKED_CHANNELS: usize = 4;
/// Longest period that is correlated whole: a fraction of a second.
const LONGEST_PERIOD: u64 = 1 << 25;

/// Largest stated uncertainty of a line that is worth checking \[dB\].
const SURE_DB: f64 = 0.5;
/// What rounding and the curve's own approximation may add to the stated uncertainty \[dB\].
const ALLOWANCE_DB: f64 = 0.02;

/// Returns the check over a few channels spread over the plan, among those whose levels come from the shared curve, with
/// a line that stands well above its noise and an exact period that can be run whole; and a warning for each line
/// that differs by more than it states.
///
/// # Errors
/// `AssessError` as for the channels themselves.
pub fn check_method(setup: &Setup, channels: &[ChannelResult]) -> Result<(MethodCheck, Vec<String>), AssessError> {
    let is_sure = |tone: &Tone| {
        tone.residue.is_some()
            && tone.contributions.nonlinearity_dbc.is_some()
            && tone.level_uncertainty_db.is_some_and(|uncertainty| uncertainty <= SURE_DB)
    };
    let eligible: Vec<&ChannelResult> = channels
        .iter()
        .filter(|channel| channel.method == Method::SharedCurve && channel.period_is_exact)
        .filter(|channel| channel.tones.iter().any(is_sure))
        .filter(|channel| {
            channel.period.as_ref().and_then(ToPrimitive::to_u64).is_some_and(|period| period <= LONGEST_PERIOD)
        })
        .collect();
    let count = eligible.len().min(CHECKED_CHANNELS);
    let checked: Vec<&ChannelResult> = (0..count).map(|i| eligible[i * eligible.len() / count]).collect();
    let found = checked.par_iter().map(|channel| setup.check_line(channel)).collect::<Result<Vec<_>, AssessError>>()?;
    let mut check = MethodCheck::default();
    let mut warnings = Vec::new();
    for (channel, line) in checked.iter().zip(found) {
        let Some(LineCheck { difference_db, uncertainty_db }) = line else { continue };
        check.channels += 1;
        check.worst_difference_db = Some(check.worst_difference_db.unwrap_or(0.0).max(difference_db));
        if difference_db > uncertainty_db + ALLOWANCE_DB {
            warnings.push(format!(
                "method check: a line of channel {} differs by {difference_db:.2} dB from its exact period, {uncertainty_db:.2} dB stated",
                channel.channel
            ));
        }
    }
    Ok((check, warnings))
}
