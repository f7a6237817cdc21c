//! Remedies: cures of single channels, and the smallest set of PFD settings for the whole plan.

mod change;
mod cover;
mod cures;
mod hunt;
mod intervals;
mod positions;
mod ruler;
mod settings;

pub use change::{Change, Costs, Kind, single_changes};
pub use cover::{Cover, MOST_SETTINGS, Proof, fewest_switches, smallest_cover, switches};
pub use cures::{ChannelCures, Cure};
pub use hunt::{Hunted, hunt};
pub use intervals::{GroupLoss, IntervalError, LostInterval, edges_hz, intervals};
pub use positions::{Positions, Standing};
pub use settings::{PfdSetting, pfd_settings};

use rayon::prelude::*;
use serde::Serialize;

use crate::assess::{AssessError, ChannelResult, Setup, Verdict};
use crate::base::{Assumption, Frequency};
use crate::plan::Plan;
use crate::survey::{SurveyResult, survey};

use cures::Patients;

/// Channel × setting pairs up to which every pair is assessed in full; beyond, positions decide.
pub const MOST_FULL_PAIRS: u64 = 40_000;

/// What counts as bad when sets of PFD settings are weighed.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum Criterion {
    /// The verdict of the channel assessed in full.
    Verdict,
    /// Position alone: no legal word, or a tone of the PFD frequency with q ≤ `largest_q` inside the guard.
    Guard,
}

/// One PFD setting over the whole plan.
#[derive(Debug, Clone, Serialize)]
pub struct SettingTried {
    /// The setting.
    pub setting: PfdSetting,
    /// PFD frequency.
    #[serde(rename = "pfd_exact")]
    pub pfd: Frequency,
    /// Channels that are bad with it.
    pub bad: u64,
}

/// A run of neighbouring channels of a group with one setting.
#[derive(Debug, Clone, PartialEq, Eq, Serialize)]
pub struct SettingRun {
    /// Group index from 0.
    pub group_index: usize,
    /// First channel index, inclusive.
    pub first_index: u64,
    /// Last channel index, inclusive.
    pub last_index: u64,
    /// Position of the setting among those tried; `None`: no member serves these channels.
    pub setting: Option<usize>,
}

/// The smallest set of PFD settings for the plan.
#[derive(Debug, Clone, Serialize)]
pub struct SettingSet {
    /// What counted as bad.
    pub criterion: Criterion,
    /// Every setting tried.
    pub tried: Vec<SettingTried>,
    /// Settings of the alternatives beyond [`MOST_SETTINGS`], which were not tried.
    pub left_out: usize,
    /// The set, its certificate, and what stays bad with any set; channels are positions in plan order.
    pub cover: Cover,
    /// Which setting each channel uses, with the fewest switches along each group.
    pub map: Vec<SettingRun>,
    /// Switches along the groups.
    pub switches: usize,
    /// Switches of the same channels if each took its first serving member: what the map saves is measured by it.
    pub switches_first_served: usize,
}

/// Everything that a remedy proposes.
#[derive(Debug, Clone, Serialize)]
pub struct Remedy {
    /// Cures of the bad and marginal channels, in plan order.
    #[serde(skip)]
    pub channels: Vec<ChannelCures>,
    /// The smallest set of PFD settings.
    pub set: SettingSet,
    /// Costs in use, by word.
    pub costs: Vec<(&'static str, f64)>,
    /// Every input the figures rest on.
    pub assumptions: Vec<Assumption>,
}

/// Returns the criterion a plan of this size gets when the user names none.
#[must_use]
pub fn default_criterion(plan: &Plan) -> Criterion {
    let channels = plan.channel_count();
    let pairs = channels.saturating_mul(pfd_settings(plan).len() as u64);
    if pairs <= MOST_FULL_PAIRS { Criterion::Verdict } else { Criterion::Guard }
}

/// Returns how often `done` of [`remedy`] is called at most.
#[must_use]
pub fn steps(plan: &Plan, costs: &Costs) -> u64 {
    (2 * single_changes(plan, costs).len() + pfd_settings(plan).len()) as u64
}

/// Returns the remedies of a plan; `done` is called after each change and each setting tried.
///
/// # Errors
/// `AssessError` where the plan as a whole is refused or exact arithmetic runs out of bits.
pub fn remedy(
    plan: &Plan,
    costs: &Costs,
    criterion: Criterion,
    done: &(dyn Fn() + Sync),
) -> Result<Remedy, AssessError> {
    remedy_of(&survey(plan, &|_| {})?, costs, criterion, done)
}

/// Returns the remedies of a surveyed plan; otherwise as [`remedy`].
///
/// # Errors
/// As [`remedy`].
pub fn remedy_of(
    surveyed: &SurveyResult,
    costs: &Costs,
    criterion: Criterion,
    done: &(dyn Fn() + Sync),
) -> Result<Remedy, AssessError> {
    let plan = &surveyed.plan;
    let board = Setup::new(plan)?;
    let flagged: Vec<&ChannelResult> =
        surveyed.channels.iter().filter(|channel| channel.verdict != Verdict::Clear).collect();
    let patients = Patients { plan, board: &board, costs, flagged };
    let channels = patients.cures(done)?;
    let set = smallest_set(plan, &board, costs, criterion, done)?;
    Ok(Remedy {
        channels,
        set,
        costs: Kind::ALL.iter().map(|kind| (kind.word(), costs.of(*kind))).collect(),
        assumptions: board.assumptions(),
    })
}

/// Returns the smallest set of PFD settings that leaves no bad channel, on the hardware of `board`.
///
/// # Errors
/// `AssessError` where exact arithmetic runs out of bits.
pub fn smallest_set(
    plan: &Plan,
    board: &Setup,
    costs: &Costs,
    criterion: Criterion,
    done: &(dyn Fn() + Sync),
) -> Result<SettingSet, AssessError> {
    let mut settings = pfd_settings(plan);
    let left_out = settings.len().saturating_sub(MOST_SETTINGS);
    settings.truncate(MOST_SETTINGS);
    let places: Vec<(usize, u64)> = plan
        .groups
        .iter()
        .enumerate()
        .flat_map(|(group, channels)| (0..channels.channels.len()).map(move |index| (group, index)))
        .collect();
    let mut serves = vec![0u64; places.len()];
    let mut tried = Vec::with_capacity(settings.len());
    for (s, setting) in settings.iter().enumerate() {
        let candidate = setting.applied(plan);
        let good = good_channels(&candidate, board, &places, criterion)?;
        let mut bad = 0;
        for (need, is_good) in serves.iter_mut().zip(&good) {
            if *is_good {
                *need |= 1 << s;
            } else {
                bad += 1;
            }
        }
        let exact = |source| AssessError::Exact { channel: setting.reference, source };
        tried.push(SettingTried { setting: *setting, pfd: candidate.reference.pfd().map_err(exact)?, bad });
        done();
    }
    // The plan's own setting costs nothing; another divider costs less than another reference.
    let cost: Vec<f64> = settings
        .iter()
        .enumerate()
        .map(|(s, setting)| if s == 0 { 0.0 } else { costs.of(Change::Pfd(*setting).kind(plan)) })
        .collect();
    let cover = smallest_cover(&serves, &cost);
    let mut map = Vec::new();
    let (mut switched, mut first_served) = (0, 0);
    for (group_index, serves) in by_group(plan, &serves) {
        let along = fewest_switches(serves, &cover.members, &cost);
        switched += switches(&along);
        let first: Vec<Option<usize>> =
            serves.iter().map(|need| cover.members.iter().copied().find(|s| need >> s & 1 == 1)).collect();
        first_served += switches(&first);
        map.extend(runs(group_index, &along));
    }
    Ok(SettingSet { criterion, tried, left_out, cover, map, switches: switched, switches_first_served: first_served })
}

/// Returns which channels are not bad with a setting, in plan order.
fn good_channels(
    candidate: &Plan,
    board: &Setup,
    places: &[(usize, u64)],
    criterion: Criterion,
) -> Result<Vec<bool>, AssessError> {
    match criterion {
        Criterion::Verdict => match board.on_same_board(candidate) {
            Ok(setup) => places
                .par_iter()
                .map_init(
                    || setup.scratch(),
                    |scratch, (group, index)| match setup.assess_index(*group, *index, scratch) {
                        Ok(result) => Ok(result.verdict != Verdict::Bad),
                        Err(error @ AssessError::Exact { .. }) => Err(error),
                        Err(_) => Ok(false),
                    },
                )
                .collect(),
            Err(error @ AssessError::Exact { .. }) => Err(error),
            // No legal channel, or a loop that fails: it serves none.
            Err(_) => Ok(vec![false; places.len()]),
        },
        Criterion::Guard => match Positions::new(candidate, board) {
            Ok(positions) => places
                .par_iter()
                .with_min_len(256)
                .map(|(group, index)| positions.standing(*group, *index).map(|found| found == Standing::Free))
                .collect(),
            Err(error @ AssessError::Exact { .. }) => Err(error),
            Err(_) => Ok(vec![false; places.len()]),
        },
    }
}

/// Returns the needs group by group.
fn by_group<'a>(plan: &Plan, serves: &'a [u64]) -> Vec<(usize, &'a [u64])> {
    let mut rest = serves;
    plan.groups
        .iter()
        .enumerate()
        .map(|(group, channels)| {
            let count = usize::try_from(channels.channels.len()).unwrap_or(usize::MAX).min(rest.len());
            let (own, after) = rest.split_at(count);
            rest = after;
            (group, own)
        })
        .collect()
}

fn runs(group_index: usize, along: &[Option<usize>]) -> Vec<SettingRun> {
    let mut runs: Vec<SettingRun> = Vec::new();
    for (index, setting) in along.iter().enumerate() {
        let index = index as u64;
        match runs.last_mut() {
            Some(last) if last.setting == *setting => last.last_index = index,
            _ => runs.push(SettingRun { group_index, first_index: index, last_index: index, setting: *setting }),
        }
    }
    runs
}
