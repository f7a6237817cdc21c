//! The density of the phase error of a MASH: a sum of uniform variables, piecewise polynomial.

use num_integer::binomial;

use super::CurveError;
use super::curve_quadrature::Rule;

/// Largest MASH order with a density.
pub const LARGEST_ORDER: u8 = 5;

/// Most periods of an oscillation in one integration piece: the standard rule is exact to rounding there.
const PERIODS_PER_PIECE: f64 = 4.0;

/// The density of `D = −(1 − z⁻¹)^(m−1) e_m` for residues that are independent and uniform: independent uniform
/// variables of widths `C(m−1, j)`, centred. In VCO cycles.
///
/// Its support is `±2^(m−2)` (order 1: `±1/2`); its integral is 1; it is even. Knots lie one cycle apart, at integers for
/// order ≥ 2. The coefficients are ratios of small integers, so no cancellation enters.
#[derive(Debug, Clone, PartialEq)]
pub struct PhaseDensity {
    order: u8,
    first_knot_cycles: f64,
    /// Coefficients of t⁰, t¹, … on each unit piece, t from its left knot.
    pieces: Vec<Vec<f64>>,
}

impl PhaseDensity {
    /// Returns the density for a MASH of order 1 … 5.
    ///
    /// # Errors
    /// `OrderOutOfRange`.
    ///
    /// # Examples
    /// ```
    /// use thornmap::tones::PhaseDensity;
    /// let triangle = PhaseDensity::mash(2).unwrap();
    /// assert_eq!(triangle.at(0.25), 0.75);
    /// assert_eq!(triangle.reach_cycles(), 1.0);
    /// ```
    pub fn mash(order: u8) -> Result<Self, CurveError> {
        if !(1..=LARGEST_ORDER).contains(&order) {
            return Err(CurveError::OrderOutOfRange { found: order });
        }
        let widths: Vec<i64> = (0..order).map(|j| i64::from(binomial(order - 1, j))).collect();
        Ok(Self { order, ..Self::of_boxes(&widths) })
    }

    /// Returns the density of a sum of centred uniform variables with these positive integer widths (at most 8).
    ///
    /// `f(x) = Σ_S (−1)^|S| (x − k_S)₊^(n−1) / ((n−1)!·Π w)` over the subsets S of boxes, `k_S` the sum of S less half the
    /// whole width; each piece is expanded in integers around its left knot.
    pub(super) fn of_boxes(widths: &[i64]) -> Self {
        let degree = u32::try_from(widths.len()).expect("a handful of boxes") - 1;
        let whole: i64 = widths.iter().sum();
        let divisor: i64 = widths.iter().product::<i64>() * (1..=i64::from(degree)).product::<i64>();
        let pieces = (0..whole)
            .map(|piece| {
                let mut coefficients = vec![0i64; widths.len()];
                for subset in 0..1u32 << widths.len() {
                    let knot: i64 =
                        widths.iter().enumerate().filter(|(j, _)| subset >> j & 1 == 1).map(|(_, w)| w).sum();
                    if knot > piece {
                        continue;
                    }
                    let sign = if subset.count_ones() % 2 == 0 { 1 } else { -1 };
                    for (power, coefficient) in (0..=degree).zip(&mut coefficients) {
                        let chosen = i64::from(binomial(degree, power));
                        *coefficient += sign * chosen * (piece - knot).pow(degree - power);
                    }
                }
                coefficients.into_iter().map(|integer| integer as f64 / divisor as f64).collect()
            })
            .collect();
        Self { order: 0, first_knot_cycles: -(whole as f64) / 2.0, pieces }
    }

    /// Returns the order of the modulator.
    #[must_use]
    pub const fn order(&self) -> u8 {
        self.order
    }

    /// Returns the largest phase error in magnitude.
    #[must_use]
    pub fn reach_cycles(&self) -> f64 {
        -self.first_knot_cycles
    }

    /// Returns the density \[1/cycle\] at a phase error; zero outside the support.
    #[must_use]
    pub fn at(&self, phase_cycles: f64) -> f64 {
        let place = phase_cycles - self.first_knot_cycles;
        if !(place >= 0.0 && place < self.pieces.len() as f64) {
            return 0.0;
        }
        #[allow(
            clippy::cast_possible_truncation,
            clippy::cast_sign_loss,
            reason = "the floor lies in 0 … number of pieces, tested above"
        )]
        let piece = place.floor() as usize;
        polynomial(&self.pieces[piece], place - place.floor())
    }

    /// Calls `take(x, weight)` on a quadrature of `∫ f(x)·… dx`, split at the knots, at `breaks_cycles` and so finely that
    /// `e^{j2πhx}` with `h = harmonic` turns at most four times a piece.
    pub(super) fn each_node(&self, breaks_cycles: &[f64], harmonic: u64, mut take: impl FnMut(f64, f64)) {
        let rule = Rule::standard();
        let mut left = self.first_knot_cycles;
        for coefficients in &self.pieces {
            let right = left + 1.0;
            let mut edges = vec![left];
            edges.extend(breaks_cycles.iter().copied().filter(|x| *x > left && *x < right));
            edges.push(right);
            edges.sort_by(f64::total_cmp);
            for pair in edges.windows(2) {
                let width = pair[1] - pair[0];
                let mut parts: u32 = 1;
                while width * harmonic as f64 > PERIODS_PER_PIECE * f64::from(parts) {
                    parts *= 2;
                }
                for part in 0..parts {
                    let low = pair[0] + width * f64::from(part) / f64::from(parts);
                    let high = pair[0] + width * f64::from(part + 1) / f64::from(parts);
                    rule.each(low, high, |x, weight| take(x, weight * polynomial(coefficients, x - left)));
                }
            }
            left = right;
        }
    }
}

/// Returns `c_0 + c_1·t + c_2·t² + …`.
fn polynomial(coefficients: &[f64], t: f64) -> f64 {
    coefficients.iter().rev().fold(0.0, |sum, coefficient| sum * t + coefficient)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn hand_values() {
        // A triangle for order 2; for order 3 the convolution of it with a box of width 2: 1/2 at 0, 1/4 at ±1, 0 at ±2.
        let three = PhaseDensity::mash(3).unwrap();
        for (x, want) in [(0.0, 0.5), (1.0, 0.25), (-1.0, 0.25), (2.0, 0.0), (-2.0, 0.0), (2.5, 0.0), (1.5, 0.0625)] {
            assert!((three.at(x) - want).abs() < 1e-15, "{x}");
        }
        let one = PhaseDensity::mash(1).unwrap();
        assert_eq!((one.at(-0.5), one.at(0.49), one.at(0.5), one.reach_cycles()), (1.0, 1.0, 0.0, 0.5));
        for order in [0, 6] {
            assert_eq!(PhaseDensity::mash(order), Err(CurveError::OrderOutOfRange { found: order }));
        }
    }

    #[test]
    fn moments_are_those_of_the_boxes() {
        for order in 1..=LARGEST_ORDER {
            let density = PhaseDensity::mash(order).unwrap();
            let reaches = [0.5, 1.0, 2.0, 4.0, 8.0];
            assert_eq!(density.reach_cycles(), reaches[usize::from(order) - 1]);
            let (mut mass, mut mean, mut square) = (0.0, 0.0, 0.0);
            density.each_node(&[0.1, -0.3], 0, |x, weight| {
                mass += weight;
                mean += weight * x;
                square += weight * x * x;
            });
            // The variance of the sum is Σ C(m−1, j)²/12 = C(2m−2, m−1)/12.
            let variance = f64::from(binomial(2 * u32::from(order) - 2, u32::from(order) - 1)) / 12.0;
            assert!((mass - 1.0).abs() < 1e-14 && mean.abs() < 1e-14, "order {order}: {mass}, {mean}");
            assert!((square / variance - 1.0).abs() < 1e-14, "order {order}: {square}");
        }
    }

    #[test]
    fn folded_by_one_cycle_it_is_flat() {
        // Given u = s_1/M the phase is one of i − u; the density of u is uniform, so the sum over i is 1.
        let mut checked = 0;
        for order in 2..=LARGEST_ORDER {
            let density = PhaseDensity::mash(order).unwrap();
            for step in 0..100 {
                let u = f64::from(step) / 100.0;
                let sum: f64 = (-9..=9).map(|i| density.at(f64::from(i) - u)).sum();
                assert!((sum - 1.0).abs() < 1e-14, "order {order}, u {u}");
                checked += 1;
            }
        }
        assert_eq!(checked, 400);
    }
}
