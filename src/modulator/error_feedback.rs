//! One quantiser with an error filter.

use super::cascade::{InputSource, WeightedBit};
use super::checked::ModulatorConfig;
use super::sequence::Modulator;

/// The largest order, so the state needs no heap.
pub(super) const MOST_TAPS: usize = 4;

/// y = ⌊v/M⌋ with v = K + Σ h_j·e\[n − j\], e = v − M·y in 0 … M − 1. The error never leaves that range, so the loop
/// cannot run away whatever the coefficients; what they cost is output range.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) struct ErrorFilter {
    pub(super) modulus: i64,
    pub(super) k: i64,
    pub(super) taps: [i64; MOST_TAPS],
    /// e\[n − 1\], e\[n − 2\], …
    pub(super) errors: [i64; MOST_TAPS],
}

impl ErrorFilter {
    /// Returns the filter at its start.
    ///
    /// # Panics
    /// If the configuration is of another structure: a broken internal contract.
    pub(super) fn new(config: &ModulatorConfig) -> Self {
        let narrow = |value: u64| i64::try_from(value).expect("residues are below 2^48");
        let mut taps = [0; MOST_TAPS];
        taps[..config.error_filter().len()].copy_from_slice(config.error_filter());
        let mut errors = [0; MOST_TAPS];
        for (error, seed) in errors.iter_mut().zip(config.seeds()) {
            *error = narrow(*seed);
        }
        Self { modulus: narrow(config.modulus().get()), k: narrow(config.k()), taps, errors }
    }

    /// Returns the next output. |v| stays below 2^48·(2 + 4·1024) < 2^61.
    #[inline]
    pub(super) fn next_output(&mut self, added: i64) -> i64 {
        let fed_back: i64 = self.taps.iter().zip(&self.errors).map(|(h, e)| h * e).sum();
        let value = self.k + added + fed_back;
        let output = value.div_euclid(self.modulus);
        self.errors.copy_within(0..MOST_TAPS - 1, 1);
        self.errors[0] = value - output * self.modulus;
        output
    }
}

/// An error-feedback modulator, with or without dither.
struct ErrorFeedback {
    filter: ErrorFilter,
    source: Option<WeightedBit>,
}

impl Modulator for ErrorFeedback {
    fn fill(&mut self, outputs: &mut [i32]) {
        for output in outputs {
            let added = self.source.as_mut().map_or(0, |source| source.added_at(0));
            let added = i64::try_from(added).expect("a weight is at most 2^48");
            let value = self.filter.next_output(added);
            *output = i32::try_from(value).expect("coefficients up to 1024 keep outputs below 2^13");
        }
    }

    fn first_residue(&self) -> Option<u64> {
        None
    }
}

/// Starts an error-feedback modulator.
pub(super) fn start(config: &ModulatorConfig) -> Box<dyn Modulator + Send> {
    Box::new(ErrorFeedback { filter: ErrorFilter::new(config), source: WeightedBit::of(config) })
}
