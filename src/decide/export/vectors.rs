//! Words at the corners of the arithmetic: what a driver must get right.

use serde::Serialize;

use crate::assess::{Placement, PlacementError, place};
use crate::base::{Exact, ExactError, Frequency};
use crate::plan::{ChannelGroup, Plan};

use super::words::{DriverWord, RoundedHz, driver_word};

/// Integers N that are tried for a corner before it is given up.
const MOST_TRIES: u64 = 8;

/// A channel frequency with the word that the plan's arithmetic gives for it.
#[derive(Debug, Clone, PartialEq, Eq, Serialize)]
pub struct TestVector {
    /// What is special about it.
    pub name: String,
    /// Group whose settings apply.
    pub group: String,
    /// Group index from 0.
    pub group_index: usize,
    /// Channel frequency, before injection.
    #[serde(rename = "channel_exact")]
    pub channel: Frequency,
    /// Channel frequency in integers; with a millihertz rest the exact frequency is the one to feed in.
    pub channel_rounded: RoundedHz,
    /// Whether the group holds the frequency as a channel; otherwise it only tests arithmetic.
    pub on_raster: bool,
    /// Whether every limit of the plan is met.
    pub legal: bool,
    /// The word.
    pub word: DriverWord,
    /// Achieved output frequency, exact.
    #[serde(rename = "achieved_exact")]
    pub achieved: Frequency,
    /// Achieved output frequency in integers.
    pub achieved_rounded: RoundedHz,
}

/// Vectors, and those that the plan cannot give.
#[derive(Debug, Clone, Default)]
pub struct VectorSet {
    /// The vectors, group by group.
    pub vectors: Vec<TestVector>,
    /// What is missing, with the reason.
    pub missing: Vec<String>,
}

/// Returns the vectors of a plan, or of one group: both band edges, the channel nearest to an integer, K = 0, K = 1 and
/// K = M − 1. A corner that no channel hits is placed off the raster by the same arithmetic and marked.
///
/// # Errors
/// `PlacementError` where exact arithmetic has no result for a channel of the plan.
pub fn test_vectors(plan: &Plan, group: Option<&str>) -> Result<VectorSet, PlacementError> {
    let mut set = VectorSet::default();
    for (index, settings) in plan.groups.iter().enumerate() {
        if group.is_none_or(|name| name == settings.name) {
            Corner { plan, index, group: settings }.collect(&mut set)?;
        }
    }
    Ok(set)
}

/// What K is wanted.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
enum Wanted {
    Zero,
    One,
    Last,
}

impl Wanted {
    const fn name(self) -> &'static str {
        match self {
            Self::Zero => "K = 0, an exact integer",
            Self::One => "K = 1, one step above an integer",
            Self::Last => "K = M - 1, one step below an integer",
        }
    }

    fn k(self, m: u64) -> u64 {
        match self {
            Self::Zero => 0,
            Self::One => 1,
            Self::Last => m - 1,
        }
    }
}

/// A group whose corners are looked for.
struct Corner<'a> {
    plan: &'a Plan,
    index: usize,
    group: &'a ChannelGroup,
}

impl Corner<'_> {
    fn collect(&self, set: &mut VectorSet) -> Result<(), PlacementError> {
        let Some((low, high)) = self.group.channels.range() else { return Ok(()) };
        set.vectors.push(self.vector("lower band edge", low)?);
        set.vectors.push(self.vector("upper band edge", high)?);
        match self.nearest_to_an_integer()? {
            Some(channel) => set.vectors.push(self.vector("channel nearest to an integer", channel)?),
            None => set.missing.push(format!(
                "group \"{}\": channel nearest to an integer: every channel is an integer",
                self.group.name
            )),
        }
        for wanted in [Wanted::Zero, Wanted::One, Wanted::Last] {
            match self.corner(low, wanted)? {
                Some(vector) => set.vectors.push(vector),
                None => set.missing.push(format!(
                    "group \"{}\": {}: the modulus of the plan gives no such word near the band",
                    self.group.name,
                    wanted.name()
                )),
            }
        }
        Ok(())
    }

    /// Returns the vector of a channel frequency.
    fn vector(&self, name: &str, channel: Frequency) -> Result<TestVector, PlacementError> {
        let placement = place(self.plan, self.group, channel)?;
        let exact = |source| PlacementError::Exact { channel, source };
        let on_raster = matches!(
            self.plan.locate(channel, Some(&self.group.name)),
            Some((index, Some(_))) if index == self.index
        );
        Ok(TestVector {
            name: name.to_owned(),
            group: self.group.name.clone(),
            group_index: self.index,
            channel,
            channel_rounded: RoundedHz::of(channel).map_err(exact)?,
            on_raster,
            legal: placement.illegal.is_empty(),
            word: driver_word(self.plan, &placement),
            achieved: placement.achieved,
            achieved_rounded: RoundedHz::of(placement.achieved).map_err(exact)?,
        })
    }

    /// Returns the channel with the smallest |K mod± M|/M above zero; ties take the first.
    fn nearest_to_an_integer(&self) -> Result<Option<Frequency>, PlacementError> {
        let mut best: Option<(Exact, Frequency)> = None;
        for index in 0..self.group.channels.len() {
            let Some(channel) = self.group.channels.get(index) else { continue };
            let word = place(self.plan, self.group, channel)?.word;
            let residue = word.k.min(word.modulus.get() - word.k);
            if residue == 0 {
                continue;
            }
            let distance = Exact::new(i128::from(residue), i128::from(word.modulus.get()))
                .map_err(|source| PlacementError::Exact { channel, source })?;
            if best.is_none_or(|(known, _)| distance < known) {
                best = Some((distance, channel));
            }
        }
        Ok(best.map(|(_, channel)| channel))
    }

    /// Returns a vector with the wanted K, at the first integer at or above the lower band edge where there is one.
    fn corner(&self, low: Frequency, wanted: Wanted) -> Result<Option<TestVector>, PlacementError> {
        let start = place(self.plan, self.group, low)?;
        let (n, m) = (start.word.n, self.modulus(&start));
        let k = wanted.k(m);
        // K = M − 1 belongs to the integer below.
        let first = if k == 0 || wanted == Wanted::One { n + 1 } else { n };
        for n in first..first + MOST_TRIES {
            let Ok(channel) = self.channel_of(&start, (n, k, m)) else { break };
            if channel.hz().sign() <= 0 {
                continue;
            }
            let Ok(vector) = self.vector(wanted.name(), channel) else { continue };
            if vector.word.k == k && (vector.word.m == m || k == 0) && (k > 0 || wanted == Wanted::Zero) {
                return Ok(Some(vector));
            }
        }
        Ok(None)
    }

    /// Returns the largest modulus that the plan's rule can give.
    fn modulus(&self, start: &Placement) -> u64 {
        match self.plan.modulator.modulus {
            crate::modulator::ModulusRule::Largest(largest) => largest.get(),
            _ => start.word.modulus.get(),
        }
    }

    /// Returns f_pfd·(N + K/M)/P − injection.
    fn channel_of(&self, start: &Placement, (n, k, m): (u64, u64, u64)) -> Result<Frequency, ExactError> {
        let ratio = Exact::new(i128::from(k), i128::from(m))?.plus(&Exact::from_integer(i128::from(n)))?;
        let vco = ratio.times(&self.plan.reference.pfd()?.hz())?;
        let output = vco.over(&Exact::from_integer(i128::from(start.output_divider)))?;
        Ok(Frequency::from_hz(output.minus(&self.group.injection.hz())?))
    }
}
