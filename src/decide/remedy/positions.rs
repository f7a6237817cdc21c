//! Which channels are bad by position alone: no legal word, or a tone inside the guard.

use rayon::prelude::*;

use crate::assess::{AssessError, Setup, edge_of, interpolate, place};
use crate::base::{Exact, Frequency};
use crate::plan::{ChannelGroup, Gain, Guard, Plan};
use crate::tones::nearest_fraction;

use super::ruler::Ruler;

/// Points of the VCO range at which a loop edge is computed; between them it is taken as straight.
const EDGE_POINTS: u32 = 128;

/// How a channel stands by position.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Standing {
    /// Legal, and no tone of q ≤ `largest_q` inside the guard.
    Free,
    /// Legal, with a tone of the boundary p/q of the PFD frequency inside the guard, inclusive.
    Near {
        /// Numerator.
        p: i128,
        /// Denominator, the smallest whose tone is inside.
        q: u64,
    },
    /// No output divider gives a legal word.
    Illegal,
}

/// The guard in whole steps of f_pfd/M, or as it varies over the VCO range.
#[derive(Debug, Clone)]
enum Reach {
    /// The same for all channels.
    Exact(Frequency),
    /// Loop edge over the VCO frequency \[Hz\], rising in frequency.
    Edge(Vec<(f64, f64)>),
}

/// The channels of one plan by position.
#[derive(Debug)]
pub struct Positions<'p> {
    plan: &'p Plan,
    pfd: Frequency,
    reach: Reach,
    rulers: Vec<Option<Vec<Ruler>>>,
}

impl<'p> Positions<'p> {
    /// Returns the positions of a plan on the hardware of `board` (the plan's own setup, or that of another setting).
    ///
    /// # Errors
    /// `AssessError` where exact arithmetic runs out of bits, or the guard is the loop edge and the loop fails.
    pub fn new(plan: &'p Plan, board: &Setup) -> Result<Self, AssessError> {
        let exact = |source| AssessError::Exact { channel: plan.reference.frequency, source };
        let pfd = plan.reference.pfd().map_err(exact)?;
        let reach = match plan.boundary.guard {
            Guard::Offset(offset) => Reach::Exact(offset),
            Guard::ShareOfPfd(share) => Reach::Exact(Frequency::from_hz(share.times(&pfd.hz()).map_err(exact)?)),
            Guard::LoopEdge => Reach::Edge(edges(plan, board, pfd)?),
        };
        let rulers = plan
            .groups
            .iter()
            .map(|group| {
                let ruler = |divider: &u64| {
                    let ruler = Ruler::new(plan, group, *divider)?;
                    match &reach {
                        Reach::Exact(guard) => {
                            let steps = guard.hz().times(&Exact::from_integer(ruler.modulus())).ok()?;
                            Some(ruler.with_reach(steps.over(&pfd.hz()).ok()?.floor()))
                        }
                        Reach::Edge(_) => Some(ruler),
                    }
                };
                group.output_dividers.iter().map(ruler).collect()
            })
            .collect();
        Ok(Self { plan, pfd, reach, rulers })
    }

    /// Returns how a channel stands.
    ///
    /// # Errors
    /// `AssessError` where exact arithmetic runs out of bits.
    pub fn standing(&self, group: usize, index: u64) -> Result<Standing, AssessError> {
        match self.rulers.get(group) {
            Some(Some(rulers)) => Ok(self.by_ruler(rulers, index)),
            _ => self.by_placing(group, index),
        }
    }

    fn by_ruler(&self, rulers: &[Ruler], index: u64) -> Standing {
        let legal = rulers.iter().map(|ruler| (ruler, ruler.word(index))).find(|(ruler, word)| ruler.is_legal(*word));
        let Some((ruler, word)) = legal else { return Standing::Illegal };
        (1..=self.plan.boundary.largest_q)
            .find_map(|q| self.inside(ruler, word, q).map(|p| Standing::Near { p, q }))
            .unwrap_or(Standing::Free)
    }

    /// Returns numerator p where the tone of a word at p/q lies inside the guard.
    pub(super) fn inside(&self, ruler: &Ruler, word: i128, q: u64) -> Option<i128> {
        let (p, residue) = ruler.near(word, q)?;
        let is_inside = match &self.reach {
            // |residue|·f_pfd/M ≤ guard, in whole numbers.
            Reach::Exact(_) => residue.abs() <= ruler.reach(),
            Reach::Edge(points) => {
                #[allow(clippy::cast_precision_loss, reason = "words are far below 2^53 steps a hertz apart")]
                let step_hz = self.pfd.to_f64_hz() / ruler.modulus() as f64;
                #[allow(clippy::cast_precision_loss, reason = "as above")]
                let (vco_hz, offset_hz) = (word as f64 * step_hz, residue.abs() as f64 * step_hz);
                offset_hz <= interpolate(points, vco_hz)
            }
        };
        is_inside.then_some(p)
    }

    /// The slow definition: every channel placed in exact rationals.
    ///
    /// # Errors
    /// `AssessError` where exact arithmetic runs out of bits.
    pub fn by_placing(&self, group: usize, index: u64) -> Result<Standing, AssessError> {
        let none = || AssessError::NoSuchChannel { group, index };
        let settings = self.plan.groups.get(group).ok_or_else(none)?;
        let channel = settings.channels.get(index).ok_or_else(none)?;
        let placement = place(self.plan, settings, channel)?;
        if !placement.illegal.is_empty() {
            return Ok(Standing::Illegal);
        }
        if placement.word.k == 0 {
            return Ok(Standing::Free);
        }
        for q in 1..=self.plan.boundary.largest_q {
            let near = nearest_fraction(placement.vco, self.pfd, q)
                .map_err(|source| AssessError::Exact { channel, source })?;
            let offset = near.tone_offset();
            let is_inside = match &self.reach {
                Reach::Exact(guard) => offset <= *guard,
                Reach::Edge(points) => offset.to_f64_hz() <= interpolate(points, placement.vco.to_f64_hz()),
            };
            if near.lowest_terms && offset.hz().sign() > 0 && is_inside {
                return Ok(Standing::Near { p: near.p, q });
            }
        }
        Ok(Standing::Free)
    }

    /// Returns the number of channels that are not free.
    ///
    /// # Errors
    /// As [`Positions::standing`].
    pub fn count_bad(&self) -> Result<u64, AssessError> {
        let mut bad = 0;
        for (group, channels) in self.plan.groups.iter().enumerate() {
            bad += (0..channels.channels.len())
                .into_par_iter()
                .map(|index| Ok(u64::from(self.standing(group, index)? != Standing::Free)))
                .try_reduce(|| 0, |a, b| Ok::<u64, AssessError>(a + b))?;
        }
        Ok(bad)
    }

    /// Returns the rulers of a group, one per output divider; `None` where each channel must be placed.
    pub(super) fn rulers(&self, group: usize) -> Option<&[Ruler]> {
        self.rulers.get(group)?.as_deref()
    }

    /// Returns the group.
    pub(super) fn group(&self, group: usize) -> Option<&ChannelGroup> {
        self.plan.groups.get(group)
    }

    /// Returns the plan.
    pub(super) fn plan(&self) -> &Plan {
        self.plan
    }
}

/// Returns the loop edge over the VCO range, at even points and where the gain has points of its own.
fn edges(plan: &Plan, board: &Setup, pfd: Frequency) -> Result<Vec<(f64, f64)>, AssessError> {
    let (low, high) = (plan.oscillator.range.0.to_f64_hz(), plan.oscillator.range.1.to_f64_hz());
    let mut at: Vec<f64> =
        (0..=EDGE_POINTS).map(|i| low + (high - low) * f64::from(i) / f64::from(EDGE_POINTS)).collect();
    if let Gain::Table(points) = &plan.oscillator.gain {
        at.extend(points.iter().map(|(hz, _)| *hz).filter(|hz| *hz > low && *hz < high));
    }
    at.sort_by(f64::total_cmp);
    at.into_iter()
        .map(|vco_hz| {
            let failed = |source| AssessError::Loop { place: format!("VCO frequency {:.6} MHz", vco_hz / 1e6), source };
            let response = board.response_of(plan, vco_hz / pfd.to_f64_hz(), pfd).map_err(failed)?;
            Ok((vco_hz, edge_of(plan.boundary.edge, &response).unwrap_or(0.0)))
        })
        .collect()
}
