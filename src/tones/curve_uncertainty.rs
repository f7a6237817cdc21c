//! How far a finite period can move the level of a line away from the curve.

use std::f64::consts::TAU;

use crate::base::db_from_power;
use crate::spectrum::ideal_density;

/// Standard deviations that the uncertainty covers: 99.7 % of draws.
const DEVIATIONS: f64 = 3.0;

/// Returns the mean noise power \[cycles²\] that one line of a sequence of `period_cycles` carries before the loop:
/// folded noise `S_0/T` plus the shaped noise `L_q(f)·f_pfd/T`.
///
/// `folded_cycles2` is [`super::FoldedNoise::density_cycles2`]. For a windowed record give its length over the window's
/// noise bandwidth in bins as the period.
///
/// # Panics
/// For a period that is not positive, or as [`ideal_density`].
#[must_use]
pub fn line_noise_cycles2(folded_cycles2: f64, order: u8, offset_hz: f64, pfd_hz: f64, period_cycles: f64) -> f64 {
    assert!(period_cycles > 0.0, "a period of {period_cycles} cycles");
    (folded_cycles2 + ideal_density(order, offset_hz, pfd_hz) * pfd_hz / (TAU * TAU)) / period_cycles
}

/// Returns the level uncertainty \[dB\] of a line of magnitude `|c|` \[cycles\] on noise of this power per line
/// \[cycles²\]: `20·log10(1 + 3·σ/|c|)`, σ² half the power (the part in phase with the line).
///
/// `None` where the line does not stand above that noise: then it is reported as noise, not as a line.
///
/// # Examples
/// ```
/// use thornmap::tones::level_uncertainty_db;
/// assert_eq!(level_uncertainty_db(1e-3, 0.0), Some(0.0));
/// assert_eq!(level_uncertainty_db(1e-6, 1e-9), None);
/// ```
#[must_use]
pub fn level_uncertainty_db(amplitude_cycles: f64, noise_cycles2: f64) -> Option<f64> {
    let above = amplitude_cycles.is_finite() && noise_cycles2 >= 0.0 && amplitude_cycles.powi(2) > noise_cycles2;
    above.then(|| db_from_power((1.0 + DEVIATIONS * (noise_cycles2 / 2.0).sqrt() / amplitude_cycles).powi(2)))
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn shaped_noise_is_the_larger_part_far_out() {
        // PHYSICS §12: at T = 2^21, order 3, 2 %, one random K moves h = 1 by up to 0.3 dB.
        let folded = 1e-4 * 125.0 / 432.0;
        let line = 0.02 / (4.0 * std::f64::consts::PI) / TAU;
        let near = level_uncertainty_db(line, line_noise_cycles2(folded, 3, 1e3, 26e6, f64::from(1 << 21))).unwrap();
        assert!((0.2..0.4).contains(&near), "{near}");
        let far = line_noise_cycles2(folded, 3, 5e6, 26e6, f64::from(1 << 21));
        assert!(far > 100.0 * folded / f64::from(1 << 21), "{far}");
    }
}
