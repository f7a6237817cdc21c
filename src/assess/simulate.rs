//! One channel in time beside its prediction, at the VCO, noise sources off.

use std::f64::consts::{PI, TAU};

use num_traits::ToPrimitive;
use serde::Serialize;

use crate::base::Frequency;
use crate::loop_model::{
    LoopResponse, Sample, SimulatedDetector, Simulation, SimulationError, SimulationInput, StepResponse, Within,
    reference_tone_dbc,
};
use crate::modulator::{ModulatorConfig, period, start};
use crate::plan::MismatchPoints;
use crate::spectrum::{DensitySettings, FftScratch, FftStage, Window, correlate_each, sideband_dbc};

use crate::tones::FamilyTone;

use super::channel::Legal;
use super::lines::FamilyLines;
use super::placement::{Placement, place};
use super::setup::{AssessError, Setup, gain_at, interpolate};

/// Loop bandwidths that are dropped before the record: 20/f_c.
const SETTLE_BANDWIDTHS: f64 = 20.0;
/// Cycles of a record when the user gives none.
pub const DEFAULT_CYCLES: u64 = 1 << 20;
/// Longest segment of the density behind the rms phase.
const SEGMENT: usize = 1 << 16;
/// Bins beside a line, clear of the window's main lobe, that tell its floor.
const BESIDE_BINS: usize = 8;

/// Why a channel cannot be simulated.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
pub enum SimulateError {
    /// The channel cannot be assessed.
    #[error(transparent)]
    Assess(#[from] AssessError),
    /// The simulation itself fails.
    #[error(transparent)]
    Simulation(#[from] SimulationError),
    /// Something that the simulation has no place for, or that is unknown.
    #[error("{0}")]
    NotSimulated(String),
}

/// One line, predicted and simulated, at the VCO.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct ComparedTone {
    /// Harmonic h of K/M; of the PFD frequency for reference tones.
    pub harmonic: u64,
    /// Offset from the carrier \[Hz\].
    pub offset_hz: f64,
    /// Predicted level \[dBc\]; `None` where the static model is not claimed or gives no line.
    pub predicted_dbc: Option<f64>,
    /// Simulated level \[dBc\].
    pub simulated_dbc: Option<f64>,
    /// Predicted minus simulated \[dB\].
    pub difference_db: Option<f64>,
    /// Density of the record beside the line, in its own noise bandwidth \[dBc\]; a line near it is noise.
    pub floor_dbc: Option<f64>,
    /// Inside the loop edge.
    pub inside_loop: bool,
}

/// A channel simulated.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct SimulatedChannel {
    /// The channel.
    #[serde(rename = "channel_exact")]
    pub channel: Frequency,
    /// Reference cycles of the record.
    pub cycles: u64,
    /// Cycles dropped before it.
    pub dropped_cycles: u64,
    /// Whether the record is whole periods of the sequence, so that lines need no window.
    pub whole_periods: bool,
    /// Lines at the harmonics of K/M.
    pub tones: Vec<ComparedTone>,
    /// Lines at the PFD frequency and its harmonics.
    pub reference_tones: Vec<ComparedTone>,
    /// Integration limits of the rms phase \[Hz\].
    pub integration_hz: (f64, f64),
    /// rms phase that the modulator is predicted to leave at the VCO \[deg\].
    pub predicted_rms_deg: Option<f64>,
    /// rms phase of the record within the limits \[deg\].
    pub simulated_rms_deg: f64,
    /// Density of the record at the VCO: (offset \[Hz\], \[dBc/Hz\]).
    pub density: Vec<(f64, f64)>,
    /// Doubts about the comparison.
    pub notes: Vec<String>,
}

/// The settling of a channel after a step.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct Settling {
    /// The channel reached.
    #[serde(rename = "channel_exact")]
    pub channel: Frequency,
    /// Step at the output \[Hz\], signed: the loop starts this far below.
    pub step_hz: f64,
    /// Tolerance at the output \[Hz\].
    pub tolerance_hz: f64,
    /// Time after which the output stays within the tolerance \[s\]; `None` where it does not in the time simulated.
    pub settled_after_s: Option<f64>,
    /// The same of the continuous linear loop, in closed form: no sampling, no slips; `None` where two poles coincide.
    pub linear_settled_after_s: Option<f64>,
    /// Its error at the output at each sample \[Hz\]; empty where it is unknown.
    #[serde(skip)]
    pub linear_hz: Vec<f64>,
    /// Comparison cycles lost on the way.
    pub slips: i64,
    /// (time \[s\], output frequency error \[Hz\], output phase error \[deg\]) at reference edges.
    #[serde(skip)]
    pub samples: Vec<(f64, f64, f64)>,
}

/// A channel with all that a simulation needs.
struct Stage<'a> {
    setup: &'a Setup<'a>,
    placement: Placement,
    response: LoopResponse,
    detector: SimulatedDetector,
    gain_hz_per_v: f64,
    notes: Vec<String>,
}

impl<'a> Stage<'a> {
    fn new(setup: &'a Setup<'a>, group: usize, channel: Frequency) -> Result<Self, SimulateError> {
        let plan = setup.plan();
        let settings = plan.groups.get(group).ok_or(AssessError::NoSuchChannel { group, index: 0 })?;
        let placement = place(plan, settings, channel).map_err(AssessError::from)?;
        if let Some(miss) = placement.illegal.first() {
            return Err(SimulateError::NotSimulated(format!("channel {channel} has no legal word: {}", miss.limit)));
        }
        let response = setup
            .response(&placement)
            .map_err(|source| AssessError::Loop { place: format!("channel {channel}"), source })?;
        let detector = &plan.detector;
        let refused = |text: &str| Err(SimulateError::NotSimulated(text.to_owned()));
        if detector.table.is_some() || detector.quadratic_per_cycle != 0.0 || detector.cubic_per_cycle2 != 0.0 {
            return refused(
                "the simulation switches current sources: a charge table, or quadratic and cubic terms, have no place in it",
            );
        }
        let mut notes = Vec::new();
        let mismatch = match detector.mismatch.as_ref() {
            None => return refused("the pump mismatch is unknown: give detector.mismatch, 0 % for a matched pump"),
            Some(MismatchPoints::Constant(value)) => *value,
            Some(MismatchPoints::Table(points)) => match placement.tuning_v {
                Some(volts) => interpolate(points, volts),
                None => return refused("the mismatch is given over the tuning voltage, which is unknown here"),
            },
        };
        if detector.leakage_a.is_none() {
            notes.push("leakage is unknown: 0 A simulated".to_owned());
        }
        if setup.network().is_none() {
            return refused("a measured loop response has no components to simulate");
        }
        let vco_hz = placement.vco.to_f64_hz();
        Ok(Self {
            setup,
            response,
            detector: SimulatedDetector {
                up_a: detector.current_a * (1.0 + mismatch / 2.0),
                down_a: detector.current_a * (1.0 - mismatch / 2.0),
                drain_a: detector.offset_current_a + detector.leakage_a.unwrap_or(0.0),
                dead_zone_s: detector.dead_zone_s,
                reset_delay_s: detector.reset_delay_s.unwrap_or(0.0),
            },
            gain_hz_per_v: gain_at(&plan.oscillator.gain, vco_hz),
            placement,
            notes,
        })
    }

    fn simulation(
        &self,
        start_error_hz: f64,
        start_phase_cycles: f64,
        phases: Box<dyn FnMut() -> f64>,
    ) -> Result<Simulation<'_>, SimulateError> {
        let network =
            self.setup.network().ok_or_else(|| SimulateError::NotSimulated("no components to simulate".to_owned()))?;
        let input = SimulationInput {
            network,
            gain_hz_per_v: self.gain_hz_per_v,
            pfd_hz: self.setup.pfd().to_f64_hz(),
            // With dither at the first stage the mean, and so the target, is not N + K/M.
            target_hz: self.placement.vco.to_f64_hz(),
            detector: self.detector,
            start_error_hz,
            start_phase_cycles,
        };
        Ok(Simulation::new(input, phases)?)
    }
}

/// Returns φ of the modulator \[cycles\], output by output: Σ(y − mean), exact in its whole part.
fn phases(config: &ModulatorConfig) -> Box<dyn FnMut() -> f64> {
    let mut modulator = start(config);
    let (k, m) = (config.k(), config.modulus().get());
    let scale = 1.0 / m as f64;
    let mut buffer = vec![0; 4096];
    let mut place = buffer.len();
    // φ·M modulo M is the ramp −n·K: whole cycles and ramp are kept apart, so nothing grows.
    let (mut whole, mut ramp) = (0i64, 0u64);
    let (shift, mut count) = (config.mean_shift().to_f64(), 0.0);
    Box::new(move || {
        if place == buffer.len() {
            modulator.fill(&mut buffer);
            place = 0;
        }
        whole += i64::from(buffer[place]);
        place += 1;
        ramp += k;
        if ramp >= m {
            ramp -= m;
            whole -= 1;
        }
        count += 1.0;
        whole as f64 - ramp as f64 * scale - shift * count
    })
}

/// Simulates a channel and compares its lines with the prediction.
///
/// # Errors
/// `SimulateError` where the channel has no word, the detector has terms that no switched source has, or the loop runs
/// away.
pub fn simulate_channel(
    setup: &Setup,
    group: usize,
    channel: Frequency,
    cycles: Option<u64>,
    done: &dyn Fn(u64),
) -> Result<SimulatedChannel, SimulateError> {
    let stage = Stage::new(setup, group, channel)?;
    let plan = setup.plan();
    let settings = &plan.groups[group];
    let config = &stage.placement.modulator;
    let pfd_hz = setup.pfd().to_f64_hz();
    let edge_hz = stage.response.unity_gain_hz().unwrap_or(pfd_hz / 100.0);
    #[allow(clippy::cast_possible_truncation, clippy::cast_sign_loss, reason = "cycles of a finite positive ratio")]
    let dropped = (SETTLE_BANDWIDTHS * pfd_hz / edge_hz).ceil() as u64;
    let wanted = cycles.unwrap_or(DEFAULT_CYCLES).max(1024);
    let whole = period(config).length.and_then(|length| length.to_u64()).filter(|t| *t <= wanted);
    let cycles = whole.map_or(wanted, |t| wanted.div_ceil(t) * t);
    let legal = Legal { setup, group: settings, channel, placement: &stage.placement };
    let predicted = legal.lines(pfd_hz, &mut setup.scratch())?;
    let rest = predicted.as_ref().and_then(|(_, lines)| lines.rest_cycles);
    let static_cycles = stage.detector.drain_a / plan.detector.current_a * stage.placement.divider_ratio();
    // Starting near where the loop rests shortens what must be dropped.
    let (record, within) =
        stage.simulation(0.0, -rest.unwrap_or(static_cycles), phases(config))?.record(dropped, cycles, done)?;
    let mean = record.iter().sum::<f64>() / record.len() as f64;
    let record: Vec<f64> = record.iter().map(|phase| phase - mean).collect();
    let fft = FftStage::new();
    let segment = SEGMENT.min(record.len().next_power_of_two() / 4).max(256);
    let density = fft
        .density(
            &record,
            DensitySettings { segment, window: Window::FourTerm, sample_rate_hz: pfd_hz },
            &mut FftScratch::new(),
        )
        .map_err(|source| AssessError::Lines { channel, source: source.into() })?;
    let seen = Seen { record: &record, density: &density, segment, whole_periods: whole.is_some() };
    let tones = predicted.as_ref().map_or_else(Vec::new, |lines| compared_lines(&stage, lines, &seen));
    let reference_tones = reference_lines(&stage, &within, pfd_hz);
    let limits = settings.limits.integration_hz;
    let simulated_rms_deg = rms_deg(&density, segment, pfd_hz, limits);
    let result = setup.assess(group, settings.channels.len(), channel, &mut setup.scratch())?;
    let mut notes = stage.notes.clone();
    notes.extend(result.warnings.iter().cloned());
    let share = if config.is_held() { None } else { setup.modulator_share(&result)?.phase_deg };
    Ok(SimulatedChannel {
        channel,
        cycles,
        dropped_cycles: dropped,
        whole_periods: whole.is_some(),
        tones,
        reference_tones,
        integration_hz: limits,
        predicted_rms_deg: share.map(|deg| deg * stage.placement.output_divider as f64),
        simulated_rms_deg,
        density: thinned(&density, segment, pfd_hz),
        notes,
    })
}

/// What a simulated record shows.
struct Seen<'a> {
    record: &'a [f64],
    density: &'a crate::spectrum::Density,
    segment: usize,
    whole_periods: bool,
}

/// Returns the lines at the harmonics of K/M, predicted and seen.
fn compared_lines(stage: &Stage, (family, lines): &(Vec<FamilyTone>, FamilyLines), seen: &Seen) -> Vec<ComparedTone> {
    let pfd_hz = stage.setup.pfd().to_f64_hz();
    let edge_hz = stage.response.unity_gain_hz().unwrap_or(pfd_hz / 100.0);
    let window = if seen.whole_periods { Window::Rectangular } else { Window::FourTerm };
    let m = stage.placement.modulator.modulus().get();
    let residues: Vec<u64> = family.iter().map(|tone| tone.residue.unsigned_abs()).collect();
    let found = correlate_each(seen.record, &residues, m, window);
    let bandwidth_hz = pfd_hz / seen.record.len() as f64 * window.noise_bandwidth_bins();
    let mut tones = Vec::new();
    for ((tone, line), found) in family.iter().zip(&lines.family).zip(found) {
        let offset_hz = tone.residue.unsigned_abs() as f64 / m as f64 * pfd_hz;
        if offset_hz == 0.0 {
            continue;
        }
        // A mean over the cycle weakens the line by its sinc.
        let sinc = (PI * offset_hz / pfd_hz).sin() / (PI * offset_hz / pfd_hz);
        let size = line.nonlinearity.map(|excess| (line.modulator + excess).norm());
        let predicted_dbc = size.and_then(|size| sideband_dbc(size * stage.response.closed_loop(offset_hz).norm()));
        let simulated_dbc = sideband_dbc(found.norm() / sinc);
        #[allow(clippy::cast_possible_truncation, clippy::cast_sign_loss, reason = "a bin of the density")]
        let bin = (offset_hz / pfd_hz * seen.segment as f64).round() as usize;
        let beside = [bin.saturating_sub(BESIDE_BINS).max(1), bin + BESIDE_BINS]
            .into_iter()
            .filter_map(|bin| seen.density.at_bin(bin))
            .reduce(f64::min);
        tones.push(ComparedTone {
            harmonic: tone.harmonic,
            offset_hz,
            predicted_dbc,
            simulated_dbc,
            difference_db: predicted_dbc.zip(simulated_dbc).map(|(a, b)| a - b),
            floor_dbc: beside.and_then(|level| sideband_dbc((level * bandwidth_hz).sqrt())),
            inside_loop: offset_hz <= edge_hz,
        });
    }
    tones
}

fn reference_lines(stage: &Stage, within: &Within, pfd_hz: f64) -> Vec<ComparedTone> {
    let current_a = stage.setup.plan().detector.current_a;
    let predicted = |harmonic: u64| {
        let network = stage.setup.network()?;
        // Unknown leakage: an unknown tone, although 0 A is simulated.
        stage.setup.plan().detector.leakage_a?;
        reference_tone_dbc(network, stage.detector.drain_a, current_a, stage.gain_hz_per_v, pfd_hz, harmonic)
    };
    (1u64..)
        .zip(within.lines.iter().zip(within.scatter_cycles))
        .map(|(harmonic, (line, scatter))| {
            let (predicted_dbc, simulated_dbc) = (predicted(harmonic), sideband_dbc(line.norm()));
            ComparedTone {
                harmonic,
                offset_hz: harmonic as f64 * pfd_hz,
                predicted_dbc,
                simulated_dbc,
                difference_db: predicted_dbc.zip(simulated_dbc).map(|(a, b)| a - b),
                floor_dbc: sideband_dbc(scatter),
                inside_loop: false,
            }
        })
        .collect()
}

/// Returns the rms phase of a record between two offsets \[deg\], both sidebands.
fn rms_deg(density: &crate::spectrum::Density, segment: usize, pfd_hz: f64, limits: (f64, f64)) -> f64 {
    let spacing = pfd_hz / segment as f64;
    let power: f64 = (1..segment / 2)
        .filter(|bin| (limits.0..=limits.1).contains(&(*bin as f64 * spacing)))
        .filter_map(|bin| density.at_bin(bin))
        .sum();
    (2.0 * TAU * TAU * power * spacing).sqrt().to_degrees()
}

/// Returns the density in log-spaced cells, each its mean.
fn thinned(density: &crate::spectrum::Density, segment: usize, pfd_hz: f64) -> Vec<(f64, f64)> {
    let mut cells = Vec::new();
    let mut bin = 4usize;
    while bin < segment / 2 {
        let next = (bin + 1).max(bin + bin / 24).min(segment / 2);
        let values: Vec<f64> = (bin..next).filter_map(|i| density.at_bin(i)).collect();
        let mean = values.iter().sum::<f64>() / values.len().max(1) as f64;
        if mean > 0.0 {
            let offset_hz = (bin + next - 1) as f64 / 2.0 * pfd_hz / segment as f64;
            cells.push((offset_hz, crate::base::db_from_power(TAU * TAU * mean)));
        }
        bin = next;
    }
    cells
}

/// Simulates the way to a channel from a step below it, cycle slips included, modulator noise left out: the divider's
/// mean is that of the channel.
///
/// # Errors
/// As [`simulate_channel`].
pub fn simulate_step(
    setup: &Setup,
    group: usize,
    channel: Frequency,
    (step_hz, tolerance_hz): (f64, f64),
    cycles: Option<u64>,
) -> Result<Settling, SimulateError> {
    let stage = Stage::new(setup, group, channel)?;
    let pfd_hz = setup.pfd().to_f64_hz();
    let edge_hz = stage.response.unity_gain_hz().unwrap_or(pfd_hz / 100.0);
    let divider = stage.placement.output_divider as f64;
    #[allow(clippy::cast_possible_truncation, clippy::cast_sign_loss, reason = "cycles of a finite positive ratio")]
    let cycles = cycles.unwrap_or((30.0 * pfd_hz / edge_hz).ceil() as u64);
    let static_cycles = stage.detector.drain_a / setup.plan().detector.current_a * stage.placement.divider_ratio();
    // Divider edges without the modulator's phase: its noise would hide when the loop has settled.
    let samples = stage.simulation(-step_hz * divider, -static_cycles, Box::new(|| 0.0))?.transient(cycles)?;
    let last_outside = samples.iter().rposition(|sample| (sample.frequency_hz / divider).abs() > tolerance_hz);
    let settled_after_s = match last_outside {
        None => Some(0.0),
        Some(last) => samples.get(last + 1).map(|sample| sample.time_s),
    };
    let ratio = stage.placement.divider_ratio();
    let end = samples.last().map_or(0.0, |sample: &Sample| sample.phase_cycles + static_cycles);
    #[allow(clippy::cast_possible_truncation, reason = "a count of lost cycles")]
    let slips = (end / ratio).round() as i64;
    let linear = setup
        .network()
        .and_then(|network| StepResponse::new(network, setup.plan().detector.current_a, stage.gain_hz_per_v, ratio));
    let linear_settled_after_s = linear.as_ref().map(|step| step.settled_after_s(tolerance_hz / step_hz.abs()));
    let linear_hz = linear
        .map_or_else(Vec::new, |step| samples.iter().map(|sample| -step_hz * step.error_at(sample.time_s)).collect());
    let samples =
        samples.iter().map(|s| (s.time_s, s.frequency_hz / divider, s.phase_cycles * 360.0 / divider)).collect();
    Ok(Settling { channel, step_hz, tolerance_hz, settled_after_s, linear_settled_after_s, linear_hz, slips, samples })
}
