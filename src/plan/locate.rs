//! Finding the group and place of a channel frequency.

use crate::base::Frequency;

use super::checked::{ChannelList, Plan};

impl Plan {
    /// Returns the group that a channel frequency belongs to, and its index there when it is on the raster or list:
    /// the first group whose range (smallest to largest channel, inclusive) holds it, or the named group.
    ///
    /// `None` when no group, or not the named one, holds the frequency.
    #[must_use]
    pub fn locate(&self, channel: Frequency, group: Option<&str>) -> Option<(usize, Option<u64>)> {
        self.groups
            .iter()
            .enumerate()
            .filter(|(_, candidate)| group.is_none_or(|name| candidate.name == name))
            .find_map(|(index, candidate)| candidate.channels.place_of(channel).map(|place| (index, place)))
    }
}

impl ChannelList {
    /// Returns the smallest and largest channel; `None` for an empty list or beyond 127 bits.
    #[must_use]
    pub fn range(&self) -> Option<(Frequency, Frequency)> {
        match self {
            Self::Raster { first, count, .. } => Some((*first, self.get(count.checked_sub(1)?)?)),
            Self::List(list) => Some((*list.iter().min()?, *list.iter().max()?)),
        }
    }

    /// Returns `None` outside the list's range, else the index of the frequency where it is a member.
    fn place_of(&self, channel: Frequency) -> Option<Option<u64>> {
        match self {
            Self::Raster { first, spacing, .. } => {
                let (low, high) = self.range()?;
                if channel < low || channel > high {
                    return None;
                }
                let steps = channel.hz().minus(&first.hz()).ok()?.over(&spacing.hz()).ok();
                let index =
                    steps.filter(crate::base::Exact::is_integer).and_then(|s| u64::try_from(s.numerator()).ok());
                // One channel may have no spacing at all.
                Some(index.or((channel == *first).then_some(0)))
            }
            Self::List(list) => {
                let (low, high) = self.range()?;
                if channel < low || channel > high {
                    return None;
                }
                Some(list.iter().position(|member| *member == channel).and_then(|i| u64::try_from(i).ok()))
            }
        }
    }
}
