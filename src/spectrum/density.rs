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
/// The window averages over about ±1 bin rms: on a spectrum rising as `f^(2(m−1))` the bin k reads high by some
/// `(m−1)(2m−3)/k²` of its value, so bins below [`Density::first_trusted_bin`] are not to be read as levels.
#[derive(Debug, Clone, PartialEq)]
pub struct Density {
    settings: DensitySettings,
    values: Vec<f64>,
    segments: usize,
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
        // Bias (m−1)(2m−3)·σ²/k² with σ² ≤ 1.7 bins² for the four-term window; 0.3 dB is 7 %.
        self.settings.window.half_lobe_bins() + 5 * usize::from(order.saturating_sub(1))
    }

    /// Returns an approximate number of independent averages: disjoint stretches of the record, doubled for the overlap
    /// that the window allows.
    #[must_use]
    pub fn independent_averages(&self) -> f64 {
        let overlap = self.settings.window.hop(self.settings.segment) as f64 / self.settings.segment as f64;
        // Hann at 1/2: 36/19 per disjoint segment; four-term at 1/3: about 2.3 (Welch 1967, from the weights' overlap).
        (1.0 + (self.segments as f64 - 1.0) * (overlap / Self::spread(self.settings.window))).max(1.0)
    }

    /// Share of a segment that one independent average takes.
    const fn spread(window: Window) -> f64 {
        match window {
            Window::Rectangular => 1.0,
            Window::Hann => 0.53,
            Window::FourTerm => 0.40,
        }
    }
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
            let input = Self::input(scratch);
            input.clear();
            input.extend(part.iter().zip(&weights).map(|(sample, weight)| (sample - mean) * weight));
            self.transform(scratch);
            for (value, line) in values.iter_mut().zip(&Self::output(scratch)[1..]) {
                *value += line.norm_sqr();
            }
            segments += 1;
        }
        let squares: f64 = weights.iter().map(|weight| weight * weight).sum();
        let scale = 1.0 / (segments as f64 * squares * settings.sample_rate_hz);
        for value in &mut values {
            *value *= scale;
        }
        Ok(Density { settings, values, segments })
    }
}
