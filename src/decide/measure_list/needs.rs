//! What a plan's verdicts rely on, and which channels can show it.

use std::collections::BTreeMap;

use serde::Serialize;

use crate::assess::{AssessError, ChannelResult, Origin, Placement, Rule, Verdict, place};
use crate::base::{ExactError, Frequency};
use crate::survey::SurveyResult;
use crate::tones::nearest_fraction;

/// Tone offsets that are wanted, in loop bandwidths.
pub const DISTANCES: [f64; 5] = [0.1, 0.3, 1.0, 3.0, 10.0];
/// Largest ratio between a tone offset and the wanted one: a quarter of a decade, so that the ranges meet.
pub const ABOUT_RATIO: f64 = 1.778_279_41;

/// Side of a boundary.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord, Serialize)]
#[serde(rename_all = "lowercase")]
pub enum Side {
    /// The carrier is below the boundary.
    Below,
    /// The carrier is above the boundary.
    Above,
}

/// How far from a boundary.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum Distance {
    /// The nearest channel there is on that side.
    OneStep,
    /// About `DISTANCES[i]` loop bandwidths.
    Bandwidths(usize),
}

/// What counts as one boundary class.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default)]
pub enum Classes {
    /// Each fraction p/q of each family.
    #[default]
    Fraction,
    /// Each denominator q of each family: coupling levels are carried along q, so a wide plan needs fewer channels.
    Denominator,
}

/// One thing that a measurement must show.
#[derive(Debug, Clone, PartialEq, Eq, PartialOrd, Ord, Serialize)]
#[serde(tag = "kind", rename_all = "kebab-case")]
pub enum Need {
    /// A tone near a boundary.
    Boundary {
        /// `comparison`, `reference` or `output`.
        family: &'static str,
        /// Denominator.
        q: u64,
        /// Numerator; `None` where all fractions of the denominator count as one.
        p: Option<i128>,
        /// Side.
        side: Side,
        /// Distance.
        distance: Distance,
    },
    /// A channel exactly on an integer.
    ExactInteger,
    /// A clear channel with its modulator running and no boundary inside guard or loop: what the board does by itself.
    CleanControl,
    /// The lowest or highest channel of a group.
    BandEdge {
        /// Group index from 0.
        group: usize,
        /// Which edge.
        side: Side,
    },
    /// An output divider of the plan.
    OutputDivider {
        /// P.
        divider: u64,
    },
    /// The reference with its doubler and divider.
    ReferenceSetting,
    /// A clock whose tone comes inside guard or loop.
    Clock {
        /// Clock index from 0.
        clock: usize,
    },
    /// A rule that fired.
    RuleFired {
        /// The rule's name.
        rule: &'static str,
    },
}

/// A tone that meets a boundary need on one channel.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Meeting {
    /// Tone offset, exact.
    pub offset: Frequency,
}

/// Needs, and who meets them.
#[derive(Debug, Clone)]
pub struct Demand {
    /// The needs, in a fixed order.
    pub needs: Vec<Need>,
    /// Candidates: places in the survey's channels, all legal.
    pub candidates: Vec<usize>,
    /// Needs that each candidate meets, as places in `needs`, with the tone where it is one of a boundary.
    pub met: Vec<BTreeMap<usize, Option<Meeting>>>,
}

/// A boundary seen from a channel.
struct Sight {
    family: &'static str,
    q: u64,
    p: i128,
    side: Side,
    offset: Frequency,
}

/// Returns what a survey's verdicts rely on and which channels can show it.
///
/// # Errors
/// `AssessError` where exact arithmetic has no result.
pub fn demand(result: &SurveyResult, classes: Classes) -> Result<Demand, AssessError> {
    let candidates: Vec<usize> = (0..result.channels.len()).filter(|place| result.channels[*place].legal).collect();
    let mut found: Vec<BTreeMap<Need, Option<Meeting>>> = vec![BTreeMap::new(); candidates.len()];
    let mut nearest: BTreeMap<(&'static str, u64, Option<i128>, Side), Frequency> = BTreeMap::new();
    let mut seen: Vec<Vec<Sight>> = Vec::with_capacity(candidates.len());
    for place in &candidates {
        let channel = &result.channels[*place];
        let sights = sights(result, channel)?;
        for sight in &sights {
            let class = class_of(sight, classes);
            let known = nearest.entry(class).or_insert(sight.offset);
            *known = (*known).min(sight.offset);
        }
        seen.push(sights);
    }
    for ((met, sights), place) in found.iter_mut().zip(&seen).zip(&candidates) {
        let channel = &result.channels[*place];
        for sight in sights {
            let class = class_of(sight, classes);
            let meeting = Some(Meeting { offset: sight.offset });
            let need = |distance| Need::Boundary { family: class.0, q: class.1, p: class.2, side: class.3, distance };
            if nearest.get(&class) == Some(&sight.offset) {
                met.insert(need(Distance::OneStep), meeting);
            }
            let step = bandwidth_hz(channel).and_then(|bandwidth| distance_step(sight.offset.to_f64_hz() / bandwidth));
            if let Some(step) = step {
                met.entry(need(Distance::Bandwidths(step))).or_insert(meeting);
            }
        }
        met.extend(other_needs(result, channel).into_iter().map(|need| (need, None)));
    }
    let needs = every_need(result, nearest.keys().copied());
    let index: BTreeMap<&Need, usize> = needs.iter().enumerate().map(|(place, need)| (need, place)).collect();
    let met = found
        .iter()
        .map(|met| met.iter().filter_map(|(need, meeting)| Some((*index.get(need)?, *meeting))).collect())
        .collect();
    Ok(Demand { needs, candidates, met })
}

/// Returns the loop bandwidth that distances are counted in: unity gain, or 3 dB where there is no unity gain \[Hz\].
#[must_use]
pub fn bandwidth_hz(channel: &ChannelResult) -> Option<f64> {
    channel.unity_gain_hz.or(channel.closed_loop_3db_hz)
}

/// Returns the place in `DISTANCES` that a ratio is about, if any.
fn distance_step(ratio: f64) -> Option<usize> {
    DISTANCES.iter().position(|wanted| ratio > wanted / ABOUT_RATIO && ratio <= wanted * ABOUT_RATIO)
}

const fn class_of(sight: &Sight, classes: Classes) -> (&'static str, u64, Option<i128>, Side) {
    let p = match classes {
        Classes::Fraction => Some(sight.p),
        Classes::Denominator => None,
    };
    (sight.family, sight.q, p, sight.side)
}

/// Returns the boundaries that a channel sees within the widest wanted distance.
fn sights(result: &SurveyResult, channel: &ChannelResult) -> Result<Vec<Sight>, AssessError> {
    let plan = &result.plan;
    let exact = |source: ExactError| AssessError::Exact { channel: channel.channel, source };
    let placement: Placement = place(plan, &plan.groups[channel.group_index], channel.channel)?;
    let pfd = plan.reference.pfd().map_err(exact)?;
    let reference = plan.reference.frequency;
    let widest = DISTANCES[DISTANCES.len() - 1] * ABOUT_RATIO;
    let reach_hz = bandwidth_hz(channel).map_or(0.0, |bandwidth| widest * bandwidth);
    let mut sights = Vec::new();
    for q in 1..=plan.boundary.largest_q {
        let mut families = vec![("comparison", placement.vco, pfd)];
        if reference != pfd {
            families.push(("reference", placement.vco, reference));
        }
        if q == 1 {
            families.push(("output", placement.achieved, reference));
        }
        for (family, frequency, base) in families {
            let near = nearest_fraction(frequency, base, q).map_err(exact)?;
            let offset = near.tone_offset();
            if near.lowest_terms && offset.hz().sign() > 0 && offset.to_f64_hz() <= reach_hz {
                let side = if near.signed_offset.hz().sign() > 0 { Side::Above } else { Side::Below };
                sights.push(Sight { family, q, p: near.p, side, offset });
            }
        }
    }
    Ok(sights)
}

/// Returns the needs that a legal channel meets beside those of boundaries.
fn other_needs(result: &SurveyResult, channel: &ChannelResult) -> Vec<Need> {
    let mut needs = vec![Need::ReferenceSetting];
    if channel.k == Some(0) {
        needs.push(Need::ExactInteger);
    }
    // With an integer divider there is no modulator: any clear channel is the control then.
    let is_running = channel.k != Some(0) || channel.order == 0;
    if channel.verdict == Verdict::Clear && channel.boundaries.is_empty() && is_running {
        needs.push(Need::CleanControl);
    }
    if let Some((low, high)) = result.plan.groups[channel.group_index].channels.range() {
        for (edge, side) in [(low, Side::Below), (high, Side::Above)] {
            if channel.channel == edge {
                needs.push(Need::BandEdge { group: channel.group_index, side });
            }
        }
    }
    needs.extend(channel.output_divider.map(|divider| Need::OutputDivider { divider }));
    for (clock, entry) in result.plan.clocks.iter().enumerate() {
        let is_near = |tone: &crate::assess::Tone| {
            tone.origin == Origin::Clock
                && (tone.inside_loop || tone.inside_guard)
                && tone.label.starts_with(&format!("{} × ", entry.name))
        };
        if channel.tones.iter().any(is_near) {
            needs.push(Need::Clock { clock });
        }
    }
    for rule in Rule::ALL {
        if channel.reasons.iter().any(|reason| reason.rule == rule) {
            needs.push(Need::RuleFired { rule: rule.name() });
        }
    }
    needs
}

/// Returns every need of the plan, whether or not a channel meets it.
fn every_need(
    result: &SurveyResult,
    sides: impl Iterator<Item = (&'static str, u64, Option<i128>, Side)>,
) -> Vec<Need> {
    let mut needs = Vec::new();
    let mut classes: Vec<_> = sides.map(|(family, q, p, _)| (family, q, p)).collect();
    classes.dedup();
    for (family, q, p) in classes {
        for side in [Side::Below, Side::Above] {
            let distances = (0..DISTANCES.len()).map(Distance::Bandwidths);
            for distance in std::iter::once(Distance::OneStep).chain(distances) {
                needs.push(Need::Boundary { family, q, p, side, distance });
            }
        }
    }
    needs.extend([Need::ExactInteger, Need::CleanControl, Need::ReferenceSetting]);
    let mut dividers = Vec::new();
    for (group, settings) in result.plan.groups.iter().enumerate() {
        needs.extend([Side::Below, Side::Above].map(|side| Need::BandEdge { group, side }));
        dividers.extend(settings.output_dividers.iter().copied());
    }
    dividers.sort_unstable();
    dividers.dedup();
    needs.extend(dividers.into_iter().map(|divider| Need::OutputDivider { divider }));
    let met_by_any = |need: &Need| {
        result
            .channels
            .iter()
            .filter(|channel| channel.legal)
            .any(|channel| other_needs(result, channel).contains(need))
    };
    // A clock that comes near no channel decides no verdict.
    needs.extend((0..result.plan.clocks.len()).map(|clock| Need::Clock { clock }).filter(met_by_any));
    let fired = |rule: &Rule| result.summary.reasons.get(rule).is_some_and(|count| *count > 0);
    needs.extend(Rule::ALL.into_iter().filter(fired).map(|rule| Need::RuleFired { rule: rule.name() }));
    needs
}
