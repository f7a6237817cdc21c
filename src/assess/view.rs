//! The modulator's phase noise on one channel, before and after the loop, for plots.

use std::f64::consts::TAU;

use serde::Serialize;

use crate::base::{Frequency, db_from_power};
use crate::loop_model::log_grid;
use crate::spectrum::{DensitySettings, Window, ideal_density};

use super::lines::Scratch;
use super::noise::channel_budget;
use super::placement::place;
use super::setup::{AssessError, Setup};

/// Samples of the record behind the density.
const RECORD: usize = 1 << 18;
/// Samples of a segment.
const SEGMENT: usize = 1 << 15;
/// Decades shown below the upper end.
const LOW_HZ: f64 = 1e3;

/// The modulator's phase noise on one channel; a value is `None` where there is none or a source is unknown.
#[derive(Debug, Clone, Default, Serialize)]
pub struct SpectrumView {
    /// Position in the survey's channels; 0 for a channel alone.
    pub channel: usize,
    /// Offsets \[Hz\], rising.
    pub offset_hz: Vec<f64>,
    /// From the computed sequence, before the loop, at the VCO \[dBc/Hz\]; the mean of the bins around each offset.
    pub sequence_dbc_per_hz: Vec<Option<f64>>,
    /// The formula for an ideal sequence, before the loop, at the VCO \[dBc/Hz\].
    pub formula_dbc_per_hz: Vec<Option<f64>>,
    /// Modulator part after the loop, at the output \[dBc/Hz\].
    pub modulator_dbc_per_hz: Vec<Option<f64>>,
    /// Total after the loop, at the output \[dBc/Hz\].
    pub total_dbc_per_hz: Vec<Option<f64>>,
}

/// Returns the view of a channel with a legal word; `None` where the modulator is held or there is no word.
///
/// # Errors
/// As for the channel itself.
pub fn spectrum_view(
    setup: &Setup,
    group: usize,
    channel: Frequency,
    scratch: &mut Scratch,
) -> Result<Option<SpectrumView>, AssessError> {
    let settings = setup.plan().groups.get(group).ok_or(AssessError::NoSuchChannel { group, index: 0 })?;
    let placement = place(setup.plan(), settings, channel)?;
    if !placement.illegal.is_empty() || placement.modulator.is_held() {
        return Ok(None);
    }
    let response = setup
        .response(&placement)
        .map_err(|source| AssessError::Loop { place: format!("channel {channel}"), source })?;
    let pfd_hz = setup.pfd().to_f64_hz();
    let legal = super::channel::Legal { setup, group: settings, channel, placement: &placement };
    let lines = legal.lines(pfd_hz, scratch)?.map(|(_, lines)| lines);
    let high_hz = pfd_hz / 2.0;
    let grid = log_grid(LOW_HZ.min(high_hz / 10.0), high_hz);
    let budget = channel_budget(setup, &placement, &response, lines.as_ref(), grid.clone());
    let level = |density: f64| (density > 0.0).then(|| db_from_power(density));
    let order = placement.modulator.order();
    let is_ideal = placement.modulator.has_ideal_shaping();
    let sequence = scratch
        .density(
            &placement.modulator,
            setup.fft(),
            RECORD,
            DensitySettings { segment: SEGMENT, window: Window::FourTerm, sample_rate_hz: pfd_hz },
        )
        .map_err(|source| AssessError::Lines { channel, source })?;
    Ok(Some(SpectrumView {
        channel: 0,
        sequence_dbc_per_hz: grid
            .iter()
            .enumerate()
            .map(|(i, f)| {
                let low = if i == 0 { *f } else { (grid[i - 1] * f).sqrt() };
                let high = grid.get(i + 1).map_or(*f, |next| (next * f).sqrt());
                mean_between(&sequence, low, high).and_then(|s| level(TAU * TAU * s))
            })
            .collect(),
        formula_dbc_per_hz: grid
            .iter()
            .map(|f| if is_ideal { level(ideal_density(order, *f, pfd_hz)) } else { None })
            .collect(),
        modulator_dbc_per_hz: match budget.sources.iter().find(|source| source.name == "modulator") {
            Some(source) => source.density.iter().map(|density| level(*density)).collect(),
            None => vec![None; grid.len()],
        },
        total_dbc_per_hz: match budget.total() {
            Some(total) => total.into_iter().map(level).collect(),
            None => vec![None; grid.len()],
        },
        offset_hz: grid,
    }))
}

/// Returns the mean density of the bins between two frequencies; `None` where no bin lies there.
fn mean_between(density: &crate::spectrum::Density, low_hz: f64, high_hz: f64) -> Option<f64> {
    let settings = density.settings();
    let spacing = settings.sample_rate_hz / settings.segment as f64;
    #[allow(
        clippy::cast_possible_truncation,
        clippy::cast_sign_loss,
        reason = "offsets are positive and below the sample rate"
    )]
    let (first, last) = ((low_hz / spacing).ceil().max(1.0) as usize, (high_hz / spacing).floor() as usize);
    let values: Vec<f64> = (first..=last).filter_map(|bin| density.at_bin(bin)).collect();
    (!values.is_empty()).then(|| values.iter().sum::<f64>() / values.len() as f64)
}
