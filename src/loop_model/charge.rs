//! The detector's static charge curve.

use super::settings::ChargeTable;

/// Charge per PFD cycle against time error, both in VCO cycles (charge over pump current, time times f_vco).
///
/// A positive time error means that the divider edge is late and the up source acts.
#[derive(Debug, Clone, PartialEq)]
pub struct ChargeCurve {
    form: Form,
    kinks: Vec<f64>,
}

#[derive(Debug, Clone, PartialEq)]
enum Form {
    /// `(1 ± ε/2)·(|p| − δ)·sign p + quadratic·p² + cubic·p³`.
    Static { mismatch: f64, dead_zone: f64, quadratic: f64, cubic: f64 },
    /// Linear between points, the end slopes held.
    Table(Vec<(f64, f64)>),
}

/// The terms of a static curve.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct ChargeTerms {
    /// ε = (I_up − I_dn)/((I_up + I_dn)/2), negative allowed.
    pub mismatch: f64,
    /// Half width of the dead zone δ \[cycles\], at or above zero.
    pub dead_zone_cycles: f64,
    /// Quadratic term \[1/cycle\].
    pub quadratic_per_cycle: f64,
    /// Cubic term \[1/cycle²\].
    pub cubic_per_cycle2: f64,
}

impl ChargeCurve {
    /// Returns the curve of mismatch, dead zone and polynomial terms.
    #[must_use]
    pub fn from_terms(terms: &ChargeTerms) -> Self {
        let kinks = match (terms.dead_zone_cycles > 0.0, terms.mismatch != 0.0) {
            (true, _) => vec![-terms.dead_zone_cycles, terms.dead_zone_cycles],
            (false, true) => vec![0.0],
            (false, false) => Vec::new(),
        };
        Self {
            form: Form::Static {
                mismatch: terms.mismatch,
                dead_zone: terms.dead_zone_cycles,
                quadratic: terms.quadratic_per_cycle,
                cubic: terms.cubic_per_cycle2,
            },
            kinks,
        }
    }

    /// Returns the curve of a measured table at a pump current \[A\] and VCO frequency \[Hz\].
    #[must_use]
    pub fn from_table(table: &ChargeTable, current_a: f64, vco_hz: f64) -> Self {
        let points: Vec<(f64, f64)> =
            table.points.iter().map(|(time, charge)| (time * vco_hz, charge / current_a * vco_hz)).collect();
        let kinks = points.iter().map(|(at, _)| *at).collect();
        Self { form: Form::Table(points), kinks }
    }

    /// Returns g(p) \[cycles\].
    ///
    /// # Examples
    /// ```
    /// use thornmap::loop_model::{ChargeCurve, ChargeTerms};
    /// let curve = ChargeCurve::from_terms(&ChargeTerms {
    ///     mismatch: 0.02, dead_zone_cycles: 0.0, quadratic_per_cycle: 0.0, cubic_per_cycle2: 0.0,
    /// });
    /// assert!((curve.at(1.0) - 1.01).abs() < 1e-15 && (curve.at(-1.0) + 0.99).abs() < 1e-15);
    /// ```
    #[must_use]
    pub fn at(&self, time_error_cycles: f64) -> f64 {
        let p = time_error_cycles;
        match &self.form {
            Form::Static { mismatch, dead_zone, quadratic, cubic } => {
                let beyond = (p.abs() - dead_zone).max(0.0);
                p.signum() * beyond + 0.5 * mismatch * beyond + p * p * (quadratic + cubic * p)
            }
            Form::Table(points) => {
                let after = points.partition_point(|(at, _)| *at <= p).clamp(1, points.len() - 1);
                let ((x0, y0), (x1, y1)) = (points[after - 1], points[after]);
                y0 + (y1 - y0) * (p - x0) / (x1 - x0)
            }
        }
    }

    /// Returns the positions at which the curve is not smooth \[cycles\].
    #[must_use]
    pub fn kinks(&self) -> &[f64] {
        &self.kinks
    }

    /// Returns whether the curve is a straight line through zero, so that it makes no tone.
    #[must_use]
    pub fn is_linear(&self) -> bool {
        matches!(self.form, Form::Static { quadratic: 0.0, cubic: 0.0, .. }) && self.kinks.is_empty()
    }
}

/// Returns the static charge φ_0 = (I_offset + I_leak)/I_cp·(N + K/M) that the detector must supply \[cycles\];
/// positive currents discharge the filter.
#[must_use]
pub fn static_charge_cycles(discharging_a: f64, current_a: f64, divider: f64) -> f64 {
    discharging_a / current_a * divider
}
