//! Noise curves between and beyond their points.

use serde::Serialize;

use super::settings::{LoopModelError, NoisePoints, OscillatorNoise};
use crate::base::{db_from_power, power_from_db};

/// Boltzmann's constant \[J/K\], exact in the SI of 2019.
pub const BOLTZMANN_J_PER_K: f64 = 1.380_649e-23;
/// Slope of oscillator noise below the first point, at least \[dB/decade\].
const OSCILLATOR_LOW_SLOPE_DB: f64 = -30.0;
/// Slope of oscillator noise above the last point \[dB/decade\].
const OSCILLATOR_HIGH_SLOPE_DB: f64 = -20.0;

/// How a curve goes on beyond its points.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize)]
#[serde(rename_all = "lowercase")]
pub enum NoiseRole {
    /// Reference or floor: the first segment's slope below, flat above.
    Reference,
    /// Oscillator: at least 30 dB/decade below, 20 dB/decade above.
    Oscillator,
}

impl NoisePoints {
    /// Returns checked points.
    ///
    /// # Errors
    /// `BadPoints` for an empty list, offsets that are not positive and strictly rising, or values not finite.
    pub fn new(points: Vec<(f64, f64)>) -> Result<Self, LoopModelError> {
        let rising = points.windows(2).all(|pair| pair[0].0 < pair[1].0);
        let usable = points.iter().all(|(offset, level)| offset.is_finite() && *offset > 0.0 && level.is_finite());
        if points.is_empty() || !rising || !usable {
            return Err(LoopModelError::BadPoints { what: "a noise curve", least: 1, found: format!("{points:?}") });
        }
        Ok(Self { points })
    }

    /// Returns the noise at an offset \[dBc/Hz\]: dB linear in log offset, beyond the points by `role`.
    #[must_use]
    pub fn at(&self, offset_hz: f64, role: NoiseRole) -> f64 {
        let points = self.points();
        let (first, last) = (points[0], points[points.len() - 1]);
        let along = |(at, level): (f64, f64), slope: f64| level + slope * (offset_hz / at).log10();
        if offset_hz < first.0 {
            let given = points.get(1).map(|second| (second.1 - first.1) / (second.0 / first.0).log10());
            let slope = match role {
                NoiseRole::Reference => given.unwrap_or(0.0),
                NoiseRole::Oscillator => given.map_or(OSCILLATOR_LOW_SLOPE_DB, |g| g.min(OSCILLATOR_LOW_SLOPE_DB)),
            };
            return along(first, slope);
        }
        if offset_hz >= last.0 {
            return match role {
                NoiseRole::Reference => last.1,
                NoiseRole::Oscillator => along(last, OSCILLATOR_HIGH_SLOPE_DB),
            };
        }
        let after = points.partition_point(|(at, _)| *at <= offset_hz);
        let (a, b) = (points[after - 1], points[after]);
        along(a, (b.1 - a.1) / (b.0 / a.0).log10())
    }

    /// Returns the stretches inside `low_hz … high_hz` that lie beyond the points.
    #[must_use]
    pub fn extrapolated_hz(&self, low_hz: f64, high_hz: f64) -> Vec<(f64, f64)> {
        let points = self.points();
        let (first, last) = (points[0].0, points[points.len() - 1].0);
        let mut stretches = Vec::new();
        if low_hz < first {
            stretches.push((low_hz, first.min(high_hz)));
        }
        if high_hz > last {
            stretches.push((last.max(low_hz), high_hz));
        }
        stretches
    }
}

impl OscillatorNoise {
    /// Returns the free-running noise at an offset \[dBc/Hz\] of an oscillator at `carrier_hz`.
    ///
    /// # Examples
    /// 1 GHz, Q 20, F 4, 1 mW, corner 10 kHz, 290 K at 100 kHz is −122.592 dBc/Hz (computed; form FkT/(2P_s)):
    /// ```
    /// use thornmap::loop_model::OscillatorNoise;
    /// let leeson = OscillatorNoise::Leeson {
    ///     noise_factor: 4.0, power_w: 1e-3, loaded_q: 20.0, corner_hz: 10e3, temperature_k: 290.0,
    /// };
    /// assert!((leeson.at(100e3, 1e9) + 122.592).abs() < 1e-3);
    /// ```
    #[must_use]
    pub fn at(&self, offset_hz: f64, carrier_hz: f64) -> f64 {
        match self {
            Self::Points(points) => points.at(offset_hz, NoiseRole::Oscillator),
            Self::Leeson { noise_factor, power_w, loaded_q, corner_hz, temperature_k } => {
                let thermal = noise_factor * BOLTZMANN_J_PER_K * temperature_k / (2.0 * power_w);
                let resonator = 1.0 + (carrier_hz / (2.0 * loaded_q * offset_hz)).powi(2);
                db_from_power(thermal * (1.0 + corner_hz / offset_hz) * resonator)
            }
        }
    }
}

/// Returns the detector floor at the VCO \[dBc/Hz\]: `L_1Hz + 20·log10(f_vco/f_pfd) + 10·log10(f_pfd/1 Hz)`
/// (common practice, no source).
#[must_use]
pub fn detector_floor_dbc_per_hz(normalised: f64, vco_hz: f64, pfd_hz: f64) -> f64 {
    normalised + db_from_power((vco_hz / pfd_hz).powi(2) * pfd_hz)
}

/// Returns the detector flicker at the VCO \[dBc/Hz\]: `L_flk + 10·log10(10 kHz/f) + 20·log10(f_vco/1 GHz)`
/// (common practice, no source).
#[must_use]
pub fn detector_flicker_dbc_per_hz(normalised: f64, vco_hz: f64, offset_hz: f64) -> f64 {
    normalised + db_from_power(1e4 / offset_hz * (vco_hz / 1e9).powi(2))
}

/// Returns the level as a density in rad²/Hz (single sideband: L itself).
pub(super) fn density(level_dbc_per_hz: f64) -> f64 {
    power_from_db(level_dbc_per_hz)
}
