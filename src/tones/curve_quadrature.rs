//! Gauss–Legendre rules.

use std::f64::consts::PI;
use std::sync::OnceLock;

/// Nodes on −1 … 1 with their weights, which sum to 2.
#[derive(Debug, Clone, PartialEq)]
pub(super) struct Rule {
    nodes: Vec<(f64, f64)>,
}

impl Rule {
    /// Returns the rule with `count` ≥ 1 nodes, exact for polynomials up to degree `2·count − 1`.
    ///
    /// Newton's method on the Legendre recurrence from Tricomi's starting points (Abramowitz & Stegun 25.4.29).
    pub(super) fn new(count: usize) -> Self {
        let degree = count as f64;
        let nodes = (0..count)
            .map(|i| {
                let mut x = -(PI * (i as f64 + 0.75) / (degree + 0.5)).cos();
                let mut slope = 1.0;
                for _ in 0..100 {
                    let (mut below, mut value) = (1.0, x);
                    for k in 2..=count {
                        let k = k as f64;
                        (below, value) = (value, ((2.0 * k - 1.0) * x * value - (k - 1.0) * below) / k);
                    }
                    slope = degree * (x * value - below) / (x * x - 1.0);
                    let change = value / slope;
                    x -= change;
                    if change.abs() < 1e-16 {
                        break;
                    }
                }
                (x, 2.0 / ((1.0 - x * x) * slope * slope))
            })
            .collect();
        Self { nodes }
    }

    /// Returns the rule of the curve integrals: 24 nodes, good to 1e-16 over four periods of an oscillation.
    pub(super) fn standard() -> &'static Self {
        static RULE: OnceLock<Rule> = OnceLock::new();
        RULE.get_or_init(|| Self::new(24))
    }

    /// Calls `take(x, weight)` at the nodes moved to `low … high`.
    pub(super) fn each(&self, low: f64, high: f64, mut take: impl FnMut(f64, f64)) {
        let (middle, half) = (f64::midpoint(low, high), (high - low) / 2.0);
        for (node, weight) in &self.nodes {
            take(middle + half * node, half * weight);
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn integrates_polynomials_exactly() {
        let mut checked = 0;
        for count in [1, 2, 3, 8, 24, 48, 96] {
            for power in 0..(2 * count).min(60) {
                let mut sum = 0.0;
                Rule::new(count).each(0.0, 1.0, |x, weight| sum += weight * x.powi(i32::try_from(power).unwrap()));
                assert!((sum * (power as f64 + 1.0) - 1.0).abs() < 1e-13, "{count} nodes, power {power}: {sum}");
                checked += 1;
            }
        }
        assert_eq!(checked, 196);
    }
}
