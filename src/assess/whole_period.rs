//! The slow route to a line: direct correlation over every cycle of an exact period.

use std::f64::consts::TAU;

use num_complex::Complex64;
use num_traits::ToPrimitive;

use crate::base::db_from_power;
use crate::modulator::{ModulatorConfig, ModulatorError, phase_numerators, start, transient};

use super::channel::Legal;
use super::placement::{Placement, place};
use super::result::ChannelResult;
use super::setup::{AssessError, Setup};

/// Outputs generated at a time.
const BLOCK: usize = 1 << 14;

/// Cycles that share a table of turns.
const STRETCH: usize = 256;

/// One line found by both routes.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct LineCheck {
    /// Size of the difference \[dB\].
    pub difference_db: f64,
    /// What the channel states for the line \[dB\].
    pub uncertainty_db: f64,
}

impl Setup<'_> {
    /// Returns how the channel's surest line of the shared curve compares with the same line summed over the whole exact
    /// period; `None` where no line stands above its own noise.
    ///
    /// # Errors
    /// As for the channel itself.
    pub fn check_line(&self, channel: &ChannelResult) -> Result<Option<LineCheck>, AssessError> {
        let Some(period) = channel.period.as_ref().and_then(ToPrimitive::to_u64) else { return Ok(None) };
        let group = &self.plan().groups[channel.group_index];
        let placement = place(self.plan(), group, channel.channel)?;
        let legal = Legal { setup: self, group, channel: channel.channel, placement: &placement };
        let mut scratch = self.scratch();
        let Some((family, lines)) = legal.lines(channel.pfd_hz, &mut scratch)? else { return Ok(None) };
        let (Some(curve), Some(offset_cycles)) = (legal.charge_curve(), lines.rest_cycles) else { return Ok(None) };
        let surest = family
            .iter()
            .zip(&lines.family)
            .filter_map(|(tone, line)| line.uncertainty_db.map(|uncertainty_db| (tone, line, uncertainty_db)))
            .min_by(|a, b| a.2.total_cmp(&b.2));
        let Some((tone, line, uncertainty_db)) = surest else { return Ok(None) };
        let expected = (line.modulator + line.nonlinearity.unwrap_or_default()).norm();
        let found =
            correlate_period(&placement, period, tone.residue.unsigned_abs(), |phase| curve.at(phase + offset_cycles))
                .map_err(|source| AssessError::Lines { channel: channel.channel, source: source.into() })?;
        if expected <= 0.0 || found.norm() <= 0.0 {
            return Ok(None);
        }
        let ratio = found.norm() / expected;
        Ok(Some(LineCheck { difference_db: db_from_power(ratio * ratio).abs(), uncertainty_db }))
    }
}

/// Returns the line at `residue`/M over one whole period of g(ψ).
fn correlate_period(
    placement: &Placement,
    period: u64,
    residue: u64,
    charge: impl Fn(f64) -> f64,
) -> Result<Complex64, ModulatorError> {
    let config = &placement.modulator;
    let modulus = config.modulus().get();
    let scale = 1.0 / modulus as f64;
    let mean = mean_phase(config, period)?;
    // Turns of one stretch; the stretch itself is turned by its own exact integer.
    let residue_of = |n: usize| u128::from(residue) * n as u128 % u128::from(modulus);
    let turns: Vec<Complex64> = (0..STRETCH).map(|n| Complex64::cis(-TAU * (residue_of(n) as f64 * scale))).collect();
    let mut sum = Complex64::ZERO;
    let mut stretch = Complex64::ZERO;
    let (mut place, mut start) = (0, 0u128);
    let turned = |start: u128, stretch: Complex64| Complex64::cis(-TAU * (start as f64 * scale)) * stretch;
    for_each_phase(config, period, |numerator| {
        stretch += turns[place] * charge(numerator as f64 * scale - mean);
        place += 1;
        if place == STRETCH {
            sum += turned(start, stretch);
            start = (start + residue_of(STRETCH)) % u128::from(modulus);
            (place, stretch) = (0, Complex64::ZERO);
        }
    })?;
    sum += turned(start, stretch);
    Ok(sum / period as f64)
}

/// Returns the mean of φ over a period, from exact integer sums.
fn mean_phase(config: &ModulatorConfig, period: u64) -> Result<f64, ModulatorError> {
    let mut sum: i128 = 0;
    for_each_phase(config, period, |numerator| sum += i128::from(numerator))?;
    Ok(sum as f64 / (period as f64 * config.modulus().get() as f64))
}

/// Calls `take` with M·φ of each cycle of the period after the transient.
fn for_each_phase(config: &ModulatorConfig, period: u64, mut take: impl FnMut(i64)) -> Result<(), ModulatorError> {
    let mut modulator = start(config);
    let skipped = transient(config);
    let mut outputs = vec![0; BLOCK];
    let mut numerators = vec![0; BLOCK];
    let mut before = 0i64;
    let mut first = true;
    let mut left = period;
    while left > 0 {
        let size = if first { skipped } else { left.min(BLOCK as u64).to_usize().unwrap_or(BLOCK) };
        modulator.fill(&mut outputs[..size]);
        phase_numerators(&outputs[..size], config.k(), config.modulus(), &mut numerators[..size])?;
        if !first {
            numerators[..size].iter().for_each(|numerator| take(before + numerator));
            left -= size as u64;
        }
        before += if size == 0 { 0 } else { numerators[size - 1] };
        first = false;
    }
    Ok(())
}
