//! The loop's responses on one channel, continuous and sampled.

use std::f64::consts::TAU;

use num_complex::Complex64;

use super::network::FilterNetwork;
use super::settings::{LoopModelError, ResponseTable};
use super::stability::poles_outside;

/// Ratio of PFD frequency to unity-gain frequency below which a continuous view misleads
/// (Gardner 1980; Hein & Scott 1988, from memory).
const COMFORTABLE_RATIO: f64 = 20.0;
/// Phase margin above which such a ratio leaves no doubt \[deg\].
const COMFORTABLE_MARGIN_DEG: f64 = 25.0;
/// Points of the scan for peak and 3 dB frequency, log-spaced.
const SCAN_POINTS: usize = 160;

/// What a loop response depends on besides the filter.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct LoopPoint {
    /// Pump current \[A\].
    pub current_a: f64,
    /// Tuning gain \[Hz/V\].
    pub gain_hz_per_v: f64,
    /// N + K/M.
    pub divider: f64,
    /// PFD frequency \[Hz\].
    pub pfd_hz: f64,
}

/// The figures of a response that take a search over frequency.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct LoopFigures {
    /// Frequency at which |A| = 1 \[Hz\].
    pub unity_gain_hz: Option<f64>,
    /// Phase margin of A \[deg\].
    pub phase_margin_deg: Option<f64>,
    /// Largest |H|, a ratio.
    pub peak_gain: Option<f64>,
    /// Frequency at which |H| has fallen by 3 dB for good \[Hz\].
    pub closed_loop_3db_hz: Option<f64>,
}

/// The loop on one channel.
///
/// `A(s) = I_cp·K_vco·Z(s)/(s·(N + K/M))` with s = j2πf and K_vco in Hz/V. The detector samples:
/// `A*(f) = Σ_k A(f + k·f_pfd)`, in closed form by partial fractions.
#[derive(Debug, Clone, PartialEq)]
pub struct LoopResponse {
    form: Form,
    pfd_hz: f64,
    unity_gain_hz: Option<f64>,
    phase_margin_deg: Option<f64>,
    /// Largest |H|.
    peak_gain: Option<f64>,
    closed_loop_3db_hz: Option<f64>,
}

#[derive(Debug, Clone, PartialEq)]
enum Form {
    Network(Terms),
    /// log-frequency, gain: linear in both parts over log f, end values held.
    Table(Vec<(f64, Complex64)>),
}

/// `A(s) = double/s² + single/s + Σ residue/(s + rate)`.
#[derive(Debug, Clone, PartialEq)]
struct Terms {
    double: f64,
    single: f64,
    /// Step of the phase at a pulse, only of a series R–C alone.
    step: f64,
    poles: Vec<(f64, f64)>,
}

impl Terms {
    fn new(network: &FilterNetwork, point: &LoopPoint) -> Self {
        let gain = point.current_a * point.gain_hz_per_v / point.divider;
        let step: f64 = network.poles().iter().map(|pole| pole.residue / pole.rate).sum();
        Self {
            double: gain * network.integrator(),
            single: gain * (step + network.direct_ohm()),
            step: gain * network.direct_ohm(),
            poles: network.poles().iter().map(|pole| (pole.rate, -gain * pole.residue / pole.rate)).collect(),
        }
    }

    fn continuous(&self, s: Complex64) -> Complex64 {
        let poles: Complex64 = self.poles.iter().map(|(rate, residue)| residue / (s + rate)).sum();
        (self.double / s + self.single) / s + poles
    }

    /// Σ_k A(s + j2πk·f_pfd): Σ 1/(s + jkω) = (T/2)·coth(sT/2) and its derivative.
    ///
    /// Where the phase steps at the sampling instant the sum gives the middle of the step; the detector sees the phase
    /// before it, half a step lower (that gives the limit of Gardner 1980).
    fn sampled(&self, s: Complex64, pfd_hz: f64) -> Complex64 {
        let half = 0.5 / pfd_hz;
        // e^(−sT) once: a pole only makes it smaller by e^(−pT).
        let turned = (-2.0 * half * s).exp();
        let origin = coth(turned);
        let square = origin * origin - 1.0;
        let poles: Complex64 =
            self.poles.iter().map(|(rate, residue)| coth(turned * (-2.0 * half * rate).exp()) * *residue).sum();
        (square * (self.double * half) + origin * self.single + poles - self.step) * half
    }
}

/// Returns coth z from e^(−2z), Re z ≥ 0; for large z it is 1 without overflow.
fn coth(decayed: Complex64) -> Complex64 {
    (1.0 + decayed) / (1.0 - decayed)
}

impl LoopResponse {
    /// Returns the response of a filter network at one channel.
    ///
    /// # Errors
    /// `NotPositive` for a point that is not; `Unstable` where A*(f_pfd/2) ≤ −1, `Grows` where other poles
    /// lie outside the unit circle.
    pub fn new(network: &FilterNetwork, point: LoopPoint) -> Result<Self, LoopModelError> {
        for (what, found) in [
            ("the pump current", point.current_a),
            ("the tuning gain", point.gain_hz_per_v),
            ("the divider ratio", point.divider),
            ("the PFD frequency", point.pfd_hz),
        ] {
            if !(found.is_finite() && found > 0.0) {
                return Err(LoopModelError::NotPositive { what, found });
            }
        }
        let terms = Terms::new(network, &point);
        let mut response = Self {
            form: Form::Network(terms),
            pfd_hz: point.pfd_hz,
            unity_gain_hz: None,
            phase_margin_deg: None,
            peak_gain: None,
            closed_loop_3db_hz: None,
        };
        let unity = response.crossing(|f| response.open_loop(f).map(|a| a.norm_sqr()));
        response.unity_gain_hz = unity;
        response.phase_margin_deg =
            unity.and_then(|f| response.open_loop(f)).map(|a| 180.0 + a.arg().to_degrees() - wrap(a.arg()));
        let edge = response.open_loop_sampled(point.pfd_hz / 2.0).map_or(f64::NAN, |a| a.re);
        if edge.is_nan() || edge <= -1.0 {
            return Err(LoopModelError::Unstable { ratio: unity.map_or(f64::NAN, |f| point.pfd_hz / f), found: edge });
        }
        response.check_growth()?;
        response.scan();
        Ok(response)
    }

    /// Returns the response of a stable network at a checked point whose figures are already known.
    ///
    /// # Examples
    /// ```
    /// use thornmap::loop_model::{FilterComponents, FilterNetwork, LoopPoint, LoopResponse};
    /// let network = FilterNetwork::new(&FilterComponents {
    ///     c1_farad: Some(580e-12), r2_ohm: 6800.0, c2_farad: 2.8e-9, r3_c3: None, r4_c4: None,
    /// }).unwrap();
    /// let point = LoopPoint { current_a: 2.5e-3, gain_hz_per_v: 32e6, divider: 88.0, pfd_hz: 19.2e6 };
    /// let found = LoopResponse::new(&network, point).unwrap();
    /// assert_eq!(LoopResponse::with_figures(&network, point, found.figures()), found);
    /// ```
    #[must_use]
    pub fn with_figures(network: &FilterNetwork, point: LoopPoint, figures: LoopFigures) -> Self {
        Self {
            form: Form::Network(Terms::new(network, &point)),
            pfd_hz: point.pfd_hz,
            unity_gain_hz: figures.unity_gain_hz,
            phase_margin_deg: figures.phase_margin_deg,
            peak_gain: figures.peak_gain,
            closed_loop_3db_hz: figures.closed_loop_3db_hz,
        }
    }

    /// Returns the figures that took a search.
    #[must_use]
    pub fn figures(&self) -> LoopFigures {
        LoopFigures {
            unity_gain_hz: self.unity_gain_hz,
            phase_margin_deg: self.phase_margin_deg,
            peak_gain: self.peak_gain,
            closed_loop_3db_hz: self.closed_loop_3db_hz,
        }
    }

    /// Refuses a loop with closed-loop poles outside the unit circle.
    ///
    /// The open-loop gain falls with frequency, so a loop with a comfortable margin and a PFD frequency far above its
    /// bandwidth is stable without counting: sampling takes 180°·f_c/f_pfd, at most 9°.
    fn check_growth(&self) -> Result<(), LoopModelError> {
        let Form::Network(terms) = &self.form else { return Ok(()) };
        let ratio = self.unity_gain_hz.map_or(f64::NAN, |unity| self.pfd_hz / unity);
        let margin_deg = self.phase_margin_deg.unwrap_or(f64::NAN);
        if ratio >= COMFORTABLE_RATIO && margin_deg >= COMFORTABLE_MARGIN_DEG {
            return Ok(());
        }
        let decays: Vec<f64> = terms.poles.iter().map(|(rate, _)| (-rate / self.pfd_hz).exp()).collect();
        let sampled = |angle: f64| terms.sampled(Complex64::new(0.0, angle * self.pfd_hz), self.pfd_hz);
        match poles_outside(&decays, sampled) {
            0 => Ok(()),
            poles => Err(LoopModelError::Grows { ratio, margin_deg, poles }),
        }
    }

    /// Returns a response from a measured closed-loop table: both parts linear in log f between the points, held
    /// beyond the ends. Open-loop figures are unknown; E is taken as 1 − H.
    ///
    /// # Errors
    /// `BadPoints` for fewer than two points or offsets that do not rise strictly.
    pub fn from_table(table: &ResponseTable, pfd_hz: f64) -> Result<Self, LoopModelError> {
        table.check()?;
        let points = table.points.iter().map(|(offset, gain)| (offset.ln(), *gain)).collect();
        let mut response = Self {
            form: Form::Table(points),
            pfd_hz,
            unity_gain_hz: None,
            phase_margin_deg: None,
            peak_gain: None,
            closed_loop_3db_hz: None,
        };
        response.scan();
        Ok(response)
    }

    /// Returns the continuous open-loop gain A(f); `None` for a measured response.
    #[must_use]
    pub fn open_loop(&self, offset_hz: f64) -> Option<Complex64> {
        match &self.form {
            Form::Network(terms) => Some(terms.continuous(Complex64::new(0.0, TAU * offset_hz))),
            Form::Table(_) => None,
        }
    }

    /// Returns the sampled open-loop gain A*(f); `None` for a measured response.
    #[must_use]
    pub fn open_loop_sampled(&self, offset_hz: f64) -> Option<Complex64> {
        match &self.form {
            Form::Network(terms) => Some(terms.sampled(Complex64::new(0.0, TAU * offset_hz), self.pfd_hz)),
            Form::Table(_) => None,
        }
    }

    /// Returns H(f) = A/(1 + A*), from a phase at the divider to the VCO phase, 1 in band.
    #[must_use]
    pub fn closed_loop(&self, offset_hz: f64) -> Complex64 {
        match &self.form {
            Form::Network(terms) => {
                let s = Complex64::new(0.0, TAU * offset_hz);
                terms.continuous(s) / (1.0 + terms.sampled(s, self.pfd_hz))
            }
            Form::Table(points) => table_value(points, offset_hz.ln()),
        }
    }

    /// Returns E(f) = 1 − A/(1 + A*), from a phase of the free VCO to the VCO phase; aliases are neglected.
    #[must_use]
    pub fn error(&self, offset_hz: f64) -> Complex64 {
        1.0 - self.closed_loop(offset_hz)
    }

    /// Returns A*/(1 + A*): what phase sampled at the reference edges sees; `None` for a measured response.
    #[must_use]
    pub fn sampled_closed_loop(&self, offset_hz: f64) -> Option<Complex64> {
        self.open_loop_sampled(offset_hz).map(|a| a / (1.0 + a))
    }

    /// Returns A/(1 + A), the view that ignores sampling; `None` for a measured response.
    #[must_use]
    pub fn continuous_closed_loop(&self, offset_hz: f64) -> Option<Complex64> {
        self.open_loop(offset_hz).map(|a| a / (1.0 + a))
    }

    /// Returns the PFD frequency \[Hz\].
    #[must_use]
    pub fn pfd_hz(&self) -> f64 {
        self.pfd_hz
    }

    /// Returns the frequency at which |A| = 1 \[Hz\]; `None` for a measured response.
    #[must_use]
    pub fn unity_gain_hz(&self) -> Option<f64> {
        self.unity_gain_hz
    }

    /// Returns the phase margin of A \[deg\]; `None` for a measured response.
    #[must_use]
    pub fn phase_margin_deg(&self) -> Option<f64> {
        self.phase_margin_deg
    }

    /// Returns crossover \[Hz\] and margin \[deg\] of the sampled A*; `None` where it does not cross below f_pfd/2.
    #[must_use]
    pub fn sampled_margin(&self) -> Option<(f64, f64)> {
        let crossover = self.crossing(|f| self.open_loop_sampled(f).map(|a| a.norm_sqr()))?;
        let a = self.open_loop_sampled(crossover)?;
        Some((crossover, 180.0 + a.arg().to_degrees() - wrap(a.arg())))
    }

    /// Returns the largest |H| over |H(0)| \[dB\], zero where H only falls.
    #[must_use]
    pub fn peaking_db(&self) -> Option<f64> {
        self.peak_gain.map(|gain| crate::base::db_from_power(gain * gain).max(0.0))
    }

    /// Returns the frequency at which |H| has fallen by 3 dB for good \[Hz\]; `None` where it has not by f_pfd/2.
    #[must_use]
    pub fn closed_loop_3db_hz(&self) -> Option<f64> {
        self.closed_loop_3db_hz
    }

    /// Returns doubts about the response, for every output.
    #[must_use]
    pub fn warnings(&self) -> Vec<String> {
        match self.unity_gain_hz {
            Some(unity) if self.pfd_hz / unity < COMFORTABLE_RATIO => vec![format!(
                "the loop bandwidth is more than a twentieth of the PFD frequency (ratio {:.2}): sampling lowers the phase margin (Gardner 1980; Hein & Scott 1988), and the VCO moves between comparisons: mismatch tones may be 1.5 dB off, and an offset current that just clears the pump's kink may no longer clear it",
                self.pfd_hz / unity
            )],
            _ => Vec::new(),
        }
    }

    /// Returns where a squared magnitude that falls with frequency passes 1.
    fn crossing(&self, squared: impl Fn(f64) -> Option<f64>) -> Option<f64> {
        let (mut low, mut high) = (self.pfd_hz * 1e-9, self.pfd_hz / 2.0);
        // A continuous loop may cross beyond f_pfd/2; it is then unstable, but the ratio is worth naming.
        while squared(high)? > 1.0 {
            high *= 2.0;
            if high > self.pfd_hz * 1e6 {
                return None;
            }
        }
        if squared(low)? < 1.0 {
            return None;
        }
        for _ in 0..200 {
            let middle = (low * high).sqrt();
            if squared(middle)? > 1.0 {
                low = middle
            } else {
                high = middle
            }
            if high / low - 1.0 < 1e-14 {
                break;
            }
        }
        Some((low * high).sqrt())
    }

    /// Finds peak and 3 dB frequency of |H| by a log scan below f_pfd/2, refined by golden section and bisection.
    fn scan(&mut self) {
        let centre = self.unity_gain_hz.unwrap_or(self.pfd_hz / 100.0);
        let (low, high) = match &self.form {
            Form::Network(_) => (centre * 1e-3, self.pfd_hz / 2.0),
            Form::Table(points) => (points[0].0.exp(), points[points.len() - 1].0.exp()),
        };
        let size = |f: f64| self.closed_loop(f).norm();
        let at = |i: usize| low * (high / low).powf(i as f64 / (SCAN_POINTS - 1) as f64);
        let sizes: Vec<f64> = (0..SCAN_POINTS).map(|i| size(at(i))).collect();
        let best = (0..SCAN_POINTS).max_by(|a, b| sizes[*a].total_cmp(&sizes[*b])).unwrap_or(0);
        let (left, right) = (at(best.saturating_sub(1)), at((best + 1).min(SCAN_POINTS - 1)));
        let peak_hz = golden_maximum(&size, left, right);
        let half = std::f64::consts::FRAC_1_SQRT_2;
        let last_above = (0..SCAN_POINTS).rev().find(|i| sizes[*i] >= half);
        let edge = last_above.filter(|i| i + 1 < SCAN_POINTS).map(|i| {
            let (mut a, mut b) = (at(i), at(i + 1));
            for _ in 0..60 {
                let middle = (a * b).sqrt();
                if size(middle) >= half { a = middle } else { b = middle }
            }
            (a * b).sqrt()
        });
        self.peak_gain = Some(size(peak_hz));
        self.closed_loop_3db_hz = edge;
    }
}

/// Returns the turn \[deg\] that brings a phase of a positive angle to below zero: margins count from −180°.
fn wrap(phase_rad: f64) -> f64 {
    if phase_rad > 0.0 { 360.0 } else { 0.0 }
}

/// Returns the position of the maximum between two frequencies, on a log axis.
fn golden_maximum(size: &impl Fn(f64) -> f64, left: f64, right: f64) -> f64 {
    let share = (5f64.sqrt() - 1.0) / 2.0;
    let (mut a, mut b) = (left.ln(), right.ln());
    for _ in 0..50 {
        let (c, d) = (b - share * (b - a), a + share * (b - a));
        if size(c.exp()) >= size(d.exp()) { b = d } else { a = c }
    }
    f64::midpoint(a, b).exp()
}

/// Returns the table's gain at a log frequency.
fn table_value(points: &[(f64, Complex64)], log_hz: f64) -> Complex64 {
    let after = points.partition_point(|(at, _)| *at <= log_hz);
    match (after.checked_sub(1).and_then(|i| points.get(i)), points.get(after)) {
        (Some((x0, y0)), Some((x1, y1))) => y0 + (y1 - y0) * ((log_hz - x0) / (x1 - x0)),
        (Some((_, y)), None) | (None, Some((_, y))) => *y,
        (None, None) => Complex64::ONE,
    }
}
