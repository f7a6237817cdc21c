//! The conditional-mean curve: tones of a static nonlinearity on a long, well-randomised sequence.
//!
//! Modulo one VCO cycle the phase error ψ of a MASH is the first accumulator's ramp: `ψ ≡ −s_1/M (mod 1)` for order ≥ 2.
//! So the mean of any function of ψ given the ramp is periodic in it, and its Fourier coefficient h is the line at
//! `h·K mod± M`: `c_h = ∫ f(x)·q(x)·e^{j2πhx} dx` with f the density of ψ. All quantities in VCO cycles; a coefficient c
//! gives a sideband of `20·log10(2π|c|)` dBc before the loop.

use std::f64::consts::TAU;

use num_complex::Complex64;

use super::PhaseDensity;

/// A static charge curve: charge per cycle against time error, both in VCO cycles (charge over pump current).
#[derive(Clone, Copy)]
pub struct Charge<'a> {
    curve: &'a dyn Fn(f64) -> f64,
    kinks_cycles: &'a [f64],
}

impl<'a> Charge<'a> {
    /// Returns a curve with the positions where it is not smooth (kinks, jumps, table points), in any order.
    ///
    /// Positive time error: the divider edge is late. A kink left out costs accuracy, silently: name all.
    #[must_use]
    pub fn new(curve: &'a dyn Fn(f64) -> f64, kinks_cycles: &'a [f64]) -> Self {
        Self { curve, kinks_cycles }
    }

    /// Returns the charge at a time error.
    #[must_use]
    pub fn at(&self, time_error_cycles: f64) -> f64 {
        (self.curve)(time_error_cycles)
    }

    /// Returns what a linear detector would not give: `g(p) − p`.
    pub(super) fn excess(&self, time_error_cycles: f64) -> f64 {
        self.at(time_error_cycles) - time_error_cycles
    }

    /// Returns the kinks as phase errors when the loop rests at `offset_cycles`.
    pub(super) fn kinks_around(&self, offset_cycles: f64) -> Vec<f64> {
        self.kinks_cycles.iter().map(|kink| kink - offset_cycles).collect()
    }
}

/// The two contributions to one line, complex and in cycles; the whole line is their sum.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct CurveLine {
    /// Line of ψ itself. Zero for order ≥ 2 on a long sequence: the density's transform vanishes twice at every h.
    pub modulator: Complex64,
    /// Line of `g(ψ + a) − ψ`.
    pub nonlinearity: Complex64,
}

/// Returns the lines at harmonic `h ≥ 1` of K/M when the loop rests at `offset_cycles` (from [`super::settle`]).
///
/// Gauss–Legendre on pieces between the density's knots and the curve's kinks; the error is some 1e-14 of
/// `∫ f·|g(x + a) − x − a|`. For a long period: on a short lattice of s_1 harmonics alias, see
/// [`super::lattice_is_short`]. The phase is that of a sequence that starts at
/// ψ ≡ 0 (mod 1); one that starts at `ψ[0]` has the line `c·e^{−j2πh·ψ[0]}`.
///
/// # Panics
/// For `h = 0`, the mean, which is no line.
///
/// # Examples
/// ```
/// use thornmap::tones::{Charge, PhaseDensity, harmonic};
/// let mismatch = |p: f64| p + 0.01 * p.abs(); // 2 %
/// let line = harmonic(&PhaseDensity::mash(2).unwrap(), Charge::new(&mismatch, &[0.0]), 0.0, 1);
/// let half_peak_rad = std::f64::consts::TAU * line.nonlinearity.norm();
/// assert!((half_peak_rad - 0.02 / std::f64::consts::PI).abs() < 1e-15);
/// ```
#[must_use]
pub fn harmonic(density: &PhaseDensity, charge: Charge<'_>, offset_cycles: f64, h: u64) -> CurveLine {
    assert!(h > 0, "harmonic 0 is the mean, not a line");
    let order = h as f64;
    let mut nonlinearity = Complex64::ZERO;
    // g(x + a) − x differs from the excess by the constant a, which has no line.
    density.each_node(&charge.kinks_around(offset_cycles), h, |x, weight| {
        nonlinearity += Complex64::cis(TAU * (order * x).fract()) * (weight * charge.excess(x + offset_cycles));
    });
    let modulator = match density.order() {
        // ∫ x·e^{j2πhx} dx over −1/2 … 1/2 is cos(πh)/(j2πh).
        1 => Complex64::new(0.0, if h.is_multiple_of(2) { -1.0 } else { 1.0 } / (TAU * order)),
        _ => Complex64::ZERO,
    };
    CurveLine { modulator, nonlinearity }
}

#[cfg(test)]
mod tests {
    use std::f64::consts::PI;

    use super::*;

    fn level_db(line: Complex64) -> f64 {
        crate::base::db_from_power((TAU * line.norm()).powi(2))
    }

    #[test]
    fn mismatch_tones_have_their_closed_forms() {
        // PHYSICS §12, derived: order 1 ε/(πh²) for odd h, order 2 ε/(πh²), order 3 ε/(4πh²), in rad.
        let epsilon = 0.02;
        let mismatch = |p: f64| p + epsilon / 2.0 * p.abs();
        let mut checked = 0;
        for (order, divisor) in [(1, 1.0), (2, 1.0), (3, 4.0)] {
            let density = PhaseDensity::mash(order).unwrap();
            for h in 1..=40u64 {
                let found = TAU * harmonic(&density, Charge::new(&mismatch, &[0.0]), 0.0, h).nonlinearity.norm();
                let want = if order == 1 && h % 2 == 0 { 0.0 } else { epsilon / (divisor * PI * (h * h) as f64) };
                assert!((found - want).abs() < 1e-12 * epsilon, "order {order}, h {h}: {found} {want}");
                if want > 0.0 && h <= 10 {
                    assert!(
                        (level_db(Complex64::from(found / TAU)) - level_db(Complex64::from(want / TAU))).abs() < 1e-9
                    );
                }
                checked += 1;
            }
        }
        assert_eq!(checked, 120);
    }

    #[test]
    fn mismatch_levels_at_two_per_cent() {
        let mismatch = |p: f64| p + 0.01 * p.abs();
        // CHECKS "Spectra and tones" and PHYSICS §12, to more digits: computed by an independent numpy quadrature of the
        // truncated-power density. (The table prints −63.00 and −68.01 for −63.007 and −68.005.)
        let cases: [(u8, [f64; 3]); 4] = [
            (2, [-43.922_397_5, -55.963_597_4, -63.007_247_7]),
            (3, [-55.963_597_4, -68.004_797_2, -75.048_447_6]),
            (4, [-59.872_301_1, -72.386_208_6, -79.520_292_4]),
            (5, [-66.075_104_5, -78.182_626_4, -85.238_614_4]),
        ];
        for (order, levels) in cases {
            for (h, level) in (1..).zip(levels) {
                let line = harmonic(&PhaseDensity::mash(order).unwrap(), Charge::new(&mismatch, &[0.0]), 0.0, h);
                let found = level_db(line.nonlinearity);
                assert!((found - level).abs() < 1e-6, "order {order}, h {h}: {found}");
            }
        }
    }

    #[test]
    fn a_quadratic_term_makes_a_tone_only_below_order_three() {
        // CHECKS: derived; Swaminathan et al. 2007 (theory, abstract read).
        let quadratic = |p: f64| p + 0.01 * p * p;
        for order in 2..=5 {
            let line = harmonic(&PhaseDensity::mash(order).unwrap(), Charge::new(&quadratic, &[]), 0.3, 1).nonlinearity;
            // Order 2: the triangle's transform is sinc², so c_h = −κ·(sinc²)''/(4π²) = −κ/(2π²h²).
            let want = if order == 2 { 0.01 / (2.0 * PI * PI) } else { 0.0 };
            assert!((line.norm() - want).abs() < 1e-15, "order {order}: {line}");
        }
    }

    #[test]
    fn an_offset_beyond_the_phase_removes_the_tone() {
        // CHECKS: 2^(m−2) cycles keep the pump on one side; Kucharski & Herzel 2015 (qualitative).
        let mismatch = |p: f64| p + 0.01 * p.abs();
        for order in 2..=5 {
            let density = PhaseDensity::mash(order).unwrap();
            let charge = Charge::new(&mismatch, &[0.0]);
            let reach = density.reach_cycles();
            assert!(harmonic(&density, charge, reach, 1).nonlinearity.norm() < 1e-16, "order {order}");
            assert!(harmonic(&density, charge, reach * 0.5, 1).nonlinearity.norm() > 1e-8, "order {order}");
        }
    }

    #[test]
    fn the_first_order_modulator_line_is_its_ramp() {
        let line = harmonic(&PhaseDensity::mash(1).unwrap(), Charge::new(&|p| p, &[]), 0.0, 3);
        assert!((TAU * line.modulator.norm() - 1.0 / 3.0).abs() < 1e-15);
        assert!(line.nonlinearity.norm() < 1e-16);
    }

    #[test]
    fn order_one_sawtooth_phase_is_right() {
        let mut by_sum = Complex64::ZERO;
        PhaseDensity::mash(1)
            .unwrap()
            .each_node(&[], 3, |x, weight| by_sum += Complex64::cis(TAU * 3.0 * x) * (x * weight));
        let line = harmonic(&PhaseDensity::mash(1).unwrap(), Charge::new(&|p| p, &[]), 0.0, 3);
        assert!((line.modulator - by_sum).norm() < 1e-15, "{} {by_sum}", line.modulator);
    }
}
