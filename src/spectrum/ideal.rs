//! The published noise formula of an ideal modulator.

use std::f64::consts::{PI, TAU};

/// Returns the phase noise of an ideal, well-randomised MASH before the loop, linear \[rad²/Hz\]:
/// `L_q(f) = (2π)²/(12·f_pfd)·[2·sin(πf/f_pfd)]^(2(m−1))`.
///
/// Single-sideband: the two-sided density of the phase equals L, no further −3 dB. The offset is folded by the sine, so
/// any f ≥ 0 has a value. Order 0 (no modulator) gives zero.
///
/// Source: Miller & Conley 1991, IEEE Trans. Instrum. Meas. 40; Riley, Copeland & Kwasniewski 1993, IEEE JSSC 28.
///
/// # Panics
/// For a PFD frequency that is not positive, or an offset that is no finite number.
///
/// # Examples
/// ```
/// use thornmap::{base::db_from_power, spectrum::ideal_density};
/// let level_dbc_per_hz = db_from_power(ideal_density(3, 100e3, 10e6));
/// assert!((level_dbc_per_hz + 112.904).abs() < 5e-4);
/// ```
#[must_use]
pub fn ideal_density(order: u8, offset_hz: f64, pfd_hz: f64) -> f64 {
    assert!(pfd_hz > 0.0 && pfd_hz.is_finite() && offset_hz.is_finite(), "offset {offset_hz} Hz at {pfd_hz} Hz");
    let Some(zeros) = order.checked_sub(1) else { return 0.0 };
    TAU * TAU / (12.0 * pfd_hz) * (2.0 * (PI * offset_hz / pfd_hz).sin()).powi(2 * i32::from(zeros))
}

/// Returns the rms phase \[rad\] of that noise over the whole Nyquist band, unfiltered: `2π·sqrt(C(2m−2, m−1)/12)`.
///
/// Order 0 gives zero.
#[must_use]
pub fn ideal_phase_rms_rad(order: u8) -> f64 {
    let Some(zeros) = order.checked_sub(1).map(u32::from) else { return 0.0 };
    let mut central = 1.0;
    for step in 1..=zeros {
        central *= f64::from(zeros + step) / f64::from(step);
    }
    TAU * (central / 12.0).sqrt()
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::base::db_from_power;

    #[test]
    fn published_levels() {
        // CHECKS "Spectra and tones": computed from the published formula (Egan, App. M; Miller & Conley 1991).
        let cases = [(3, 100e3, 10e6, -112.904), (3, 1e6, 26e6, -93.692), (4, 1e6, 26e6, -106.049)];
        for (order, offset_hz, pfd_hz, level) in cases {
            let found = db_from_power(ideal_density(order, offset_hz, pfd_hz));
            assert!((found - level).abs() < 6e-4, "order {order}: {found}");
        }
        assert_eq!(ideal_density(0, 1e5, 1e7), 0.0);
    }

    #[test]
    fn the_band_holds_the_rms_phase() {
        // CHECKS: computed, 2.5651, 4.4429, 8.1116 rad for orders 2, 3, 4.
        for (order, known) in [(2, 2.5651), (3, 4.4429), (4, 8.1116)] {
            assert!((ideal_phase_rms_rad(order) - known).abs() < 5e-5, "order {order}");
            // The trapezium rule over a whole period of a trigonometric polynomial is exact.
            let mean_square: f64 = (0..64).map(|k| ideal_density(order, f64::from(k) / 64.0, 1.0)).sum::<f64>() / 64.0;
            assert!((mean_square.sqrt() / ideal_phase_rms_rad(order) - 1.0).abs() < 1e-13, "order {order}");
        }
    }
}
