//! The low part of a record's spectrum without the long transform: decimated on the fly, then a short one.
//!
//! The decimator is a cascade of four moving sums over R samples (Hogenauer 1981), run as what it is in the end: 4·R weights
//! a sample of the output, four a sample of the input, without integrators that would chain every sample to the next. Its
//! nulls of order four lie where the band would alias from; its droop in the band is known and divided out.

use std::f64::consts::PI;

use num_complex::Complex64;
use pulp::{Arch, Simd, WithSimd};

use super::{FftScratch, FftStage, RecordSpectrum, RecordWindow, Window};

/// Moving sums in the cascade.
const SUMS: usize = 4;
/// Neighbouring samples that are weighted together; each lane has sums of its own, joined last.
const LANES: usize = 4;
/// Samples made, bent and decimated at a time: stay in the first-level cache.
const BLOCK: usize = 1024;
/// The band ends at this part of the decimated rate: what aliases from there is 67 dB down, steeply less below.
const BAND_PART: usize = 8;
/// Largest factor: a block holds whole groups of samples.
const LARGEST_FACTOR: usize = 256;

/// How the lowest bins of a record are found; made once, shared by all channels and workers.
#[derive(Debug, Clone, PartialEq)]
pub struct BandPlan {
    /// Samples of input to one of output, R.
    factor: usize,
    /// Weights of each four places in a group of R samples, for the four outputs that they add to, the oldest first.
    weights: Vec<[[f64; LANES]; SUMS]>,
    /// Window over the decimated record.
    window: RecordWindow,
    /// 1/|H|² at each bin of the band.
    droop: Vec<f64>,
}

/// The low part of a record's spectrum, by bins of the whole record.
#[derive(Debug, Clone, Copy)]
pub struct BandSpectrum<'a> {
    spectrum: RecordSpectrum<'a>,
    plan: &'a BandPlan,
}

impl BandPlan {
    /// Returns a plan for the bins 0 … `last_bin` of a record of `length` samples; `None` where nothing is gained: an
    /// odd length, or a band that reaches so high that not even a factor of 4 leaves it free of aliases.
    ///
    /// The factor is the largest power of two that divides the length and leaves the band below an eighth of the
    /// decimated rate.
    ///
    /// # Examples
    /// ```
    /// use thornmap::spectrum::{BandPlan, Window};
    /// let plan = BandPlan::new(Window::FourTerm, 131_072, 1008).unwrap();
    /// assert_eq!(plan.factor(), 16);
    /// assert!(BandPlan::new(Window::FourTerm, 131_072, 60_000).is_none());
    /// ```
    #[must_use]
    pub fn new(window: Window, length: usize, last_bin: usize) -> Option<Self> {
        let fits = |factor: &usize| length.is_multiple_of(*factor) && last_bin.max(1) * BAND_PART <= length / factor;
        let factor = (2..=LARGEST_FACTOR.ilog2()).rev().map(|power| 1 << power).find(fits)?;
        // Four moving sums of weight 1 in all.
        let mut taps = vec![1.0];
        for _ in 0..SUMS {
            let mut longer = vec![0.0; taps.len() + factor - 1];
            for (start, tap) in taps.iter().enumerate() {
                longer[start..start + factor].iter_mut().for_each(|sum| *sum += tap / factor as f64);
            }
            taps = longer;
        }
        taps.resize(SUMS * factor, 0.0);
        // The oldest of the four outputs sees a group at the end of its taps.
        let weight = |place: usize, output: usize| taps[(SUMS - 1 - output) * factor + place];
        let weights = (0..factor)
            .step_by(LANES)
            .map(|start| std::array::from_fn(|output| std::array::from_fn(|lane| weight(start + lane, output))))
            .collect();
        let droop = (0..=last_bin).map(|bin| response(bin as f64 / length as f64, factor).powi(-2)).collect();
        // The window stands where it stands over the whole record: outputs belong to the middle of their taps.
        let window = RecordWindow::decimated(window, length, factor, delay(factor));
        Some(Self { factor, weights, window, droop })
    }

    /// Returns how many samples make one of the decimated record.
    #[must_use]
    pub const fn factor(&self) -> usize {
        self.factor
    }

    /// Returns how many samples are read: the record, and what the decimator holds beyond it.
    #[must_use]
    pub fn samples(&self) -> usize {
        (self.window.weights().len() + SUMS - 1) * self.factor
    }
}

/// Returns how many samples after its first the middle of an output's taps lies.
const fn delay(factor: usize) -> usize {
    SUMS * (factor - 1) / 2
}

/// Returns the decimator's response at a frequency in cycles per sample, its delay taken off.
fn response(frequency: f64, factor: usize) -> f64 {
    if frequency == 0.0 {
        return 1.0;
    }
    let angle = PI * frequency;
    ((angle * factor as f64).sin() / (factor as f64 * angle.sin())).powi(4)
}

/// Bends and decimates whole groups of samples; compiled once for each instruction set.
struct Decimate<'a, F> {
    samples: &'a [f64],
    plan: &'a BandPlan,
    bend: F,
    /// Outputs under way, the oldest first.
    open: &'a mut [[f64; LANES]; SUMS],
    /// Room for the sums of each output.
    sums: &'a mut [[f64; LANES]],
    window: &'a [f64],
    out: &'a mut [f64],
}

impl<F: Fn(f64) -> f64> WithSimd for Decimate<'_, F> {
    type Output = ();

    #[inline(always)]
    fn with_simd<S: Simd>(self, _simd: S) {
        let sums = &mut self.sums[..self.out.len()];
        // A local copy stays in machine registers.
        let mut open = *self.open;
        for (group, done) in self.samples.chunks_exact(self.plan.factor).zip(&mut *sums) {
            for (samples, weights) in group.chunks_exact(LANES).zip(&self.plan.weights) {
                let mut bent = [0.0; LANES];
                for (bent, sample) in bent.iter_mut().zip(samples) {
                    *bent = (self.bend)(*sample);
                }
                for (sums, weights) in open.iter_mut().zip(weights) {
                    for lane in 0..LANES {
                        sums[lane] += bent[lane] * weights[lane];
                    }
                }
            }
            *done = open[0];
            open = [open[1], open[2], open[3], [0.0; LANES]];
        }
        *self.open = open;
        for ((out, weight), sums) in self.out.iter_mut().zip(self.window).zip(sums) {
            *out = ((sums[0] + sums[1]) + (sums[2] + sums[3])) * weight;
        }
    }
}

impl FftStage {
    /// Returns the low part of the spectrum of a record that `source` writes part by part and `bend` maps sample by
    /// sample: [`FftStage::record`] for the bins of the plan. On modulators of orders 2 to 5 noise agrees within 0.01 dB
    /// and a line above its own noise within 0.1 dB (a line below it is noise, which a moment later reads otherwise).
    ///
    /// `source` is asked for [`BandPlan::samples`] samples in all. Nothing is allocated once the buffers have grown.
    ///
    /// # Errors
    /// What `source` gives.
    ///
    /// # Examples
    /// ```
    /// use thornmap::spectrum::{BandPlan, FftScratch, FftStage, Window};
    /// let (stage, mut scratch) = (FftStage::new(), FftScratch::new());
    /// let plan = BandPlan::new(Window::Hann, 8192, 200).unwrap();
    /// let mut n = 0;
    /// let wave = |part: &mut [f64]| {
    ///     for sample in part {
    ///         *sample = (std::f64::consts::TAU * 0.0123 * n as f64).cos();
    ///         n += 1;
    ///     }
    ///     Ok::<(), ()>(())
    /// };
    /// let spectrum = stage.band(&plan, wave, |x| 0.02 * x, &mut scratch).unwrap();
    /// assert!((spectrum.line(123, 10_000).norm() - 0.01).abs() < 1e-7);
    /// ```
    pub fn band<'a, E>(
        &self,
        plan: &'a BandPlan,
        mut source: impl FnMut(&mut [f64]) -> Result<(), E>,
        bend: impl Fn(f64) -> f64 + Copy,
        scratch: &'a mut FftScratch,
    ) -> Result<BandSpectrum<'a>, E> {
        let arch = Arch::new();
        let (mut block, mut sums) = ([0.0; BLOCK], [[0.0; LANES]; BLOCK / LANES]);
        let mut open = [[0.0; LANES]; SUMS];
        let mut next = |window: &[f64], out: &mut [f64]| {
            let samples = &mut block[..out.len() * plan.factor];
            source(samples)?;
            let (open, sums) = (&mut open, &mut sums);
            arch.dispatch(Decimate { samples, plan, bend, open, sums: &mut sums[..], window, out });
            Ok(())
        };
        let window = plan.window.weights();
        // The first three outputs began before the record.
        next(&[0.0; SUMS - 1], &mut [0.0; SUMS - 1])?;
        scratch.input.resize(window.len(), 0.0);
        let outputs = BLOCK / plan.factor;
        for (out, window) in scratch.input.chunks_mut(outputs).zip(window.chunks(outputs)) {
            next(window, out)?;
        }
        self.transform(scratch);
        Ok(BandSpectrum { spectrum: RecordSpectrum::new(&scratch.output, &plan.window), plan })
    }
}

impl BandSpectrum<'_> {
    /// Returns the line coefficient at exactly `residue/modulus` cycles per sample of the record, as
    /// [`RecordSpectrum::line`]; it counts time from the first sample.
    ///
    /// # Panics
    /// For a line above half the decimated rate; above an eighth of it aliases grow.
    #[must_use]
    pub fn line(&self, residue: u64, modulus: u64) -> Complex64 {
        let frequency = residue as f64 / modulus as f64;
        let factor = self.plan.factor;
        let seen = self.spectrum.line(residue * factor as u64, modulus) / response(frequency, factor);
        seen * Complex64::cis(-2.0 * PI * (frequency * delay(factor) as f64).fract())
    }

    /// Returns the mean square \[unit²\] of the noise in the bins `first ..= last` of the whole record, both signs, as
    /// [`RecordSpectrum::noise_power`]; bins beyond the band of the plan count as none.
    ///
    /// # Panics
    /// As [`BandSpectrum::line`].
    #[must_use]
    pub fn noise_power(&self, first: usize, last: usize, residues: &[u64], modulus: u64) -> f64 {
        let factor = self.plan.factor as u64;
        let droop = &self.plan.droop;
        let places = residues.iter().map(|residue| self.spectrum.place(residue * factor, modulus).0);
        self.spectrum.noise_of(first, last.min(droop.len() - 1), places, |bin| droop[bin])
    }
}

#[cfg(test)]
mod tests {
    use std::convert::Infallible;
    use std::f64::consts::TAU;

    use super::*;
    use crate::base::db_from_power;
    use crate::modulator::{Dither, ModulatorConfig, ModulatorError, ModulatorSettings, Modulus, PhaseRun, Structure};

    /// Four moving sums over the whole record, one after the other, of which every R-th value is kept.
    fn slow_decimation(samples: &[f64], factor: usize) -> Vec<f64> {
        let mut sums = samples.to_vec();
        for _ in 0..SUMS {
            sums = sums.windows(factor).map(|window| window.iter().sum::<f64>() / factor as f64).collect();
        }
        sums.into_iter().step_by(factor).collect()
    }

    #[test]
    fn decimated_samples_are_those_of_four_moving_sums() {
        let stage = FftStage::new();
        let mut checked = 0;
        for (length, last_bin, factor) in
            [(256, 8, 4), (4096, 64, 8), (4096, 32, 16), (131_072, 60, 256), (3 << 8, 5, 16)]
        {
            let plan = BandPlan::new(Window::Hann, length, last_bin).unwrap();
            // (The factor 16 of the last: 768 samples are 3·256, but 5·8 bins need 40 outputs.)
            assert_eq!(plan.factor(), factor, "{length} {last_bin}");
            let samples: Vec<f64> =
                (0..plan.samples()).map(|n| ((n * n * 40_503) % 65_521) as f64 / 65_521.0 - 0.5).collect();
            let bend = |x: f64| x + 0.3 * x.abs();
            let mut scratch = FftScratch::new();
            let mut at = 0;
            let feed = |part: &mut [f64]| {
                part.copy_from_slice(&samples[at..at + part.len()]);
                at += part.len();
                Ok::<(), Infallible>(())
            };
            let found = stage.band(&plan, feed, bend, &mut scratch).unwrap();
            let bent: Vec<f64> = samples.iter().map(|x| bend(*x)).collect();
            let slow = slow_decimation(&bent, factor);
            let weights = plan.window.weights();
            let slow: Vec<f64> = slow.iter().zip(weights).map(|(x, w)| x * w).collect();
            assert_eq!(slow.len(), length / factor);
            let want = stage.lines(&slow, &mut FftScratch::new());
            for (bin, want) in want.iter().enumerate() {
                let bin = found.spectrum.bin(bin) / slow.len() as f64;
                assert!((bin - want).norm() < 1e-14, "{length}: {bin} {want}");
                checked += 1;
            }
        }
        assert_eq!(checked, 33 + 257 + 129 + 257 + 25);
    }

    #[test]
    fn lines_and_noise_are_those_of_the_whole_record() {
        let (stage, mut scratch) = (FftStage::new(), FftScratch::new());
        let (length, last_bin, modulus) = (1usize << 16, 500usize, 1u64 << 24);
        let whole = RecordWindow::new(Window::FourTerm, length);
        let plan = BandPlan::new(Window::FourTerm, length, last_bin).unwrap();
        let (mut checked, mut worst_db, mut worst_noise_db) = (0, 0.0f64, 0.0f64);
        for order in 2..=5u8 {
            for (start, away) in [(0, 10_001), (modulus / 2, 20_003), (modulus / 3, 5_557), (modulus / 5 * 2, 7_777)] {
                let settings = ModulatorSettings {
                    structure: Structure::Mash,
                    order,
                    seeds: vec![1],
                    dither: Dither::None,
                    noise_transfer: None,
                    runs_at_zero: false,
                };
                let word = start + away;
                let config = ModulatorConfig::new(&settings, Modulus::new(modulus).unwrap(), word, true).unwrap();
                let run = || PhaseRun::new(&config).unwrap();
                let mean = run().mean_numerator(length as u64).unwrap();
                let bend = move |numerator: f64| {
                    let error = (numerator - mean) / modulus as f64;
                    error + 0.025 * error.abs()
                };
                let lines = (1..=10).map(|h| h * word % modulus).map(|r| r.min(modulus - r));
                let lines: Vec<u64> = lines.filter(|r| *r * (length as u64) < last_bin as u64 * modulus).collect();
                let mut source = run();
                let fill = |part: &mut [f64]| source.fill(part);
                let exact = stage.record::<ModulatorError>(&whole, fill, bend, &mut scratch).unwrap();
                let exact_lines: Vec<Complex64> = lines.iter().map(|line| exact.line(*line, modulus)).collect();
                let exact_noise = exact.noise_power(5, last_bin, &lines, modulus);
                let mut source = run();
                let fill = |part: &mut [f64]| source.fill(part);
                let band = stage.band::<ModulatorError>(&plan, fill, bend, &mut scratch).unwrap();
                let noise = band.noise_power(5, last_bin, &lines, modulus);
                worst_noise_db = worst_noise_db.max(db_from_power(noise / exact_noise).abs());
                // Noise in one line's width: a line below it is noise, which nobody reads to a tenth of a decibel.
                let of_a_line = noise / (2 * last_bin) as f64 * Window::FourTerm.noise_bandwidth_bins();
                for (line, exact) in lines.iter().zip(exact_lines) {
                    let found = band.line(*line, modulus);
                    if exact.norm_sqr() > of_a_line {
                        worst_db = worst_db.max(db_from_power(found.norm_sqr() / exact.norm_sqr()).abs());
                        assert!(
                            (found - exact).norm() < 0.012 * exact.norm(),
                            "order {order}, {word}: {found} {exact}"
                        );
                        checked += 1;
                    }
                }
            }
        }
        eprintln!("{checked} lines, worst {worst_db:.4} dB, noise {worst_noise_db:.4} dB");
        assert!(worst_db < 0.1 && worst_noise_db < 0.1, "{worst_db} {worst_noise_db}");
        assert!(checked > 30, "{checked}");
    }

    #[test]
    fn a_line_keeps_size_and_phase_up_to_the_edge() {
        let (stage, mut scratch) = (FftStage::new(), FftScratch::new());
        let plan = BandPlan::new(Window::FourTerm, 1 << 15, 256).unwrap();
        let modulus = 1u64 << 22;
        for residue in [1u64 << 10, 12_345, 20_001, 1 << 15] {
            let mut n = 0u64;
            let wave = |part: &mut [f64]| {
                for sample in part {
                    *sample = 0.02 * (TAU * ((residue * n) % modulus) as f64 / modulus as f64 + 0.7).cos();
                    n += 1;
                }
                Ok::<(), Infallible>(())
            };
            let found = stage.band(&plan, wave, |x| x, &mut scratch).unwrap().line(residue, modulus);
            // The mirror line is 16 bins away or more: 1e-6 of it and less.
            assert!((found - Complex64::from_polar(0.01, 0.7)).norm() < 1e-7, "{residue}: {found}");
        }
    }
}
