//! The run's own check: lines from the shared curve against direct correlation over the whole exact period.

use num_traits::ToPrimitive;
use rayon::prelude::*;

use crate::assess::{AssessError, ChannelResult, Method, Setup};

use super::result::MethodCheck;

/// Channels checked in every run.
const CHECKED_CHANNELS: usize = 4;
/// Longest period that is correlated whole: a fraction of a second.
const LONGEST_PERIOD: u64 = 1 << 25;

/// Returns the check over a few channels spread over the plan, among those whose levels come from the shared curve and
/// whose exact period can be run whole.
///
/// # Errors
/// `AssessError` as for the channels themselves.
pub fn check_method(setup: &Setup, channels: &[ChannelResult]) -> Result<MethodCheck, AssessError> {
    let eligible: Vec<&ChannelResult> = channels
        .iter()
        .filter(|channel| channel.method == Method::SharedCurve && channel.period_is_exact)
        .filter(|channel| {
            channel.period.as_ref().and_then(ToPrimitive::to_u64).is_some_and(|period| period <= LONGEST_PERIOD)
        })
        .collect();
    let count = eligible.len().min(CHECKED_CHANNELS);
    let differences = (0..count)
        .into_par_iter()
        .map(|i| setup.whole_period_difference_db(eligible[i * eligible.len() / count]))
        .collect::<Result<Vec<_>, AssessError>>()?;
    let known: Vec<f64> = differences.into_iter().flatten().collect();
    Ok(MethodCheck { channels: known.len() as u64, worst_difference_db: known.into_iter().reduce(f64::max) })
}
