//! The exact line spectrum of one period, any length.

use std::collections::BTreeMap;
use std::fmt;
use std::sync::{Arc, PoisonError, RwLock};

use num_complex::Complex64;
use realfft::{RealFftPlanner, RealToComplex};

type Plan = Arc<dyn RealToComplex<f64>>;

/// Sum of the lengths whose plans are kept. A plan of a prime length near 2^20 takes tens of megabytes,
/// so a survey of many lengths must not keep all of them.
const KEPT_POINTS: usize = 1 << 21;

/// Plans of the transforms, shared by all workers.
pub struct FftStage {
    plans: RwLock<BTreeMap<usize, Plan>>,
}

/// Buffers of one worker; they grow to the longest record and are reused.
#[derive(Debug, Default)]
pub struct FftScratch {
    pub(super) input: Vec<f64>,
    pub(super) output: Vec<Complex64>,
    work: Vec<Complex64>,
}

impl FftScratch {
    /// Returns empty buffers.
    #[must_use]
    pub fn new() -> Self {
        Self::default()
    }
}

impl Default for FftStage {
    fn default() -> Self {
        Self::new()
    }
}

impl fmt::Debug for FftStage {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        let plans = self.plans.read().unwrap_or_else(PoisonError::into_inner);
        f.debug_struct("FftStage").field("lengths", &plans.keys().collect::<Vec<_>>()).finish()
    }
}

impl FftStage {
    /// Returns a stage without plans; each is made on first use.
    #[must_use]
    pub fn new() -> Self {
        Self { plans: RwLock::new(BTreeMap::new()) }
    }

    /// Returns the plan of a length, from the store where it is kept.
    fn plan(&self, length: usize) -> Plan {
        // A store that another thread left in a panic still holds only whole plans.
        if let Some(plan) = self.plans.read().unwrap_or_else(PoisonError::into_inner).get(&length) {
            return Arc::clone(plan);
        }
        // A planner of its own: one that lives on would keep every part it ever made.
        let plan = RealFftPlanner::<f64>::new().plan_fft_forward(length);
        if length <= KEPT_POINTS {
            let mut plans = self.plans.write().unwrap_or_else(PoisonError::into_inner);
            if plans.keys().sum::<usize>() + length > KEPT_POINTS {
                plans.clear();
            }
            plans.insert(length, Arc::clone(&plan));
        }
        plan
    }

    /// Returns the lines `c_k = (1/T)·Σ x[n]·e^{−j2πkn/T}`, `k = 0 … floor(T/2)`, of one period of T samples, any T ≥ 1.
    ///
    /// The unit is that of the samples. The lines above T/2 are the conjugates; c at T/2 (T even) stands alone.
    /// Relative to the strongest line the error is some 1e-15, so a line more than about 280 dB below it is rounding.
    ///
    /// # Panics
    /// On an empty record.
    ///
    /// # Examples
    /// ```
    /// use thornmap::spectrum::{FftScratch, FftStage};
    /// let lines = FftStage::new().lines(&[1.0, 0.0, -1.0, 0.0], &mut FftScratch::new());
    /// assert_eq!(lines.len(), 3);
    /// assert!((lines[1].re - 0.5).abs() < 1e-15);
    /// ```
    #[must_use]
    pub fn lines(&self, samples: &[f64], scratch: &mut FftScratch) -> Vec<Complex64> {
        assert!(!samples.is_empty(), "a spectrum needs at least one sample");
        scratch.input.clear();
        scratch.input.extend_from_slice(samples);
        self.transform(scratch);
        let scale = 1.0 / samples.len() as f64;
        scratch.output.iter().map(|value| value * scale).collect()
    }

    /// Transforms `scratch.input` into `scratch.output`, unscaled; the input is destroyed.
    pub(super) fn transform(&self, scratch: &mut FftScratch) {
        let plan = self.plan(scratch.input.len());
        scratch.output.resize(plan.complex_len(), Complex64::ZERO);
        if scratch.work.len() < plan.get_scratch_len() {
            scratch.work.resize(plan.get_scratch_len(), Complex64::ZERO);
        }
        plan.process_with_scratch(&mut scratch.input, &mut scratch.output, &mut scratch.work)
            .expect("the buffers were sized by the plan");
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::spectrum::oracle::dft;

    fn noise(length: usize, mut state: u64) -> Vec<f64> {
        (0..length)
            .map(|_| {
                state = state.wrapping_mul(6_364_136_223_846_793_005).wrapping_add(1_442_695_040_888_963_407);
                (state >> 11) as f64 / (1u64 << 53) as f64 - 0.5
            })
            .collect()
    }

    #[test]
    fn every_small_length_agrees_with_the_definition() {
        let stage = FftStage::new();
        let mut scratch = FftScratch::new();
        let mut checked = 0;
        for length in (1..=130).chain([251, 256, 509, 1000]) {
            let samples = noise(length, 7 + length as u64);
            let fast = stage.lines(&samples, &mut scratch);
            let slow = dft(&samples);
            assert_eq!(fast.len(), slow.len());
            for (k, (a, b)) in fast.iter().zip(&slow).enumerate() {
                // Sums of T terms below 0.5, scaled by 1/T: some T·2^-53 at the very worst in the slow sum.
                assert!((a - b).norm() < 1e-15 * (4.0 + length as f64 / 50.0), "{length} {k} {a} {b}");
                checked += 1;
            }
        }
        assert!(checked > 5000, "{checked}");
    }

    #[test]
    fn the_store_stays_bounded_and_lines_do_not_depend_on_it() {
        let stage = FftStage::new();
        let mut scratch = FftScratch::new();
        let samples = noise(1_048_576, 3);
        let first = stage.lines(&samples[..1000], &mut scratch);
        for length in [1_048_576, 1_048_575, 1_000_000, 1_040_000, 1_036_800] {
            let _ = stage.lines(&samples[..length], &mut scratch);
        }
        assert!(stage.plans.read().unwrap().keys().sum::<usize>() <= KEPT_POINTS);
        assert_eq!(first, stage.lines(&samples[..1000], &mut scratch));
    }

    #[test]
    fn workers_share_one_stage() {
        fn shared<T: Send + Sync>() {}
        shared::<FftStage>();
        let stage = FftStage::new();
        let samples = noise(999, 5);
        let one = stage.lines(&samples, &mut FftScratch::new());
        std::thread::scope(|scope| {
            let handles: Vec<_> =
                (0..4).map(|_| scope.spawn(|| stage.lines(&samples, &mut FftScratch::new()))).collect();
            for handle in handles {
                assert_eq!(handle.join().unwrap(), one);
            }
        });
    }
}
