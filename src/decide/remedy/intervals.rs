//! Dense plans: the channels lost to each fraction p/q as intervals, without enumerating any.

use num_integer::Integer;
use serde::Serialize;

use crate::assess::{AssessError, Setup};
use crate::base::{Exact, Frequency};
use crate::plan::{ChannelGroup, ChannelList, Plan};

use super::positions::Positions;
use super::ruler::{Ruler, first_index};

/// Channels in a row whose tone from one fraction lies inside the guard.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct LostInterval {
    /// Numerator p.
    pub p: i128,
    /// Denominator q.
    pub q: u64,
    /// Output divider in use there.
    pub output_divider: u64,
    /// First index, inclusive.
    pub first_index: u64,
    /// Last index, inclusive.
    pub last_index: u64,
    /// Channel at the first index.
    #[serde(rename = "first_exact")]
    pub first: Frequency,
    /// Channel at the last index.
    #[serde(rename = "last_exact")]
    pub last: Frequency,
}

impl LostInterval {
    /// Returns the number of channels.
    #[must_use]
    pub fn channels(&self) -> u64 {
        self.last_index - self.first_index + 1
    }
}

/// What a group loses.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct GroupLoss {
    /// Group name.
    pub group: String,
    /// Channels of the group.
    pub channels: u64,
    /// Channels without a legal word.
    pub illegal: u64,
    /// Legal channels with a tone inside the guard, each once.
    pub near: u64,
    /// Share of the group that is lost either way.
    pub share: f64,
    /// The intervals, rising; those of different fractions may overlap.
    pub intervals: Vec<LostInterval>,
}

/// Why a group has no intervals.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
pub enum IntervalError {
    /// The plan fails as a whole.
    #[error(transparent)]
    Assess(#[from] AssessError),
    /// The group's words follow no single rule.
    #[error(
        "group \"{group}\" has no closed form: it needs a raster, a mash without dither at its first stage, a modulus that is fixed or given by a step, and no tuning window"
    )]
    NoClosedForm {
        /// Name of the group.
        group: String,
    },
}

/// Indices from the first to the last, both inclusive.
type Run = (u64, u64);

/// Returns what every group loses, on the plan's own hardware; time goes with the number of fractions in the band, not
/// with the number of channels.
///
/// An interval holds the channels whose word κ = N·M + K satisfies `0 < |q·κ − p·M|·f_pfd/M ≤ guard`, p/q in lowest
/// terms and K ≠ 0: around `f = (p/q·f_pfd ± guard/q)/P − injection`, rounded to words.
///
/// # Errors
/// `NoClosedForm` for a group without one; `AssessError` where the plan fails as a whole.
pub fn intervals(plan: &Plan) -> Result<Vec<GroupLoss>, IntervalError> {
    let ends = ends_only(plan)?;
    let board = Setup::new(&ends)?;
    let positions = Positions::new(plan, &board)?;
    (0..plan.groups.len()).map(|group| group_loss(&positions, group)).collect()
}

/// Returns the plan with only the outermost channels that can be legal, which decide the loop's design.
fn ends_only(plan: &Plan) -> Result<Plan, IntervalError> {
    let mut ends = plan.clone();
    for (own, group) in ends.groups.iter_mut().zip(&plan.groups) {
        let count = group.channels.len();
        let mut list = Vec::new();
        for divider in &group.output_dividers {
            let ruler = Ruler::new(plan, group, *divider)
                .ok_or_else(|| IntervalError::NoClosedForm { group: group.name.clone() })?;
            let found = ruler.legal_indices(count).unwrap_or((0, count - 1));
            list.extend([found.0, found.1].into_iter().filter_map(|index| group.channels.get(index)));
        }
        list.sort();
        list.dedup();
        own.channels = ChannelList::List(list);
    }
    Ok(ends)
}

fn group_loss(positions: &Positions, group: usize) -> Result<GroupLoss, IntervalError> {
    let settings = positions.group(group).ok_or(AssessError::NoSuchChannel { group, index: 0 })?;
    let rulers = positions.rulers(group).ok_or_else(|| IntervalError::NoClosedForm { group: settings.name.clone() })?;
    let count = settings.channels.len();
    let mut open = vec![(0, count - 1)];
    let mut pieces: Vec<Run> = Vec::new();
    let mut intervals = Vec::new();
    for (ruler, divider) in rulers.iter().zip(&settings.output_dividers) {
        let legal = legal_runs(ruler, count);
        for run in both(&open, &legal) {
            for (p, q, lost) in lost_runs(positions, ruler, run) {
                for piece in lost {
                    pieces.push(piece);
                    intervals.extend(interval(settings, (p, q), *divider, piece));
                }
            }
        }
        open = without(&open, &legal);
    }
    let illegal: u64 = open.iter().map(|run| run.1 - run.0 + 1).sum();
    let near = merged(pieces).iter().map(|run| run.1 - run.0 + 1).sum();
    intervals.sort_by_key(|interval| (interval.first_index, interval.q));
    #[allow(clippy::cast_precision_loss, reason = "a share for people")]
    let share = (illegal + near) as f64 / count as f64;
    Ok(GroupLoss { group: settings.name.clone(), channels: count, illegal, near, share, intervals })
}

fn interval(group: &ChannelGroup, (p, q): (i128, u64), output_divider: u64, run: Run) -> Option<LostInterval> {
    Some(LostInterval {
        p,
        q,
        output_divider,
        first_index: run.0,
        last_index: run.1,
        first: group.channels.get(run.0)?,
        last: group.channels.get(run.1)?,
    })
}

/// Returns the runs of legal words: one, and single held words (K = 0) beyond it.
fn legal_runs(ruler: &Ruler, count: u64) -> Vec<Run> {
    let mut runs = Vec::new();
    if let Some(run) = words_between(ruler, (0, count - 1), ruler.legal().0, ruler.legal().1) {
        runs.push(run);
    }
    let (low, high) = ruler.held_legal();
    let m = ruler.modulus();
    if low <= high && count > 0 {
        // The held range reaches beyond the other by the modulator's output range: a few N.
        let (first, last) = (ruler.word(0).max(low), ruler.word(count - 1).min(high));
        let mut word = -(-first).div_euclid(m) * m;
        while word <= last {
            if ruler.legal().0 <= word && word <= ruler.legal().1 {
                // The long run holds it, and all up to its end.
                word = (ruler.legal().1.div_euclid(m) + 1).max(word / m + 1) * m;
                continue;
            }
            runs.extend(words_between(ruler, (0, count - 1), word, word));
            word += m;
        }
    }
    merged(runs)
}

/// Returns the indices within a run whose words lie between two, inclusive.
fn words_between(ruler: &Ruler, run: Run, low: i128, high: i128) -> Option<Run> {
    let length = run.1 - run.0 + 1;
    let first = first_index(length, |offset| ruler.word(run.0 + offset) >= low)?;
    let after = first_index(length, |offset| ruler.word(run.0 + offset) > high).unwrap_or(length);
    (after > first).then(|| (run.0 + first, run.0 + after - 1))
}

/// Returns, for every p/q that a run of channels comes near to, the channels inside the guard.
fn lost_runs(positions: &Positions, ruler: &Ruler, run: Run) -> Vec<(i128, u64, Vec<Run>)> {
    let m = ruler.modulus();
    let (low, high) = (ruler.word(run.0), ruler.word(run.1));
    let mut found = Vec::new();
    for q in 1..=positions.plan().boundary.largest_q {
        let wide = i128::from(q);
        for p in (wide * low).div_euclid(m)..=(wide * high).div_euclid(m) + 1 {
            if p.gcd(&wide) != 1 {
                continue;
            }
            // Words nearer to this p than to its neighbours; the guard cuts them down from both sides.
            let nearest = words_between(
                ruler,
                run,
                (2 * p * m - m).div_euclid(2 * wide) + 1,
                (2 * p * m + m).div_euclid(2 * wide),
            );
            let Some(nearest) = nearest else { continue };
            let length = nearest.1 - nearest.0 + 1;
            let residue = |offset: u64| wide * ruler.word(nearest.0 + offset) - p * m;
            let is_inside = |offset: u64| {
                let word = ruler.word(nearest.0 + offset);
                positions.inside(ruler, word, q).is_some()
            };
            let middle = first_index(length, |offset| residue(offset) >= 0).unwrap_or(length);
            let after = first_index(length, |offset| residue(offset) > 0).unwrap_or(length);
            let mut runs = Vec::new();
            // Below the fraction: from some word on, all are inside. Held words and exact ones have no tone.
            if let Some(first) = first_index(middle, is_inside) {
                runs.push((nearest.0 + first, nearest.0 + middle - 1));
            }
            let outside = first_index(length - after, |offset| !is_inside(after + offset)).unwrap_or(length - after);
            if outside > 0 {
                runs.push((nearest.0 + after, nearest.0 + after + outside - 1));
            }
            if !runs.is_empty() {
                found.push((p, q, runs));
            }
        }
    }
    found
}

/// Returns runs merged where they touch, rising.
fn merged(mut runs: Vec<Run>) -> Vec<Run> {
    runs.sort_unstable();
    let mut merged: Vec<Run> = Vec::with_capacity(runs.len());
    for run in runs {
        match merged.last_mut() {
            Some(last) if run.0 <= last.1.saturating_add(1) => last.1 = last.1.max(run.1),
            _ => merged.push(run),
        }
    }
    merged
}

/// Returns what two lists of runs share.
fn both(a: &[Run], b: &[Run]) -> Vec<Run> {
    a.iter().flat_map(|x| b.iter().map(move |y| (x.0.max(y.0), x.1.min(y.1)))).filter(|run| run.0 <= run.1).collect()
}

/// Returns the runs of `a` that `b` leaves.
fn without(a: &[Run], b: &[Run]) -> Vec<Run> {
    b.iter().fold(a.to_vec(), |left, cut| {
        left.iter()
            .flat_map(|run| {
                let before = (cut.0 > run.0).then(|| (run.0, run.1.min(cut.0.saturating_sub(1))));
                let after = (cut.1 < run.1).then(|| (run.0.max(cut.1 + 1), run.1));
                [before, after].into_iter().flatten()
            })
            .filter(|run| run.0 <= run.1)
            .collect()
    })
}

/// Returns the closed form of an interval's edges in words: requested output frequencies \[Hz\] at which the tone offset
/// equals the guard, before rounding to words.
#[must_use]
pub fn edges_hz(p: i128, q: u64, pfd: Frequency, guard: Frequency, output_divider: u64) -> Option<(Exact, Exact)> {
    let wide = Exact::from_integer(i128::from(q));
    let by = Exact::from_integer(i128::from(output_divider));
    let centre = pfd.hz().times(&Exact::from_integer(p)).ok()?.over(&wide).ok()?;
    let half = guard.hz().over(&wide).ok()?;
    let at = |edge: Exact| edge.over(&by).ok();
    Some((at(centre.minus(&half).ok()?)?, at(centre.plus(&half).ok()?)?))
}
