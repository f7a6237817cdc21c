//! The loop in time, event by event: exact between edges, whatever the detector does at them.

mod kernel;
mod machine;
mod run;

pub use machine::{SimulatedDetector, SimulationError, SimulationInput};
pub use run::{Sample, Simulation, Within};
