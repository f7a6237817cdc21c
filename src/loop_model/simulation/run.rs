//! Whole runs: settled records, reference tones, transients.

use std::f64::consts::TAU;

use num_complex::Complex64;

use super::kernel::{MOST_POLES, Plant, State};
use super::machine::{Machine, SimulationError, SimulationInput};

/// Samples of the phase within a cycle, for what happens at multiples of the PFD frequency.
const SAMPLES_WITHIN: usize = 64;
/// Parts of the average within the cycle.
const PARTS: u64 = 16;

/// One reference edge of a transient.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Sample {
    /// Time from the start \[s\].
    pub time_s: f64,
    /// VCO frequency against the target \[Hz\].
    pub frequency_hz: f64,
    /// VCO phase against the target's \[cycles\].
    pub phase_cycles: f64,
}

/// The phase within the cycle, averaged over many: lines at multiples of the PFD frequency.
#[derive(Debug, Clone, PartialEq)]
pub struct Within {
    /// Coefficients of the VCO phase at h·f_pfd, h = 1, 2, 3 \[cycles\].
    pub lines: [Complex64; 3],
    /// Standard error of each coefficient, from sixteen parts of the average \[cycles\]: what the modulator leaves.
    pub scatter_cycles: [f64; 3],
    /// Cycles averaged.
    pub cycles: u64,
}

/// A loop ready to run, with the phases that its divider's edges want.
pub struct Simulation<'a> {
    input: SimulationInput<'a>,
    phases: Box<dyn FnMut() -> f64 + 'a>,
}

/// A machine of any filter.
enum Any {
    One(Machine<1>),
    Two(Machine<2>),
    Three(Machine<3>),
}

/// Runs an expression with the machine inside.
macro_rules! each {
    ($any:expr, $machine:ident => $body:expr) => {
        match $any {
            Any::One($machine) => $body,
            Any::Two($machine) => $body,
            Any::Three($machine) => $body,
        }
    };
}

impl<'a> Simulation<'a> {
    /// Returns a simulation; `phases` gives φ\[n\] of the modulator \[cycles\], one for each divider edge from the first.
    ///
    /// # Errors
    /// `NoShuntCapacitor` for a series R–C alone.
    pub fn new(input: SimulationInput<'a>, phases: Box<dyn FnMut() -> f64 + 'a>) -> Result<Self, SimulationError> {
        let poles = input.network.poles().len();
        if input.network.direct_ohm() != 0.0 || poles == 0 || poles > MOST_POLES {
            return Err(SimulationError::NoShuntCapacitor);
        }
        Ok(Self { input, phases })
    }

    fn machine(&mut self) -> Any {
        let first = (self.phases)();
        let mut machine = match self.input.network.poles().len() {
            1 => Any::One(Machine::new(&self.input)),
            2 => Any::Two(Machine::new(&self.input)),
            _ => Any::Three(Machine::new(&self.input)),
        };
        each!(&mut machine, m => m.first_edge(first));
        machine
    }

    /// Returns the mean VCO phase of each cycle \[cycles\] after `settle` cycles are dropped, and the phase within the
    /// cycle; `done` is called with numbers of finished cycles.
    ///
    /// A mean over a cycle weakens a line at f by sinc(f/f_pfd) and its images by their own sinc, which is small where
    /// the loop has already filtered them: the caller divides by the former.
    ///
    /// # Errors
    /// `RanAway` where the loop does not hold.
    pub fn record(
        mut self,
        settle: u64,
        cycles: u64,
        done: &dyn Fn(u64),
    ) -> Result<(Vec<f64>, Within), SimulationError> {
        let pfd_hz = self.input.pfd_hz;
        let mut machine = self.machine();
        let mut record = Vec::with_capacity(usize::try_from(cycles).unwrap_or(0));
        let part_cycles = (cycles / PARTS).clamp(1, 256);
        let within_cycles = (part_cycles * PARTS).min(cycles);
        let first_within = settle + cycles - within_cycles;
        let mut parts: Vec<[Complex64; 3]> = Vec::new();
        let phases = &mut self.phases;
        let target_hz = self.input.target_hz;
        each!(&mut machine, m => {
            for n in 0..settle + cycles {
                let result = if n >= first_within {
                    if (n - first_within).is_multiple_of(part_cycles) {
                        parts.push([Complex64::ZERO; 3]);
                    }
                    let last = parts.len() - 1;
                    let mut sampler = Sampler { sums: &mut parts[last], step_s: 1.0 / pfd_hz / SAMPLES_WITHIN as f64 };
                    m.cycle(&mut *phases, |plant, since, span, state, current| {
                        sampler.take(plant, since, span, state, current);
                    })
                } else {
                    m.cycle(&mut *phases, |_, _, _, _, _| {})
                };
                result.map_err(|found_hz| SimulationError::RanAway { found_hz, cycles: n })?;
                if m.state.phase_cycles.is_nan() || m.state.phase_cycles.abs() > 1e9 {
                    return Err(SimulationError::RanAway { found_hz: target_hz + m.frequency_hz(), cycles: n });
                }
                if n >= settle {
                    record.push(m.state.area_cycles_s * pfd_hz);
                }
                if n % 65_536 == 65_535 {
                    done(65_536);
                }
            }
        });
        Ok((record, averaged(&parts, part_cycles, within_cycles)))
    }

    /// Returns the loop's way at every reference edge.
    ///
    /// # Errors
    /// `RanAway` where the loop does not hold.
    pub fn transient(mut self, cycles: u64) -> Result<Vec<Sample>, SimulationError> {
        let period_s = 1.0 / self.input.pfd_hz;
        let mut machine = self.machine();
        let mut samples = Vec::with_capacity(usize::try_from(cycles).unwrap_or(0) + 1);
        let phases = &mut self.phases;
        each!(&mut machine, m => {
            for n in 0..=cycles {
                samples.push(Sample {
                    time_s: n as f64 * period_s,
                    frequency_hz: m.frequency_hz(),
                    phase_cycles: m.state.phase_cycles,
                });
                m.cycle(&mut *phases, |_, _, _, _, _| {})
                    .map_err(|found_hz| SimulationError::RanAway { found_hz, cycles: n })?;
            }
        });
        Ok(samples)
    }
}

/// Returns mean and standard error of the parts.
fn averaged(parts: &[[Complex64; 3]], part_cycles: u64, cycles: u64) -> Within {
    let samples = (part_cycles * SAMPLES_WITHIN as u64) as f64;
    let count = parts.len().max(1) as f64;
    let mut within = Within { lines: [Complex64::ZERO; 3], scatter_cycles: [0.0; 3], cycles };
    for h in 0..3 {
        let mean = parts.iter().map(|part| part[h] / samples).sum::<Complex64>() / count;
        let spread: f64 = parts.iter().map(|part| (part[h] / samples - mean).norm_sqr()).sum();
        within.lines[h] = mean;
        within.scatter_cycles[h] = (spread / (count * (count - 1.0).max(1.0))).sqrt();
    }
    within
}

/// Takes samples of the phase at even times within the cycle.
struct Sampler<'s> {
    sums: &'s mut [Complex64; 3],
    step_s: f64,
}

impl Sampler<'_> {
    fn take<const POLES: usize>(
        &mut self,
        plant: &Plant<POLES>,
        since_s: f64,
        span_s: f64,
        state: &State,
        current_a: f64,
    ) {
        // Half a step off the reference edge, where the phase bends.
        #[allow(clippy::cast_possible_truncation, clippy::cast_sign_loss, reason = "a place within one cycle")]
        let mut next = (since_s / self.step_s - 0.5).ceil().max(0.0) as usize;
        while next < SAMPLES_WITHIN && (next as f64 + 0.5) * self.step_s < since_s + span_s {
            let mut there = *state;
            plant.advance(&mut there, (next as f64 + 0.5) * self.step_s - since_s, current_a);
            let turn = -TAU * (next as f64 + 0.5) / SAMPLES_WITHIN as f64;
            for (h, sum) in (1..).zip(self.sums.iter_mut()) {
                *sum += Complex64::from_polar(there.phase_cycles, turn * f64::from(h));
            }
            next += 1;
        }
    }
}
