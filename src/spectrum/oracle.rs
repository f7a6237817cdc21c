//! Slow definitions, written as in a textbook: what the fast paths are held against.

use std::f64::consts::TAU;

use num_complex::Complex64;

/// Returns `c_k = (1/T)·Σ x[n]·e^{−j2πkn/T}` for `k = 0 … floor(T/2)` by the sum itself, O(T²).
///
/// The phase comes from the integer `k·n mod T`, so that no argument grows with the record.
///
/// # Panics
/// On an empty record.
#[must_use]
pub fn dft(samples: &[f64]) -> Vec<Complex64> {
    assert!(!samples.is_empty(), "a spectrum needs at least one sample");
    let length = samples.len();
    (0..=length / 2)
        .map(|k| {
            let mut sum = Complex64::ZERO;
            for (n, sample) in samples.iter().enumerate() {
                sum += Complex64::cis(-TAU * ((k * n) % length) as f64 / length as f64) * sample;
            }
            sum / length as f64
        })
        .collect()
}

/// Returns `Σ w[n]·x[n]·e^{−j2π·n·residue/modulus} / Σ w[n]`, one sine and cosine a sample.
///
/// # Panics
/// Where weights and samples differ in number, for no samples, or `residue ≥ modulus`.
#[must_use]
pub fn correlate_slowly(samples: &[f64], weights: &[f64], residue: u64, modulus: u64) -> Complex64 {
    assert!(samples.len() == weights.len() && !samples.is_empty(), "one weight belongs to each sample");
    assert!(residue < modulus, "a residue is below its modulus");
    let mut phase: u64 = 0;
    let mut sum = Complex64::ZERO;
    for (sample, weight) in samples.iter().zip(weights) {
        sum += Complex64::cis(-TAU * (phase as f64 / modulus as f64)) * (sample * weight);
        phase = step(phase, residue, modulus);
    }
    sum / weights.iter().sum::<f64>()
}

/// Returns `(phase + residue) mod modulus` for residues of any 64-bit modulus.
pub(super) const fn step(phase: u64, residue: u64, modulus: u64) -> u64 {
    if phase >= modulus - residue { phase - (modulus - residue) } else { phase + residue }
}
