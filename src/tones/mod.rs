//! Where tones lie and how strong they are; positions are exact, levels are physics.

mod anchor;
mod boundary;
mod clock;
mod combine;
mod curve;
mod curve_density;
mod curve_error;
mod curve_folded;
mod curve_lattice;
mod curve_quadrature;
mod curve_settle;
mod curve_uncertainty;
mod family;

pub use anchor::{AnchorLevel, FittedAnchor, Mechanism, Transfer, fitted_anchors};
pub use boundary::{NearFraction, nearest_fraction, signed_residue};
pub use clock::{Carriers, ClockPath, ClockTone, clock_tones};
pub use combine::worst_case_sum_dbc;
pub use curve::{Charge, CurveLine, harmonic};
pub use curve_density::{LARGEST_ORDER, PhaseDensity};
pub use curve_error::CurveError;
pub use curve_folded::{FoldedNoise, folded_noise};
pub use curve_lattice::{LONGEST_LATTICE, PhaseLattice, harmonic_on_lattice, lattice_is_short};
pub use curve_settle::{Settled, settle, settle_on_lattice, settle_samples};
pub use curve_uncertainty::{level_uncertainty_db, line_noise_cycles2};
pub use family::{CouplingOrder, FamilyTone, modulator_family};
