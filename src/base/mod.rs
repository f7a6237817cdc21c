//! What every stage shares: exact numbers, decibels, units, and where a figure comes from.

mod basis;
mod decibel;
mod exact;
mod quantity;

pub use basis::{Assumption, Basis};
pub use decibel::{db_from_power, power_from_db};
pub use exact::{Exact, ExactError, Frequency};
pub use quantity::{Dimension, QuantityError, parse_number, parse_quantity};
