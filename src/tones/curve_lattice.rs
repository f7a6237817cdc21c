//! The curve on a short lattice: a reduced modulus so small that s_1 visits few values.

use std::f64::consts::TAU;

use num_complex::Complex64;

use super::{Charge, CurveError, CurveLine, PhaseDensity};

/// Longest lattice that is summed point by point; a longer one is as good as continuous for h up to 1000.
pub const LONGEST_LATTICE: u64 = 1 << 16;

/// Lattice points per harmonic from which aliasing can be neglected.
const POINTS_PER_HARMONIC: u64 = 64;

/// Returns whether harmonic `h` of a reduced modulus M' needs [`harmonic_on_lattice`]: `M' < 64·h`.
///
/// On M' values of s_1 the harmonics h and h ± M' are one line. A kink's coefficients fall as 1/h², so the neglected
/// ones are below `2·(h/(M' − h))²` of the line: 0.0005, or 0.0044 dB, at `M' = 64·h`. Where the line itself nearly
/// vanishes (an offset can null it), or where the charge curve jumps (coefficients fall as 1/h only, 0.3 dB at worst), the
/// relative error is larger: then take the lattice as far as [`LONGEST_LATTICE`].
#[must_use]
pub const fn lattice_is_short(reduced_modulus: u64, h: u64) -> bool {
    reduced_modulus < POINTS_PER_HARMONIC.saturating_mul(h)
}

/// The values that the phase error takes when `u = s_1/M` runs over `u_0 + j/M'`, with their probabilities.
///
/// For order ≥ 2 the later residues are taken as uniform given s_1, which a period much longer than M' brings about; then ψ
/// is `i − u` with probability `f(i − u)`. For order 1, ψ is `−u` less its mean. Where the period itself is short enough
/// to be run, its exact lines are better than this.
#[derive(Debug, Clone, PartialEq)]
pub struct PhaseLattice {
    order: u8,
    points: Vec<(f64, f64)>,
    whole_weight: f64,
}

impl PhaseLattice {
    /// Returns the lattice of `reduced_modulus` points from `start_cycles = (s_1(0) mod gcd(K, M))/M`.
    ///
    /// # Errors
    /// `LatticeOutOfRange` outside 1 … 65536 points; `LatticeStart` for a start outside one step.
    pub fn new(density: &PhaseDensity, reduced_modulus: u64, start_cycles: f64) -> Result<Self, CurveError> {
        if !(1..=LONGEST_LATTICE).contains(&reduced_modulus) {
            return Err(CurveError::LatticeOutOfRange { found: reduced_modulus });
        }
        let count = reduced_modulus as f64;
        if !(0.0..1.0 / count).contains(&start_cycles) {
            return Err(CurveError::LatticeStart { found_cycles: start_cycles, step_cycles: 1.0 / count });
        }
        let mut points = Vec::new();
        for j in 0..reduced_modulus {
            let j = j as f64;
            if density.order() == 1 {
                points.push((((count - 1.0) / 2.0 - j) / count, 1.0 / count));
                continue;
            }
            let u = start_cycles + j / count;
            let mut phase = -density.reach_cycles() - u;
            while phase <= density.reach_cycles() {
                let probability = density.at(phase);
                if probability > 0.0 {
                    points.push((phase, probability / count));
                }
                phase += 1.0;
            }
        }
        let whole_weight = points.iter().map(|(_, weight)| weight).sum();
        Ok(Self { order: density.order(), points, whole_weight })
    }

    /// Returns (phase error \[cycles\], probability).
    #[must_use]
    pub fn points(&self) -> &[(f64, f64)] {
        &self.points
    }

    /// Returns the sum of the probabilities, 1 but for rounding.
    pub(super) const fn whole_weight(&self) -> f64 {
        self.whole_weight
    }
}

/// Returns the lines at harmonic `h` of K'/M' on a short lattice; h and h + M' are the same line.
///
/// `c_h = (1/M')·Σ_j G(u_j)·e^{−j2πh·u_j}`, `G(u) = Σ_i f(i − u)·q(i − u)`. `offset_cycles` comes from
/// [`super::settle_on_lattice`].
///
/// # Panics
/// For `h = 0`.
#[must_use]
pub fn harmonic_on_lattice(lattice: &PhaseLattice, charge: Charge<'_>, offset_cycles: f64, h: u64) -> CurveLine {
    assert!(h > 0, "harmonic 0 is the mean, not a line");
    let order = h as f64;
    let mut line = CurveLine { modulator: Complex64::ZERO, nonlinearity: Complex64::ZERO };
    for (phase, weight) in &lattice.points {
        let turn = Complex64::cis(TAU * (order * phase).fract()) * *weight;
        line.nonlinearity += turn * charge.excess(phase + offset_cycles);
        if lattice.order == 1 {
            line.modulator += turn * *phase;
        }
    }
    line
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::tones::harmonic;

    #[test]
    fn a_long_lattice_is_the_continuous_curve() {
        let mismatch = |p: f64| p + 0.01 * p.abs();
        let charge = Charge::new(&mismatch, &[0.0]);
        let mut checked = 0;
        for order in 1..=5 {
            let density = PhaseDensity::mash(order).unwrap();
            for h in 1..=3 {
                let lattice = PhaseLattice::new(&density, 64 * h, 0.0).unwrap();
                let (short, long) =
                    (harmonic_on_lattice(&lattice, charge, 0.11, h), harmonic(&density, charge, 0.11, h));
                let ratio = short.nonlinearity.norm() / long.nonlinearity.norm();
                assert!((ratio - 1.0).abs() < 1.5e-3, "order {order}, h {h}: {ratio}");
                checked += 1;
            }
        }
        assert_eq!(checked, 15);
        assert!(!lattice_is_short(128, 2) && lattice_is_short(127, 2) && lattice_is_short(u64::MAX - 1, u64::MAX));
    }

    #[test]
    fn first_order_lines_on_a_lattice_are_exact() {
        // CHECKS: line at residue r is π/(M'·sin(πr/M')) rad, derived; consistent with Gray 1989.
        let density = PhaseDensity::mash(1).unwrap();
        for points in [2u64, 3, 7, 10, 64] {
            let lattice = PhaseLattice::new(&density, points, 0.0).unwrap();
            for h in 1..points {
                let found = TAU * harmonic_on_lattice(&lattice, Charge::new(&|p| p, &[]), 0.0, h).modulator.norm();
                let want =
                    std::f64::consts::PI / (points as f64 * (std::f64::consts::PI * h as f64 / points as f64).sin());
                assert!((found / want - 1.0).abs() < 1e-12, "{points} {h}");
            }
        }
    }

    #[test]
    fn bad_lattices_are_refused() {
        let density = PhaseDensity::mash(3).unwrap();
        assert!(matches!(PhaseLattice::new(&density, 0, 0.0), Err(CurveError::LatticeOutOfRange { .. })));
        assert!(matches!(PhaseLattice::new(&density, 1 << 17, 0.0), Err(CurveError::LatticeOutOfRange { .. })));
        for start in [-0.1, 0.25, f64::NAN] {
            assert!(matches!(PhaseLattice::new(&density, 4, start), Err(CurveError::LatticeStart { .. })), "{start}");
        }
    }
}
