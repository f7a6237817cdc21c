//! From samples to lines and densities: the only stage that names an FFT crate.
//!
//! Normalisation, stated once for the whole stage:
//! - a **line** is `c_k = (1/T)·Σ x[n]·e^{−j2πkn/T}`, in the unit of the samples; a real tone `A·cos(…)` has `|c| = A/2`;
//! - a **density** is two-sided, in unit²/Hz, so that its integral over `−f_s/2 … f_s/2` is the mean square. For a phase in
//!   radians it equals the single-sideband noise L directly: L is half the one-sided density (IEEE Std 1139), no further −3 dB.

mod band;
mod correlation;
mod density;
mod fft;
mod ideal;
mod local_noise;
pub mod oracle;
mod record;
mod sideband;
mod window;

pub use band::{BandPlan, BandSpectrum};
pub use correlation::{correlate, correlate_each};
pub use density::{Density, DensitySettings};
pub use fft::{FftScratch, FftStage};
pub use ideal::{ideal_density, ideal_phase_rms_rad};
pub use local_noise::{Neighbourhood, local_line_power};
pub use record::{RecordSpectrum, RecordWindow};
pub use sideband::{divided_dbc, sideband_dbc};
pub use window::Window;

use thiserror::Error;

/// Why a spectrum cannot be computed.
#[derive(Debug, Clone, PartialEq, Error)]
pub enum SpectrumError {
    /// The segment does not fit into the record, or is too short for a window.
    #[error("a segment of {segment} samples is outside {least} … {samples}, the length of the record")]
    SegmentOutOfRange {
        /// Length asked for.
        segment: usize,
        /// Shortest segment.
        least: usize,
        /// Samples in the record.
        samples: usize,
    },
    /// The sample rate is no positive number.
    #[error("a sample rate of {found_hz} Hz is not positive and finite")]
    SampleRate {
        /// The value found.
        found_hz: f64,
    },
    /// A sample is infinite or no number.
    #[error("sample {index} is {found}, not a finite number")]
    NotFinite {
        /// Position of the first such sample.
        index: usize,
        /// The sample.
        found: f64,
    },
}
