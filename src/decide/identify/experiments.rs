//! How each cause moves when one thing is changed, and which change tells two causes apart.

use serde::Serialize;

use super::IdentifyError;
use super::candidates::{Cause, Situation};
use crate::assess::place;
use crate::base::{Exact, ExactError, Frequency};
use crate::plan::{ChannelGroup, ChannelList, Plan};

/// One change at the bench.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum Experiment {
    /// Tune one channel step up.
    ChannelUp,
    /// Double the reference divider R, same channel.
    DoubleR,
    /// Raise the reference by 1 ppm, same word.
    ReferencePpm,
    /// Use another legal output divider, same channel.
    OtherDivider,
    /// Raise every other clock by 1 ppm.
    ClockPpm,
}

impl Experiment {
    /// Returns the change as an instruction.
    #[must_use]
    pub const fn instruction(self) -> &'static str {
        match self {
            Self::ChannelUp => "tune one channel step up",
            Self::DoubleR => "double the reference divider R and stay on the channel",
            Self::ReferencePpm => "raise the reference by 1 ppm and keep the word",
            Self::OtherDivider => "use another output divider and stay on the channel",
            Self::ClockPpm => "raise the other clocks by 1 ppm",
        }
    }
}

/// How a tone's offset moves in an experiment.
#[derive(Debug, Clone, Copy, PartialEq, Serialize)]
pub struct Shift {
    /// The experiment.
    pub experiment: Experiment,
    /// New offset less the old one \[Hz\].
    pub shift_hz: f64,
}

/// Returns the shifts of a cause in every experiment that is possible on this channel.
pub(super) fn shifts_of(
    plan: &Plan,
    group: &ChannelGroup,
    channel: Frequency,
    here: &Situation,
    cause: &Cause,
) -> Result<Vec<Shift>, IdentifyError> {
    let mut shifts = Vec::new();
    for (experiment, there) in situations(plan, group, channel, here)? {
        let moved = there.offset_of(cause.mechanism, cause.order)?;
        let shift_hz = moved.hz().minus(&cause.offset.hz())?.to_f64();
        shifts.push(Shift { experiment, shift_hz });
    }
    Ok(shifts)
}

fn situations(
    plan: &Plan,
    group: &ChannelGroup,
    channel: Frequency,
    here: &Situation,
) -> Result<Vec<(Experiment, Situation)>, IdentifyError> {
    let mut found = Vec::new();
    let mut add = |experiment, plan: &Plan, group: &ChannelGroup, channel| -> Result<(), IdentifyError> {
        let placement = place(plan, group, channel)?;
        // A setting that is not legal here is no experiment.
        if placement.illegal.is_empty() {
            found.push((experiment, Situation::of(plan, &placement)?));
        }
        Ok(())
    };
    let up = channel.hz().plus(&step_of(&group.channels).hz())?;
    add(Experiment::ChannelUp, plan, group, Frequency::from_hz(up))?;
    let mut doubled = plan.clone();
    doubled.reference.divider *= 2;
    add(Experiment::DoubleR, &doubled, group, channel)?;
    let used = place(plan, group, channel)?.output_divider;
    for output in group.output_dividers.iter().filter(|output| **output != used) {
        let mut other = group.clone();
        other.output_dividers = vec![*output];
        add(Experiment::OtherDivider, plan, &other, channel)?;
    }
    found.dedup_by_key(|(experiment, _)| *experiment);
    found.push((Experiment::ReferencePpm, with_reference_ppm(here)?));
    if !here.clocks.is_empty() {
        let mut there = here.clone();
        there.clocks = here.clocks.iter().map(|clock| up_by_ppm(*clock)).collect::<Result<_, _>>()?;
        found.push((Experiment::ClockPpm, there));
    }
    Ok(found)
}

/// Returns the raster's spacing, or 10 kHz where there is none.
fn step_of(channels: &ChannelList) -> Frequency {
    match channels {
        ChannelList::Raster { spacing, .. } if spacing.hz().sign() > 0 => *spacing,
        ChannelList::Raster { .. } | ChannelList::List(_) => Frequency::from_whole_hz(10_000),
    }
}

fn up_by_ppm(frequency: Frequency) -> Result<Frequency, ExactError> {
    frequency.hz().times(&Exact::new(1_000_001, 1_000_000)?).map(Frequency::from_hz)
}

/// With the same word everything that the reference makes moves with it; other clocks stay.
fn with_reference_ppm(here: &Situation) -> Result<Situation, ExactError> {
    Ok(Situation {
        reference: up_by_ppm(here.reference)?,
        pfd: up_by_ppm(here.pfd)?,
        vco: up_by_ppm(here.vco)?,
        output: up_by_ppm(here.output)?,
        ..here.clone()
    })
}

/// Returns the experiment whose shifts differ most between two causes, in one sentence.
pub(super) fn advice(first: &Cause, second: &Cause) -> String {
    let best = first
        .shifts
        .iter()
        .filter_map(|a| {
            let b = second.shifts.iter().find(|b| b.experiment == a.experiment)?;
            Some((a.experiment, a.shift_hz, b.shift_hz))
        })
        .max_by(|a, b| (a.1 - a.2).abs().total_cmp(&(b.1 - b.2).abs()));
    match best {
        Some((experiment, a, b)) if (a - b).abs() > 0.0 => format!(
            "{}: the first cause moves the tone by {a:+.3} Hz, the second by {b:+.3} Hz",
            experiment.instruction()
        ),
        _ => "no single change tells the first two apart: they are one tone in every experiment".to_owned(),
    }
}
