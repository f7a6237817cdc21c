//! First seeds tried one after the other.

use num_bigint::BigUint;
use rayon::prelude::*;
use serde::{Serialize, Serializer};

use crate::assess::LinesError;
use crate::modulator::{ModulatorConfig, ModulatorSettings, Modulus};
use crate::spectrum::FftStage;

use super::facts::{SequenceLine, sequence_facts};

/// One first seed tried.
#[derive(Debug, Clone, Serialize)]
pub struct SeedTried {
    /// The first seed; the others are those of the settings.
    pub seed: u64,
    /// Length of the sequence; `None` where it is not known.
    #[serde(serialize_with = "big")]
    pub period: Option<BigUint>,
    /// Strongest line up to the edge; `None` where the period is too long for exact lines or none lies there.
    pub worst_line: Option<SequenceLine>,
}

fn big<S: Serializer>(value: &Option<BigUint>, serializer: S) -> Result<S::Ok, S::Error> {
    match value {
        None => serializer.serialize_none(),
        Some(number) => {
            number.to_string().parse::<serde_json::Number>().map_err(serde::ser::Error::custom)?.serialize(serializer)
        }
    }
}

/// Returns first seeds ranked: the longest sequence, then the lowest strongest line up to `edge_share` of the PFD
/// frequency, then the smaller seed. All seeds of a small modulus are tried, else `count` odd ones, evenly spread.
///
/// # Errors
/// `LinesError` as for one run; `ModulatorError` as for a configuration.
pub fn best_seeds(
    settings: &ModulatorSettings,
    modulus: Modulus,
    k: u64,
    (count, edge_share): (u64, f64),
    done: &(dyn Fn() + Sync),
) -> Result<Vec<SeedTried>, LinesError> {
    let m = modulus.get();
    let seeds: Vec<u64> = if m <= count {
        (0..m).collect()
    } else {
        // Odd, spread over the whole range.
        (0..count).map(|i| (m / count * i) | 1).collect()
    };
    let fft = FftStage::new();
    let mut tried = seeds
        .into_par_iter()
        .map(|seed| {
            let mut settings = settings.clone();
            match settings.seeds.first_mut() {
                Some(first) => *first = seed,
                None => settings.seeds.push(seed),
            }
            let config = ModulatorConfig::new(&settings, modulus, k, true)?;
            let facts = sequence_facts(&config, None, &fft)?;
            done();
            let worst_line = facts.strongest(1, edge_share).first().map(|line| (*line).clone());
            Ok(SeedTried { seed, period: facts.period, worst_line })
        })
        .collect::<Result<Vec<_>, LinesError>>()?;
    let level = |tried: &SeedTried| tried.worst_line.as_ref().map_or(f64::NEG_INFINITY, |line| line.level_dbc);
    tried.sort_by(|a, b| b.period.cmp(&a.period).then(level(a).total_cmp(&level(b))).then(a.seed.cmp(&b.seed)));
    Ok(tried)
}
