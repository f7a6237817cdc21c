//! Tones at multiples of the PFD frequency, made by leakage and offset current.

use std::f64::consts::{PI, TAU};

use num_complex::Complex64;

use super::network::FilterNetwork;
use crate::base::db_from_power;

/// Returns the single sideband at `harmonic`·f_pfd \[dBc\] at the VCO: a current `I_s` drains the filter and is refilled
/// in pulses of T·I_s/I_cp, `20·log10(I_s·|sinc(h·I_s/I_cp)|·|Z(j2πh·f_pfd)|·K_vco/(h·f_pfd))`, sinc x = sin πx/(πx).
///
/// `None` where there is no current, so no tone.
#[must_use]
pub fn reference_tone_dbc(
    network: &FilterNetwork,
    drained_a: f64,
    current_a: f64,
    gain_hz_per_v: f64,
    pfd_hz: f64,
    harmonic: u64,
) -> Option<f64> {
    let drained = drained_a.abs();
    let offset_hz = harmonic as f64 * pfd_hz;
    let turn = PI * harmonic as f64 * drained / current_a;
    let sinc = if turn == 0.0 { 1.0 } else { (turn.sin() / turn).abs() };
    let ripple_v = drained * sinc * network.impedance(Complex64::new(0.0, TAU * offset_hz)).norm();
    let index = ripple_v * gain_hz_per_v / offset_hz;
    (index > 0.0).then(|| db_from_power(index * index))
}

/// Returns the single sideband of a sinusoidal ripple of the tuning voltage \[dBc\] at the VCO:
/// `20·log10(V_peak·K_vco/(2·f))`, small angle.
///
/// # Examples
/// 1 mV peak at 200 kHz with 20 MHz/V is −26.021 dBc (computed):
/// ```
/// let level = thornmap::loop_model::ripple_tone_dbc(1e-3, 20e6, 200e3).unwrap();
/// assert!((level + 26.0206).abs() < 1e-4);
/// ```
#[must_use]
pub fn ripple_tone_dbc(peak_v: f64, gain_hz_per_v: f64, offset_hz: f64) -> Option<f64> {
    let half_index = peak_v * gain_hz_per_v / (2.0 * offset_hz);
    (half_index > 0.0).then(|| db_from_power(half_index * half_index))
}
