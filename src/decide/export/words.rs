//! The words of a channel as a driver takes them.

use serde::{Serialize, Serializer};

use crate::assess::{ChannelResult, Placement, PlacementError, Rule, Verdict, place};
use crate::base::{Exact, ExactError, Frequency};
use crate::modulator::Dither;
use crate::plan::Plan;

/// Most stages of a modulator.
const MOST_STAGES: usize = 5;

/// A frequency as two integers: the nearest hertz and the signed rest in millihertz.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize)]
pub struct RoundedHz {
    /// Nearest integer, a tie goes to the even one \[Hz\].
    pub hz: i128,
    /// What is left, rounded to integer millihertz, −500 … 500.
    pub millihertz: i128,
}

impl RoundedHz {
    /// Returns the two integers of a frequency.
    ///
    /// # Errors
    /// `ExactError::Overflow` beyond 127 bits.
    ///
    /// # Examples
    /// ```
    /// use thornmap::base::{Exact, Frequency};
    /// use thornmap::decide::export::RoundedHz;
    /// let third = Frequency::from_hz(Exact::new(1_300_000_001, 3).unwrap());
    /// assert_eq!(RoundedHz::of(third).unwrap(), RoundedHz { hz: 433_333_334, millihertz: -333 });
    /// ```
    pub fn of(frequency: Frequency) -> Result<Self, ExactError> {
        let hz = frequency.hz().round_half_even();
        let rest = frequency.hz().minus(&Exact::from_integer(hz))?;
        Ok(Self { hz, millihertz: rest.times(&Exact::from_integer(1000))?.round_half_even() })
    }
}

/// Everything a driver programs for one channel.
#[derive(Debug, Clone, PartialEq, Eq, Serialize)]
pub struct DriverWord {
    /// Integer part N.
    pub n: u64,
    /// Fractional numerator K.
    pub k: u64,
    /// Modulus M.
    pub m: u64,
    /// Reference divider R.
    pub reference_divider: u64,
    /// Whether the reference is doubled.
    pub doubler: bool,
    /// Output divider P.
    pub output_divider: u64,
    /// Modulator order.
    pub order: u8,
    /// Seeds, first stage first.
    pub seeds: Vec<u64>,
    /// Stage that takes the dither bit, from 1; 0 without dither.
    pub dither_stage: u8,
    /// Length of the dither register in bits; 0 without dither.
    pub dither_length: u8,
    /// Start value of the dither register; 0 without dither.
    pub dither_seed: u64,
    /// Weight of the dither bit in least significant bits; 0 without dither.
    pub dither_weight: u64,
    /// Place in the export's list of references, from 0.
    pub reference_index: u64,
}

impl DriverWord {
    /// Returns the seed of a stage, counted from 0; 0 where there is no such stage.
    fn seed(&self, stage: usize) -> u64 {
        self.seeds.get(stage).copied().unwrap_or(0)
    }
}

/// One integer of a driver word: its name in every format and in register maps.
#[derive(Debug, Clone, Copy)]
pub struct Field {
    /// Name.
    pub name: &'static str,
    /// One line for people.
    pub doc: &'static str,
    /// The integer of a word.
    pub value: fn(&DriverWord) -> u64,
}

macro_rules! fields {
    ($($name:literal, $doc:literal => $value:expr;)*) => {
        /// Every field of a driver word, in the order of every format.
        pub const FIELDS: &[Field] = &[$(Field { name: $name, doc: $doc, value: $value }),*];
    };
}

fields! {
    "n", "integer part N of the division" => |w| w.n;
    "k", "fractional numerator K, below M" => |w| w.k;
    "m", "modulus M" => |w| w.m;
    "reference_divider", "reference divider R" => |w| w.reference_divider;
    "doubler", "1 when the reference is doubled" => |w| u64::from(w.doubler);
    "output_divider", "output divider P" => |w| w.output_divider;
    "order", "modulator order" => |w| u64::from(w.order);
    "seed_1", "start residue of stage 1" => |w| w.seed(0);
    "seed_2", "start residue of stage 2, 0 without it" => |w| w.seed(1);
    "seed_3", "start residue of stage 3, 0 without it" => |w| w.seed(2);
    "seed_4", "start residue of stage 4, 0 without it" => |w| w.seed(3);
    "seed_5", "start residue of stage 5, 0 without it" => |w| w.seed(MOST_STAGES - 1);
    "dither_stage", "stage that takes the dither bit, 0 without dither" => |w| u64::from(w.dither_stage);
    "dither_length", "bits of the dither register, 0 without dither" => |w| u64::from(w.dither_length);
    "dither_seed", "start value of the dither register, 0 without dither" => |w| w.dither_seed;
    "dither_weight", "weight of the dither bit, 0 without dither" => |w| w.dither_weight;
    "reference_index", "place in the list of references" => |w| w.reference_index;
}

/// Returns the word of a placed channel.
#[must_use]
pub fn driver_word(plan: &Plan, placement: &Placement) -> DriverWord {
    let (dither_stage, dither_length, dither_seed, dither_weight) = match placement.modulator.dither() {
        // A plan knows no white dither: no hardware has it.
        Dither::None | Dither::White { .. } => (0, 0, 0, 0),
        Dither::Register { stage, register, seed, weight } => (stage, register, seed, weight),
    };
    DriverWord {
        n: placement.word.n,
        k: placement.word.k,
        m: placement.word.modulus.get(),
        reference_divider: plan.reference.divider,
        doubler: plan.reference.doubler,
        output_divider: placement.output_divider,
        order: placement.modulator.order(),
        seeds: placement.modulator.seeds().to_vec(),
        dither_stage,
        dither_length,
        dither_seed,
        dither_weight,
        // A survey runs on the plan's own reference, which stands first in the list.
        reference_index: 0,
    }
}

/// Returns the references of a plan: its own first, then its alternatives in their order, each once.
pub(super) fn references(plan: &Plan) -> Vec<Frequency> {
    let mut list = vec![plan.reference.frequency];
    for reference in &plan.alternatives.references {
        if !list.contains(reference) {
            list.push(*reference);
        }
    }
    list
}

fn rule_names<S: Serializer>(rules: &[Rule], serializer: S) -> Result<S::Ok, S::Error> {
    serializer.collect_seq(rules.iter().map(|rule| rule.name()))
}

/// One channel of an export.
#[derive(Debug, Clone, Serialize)]
pub struct ExportChannel {
    /// Group name.
    pub group: String,
    /// Group index from 0.
    pub group_index: usize,
    /// Channel index in the group, from 0.
    pub index: u64,
    /// Channel frequency, before injection.
    #[serde(rename = "channel_exact")]
    pub channel: Frequency,
    /// Channel frequency in integers.
    pub channel_rounded: RoundedHz,
    /// Whether the channel has a legal word.
    pub legal: bool,
    /// The word; `None` without a legal one.
    pub word: Option<DriverWord>,
    /// f_pfd·(N + K/M)/P; `None` without a legal word.
    #[serde(rename = "achieved_exact")]
    pub achieved: Option<Frequency>,
    /// Achieved output frequency in integers; `None` without a legal word.
    pub achieved_rounded: Option<RoundedHz>,
    /// Verdict.
    pub verdict: Verdict,
    /// Rules that fired, each once.
    #[serde(serialize_with = "rule_names")]
    pub rules: Vec<Rule>,
}

impl ExportChannel {
    /// Returns the channel for a message: group and exact frequency.
    #[must_use]
    pub fn place(&self) -> String {
        format!("channel {} of group \"{}\"", self.channel, self.group)
    }
}

/// Returns a judged channel with its word.
pub(super) fn export_channel(plan: &Plan, judged: &ChannelResult) -> Result<ExportChannel, PlacementError> {
    let channel = judged.channel;
    let placement = place(plan, &plan.groups[judged.group_index], channel)?;
    let rounded = |frequency| RoundedHz::of(frequency).map_err(|source| PlacementError::Exact { channel, source });
    let achieved = judged.legal.then_some(placement.achieved);
    let fired = |rule: &Rule| judged.reasons.iter().any(|reason| reason.rule == *rule);
    Ok(ExportChannel {
        group: judged.group.clone(),
        group_index: judged.group_index,
        index: judged.index,
        channel,
        channel_rounded: rounded(channel)?,
        legal: judged.legal,
        word: judged.legal.then(|| driver_word(plan, &placement)),
        achieved,
        achieved_rounded: achieved.map(rounded).transpose()?,
        verdict: judged.verdict,
        rules: Rule::ALL.into_iter().filter(fired).collect(),
    })
}
