//! What one option does on a plan.

use num_bigint::BigUint;
use serde::{Serialize, Serializer};

use crate::assess::{AssessError, ChannelResult, Setup};
use crate::modulator::Structure;
use crate::plan::{ChannelGroup, ChannelList, Plan};
use crate::survey::{assess_all, summarise};

/// Which channels an option was tried on.
#[derive(Debug, Clone, PartialEq, Eq, Serialize)]
pub struct Sample {
    /// Channels tried.
    pub channels: u64,
    /// Channels of the plan.
    pub of: u64,
    /// How they were chosen, in words.
    pub rule: String,
}

impl Sample {
    /// Returns the plan cut down to at most about `largest` channels, evenly spread over each group with its first and
    /// last channel, and the sample's name. A plan that is small enough is taken whole.
    #[must_use]
    pub fn of(plan: &Plan, largest: u64) -> (Plan, Self) {
        let total = plan.channel_count();
        if total <= largest {
            return (plan.clone(), Self { channels: total, of: total, rule: "all channels".to_owned() });
        }
        let mut sampled = plan.clone();
        sampled.groups = plan.groups.iter().map(|group| thinned(group, total, largest)).collect();
        let channels = sampled.channel_count();
        let rule =
            format!("stratified: one channel in {} of each group, first and last always", total.div_ceil(largest));
        (sampled, Self { channels, of: total, rule })
    }
}

fn thinned(group: &ChannelGroup, total: u64, largest: u64) -> ChannelGroup {
    let stride = total.div_ceil(largest).max(1);
    let last = group.channels.len().saturating_sub(1);
    let mut list: Vec<_> = (0..=last)
        .filter(|index| index % stride == 0 || *index == last)
        .filter_map(|index| group.channels.get(index))
        .collect();
    list.dedup();
    ChannelGroup { channels: ChannelList::List(list), ..group.clone() }
}

/// Figures of one option on the sample; `None` is unknown.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct Figures {
    /// Channels with verdict bad.
    pub bad: u64,
    /// Channels with verdict marginal.
    pub marginal: u64,
    /// Channels with verdict clear.
    pub clear: u64,
    /// Smallest margin of any listed tone \[dB\].
    pub worst_margin_db: Option<f64>,
    /// Strongest known modulator or nonlinearity part inside the loop \[dBc\]; `None` where there is none.
    pub worst_in_loop_dbc: Option<f64>,
    /// Largest part of the modulator in the rms phase error, noise and its tones \[deg\].
    pub modulator_phase_deg: Option<f64>,
    /// Largest noise density of the modulator up to the loop edge, shaped and folded \[dBc/Hz\]; `None` where no
    /// channel has noise (short periods have lines instead).
    pub in_loop_noise_dbc_per_hz: Option<f64>,
    /// Largest rms phase error of the known sources and tones \[deg\].
    pub known_phase_error_deg: Option<f64>,
    /// Largest rms phase error with tones \[deg\]; `None` where one of them is unknown.
    pub phase_error_deg: Option<f64>,
    /// Shortest sequence over the sample \[cycles\]; `None` where one is not known.
    #[serde(serialize_with = "big")]
    pub shortest_sequence: Option<BigUint>,
    /// Lowest and highest output of the modulator over the sample.
    pub output_range: (i64, i64),
    /// Smallest and largest N that the divider limits leave.
    pub usable_n: (Option<i128>, Option<i128>),
    /// Channels without a legal word.
    pub illegal: u64,
    /// Largest frequency error \[Hz\].
    pub worst_error_hz: f64,
    /// Whether the dither can whiten (stage ≤ order − 1); `None` without dither.
    pub dither_can_whiten: Option<bool>,
}

fn big<S: Serializer>(value: &Option<BigUint>, serializer: S) -> Result<S::Ok, S::Error> {
    match value {
        None => serializer.serialize_none(),
        Some(number) => {
            number.to_string().parse::<serde_json::Number>().map_err(serde::ser::Error::custom)?.serialize(serializer)
        }
    }
}

/// Surveys a candidate plan and draws its figures together.
pub(super) fn measure(plan: &Plan) -> Result<Figures, AssessError> {
    let channels = assess_all(plan)?;
    let summary = summarise(&channels);
    let setup = Setup::new(plan)?;
    let legal: Vec<&ChannelResult> = channels.iter().filter(|channel| channel.legal).collect();
    let largest = |values: Vec<Option<f64>>| {
        values.into_iter().collect::<Option<Vec<f64>>>().and_then(|values| values.into_iter().reduce(f64::max))
    };
    let mut range = (0, 0);
    for channel in &legal {
        let placed = crate::assess::place(plan, &plan.groups[channel.group_index], channel.channel)?;
        let (low, high) = crate::modulator::output_range(&placed.modulator);
        range = (range.0.min(low), range.1.max(high));
    }
    let in_loop =
        legal.iter().flat_map(|channel| &channel.tones).filter(|tone| tone.inside_loop).flat_map(|tone| {
            [tone.contributions.modulator_dbc, tone.contributions.nonlinearity_dbc].into_iter().flatten()
        });
    let running: Vec<_> = legal.iter().filter(|channel| channel.k.is_some_and(|k| k > 0)).collect();
    let shares = running.iter().map(|channel| setup.modulator_share(channel)).collect::<Result<Vec<_>, _>>()?;
    let is_integer = plan.modulator.settings.structure == Structure::Integer;
    Ok(Figures {
        bad: summary.bad,
        marginal: summary.marginal,
        clear: summary.clear,
        worst_margin_db: legal
            .iter()
            .flat_map(|channel| &channel.tones)
            .filter_map(|tone| tone.margin_db)
            .reduce(f64::min),
        worst_in_loop_dbc: in_loop.reduce(f64::max),
        modulator_phase_deg: if is_integer {
            Some(0.0)
        } else {
            largest(shares.iter().map(|share| share.phase_deg).collect())
        },
        in_loop_noise_dbc_per_hz: shares.iter().filter_map(|share| share.in_loop_noise_dbc_per_hz).reduce(f64::max),
        known_phase_error_deg: largest(legal.iter().map(|channel| channel.phase_error_known_deg).collect()),
        phase_error_deg: largest(legal.iter().map(|channel| channel.phase_error_with_tones_deg).collect()),
        shortest_sequence: running
            .iter()
            .map(|channel| channel.period.clone())
            .collect::<Option<Vec<_>>>()
            .and_then(|periods| periods.into_iter().min()),
        output_range: range,
        usable_n: (
            Some(i128::from(plan.divider.minimum) - i128::from(range.0)),
            plan.divider.maximum.map(|maximum| i128::from(maximum) - i128::from(range.1)),
        ),
        illegal: summary.illegal,
        worst_error_hz: legal.iter().filter_map(|channel| channel.error_hz).map(f64::abs).fold(0.0, f64::max),
        dither_can_whiten: whitening(plan),
    })
}

/// Returns whether the plan's dither can whiten; it cannot beyond stage order − 1.
fn whitening(plan: &Plan) -> Option<bool> {
    let settings = &plan.modulator.settings;
    settings.dither.stage_and_weight().map(|(stage, _)| stage < settings.order)
}
