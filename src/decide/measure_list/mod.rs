//! The shortest list of channels to measure that shows everything a plan's verdicts rely on.

mod cover;
mod expect;
mod needs;

pub use cover::{Cover, shortest_cover};
pub use expect::{Line, line_at};
pub use needs::{ABOUT_RATIO, Classes, DISTANCES, Demand, Distance, Meeting, Need, Side, bandwidth_hz, demand};

use std::collections::BTreeMap;

use rayon::prelude::*;
use serde::Serialize;

use crate::assess::{AssessError, ChannelResult, Rule, Setup, Verdict};
use crate::base::{Assumption, Frequency};
use crate::plan::Plan;
use crate::survey::SurveyResult;

/// Name and number of the layout; a renamed or re-unitised key raises the number.
pub const SCHEMA: &str = "thornmap.measurement/1";

/// What must be read before anything is switched on.
pub const CAUTIONS: [&str; 5] = [
    "transmit only into a load or with a licence; your local rules decide",
    "know the power at the instrument before connecting: above its damage level it is destroyed; use an attenuator or a coupler",
    "levels are relative to the carrier at the output in dBc, one sideband; read both sidebands, note the stronger one",
    "an instrument's own spurious responses look like tones: change its input attenuation, what changes with it is its own",
    "the list is a prediction's; it shows what the verdicts rely on and proves no compliance",
];

/// Steps after which the search for a shorter list gives up: a few seconds at most.
pub const MOST_STEPS: u64 = 3_000_000;

/// A need in words, with whether the list meets it.
#[derive(Debug, Clone, PartialEq, Eq, Serialize)]
pub struct NeedLine {
    /// The need.
    pub need: Need,
    /// In words.
    pub text: String,
}

/// A need that no channel meets.
#[derive(Debug, Clone, PartialEq, Eq, Serialize)]
pub struct NotCoverable {
    /// The need.
    pub need: Need,
    /// In words.
    pub text: String,
    /// Why no channel meets it.
    pub reason: String,
}

/// One channel to measure.
#[derive(Debug, Clone, Serialize)]
pub struct MeasureChannel {
    /// Group name.
    pub group: String,
    /// Channel index in its group, from 0.
    pub index: u64,
    /// Channel frequency, before injection.
    #[serde(rename = "channel_exact")]
    pub channel: Frequency,
    /// Output frequency: where the instrument is tuned to \[Hz\].
    pub output_hz: f64,
    /// Verdict of the survey.
    pub verdict: Verdict,
    /// Word and settings to program.
    pub settings: Settings,
    /// Needs that the channel shows first in the list.
    pub shows: Vec<NeedLine>,
    /// Further needs that it shows and an earlier channel of the list shows as well.
    pub shows_again: usize,
    /// Lines to measure, by offset.
    pub lines: Vec<Line>,
}

/// What is programmed.
#[derive(Debug, Clone, PartialEq, Serialize)]
#[allow(missing_docs, reason = "names and units are those of survey.json")]
pub struct Settings {
    pub n: Option<u64>,
    pub k: Option<u64>,
    pub m: Option<u64>,
    pub output_divider: Option<u64>,
    pub reference_hz: f64,
    pub doubler: bool,
    pub reference_divider: u64,
}

/// The list.
#[derive(Debug, Clone, Serialize)]
pub struct MeasureList {
    /// Layout of the list.
    pub schema: &'static str,
    /// Version of the program.
    pub version: &'static str,
    /// SHA-256 of the plan file.
    pub plan_sha256: String,
    /// Title of the plan.
    pub title: String,
    /// Needs that the list meets.
    pub needs_met: usize,
    /// No list has fewer channels.
    pub lower_bound: usize,
    /// Whether no shorter list exists.
    pub proven_shortest: bool,
    /// Channels, in plan order.
    pub channels: Vec<MeasureChannel>,
    /// Needs that no channel meets.
    pub not_coverable: Vec<NotCoverable>,
    /// What must be read before anything is switched on.
    pub cautions: [&'static str; CAUTIONS.len()],
    /// Rules of the list in words.
    pub conventions: Vec<String>,
    /// Every input the expected levels rest on.
    pub assumptions: Vec<Assumption>,
}

/// Returns the shortest list of channels that shows everything the verdicts of a survey rely on.
///
/// # Errors
/// `AssessError` where exact arithmetic has no result.
pub fn measure_list(result: &SurveyResult, classes: Classes) -> Result<MeasureList, AssessError> {
    let demand = demand(result, classes)?;
    let sets: Vec<Vec<usize>> = demand.met.iter().map(|met| met.keys().copied().collect()).collect();
    let cover = shortest_cover(&sets, demand.needs.len(), MOST_STEPS);
    let mut first: BTreeMap<usize, usize> = BTreeMap::new();
    for chosen in &cover.chosen {
        for need in demand.met[*chosen].keys() {
            first.entry(*need).or_insert(*chosen);
        }
    }
    let setup = Setup::new(&result.plan)?;
    let channels = cover
        .chosen
        .par_iter()
        .map(|chosen| {
            let channel = &result.channels[demand.candidates[*chosen]];
            let met = &demand.met[*chosen];
            let own: Vec<usize> = met.keys().copied().filter(|need| first.get(need) == Some(chosen)).collect();
            to_measure(&setup, channel, &demand.needs, met, &own)
        })
        .collect::<Result<Vec<_>, AssessError>>()?;
    Ok(MeasureList {
        schema: SCHEMA,
        version: env!("CARGO_PKG_VERSION"),
        plan_sha256: result.plan.sha256.clone(),
        title: result.plan.identity.title.clone(),
        needs_met: demand.needs.len() - cover.not_coverable.len(),
        lower_bound: cover.lower_bound,
        proven_shortest: cover.is_proven_shortest(),
        channels,
        not_coverable: cover
            .not_coverable
            .iter()
            .map(|need| not_coverable(&result.plan, &demand.needs[*need]))
            .collect(),
        cautions: CAUTIONS,
        conventions: conventions(classes),
        assumptions: result.assumptions.clone(),
    })
}

fn to_measure(
    setup: &Setup,
    channel: &ChannelResult,
    needs: &[Need],
    met: &BTreeMap<usize, Option<Meeting>>,
    own: &[usize],
) -> Result<MeasureChannel, AssessError> {
    let plan = setup.plan();
    let mut places: Vec<(f64, String)> = Vec::new();
    for need in own {
        match (&needs[*need], met.get(need).copied().flatten()) {
            (need, Some(meeting)) => places.push((meeting.offset.to_f64_hz(), words(plan, need))),
            (Need::RuleFired { rule }, None) => {
                let decided = channel.reasons.iter().filter(|reason| reason.rule.name() == *rule);
                places.extend(decided.filter_map(|reason| Some((reason.offset_hz?, format!("rule {rule}")))).take(1));
            }
            _ => {}
        }
    }
    // Every channel has something to read: its worst tone, else the tone at the PFD frequency.
    if places.is_empty() {
        let worst = channel.worst_tone().map(|tone| (tone.offset_hz, tone.label.clone()));
        places.push(worst.unwrap_or((channel.pfd_hz, "PFD frequency × 1".to_owned())));
    }
    places.sort_by(|a, b| a.0.total_cmp(&b.0));
    places.dedup_by(|a, b| (a.0 - b.0).abs() <= 1e-9 * b.0);
    let offsets: Vec<f64> = places.iter().map(|(offset_hz, _)| *offset_hz).collect();
    let noise = setup.noise_dbc_per_hz_at(channel, &offsets)?;
    Ok(MeasureChannel {
        group: channel.group.clone(),
        index: channel.index,
        channel: channel.channel,
        output_hz: channel.output_hz,
        verdict: channel.verdict,
        settings: Settings {
            n: channel.n,
            k: channel.k,
            m: channel.m,
            output_divider: channel.output_divider,
            reference_hz: channel.reference_hz,
            doubler: channel.doubler,
            reference_divider: channel.reference_divider,
        },
        shows: own
            .iter()
            .map(|need| NeedLine { need: needs[*need].clone(), text: words(plan, &needs[*need]) })
            .collect(),
        shows_again: met.len() - own.len(),
        lines: places
            .iter()
            .zip(noise)
            .map(|((offset_hz, label), noise)| line_at(channel, *offset_hz, label, noise))
            .collect(),
    })
}

/// Returns a need in words.
fn words(plan: &Plan, need: &Need) -> String {
    match need {
        Need::Boundary { family, q, p, side, distance } => {
            let fraction = p.map_or_else(|| format!("any p/{q}"), |p| format!("{p}/{q}"));
            let side = match side {
                Side::Below => "below",
                Side::Above => "above",
            };
            let distance = match distance {
                Distance::OneStep => "nearest channel".to_owned(),
                Distance::Bandwidths(step) => format!("about {} loop bandwidths", DISTANCES[*step]),
            };
            format!("{family} boundary {fraction}, {distance} {side}")
        }
        Need::ExactInteger => "a channel exactly on an integer".to_owned(),
        Need::CleanControl => {
            "a clear channel, modulator running, no boundary inside guard or loop (control)".to_owned()
        }
        Need::BandEdge { group, side } => {
            let edge = match side {
                Side::Below => "lowest",
                Side::Above => "highest",
            };
            format!("{edge} channel of group \"{}\"", plan.groups.get(*group).map_or("", |group| &group.name))
        }
        Need::OutputDivider { divider } => format!("output divider {divider}"),
        Need::ReferenceSetting => format!(
            "reference {} with doubler {} and divider {}",
            plan.reference.frequency,
            if plan.reference.doubler { "on" } else { "off" },
            plan.reference.divider
        ),
        Need::Clock { clock } => {
            format!("clock \"{}\" inside guard or loop", plan.clocks.get(*clock).map_or("", |clock| &clock.name))
        }
        Need::RuleFired { rule } => {
            let sentence = Rule::ALL.into_iter().find(|known| known.name() == *rule).map_or("", Rule::sentence);
            format!("rule {rule}: {sentence}")
        }
    }
}

/// Returns a need that no channel meets, with the reason.
fn not_coverable(plan: &Plan, need: &Need) -> NotCoverable {
    let reason = match need {
        Need::Boundary { distance: Distance::OneStep, .. } => "no channel lies on this side within reach",
        Need::Boundary { .. } => "the raster has no channel at about this distance on this side",
        Need::ExactInteger => "no channel lies on an integer",
        Need::CleanControl => "every channel is flagged or has a boundary inside guard or loop",
        Need::BandEdge { .. } => "this channel has no legal word",
        Need::OutputDivider { .. } => "no channel uses it: an earlier divider is legal, or this one is not",
        Need::RuleFired { .. } => "a channel without a legal word cannot be set",
        Need::ReferenceSetting | Need::Clock { .. } => "no channel shows it",
    };
    NotCoverable { need: need.clone(), text: words(plan, need), reason: reason.to_owned() }
}

fn conventions(classes: Classes) -> Vec<String> {
    let class = match classes {
        Classes::Fraction => "each fraction p/q of each family is a class of its own",
        Classes::Denominator => "all fractions with one denominator q of a family count as one class",
    };
    vec![
        class.to_owned(),
        "a boundary is used where a channel's tone offset is within 17.8 loop bandwidths".to_owned(),
        "distances are tone offsets over the channel's own unity-gain frequency (closed-loop 3 dB frequency with a measured response); \"about\" is within a quarter of a decade, a factor of 1.78".to_owned(),
        "only the plan's own reference setting is listed: the verdicts rely on no other".to_owned(),
        "resolution bandwidth is at most a tenth of the distance to the carrier and to the next listed tone, at most 10 kHz, and narrower (down to 1 Hz) where the channel's own phase noise would come within 10 dB of the smaller of expected level and limit; the floor needed lies 10 dB below the smaller of expected level and limit, in dBc/Hz".to_owned(),
        "expected levels are one sideband in dBc at the output; empty is unknown".to_owned(),
    ]
}
