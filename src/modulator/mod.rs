//! Integer-only modulator engine: what drives the divider, bit for bit.

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
mod prime;
mod range;
mod register;
mod sequence;
pub mod word;

pub use checked::ModulatorConfig;
pub use config::{Dither, ModulatorSettings, Modulus, ModulusRule, Structure};
pub use error::ModulatorError;
pub use jump::jump_to;
pub use period::{DEFAULT_MOST_STEPS, Period, PeriodBasis, period, period_within};
pub use prime::{is_prime, prime_feedback};
pub use range::{output_range, transient};
pub use register::{REGISTER_LENGTHS, Register, tap_pair};
pub use sequence::{Modulator, phase_numerators, start};
pub use word::{Word, WordError};
