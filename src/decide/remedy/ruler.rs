//! Positions of a whole raster in whole numbers: the fast counterpart of placing each channel in exact rationals.

use num_integer::Integer;

use crate::base::{Exact, ExactError};
use crate::modulator::word::step_modulus;
use crate::modulator::{ModulatorConfig, ModulusRule, Structure, output_range};
use crate::plan::{ChannelGroup, ChannelList, Plan};

/// Words and fractions of a raster at one PFD frequency and output divider.
///
/// Channel `i` has `V_i/F` VCO cycles a comparison with `V_i = start + i·step` and F whole numbers over one common
/// denominator; its word is `κ = N·M + K`, the nearest integer to `V_i·M/F`, ties to even.
#[derive(Debug, Clone)]
pub(super) struct Ruler {
    start: i128,
    step: i128,
    pfd: i128,
    modulus: i128,
    /// Smallest and largest κ with a legal word.
    legal: (i128, i128),
    /// N of K = 0 that is legal although other words of this N are not: the held modulator spans no range.
    held_legal: (i128, i128),
    /// Largest residue inside a guard that is the same for all channels.
    reach: i128,
}

/// Returns the least common multiple, or `Overflow`.
fn common(a: i128, b: i128) -> Result<i128, ExactError> {
    a.checked_div(a.gcd(&b)).and_then(|part| part.checked_mul(b)).ok_or(ExactError::Overflow)
}

/// Returns `value·scale`, a whole number.
fn scaled(value: &Exact, scale: i128) -> Result<i128, ExactError> {
    value.numerator().checked_mul(scale / value.denominator()).ok_or(ExactError::Overflow)
}

impl Ruler {
    /// Returns the ruler of a group, or `None` where only placing each channel will do: lists, moduli or limits that
    /// depend on the channel, structures whose range depends on the word.
    pub fn new(plan: &Plan, group: &ChannelGroup, output_divider: u64) -> Option<Self> {
        let ChannelList::Raster { first, spacing, .. } = &group.channels else { return None };
        let settings = &plan.modulator.settings;
        if settings.structure != Structure::Mash || plan.oscillator.tuning_range_v.is_some() {
            return None;
        }
        let pfd = plan.reference.pfd().ok()?;
        let modulus = match plan.modulator.modulus {
            ModulusRule::Fixed(modulus) => modulus,
            ModulusRule::Step(step) => step_modulus(step, pfd, output_divider).ok()?,
            ModulusRule::Largest(_) => return None,
        };
        if modulus.get() < 2 {
            return None;
        }
        let is_fixed = matches!(plan.modulator.modulus, ModulusRule::Fixed(_));
        let running = ModulatorConfig::new(settings, modulus, 1, is_fixed).ok()?;
        if running.mean_shift().sign() != 0 {
            return None;
        }
        let held = ModulatorConfig::new(settings, modulus, 0, is_fixed).ok()?;
        let by = Exact::from_integer(i128::from(output_divider));
        let start = first.hz().plus(&group.injection.hz()).and_then(|hz| hz.times(&by)).ok()?;
        let step = spacing.hz().times(&by).ok()?;
        let scale =
            [start.denominator(), step.denominator(), pfd.hz().denominator()].into_iter().try_fold(1, common).ok()?;
        let modulus = i128::from(modulus.get());
        let mut ruler = Self {
            start: scaled(&start, scale).ok()?,
            step: scaled(&step, scale).ok()?,
            pfd: scaled(&pfd.hz(), scale).ok()?,
            modulus,
            legal: (i128::MAX, i128::MIN),
            held_legal: (i128::MAX, i128::MIN),
            reach: 0,
        };
        // The largest product, V·M, must fit.
        let last = i128::from(group.channels.len()).checked_mul(ruler.step)?.checked_add(ruler.start)?;
        last.checked_mul(modulus)?.checked_mul(2)?;
        let steps = |frequency: crate::base::Frequency| {
            frequency.hz().times(&Exact::from_integer(modulus)).and_then(|cycles| cycles.over(&pfd.hz())).ok()
        };
        let lowest = -steps(plan.oscillator.range.0)?.negated().floor();
        let highest = steps(plan.oscillator.range.1)?.floor();
        let too_fast = plan.detector.maximum_frequency.is_some_and(|maximum| pfd > maximum);
        if !too_fast {
            let window = |config: &ModulatorConfig| {
                let (low, high) = output_range(config);
                let least = i128::from(plan.divider.minimum) - i128::from(low);
                let most =
                    plan.divider.maximum.map_or(i128::MAX / modulus / 4, |most| i128::from(most) - i128::from(high));
                (least, most)
            };
            let (least, most) = window(&running);
            ruler.legal = (lowest.max(least * modulus), highest.min(most * modulus + modulus - 1));
            let (least, most) = window(&held);
            ruler.held_legal = (lowest.max(least * modulus), highest.min(most * modulus));
        }
        Some(ruler)
    }

    /// Returns the ruler with the largest residue inside the guard.
    pub fn with_reach(self, reach: i128) -> Self {
        Self { reach, ..self }
    }

    /// Returns the largest residue inside the guard.
    pub fn reach(&self) -> i128 {
        self.reach
    }

    /// Returns κ = N·M + K of a channel.
    pub fn word(&self, index: u64) -> i128 {
        let twice = 2 * (self.start + i128::from(index) * self.step) * self.modulus;
        // Nearest integer to twice/(2·pfd), ties to even.
        let (floor, rest) = (twice.div_euclid(2 * self.pfd), twice.rem_euclid(2 * self.pfd));
        match rest.cmp(&self.pfd) {
            std::cmp::Ordering::Less => floor,
            std::cmp::Ordering::Greater => floor + 1,
            std::cmp::Ordering::Equal => floor + (floor & 1),
        }
    }

    /// Returns whether a word is legal.
    pub fn is_legal(&self, word: i128) -> bool {
        let (low, high) = if word % self.modulus == 0 { self.held_legal } else { self.legal };
        (low..=high).contains(&word)
    }

    /// Returns the smallest and largest legal word with K ≠ 0.
    pub fn legal(&self) -> (i128, i128) {
        self.legal
    }

    /// Returns the smallest and largest legal word with K = 0.
    pub fn held_legal(&self) -> (i128, i128) {
        self.held_legal
    }

    /// Returns the indices from which, and up to which, words can be legal, or `None` if none is.
    pub fn legal_indices(&self, count: u64) -> Option<(u64, u64)> {
        let low = self.legal.0.min(self.held_legal.0);
        let high = self.legal.1.max(self.held_legal.1);
        let first = first_index(count, |index| self.word(index) >= low)?;
        let after = first_index(count, |index| self.word(index) > high).unwrap_or(count);
        (after > first).then(|| (first, after - 1))
    }

    /// Returns numerator p of the nearest p/q and the residue `q·κ − p·M`; `None` where K = 0, p/q is not in lowest
    /// terms, or the word lies exactly on it: there is no such tone.
    pub fn near(&self, word: i128, q: u64) -> Option<(i128, i128)> {
        if word % self.modulus == 0 {
            return None;
        }
        let q = i128::from(q);
        let (mut p, mut residue) = (q * word).div_mod_floor(&self.modulus);
        if residue > self.modulus - residue {
            p += 1;
            residue -= self.modulus;
        }
        (residue != 0 && p.gcd(&q) == 1).then_some((p, residue))
    }

    /// Returns the modulus.
    pub fn modulus(&self) -> i128 {
        self.modulus
    }
}

/// Returns the first index in `0..count` from which a predicate holds; it must not turn back.
pub(super) fn first_index(count: u64, holds: impl Fn(u64) -> bool) -> Option<u64> {
    let (mut low, mut high) = (0, count);
    while low < high {
        let middle = low + (high - low) / 2;
        if holds(middle) {
            high = middle;
        } else {
            low = middle + 1;
        }
    }
    (low < count).then_some(low)
}
