//! The filter designed from bandwidth, phase margin and pole ratios.

use num_complex::Complex64;
use serde::Serialize;

use super::network::FilterNetwork;
use super::settings::{FilterComponents, LoopModelError};

/// A filter given by what the loop shall do.
#[derive(Debug, Clone, Copy, PartialEq, Serialize)]
pub struct FilterDesign {
    /// Open-loop unity-gain frequency at the design divider.
    pub bandwidth_hz: f64,
    /// Phase margin at the design divider, 0 < margin < 90.
    pub phase_margin_deg: f64,
    /// N + K/M of the design; `None` is the geometric mean of the smallest and largest legal one.
    pub design_divider: Option<f64>,
    /// R3·C3 over the first pole's time constant, and R4·C4 over R3·C3; the second needs the first.
    pub pole_ratios: (Option<f64>, Option<f64>),
}

impl FilterDesign {
    /// Returns the filter that gives this bandwidth and margin at a divider ratio.
    ///
    /// `T1 = (sec PM − tan PM)/ω_c`, `T2 = 1/(ω_c²·T1)`,
    /// `C = I_cp·K_vco/(N·ω_c²)·sqrt((1 + ω_c²T2²)/(1 + ω_c²T1²))`, `C1 = C·T1/T2`, `C2 = C − C1`, `R2 = T2/C2`,
    /// K_vco in Hz/V (Keese 1996).
    ///
    /// With pole ratios T1 is found so that the whole loaded network has the margin at ω_c, with C3 = C1/4, C4 = C3/4,
    /// R3·C3 = ratio·T1, R4·C4 = ratio·R3·C3 and `T2 = 1/(ω_c²·(T1 + R3·C3 + R4·C4))`; then all impedances are scaled,
    /// which moves no phase, so that the gain is one at ω_c.
    ///
    /// # Errors
    /// `NotPositive`, `PhaseMargin`, `FourthWithoutThird`.
    ///
    /// # Examples
    /// ```
    /// use thornmap::loop_model::FilterDesign;
    /// let design = FilterDesign { bandwidth_hz: 20e3, phase_margin_deg: 45.0, design_divider: None, pole_ratios: (None, None) };
    /// let filter = design.components(5e-3, 20e6, 4500.0).unwrap();
    /// assert!((filter.r2_ohm - 6826.03).abs() < 0.07);
    /// ```
    pub fn components(
        &self,
        current_a: f64,
        gain_hz_per_v: f64,
        divider: f64,
    ) -> Result<FilterComponents, LoopModelError> {
        for (what, found) in [
            ("the loop bandwidth", self.bandwidth_hz),
            ("the pump current", current_a),
            ("the tuning gain", gain_hz_per_v),
            ("the design divider", divider),
        ] {
            if !(found.is_finite() && found > 0.0) {
                return Err(LoopModelError::NotPositive { what, found });
            }
        }
        if !(self.phase_margin_deg > 0.0 && self.phase_margin_deg < 90.0) {
            return Err(LoopModelError::PhaseMargin { found_deg: self.phase_margin_deg });
        }
        let (third, fourth) = self.pole_ratios;
        for found in [third, fourth].into_iter().flatten() {
            if !(found.is_finite() && found > 0.0) {
                return Err(LoopModelError::NotPositive { what: "a pole ratio", found });
            }
        }
        match (third, fourth) {
            (None, Some(_)) => Err(LoopModelError::FourthWithoutThird),
            (None, None) => Ok(self.second_order(current_a, gain_hz_per_v, divider)),
            (Some(third), fourth) => self.with_more_poles((third, fourth), current_a * gain_hz_per_v / divider),
        }
    }

    fn second_order(&self, current_a: f64, gain_hz_per_v: f64, divider: f64) -> FilterComponents {
        let corner_rad = std::f64::consts::TAU * self.bandwidth_hz;
        let margin = self.phase_margin_deg.to_radians();
        let pole_s = (margin.cos().recip() - margin.tan()) / corner_rad;
        let zero_s = (corner_rad * corner_rad * pole_s).recip();
        let shape = (1.0 + (corner_rad * zero_s).powi(2)) / (1.0 + (corner_rad * pole_s).powi(2));
        let total = current_a * gain_hz_per_v / (divider * corner_rad * corner_rad) * shape.sqrt();
        let c1 = total * pole_s / zero_s;
        let c2 = total - c1;
        FilterComponents { c1_farad: Some(c1), r2_ohm: zero_s / c2, c2_farad: c2, r3_c3: None, r4_c4: None }
    }

    /// Finds T1 by bisection: a longer T1 leaves less margin.
    fn with_more_poles(&self, ratios: (f64, Option<f64>), forward: f64) -> Result<FilterComponents, LoopModelError> {
        let corner_rad = std::f64::consts::TAU * self.bandwidth_hz;
        let at = Complex64::new(0.0, corner_rad);
        // Phase of Z at ω_c above −90°; the loop's integrator adds another −90°.
        let margin_deg = |filter: &FilterComponents| -> Result<f64, LoopModelError> {
            Ok((FilterNetwork::new(filter)?.impedance(at) * at).arg().to_degrees())
        };
        let (mut short, mut long) = (1e-4 / corner_rad, 1.0 / corner_rad);
        for _ in 0..200 {
            let middle = (short * long).sqrt();
            if margin_deg(&trial(middle, ratios, corner_rad, 1.0))? > self.phase_margin_deg {
                short = middle;
            } else {
                long = middle;
            }
        }
        let filter = trial(short, ratios, corner_rad, 1.0);
        if (margin_deg(&filter)? - self.phase_margin_deg).abs() > 1e-6 {
            return Err(LoopModelError::PhaseMargin { found_deg: self.phase_margin_deg });
        }
        // |A| = I·K·|Z|/(N·ω): capacitances that much larger make it one.
        let gain = forward * FilterNetwork::new(&filter)?.impedance(at).norm() / corner_rad;
        Ok(trial(short, ratios, corner_rad, gain))
    }
}

/// Returns the filter with the first pole's time constant `first_s` and C1 + C2 = `total_farad`.
fn trial(first_s: f64, (third, fourth): (f64, Option<f64>), corner_rad: f64, total_farad: f64) -> FilterComponents {
    let third_s = third * first_s;
    let fourth_s = fourth.map_or(0.0, |ratio| ratio * third_s);
    let zero_s = (corner_rad * corner_rad * (first_s + third_s + fourth_s)).recip();
    let c1 = total_farad * first_s / zero_s;
    let c2 = total_farad - c1;
    let (c3, c4) = (c1 / 4.0, c1 / 16.0);
    FilterComponents {
        c1_farad: Some(c1),
        r2_ohm: zero_s / c2,
        c2_farad: c2,
        r3_c3: Some((third_s / c3, c3)),
        r4_c4: fourth.map(|_| (fourth_s / c4, c4)),
    }
}
