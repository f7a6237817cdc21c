//! Which channels stay in memory: all, or the worst and an even sample.

use std::cmp::Ordering;

use crate::assess::{ChannelResult, Verdict};

/// Channels of the even sample at most.
const SAMPLED: u64 = 8_000;
/// Bad and marginal channels kept besides: twice what the page lists.
const WORST: usize = 4_000;

/// Which channels a result holds.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Keep {
    /// Every channel.
    All,
    /// The worst 4,000 bad and marginal channels, and an even sample of at most 8,000.
    WorstAndSample,
}

/// The channels kept so far.
#[derive(Debug)]
pub(super) struct Kept {
    /// Every so many channels belong to the sample.
    stride: u64,
    sample: Vec<ChannelResult>,
    worst: Vec<(Key, ChannelResult)>,
}

/// Rank of a channel, worst first: no legal word, verdict, margin of the worst tone, place.
#[derive(Debug, Clone, Copy)]
pub(super) struct Key {
    is_legal: bool,
    verdict: Verdict,
    margin_db: f64,
    place: (usize, u64),
}

/// A channel that may stay.
#[derive(Debug)]
pub(super) enum Candidate {
    /// One of the even sample.
    Sample(ChannelResult),
    /// A bad or marginal one beside the sample.
    Flagged(Key, ChannelResult),
}

impl Key {
    fn of(channel: &ChannelResult) -> Self {
        Self {
            is_legal: channel.legal,
            verdict: channel.verdict,
            margin_db: channel.worst_tone().and_then(|tone| tone.margin_db).unwrap_or(f64::INFINITY),
            place: (channel.group_index, channel.index),
        }
    }

    fn order(&self, other: &Self) -> Ordering {
        self.is_legal
            .cmp(&other.is_legal)
            .then(other.verdict.cmp(&self.verdict))
            .then(self.margin_db.total_cmp(&other.margin_db))
            .then(self.place.cmp(&other.place))
    }
}

impl Kept {
    /// Returns an empty store for a plan of `count` channels.
    pub(super) fn new(keep: Keep, count: u64) -> Self {
        let stride = match keep {
            Keep::All => 1,
            Keep::WorstAndSample => count.div_ceil(SAMPLED).max(1),
        };
        Self { stride, sample: Vec::new(), worst: Vec::new() }
    }

    /// Returns whether a channel at this place of the plan may be kept.
    pub(super) fn wants(&self, place: u64, channel: &ChannelResult) -> bool {
        place.is_multiple_of(self.stride) || channel.verdict != Verdict::Clear
    }

    /// Returns a wanted channel with its rank.
    pub(super) fn candidate(&self, place: u64, channel: ChannelResult) -> Candidate {
        if place.is_multiple_of(self.stride) {
            Candidate::Sample(channel)
        } else {
            Candidate::Flagged(Key::of(&channel), channel)
        }
    }

    /// Takes in wanted channels, in plan order.
    pub(super) fn add(&mut self, candidates: Vec<Candidate>) {
        for candidate in candidates {
            match candidate {
                Candidate::Sample(channel) => self.sample.push(channel),
                Candidate::Flagged(key, channel) => self.worst.push((key, channel)),
            }
        }
        if self.worst.len() > 4 * WORST {
            self.prune();
        }
    }

    fn prune(&mut self) {
        self.worst.sort_by(|a, b| a.0.order(&b.0));
        self.worst.truncate(WORST);
    }

    /// Returns whether channels were left out.
    pub(super) fn is_sample(&self) -> bool {
        self.stride > 1
    }

    /// Returns the channels in plan order.
    pub(super) fn into_channels(mut self) -> Vec<ChannelResult> {
        if self.stride == 1 {
            return self.sample;
        }
        self.prune();
        let mut channels = self.sample;
        channels.extend(self.worst.into_iter().map(|(_, channel)| channel));
        channels.sort_by_key(|channel| (channel.group_index, channel.index));
        channels
    }
}
