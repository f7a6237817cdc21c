//! The smallest set of settings that serves every channel: minimum hitting set, exact, with a certificate.

use std::collections::BTreeMap;

use serde::Serialize;

/// Settings a set finder takes at most: they are bits of a word.
pub const MOST_SETTINGS: usize = 64;

/// How it is known that no smaller set does.
#[derive(Debug, Clone, PartialEq, Eq, Serialize)]
#[serde(tag = "by", rename_all = "kebab-case")]
pub enum Proof {
    /// These channels share no setting: each needs a member of its own, and they are as many as the set has.
    Apart {
        /// Positions of the channels.
        channels: Vec<usize>,
    },
    /// Every smaller set was refuted by a search that left out none.
    Search {
        /// Branches looked at.
        branches: u64,
    },
}

/// The smallest set of settings.
#[derive(Debug, Clone, PartialEq, Eq, Serialize)]
pub struct Cover {
    /// Members, as positions in the list of settings, rising.
    pub members: Vec<usize>,
    /// For every member a channel that no other member serves.
    pub forced_by: Vec<usize>,
    /// Why no smaller set does.
    pub proof: Proof,
    /// Channels that no setting serves: they stay bad with any set, so their number is a lower bound.
    pub beyond: Vec<usize>,
}

/// Returns the smallest set of settings so that every channel that can be served is served by a member.
///
/// `serves[i]` holds bit s when setting s serves channel i. Among sets of equal size the one with the smaller sum of
/// `cost` is taken, then the one with the earlier members.
///
/// # Examples
/// Two channels that share no setting need two; a third that both serve adds none:
/// ```
/// use thornmap::decide::remedy::{Proof, smallest_cover};
/// let cover = smallest_cover(&[0b001, 0b110, 0b011], &[1.0, 1.0, 1.0]);
/// assert_eq!(cover.members, [0, 1]);
/// assert_eq!(cover.proof, Proof::Apart { channels: vec![0, 1] });
/// ```
#[must_use]
pub fn smallest_cover(serves: &[u64], cost: &[f64]) -> Cover {
    let beyond: Vec<usize> = (0..serves.len()).filter(|i| serves[*i] == 0).collect();
    // One channel for each distinct need; a need that holds another is met whenever the other is.
    let mut first: BTreeMap<u64, usize> = BTreeMap::new();
    for (i, need) in serves.iter().enumerate().filter(|(_, need)| **need != 0) {
        first.entry(*need).or_insert(i);
    }
    let all: Vec<u64> = first.keys().copied().collect();
    let mut needs: Vec<u64> =
        all.iter().copied().filter(|need| !all.iter().any(|other| other != need && other & need == *other)).collect();
    needs.sort_by_key(|need| (need.count_ones(), *need));
    let apart = disjoint(&needs);
    let mut search = Search { needs: &needs, cost, best: None, branches: 0 };
    // Deepening: a set of the smallest size is found before any larger one is tried.
    let mut size = apart.len();
    while search.best.is_none() && size <= MOST_SETTINGS {
        search.descend(0, size);
        size += 1;
    }
    let members = search.best.unwrap_or(0);
    let proof = if apart.len() == members.count_ones() as usize {
        Proof::Apart { channels: apart.iter().filter_map(|need| first.get(need).copied()).collect() }
    } else {
        Proof::Search { branches: search.branches }
    };
    let members: Vec<usize> = (0..MOST_SETTINGS).filter(|s| members >> s & 1 == 1).collect();
    let set = members.iter().fold(0u64, |set, s| set | 1 << s);
    let forced_by = members.iter().filter_map(|s| serves.iter().position(|need| need & set == 1 << s)).collect();
    Cover { members, forced_by, proof, beyond }
}

/// Returns needs that share no setting, taken greedily, narrow ones first.
fn disjoint(needs: &[u64]) -> Vec<u64> {
    let mut taken = 0;
    needs
        .iter()
        .copied()
        .filter(|need| {
            let is_apart = need & taken == 0;
            if is_apart {
                taken |= need;
            }
            is_apart
        })
        .collect()
}

struct Search<'a> {
    needs: &'a [u64],
    cost: &'a [f64],
    best: Option<u64>,
    branches: u64,
}

impl Search<'_> {
    /// Tries every set of at most `left` more members on top of `chosen`.
    fn descend(&mut self, chosen: u64, left: usize) {
        self.branches += 1;
        let open: Vec<u64> = self.needs.iter().copied().filter(|need| need & chosen == 0).collect();
        let Some(need) = open.iter().copied().min_by_key(|need| need.count_ones()) else {
            if self.best.is_none_or(|best| self.is_better(chosen, best)) {
                self.best = Some(chosen);
            }
            return;
        };
        if disjoint(&open).len() > left {
            return;
        }
        // One of this need's settings must be a member: no set is left out.
        let mut rest = need;
        while rest != 0 {
            let setting = rest & rest.wrapping_neg();
            self.descend(chosen | setting, left - 1);
            rest ^= setting;
        }
    }

    fn is_better(&self, a: u64, b: u64) -> bool {
        let sum = |set: u64| -> f64 { (0..self.cost.len()).filter(|s| set >> s & 1 == 1).map(|s| self.cost[s]).sum() };
        match a.count_ones().cmp(&b.count_ones()) {
            std::cmp::Ordering::Equal => {
                sum(a).total_cmp(&sum(b)).then(a.reverse_bits().cmp(&b.reverse_bits()).reverse()).is_lt()
            }
            order => order.is_lt(),
        }
    }
}

/// Returns for every channel the setting to use, with the fewest changes from one channel to the next; `None` for a
/// channel that no member serves.
///
/// Each run is made as long as possible; that no map has fewer changes follows by exchange. Within a run the member
/// with the smallest cost is taken.
#[must_use]
pub fn fewest_switches(serves: &[u64], members: &[usize], cost: &[f64]) -> Vec<Option<usize>> {
    let set = members.iter().fold(0u64, |set, s| set | 1 << s);
    let mut map = vec![None; serves.len()];
    let mut start = 0;
    let mut common = set;
    for i in 0..=serves.len() {
        let here = serves.get(i).map(|need| need & set);
        // A channel that no member serves interrupts nothing: it has no setting to change to.
        if here == Some(0) {
            continue;
        }
        let next = here.map_or(0, |here| common & here);
        if next == 0 {
            let choice = (0..MOST_SETTINGS)
                .filter(|s| common >> s & 1 == 1)
                .min_by(|a, b| cost.get(*a).unwrap_or(&0.0).total_cmp(cost.get(*b).unwrap_or(&0.0)));
            for (place, need) in map[start..i].iter_mut().zip(&serves[start..i]) {
                *place = if need & set == 0 { None } else { choice };
            }
            start = i;
            common = here.unwrap_or(0);
        } else {
            common = next;
        }
    }
    map
}

/// Returns the number of changes of setting along a map.
#[must_use]
pub fn switches(map: &[Option<usize>]) -> usize {
    let used: Vec<usize> = map.iter().copied().flatten().collect();
    used.windows(2).filter(|pair| pair[0] != pair[1]).count()
}
