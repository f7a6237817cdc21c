//! The smallest number of sets that together hold every need: reductions that lose nothing, then branch and bound.

use std::collections::BTreeMap;

/// A cover and what is known of its size.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Cover {
    /// Chosen sets, rising.
    pub chosen: Vec<usize>,
    /// No cover has fewer sets than this.
    pub lower_bound: usize,
    /// Needs that no set holds, rising.
    pub not_coverable: Vec<usize>,
}

impl Cover {
    /// Returns whether no shorter cover exists.
    #[must_use]
    pub fn is_proven_shortest(&self) -> bool {
        self.chosen.len() == self.lower_bound
    }
}

/// A set of small integers.
#[derive(Debug, Clone, PartialEq, Eq, PartialOrd, Ord)]
struct Bits(Vec<u64>);

impl Bits {
    fn empty(size: usize) -> Self {
        Self(vec![0; size.div_ceil(64)])
    }

    fn insert(&mut self, member: usize) {
        self.0[member / 64] |= 1 << (member % 64);
    }

    fn holds(&self, member: usize) -> bool {
        self.0[member / 64] >> (member % 64) & 1 == 1
    }

    fn is_empty(&self) -> bool {
        self.0.iter().all(|word| *word == 0)
    }

    fn count(&self) -> usize {
        self.0.iter().map(|word| word.count_ones() as usize).sum()
    }

    fn and(&self, other: &Self) -> Self {
        Self(self.0.iter().zip(&other.0).map(|(a, b)| a & b).collect())
    }

    fn without(&self, other: &Self) -> Self {
        Self(self.0.iter().zip(&other.0).map(|(a, b)| a & !b).collect())
    }

    fn with(&self, other: &Self) -> Self {
        Self(self.0.iter().zip(&other.0).map(|(a, b)| a | b).collect())
    }

    fn meets(&self, other: &Self) -> bool {
        self.0.iter().zip(&other.0).any(|(a, b)| a & b != 0)
    }

    fn is_inside(&self, other: &Self) -> bool {
        self.0.iter().zip(&other.0).all(|(a, b)| a & !b == 0)
    }

    fn members(&self) -> impl Iterator<Item = usize> + '_ {
        self.0.iter().enumerate().flat_map(|(place, word)| {
            let mut left = *word;
            std::iter::from_fn(move || {
                let bit = (left != 0).then(|| left.trailing_zeros())?;
                left &= left - 1;
                Some(place * 64 + bit as usize)
            })
        })
    }
}

/// A set with its place in the caller's list.
type Candidate = (usize, Bits);

/// Returns a cover of the needs 0 … `needs` − 1 by as few of `sets` as can be found: the shortest one unless the search
/// is cut off after `most_steps` steps (a branch takes one step for each set of its part). Of equal sets the first in the list is taken, so that the list's order is the
/// caller's preference.
///
/// # Panics
/// When a set names a need that is not below `needs`: a broken contract of the caller.
///
/// # Examples
/// Greedy takes the set of four first and ends with three; two are enough:
/// ```
/// use thornmap::decide::measure_list::shortest_cover;
/// let sets = [vec![0, 1, 2, 3], vec![0, 1, 4], vec![2, 3, 5]];
/// let cover = shortest_cover(&sets, 6, 1000);
/// assert_eq!(cover.chosen, [1, 2]);
/// assert!(cover.is_proven_shortest());
/// ```
#[must_use]
pub fn shortest_cover(sets: &[Vec<usize>], needs: usize, most_steps: u64) -> Cover {
    let mut candidates: Vec<Candidate> = Vec::new();
    let mut union = Bits::empty(needs);
    let mut seen: BTreeMap<Bits, usize> = BTreeMap::new();
    for (place, set) in sets.iter().enumerate() {
        let mut bits = Bits::empty(needs);
        for need in set {
            assert!(*need < needs, "need {need} of set {place} is not below {needs}");
            bits.insert(*need);
        }
        union = union.with(&bits);
        if !bits.is_empty() && !seen.contains_key(&bits) {
            seen.insert(bits.clone(), place);
            candidates.push((place, bits));
        }
    }
    let not_coverable = (0..needs).filter(|need| !union.holds(*need)).collect();
    let (mut chosen, candidates, open) = reduced(candidates, union);
    let mut lower_bound = chosen.len();
    let mut steps = most_steps;
    for part in components(candidates, &open) {
        let mut search = Search::new(part, &mut steps);
        let (sets, bound) = search.run();
        lower_bound += bound;
        chosen.extend(sets);
    }
    chosen.sort_unstable();
    Cover { chosen, lower_bound, not_coverable }
}

/// Takes sets that alone hold a need, drops sets inside other sets, and drops needs that come with another need, until
/// nothing changes; returns what was taken, what is left, and the needs that are left.
fn reduced(mut candidates: Vec<Candidate>, mut open: Bits) -> (Vec<usize>, Vec<Candidate>, Bits) {
    let mut taken = Vec::new();
    loop {
        let before = (candidates.len(), open.count());
        candidates = candidates.into_iter().map(|(place, bits)| (place, bits.and(&open))).collect();
        candidates.retain(|(_, bits)| !bits.is_empty());
        let kept: Vec<Candidate> = candidates
            .iter()
            .enumerate()
            .filter(|(i, (_, bits))| {
                // Of equals the first stays.
                let beats = |j: usize, other: &Bits| bits.is_inside(other) && (bits != other || j < *i);
                !candidates.iter().enumerate().any(|(j, (_, other))| j != *i && beats(j, other))
            })
            .map(|(_, candidate)| candidate.clone())
            .collect();
        candidates = kept;
        let holders = holders(&candidates, &open);
        let alone: Vec<usize> = holders
            .iter()
            .filter(|(_, holders)| holders.count() == 1)
            .filter_map(|(_, h)| h.members().next())
            .collect();
        for place in alone {
            if candidates[place].1.meets(&open) {
                taken.push(candidates[place].0);
                open = open.without(&candidates[place].1);
            }
        }
        // Whoever meets a need with fewer holders meets one whose holders are all among them as well: drop the wider.
        let left: Vec<&(usize, Bits)> = holders.iter().filter(|(need, _)| open.holds(*need)).collect();
        let mut implied = Bits::empty(open.0.len() * 64);
        for (i, (need, wide)) in left.iter().enumerate() {
            let follows = |j: usize, narrow: &Bits| narrow.is_inside(wide) && (narrow != wide || j < i);
            if left.iter().enumerate().any(|(j, (_, narrow))| j != i && follows(j, narrow)) {
                implied.insert(*need);
            }
        }
        open = open.without(&implied);
        if (candidates.len(), open.count()) == before {
            return (taken, candidates, open);
        }
    }
}

/// Returns, for each open need, the places in `candidates` that hold it.
fn holders(candidates: &[Candidate], open: &Bits) -> Vec<(usize, Bits)> {
    open.members()
        .map(|need| {
            let mut holders = Bits::empty(candidates.len());
            for (place, (_, bits)) in candidates.iter().enumerate() {
                if bits.holds(need) {
                    holders.insert(place);
                }
            }
            (need, holders)
        })
        .collect()
}

/// Returns the sets in parts that share no need: each part is searched on its own.
fn components(mut candidates: Vec<Candidate>, open: &Bits) -> Vec<Vec<Candidate>> {
    let mut parts = Vec::new();
    let mut left = open.clone();
    loop {
        let next = left.members().next();
        let Some(need) = next else { return parts };
        let mut needs = Bits::empty(left.0.len() * 64);
        needs.insert(need);
        let mut part: Vec<Candidate> = Vec::new();
        loop {
            let (joining, rest): (Vec<_>, Vec<_>) = candidates.into_iter().partition(|(_, bits)| bits.meets(&needs));
            candidates = rest;
            if joining.is_empty() {
                break;
            }
            for (_, bits) in &joining {
                needs = needs.with(bits);
            }
            part.extend(joining);
        }
        part.sort();
        part.sort_by_key(|(place, _)| *place);
        left = left.without(&needs);
        parts.push(part);
    }
}

/// Branch and bound over one part.
struct Search<'a> {
    candidates: Vec<Candidate>,
    needs: Bits,
    best: Vec<usize>,
    steps: &'a mut u64,
    cut_off: bool,
}

impl<'a> Search<'a> {
    fn new(candidates: Vec<Candidate>, steps: &'a mut u64) -> Self {
        let size = candidates.first().map_or(0, |(_, bits)| bits.0.len() * 64);
        let needs = candidates.iter().fold(Bits::empty(size), |needs, (_, bits)| needs.with(bits));
        let best = greedy(&candidates, &needs);
        Self { candidates, needs, best, steps, cut_off: false }
    }

    /// Returns the caller's places of the best cover, and a lower bound that equals its size when the search finished.
    fn run(&mut self) -> (Vec<usize>, usize) {
        let at_root = at_least(&self.candidates, &self.needs);
        let open = self.needs.clone();
        if at_root < self.best.len() {
            self.branch(&open, &mut Vec::new());
        }
        let bound = if self.cut_off { at_root } else { self.best.len() };
        (self.best.iter().map(|place| self.candidates[*place].0).collect(), bound)
    }

    fn branch(&mut self, open: &Bits, taken: &mut Vec<usize>) {
        if open.is_empty() {
            if taken.len() < self.best.len() {
                self.best.clone_from(taken);
            }
            return;
        }
        if taken.len() + at_least(&self.candidates, open) >= self.best.len() {
            return;
        }
        let Some(left) = self.steps.checked_sub(self.candidates.len() as u64) else {
            self.cut_off = true;
            return;
        };
        *self.steps = left;
        // The need with the fewest holders gives the fewest branches; the fullest set first.
        let Some((_, holders)) =
            holders(&self.candidates, open).into_iter().min_by_key(|(need, holders)| (holders.count(), *need))
        else {
            return;
        };
        let mut places: Vec<usize> = holders.members().collect();
        places.sort_by_key(|place| (std::cmp::Reverse(self.candidates[*place].1.and(open).count()), *place));
        for place in places {
            let rest = open.without(&self.candidates[place].1);
            taken.push(place);
            self.branch(&rest, taken);
            taken.pop();
        }
    }
}

/// Returns a cover that takes the fullest set again and again, as places in `candidates`.
fn greedy(candidates: &[Candidate], needs: &Bits) -> Vec<usize> {
    let mut open = needs.clone();
    let mut taken = Vec::new();
    while !open.is_empty() {
        let fullest = (0..candidates.len())
            .max_by_key(|place| (candidates[*place].1.and(&open).count(), std::cmp::Reverse(*place)));
        let Some(place) = fullest.filter(|place| candidates[*place].1.meets(&open)) else { break };
        open = open.without(&candidates[place].1);
        taken.push(place);
    }
    taken
}

/// Returns a number of sets below which no cover of the open needs exists.
fn at_least(candidates: &[Candidate], open: &Bits) -> usize {
    independent(candidates, open).max(by_shares(candidates, open))
}

/// Returns the sum over the needs of one over the size of the largest set that holds them, rounded up: any set pays at
/// most one for its needs, so that a cover has at least so many sets.
fn by_shares(candidates: &[Candidate], open: &Bits) -> usize {
    let mut largest = vec![0usize; open.0.len() * 64];
    for (_, bits) in candidates {
        let inside = bits.and(open);
        let size = inside.count();
        for need in inside.members() {
            largest[need] = largest[need].max(size);
        }
    }
    let sum: f64 = largest.iter().filter(|size| **size > 0).map(|size| 1.0 / *size as f64).sum();
    #[allow(clippy::cast_possible_truncation, clippy::cast_sign_loss, reason = "at most the number of needs")]
    // The guard keeps rounding from lifting a sum that is exactly whole.
    let whole = (sum - 1e-9).ceil().max(0.0) as usize;
    whole
}

/// Returns how many needs can be picked so that no set holds two of them: every cover has at least so many sets.
fn independent(candidates: &[Candidate], open: &Bits) -> usize {
    let mut by_holders = holders(candidates, open);
    by_holders.sort_by_key(|(need, holders)| (holders.count(), *need));
    let mut used = Bits::empty(candidates.len());
    let mut picked = 0;
    for (_, holders) in by_holders {
        if !holders.meets(&used) {
            used = used.with(&holders);
            picked += 1;
        }
    }
    picked
}
