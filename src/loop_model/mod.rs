//! The loop around the modulator: filter, responses, noise, charge pump.

mod settings;

pub use settings::{ChargeTable, FilterComponents, FilterDesign, LoopModelError, NoisePoints, ResponseTable};
