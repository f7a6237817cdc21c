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
    /// R4–C4 without R3–C3.
    #[error("a fourth pole (R4, C4) needs the third (R3, C3)")]
    FourthWithoutThird,
    /// A phase margin that no filter of this shape gives.
    #[error("a phase margin of {found_deg} deg is outside 0 … 90 deg, ends excluded")]
    PhaseMargin {
        /// The value.
        found_deg: f64,
    },
    /// The sampled loop grows although its gain at half the PFD frequency does not tell.
    #[error(
        "the sampled loop is unstable: {poles} of its closed-loop poles lie outside the unit circle \
         (PFD frequency over unity-gain frequency is {ratio:.2}, phase margin {margin_deg:.1} deg); \
         lower the bandwidth, raise the PFD frequency or move the filter's zero and poles apart"
    )]
    Grows {
        /// f_pfd/f_c.
        ratio: f64,
        /// Margin of the unsampled loop \[deg\].
        margin_deg: f64,
        /// Poles outside.
        poles: usize,
    },
    /// The sampled loop is unstable.
    #[error(
        "the sampled loop is unstable: open-loop gain {found:.3} at half the PFD frequency is not above -1 \
         (PFD frequency over unity-gain frequency is {ratio:.2}); lower the bandwidth or raise the PFD frequency"
    )]
    Unstable {
        /// f_pfd/f_c.
        ratio: f64,
        /// A*(f_pfd/2).
        found: f64,
    },
}

/// Noise against offset: log-log linear between the points.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct NoisePoints {
    /// (offset \[Hz\] > 0, strictly rising; level \[dBc/Hz\]).
    pub(super) points: Vec<(f64, f64)>,
}

impl NoisePoints {
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

impl FilterComponents {
    /// Checks that every component is positive and finite and that the sections follow each other.
    ///
    /// # Errors
    /// `NotPositive`, `FourthWithoutThird`.
    pub fn check(&self) -> Result<(), LoopModelError> {
        let given = [
            ("R2", Some(self.r2_ohm)),
            ("C2", Some(self.c2_farad)),
            ("C1", self.c1_farad),
            ("R3", self.r3_c3.map(|(ohm, _)| ohm)),
            ("C3", self.r3_c3.map(|(_, farad)| farad)),
            ("R4", self.r4_c4.map(|(ohm, _)| ohm)),
            ("C4", self.r4_c4.map(|(_, farad)| farad)),
        ];
        for (what, value) in given {
            if let Some(found) = value.filter(|found| !(found.is_finite() && *found > 0.0)) {
                return Err(LoopModelError::NotPositive { what, found });
            }
        }
        if self.r4_c4.is_some() && self.r3_c3.is_none() {
            return Err(LoopModelError::FourthWithoutThird);
        }
        Ok(())
    }
}

/// A measured closed-loop response.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct ResponseTable {
    /// (offset \[Hz\] > 0 strictly rising, closed-loop gain H, 1 at low offset).
    #[serde(skip)]
    pub points: Vec<(f64, Complex64)>,
}

impl ResponseTable {
    /// Checks that offsets rise strictly and everything is finite.
    ///
    /// # Errors
    /// `BadPoints`.
    pub fn check(&self) -> Result<(), LoopModelError> {
        let rising = self.points.windows(2).all(|pair| pair[0].0 < pair[1].0);
        let usable = self.points.iter().all(|(offset, gain)| *offset > 0.0 && offset.is_finite() && gain.is_finite());
        if self.points.len() < 2 || !rising || !usable {
            return Err(LoopModelError::BadPoints {
                what: "a response table",
                least: 2,
                found: format!("{} points", self.points.len()),
            });
        }
        Ok(())
    }
}

/// A measured charge curve.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct ChargeTable {
    /// (time error \[s\] strictly rising, charge \[A·s\]).
    pub points: Vec<(f64, f64)>,
}

/// How the free-running oscillator noise is given.
#[derive(Debug, Clone, PartialEq, Serialize)]
#[serde(rename_all = "snake_case")]
pub enum OscillatorNoise {
    /// Points of single-sideband noise at the oscillator.
    Points(NoisePoints),
    /// Leeson's model in the form `F·k·T/(2·P_s)·(1 + f_c/f)·(1 + (f_0/(2Qf))²)`; copies without the 2 differ by 3 dB
    /// or, with 2FkT/P_s, by 6 dB.
    Leeson {
        /// Noise factor F (power ratio, ≥ 1).
        noise_factor: f64,
        /// Signal power \[W\].
        power_w: f64,
        /// Loaded quality factor.
        loaded_q: f64,
        /// Flicker corner \[Hz\].
        corner_hz: f64,
        /// Temperature \[K\].
        temperature_k: f64,
    },
}
