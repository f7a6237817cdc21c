//! The filter as a network: its transfer impedance in poles and residues, exact for the loaded ladder.

use num_complex::Complex64;

use super::settings::{FilterComponents, LoopModelError};

/// A loop filter seen from the charge pump to the tuning node: `Z(s) = k_0/s + Σ k_i/(s + p_i) + k_∞`.
#[derive(Debug, Clone, PartialEq)]
pub struct FilterNetwork {
    components: FilterComponents,
    integrator: f64,
    poles: Vec<Pole>,
    direct_ohm: f64,
}

/// A real pole of the filter at s = −rate.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Pole {
    /// Rate p \[rad/s\], positive.
    pub rate: f64,
    /// Residue k \[Ω·rad/s\].
    pub residue: f64,
}

/// A resistor of the filter, for its thermal noise.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord)]
pub enum Resistor {
    /// Resistor of the zero.
    R2,
    /// Resistor of the third pole.
    R3,
    /// Resistor of the fourth pole.
    R4,
}

impl Resistor {
    /// Returns the resistor's name.
    #[must_use]
    pub const fn name(self) -> &'static str {
        match self {
            Self::R2 => "R2",
            Self::R3 => "R3",
            Self::R4 => "R4",
        }
    }
}

impl FilterNetwork {
    /// Returns the network of checked components.
    ///
    /// # Errors
    /// `NotPositive` for a component that is not positive and finite; `FourthWithoutThird` for R4–C4 alone.
    pub fn new(components: &FilterComponents) -> Result<Self, LoopModelError> {
        components.check()?;
        let (denominator, zero_s) = denominator(components);
        let slope = derivative(&denominator);
        let mut poles = Vec::new();
        for root in negative_roots(&denominator) {
            // Z = (1 + s·T2)/(s·D(s)): the residue at s = −p.
            let residue = (1.0 - root * zero_s) / (-root * evaluate(&slope, -root));
            poles.push(Pole { rate: root, residue });
        }
        let integrator = 1.0 / denominator[0];
        // Only without any shunt capacitor at the pump node does a current step reach the output at once.
        let direct_ohm = if denominator.len() == 1 { zero_s / denominator[0] } else { 0.0 };
        Ok(Self { components: *components, integrator, poles, direct_ohm })
    }

    /// Returns the components.
    #[must_use]
    pub fn components(&self) -> &FilterComponents {
        &self.components
    }

    /// Returns k_0 \[V/(A·s)\], one over the total capacitance.
    #[must_use]
    pub fn integrator(&self) -> f64 {
        self.integrator
    }

    /// Returns the poles, slowest first.
    #[must_use]
    pub fn poles(&self) -> &[Pole] {
        &self.poles
    }

    /// Returns k_∞ \[Ω\]; zero but for a series R–C alone.
    #[must_use]
    pub fn direct_ohm(&self) -> f64 {
        self.direct_ohm
    }

    /// Returns D(s), rising powers, and T2 \[s\], where `Z(s) = (1 + s·T2)/(s·D(s))`.
    pub(super) fn polynomials(&self) -> (Vec<f64>, f64) {
        denominator(&self.components)
    }

    /// Returns Z(s) \[Ω\] at `s` \[rad/s\], which is no pole and not zero.
    #[must_use]
    pub fn impedance(&self, s: Complex64) -> Complex64 {
        let poles: Complex64 = self.poles.iter().map(|pole| pole.residue / (s + pole.rate)).sum();
        self.integrator / s + poles + self.direct_ohm
    }

    /// Returns the resistors with their values \[Ω\].
    #[must_use]
    pub fn resistors(&self) -> Vec<(Resistor, f64)> {
        let c = &self.components;
        let mut list = vec![(Resistor::R2, c.r2_ohm)];
        list.extend(c.r3_c3.map(|(ohm, _)| (Resistor::R3, ohm)));
        list.extend(c.r4_c4.map(|(ohm, _)| (Resistor::R4, ohm)));
        list
    }

    /// Returns the gain from the noise voltage in series with a resistor to the open tuning node.
    #[must_use]
    pub fn noise_gain(&self, resistor: Resistor, s: Complex64) -> Complex64 {
        let c = &self.components;
        let branch = c.r2_ohm + (s * c.c2_farad).inv();
        // Impedance of the pump node to ground without the later sections.
        let first = (branch.inv() + s * c.c1_farad.unwrap_or(0.0)).inv();
        let last = c.r4_c4.map(|(r4, c4)| (r4, (s * c4).inv()));
        match (resistor, c.r3_c3) {
            (Resistor::R2, _) => self.impedance(s) / branch,
            (Resistor::R3, Some((r3, c3))) => {
                let shunt = (s * c3).inv();
                match last {
                    None => shunt / (first + r3 + shunt),
                    Some((r4, c4)) => {
                        let right = (s * c3 + (r4 + c4).inv()).inv();
                        right / (first + r3 + right) * c4 / (r4 + c4)
                    }
                }
            }
            (Resistor::R4, Some((r3, c3))) => match last {
                None => Complex64::ZERO,
                Some((r4, c4)) => {
                    let left = (s * c3 + (first + r3).inv()).inv();
                    c4 / (left + r4 + c4)
                }
            },
            (Resistor::R3 | Resistor::R4, None) => Complex64::ZERO,
        }
    }
}

/// Returns D(s), rising powers, and T2 \[s\], where `Z(s) = (1 + s·T2)/(s·D(s))`.
fn denominator(c: &FilterComponents) -> (Vec<f64>, f64) {
    // Start at the tuning node with 1 V and walk towards the pump: polynomials in s, rising powers.
    let mut voltage = vec![1.0];
    let mut current = vec![0.0];
    for (ohm, farad) in [c.r4_c4, c.r3_c3].into_iter().flatten() {
        current = add(&current, &shifted(&voltage, farad));
        voltage = add(&voltage, &scaled(&current, ohm));
    }
    current = add(&current, &shifted(&voltage, c.c1_farad.unwrap_or(0.0)));
    let zero_s = c.r2_ohm * c.c2_farad;
    let total = add(&add(&current, &shifted(&current, zero_s)), &shifted(&voltage, c.c2_farad));
    // The constant term is zero: no current flows at s = 0 into capacitors only.
    let mut divided = total[1..].to_vec();
    while divided.len() > 1 && divided.last() == Some(&0.0) {
        divided.pop();
    }
    (divided, zero_s)
}

fn add(a: &[f64], b: &[f64]) -> Vec<f64> {
    (0..a.len().max(b.len())).map(|i| a.get(i).unwrap_or(&0.0) + b.get(i).unwrap_or(&0.0)).collect()
}

fn scaled(a: &[f64], by: f64) -> Vec<f64> {
    a.iter().map(|value| value * by).collect()
}

/// Returns `s·by·a`.
fn shifted(a: &[f64], by: f64) -> Vec<f64> {
    std::iter::once(0.0).chain(a.iter().map(|value| value * by)).collect()
}

fn evaluate(polynomial: &[f64], s: f64) -> f64 {
    polynomial.iter().rev().fold(0.0, |sum, coefficient| sum * s + coefficient)
}

fn derivative(polynomial: &[f64]) -> Vec<f64> {
    polynomial.iter().enumerate().skip(1).map(|(power, value)| value * power as f64).collect()
}

/// Returns p > 0 for every root s = −p of a polynomial whose roots are all real and negative, smallest first.
///
/// An RC ladder has only such roots. Newton's method from s = 0, right of all roots, falls monotonically on the
/// nearest one; deflation by the exact polynomial keeps later roots from falling on it again.
fn negative_roots(polynomial: &[f64]) -> Vec<f64> {
    let slope = derivative(polynomial);
    let mut found: Vec<f64> = Vec::new();
    for _ in 1..polynomial.len() {
        let mut s = found.last().map_or(0.0, |last| -last * (1.0 + 1e-9));
        for _ in 0..200 {
            let value = evaluate(polynomial, s);
            // Newton on P(s)/Π(s − s_i): the roots already found are divided out (Maehly 1954, from memory).
            let found_part: f64 = found.iter().map(|p| 1.0 / (s + p)).sum();
            let step = value / (evaluate(&slope, s) - value * found_part);
            s -= step;
            if step.abs() <= 1e-15 * s.abs() {
                break;
            }
        }
        found.push(-s);
    }
    found.sort_by(f64::total_cmp);
    found
}

#[cfg(test)]
mod tests {
    use super::*;
    use std::f64::consts::TAU;

    const SECOND: FilterComponents = FilterComponents {
        c1_farad: Some(582.897e-12),
        r2_ohm: 6826.03,
        c2_farad: 2.81448e-9,
        r3_c3: None,
        r4_c4: None,
    };

    /// The ladder solved as written, section by section, at one frequency.
    fn ladder(c: &FilterComponents, s: Complex64) -> Complex64 {
        let (mut voltage, mut current) = (Complex64::ONE, Complex64::ZERO);
        for (ohm, farad) in [c.r4_c4, c.r3_c3].into_iter().flatten() {
            current += s * farad * voltage;
            voltage += current * ohm;
        }
        current += s * c.c1_farad.unwrap_or(0.0) * voltage;
        current += voltage / (c.r2_ohm + (s * c.c2_farad).inv());
        current.inv()
    }

    #[test]
    fn partial_fractions_equal_the_ladder() {
        let third = FilterComponents { r3_c3: Some((2200.0, 100e-12)), ..SECOND };
        let fourth = FilterComponents { r4_c4: Some((3300.0, 33e-12)), ..third };
        let series = FilterComponents { c1_farad: None, ..SECOND };
        let mut cases = 0;
        for components in [SECOND, third, fourth, series] {
            let network = FilterNetwork::new(&components).unwrap();
            for exponent in 0..=14 {
                let s = Complex64::new(0.0, TAU * 10f64.powf(1.0 + 0.5 * f64::from(exponent)));
                let (a, b) = (network.impedance(s), ladder(&components, s));
                assert!((a - b).norm() <= 1e-9 * b.norm(), "{components:?} at {s}: {a} against {b}");
                cases += 1;
            }
        }
        assert_eq!(cases, 4 * 15);
    }

    #[test]
    fn noise_of_a_passive_filter_obeys_its_output_resistance() {
        // Johnson–Nyquist: Σ R·|gain|² equals the real part of the impedance seen at the tuning node (common practice).
        let fourth = FilterComponents { r3_c3: Some((2200.0, 100e-12)), r4_c4: Some((3300.0, 33e-12)), ..SECOND };
        let network = FilterNetwork::new(&fourth).unwrap();
        for frequency in [1e3, 3e4, 1e6] {
            let s = Complex64::new(0.0, TAU * frequency);
            let branch = (fourth.r2_ohm + (s * fourth.c2_farad).inv()).inv() + s * 582.897e-12;
            let second = (s * 100e-12 + (branch.inv() + 2200.0).inv()).inv();
            let seen = (s * 33e-12 + (second + 3300.0).inv()).inv();
            let sum: f64 = network.resistors().iter().map(|(r, ohm)| ohm * network.noise_gain(*r, s).norm_sqr()).sum();
            assert!((sum - seen.re).abs() < 1e-9 * seen.re, "{frequency}: {sum} against {}", seen.re);
        }
    }
}
