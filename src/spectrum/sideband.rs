//! From a line of the phase to the level of a sideband.

use std::f64::consts::TAU;

use crate::base::db_from_power;

/// Returns the single-sideband level \[dBc\] of a phase line with coefficient magnitude `|c|` \[cycles\]: `20·log10(2π|c|)`.
///
/// `2π|c|` is half the peak phase deviation. Small angles only: against the carrier that is left the true
/// sideband (Bessel, J₁/J₀) is higher, by 0.01 dB at −26 dBc and 0.28 dB at −12 dBc. `None` for a zero, negative or not finite amplitude: no line, not "−∞ dBc".
///
/// # Examples
/// ```
/// use thornmap::spectrum::sideband_dbc;
/// // 0.1 rad peak: −26.021 dBc.
/// let level = sideband_dbc(0.05 / std::f64::consts::TAU).unwrap();
/// assert!((level + 26.0206).abs() < 1e-4);
/// ```
#[must_use]
pub fn sideband_dbc(amplitude_cycles: f64) -> Option<f64> {
    (amplitude_cycles > 0.0 && amplitude_cycles.is_finite()).then(|| db_from_power((TAU * amplitude_cycles).powi(2)))
}

/// Returns a level \[dBc\] after a divider: `20·log10 P` lower, at the same offset.
///
/// # Panics
/// For a divider of zero.
#[must_use]
pub fn divided_dbc(level_dbc: f64, divider: u64) -> f64 {
    assert!(divider > 0, "a divider divides by at least 1");
    level_dbc - db_from_power((divider as f64).powi(2))
}
