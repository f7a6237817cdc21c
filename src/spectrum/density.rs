//! Averaged, windowed periodograms (Welch 1967).

use super::{FftScratch, FftStage, SpectrumError, Window};

/// How a density is estimated.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct DensitySettings {
    /// Samples per segment, at least 16.
    pub segment: usize,
    /// Weights; [`Window::FourTerm`] for the phase of modulators, whose spectrum rises steeply.
    pub window: Window,
    /// Rate of the samples.
    pub sample_rate_hz: f64,
}

/// Shortest segment: the main lobe of the widest window, twice.
const LEAST_SEGMENT: usize = 16;

/// A two-sided density at the frequencies `k·f_s/segment`, `k = 1 … floor(segment/2)`.
///
/// The window smooths: on a spectrum rising as `f^(2(m−1))` bin k reads high by about `(m−1)(2m−3)·0.7/k²` of its value
/// (four-term), so bins below [`Density::first_trusted_bin`] are not to be read as levels.
#[derive(Debug, Clone, PartialEq)]
pub struct Density {
    settings: DensitySettings,
    values: Vec<f64>,
    segments: usize,
    independent_averages: f64,
}

impl Density {
    /// Returns the density \[unit²/Hz\] of bin `k`; `None` for `k = 0` (the mean is removed) and above half the segment.
    #[must_use]
    pub fn at_bin(&self, bin: usize) -> Option<f64> {
        self.values.get(bin.checked_sub(1)?).copied()
    }

    /// Returns the densities \[unit²/Hz\]; the first belongs to bin 1.
    #[must_use]
    pub fn values(&self) -> &[f64] {
        &self.values
    }

    /// Returns the frequency of a bin.
    #[must_use]
    pub fn offset_hz(&self, bin: usize) -> f64 {
        bin as f64 * self.settings.sample_rate_hz / self.settings.segment as f64
    }

    /// Returns the settings of the estimate.
    #[must_use]
    pub const fn settings(&self) -> DensitySettings {
        self.settings
    }

    /// Returns how many segments were averaged; overlapping ones are not independent.
    #[must_use]
    pub const fn segments(&self) -> usize {
        self.segments
    }

    /// Returns the noise-equivalent bandwidth of a bin: a line of power p stands in it as `p/bandwidth`.
    #[must_use]
    pub fn noise_bandwidth_hz(&self) -> f64 {
        self.settings.window.noise_bandwidth_bins() * self.settings.sample_rate_hz / self.settings.segment as f64
    }

    /// Returns the first bin whose smoothing bias is below 0.3 dB on the phase noise of a modulator of this order.
    #[must_use]
    pub fn first_trusted_bin(&self, order: u8) -> usize {
        // 0.3 dB is 7 %: order 5 needs bin 17 by the estimate above; the tests take the exact mean of the periodogram.
        self.settings.window.half_lobe_bins() + 5 * usize::from(order.saturating_sub(1))
    }

    /// Returns how many independent averages the segments are worth: a bin's standard deviation is its value over the
    /// square root of this.
    #[must_use]
    pub const fn independent_averages(&self) -> f64 {
        self.independent_averages
    }
}

/// Returns `n/(1 + 2·Σ_j (1 − j/n)·ρ_j²)`, ρ_j the correlation of the weights shifted by j hops (Welch 1967).
fn independent_averages(weights: &[f64], hop: usize, segments: usize) -> f64 {
    let squares: f64 = weights.iter().map(|weight| weight * weight).sum();
    let count = segments as f64;
    let mut spread = 1.0;
    for (j, shift) in (hop..weights.len()).step_by(hop).enumerate().take(segments - 1) {
        let correlation = weights.iter().zip(&weights[shift..]).map(|(a, b)| a * b).sum::<f64>() / squares;
        spread += 2.0 * (1.0 - (j + 1) as f64 / count) * correlation * correlation;
    }
    count / spread
}

impl FftStage {
    /// Returns the two-sided density of the samples \[unit²/Hz\]; each segment's mean is removed first.
    ///
    /// Divided by the weights' sum of squares, so white noise of variance v reads `v/f_s` at every bin. The last samples
    /// that fill no segment are left out.
    ///
    /// # Errors
    /// `SegmentOutOfRange`, `SampleRate`, `NotFinite`.
    ///
    /// Source: Welch 1967, IEEE Trans. Audio Electroacoust. 15, eq. for modified periodograms.
    pub fn density(
        &self,
        samples: &[f64],
        settings: DensitySettings,
        scratch: &mut FftScratch,
    ) -> Result<Density, SpectrumError> {
        let segment = settings.segment;
        if segment < LEAST_SEGMENT || segment > samples.len() {
            return Err(SpectrumError::SegmentOutOfRange { segment, least: LEAST_SEGMENT, samples: samples.len() });
        }
        if !(settings.sample_rate_hz.is_finite() && settings.sample_rate_hz > 0.0) {
            return Err(SpectrumError::SampleRate { found_hz: settings.sample_rate_hz });
        }
        if let Some((index, found)) = samples.iter().enumerate().find(|(_, sample)| !sample.is_finite()) {
            return Err(SpectrumError::NotFinite { index, found: *found });
        }
        let weights = settings.window.weights(segment);
        let mut values = vec![0.0; segment / 2];
        let mut segments = 0usize;
        for start in (0..=samples.len() - segment).step_by(settings.window.hop(segment)) {
            let part = &samples[start..start + segment];
            let mean = part.iter().sum::<f64>() / segment as f64;
            scratch.input.clear();
            scratch.input.extend(part.iter().zip(&weights).map(|(sample, weight)| (sample - mean) * weight));
            self.transform(scratch);
            for (value, line) in values.iter_mut().zip(&scratch.output[1..]) {
                *value += line.norm_sqr();
            }
            segments += 1;
        }
        let squares: f64 = weights.iter().map(|weight| weight * weight).sum();
        let scale = 1.0 / (segments as f64 * squares * settings.sample_rate_hz);
        for value in &mut values {
            *value *= scale;
        }
        let independent_averages = independent_averages(&weights, settings.window.hop(segment), segments);
        Ok(Density { settings, values, segments, independent_averages })
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::spectrum::ideal_density;

    /// The exact mean of a windowed periodogram of shaped noise, from its autocovariance, which ends after m − 1 lags.
    fn mean_periodogram(weights: &[f64], order: u32, bin: usize) -> f64 {
        let squares: f64 = weights.iter().map(|weight| weight * weight).sum();
        let length = weights.len();
        let zeros = order - 1;
        let mut sum = 0.0;
        for lag in 0..=zeros {
            let sign = if lag % 2 == 0 { 1.0 } else { -1.0 };
            let covariance = sign * f64::from(num_integer::binomial(2 * zeros, zeros + lag)) / 12.0;
            let shift = usize::try_from(lag).unwrap();
            let overlap: f64 = weights.iter().zip(&weights[shift..]).map(|(a, b)| a * b).sum();
            let turn = (shift * bin % length) as f64 / length as f64;
            let sides = if lag == 0 { 1.0 } else { 2.0 };
            sum += sides * covariance * overlap * (std::f64::consts::TAU * turn).cos();
        }
        sum / squares
    }

    #[test]
    fn trusted_bins_are_within_0_3_db_for_every_order() {
        let stage = FftStage::new();
        let samples: Vec<f64> = (0..512u32).map(|n| f64::from(n * n % 37)).collect();
        let settings = DensitySettings { segment: 512, window: Window::FourTerm, sample_rate_hz: 1.0 };
        let density = stage.density(&samples, settings, &mut FftScratch::new()).unwrap();
        let weights = Window::FourTerm.weights(512);
        let mut checked = 0;
        for order in 2..=5u8 {
            for bin in density.first_trusted_bin(order)..=256 {
                let formula = ideal_density(order, bin as f64 / 512.0, 1.0) / std::f64::consts::TAU.powi(2);
                let ratio = mean_periodogram(&weights, order.into(), bin) / formula;
                assert!(crate::base::db_from_power(ratio).abs() < 0.3, "order {order}, bin {bin}: {ratio}");
                checked += 1;
            }
        }
        assert!(checked > 900, "{checked}");
    }

    #[test]
    fn overlapped_segments_count_for_what_they_are_worth() {
        // Hann at half overlap: ρ = 1/6, so n segments are worth n/(1 + 2·(1 − 1/n)/36).
        let weights = Window::Hann.weights(1024);
        assert!((independent_averages(&weights, 512, 10) - 10.0 / (1.0 + 2.0 * 0.9 / 36.0)).abs() < 1e-9);
        assert_eq!(independent_averages(&weights, 512, 1), 1.0);
        assert_eq!(independent_averages(&Window::Rectangular.weights(64), 64, 7), 7.0);
    }
}
