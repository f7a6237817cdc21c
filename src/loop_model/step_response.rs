//! The linear loop's answer to a frequency step, in partial fractions of its closed-loop poles.

use num_complex::Complex64;

use super::network::FilterNetwork;

/// Distance of the sum of residues from one beyond which the poles are too close to be told apart.
const RESIDUE_ERROR: f64 = 1e-6;
/// Rounds of the root finder.
const MOST_ROUNDS: usize = 500;
/// Samples in one turn of the fastest oscillation, or in one fall of the fastest real pole.
const SAMPLES_A_TURN: f64 = 40.0;

/// Frequency error after a step of one: `e(t) = Σ c_i·e^{s_i t}`, the inverse of E(s)/s with E = 1/(1 + A).
///
/// Continuous and linear: no sampling, no cycle slips.
#[derive(Debug, Clone, PartialEq)]
pub struct StepResponse {
    terms: Vec<(Complex64, Complex64)>,
}

impl StepResponse {
    /// Returns the answer of a loop with the pump current \[A\], the VCO's gain \[Hz/V\] and the divider N + K/M;
    /// `None` where it is unstable or two poles coincide.
    ///
    /// # Examples
    /// ```
    /// use thornmap::loop_model::{FilterComponents, FilterNetwork, StepResponse};
    /// let filter = FilterComponents { c1_farad: Some(1e-9), r2_ohm: 680.0, c2_farad: 10e-9, r3_c3: None, r4_c4: None };
    /// let step = StepResponse::new(&FilterNetwork::new(&filter).unwrap(), 2.5e-3, 32e6, 90.25).unwrap();
    /// assert!((step.error_at(0.0) - 1.0).abs() < 1e-6 && step.error_at(1e-3).abs() < 1e-9);
    /// ```
    #[must_use]
    pub fn new(network: &FilterNetwork, current_a: f64, gain_hz_per_v: f64, divider: f64) -> Option<Self> {
        let (denominator, zero_s) = network.polynomials();
        let gain = current_a * gain_hz_per_v / divider;
        // P(s) = s²·D(s) + g·(1 + s·T2), in units of √(g/D(0)) so that its coefficients are of one size.
        let unit = (gain / denominator[0]).sqrt();
        let mut closed: Vec<f64> = [0.0, 0.0].into_iter().chain(denominator.iter().copied()).collect();
        closed[0] += gain;
        closed[1] += gain * zero_s;
        let scaled = |polynomial: &[f64]| -> Vec<f64> {
            polynomial.iter().enumerate().map(|(power, c)| c * unit.powi(i32::try_from(power).unwrap_or(0))).collect()
        };
        let (closed, open) = (scaled(&closed), scaled(&denominator));
        let poles = roots(&closed)?;
        let slope: Vec<f64> = closed.iter().enumerate().skip(1).map(|(power, c)| c * power as f64).collect();
        // E(s)/s = s·D(s)/P(s).
        let terms: Vec<(Complex64, Complex64)> = poles
            .into_iter()
            .map(|pole| (pole * unit, pole * unit.powi(2) * value(&open, pole) / value(&slope, pole)))
            .collect();
        let start: Complex64 = terms.iter().map(|(_, residue)| residue).sum();
        let is_sound = (start - 1.0).norm() < RESIDUE_ERROR && terms.iter().all(|(pole, _)| pole.re < 0.0);
        is_sound.then_some(Self { terms })
    }

    /// Returns the frequency error at a time \[s\] after a step of one.
    #[must_use]
    pub fn error_at(&self, time_s: f64) -> f64 {
        self.terms.iter().map(|(pole, residue)| (residue * (pole * time_s).exp()).re).sum()
    }

    /// Returns the time \[s\] after which the error stays within a share of the step, above 0; 0 for one and more.
    #[must_use]
    pub fn settled_after_s(&self, share: f64) -> f64 {
        let slowest = self.terms.iter().map(|(pole, _)| -pole.re).fold(f64::INFINITY, f64::min);
        let fastest = self.terms.iter().map(|(pole, _)| pole.norm()).fold(0.0, f64::max);
        let bound: f64 = self.terms.iter().map(|(_, residue)| residue.norm()).sum();
        // Beyond this the sum of the terms' sizes is within the share.
        let end_s = ((bound / share).ln() / slowest).max(0.0);
        let step_s = 1.0 / (fastest * SAMPLES_A_TURN);
        #[allow(clippy::cast_possible_truncation, clippy::cast_sign_loss, reason = "a few thousand for any real loop")]
        let steps = (end_s / step_s).ceil().min(1e8) as u64;
        let outside = |time_s: f64| self.error_at(time_s).abs() > share;
        let Some(last) = (0..=steps).rev().map(|i| i as f64 * step_s).find(|time_s| outside(*time_s)) else {
            return 0.0;
        };
        let (mut low, mut high) = (last, last + step_s);
        for _ in 0..60 {
            let middle = 0.5 * (low + high);
            if outside(middle) { low = middle } else { high = middle }
        }
        high
    }
}

/// Returns a polynomial's value, coefficients by rising power.
fn value(polynomial: &[f64], at: Complex64) -> Complex64 {
    polynomial.iter().rev().fold(Complex64::ZERO, |sum, c| sum * at + c)
}

/// Returns all roots at once (Weierstrass 1891, Durand 1960, Kerner 1966); `None` where they do not settle.
fn roots(polynomial: &[f64]) -> Option<Vec<Complex64>> {
    let lead = *polynomial.last()?;
    let monic: Vec<f64> = polynomial.iter().map(|c| c / lead).collect();
    let degree = monic.len() - 1;
    // On a circle that holds every root (Cauchy's bound), at no symmetric places.
    let radius = monic[..degree]
        .iter()
        .enumerate()
        .map(|(power, c)| (2.0 * c.abs()).powf(1.0 / (degree - power) as f64))
        .fold(0.0, f64::max);
    let turn = std::f64::consts::TAU / degree as f64;
    let mut found: Vec<Complex64> = (0..degree).map(|i| Complex64::from_polar(radius, turn * i as f64 + 0.4)).collect();
    for _ in 0..MOST_ROUNDS {
        let mut largest: f64 = 0.0;
        for i in 0..degree {
            let others: Complex64 = (0..degree).filter(|j| *j != i).map(|j| found[i] - found[j]).product();
            let step = value(&monic, found[i]) / others;
            found[i] -= step;
            largest = largest.max(step.norm() / found[i].norm());
        }
        if largest < 1e-14 {
            break;
        }
    }
    found.iter().all(|root| root.is_finite()).then_some(found)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn roots_of_a_known_polynomial() {
        // (s + 1)(s + 20)(s² + 2s + 5): rising powers.
        let mut found = roots(&[100.0, 145.0, 67.0, 23.0, 1.0]).unwrap();
        found.sort_by(|a, b| a.re.total_cmp(&b.re).then(a.im.total_cmp(&b.im)));
        let wanted = [(-20.0, 0.0), (-1.0, -2.0), (-1.0, 0.0), (-1.0, 2.0)];
        assert_eq!(found.len(), 4);
        for (root, (re, im)) in found.iter().zip(wanted) {
            assert!((root - Complex64::new(re, im)).norm() < 1e-9, "{root}");
        }
    }
}
