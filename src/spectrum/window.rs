//! Windows for records that are no whole period.

use std::f64::consts::TAU;

use serde::Serialize;

/// Weights over a record.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum Window {
    /// No weighting: for whole periods only.
    Rectangular,
    /// `0.5 − 0.5·cos`: sidelobes −31 dB, falling 18 dB/octave. Narrow; enough for orders 1 and 2.
    Hann,
    /// Four cosine terms with a continuous third derivative (Nuttall 1981): sidelobes −82.6 dB, falling 30 dB/octave,
    /// which is steeper than the 24 dB/octave at which the phase of an order-5 modulator rises.
    FourTerm,
}

/// Coefficients from memory of Nuttall 1981, "Some windows with very good sidelobe behavior"; the tests check the two
/// conditions that define them: value and second derivative vanish at the ends.
const FOUR_TERM: [f64; 4] = [0.338_946, 0.481_973, 0.161_054, 0.018_027];

impl Window {
    /// Returns the alternating cosine coefficients `a_0 − a_1·cos + a_2·cos 2 − …`.
    const fn coefficients(self) -> &'static [f64] {
        match self {
            Self::Rectangular => &[1.0],
            Self::Hann => &[0.5, 0.5],
            Self::FourTerm => &FOUR_TERM,
        }
    }

    /// Returns the weights of a periodic window, `length` numbers of 0 … 1.
    #[must_use]
    pub fn weights(self, length: usize) -> Vec<f64> {
        let coefficients = self.coefficients();
        (0..length)
            .map(|n| {
                let mut weight = 0.0;
                let mut sign = 1.0;
                for (order, coefficient) in coefficients.iter().enumerate() {
                    // The integer product keeps the argument within one turn.
                    let turn = ((order * n) % length) as f64 / length as f64;
                    weight += sign * coefficient * (TAU * turn).cos();
                    sign = -sign;
                }
                weight
            })
            .collect()
    }

    /// Returns the noise-equivalent bandwidth in bins, `L·Σw²/(Σw)²`: 1, 1.5 and 2.1253.
    #[must_use]
    pub fn noise_bandwidth_bins(self) -> f64 {
        let coefficients = self.coefficients();
        let mean_square: f64 = coefficients[0].powi(2) + coefficients[1..].iter().map(|a| a * a / 2.0).sum::<f64>();
        mean_square / coefficients[0].powi(2)
    }

    /// Returns half the width of the main lobe in bins: a line spreads over this many bins to each side.
    #[must_use]
    pub const fn half_lobe_bins(self) -> usize {
        self.coefficients().len()
    }

    /// Returns the step between averaged segments: half a segment, a third for the narrow four-term weights.
    #[must_use]
    pub const fn hop(self, segment: usize) -> usize {
        match self {
            Self::Rectangular => segment,
            Self::Hann => segment.div_ceil(2),
            Self::FourTerm => segment.div_ceil(3),
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_noise_bandwidth_is_that_of_the_weights() {
        for (window, known) in [(Window::Rectangular, 1.0), (Window::Hann, 1.5), (Window::FourTerm, 2.1253)] {
            let weights = window.weights(4096);
            let sum: f64 = weights.iter().sum();
            let squares: f64 = weights.iter().map(|w| w * w).sum();
            assert!((4096.0 * squares / (sum * sum) - window.noise_bandwidth_bins()).abs() < 1e-12, "{window:?}");
            assert!((window.noise_bandwidth_bins() - known).abs() < 5e-5, "{window:?}");
        }
    }

    #[test]
    fn the_four_terms_meet_their_end_conditions() {
        let [a0, a1, a2, a3] = FOUR_TERM;
        assert!((a0 - a1 + a2 - a3).abs() < 1e-12);
        assert!((-a1 + 4.0 * a2 - 9.0 * a3).abs() < 1e-12);
        assert!((a0 + a1 + a2 + a3 - 1.0).abs() < 1e-12);
    }
}
