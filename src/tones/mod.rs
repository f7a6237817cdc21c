//! Where tones lie and how strong they are; positions are exact, levels are physics.

mod anchor;
mod boundary;
mod clock;
mod combine;
mod family;

pub use anchor::{AnchorLevel, Mechanism, Transfer};
pub use boundary::{NearFraction, nearest_fraction, signed_residue};
pub use clock::{Carriers, ClockPath, ClockTone, clock_tones};
pub use combine::worst_case_sum_dbc;
pub use family::{CouplingOrder, FamilyTone, modulator_family};
