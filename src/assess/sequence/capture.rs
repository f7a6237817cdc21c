//! A captured run by itself, and its tones through a plan's detector and loop.

use std::collections::BTreeMap;

use serde::Serialize;

use crate::assess::channel::Legal;
use crate::assess::{AssessError, LinesError, Setup, place};
use crate::base::Frequency;
use crate::loop_model::static_charge_cycles;
use crate::spectrum::{FftStage, Window, correlate_each, divided_dbc, sideband_dbc};
use crate::tones::{Charge, modulator_family, settle_samples};

use super::facts::density;
use super::recognise::repeated;

/// A captured run.
#[derive(Debug, Clone, Serialize)]
pub struct Capture {
    /// Values captured.
    pub samples: u64,
    /// Smallest value.
    pub minimum: i64,
    /// Largest value.
    pub maximum: i64,
    /// How often each value occurs.
    pub histogram: BTreeMap<i64, u64>,
    /// Mean of all values.
    pub mean: f64,
    /// Half width within which the true mean lies if the values are those of a shaped modulator: range over count.
    pub mean_uncertainty: f64,
    /// Shortest period that the capture shows at least twice.
    pub period: Option<u64>,
    /// Exact mean over that period, numerator and denominator.
    pub period_mean: Option<(i64, u64)>,
    /// Density of the accumulated phase error: (offset as a share of f_pfd, \[dBc/Hz times f_pfd in Hz\]).
    pub density: Vec<(f64, f64)>,
}

impl Capture {
    /// Returns what a captured run shows by itself.
    ///
    /// # Errors
    /// `LinesError` when no density can be estimated.
    pub fn of(captured: &[i64], fft: &FftStage) -> Result<Self, LinesError> {
        let mut histogram = BTreeMap::new();
        for value in captured {
            *histogram.entry(*value).or_insert(0) += 1;
        }
        let count = captured.len().max(1) as f64;
        let (minimum, maximum) =
            captured.iter().fold((i64::MAX, i64::MIN), |(low, high), y| (low.min(*y), high.max(*y)));
        let mean = captured.iter().sum::<i64>() as f64 / count;
        let repeats = repeated(captured);
        let exact = repeats.map_or(mean, |(period, sum)| sum as f64 / period as f64);
        let mut sum = 0.0;
        let mut phase: Vec<f64> = captured
            .iter()
            .map(|y| {
                sum += *y as f64 - exact;
                sum
            })
            .collect();
        let centre = phase.iter().sum::<f64>() / count;
        phase.iter_mut().for_each(|value| *value -= centre);
        let density = if phase.len() >= 256 { density(&phase, fft)? } else { Vec::new() };
        Ok(Self {
            samples: captured.len() as u64,
            minimum,
            maximum,
            histogram,
            mean,
            mean_uncertainty: (maximum - minimum + 1) as f64 / count,
            period: repeats.map(|(period, _)| period as u64),
            period_mean: repeats.map(|(period, sum)| (sum, period as u64)),
            density,
        })
    }
}

/// One tone of a captured run at the output of a channel.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct CaptureTone {
    /// Harmonic h.
    pub harmonic: u64,
    /// Offset from the carrier \[Hz\].
    pub offset_hz: f64,
    /// Line of the run itself after the loop \[dBc\].
    pub modulator_dbc: Option<f64>,
    /// What the detector's nonlinearity adds \[dBc\]; `None` also where the charge curve is unknown.
    pub nonlinearity_dbc: Option<f64>,
}

/// Returns the tones that a captured run makes on a channel, at the harmonics of its word, from a windowed record; `None`
/// where the run's mean is not that of the channel's word.
///
/// # Errors
/// As for the channel itself.
pub fn captured_tones(
    setup: &Setup,
    group: usize,
    channel: Frequency,
    captured: &[i64],
) -> Result<Option<Vec<CaptureTone>>, AssessError> {
    let plan = setup.plan();
    let settings = plan.groups.get(group).ok_or(AssessError::NoSuchChannel { group, index: 0 })?;
    let placement = place(plan, settings, channel)?;
    if !placement.illegal.is_empty() || placement.modulator.is_held() || captured.len() < 64 {
        return Ok(None);
    }
    let word = placement.word;
    let m = word.modulus.get();
    let share = word.k as f64 / m as f64;
    let count = captured.len() as f64;
    let mean = captured.iter().sum::<i64>() as f64 / count;
    let integer = (mean - share).round();
    let reach = captured.iter().max().zip(captured.iter().min()).map_or(0, |(high, low)| high - low + 1) as f64;
    if (mean - share - integer).abs() > reach / count {
        return Ok(None);
    }
    let response = setup
        .response(&placement)
        .map_err(|source| AssessError::Loop { place: format!("channel {channel}"), source })?;
    let mut sum = 0.0;
    let mut phase: Vec<f64> = captured
        .iter()
        .map(|y| {
            sum += *y as f64 - integer - share;
            sum
        })
        .collect();
    let centre = phase.iter().sum::<f64>() / count;
    phase.iter_mut().for_each(|value| *value -= centre);
    let family = modulator_family(word.n, word.k, m, plan.boundary.largest_q, plan.boundary.harmonics);
    let residues: Vec<u64> = family.iter().map(|tone| tone.residue.unsigned_abs()).collect();
    let lines = correlate_each(&phase, &residues, m, Window::FourTerm);
    let legal = Legal { setup, group: settings, channel, placement: &placement };
    let curve = legal.charge_curve();
    let excess = match &curve {
        None => None,
        Some(curve) => {
            let at = |p: f64| curve.at(p);
            let charge = Charge::new(&at, curve.kinks());
            let drained = plan.detector.offset_current_a + plan.detector.leakage_a.unwrap_or(0.0);
            let target = static_charge_cycles(drained, plan.detector.current_a, placement.divider_ratio());
            let failed = |source| AssessError::Lines { channel, source: LinesError::from(source) };
            let rest = settle_samples(&phase, charge, target).map_err(failed)?;
            let bent: Vec<f64> = phase.iter().map(|p| charge.at(p + rest.offset_cycles) - p).collect();
            Some(correlate_each(&bent, &residues, m, Window::FourTerm))
        }
    };
    let level = |size: f64, offset_hz: f64| {
        sideband_dbc(size * response.closed_loop(offset_hz).norm())
            .map(|level| divided_dbc(level, placement.output_divider))
    };
    let pfd_hz = setup.pfd().to_f64_hz();
    Ok(Some(
        family
            .iter()
            .enumerate()
            .map(|(i, tone)| {
                let offset_hz = tone.residue.unsigned_abs() as f64 / m as f64 * pfd_hz;
                CaptureTone {
                    harmonic: tone.harmonic,
                    offset_hz,
                    modulator_dbc: level(lines[i].norm(), offset_hz),
                    nonlinearity_dbc: excess.as_ref().and_then(|lines| level(lines[i].norm(), offset_hz)),
                }
            })
            .collect(),
    ))
}
