//! What is to be known of one run.

use std::collections::BTreeMap;
use std::f64::consts::TAU;

use num_bigint::BigUint;
use num_traits::ToPrimitive;
use serde::Serialize;

use crate::assess::LinesError;
use crate::base::{Exact, db_from_power};
use crate::modulator::{Dither, ModulatorConfig, period, phase_numerators, start, transient};
use crate::spectrum::{DensitySettings, FftScratch, FftStage, Window, sideband_dbc};

/// Outputs listed from the start.
const FIRST_OUTPUTS: usize = 64;
/// Lags of the autocorrelation, from 1.
const AUTOCORRELATION_LAGS: usize = 32;
/// Longest period that is transformed whole.
const LONGEST_PERIOD: u64 = 1 << 22;
/// Samples of a run whose period is longer.
const RECORD: u64 = 1 << 17;
/// Lines below this size are rounding \[cycles\].
const SMALLEST_LINE: f64 = 1e-13;

/// A line of φ, the accumulated phase error, over one exact period; before any loop.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct SequenceLine {
    /// The line lies at `bin/T` of the PFD frequency.
    pub bin: u64,
    /// Offset as a share of the PFD frequency.
    pub offset_share: f64,
    /// Level at the VCO \[dBc\], single sideband.
    pub level_dbc: f64,
    /// Smallest h ≥ 1 with h·K mod± M on this line; `None`: sub-fractional, a multiple of f_pfd/T that no h reaches.
    pub harmonic: Option<u64>,
}

/// What dither does to a run.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct DitherFacts {
    /// The dither in words.
    pub dither: String,
    /// Shift of the mean output, numerator and denominator; exact for a register, expected for white bits.
    pub mean_shift: (String, String),
    /// Whether it can whiten the quantisation error: stage ≤ order − 1.
    pub can_whiten: bool,
    /// Its own phase noise at a tenth, a hundredth and a thousandth of the PFD frequency \[dBc/Hz times f_pfd in Hz\]:
    /// subtract 10·log10(f_pfd/1 Hz).
    pub own_noise_dbc: Vec<(f64, f64)>,
}

/// Everything about one run.
#[derive(Debug, Clone)]
pub struct SequenceFacts {
    /// The modulator.
    pub config: ModulatorConfig,
    /// Length of the sequence; `None` where it is not known.
    pub period: Option<BigUint>,
    /// Whether the length is proven.
    pub period_is_exact: bool,
    /// Outputs at the start that belong to no period.
    pub transient: usize,
    /// Mean over a period, from the identity; `None` for an error filter that does not vanish at zero frequency.
    pub mean: Option<Exact>,
    /// Outputs looked at, from index 0.
    pub samples: u64,
    /// Smallest of them.
    pub minimum: i32,
    /// Largest of them.
    pub maximum: i32,
    /// How often each value occurs among them.
    pub histogram: BTreeMap<i32, u64>,
    /// The first outputs.
    pub first: Vec<i32>,
    /// Correlation of the outputs with themselves at lags 1, 2, …, over their variance; empty where all are equal.
    pub autocorrelation: Vec<f64>,
    /// Lines of one exact period above rounding, rising in offset; `None` where it is too long or not known.
    pub lines: Option<Vec<SequenceLine>>,
    /// Density of φ at the VCO where there are no lines: (offset as a share of f_pfd, \[dBc/Hz times f_pfd in Hz\]).
    pub density: Vec<(f64, f64)>,
    /// What the dither does; `None` without.
    pub dither: Option<DitherFacts>,
}

impl SequenceFacts {
    /// Returns the strongest lines up to an offset as a share of f_pfd, strongest first.
    #[must_use]
    pub fn strongest(&self, count: usize, up_to_share: f64) -> Vec<&SequenceLine> {
        let mut lines: Vec<&SequenceLine> =
            self.lines.iter().flatten().filter(|line| line.offset_share <= up_to_share).collect();
        lines.sort_by(|a, b| b.level_dbc.total_cmp(&a.level_dbc).then(a.bin.cmp(&b.bin)));
        lines.truncate(count);
        lines
    }
}

/// Returns what is to be known of a run; `samples` outputs are looked at, by default one whole period where it fits.
///
/// # Errors
/// `LinesError` when the phase of the sequence leaves its range or no density can be estimated.
///
/// # Examples
/// ```
/// use thornmap::assess::sequence_facts;
/// use thornmap::modulator::{Dither, ModulatorConfig, ModulatorSettings, Modulus, Structure};
/// use thornmap::spectrum::FftStage;
/// let settings = ModulatorSettings {
///     structure: Structure::Mash, order: 3, seeds: vec![1], dither: Dither::None, noise_transfer: None, runs_at_zero: false,
/// };
/// let config = ModulatorConfig::new(&settings, Modulus::new(512).unwrap(), 257, true).unwrap();
/// let facts = sequence_facts(&config, None, &FftStage::new()).unwrap();
/// assert_eq!(facts.period, Some(1024u32.into()));
/// assert_eq!(facts.samples, 1024);
/// ```
pub fn sequence_facts(
    config: &ModulatorConfig,
    samples: Option<u64>,
    fft: &FftStage,
) -> Result<SequenceFacts, LinesError> {
    let length = period(config);
    let whole =
        length.length.as_ref().and_then(ToPrimitive::to_u64).filter(|t| *t <= LONGEST_PERIOD && length.is_exact);
    let samples = samples.unwrap_or_else(|| whole.unwrap_or(RECORD));
    let skipped = transient(config);
    let needed = samples.max(whole.unwrap_or(RECORD) + skipped as u64);
    let mut outputs = vec![0; usize::try_from(needed).unwrap_or(usize::MAX)];
    start(config).fill(&mut outputs);
    let seen = &outputs[..usize::try_from(samples).unwrap_or(usize::MAX).min(outputs.len())];
    let mut histogram = BTreeMap::new();
    for output in seen {
        *histogram.entry(*output).or_insert(0) += 1;
    }
    let mut facts = SequenceFacts {
        config: config.clone(),
        period: length.length,
        period_is_exact: length.is_exact,
        transient: skipped,
        mean: config.mean(),
        samples: seen.len() as u64,
        minimum: seen.iter().copied().min().unwrap_or(0),
        maximum: seen.iter().copied().max().unwrap_or(0),
        histogram,
        first: seen.iter().copied().take(FIRST_OUTPUTS).collect(),
        autocorrelation: autocorrelation(seen),
        lines: None,
        density: Vec::new(),
        dither: dither_facts(config),
    };
    if !config.is_held() {
        let run = &outputs[skipped..];
        match whole {
            Some(whole) => lines(&mut facts, &run[..usize::try_from(whole).unwrap_or(0).min(run.len())], whole, fft)?,
            None => facts.density = density(&phase_of(run, config)?, fft)?,
        }
    }
    Ok(facts)
}

/// Returns φ of a run from its first output \[cycles\], its mean taken out.
pub(super) fn phase_of(run: &[i32], config: &ModulatorConfig) -> Result<Vec<f64>, LinesError> {
    let mut numerators = vec![0; run.len()];
    phase_numerators(run, config.k(), config.modulus(), &mut numerators)?;
    let m = config.modulus().get() as f64;
    let drift = config.mean_shift().to_f64();
    let mut phase: Vec<f64> =
        numerators.iter().enumerate().map(|(n, sum)| *sum as f64 / m - drift * n as f64).collect();
    let mean = phase.iter().sum::<f64>() / phase.len().max(1) as f64;
    phase.iter_mut().for_each(|value| *value -= mean);
    Ok(phase)
}

/// Fills in the lines of one period.
fn lines(facts: &mut SequenceFacts, run: &[i32], period: u64, fft: &FftStage) -> Result<(), LinesError> {
    let phase = phase_of(run, &facts.config)?;
    let found = fft.lines(&phase, &mut FftScratch::new());
    let all: Vec<SequenceLine> = (1..found.len())
        .filter(|bin| found[*bin].norm() > SMALLEST_LINE)
        .filter_map(|bin| {
            let bin_number = bin as u64;
            Some(SequenceLine {
                bin: bin_number,
                offset_share: bin_number as f64 / period as f64,
                level_dbc: sideband_dbc(found[bin].norm())?,
                harmonic: harmonic_at(&facts.config, bin_number, period),
            })
        })
        .collect();
    facts.lines = Some(all);
    Ok(())
}

/// Returns the smallest h ≥ 1 with h·K ≡ ±bin·M/T modulo M; `None` where there is none.
fn harmonic_at(config: &ModulatorConfig, bin: u64, period: u64) -> Option<u64> {
    let m = u128::from(config.modulus().get());
    let scaled = u128::from(bin) * m;
    if !scaled.is_multiple_of(u128::from(period)) {
        return None;
    }
    let residue = i128::try_from(scaled / u128::from(period)).ok()?;
    let shared = i128::from(num_integer::gcd(config.k(), config.modulus().get()));
    if residue % shared != 0 {
        return None;
    }
    let reduced = i128::try_from(m).ok()? / shared;
    let inverse = num_integer::Integer::extended_gcd(&(i128::from(config.k()) / shared), &reduced).x;
    let harmonic = (residue / shared * inverse).rem_euclid(reduced);
    u64::try_from(harmonic.min(reduced - harmonic)).ok().filter(|harmonic| *harmonic > 0)
}

/// Returns the density of φ over its record in about sixty log-spaced cells.
pub(super) fn density(phase: &[f64], fft: &FftStage) -> Result<Vec<(f64, f64)>, LinesError> {
    let segment = (phase.len() / 4).next_power_of_two().clamp(64, 1 << 15).min(phase.len());
    let settings = DensitySettings { segment, window: Window::FourTerm, sample_rate_hz: 1.0 };
    let found = fft.density(phase, settings, &mut FftScratch::new())?;
    let first = found.first_trusted_bin(3);
    let mut cells = Vec::new();
    let mut bin = first;
    while bin < segment / 2 {
        let next = (bin + 1).max(bin + bin / 8);
        let values: Vec<f64> = (bin..next.min(segment / 2)).filter_map(|i| found.at_bin(i)).collect();
        let mean = values.iter().sum::<f64>() / values.len().max(1) as f64;
        if mean > 0.0 {
            cells.push(((bin + next) as f64 / 2.0 / segment as f64, db_from_power(TAU * TAU * mean)));
        }
        bin = next;
    }
    Ok(cells)
}

/// Returns the correlation of the outputs with themselves at lags 1, 2, …, over their variance.
fn autocorrelation(outputs: &[i32]) -> Vec<f64> {
    let count = outputs.len();
    let mean = outputs.iter().map(|y| f64::from(*y)).sum::<f64>() / count.max(1) as f64;
    let centred: Vec<f64> = outputs.iter().map(|y| f64::from(*y) - mean).collect();
    let power: f64 = centred.iter().map(|y| y * y).sum();
    if power == 0.0 {
        return Vec::new();
    }
    (1..=AUTOCORRELATION_LAGS.min(count.saturating_sub(1)))
        .map(|lag| centred[lag..].iter().zip(&centred).map(|(a, b)| a * b).sum::<f64>() / power)
        .collect()
}

/// Returns mean shift, whitening and own phase noise of the dither:
/// `(2π)²·w²/(4·M²)·[2 sin(πf/f_pfd)]^(2(r − 2))` over f_pfd, for stage r.
fn dither_facts(config: &ModulatorConfig) -> Option<DitherFacts> {
    let dither = config.dither();
    let (stage, weight) = dither.stage_and_weight()?;
    let shift = config.mean_shift();
    let own = |share: f64| {
        let step = weight as f64 / config.modulus().get() as f64;
        let shaped = (2.0 * (std::f64::consts::PI * share).sin()).powi(2 * (i32::from(stage) - 2));
        (share, db_from_power(TAU * TAU * step * step / 4.0 * shaped))
    };
    Some(DitherFacts {
        dither: Dither::words(dither),
        mean_shift: (shift.numerator().to_string(), shift.denominator().to_string()),
        can_whiten: config.dither_can_whiten()?,
        own_noise_dbc: [0.1, 0.01, 0.001].map(own).to_vec(),
    })
}
