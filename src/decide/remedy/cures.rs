//! Cures of single channels: every change, and every pair of changes where none does, assessed like any channel.

use std::mem::discriminant;

use rayon::prelude::*;
use serde::Serialize;

use crate::assess::{AssessError, ChannelResult, Origin, Setup, Verdict};
use crate::base::{Exact, Frequency, db_from_power};
use crate::plan::{ChannelList, Plan};
use crate::tones::nearest_fraction;

use super::change::{Change, Costs, single_changes};

/// One cure of one channel, with its proof and price.
#[derive(Debug, Clone, Serialize)]
pub struct Cure {
    /// What is changed.
    pub changes: Vec<Change>,
    /// Sum of the costs.
    pub cost: f64,
    /// The channel after the change, assessed in full: its word, boundary, tones and verdict are the proof.
    #[serde(skip)]
    pub after: Box<ChannelResult>,
    /// Change of the known phase error \[dB\]; `None` where one is unknown.
    pub noise_change_db: Option<f64>,
    /// Reference tone at h = 1 after the change \[dBc\]; `None` where it is unknown or below the tone floor.
    pub reference_tone_dbc: Option<f64>,
    /// Shift of the output frequency that the change means by itself \[Hz\]: a nudge, or another injection.
    pub output_shift_hz: f64,
    /// Whether the PFD frequency changes: the loop must be tuned and locked anew.
    pub retune: bool,
}

/// The cures of one channel.
#[derive(Debug, Clone, Serialize)]
pub struct ChannelCures {
    /// The channel as planned.
    #[serde(skip)]
    pub before: Box<ChannelResult>,
    /// Cures, cheapest first; among equals the better verdict, then the larger worst margin.
    pub cures: Vec<Cure>,
}

/// The channels to cure, and the board they are on.
pub(super) struct Patients<'a> {
    pub plan: &'a Plan,
    pub board: &'a Setup<'a>,
    pub costs: &'a Costs,
    pub flagged: Vec<&'a ChannelResult>,
}

impl Patients<'_> {
    /// Returns every cure of every flagged channel; `done` is called after each change tried.
    ///
    /// # Errors
    /// `AssessError` where exact arithmetic runs out of bits.
    pub fn cures(&self, done: &(dyn Fn() + Sync)) -> Result<Vec<ChannelCures>, AssessError> {
        let all: Vec<usize> = (0..self.flagged.len()).collect();
        let mut found: Vec<Vec<Cure>> = vec![Vec::new(); all.len()];
        let singles = single_changes(self.plan, self.costs);
        for change in &singles {
            self.try_changes(std::slice::from_ref(change), &all, &mut found)?;
            done();
        }
        self.nudges(&mut found)?;
        let left: Vec<usize> = all.into_iter().filter(|i| found[*i].is_empty()).collect();
        if !left.is_empty() {
            for (i, first) in singles.iter().enumerate() {
                for second in &singles[i + 1..] {
                    if discriminant(first) != discriminant(second) {
                        self.try_changes(&[first.clone(), second.clone()], &left, &mut found)?;
                    }
                }
                done();
            }
        }
        Ok(self
            .flagged
            .iter()
            .zip(found)
            .map(|(before, mut cures)| {
                cures.sort_by(|a, b| {
                    a.cost
                        .total_cmp(&b.cost)
                        .then(a.after.verdict.cmp(&b.after.verdict))
                        .then(worst_margin(&b.after).total_cmp(&worst_margin(&a.after)))
                });
                ChannelCures { before: Box::new((*before).clone()), cures }
            })
            .collect())
    }

    /// Tries changes together on some of the channels.
    fn try_changes(&self, changes: &[Change], patients: &[usize], found: &mut [Vec<Cure>]) -> Result<(), AssessError> {
        let mut candidate = changes.iter().fold(self.plan.clone(), |plan, change| change.applied(&plan));
        if candidate.modulator.settings.check().is_err() {
            return Ok(());
        }
        let eligible: Vec<usize> = patients.iter().copied().filter(|i| self.may(self.flagged[*i], changes)).collect();
        let channels: Vec<(usize, Frequency)> =
            eligible.iter().map(|i| (self.flagged[*i].group_index, self.flagged[*i].channel)).collect();
        let results = assess_on(self.board, &mut candidate, &channels)?;
        for (i, after) in eligible.into_iter().zip(results.into_iter().flatten()) {
            self.keep(i, changes.to_vec(), after, found);
        }
        Ok(())
    }

    /// Returns whether changes make sense for a channel: another injection only where the group's own is one of the
    /// alternatives, another output divider only where it is another.
    fn may(&self, channel: &ChannelResult, changes: &[Change]) -> bool {
        let group = &self.plan.groups[channel.group_index];
        changes.iter().all(|change| match change {
            Change::Injection(injection) => {
                *injection != group.injection && self.plan.alternatives.injections.contains(&group.injection)
            }
            Change::OutputDivider(divider) => channel.output_divider != Some(*divider),
            _ => true,
        })
    }

    /// Tries shifts of single channels: onto the exact fraction they are near to, and to both ends of the tolerance.
    fn nudges(&self, found: &mut [Vec<Cure>]) -> Result<(), AssessError> {
        let most = self.plan.alternatives.nudge;
        if most.hz().sign() <= 0 {
            return Ok(());
        }
        for (i, channel) in self.flagged.iter().enumerate() {
            let mut shifts = vec![most, Frequency::from_hz(most.hz().negated())];
            shifts.extend(self.onto_fractions(channel)?);
            for shift in shifts {
                let moved = channel.channel.hz().plus(&shift.hz());
                let Ok(moved) = moved.map(Frequency::from_hz) else { continue };
                let mut candidate = self.plan.clone();
                let results = assess_on(self.board, &mut candidate, &[(channel.group_index, moved)])?;
                if let Some(after) = results.into_iter().flatten().next() {
                    self.keep(i, vec![Change::Nudge(shift)], after, found);
                }
            }
        }
        Ok(())
    }

    /// Returns the shifts within the tolerance that put the requested frequency exactly on a fraction p/q.
    fn onto_fractions(&self, channel: &ChannelResult) -> Result<Vec<Frequency>, AssessError> {
        let exact = |source| AssessError::Exact { channel: channel.channel, source };
        let Some(divider) = channel.output_divider else { return Ok(Vec::new()) };
        let by = Exact::from_integer(i128::from(divider));
        let output = channel.output.hz();
        let vco = Frequency::from_hz(output.times(&by).map_err(exact)?);
        let mut shifts = Vec::new();
        for q in 1..=self.plan.boundary.largest_q {
            let near = nearest_fraction(vco, self.board.pfd(), q).map_err(exact)?;
            let wide = Exact::from_integer(i128::from(q)).times(&by).map_err(exact)?;
            let shift = near.signed_offset.hz().negated().over(&wide).map_err(exact)?;
            if shift.sign() != 0 && shift.abs() <= self.plan.alternatives.nudge.hz() {
                shifts.push(Frequency::from_hz(shift));
            }
        }
        Ok(shifts)
    }

    /// Keeps a result that is better than the channel's own.
    fn keep(&self, i: usize, changes: Vec<Change>, after: ChannelResult, found: &mut [Vec<Cure>]) {
        let before = self.flagged[i];
        if after.verdict >= before.verdict {
            return;
        }
        let cost = changes.iter().map(|change| self.costs.of(change.kind(self.plan))).sum();
        let noise_change_db =
            before.phase_error_known_deg.zip(after.phase_error_known_deg).map(|(a, b)| db_from_power((b / a).powi(2)));
        let reference_tone_dbc = after
            .tones
            .iter()
            .find(|tone| tone.origin == Origin::Reference && tone.harmonic == Some(1))
            .and_then(|tone| tone.level_dbc);
        let output_shift_hz = after.output.hz().minus(&before.output.hz()).map_or(f64::NAN, |shift| shift.to_f64());
        #[allow(clippy::float_cmp, reason = "the same setting gives the same figure")]
        let retune = after.pfd_hz != before.pfd_hz;
        found[i].push(Cure {
            changes,
            cost,
            after: Box::new(after),
            noise_change_db,
            reference_tone_dbc,
            output_shift_hz,
            retune,
        });
    }
}

/// Returns the smallest margin of a channel's tones; infinite without one.
fn worst_margin(channel: &ChannelResult) -> f64 {
    channel.tones.iter().filter_map(|tone| tone.margin_db).fold(f64::INFINITY, f64::min)
}

/// Returns the results of channels of a changed plan on a board; `None` for all where the plan as a whole cannot work
/// (no legal channel, unstable loop): that is no cure, and no error.
///
/// # Errors
/// `AssessError::Exact` where exact arithmetic runs out of bits.
pub(super) fn assess_on(
    board: &Setup,
    candidate: &mut Plan,
    channels: &[(usize, Frequency)],
) -> Result<Vec<Option<ChannelResult>>, AssessError> {
    let mut lists = vec![Vec::new(); candidate.groups.len()];
    let mut places = Vec::with_capacity(channels.len());
    for (group, channel) in channels {
        places.push((*group, lists[*group].len() as u64));
        lists[*group].push(*channel);
    }
    for (group, list) in candidate.groups.iter_mut().zip(lists) {
        group.channels = ChannelList::List(list);
    }
    let none = || Ok(vec![None; channels.len()]);
    let setup = match board.on_same_board(candidate) {
        Ok(setup) => setup,
        Err(error @ AssessError::Exact { .. }) => return Err(error),
        Err(_) => return none(),
    };
    places
        .par_iter()
        .map_init(
            || setup.scratch(),
            |scratch, (group, index)| match setup.assess_index(*group, *index, scratch) {
                Ok(result) => Ok(Some(result)),
                Err(error @ AssessError::Exact { .. }) => Err(error),
                Err(_) => Ok(None),
            },
        )
        .collect()
}

impl Cure {
    /// Returns whether the channel is clear after the change.
    #[must_use]
    pub fn is_clear(&self) -> bool {
        self.after.verdict == Verdict::Clear
    }

    /// Returns the change in words.
    #[must_use]
    pub fn words(&self) -> String {
        self.changes.iter().map(Change::words).collect::<Vec<_>>().join(" and ")
    }
}
