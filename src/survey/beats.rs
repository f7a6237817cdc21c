//! Several plans on one board: where the channels of one synthesizer beat with those of another.

use rayon::prelude::*;
use serde::Serialize;

use crate::assess::{AssessError, ChannelResult, place};
use crate::base::{Exact, ExactError, Frequency};
use crate::plan::Plan;

/// Highest multiple of either frequency that is looked at.
const MOST_MULTIPLES: i128 = 3;

/// Where a frequency is taken.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize)]
#[serde(rename_all = "lowercase")]
pub enum Node {
    /// At the VCO.
    Vco,
    /// At the output.
    Output,
}

/// The nearest beat of one channel with another synthesizer; its level is unknown.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct Beat {
    /// Group index of the channel.
    pub group_index: usize,
    /// Index of the channel.
    pub index: u64,
    /// The channel.
    #[serde(rename = "channel_exact")]
    pub channel: Frequency,
    /// Title of the other plan.
    pub neighbour: String,
    /// Group of the other plan.
    pub neighbour_group: String,
    /// The other plan's channel that comes nearest.
    #[serde(rename = "neighbour_channel_exact")]
    pub neighbour_channel: Frequency,
    /// Where both are taken: this synthesizer's node, the other's node.
    pub nodes: (Node, Node),
    /// Multiples: `offset = |m·f_neighbour − n·f_own|`, n first.
    pub multiples: (i128, i128),
    /// Offset of the beat, exact; 0 for frequencies that are nominally equal and wander apart with their references.
    #[serde(rename = "offset_exact")]
    pub offset: Frequency,
    /// Whether the offset is inside the channel's loop edge, inclusive.
    pub inside_loop: bool,
    /// Channels of the other plan with any beat inside the loop edge.
    pub neighbours_inside: u64,
}

/// The legal frequencies of a plan at one node, rising, each with its channel.
struct Comb {
    node: Node,
    teeth: Vec<(Exact, usize)>,
}

/// A plan's channels as seen from another synthesizer.
struct Neighbour<'p> {
    plan: &'p Plan,
    channels: Vec<(usize, Frequency)>,
    combs: Vec<Comb>,
}

/// Returns the nearest beat of every legal channel with every other plan, in plan order.
///
/// # Errors
/// `AssessError` where a channel of another plan cannot be placed or exact arithmetic runs out of bits.
pub fn beats(channels: &[ChannelResult], own: &Plan, neighbours: &[Plan]) -> Result<Vec<Beat>, AssessError> {
    let neighbours = neighbours.iter().map(neighbour).collect::<Result<Vec<_>, _>>()?;
    let found = channels
        .par_iter()
        .filter(|channel| channel.legal)
        .map(|channel| {
            let settings = &own.groups[channel.group_index];
            let placement = place(own, settings, channel.channel)?;
            let nodes = [(Node::Vco, placement.vco), (Node::Output, placement.achieved)];
            neighbours
                .iter()
                .filter_map(|neighbour| nearest(channel, &nodes, neighbour).transpose())
                .collect::<Result<Vec<Beat>, ExactError>>()
                .map_err(|source| AssessError::Exact { channel: channel.channel, source })
        })
        .collect::<Result<Vec<Vec<Beat>>, AssessError>>()?;
    Ok(found.into_iter().flatten().collect())
}

fn neighbour(plan: &Plan) -> Result<Neighbour<'_>, AssessError> {
    let mut channels = Vec::new();
    let (mut vco, mut output) = (Vec::new(), Vec::new());
    for (group_index, group) in plan.groups.iter().enumerate() {
        for index in 0..group.channels.len() {
            let Some(channel) = group.channels.get(index) else { continue };
            let placement = place(plan, group, channel)?;
            if placement.illegal.is_empty() {
                vco.push((placement.vco.hz(), channels.len()));
                output.push((placement.achieved.hz(), channels.len()));
                channels.push((group_index, channel));
            }
        }
    }
    let combs = [(Node::Vco, vco), (Node::Output, output)]
        .into_iter()
        .map(|(node, mut teeth)| {
            teeth.sort();
            Comb { node, teeth }
        })
        .collect();
    Ok(Neighbour { plan, channels, combs })
}

/// Offset, nodes, multiples and the other plan's channel of one beat.
type Found = (Exact, (Node, Node), (i128, i128), usize);

fn nearest(
    channel: &ChannelResult,
    nodes: &[(Node, Frequency)],
    neighbour: &Neighbour,
) -> Result<Option<Beat>, ExactError> {
    let edge_hz = channel.loop_edge_hz.unwrap_or(0.0);
    let mut best: Option<Found> = None;
    let mut inside = Vec::new();
    for (own_node, own) in nodes {
        for comb in &neighbour.combs {
            for n in 1..=MOST_MULTIPLES {
                let target = own.hz().times(&Exact::from_integer(n))?;
                for m in (1..=MOST_MULTIPLES).filter(|m| num_integer::gcd(*m, n) == 1) {
                    let by = Exact::from_integer(m);
                    let wanted = target.over(&by)?;
                    let after = comb.teeth.partition_point(|(tooth, _)| *tooth < wanted);
                    let offset = |i: usize| -> Result<Exact, ExactError> {
                        Ok(comb.teeth[i].0.times(&by)?.minus(&target)?.abs())
                    };
                    for i in [after.checked_sub(1), Some(after)].into_iter().flatten().filter(|i| *i < comb.teeth.len())
                    {
                        let here = offset(i)?;
                        if best.as_ref().is_none_or(|(known, ..)| here < *known) {
                            best = Some((here, (*own_node, comb.node), (n, m), comb.teeth[i].1));
                        }
                    }
                    // Teeth rise, so those inside the edge stand side by side.
                    let distance_hz =
                        |tooth: &Exact| tooth.times(&by).and_then(|hz| hz.minus(&target)).map(|d| d.to_f64());
                    let first = comb.teeth.partition_point(|(tooth, _)| distance_hz(tooth).is_ok_and(|d| d < -edge_hz));
                    let last = comb.teeth.partition_point(|(tooth, _)| distance_hz(tooth).is_ok_and(|d| d <= edge_hz));
                    inside.extend(comb.teeth[first..last.max(first)].iter().map(|(_, place)| *place));
                }
            }
        }
    }
    inside.sort_unstable();
    inside.dedup();
    Ok(best.map(|(offset, nodes, multiples, place)| {
        let (group, neighbour_channel) = neighbour.channels[place];
        Beat {
            group_index: channel.group_index,
            index: channel.index,
            channel: channel.channel,
            neighbour: neighbour.plan.identity.title.clone(),
            neighbour_group: neighbour.plan.groups[group].name.clone(),
            neighbour_channel,
            nodes,
            multiples,
            offset: Frequency::from_hz(offset),
            inside_loop: offset.to_f64() <= edge_hz,
            neighbours_inside: inside.len() as u64,
        }
    }))
}
