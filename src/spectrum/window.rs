//! Windows for records that are no whole period.

use std::f64::consts::TAU;

use num_complex::Complex64;
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

/// Samples per entry of the coarse table of turns.
const BLOCK: usize = 64;

impl Window {
    /// Returns the alternating cosine coefficients `a_0 − a_1·cos + a_2·cos 2 − …`.
    pub(super) const fn coefficients(self) -> &'static [f64] {
        match self {
            Self::Rectangular => &[1.0],
            Self::Hann => &[0.5, 0.5],
            Self::FourTerm => &FOUR_TERM,
        }
    }

    /// Returns the weights of a periodic window, `length` numbers of 0 … 1.
    #[must_use]
    pub fn weights(self, length: usize) -> Vec<f64> {
        if self == Self::Rectangular {
            return vec![1.0; length];
        }
        // cos(a + b) from two short tables: one cosine a sample would cost more than the correlation it serves.
        let turn = |n: usize| Complex64::cis(TAU * n as f64 / length as f64);
        let fine: Vec<Complex64> = (0..BLOCK.min(length)).map(turn).collect();
        let mut weights = vec![0.0; length];
        for (block, part) in weights.chunks_mut(BLOCK).enumerate() {
            let coarse = turn(block * BLOCK);
            for (weight, step) in part.iter_mut().zip(&fine) {
                *weight = self.weight(coarse.re * step.re - coarse.im * step.im);
            }
        }
        weights
    }

    /// Returns the weight where the first cosine is `cosine`; cos 2θ and cos 3θ are polynomials in it.
    fn weight(self, cosine: f64) -> f64 {
        match self {
            Self::Rectangular => 1.0,
            Self::Hann => 0.5 - 0.5 * cosine,
            Self::FourTerm => {
                let [a0, a1, a2, a3] = FOUR_TERM;
                let square = cosine * cosine;
                // Rounding at the ends, where the weight vanishes, must not make it negative.
                (a0 - a1 * cosine + a2 * (2.0 * square - 1.0) - a3 * cosine * (4.0 * square - 3.0)).max(0.0)
            }
        }
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
    fn weights_are_their_cosine_sums() {
        let mut checked = 0;
        for window in [Window::Rectangular, Window::Hann, Window::FourTerm] {
            for length in [1, 2, 5, 63, 64, 65, 1000] {
                for (n, weight) in window.weights(length).iter().enumerate() {
                    let mut want = 0.0;
                    for (order, coefficient) in (0i32..).zip(window.coefficients()) {
                        let angle = TAU * f64::from(order) * n as f64 / length as f64;
                        want += f64::from(1 - 2 * (order % 2)) * coefficient * angle.cos();
                    }
                    assert!((weight - want).abs() < 2e-15, "{window:?}, {n} of {length}: {weight} {want}");
                    checked += 1;
                }
            }
        }
        assert_eq!(checked, 3600);
    }

    #[test]
    fn the_four_terms_meet_their_end_conditions() {
        let [a0, a1, a2, a3] = FOUR_TERM;
        assert!((a0 - a1 + a2 - a3).abs() < 1e-12);
        assert!((-a1 + 4.0 * a2 - 9.0 * a3).abs() < 1e-12);
        assert!((a0 + a1 + a2 + a3 - 1.0).abs() < 1e-12);
    }
}
