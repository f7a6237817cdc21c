//! The noise of one channel at the output, source by source.

use std::f64::consts::TAU;

use num_complex::Complex64;

use super::network::FilterNetwork;
use super::noise_points::{
    BOLTZMANN_J_PER_K, NoiseRole, density, detector_flicker_dbc_per_hz, detector_floor_dbc_per_hz,
};
use super::response::LoopResponse;
use super::settings::{NoisePoints, OscillatorNoise};

/// Temperature of the filter's resistors \[K\].
pub const FILTER_TEMPERATURE_K: f64 = 290.0;
/// Grid points per decade of offset.
const POINTS_PER_DECADE: f64 = 40.0;

/// What the noise of one channel depends on; an absent source is unknown.
#[derive(Clone, Copy)]
pub struct NoiseInput<'a> {
    /// The channel's loop.
    pub response: &'a LoopResponse,
    /// The filter; `None` with a measured response, whose resistor noise is unknown.
    pub network: Option<&'a FilterNetwork>,
    /// N + K/M.
    pub divider: f64,
    /// VCO frequency \[Hz\].
    pub vco_hz: f64,
    /// Reference frequency \[Hz\].
    pub reference_hz: f64,
    /// Output divider P.
    pub output_divider: f64,
    /// Pump current \[A\].
    pub current_a: f64,
    /// Tuning gain \[Hz/V\].
    pub gain_hz_per_v: f64,
    /// Noise of the reference at its own frequency.
    pub reference: Option<&'a NoisePoints>,
    /// Noise of the free-running VCO.
    pub oscillator: Option<&'a OscillatorNoise>,
    /// Detector floor normalised to 1 Hz \[dBc/Hz\].
    pub floor_dbc_per_hz: Option<f64>,
    /// Detector flicker at 10 kHz, normalised to a 1 GHz VCO \[dBc/Hz\].
    pub flicker_dbc_per_hz: Option<f64>,
    /// Offset current source in use, with its noise \[A/√Hz\]; outer `None`: no offset current flows.
    pub offset_noise_a_per_rthz: Option<Option<f64>>,
    /// Floor of the output divider \[dBc/Hz\]; `None`: it adds none.
    pub divider_floor_dbc_per_hz: Option<f64>,
    /// Modulator noise at the divider, before the loop \[rad²/Hz, single sideband\]; `None`: there is none.
    pub modulator: Option<&'a dyn Fn(f64) -> f64>,
    /// What the detector's nonlinearity folds into the loop, before the loop \[rad²/Hz\]; outer `None`: nothing is
    /// folded, inner `None`: unknown.
    pub folded_rad2_per_hz: Option<Option<f64>>,
}

/// One source of noise at the output.
#[derive(Debug, Clone, PartialEq)]
pub struct NoiseSource {
    /// Name for a reader.
    pub name: &'static str,
    /// Density at the output on the budget's grid \[rad²/Hz, single sideband\].
    pub density: Vec<f64>,
}

/// All sources of one channel on one grid.
#[derive(Debug, Clone, PartialEq)]
pub struct NoiseBudget {
    /// Offsets \[Hz\], rising.
    pub offset_hz: Vec<f64>,
    /// The known sources.
    pub sources: Vec<NoiseSource>,
    /// Names of the sources that act but are unknown.
    pub unknown: Vec<String>,
}

impl NoiseBudget {
    /// Returns the sum of the known sources \[rad²/Hz, single sideband\].
    #[must_use]
    pub fn known(&self) -> Vec<f64> {
        let mut sum = vec![0.0; self.offset_hz.len()];
        for source in &self.sources {
            for (total, part) in sum.iter_mut().zip(&source.density) {
                *total += part;
            }
        }
        sum
    }

    /// Returns the total, or `None` when a source is unknown.
    #[must_use]
    pub fn total(&self) -> Option<Vec<f64>> {
        self.unknown.is_empty().then(|| self.known())
    }
}

/// Returns offsets from `low_hz` to `high_hz`, log-spaced, both ends included.
#[must_use]
pub fn log_grid(low_hz: f64, high_hz: f64) -> Vec<f64> {
    let decades = (high_hz / low_hz).log10().max(0.0);
    #[allow(
        clippy::cast_possible_truncation,
        clippy::cast_sign_loss,
        reason = "decades of a finite positive ratio: a few hundred points"
    )]
    let steps = ((decades * POINTS_PER_DECADE).ceil() as usize).max(1);
    (0..=steps)
        .map(|i| match i {
            0 => low_hz,
            i if i == steps => high_hz,
            i => low_hz * (high_hz / low_hz).powf(i as f64 / steps as f64),
        })
        .collect()
}

/// Returns the budget of a channel on a grid of offsets \[Hz\].
#[must_use]
pub fn noise_budget(input: &NoiseInput, offset_hz: Vec<f64>) -> NoiseBudget {
    let per_output = 1.0 / (input.output_divider * input.output_divider);
    let closed: Vec<Complex64> = offset_hz.iter().map(|f| input.response.closed_loop(*f)).collect();
    let low_pass: Vec<f64> = closed.iter().map(|h| h.norm_sqr() * per_output).collect();
    let high_pass: Vec<f64> = closed.iter().map(|h| (1.0 - h).norm_sqr() * per_output).collect();
    let shaped = |name, gain: &[f64], level: &dyn Fn(f64) -> f64| NoiseSource {
        name,
        density: offset_hz.iter().zip(gain).map(|(f, g)| level(*f) * g).collect(),
    };
    let mut sources = Vec::new();
    let mut unknown = Vec::new();
    let pfd_hz = input.response.pfd_hz();
    match input.reference {
        Some(points) => {
            let up = (input.vco_hz / input.reference_hz).powi(2);
            sources.push(shaped("reference", &low_pass, &|f| density(points.at(f, NoiseRole::Reference)) * up));
        }
        None => unknown.push("reference".to_owned()),
    }
    match input.floor_dbc_per_hz {
        Some(floor) => {
            let level = density(detector_floor_dbc_per_hz(floor, input.vco_hz, pfd_hz));
            sources.push(shaped("detector floor", &low_pass, &|_| level));
        }
        None => unknown.push("detector floor".to_owned()),
    }
    match input.flicker_dbc_per_hz {
        Some(flicker) => sources.push(shaped("detector flicker", &low_pass, &|f| {
            density(detector_flicker_dbc_per_hz(flicker, input.vco_hz, f))
        })),
        None => unknown.push("detector flicker".to_owned()),
    }
    match input.oscillator {
        Some(noise) => sources.push(shaped("oscillator", &high_pass, &|f| density(noise.at(f, input.vco_hz)))),
        None => unknown.push("oscillator".to_owned()),
    }
    if let Some(modulator) = input.modulator {
        sources.push(shaped("modulator", &low_pass, modulator));
    }
    match input.folded_rad2_per_hz {
        Some(Some(folded)) => sources.push(shaped("folded modulator noise", &low_pass, &|_| folded)),
        Some(None) => unknown.push("folded modulator noise".to_owned()),
        None => {}
    }
    match input.offset_noise_a_per_rthz {
        Some(Some(noise)) => {
            // ½·S_i·(2π(N + K/M)/I_cp)².
            let level = 0.5 * noise * noise * (TAU * input.divider / input.current_a).powi(2);
            sources.push(shaped("offset current", &low_pass, &|_| level));
        }
        Some(None) => unknown.push("offset current".to_owned()),
        None => {}
    }
    match input.network {
        Some(network) => sources.push(resistor_noise(input, network, &offset_hz, &high_pass)),
        None => unknown.push("filter resistors".to_owned()),
    }
    if let Some(floor) = input.divider_floor_dbc_per_hz {
        let level = density(floor);
        sources.push(NoiseSource { name: "output divider", density: vec![level; offset_hz.len()] });
    }
    NoiseBudget { offset_hz, sources, unknown }
}

/// Thermal noise of every resistor through its own transfer: S_phi = (K_vco/f)²·S_v one-sided, L = S_phi/2.
fn resistor_noise(input: &NoiseInput, network: &FilterNetwork, offset_hz: &[f64], high_pass: &[f64]) -> NoiseSource {
    let resistors = network.resistors();
    let thermal = 4.0 * BOLTZMANN_J_PER_K * FILTER_TEMPERATURE_K;
    let density = offset_hz
        .iter()
        .zip(high_pass)
        .map(|(f, gain)| {
            let s = Complex64::new(0.0, TAU * f);
            let volts: f64 =
                resistors.iter().map(|(r, ohm)| thermal * ohm * network.noise_gain(*r, s).norm_sqr()).sum();
            0.5 * volts * (input.gain_hz_per_v / f).powi(2) * gain
        })
        .collect();
    NoiseSource { name: "filter resistors", density }
}
