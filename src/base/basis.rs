//! Where a figure comes from, so that no output hides an assumption.

use serde::{Deserialize, Serialize};

/// The origin of an input figure, strongest first: `max` of two is the weaker one.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord, Hash, Serialize, Deserialize)]
#[serde(rename_all = "lowercase")]
pub enum Basis {
    /// Measured on the user's hardware.
    Measured,
    /// Read in a data sheet.
    Datasheet,
    /// Assumed by the user (a plain string in the plan).
    Assumed,
    /// Filled in by the program.
    Default,
    /// Continued by the program beyond the points that were given.
    Extrapolated,
}

impl Basis {
    /// Returns the word used in plans and outputs.
    #[must_use]
    pub const fn word(self) -> &'static str {
        match self {
            Self::Measured => "measured",
            Self::Datasheet => "datasheet",
            Self::Assumed => "assumed",
            Self::Default => "default",
            Self::Extrapolated => "extrapolated",
        }
    }
}

/// One input that the results rest on, as every output lists it.
#[derive(Debug, Clone, PartialEq, Eq, Serialize)]
pub struct Assumption {
    /// Dotted key of the plan, for example `detector.mismatch`.
    pub key: String,
    /// The value as given, or the default in words.
    pub value: String,
    /// Where it comes from.
    pub basis: Basis,
    /// The user's note, if any.
    #[serde(skip_serializing_if = "Option::is_none")]
    pub note: Option<String>,
}
