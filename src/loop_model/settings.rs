//! Checked descriptions of the loop's parts, in base units.

use num_complex::Complex64;
use serde::Serialize;
use thiserror::Error;

/// Why a part of the loop cannot be set up or evaluated.
#[derive(Debug, Clone, PartialEq, Error)]
pub enum LoopModelError {
    /// Points of a table do not rise strictly, are not finite, or are too few.
    #[error("{what} needs at least {least} finite points that rise strictly; found {found}")]
    BadPoints {
        /// Which table.
        what: &'static str,
        /// How many are needed.
        least: usize,
        /// What is wrong.
        found: String,
    },
    /// A value must be positive.
    #[error("{what} must be positive and finite; found {found}")]
    NotPositive {
        /// Which value.
        what: &'static str,
        /// The value.
        found: f64,
    },
}

/// Noise against offset: log-log linear between the points.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct NoisePoints {
    /// (offset \[Hz\] > 0, strictly rising; level \[dBc/Hz\]).
    points: Vec<(f64, f64)>,
}

impl NoisePoints {
    /// Returns checked points.
    ///
    /// # Errors
    /// `BadPoints` for an empty list, offsets that are not positive and strictly rising, or values not finite.
    pub fn new(points: Vec<(f64, f64)>) -> Result<Self, LoopModelError> {
        let rising = points.windows(2).all(|pair| pair[0].0 < pair[1].0);
        let usable = points.iter().all(|(offset, level)| offset.is_finite() && *offset > 0.0 && level.is_finite());
        if points.is_empty() || !rising || !usable {
            return Err(LoopModelError::BadPoints { what: "a noise curve", least: 1, found: format!("{points:?}") });
        }
        Ok(Self { points })
    }

    /// Returns the points.
    #[must_use]
    pub fn points(&self) -> &[(f64, f64)] {
        &self.points
    }
}

/// The filter's components: C1 ‖ (R2 + C2), then optional R3–C3 and R4–C4 towards the tuning node.
#[derive(Debug, Clone, Copy, PartialEq, Serialize)]
pub struct FilterComponents {
    /// First shunt capacitor; `None` for a series R–C alone.
    pub c1_farad: Option<f64>,
    /// Resistor of the zero.
    pub r2_ohm: f64,
    /// Capacitor of the zero.
    pub c2_farad: f64,
    /// Third pole, resistor and capacitor.
    pub r3_c3: Option<(f64, f64)>,
    /// Fourth pole, resistor and capacitor; needs the third.
    pub r4_c4: Option<(f64, f64)>,
}

/// A second-order filter given by what the loop shall do.
#[derive(Debug, Clone, Copy, PartialEq, Serialize)]
pub struct FilterDesign {
    /// Open-loop unity-gain frequency at the design divider.
    pub bandwidth_hz: f64,
    /// Phase margin at the design divider, 0 < margin < 90.
    pub phase_margin_deg: f64,
    /// N + K/M of the design; `None` is the geometric mean of the smallest and largest legal one.
    pub design_divider: Option<f64>,
}

/// A measured closed-loop response.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct ResponseTable {
    /// (offset \[Hz\] > 0 strictly rising, closed-loop gain H, 1 at low offset).
    #[serde(skip)]
    pub points: Vec<(f64, Complex64)>,
}

/// A measured charge curve.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct ChargeTable {
    /// (time error \[s\] strictly rising, charge \[A·s\]).
    pub points: Vec<(f64, f64)>,
}
