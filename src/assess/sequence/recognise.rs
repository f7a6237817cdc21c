//! Which of our modulators made a captured sequence.

use serde::Serialize;

use crate::modulator::{Dither, ModulatorConfig, ModulatorSettings, Modulus, ModulusRule, Structure, start};

/// Numerators tried for one modulus at most.
const MOST_NUMERATORS: u64 = 1 << 15;
/// Every modulus up to this one is tried when none is given.
const SCANNED_MODULUS: u64 = 4096;
/// Multiples of a reduced denominator that are tried.
const MOST_MULTIPLES: u64 = 64;
/// Outputs that a candidate makes before it is compared again.
const FIRST_STEP: usize = 32;

/// What a search may assume.
#[derive(Debug, Clone, Default)]
pub struct Search {
    /// The modulus, where it is known.
    pub modulus: Option<u64>,
    /// Seeds to try beside none and a first seed of 1.
    pub seeds: Vec<u64>,
    /// Dither to try beside none.
    pub dither: Option<Dither>,
    /// Coefficients of an error filter to try beside (1 − z⁻¹)^order.
    pub noise_transfer: Option<Vec<i64>>,
}

/// A modulator that makes the sequence, or the start of it.
#[derive(Debug, Clone, Serialize)]
pub struct Recognised {
    /// Settings.
    pub settings: ModulatorSettings,
    /// Modulus M as it was set (2^b for a prime-modulus MASH).
    pub modulus: u64,
    /// Modulus that the structure really divides by.
    pub working_modulus: u64,
    /// Numerator K.
    pub k: u64,
    /// Integer part that the captured values hold on top of the outputs.
    pub integer: i64,
    /// Outputs that agree from index 0 on.
    pub agreeing: usize,
}

/// What a search found.
#[derive(Debug, Clone, Serialize)]
pub struct Recognition {
    /// Whether some modulator makes every output.
    pub matching: bool,
    /// All that do, or the one that agrees longest; empty where none makes even the first outputs.
    pub found: Vec<Recognised>,
    /// First index at which the best one differs; `None` when it matches.
    pub first_difference: Option<usize>,
    /// Candidates tried.
    pub tried: u64,
}

/// Returns the modulators that make a captured sequence from its first output on.
///
/// The mean bounds K for every modulus: over L outputs of a shaped modulator it is known to within their range over L.
#[must_use]
pub fn recognise(captured: &[i64], search: &Search) -> Recognition {
    let mut hunt = Hunt { captured, best: Vec::new(), agreeing: 0, tried: 0 };
    if captured.is_empty() {
        return Recognition { matching: false, found: Vec::new(), first_difference: None, tried: 0 };
    }
    for modulus in moduli(captured, search) {
        hunt.modulus(modulus, search);
        // A multiple of a modulus that explains everything, with K multiplied as well, explains it no better.
        if hunt.agreeing == captured.len() {
            break;
        }
    }
    let matching = hunt.agreeing == captured.len();
    Recognition {
        matching,
        first_difference: (!matching).then_some(hunt.agreeing),
        found: hunt.best,
        tried: hunt.tried,
    }
}

/// Returns the moduli to try, likely ones first.
fn moduli(captured: &[i64], search: &Search) -> Vec<u64> {
    if let Some(modulus) = search.modulus {
        return vec![modulus];
    }
    let mut moduli = Vec::new();
    if let Some((period, sum)) = repeated(captured) {
        let period = period as u64;
        // gcd(Σ, T) is that of Σ modulo T.
        let reduced = period / num_integer::gcd(sum.unsigned_abs() % period, period);
        // The reduced denominator divides M, and M divides no less than what one factor of the period allows.
        moduli.extend((1..=MOST_MULTIPLES).map(|j| j * reduced).filter(|m| *m >= 2));
    }
    moduli.extend((1..=32).map(|bits| 1u64 << bits));
    moduli.extend((2..=SCANNED_MODULUS).filter(|m| !m.is_power_of_two()));
    moduli
}

/// Returns period and sum over it where the capture repeats at least twice.
pub(super) fn repeated(captured: &[i64]) -> Option<(usize, i64)> {
    // A transient of a few outputs may precede; the failure function of the rest finds the shortest period.
    let skipped = 8.min(captured.len() / 4);
    let run = &captured[skipped..];
    let mut failure = vec![0usize; run.len()];
    let mut matched = 0;
    for i in 1..run.len() {
        while matched > 0 && run[i] != run[matched] {
            matched = failure[matched - 1];
        }
        matched += usize::from(run[i] == run[matched]);
        failure[i] = matched;
    }
    let period = run.len() - failure.last().copied()?;
    (2 * period <= run.len()).then(|| (period, run[..period].iter().sum()))
}

struct Hunt<'a> {
    captured: &'a [i64],
    best: Vec<Recognised>,
    agreeing: usize,
    tried: u64,
}

impl Hunt<'_> {
    /// Tries every structure, order and seed at one modulus.
    fn modulus(&mut self, modulus: u64, search: &Search) {
        for structure in [Structure::Mash, Structure::OutputFed, Structure::PrimeMash, Structure::ErrorFeedback] {
            let Ok(fixed) = Modulus::new(modulus) else { continue };
            let Ok(ModulusRule::Fixed(working)) = ModulusRule::Fixed(fixed).working(structure) else { continue };
            let (lowest, highest) = structure.orders();
            for order in lowest.max(1)..=highest {
                let mut seeds = vec![Vec::new(), vec![1 % working.get()]];
                if !search.seeds.is_empty() {
                    seeds.insert(0, search.seeds.iter().take(usize::from(order)).copied().collect());
                }
                seeds.dedup();
                for seeds in seeds {
                    let own_filter = (structure == Structure::ErrorFeedback)
                        .then(|| search.noise_transfer.clone())
                        .flatten()
                        .filter(|filter| filter.len() == usize::from(order));
                    for noise_transfer in [Some(None), own_filter.map(Some)].into_iter().flatten() {
                        for dither in [Some(Dither::None), search.dither].into_iter().flatten() {
                            let settings = ModulatorSettings {
                                structure,
                                order,
                                seeds: seeds.clone(),
                                dither,
                                noise_transfer: noise_transfer.clone(),
                                runs_at_zero: false,
                            };
                            self.settings(&settings, (modulus, working));
                        }
                    }
                }
            }
        }
    }

    /// Tries every numerator that the mean allows.
    fn settings(&mut self, settings: &ModulatorSettings, (modulus, working): (u64, Modulus)) {
        let m = i128::from(working.get());
        let count = self.captured.len() as i128;
        let sum: i128 = self.captured.iter().map(|y| i128::from(*y)).sum();
        let (low, high) = self.captured.iter().fold((i64::MAX, i64::MIN), |(l, h), y| (l.min(*y), h.max(*y)));
        // |Σ(y − x)| stays within the reach of the outputs; twice that allows for a value that is off.
        let slack = 2 * (i128::from(high) - i128::from(low)) + 4;
        let (first, last) = ((sum - slack) * m / count - 1, (sum + slack) * m / count + 1);
        if last - first > i128::from(MOST_NUMERATORS) {
            return;
        }
        for word in first..=last {
            let (integer, k) = (word.div_euclid(m), word.rem_euclid(m));
            let (Ok(integer), Ok(k)) = (i64::try_from(integer), u64::try_from(k)) else { continue };
            let Ok(config) = ModulatorConfig::new(settings, working, k, true) else { continue };
            self.tried += 1;
            let agreeing = self.agreement(&config, integer);
            let found = || Recognised {
                settings: settings.clone(),
                modulus,
                working_modulus: working.get(),
                k,
                integer,
                agreeing,
            };
            match agreeing.cmp(&self.agreeing) {
                std::cmp::Ordering::Greater => {
                    self.agreeing = agreeing;
                    self.best = vec![found()];
                }
                std::cmp::Ordering::Equal if agreeing == self.captured.len() => self.best.push(found()),
                _ => {}
            }
        }
    }

    /// Returns how many outputs agree from index 0 on.
    fn agreement(&self, config: &ModulatorConfig, integer: i64) -> usize {
        let mut modulator = start(config);
        let mut buffer = [0; 4096];
        let (mut done, mut step) = (0, FIRST_STEP);
        while done < self.captured.len() {
            let size = step.min(self.captured.len() - done);
            modulator.fill(&mut buffer[..size]);
            let expected = buffer[..size].iter().zip(&self.captured[done..]);
            if let Some(at) = expected.clone().position(|(y, seen)| i64::from(*y) + integer != *seen) {
                return done + at;
            }
            done += size;
            step = (4 * step).min(buffer.len());
        }
        done
    }
}
