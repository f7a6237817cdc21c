//! How much noise stands around a line: a line below it is noise.

use num_complex::Complex64;

use super::Density;

/// The bins that speak for the noise around a line.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct Neighbourhood {
    /// Bins left out on each side of the line, itself included at 0.
    pub excluded: usize,
    /// Bins taken on each side beyond those.
    pub taken: usize,
}

impl Neighbourhood {
    /// Returns the indices around `bin` within `first..=last`.
    fn bins(self, bin: usize, first: usize, last: usize) -> impl Iterator<Item = usize> {
        let reach = self.excluded + self.taken;
        let low = bin.saturating_sub(reach).max(first);
        let high = (bin + reach).min(last);
        (low..=high).filter(move |other| other.abs_diff(bin) > self.excluded)
    }
}

/// Fewest neighbours from which a median is taken.
const LEAST_NEIGHBOURS: usize = 8;

/// Returns the median, or `None` with too few values.
fn median(mut values: Vec<f64>) -> Option<f64> {
    if values.len() < LEAST_NEIGHBOURS {
        return None;
    }
    values.sort_by(f64::total_cmp);
    let middle = values.len() / 2;
    Some(if values.len() % 2 == 1 { values[middle] } else { f64::midpoint(values[middle - 1], values[middle]) })
}

/// Returns the mean power \[unit²\] of noise on one line near `bin`, from the lines of one period.
///
/// It is the median of `|c|²` around, divided by ln 2: noise lines are complex Gaussian, their power is exponential.
/// The median keeps other tones out. `None` with fewer than 8 neighbours.
#[must_use]
pub fn local_line_power(lines: &[Complex64], bin: usize, around: Neighbourhood) -> Option<f64> {
    let last = lines.len().checked_sub(1)?;
    let powers = around.bins(bin, 1, last).map(|k| lines[k].norm_sqr()).collect();
    median(powers).map(|value| value / std::f64::consts::LN_2)
}

impl Density {
    /// Returns the noise density \[unit²/Hz\] around a bin: the median of the neighbours, corrected to a mean.
    ///
    /// The median of n averaged exponentials lies at `(1 − 1/(9n))³` of the mean (Wilson & Hilferty 1931).
    /// `None` with fewer than 8 neighbours. The excluded bins must cover the main lobe of the window.
    #[must_use]
    pub fn local_noise(&self, bin: usize, around: Neighbourhood) -> Option<f64> {
        let around = Neighbourhood { excluded: around.excluded.max(self.settings().window.half_lobe_bins()), ..around };
        let values = around.bins(bin, 1, self.values().len()).filter_map(|k| self.at_bin(k)).collect();
        let median_to_mean = (1.0 - 1.0 / (9.0 * self.independent_averages())).powi(3);
        median(values).map(|value| value / median_to_mean)
    }
}
