//! The options that are weighed.

use serde::Serialize;

use crate::modulator::{Dither, ModulatorConfig, ModulatorSettings, Modulus, ModulusRule, Structure};
use crate::plan::Plan;

/// One modulator that could be built.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct ModulatorOption {
    /// Structure, order, seeds, dither.
    pub settings: ModulatorSettings,
    /// How the modulus is found.
    pub modulus: ModulusRule,
}

/// An option that cannot work.
#[derive(Debug, Clone, Serialize)]
pub struct Refused {
    /// The option.
    pub option: ModulatorOption,
    /// Why.
    pub reason: String,
}

impl ModulatorOption {
    /// Returns a short name that tells options apart.
    #[must_use]
    pub fn name(&self) -> String {
        let settings = &self.settings;
        let modulus = match self.modulus {
            ModulusRule::Fixed(modulus) if modulus.get().is_power_of_two() => {
                format!("M = 2^{}", modulus.get().trailing_zeros())
            }
            ModulusRule::Fixed(modulus) => format!("M = {}", modulus.get()),
            ModulusRule::Largest(modulus) => format!("M up to {}", modulus.get()),
            ModulusRule::Step(step) => format!("M for a step of {step}"),
        };
        let dither = settings.dither.words();
        let seeds: Vec<String> = settings.seeds.iter().map(u64::to_string).collect();
        let seeds = if seeds.is_empty() { "seeds 0".to_owned() } else { format!("seeds {}", seeds.join(", ")) };
        format!("{} order {}, {modulus}, {seeds}, {dither}", settings.structure.word(), settings.order)
    }

    /// Returns whether two options are the same machine: seeds that are not given are 0.
    pub(super) fn runs_like(&self, other: &Self) -> bool {
        let seeds = |option: &Self| {
            let mut seeds = option.settings.seeds.clone();
            seeds.resize(usize::from(option.settings.order), 0);
            ModulatorSettings { seeds, ..option.settings.clone() }
        };
        self.modulus == other.modulus && seeds(self) == seeds(other)
    }

    /// Returns whether this is a MASH of the given order with an odd first seed and no dither.
    pub(super) fn is_plain_mash(&self, order: u8) -> bool {
        let settings = &self.settings;
        settings.structure == Structure::Mash
            && settings.order == order
            && settings.dither == Dither::None
            && self.has_odd_seed()
    }

    /// Returns whether the first seed is odd.
    pub(super) fn has_odd_seed(&self) -> bool {
        self.settings.seeds.first().is_some_and(|seed| seed % 2 == 1)
    }

    /// Returns the bits of all accumulators together, dither register included.
    #[must_use]
    pub fn accumulator_bits(&self) -> u64 {
        let largest = match self.modulus {
            ModulusRule::Fixed(modulus) | ModulusRule::Largest(modulus) => modulus.get(),
            ModulusRule::Step(_) => Modulus::LARGEST,
        };
        let width = u64::from(u64::BITS - (largest - 1).leading_zeros());
        let register = match self.settings.dither {
            Dither::None | Dither::White { .. } => 0,
            Dither::Register { register, .. } => u64::from(register),
        };
        u64::from(self.settings.order) * width + register
    }
}

/// Returns the plan with an option in place of its own modulator, or why the option cannot work.
pub(super) fn check(plan: &Plan, option: &ModulatorOption) -> Result<Plan, String> {
    option.settings.check().map_err(|error| error.to_string())?;
    let rule = option.modulus.working(option.settings.structure).map_err(|error| error.to_string())?;
    if let ModulusRule::Fixed(modulus) = rule {
        ModulatorConfig::new(&option.settings, modulus, 0, true).map_err(|error| error.to_string())?;
    }
    let mut candidate = plan.clone();
    candidate.modulator.settings = option.settings.clone();
    candidate.modulator.modulus = option.modulus;
    Ok(candidate)
}

/// Returns the options weighed when none are given: MASH orders 1–5 with even and odd first seed, the plan's own
/// dithers and alternatives, a prime modulus of the same width, error feedback.
#[must_use]
pub fn default_options(plan: &Plan) -> Vec<ModulatorOption> {
    let own = &plan.modulator;
    let base = ModulatorSettings {
        structure: Structure::Mash,
        order: 3,
        seeds: vec![1],
        dither: Dither::None,
        noise_transfer: None,
        runs_at_zero: own.settings.runs_at_zero,
    };
    let mut options = vec![ModulatorOption { settings: own.settings.clone(), modulus: own.modulus }];
    let mut add = |settings: ModulatorSettings| {
        let option = ModulatorOption { settings, modulus: own.modulus };
        if !options.iter().any(|present| present.runs_like(&option)) {
            options.push(option);
        }
    };
    for order in 1..=5u8 {
        add(ModulatorSettings { order, seeds: vec![0], ..base.clone() });
        add(ModulatorSettings { order, ..base.clone() });
    }
    let mut dithers: Vec<Dither> = plan.alternatives.dithers.clone();
    dithers.push(Dither::Register { stage: 1, register: 23, seed: 1, weight: 1 });
    dithers.push(Dither::Register { stage: 2, register: 23, seed: 1, weight: 1 });
    for dither in dithers.into_iter().filter(|dither| *dither != Dither::None) {
        for order in [2, 3] {
            add(ModulatorSettings { order, dither, ..base.clone() });
        }
    }
    if matches!(own.modulus, ModulusRule::Fixed(modulus) if modulus.get().is_power_of_two() && modulus.get() >= 8) {
        for order in [2, 3] {
            add(ModulatorSettings { structure: Structure::PrimeMash, order, ..base.clone() });
        }
    }
    for order in [2, 3] {
        add(ModulatorSettings { structure: Structure::ErrorFeedback, order, ..base.clone() });
    }
    add(ModulatorSettings { structure: Structure::OutputFed, order: 3, ..base });
    options
}
