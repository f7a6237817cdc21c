//! Noise and phase error of one channel.

use std::f64::consts::TAU;

use crate::base::{Frequency, db_from_power, power_from_db};
use crate::loop_model::{LoopResponse, NoiseBudget, NoiseInput, PhaseFigures, log_grid, noise_budget};
use crate::modulator::{Dither, Modulus};
use crate::plan::ChannelGroup;
use crate::spectrum::ideal_density;

use super::channel::Legal;
use super::lines::FamilyLines;
use super::placement::{Placement, place};
use super::result::{ChannelResult, Origin, Tone};
use super::setup::{AssessError, Setup, gain_at};

/// Phase figures of one channel at the output.
#[derive(Debug, Clone)]
pub struct ChannelNoise {
    /// Noise alone; `None` when a source is unknown.
    pub total: Option<PhaseFigures>,
    /// Noise with the listed tones; `None` when a source, or a tone inside guard or loop edge, is unknown.
    pub total_with_tones: Option<PhaseFigures>,
    /// Known sources with the known parts of the tones.
    pub known_with_tones: PhaseFigures,
    /// What is unknown.
    pub unknown: Vec<String>,
}

/// What the modulator alone does to a channel, at the output.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct ModulatorShare {
    /// Its part of the rms phase error \[deg\]: shaped and folded noise or the lines of its period, and the modulator
    /// and nonlinearity parts of the listed tones; `None` where a part is unknown.
    pub phase_deg: Option<f64>,
    /// Its highest noise density up to the loop edge, shaped and folded \[dBc/Hz\]; `None` where a part is unknown, and
    /// for a period with lines instead of noise.
    pub in_loop_noise_dbc_per_hz: Option<f64>,
}

/// Returns the noise budget of a channel on a grid of offsets \[Hz\].
///
/// The modulator's noise is the formula of an ideal sequence plus what the detector folds; an exact period has lines
/// instead, which the channel stage adds.
#[must_use]
pub fn channel_budget(
    setup: &Setup,
    placement: &Placement,
    response: &LoopResponse,
    lines: Option<&FamilyLines>,
    offset_hz: Vec<f64>,
) -> NoiseBudget {
    let is_dense = lines.is_some_and(|lines| lines.period.is_none());
    let folded = lines.filter(|_| is_dense).map(|lines| lines.folded.as_ref().map(|noise| noise.density_cycles2));
    let point = BudgetPoint {
        divider: placement.divider_ratio(),
        vco_hz: placement.vco.to_f64_hz(),
        output_divider: placement.output_divider,
        order: is_dense.then(|| placement.modulator.order()),
        dither: dither_step(placement.modulator.dither(), placement.modulator.modulus()),
        folded_cycles2: folded,
    };
    budget_at(setup, &point, response, offset_hz)
}

/// What the noise of a channel depends on besides plan and loop.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) struct BudgetPoint {
    /// N + K/M.
    pub divider: f64,
    /// VCO frequency \[Hz\].
    pub vco_hz: f64,
    /// Output divider P.
    pub output_divider: u64,
    /// Order of a modulator with noise instead of lines.
    pub order: Option<u8>,
    /// Stage and step (share of a cycle) of the dither.
    pub dither: Option<(u8, f64)>,
    /// What the detector folds \[cycles²\]; outer `None`: nothing is folded, inner `None`: unknown.
    pub folded_cycles2: Option<Option<f64>>,
}

/// Returns the noise budget at a point on a grid of offsets \[Hz\].
pub(super) fn budget_at(
    setup: &Setup,
    point: &BudgetPoint,
    response: &LoopResponse,
    offset_hz: Vec<f64>,
) -> NoiseBudget {
    let plan = setup.plan();
    let detector = &plan.detector;
    let pfd_hz = setup.pfd().to_f64_hz();
    let order = point.order.unwrap_or(0);
    let shaped = |offset: f64| ideal_density(order, offset, pfd_hz) + dither_density(point.dither, offset, pfd_hz);
    let input = NoiseInput {
        response,
        network: setup.network(),
        divider: point.divider,
        vco_hz: point.vco_hz,
        reference_hz: plan.reference.frequency.to_f64_hz(),
        output_divider: point.output_divider as f64,
        current_a: detector.current_a,
        gain_hz_per_v: gain_at(&plan.oscillator.gain, point.vco_hz),
        reference: plan.reference.noise.as_ref(),
        oscillator: plan.oscillator.noise.as_ref(),
        floor_dbc_per_hz: detector.floor_dbc_per_hz,
        flicker_dbc_per_hz: detector.flicker_dbc_per_hz,
        offset_noise_a_per_rthz: (detector.offset_current_a != 0.0).then_some(detector.offset_noise_a_per_rthz),
        divider_floor_dbc_per_hz: plan.divider.floor_dbc_per_hz,
        modulator: point.order.is_some().then_some(&shaped as &dyn Fn(f64) -> f64),
        // (2π)²·S_0/f_pfd turns cycles² per line spacing into rad²/Hz.
        folded_rad2_per_hz: point.folded_cycles2.map(|known| known.map(|cycles2| TAU * TAU * cycles2 / pfd_hz)),
    };
    noise_budget(&input, offset_hz)
}

/// Returns stage and step of a dither: its weight over the modulus.
pub(super) fn dither_step(dither: Dither, modulus: Modulus) -> Option<(u8, f64)> {
    dither.stage_and_weight().map(|(stage, weight)| (stage, weight as f64 / modulus.get() as f64))
}

/// Returns the dither's own phase noise \[rad²/Hz, single sideband\]: a fair bit of weight w at stage r,
/// `(2π)²·w²/(4·M²·f_pfd)·[2 sin(πf/f_pfd)]^(2(r − 2))`.
fn dither_density(dither: Option<(u8, f64)>, offset_hz: f64, pfd_hz: f64) -> f64 {
    let Some((stage, step)) = dither else { return 0.0 };
    let shape = 2.0 * (std::f64::consts::PI * offset_hz / pfd_hz).sin();
    TAU * TAU * step * step / (4.0 * pfd_hz) * shape.powi(2 * (i32::from(stage) - 2))
}

/// Returns the noise budget of a channel over its group's integration limits; `None` without a legal
/// word.
///
/// # Errors
/// As for the channel itself.
pub fn budget_of(setup: &Setup, group: usize, channel: Frequency) -> Result<Option<NoiseBudget>, AssessError> {
    let settings = setup.plan().groups.get(group).ok_or(AssessError::NoSuchChannel { group, index: 0 })?;
    let placement = place(setup.plan(), settings, channel)?;
    if !placement.illegal.is_empty() {
        return Ok(None);
    }
    let response = setup
        .response(&placement)
        .map_err(|source| AssessError::Loop { place: format!("channel {channel}"), source })?;
    let legal = Legal { setup, group: settings, channel, placement: &placement };
    let lines = legal.lines(setup.pfd().to_f64_hz(), &mut setup.scratch())?.map(|(_, lines)| lines);
    let limits = settings.limits.integration_hz;
    let grid = log_grid(limits.0, limits.1);
    Ok(Some(channel_budget(setup, &placement, &response, lines.as_ref(), grid)))
}

/// Returns the phase figures of a channel over the group's integration limits.
#[must_use]
pub fn channel_noise(
    setup: &Setup,
    group: &ChannelGroup,
    placement: &Placement,
    response: &LoopResponse,
    lines: Option<&FamilyLines>,
    tones: &[Tone],
) -> ChannelNoise {
    let limits = group.limits.integration_hz;
    let (known, mut unknown) = match setup.tabulated_noise(placement, lines, limits) {
        Some(found) => found,
        None => {
            let budget = channel_budget(setup, placement, response, lines, log_grid(limits.0, limits.1));
            (PhaseFigures::of(&budget.offset_hz, &budget.known(), limits), budget.unknown)
        }
    };
    let (known, nonlinearity_known) = with_period_lines(known, setup, placement, response, lines, (limits, tones));
    if !nonlinearity_known {
        unknown.push("detector nonlinearity on the lines of the period".to_owned());
    }
    let inside = |tone: &&Tone| tone.offset_hz >= limits.0 && tone.offset_hz <= limits.1;
    let mut known_with_tones = known;
    let mut tones_known = true;
    for tone in tones.iter().filter(inside) {
        if let Some(level) = tone.known_level_dbc {
            known_with_tones = known_with_tones.with_tone(tone.offset_hz, power_from_db(level));
        }
        // Unknown tones beyond guard and loop edge are counted elsewhere; they change nothing.
        tones_known &= tone.level_dbc.is_some() || !(tone.inside_guard || tone.inside_loop);
    }
    let complete = unknown.is_empty();
    if !tones_known {
        unknown.push("level of a tone inside guard or loop edge".to_owned());
    }
    ChannelNoise {
        total: complete.then_some(known),
        total_with_tones: (complete && tones_known).then_some(known_with_tones),
        known_with_tones,
        unknown,
    }
}

/// Adds the lines of an exact period that are no listed tones: together they are its noise. Returns whether the
/// detector's part in them is known.
fn with_period_lines(
    figures: PhaseFigures,
    setup: &Setup,
    placement: &Placement,
    response: &LoopResponse,
    lines: Option<&FamilyLines>,
    (limits, tones): ((f64, f64), &[Tone]),
) -> (PhaseFigures, bool) {
    let Some((lines, period)) = lines.and_then(|lines| lines.period.map(|period| (lines, period))) else {
        return (figures, true);
    };
    let spacing = setup.pfd().to_f64_hz() / period as f64;
    let per_output = (TAU / placement.output_divider as f64).powi(2);
    // |H|² on a log grid, linear between: the lines lie far denser than it varies.
    let grid = log_grid(limits.0, limits.1);
    let gains: Vec<f64> = grid.iter().map(|f| response.closed_loop(*f).norm_sqr()).collect();
    // Lines listed as tones are added with the tones, not here.
    let listed: Vec<f64> =
        tones.iter().filter(|tone| tone.origin == Origin::SubFractional).map(|tone| tone.offset_hz).collect();
    let mut cell = 0;
    let mut figures = figures;
    let mut is_known = true;
    for other in &lines.others {
        let offset = other.bin as f64 * spacing;
        if offset < limits.0 || offset > limits.1 {
            continue;
        }
        if listed.iter().any(|at| (at - offset).abs() < 1e-3 * spacing) {
            continue;
        }
        is_known &= other.line.nonlinearity.is_some();
        while cell + 2 < grid.len() && grid[cell + 1] < offset {
            cell += 1;
        }
        let share = (offset - grid[cell]) / (grid[cell + 1] - grid[cell]);
        let gain = gains[cell] + (gains[cell + 1] - gains[cell]) * share;
        let size = (other.line.modulator + other.line.nonlinearity.unwrap_or_default()).norm_sqr();
        figures = figures.with_tone(offset, size * gain * per_output);
    }
    (figures, is_known)
}

impl Setup<'_> {
    /// Returns what the modulator alone does to a channel.
    ///
    /// # Errors
    /// As for the channel itself.
    pub fn modulator_share(&self, channel: &ChannelResult) -> Result<ModulatorShare, AssessError> {
        let group = self
            .plan()
            .groups
            .get(channel.group_index)
            .ok_or(AssessError::NoSuchChannel { group: channel.group_index, index: channel.index })?;
        let placement = place(self.plan(), group, channel.channel)?;
        let response = self
            .response(&placement)
            .map_err(|source| AssessError::Loop { place: format!("channel {}", channel.channel), source })?;
        let legal = Legal { setup: self, group, channel: channel.channel, placement: &placement };
        let lines = legal.lines(channel.pfd_hz, &mut self.scratch())?.map(|(_, lines)| lines);
        let limits = group.limits.integration_hz;
        let budget = channel_budget(self, &placement, &response, lines.as_ref(), log_grid(limits.0, limits.1));
        let own = ["modulator", "folded modulator noise"];
        if budget.unknown.iter().any(|name| own.contains(&name.as_str())) {
            return Ok(ModulatorShare { phase_deg: None, in_loop_noise_dbc_per_hz: None });
        }
        let mut density = vec![0.0; budget.offset_hz.len()];
        for source in budget.sources.iter().filter(|source| own.contains(&source.name)) {
            density.iter_mut().zip(&source.density).for_each(|(sum, part)| *sum += part);
        }
        let figures = PhaseFigures::of(&budget.offset_hz, &density, limits);
        let (mut figures, known) =
            with_period_lines(figures, self, &placement, &response, lines.as_ref(), (limits, &channel.tones));
        for tone in &channel.tones {
            if tone.offset_hz < limits.0 || tone.offset_hz > limits.1 {
                continue;
            }
            let parts = [tone.contributions.modulator_dbc, tone.contributions.nonlinearity_dbc];
            for level in parts.into_iter().flatten() {
                figures = figures.with_tone(tone.offset_hz, power_from_db(level));
            }
        }
        let edge_hz = channel.loop_edge_hz.unwrap_or(0.0);
        let in_loop = budget
            .offset_hz
            .iter()
            .zip(&density)
            .filter(|(offset, level)| **offset <= edge_hz && **level > 0.0)
            .map(|(_, level)| db_from_power(*level))
            .reduce(f64::max);
        Ok(ModulatorShare { phase_deg: known.then(|| figures.phase_deg()), in_loop_noise_dbc_per_hz: in_loop })
    }
}
