//! What an offset current does to a channel: the fractional tone it cures, and the reference tone it costs.

use serde::Serialize;

use crate::base::Frequency;
use crate::plan::{ChannelList, Plan};
use crate::tones::PhaseDensity;

use super::placement::place;
use super::result::Origin;
use super::setup::{AssessError, Setup};

/// Steps of the sweep up to the current that clears the kink.
const STEPS_TO_CLEAR: u32 = 12;
/// Steps beyond it.
const STEPS_BEYOND: u32 = 6;

/// One offset current tried.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct OffsetTried {
    /// Offset current \[A\].
    pub current_a: f64,
    /// Nonlinearity part of the tone at h = 1, at the output \[dBc\]; `None` where there is none or it is unknown.
    pub nonlinearity_dbc: Option<f64>,
    /// Reference tone at h = 1, at the output \[dBc\]; `None` where it is unknown or below the tone floor.
    pub reference_dbc: Option<f64>,
    /// Known phase error \[deg\].
    pub phase_error_known_deg: Option<f64>,
}

/// A sweep of the offset current on one channel.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct OffsetSweep {
    /// Current that keeps the pump on one side of its kink for every phase of a long sequence \[A\].
    pub clearing_a: f64,
    /// The same as a static phase \[VCO cycles\].
    pub clearing_cycles: f64,
    /// The currents tried, rising from 0.
    pub tried: Vec<OffsetTried>,
}

/// Returns the sweep for a channel; `None` where it has no word, the modulator is held, or its order has no bound.
///
/// # Errors
/// As for the channel itself.
pub fn offset_sweep(setup: &Setup, group: usize, channel: Frequency) -> Result<Option<OffsetSweep>, AssessError> {
    let plan = setup.plan();
    let settings = plan.groups.get(group).ok_or(AssessError::NoSuchChannel { group, index: 0 })?;
    let placement = place(plan, settings, channel)?;
    if !placement.illegal.is_empty() || placement.modulator.is_held() {
        return Ok(None);
    }
    let Ok(density) = PhaseDensity::mash(placement.modulator.order()) else { return Ok(None) };
    let clearing_cycles = density.reach_cycles();
    let clearing_a = clearing_cycles * plan.detector.current_a / placement.divider_ratio();
    let mut tried = Vec::new();
    for step in 0..=STEPS_TO_CLEAR + STEPS_BEYOND {
        let current_a = clearing_a * f64::from(step) / f64::from(STEPS_TO_CLEAR);
        let candidate = with_offset(plan, group, channel, current_a);
        let result = setup.on_same_board(&candidate)?.assess_index(group, 0, &mut setup.scratch())?;
        let own = |tone: &&crate::assess::Tone| {
            matches!(tone.origin, Origin::Boundary | Origin::Fractional) && tone.harmonic == Some(1) && !tone.after_loop
        };
        tried.push(OffsetTried {
            current_a,
            nonlinearity_dbc: result.tones.iter().find(own).and_then(|tone| tone.contributions.nonlinearity_dbc),
            reference_dbc: result
                .tones
                .iter()
                .find(|tone| tone.origin == Origin::Reference && tone.harmonic == Some(1))
                .and_then(|tone| tone.contributions.leakage_dbc),
            phase_error_known_deg: result.phase_error_known_deg,
        });
    }
    Ok(Some(OffsetSweep { clearing_a, clearing_cycles, tried }))
}

/// Returns the plan with this channel alone and another offset current; the span reaches the reference tone.
fn with_offset(plan: &Plan, group: usize, channel: Frequency, current_a: f64) -> Plan {
    let mut candidate = plan.clone();
    for (index, other) in candidate.groups.iter_mut().enumerate() {
        let list = if index == group { vec![channel] } else { Vec::new() };
        other.channels = ChannelList::List(list);
    }
    candidate.detector.offset_current_a = current_a;
    let pfd_hz = plan.reference.pfd().map_or(plan.analysis.span_hz, |pfd| pfd.to_f64_hz());
    candidate.analysis.span_hz = plan.analysis.span_hz.max(1.01 * pfd_hz);
    candidate
}
