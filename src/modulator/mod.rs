//! Integer-only modulator engine: what drives the divider, bit for bit.

mod config;

pub use config::{Dither, ModulatorError, ModulatorSettings, Modulus, ModulusRule, Structure};
