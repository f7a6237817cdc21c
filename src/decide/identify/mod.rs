//! Which mechanisms put a tone at an offset, best first, and the experiment that tells the first two apart.

mod candidates;
mod experiments;

pub use candidates::{Cause, Mechanism};
pub use experiments::{Experiment, Shift};

use serde::Serialize;

use crate::base::{Exact, ExactError, Frequency};
use crate::plan::Plan;

use crate::assess::{PlacementError, place};
use candidates::{Situation, causes_near};
use experiments::shifts_of;

/// Why nothing can be identified.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
pub enum IdentifyError {
    /// The channel cannot be placed.
    #[error(transparent)]
    Placement(#[from] PlacementError),
    /// The channel has no legal word.
    #[error("channel {channel} has no legal word: {limit}")]
    NotLegal {
        /// The channel.
        channel: Frequency,
        /// The first limit it misses.
        limit: String,
    },
    /// Exact arithmetic ran out of bits.
    #[error("identification: {0}")]
    Exact(#[from] ExactError),
    /// A group that the plan does not hold.
    #[error("the plan has no group {group}")]
    NoSuchGroup {
        /// Group index from 0.
        group: usize,
    },
}

/// What was asked, and every cause found.
#[derive(Debug, Clone, Serialize)]
pub struct Identification {
    /// The channel, before injection.
    pub channel: Frequency,
    /// The observed offset, positive.
    pub offset: Frequency,
    /// Half width of the search window.
    pub within: Frequency,
    /// Causes inside the window, best first: by distance in steps of a twentieth of the window, then by order.
    pub causes: Vec<Cause>,
    /// The experiment that separates the first two, in one sentence; `None` with fewer than two causes.
    pub advice: Option<String>,
}

/// Steps of the window that count as one distance: closer than that an analyser hardly tells.
const DISTANCE_STEPS: i128 = 20;

/// Returns the window that applies when none is given: 1 % of the offset, at least 100 Hz.
///
/// # Errors
/// `ExactError` beyond 127 bits.
pub fn default_window(offset: Frequency) -> Result<Frequency, ExactError> {
    let share = offset.hz().over(&Exact::from_integer(100))?;
    Ok(Frequency::from_hz(share.max(Exact::from_integer(100))))
}

/// Returns the causes of a tone on a channel of a group.
///
/// # Errors
/// `IdentifyError` for a channel without a legal word, or beyond exact arithmetic.
pub fn identify(
    plan: &Plan,
    group: usize,
    channel: Frequency,
    offset: Frequency,
    within: Frequency,
) -> Result<Identification, IdentifyError> {
    let settings = plan.groups.get(group).ok_or(IdentifyError::NoSuchGroup { group })?;
    let placement = place(plan, settings, channel)?;
    if let Some(miss) = placement.illegal.first() {
        return Err(IdentifyError::NotLegal { channel, limit: miss.limit.clone() });
    }
    let here = Situation::of(plan, &placement)?;
    let mut causes = causes_near(plan, &here, offset, within)?;
    let step = within.hz().over(&Exact::from_integer(DISTANCE_STEPS))?;
    let rank = |cause: &Cause| {
        let distance = cause.offset.hz().minus(&offset.hz()).map(|d| d.abs()).unwrap_or(Exact::ZERO);
        let steps = distance.over(&step).map_or(0, |steps| steps.floor());
        (steps, cause.order, cause.mechanism)
    };
    causes.sort_by_key(rank);
    for cause in &mut causes {
        cause.shifts = shifts_of(plan, settings, channel, &here, cause)?;
    }
    let advice = causes.first().zip(causes.get(1)).map(|(first, second)| experiments::advice(first, second));
    Ok(Identification { channel, offset, within, causes, advice })
}
