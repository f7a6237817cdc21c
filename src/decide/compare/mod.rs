//! Modulators weighed on one plan: structures × orders × dithers × seeds × moduli, ranked with reasons.

mod gains;
mod measure;
mod options;
mod rank;

pub use gains::{OrderGain, order_gains};
pub use measure::{Figures, Sample};
pub use options::{ModulatorOption, Refused, default_options};
pub use rank::{RANKING_RULE, reason_for};

use serde::Serialize;

use crate::assess::AssessError;
use crate::base::Assumption;
use crate::plan::Plan;

use measure::measure;
use options::check;
use rank::{order_of, recommendation};

/// One option in its place.
#[derive(Debug, Clone, Serialize)]
pub struct Ranked {
    /// Place from 1.
    pub place: usize,
    /// The option.
    pub option: ModulatorOption,
    /// What it does on the plan.
    pub figures: Figures,
    /// Why it stands here, in one sentence.
    pub reason: String,
}

/// The comparison of a plan.
#[derive(Debug, Clone, Serialize)]
pub struct Comparison {
    /// Which channels were surveyed.
    pub sample: Sample,
    /// Options, best first.
    pub ranked: Vec<Ranked>,
    /// Options that cannot work, with the reason.
    pub refused: Vec<Refused>,
    /// What orders gain against pump mismatch and what they cost, from computed curves.
    pub order_gains: Vec<OrderGain>,
    /// What to take, and what would change that: paragraphs, the choice first.
    pub recommendation: Vec<String>,
    /// Every input the figures rest on.
    pub assumptions: Vec<Assumption>,
}

/// Compares options on a plan; `done` is called after each option.
///
/// # Errors
/// `AssessError` when the plan itself cannot be surveyed.
pub fn compare(
    plan: &Plan,
    options: &[ModulatorOption],
    largest_sample: u64,
    done: &(dyn Fn() + Sync),
) -> Result<Comparison, AssessError> {
    let (sampled, sample) = Sample::of(plan, largest_sample);
    // The plan's own modulator must work: its refusal is the user's answer.
    crate::assess::Setup::new(plan)?;
    let mut measured: Vec<(ModulatorOption, Figures)> = Vec::new();
    let mut refused = Vec::new();
    for option in options {
        match check(&sampled, option) {
            Ok(candidate) => match measure(&candidate) {
                Ok(figures) => measured.push((option.clone(), figures)),
                Err(error) => refused.push(Refused { option: option.clone(), reason: error.to_string() }),
            },
            Err(reason) => refused.push(Refused { option: option.clone(), reason }),
        }
        done();
    }
    measured.sort_by(|a, b| {
        order_of(&a.1, &b.1)
            .then_with(|| a.0.accumulator_bits().cmp(&b.0.accumulator_bits()))
            .then_with(|| b.0.has_odd_seed().cmp(&a.0.has_odd_seed()))
            .then_with(|| a.0.name().cmp(&b.0.name()))
    });
    let ranked: Vec<Ranked> = measured
        .iter()
        .enumerate()
        .map(|(i, (option, figures))| Ranked {
            place: i + 1,
            option: option.clone(),
            figures: figures.clone(),
            reason: reason_for(figures, measured.get(i + 1).map(|(_, next)| next)),
        })
        .collect();
    let order_gains = order_gains(plan);
    let setup = crate::assess::Setup::new(plan)?;
    Ok(Comparison {
        recommendation: recommendation(plan, &ranked, &order_gains),
        sample,
        ranked,
        refused,
        order_gains,
        assumptions: setup.assumptions(),
    })
}
