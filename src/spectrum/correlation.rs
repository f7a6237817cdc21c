//! One line at an exact frequency, from a record of any length.

use std::f64::consts::TAU;

use num_complex::Complex64;
use pulp::{Arch, Simd, WithSimd};

use super::Window;
use super::oracle::step;

/// Samples that are summed side by side.
const LANES: usize = 8;
/// Samples between two fresh phasors; within a block a table of directly computed powers serves, so rounding never grows.
const RENEWAL: usize = 64;

/// Returns the line coefficient at exactly `residue/modulus` cycles per sample, in the unit of the samples:
/// `Σ w[n]·x[n]·e^{−j2π·n·residue/modulus} / Σ w[n]`.
///
/// The division corrects for the window's coherent gain. Over whole periods take [`Window::Rectangular`]; on a cut
/// record a window, with the mean removed beforehand and a line at least [`Window::half_lobe_bins`] bins from zero:
/// nearer, its own mirror image adds to it.
///
/// # Panics
/// For no samples, or `residue ≥ modulus`.
///
/// # Examples
/// ```
/// use thornmap::spectrum::{Window, correlate};
/// let wave: Vec<f64> = (0..30).map(|n| (std::f64::consts::TAU * 0.3 * n as f64).cos()).collect();
/// let line = correlate(&wave, 3, 10, Window::Rectangular);
/// assert!((line.re - 0.5).abs() < 1e-12 && line.im.abs() < 1e-12);
/// ```
#[must_use]
pub fn correlate(samples: &[f64], residue: u64, modulus: u64, window: Window) -> Complex64 {
    correlate_each(samples, &[residue], modulus, window)[0]
}

/// Returns [`correlate`] for each residue; the weights are computed once.
///
/// # Panics
/// As [`correlate`].
#[must_use]
pub fn correlate_each(samples: &[f64], residues: &[u64], modulus: u64, window: Window) -> Vec<Complex64> {
    assert!(!samples.is_empty(), "a correlation needs at least one sample");
    if window == Window::Rectangular {
        let gain = samples.len() as f64;
        return residues.iter().map(|residue| phasor_sum(samples, *residue, modulus) / gain).collect();
    }
    let weights = window.weights(samples.len());
    let gain: f64 = weights.iter().sum();
    let weighted: Vec<f64> = samples.iter().zip(&weights).map(|(sample, weight)| sample * weight).collect();
    residues.iter().map(|residue| phasor_sum(&weighted, *residue, modulus) / gain).collect()
}

/// Returns `Σ x[n]·e^{−j2π·n·residue/modulus}`.
fn phasor_sum(samples: &[f64], residue: u64, modulus: u64) -> Complex64 {
    assert!(residue < modulus, "a residue is below its modulus");
    Arch::new().dispatch(PhasorSum { samples, residue, modulus })
}

/// A sum whose blocks share one table of powers; each block starts at its exact phase. Compiled once for each
/// instruction set.
struct PhasorSum<'a> {
    samples: &'a [f64],
    residue: u64,
    modulus: u64,
}

impl WithSimd for PhasorSum<'_> {
    type Output = Complex64;

    #[inline(always)]
    fn with_simd<S: Simd>(self, _simd: S) -> Complex64 {
        let Self { samples, residue, modulus } = self;
        let turn = |phase: u64| Complex64::cis(-TAU * (phase as f64 / modulus as f64));
        let mut phase = 0;
        let (mut cosines, mut sines) = ([0.0; RENEWAL], [0.0; RENEWAL]);
        for (cosine, sine) in cosines.iter_mut().zip(&mut sines) {
            let power = turn(phase);
            (*cosine, *sine) = (power.re, power.im);
            phase = step(phase, residue, modulus);
        }
        let block_step = phase;
        let mut start = 0;
        let mut sum = Complex64::ZERO;
        for block in samples.chunks(RENEWAL) {
            // Sums side by side: one alone waits for each addition.
            let (mut real, mut imaginary) = ([0.0; LANES], [0.0; LANES]);
            let whole = block.chunks_exact(LANES);
            let rest = block.len() - whole.remainder().len();
            let powers = cosines.chunks_exact(LANES).zip(sines.chunks_exact(LANES));
            for (samples, (cosines, sines)) in whole.zip(powers) {
                for lane in 0..LANES {
                    real[lane] += samples[lane] * cosines[lane];
                    imaginary[lane] += samples[lane] * sines[lane];
                }
            }
            for (lane, sample) in block[rest..].iter().enumerate() {
                real[lane] += sample * cosines[rest + lane];
                imaginary[lane] += sample * sines[rest + lane];
            }
            sum += Complex64::new(real.iter().sum(), imaginary.iter().sum()) * turn(start);
            start = step(start, block_step, modulus);
        }
        sum
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::spectrum::oracle::{correlate_slowly, dft};

    fn noise(length: usize) -> Vec<f64> {
        let mut state = 99u64;
        (0..length)
            .map(|_| {
                state = state.wrapping_mul(6_364_136_223_846_793_005).wrapping_add(1_442_695_040_888_963_407);
                (state >> 11) as f64 / (1u64 << 53) as f64 - 0.5
            })
            .collect()
    }

    #[test]
    fn fast_and_slow_sums_agree() {
        let samples = noise(5000);
        let mut checked = 0;
        for window in [Window::Rectangular, Window::Hann, Window::FourTerm] {
            for (residue, modulus) in [(0, 1), (1, 2), (3, 10), (77_777, 1 << 20), ((1 << 47) + 1, (1 << 48) - 59)] {
                for length in [1, 63, 64, 65, 4999] {
                    let weights = window.weights(length);
                    if weights.iter().sum::<f64>() < 1e-9 {
                        continue;
                    }
                    let fast = correlate(&samples[..length], residue, modulus, window);
                    let slow = correlate_slowly(&samples[..length], &weights, residue, modulus);
                    assert!((fast - slow).norm() < 1e-14, "{window:?} {residue}/{modulus} {length}");
                    checked += 1;
                }
            }
        }
        assert!(checked >= 65, "{checked}");
    }

    #[test]
    fn over_a_period_it_is_the_line_of_the_transform() {
        let samples = noise(360);
        let lines = dft(&samples);
        for (k, line) in lines.iter().enumerate() {
            let found = correlate(&samples, k as u64, 360, Window::Rectangular);
            assert!((found - line).norm() < 1e-15 * 8.0, "{k}");
        }
    }

    #[test]
    fn a_window_keeps_the_amplitude_of_a_line_between_bins() {
        let (residue, modulus) = (123_457u64, 1u64 << 20);
        let samples: Vec<f64> =
            (0..4000).map(|n| 0.02 * (TAU * ((residue * n) % modulus) as f64 / modulus as f64 + 0.7).cos()).collect();
        let found = correlate(&samples, residue, modulus, Window::FourTerm);
        // The mirror line lies 940 bins away: below −82.6 − 30·log2(940/4) dB, far under 1e-10.
        assert!((found - Complex64::from_polar(0.01, 0.7)).norm() < 1e-12);
    }
}
