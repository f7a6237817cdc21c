//! One windowed record, transformed whole: lines between the bins and the noise beside them.

use std::f64::consts::PI;

use num_complex::Complex64;
use pulp::{Arch, Simd, WithSimd};

use super::{FftScratch, FftStage, Window};

/// Samples made, bent and weighted at a time: they stay in the first-level cache until they are whole.
const BLOCK: usize = 1024;

/// A window over records of one length; made once, shared by all channels and workers.
#[derive(Debug, Clone, PartialEq)]
pub struct RecordWindow {
    window: Window,
    weights: Vec<f64>,
    squares: f64,
    /// How long before the record the window starts \[samples\].
    early: f64,
}

impl RecordWindow {
    /// Returns the weights of `length` samples.
    ///
    /// # Panics
    /// For no samples.
    #[must_use]
    pub fn new(window: Window, length: usize) -> Self {
        assert!(length > 0, "a record needs at least one sample");
        let weights = window.weights(length);
        Self::of(window, weights, 0.0)
    }

    /// Returns every `factor`-th weight of a longer record from `first` on, around its end: for a decimated record whose
    /// samples stand for later moments.
    pub(super) fn decimated(window: Window, length: usize, factor: usize, first: usize) -> Self {
        let whole = window.weights(length);
        let weights = (0..length / factor).map(|n| whole[(first + n * factor) % length]).collect();
        Self::of(window, weights, first as f64 / factor as f64)
    }

    fn of(window: Window, weights: Vec<f64>, early: f64) -> Self {
        let squares = weights.iter().map(|weight| weight * weight).sum();
        Self { window, weights, squares, early }
    }

    /// Returns the weights, numbers of 0 … 1.
    #[must_use]
    pub fn weights(&self) -> &[f64] {
        &self.weights
    }

    /// Returns the shape.
    #[must_use]
    pub const fn window(&self) -> Window {
        self.window
    }

    /// Returns what a line of coefficient 1, `distance_bins` above a bin, leaves in that bin.
    fn gain(&self, distance_bins: f64) -> Complex64 {
        let length = self.weights.len() as f64;
        // Σ e^{j2πxn/L} over the record.
        let comb = |x: f64| {
            let size = if x == 0.0 { length } else { (PI * x).sin() / (PI * x / length).sin() };
            Complex64::from_polar(size, PI * x * (1.0 - 1.0 / length))
        };
        let mut gain = Complex64::ZERO;
        let mut sign = 1.0;
        for (turns, coefficient) in self.window.coefficients().iter().enumerate() {
            let turns = turns as f64;
            gain += match turns {
                0.0 => comb(distance_bins) * *coefficient,
                _ => {
                    let turn = Complex64::cis(2.0 * PI * turns * self.early / length);
                    (comb(distance_bins + turns) * turn + comb(distance_bins - turns) * turn.conj())
                        * (sign * coefficient / 2.0)
                }
            };
            sign = -sign;
        }
        gain
    }
}

/// The spectrum of one windowed record; it lives in the worker's buffers.
#[derive(Debug, Clone, Copy)]
pub struct RecordSpectrum<'a> {
    bins: &'a [Complex64],
    window: &'a RecordWindow,
}

/// A job that is compiled once for each instruction set.
struct Weigh<'a, F> {
    part: &'a mut [f64],
    weights: &'a [f64],
    bend: F,
}

impl<F: Fn(f64) -> f64> WithSimd for Weigh<'_, F> {
    type Output = ();

    #[inline(always)]
    fn with_simd<S: Simd>(self, _simd: S) {
        for (sample, weight) in self.part.iter_mut().zip(self.weights) {
            *sample = (self.bend)(*sample) * weight;
        }
    }
}

impl FftStage {
    /// Returns the spectrum of a record that `source` writes part by part and `bend` maps sample by sample.
    ///
    /// Everything goes straight into the transform's input: samples are made, bent and weighted while they are in the
    /// first-level cache, and nothing is allocated once the buffers have grown. The mean is not removed: let `source`
    /// or `bend` take it off, or read no line within [`Window::half_lobe_bins`] of zero. A closure that owns its numbers
    /// (`move`) is several times faster than one that refers to them: only then does the compiler use vectors.
    ///
    /// # Errors
    /// What `source` gives.
    ///
    /// # Examples
    /// ```
    /// use thornmap::spectrum::{FftScratch, FftStage, RecordWindow, Window};
    /// let (stage, mut scratch) = (FftStage::new(), FftScratch::new());
    /// let window = RecordWindow::new(Window::Hann, 4000);
    /// let mut n = 0;
    /// let wave = |part: &mut [f64]| {
    ///     for sample in part {
    ///         *sample = (std::f64::consts::TAU * 0.123_456 * n as f64).cos();
    ///         n += 1;
    ///     }
    ///     Ok::<(), ()>(())
    /// };
    /// let spectrum = stage.record(&window, wave, |x| 0.02 * x, &mut scratch).unwrap();
    /// assert!((spectrum.line(123_456, 1_000_000).norm() - 0.01).abs() < 1e-9);
    /// ```
    pub fn record<'a, E>(
        &self,
        window: &'a RecordWindow,
        mut source: impl FnMut(&mut [f64]) -> Result<(), E>,
        bend: impl Fn(f64) -> f64 + Copy,
        scratch: &'a mut FftScratch,
    ) -> Result<RecordSpectrum<'a>, E> {
        scratch.input.resize(window.weights.len(), 0.0);
        let arch = Arch::new();
        for (part, weights) in scratch.input.chunks_mut(BLOCK).zip(window.weights.chunks(BLOCK)) {
            source(part)?;
            arch.dispatch(Weigh { part, weights, bend });
        }
        self.transform(scratch);
        Ok(RecordSpectrum::new(&scratch.output, window))
    }
}

impl<'a> RecordSpectrum<'a> {
    /// Returns the spectrum that a transform left.
    pub(super) const fn new(bins: &'a [Complex64], window: &'a RecordWindow) -> Self {
        Self { bins, window }
    }

    /// Returns a bin as the transform left it.
    #[cfg(test)]
    pub(super) fn bin(&self, bin: usize) -> Complex64 {
        self.bins[bin]
    }

    /// Returns the line coefficient at exactly `residue/modulus` cycles per sample, in the unit of the samples: the
    /// nearest bin over what the window leaves of a line at that distance.
    ///
    /// Exact for a line alone; what stands within the main lobe adds to it, as in [`super::correlate`].
    ///
    /// # Panics
    /// For a residue above half the modulus: lines above half the sample rate are conjugates.
    #[must_use]
    pub fn line(&self, residue: u64, modulus: u64) -> Complex64 {
        let (bin, distance_bins) = self.place(residue, modulus);
        self.bins[bin] / self.window.gain(distance_bins)
    }

    /// Returns the nearest bin and how far above it the line lies, from integers.
    pub(super) fn place(&self, residue: u64, modulus: u64) -> (usize, f64) {
        assert!(residue <= modulus / 2, "a line lies below half the sample rate");
        let scaled = u128::from(residue) * self.window.weights.len() as u128;
        let modulus = u128::from(modulus);
        let bin = (scaled + modulus / 2) / modulus;
        let above =
            if scaled < bin * modulus { -((bin * modulus - scaled) as f64) } else { (scaled - bin * modulus) as f64 };
        (usize::try_from(bin).expect("a bin of the record"), above / modulus as f64)
    }

    /// Returns the mean square \[unit²\] of the noise in the bins `first ..= last` of both signs; bins within the main
    /// lobe of a line at `residues`/`modulus` are left out, bins beyond half the record count as none.
    ///
    /// # Panics
    /// As [`RecordSpectrum::line`].
    #[must_use]
    pub fn noise_power(&self, first: usize, last: usize, residues: &[u64], modulus: u64) -> f64 {
        let places = residues.iter().map(|residue| self.place(*residue, modulus).0);
        self.noise_of(first, last, places, |_| 1.0)
    }

    /// Returns the noise of [`RecordSpectrum::noise_power`] beside lines at bins, each bin's power times its factor.
    pub(super) fn noise_of(
        &self,
        first: usize,
        last: usize,
        places: impl Iterator<Item = usize> + Clone,
        factor: impl Fn(usize) -> f64,
    ) -> f64 {
        let reach = self.window.window.half_lobe_bins();
        let last = last.min(self.bins.len() - 1);
        let lobes = || places.clone().map(|bin| (bin.saturating_sub(reach), bin + reach));
        let mut sum = 0.0;
        let mut at = first;
        // From stretch to stretch; lines are few, so each is looked at again.
        while at <= last {
            if let Some((_, high)) = lobes().find(|(low, high)| (*low..=*high).contains(&at)) {
                at = high + 1;
                continue;
            }
            let next = lobes().map(|(low, _)| low).filter(|low| *low > at).min();
            let stop = next.unwrap_or(last + 1).min(last + 1);
            sum += (at..stop).map(|bin| self.bins[bin].norm_sqr() * factor(bin)).sum::<f64>();
            at = stop;
        }
        2.0 * sum / (self.window.weights.len() as f64 * self.window.squares)
    }
}

#[cfg(test)]
mod tests {
    use std::convert::Infallible;
    use std::f64::consts::TAU;

    use super::*;
    use crate::spectrum::correlate;

    fn noise(length: usize, mut state: u64) -> Vec<f64> {
        (0..length)
            .map(|_| {
                state = state.wrapping_mul(6_364_136_223_846_793_005).wrapping_add(1_442_695_040_888_963_407);
                (state >> 11) as f64 / (1u64 << 53) as f64 - 0.5
            })
            .collect()
    }

    /// Feeds a record part by part.
    fn feed(samples: &[f64]) -> impl FnMut(&mut [f64]) -> Result<(), Infallible> {
        let mut at = 0;
        move |part| {
            part.copy_from_slice(&samples[at..at + part.len()]);
            at += part.len();
            Ok(())
        }
    }

    #[test]
    fn bins_are_those_of_the_weighted_record_bit_for_bit() {
        let (stage, mut scratch) = (FftStage::new(), FftScratch::new());
        let mut checked = 0;
        for window in [Window::Rectangular, Window::Hann, Window::FourTerm] {
            for length in [16, 1000, 1024, 1025, 5000] {
                let samples = noise(length, 3);
                let weights = RecordWindow::new(window, length);
                let slow: Vec<f64> =
                    samples.iter().zip(weights.weights()).map(|(x, w)| (x + 0.01 * x.abs()) * w).collect();
                let want = stage.lines(&slow, &mut scratch);
                let found = stage.record(&weights, feed(&samples), |x| x + 0.01 * x.abs(), &mut scratch).unwrap();
                let scale = 1.0 / length as f64;
                assert!(found.bins.iter().map(|bin| bin * scale).eq(want), "{window:?} {length}");
                checked += 1;
            }
        }
        assert_eq!(checked, 15);
    }

    #[test]
    fn a_line_between_bins_is_that_of_the_direct_correlation() {
        let (stage, mut scratch) = (FftStage::new(), FftScratch::new());
        let modulus = 1u64 << 20;
        let mut checked = 0;
        for window in [Window::Hann, Window::FourTerm] {
            for residue in [123_457u64, 262_144, 400_001, 77_824, 77_952, 78_000] {
                let wave = |n: u64| 0.02 * (TAU * ((residue * n) % modulus) as f64 / modulus as f64 + 0.7).cos();
                let samples: Vec<f64> = (0..4096).map(wave).collect();
                let weights = RecordWindow::new(window, samples.len());
                let spectrum = stage.record(&weights, feed(&samples), |x| x, &mut scratch).unwrap();
                let found = spectrum.line(residue, modulus);
                // The mirror line is hundreds of bins away: below 1e-9 of it for Hann, far less for four terms.
                assert!((found - Complex64::from_polar(0.01, 0.7)).norm() < 1e-10, "{window:?} {residue}: {found}");
                let direct = correlate(&samples, residue, modulus, window);
                assert!((found - direct).norm() < 1e-10, "{window:?} {residue}: {found} {direct}");
                checked += 1;
            }
        }
        assert_eq!(checked, 12);
    }

    #[test]
    fn noise_beside_lines_is_that_of_white_noise() {
        let (stage, mut scratch) = (FftStage::new(), FftScratch::new());
        let modulus = 1 << 16;
        // The lobes of the first two overlap; the last lies outside the band.
        let residues = [9_000u64, 9_007, 20_000, 32_000];
        let mut samples = noise(1 << 16, 17);
        for (n, sample) in (0u64..).zip(&mut samples) {
            let waves = residues.map(|r| 0.3 * (TAU * ((r * n) % modulus) as f64 / modulus as f64).cos());
            *sample += waves.iter().sum::<f64>();
        }
        let weights = RecordWindow::new(Window::FourTerm, samples.len());
        let spectrum = stage.record(&weights, feed(&samples), |x| x, &mut scratch).unwrap();
        let found = spectrum.noise_power(5000, 24_999, &residues, modulus);
        // Bins 8996 … 9011 and 19 996 … 20 004 are left out of 20 000; the lines alone would give 0.135.
        let want = (20_000.0 - 25.0) * 2.0 / f64::from(1 << 16) / 12.0;
        // Neighbouring bins share noise: some 10 000 independent ones, each with a deviation of its own size.
        assert!((found / want - 1.0).abs() < 0.04, "{found} {want}");
        let bins = |range: std::ops::RangeInclusive<usize>| spectrum.noise_power(*range.start(), *range.end(), &[], 1);
        let split = bins(5000..=8995) + bins(9012..=19_995) + bins(20_005..=24_999);
        assert!((found / split - 1.0).abs() < 1e-12, "{found} {split}");
        assert_eq!(spectrum.noise_power(19_997, 20_003, &residues, modulus), 0.0);
    }
}
