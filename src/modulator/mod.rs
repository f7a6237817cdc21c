//! Integer-only modulator engine: what drives the divider, bit for bit.
//!
//! A [`Word`] N, K, M comes from an exact ratio ([`word::nearest`]); [`ModulatorSettings`] with K and M make a checked
//! [`ModulatorConfig`]; [`start`] runs it, [`period`], [`transient`], [`output_range`] and the getters of the
//! configuration say what is known without running.
//!
//! Conventions: y\[n\] is the integer added to N in PFD cycle n, counted from 0; residues and errors lie in 0 … M − 1;
//! "over a period" means outputs t … t + T − 1 with t = [`transient`]; the phase error is in cycles of the VCO.
//!
//! A new structure: a variant of [`Structure`] with its word and orders (`config`), its stage as a `StageRule`
//! (`cascade`) or a module of its own, one line in [`start`], its range and transient (`range`), its length (`period`),
//! and its recurrence once more, slowly, in [`oracle`]. The compiler names every place; the suite tests the rest.

mod cascade;
mod checked;
mod closed_form;
mod config;
mod error;
mod error_feedback;
mod jump;
mod mash;
pub mod oracle;
mod period;
mod phase;
mod prime;
mod range;
mod register;
mod residues;
mod sequence;
mod white;
pub mod word;

pub use checked::ModulatorConfig;
pub use config::{Dither, ModulatorSettings, Modulus, ModulusRule, Structure};
pub use error::ModulatorError;
pub use jump::jump_to;
pub use period::{DEFAULT_MOST_STEPS, Period, PeriodBasis, period, period_within};
pub use phase::PhaseRun;
pub use prime::{is_prime, prime_feedback};
pub use range::{output_range, transient};
pub use register::{REGISTER_LENGTHS, Register, tap_pair};
pub use sequence::{Modulator, phase_numerators, start};
pub use word::{Word, WordError};
