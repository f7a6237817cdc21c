//! The detector's states and the search for the divider's next edge.

use thiserror::Error;

use super::kernel::{Plant, State};
use crate::loop_model::FilterNetwork;

/// Rounds of the edge search; each squares the error.
const MOST_ROUNDS: usize = 40;
/// Distance from an edge that counts as on it \[cycles\].
const ON_EDGE_CYCLES: f64 = 1e-13;

/// Why a simulation cannot run.
#[derive(Debug, Clone, PartialEq, Error)]
pub enum SimulationError {
    /// The filter's phase would jump with the current.
    #[error("a series R-C alone lets the voltage jump with the current; give the filter a C1")]
    NoShuntCapacitor,
    /// The frequency left everything a divider could follow.
    #[error("the loop ran away: the VCO would be at {found_hz:.3e} Hz after {cycles} cycles")]
    RanAway {
        /// Frequency.
        found_hz: f64,
        /// Reference cycles until then.
        cycles: u64,
    },
}

/// The phase detector and charge pump in time.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct SimulatedDetector {
    /// Current of the up source \[A\].
    pub up_a: f64,
    /// Current of the down source \[A\], positive.
    pub down_a: f64,
    /// Current that always discharges the filter: offset and leakage \[A\], positive discharges.
    pub drain_a: f64,
    /// Time from an edge until its source acts: half the dead zone \[s\].
    pub dead_zone_s: f64,
    /// Time both sources act together after the second edge \[s\].
    pub reset_delay_s: f64,
}

/// What a simulation depends on.
#[derive(Debug, Clone, Copy)]
pub struct SimulationInput<'a> {
    /// The filter.
    pub network: &'a FilterNetwork,
    /// Tuning gain \[Hz/V\].
    pub gain_hz_per_v: f64,
    /// PFD frequency \[Hz\].
    pub pfd_hz: f64,
    /// Target VCO frequency \[Hz\]: PFD frequency times N + K/M.
    pub target_hz: f64,
    /// The detector.
    pub detector: SimulatedDetector,
    /// VCO frequency at the start against the target \[Hz\].
    pub start_error_hz: f64,
    /// VCO phase at the start against the target's \[cycles\].
    pub start_phase_cycles: f64,
}

/// What the detector does now.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
enum Pump {
    Off,
    Up,
    Down,
    /// Both, until the reset is through.
    Both,
}

/// The running loop, `POLES` of the filter beside its integrator.
pub(super) struct Machine<const POLES: usize> {
    plant: Plant<POLES>,
    detector: SimulatedDetector,
    period_s: f64,
    target_hz: f64,
    pub state: State,
    /// Time since the last reference edge \[s\].
    since_s: f64,
    pump: Pump,
    /// Time left until the source that was told to act does, or until the reset is through \[s\].
    wait_s: f64,
    /// Divider edges counted minus reference edges counted.
    lead: i64,
    /// Phase at which the divider's next edge falls, against the target at the last reference edge \[cycles\].
    next_edge_cycles: f64,
}

impl<const POLES: usize> Machine<POLES> {
    pub fn new(input: &SimulationInput) -> Self {
        let poles = input.network.poles();
        let mut plant = Plant {
            integrator: input.network.integrator(),
            rates: [0.0; POLES],
            residues: [0.0; POLES],
            gain_hz_per_v: input.gain_hz_per_v,
        };
        for (i, pole) in poles.iter().take(POLES).enumerate() {
            plant.rates[i] = pole.rate;
            plant.residues[i] = pole.residue;
        }
        let state = State {
            direct_v: input.start_error_hz / input.gain_hz_per_v,
            phase_cycles: input.start_phase_cycles,
            ..State::default()
        };
        Self {
            plant,
            detector: input.detector,
            period_s: 1.0 / input.pfd_hz,
            target_hz: input.target_hz,
            state,
            since_s: 0.0,
            pump: Pump::Off,
            wait_s: 0.0,
            lead: 0,
            next_edge_cycles: 0.0,
        }
    }

    /// Returns the frequency error now \[Hz\].
    pub fn frequency_hz(&self) -> f64 {
        self.plant.frequency_hz(&self.state)
    }

    #[inline(always)]
    fn current_a(&self) -> f64 {
        let pumped = match self.pump {
            Pump::Off => 0.0,
            Pump::Up | Pump::Down if self.wait_s > 0.0 => 0.0,
            Pump::Up => self.detector.up_a,
            Pump::Down => -self.detector.down_a,
            Pump::Both => self.detector.up_a - self.detector.down_a,
        };
        pumped - self.detector.drain_a
    }

    /// Sets the phase error that the divider's first edge wants \[cycles\]: φ of the sequence. The edge belongs to the
    /// reference edge one period from the start.
    pub fn first_edge(&mut self, phase_cycles: f64) {
        self.next_edge_cycles = phase_cycles + self.target_hz * self.period_s;
    }

    /// Runs to the next reference edge; `next_phase` gives φ of each further divider edge, `watch` sees every stretch:
    /// (time since the last reference edge, span, state before it, current).
    #[inline(always)]
    pub fn cycle(
        &mut self,
        mut next_phase: impl FnMut() -> f64,
        mut watch: impl FnMut(&Plant<POLES>, f64, f64, &State, f64),
    ) -> Result<(), f64> {
        self.state.area_cycles_s = 0.0;
        loop {
            let to_reference_s = self.period_s - self.since_s;
            let mut span_s = to_reference_s;
            let mut is_wait = false;
            if self.wait_s > 0.0 && self.wait_s < span_s {
                span_s = self.wait_s;
                is_wait = true;
            }
            let current_a = self.current_a();
            let edge = self.edge_within(span_s, current_a)?;
            let (span_s, is_edge) = edge.map_or((span_s, false), |edge_s| (edge_s, true));
            watch(&self.plant, self.since_s, span_s, &self.state, current_a);
            self.plant.advance(&mut self.state, span_s, current_a);
            self.since_s += span_s;
            if self.wait_s > 0.0 {
                self.wait_s -= span_s;
            }
            if is_edge {
                self.divider_edge();
                self.lead += 1;
                // Edge i falls at i target periods and its φ, seen from the last reference edge.
                self.next_edge_cycles = next_phase() + (self.lead + 1) as f64 * self.target_hz * self.period_s;
            } else if is_wait {
                self.wait_s = 0.0;
                if self.pump == Pump::Both {
                    self.pump = Pump::Off;
                }
            } else {
                self.reference_edge();
                self.since_s = 0.0;
                self.lead -= 1;
                self.next_edge_cycles -= self.target_hz * self.period_s;
                return Ok(());
            }
        }
    }

    /// Returns the time to the divider's next edge where it falls within a span: f_0·t + phase error = next edge.
    #[inline(always)]
    fn edge_within(&self, span_s: f64, current_a: f64) -> Result<Option<f64>, f64> {
        let goal = self.next_edge_cycles - self.target_hz * self.since_s - self.state.phase_cycles;
        let frequency = self.plant.frequency_hz(&self.state);
        let rate = self.target_hz + frequency;
        if rate <= 0.0 || !rate.is_finite() {
            return Err(rate);
        }
        // Far from an edge even at twice the rate: no search. The frequency does not double within a cycle.
        if goal > 2.0 * rate * span_s {
            return Ok(None);
        }
        let slope = self.plant.slope_hz_per_s(&self.state, current_a);
        let mut guess = goal / rate;
        guess -= 0.5 * slope * guess * guess / rate;
        if guess > 1.5 * span_s {
            return Ok(None);
        }
        for _ in 0..MOST_ROUNDS {
            if guess <= 0.0 {
                return Ok(Some(0.0));
            }
            let mut there = State { phase_cycles: 0.0, ..self.state };
            self.plant.advance(&mut there, guess, current_a);
            let miss = self.target_hz * guess + there.phase_cycles - goal;
            if miss.abs() < ON_EDGE_CYCLES.max(1e-16 * goal.abs()) {
                break;
            }
            let step = miss / (self.target_hz + self.plant.frequency_hz(&there));
            guess -= step;
            if step.abs() < 1e-17 * self.period_s {
                break;
            }
        }
        Ok((guess < span_s).then_some(guess.max(0.0)))
    }

    #[inline(always)]
    fn reference_edge(&mut self) {
        match self.pump {
            Pump::Off => self.act(Pump::Up),
            Pump::Down => self.release(),
            // A further reference edge without a divider edge: the detector stays where it is (a slipped cycle).
            Pump::Up | Pump::Both => {}
        }
    }

    #[inline(always)]
    fn divider_edge(&mut self) {
        match self.pump {
            Pump::Off => self.act(Pump::Down),
            Pump::Up => self.release(),
            Pump::Down | Pump::Both => {}
        }
    }

    #[inline(always)]
    fn act(&mut self, pump: Pump) {
        self.pump = pump;
        self.wait_s = self.detector.dead_zone_s;
    }

    #[inline(always)]
    fn release(&mut self) {
        if self.detector.reset_delay_s > 0.0 {
            self.pump = Pump::Both;
            self.wait_s = self.detector.reset_delay_s;
        } else {
            self.pump = Pump::Off;
            self.wait_s = 0.0;
        }
    }
}
