//! The loop around the modulator: filter, responses, charge curve, noise.

mod charge;
mod design;
mod integral;
mod network;
mod noise_budget;
mod noise_points;
mod reference_tone;
mod response;
mod settings;
mod simulation;
mod stability;
mod step_response;

pub use charge::{ChargeCurve, ChargeTerms, static_charge_cycles};
pub use design::FilterDesign;
pub use integral::{PhaseFigures, integrate_log_log};
pub use network::{FilterNetwork, Pole, Resistor};
pub use noise_budget::{FILTER_TEMPERATURE_K, NoiseBudget, NoiseInput, NoiseSource, log_grid, noise_budget};
pub use noise_points::{BOLTZMANN_J_PER_K, NoiseRole, detector_flicker_dbc_per_hz, detector_floor_dbc_per_hz};
pub use reference_tone::{reference_tone_dbc, ripple_tone_dbc};
pub use response::{LoopPoint, LoopResponse};
pub use settings::{ChargeTable, FilterComponents, LoopModelError, NoisePoints, OscillatorNoise, ResponseTable};
pub use simulation::{Sample, SimulatedDetector, Simulation, SimulationError, SimulationInput, Within};
pub use step_response::StepResponse;
