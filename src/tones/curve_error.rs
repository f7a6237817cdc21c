//! What the conditional-mean curve refuses.

use thiserror::Error;

use super::{LARGEST_ORDER, LONGEST_LATTICE};

/// Why a curve has no result.
#[derive(Debug, Clone, PartialEq, Error)]
pub enum CurveError {
    /// No density is known for this order.
    #[error("order {found} is outside 1 … {LARGEST_ORDER}, for which the phase density is known")]
    OrderOutOfRange {
        /// The order found.
        found: u8,
    },
    /// The charge never balances the offset.
    #[error(
        "a mean charge of {target_cycles} cycles is not reached: the curve gives {lowest_cycles} … {highest_cycles}"
    )]
    Unreachable {
        /// Mean charge asked for.
        target_cycles: f64,
        /// Smallest mean charge found.
        lowest_cycles: f64,
        /// Largest mean charge found.
        highest_cycles: f64,
    },
    /// The charge curve or the target is no number.
    #[error("the charge is {charge_cycles} at a time error of {at_cycles} cycles, not a finite number")]
    NotFinite {
        /// Time error.
        at_cycles: f64,
        /// The charge found there.
        charge_cycles: f64,
    },
    /// No samples to settle on.
    #[error("no phase samples to settle on; at least one is needed")]
    NoSamples,
    /// The lattice is empty, or too long to be summed point by point.
    #[error("a lattice of {found} points is outside 1 … {LONGEST_LATTICE}; longer ones take the continuous density")]
    LatticeOutOfRange {
        /// Points found.
        found: u64,
    },
    /// The start of the lattice lies outside one step.
    #[error("a lattice start of {found_cycles} cycles is outside 0 … {step_cycles}, one step")]
    LatticeStart {
        /// The start found.
        found_cycles: f64,
        /// One step.
        step_cycles: f64,
    },
}
