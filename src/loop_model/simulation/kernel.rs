//! Closed forms over a stretch of constant current.

/// Largest filter degree: the integrator and three further poles.
pub(super) const MOST_POLES: usize = 3;
/// Below this z the series is used: ten terms leave 1e-17.
const SERIES_BELOW: f64 = 0.3;

/// Decay and the first three φ-functions of a pole over a stretch, z = p·Δ: `decay = e^(−z)`,
/// `first = (1 − decay)/z`, `second = (1 − first)/z`, `third = (1/2 − second)/z`; free of cancellation.
#[derive(Debug, Clone, Copy)]
pub(super) struct Stretch {
    pub decay: f64,
    pub first: f64,
    pub second: f64,
    pub third: f64,
}

impl Stretch {
    #[inline(always)]
    pub fn of(z: f64) -> Self {
        if z < SERIES_BELOW {
            // third = Σ (−z)^n/(n + 3)!
            let mut third = 1.0;
            for n in (1..=9u32).rev() {
                third = 1.0 - z / f64::from(n + 3) * third;
            }
            third /= 6.0;
            let second = 0.5 - z * third;
            let first = 1.0 - z * second;
            Self { decay: 1.0 - z * first, first, second, third }
        } else {
            let gone = -(-z).exp_m1();
            let first = gone / z;
            let second = (1.0 - first) / z;
            Self { decay: 1.0 - gone, first, second, third: (0.5 - second) / z }
        }
    }
}

/// The filter in modes and the VCO's phase error.
///
/// The tuning voltage against its locked value is `direct + Σ modes`; `d direct/dt = k_0·i`,
/// `d mode/dt = −p·mode + k·i`; the phase error moves by `K_vco·voltage`.
#[derive(Debug, Clone, Copy, Default)]
pub(super) struct State {
    /// Voltage on the integrator \[V\].
    pub direct_v: f64,
    /// Voltages of the modes \[V\].
    pub modes_v: [f64; MOST_POLES],
    /// Phase of the VCO against that of the exact target frequency \[cycles\].
    pub phase_cycles: f64,
    /// Integral of the phase since the last reference edge \[cycles·s\].
    pub area_cycles_s: f64,
}

/// The loop's constants.
#[derive(Debug, Clone, Copy)]
pub(super) struct Plant<const POLES: usize> {
    /// k_0 \[V/(A·s)\].
    pub integrator: f64,
    /// Rates p \[1/s\].
    pub rates: [f64; POLES],
    /// Residues k \[V/(A·s)\].
    pub residues: [f64; POLES],
    /// Tuning gain \[Hz/V\].
    pub gain_hz_per_v: f64,
}

impl<const POLES: usize> Plant<POLES> {
    /// Moves the state on by `span_s` with a constant current \[A\].
    #[inline(always)]
    pub fn advance(&self, state: &mut State, span_s: f64, current_a: f64) {
        let square = span_s * span_s;
        let push = self.integrator * current_a;
        let mut phase = state.direct_v * span_s + push * square * 0.5;
        let mut area = state.direct_v * square * 0.5 + push * square * span_s * (1.0 / 6.0);
        state.direct_v += push * span_s;
        for i in 0..POLES {
            let stretch = Stretch::of(self.rates[i] * span_s);
            let (mode, push) = (state.modes_v[i], self.residues[i] * current_a);
            phase += mode * span_s * stretch.first + push * square * stretch.second;
            area += mode * square * stretch.second + push * square * span_s * stretch.third;
            state.modes_v[i] = mode * stretch.decay + push * span_s * stretch.first;
        }
        state.area_cycles_s += state.phase_cycles * span_s + self.gain_hz_per_v * area;
        state.phase_cycles += self.gain_hz_per_v * phase;
    }

    /// Returns the frequency error \[Hz\].
    #[inline(always)]
    pub fn frequency_hz(&self, state: &State) -> f64 {
        self.gain_hz_per_v * (state.direct_v + state.modes_v[..POLES].iter().sum::<f64>())
    }

    /// Returns how fast the frequency error moves under a current \[Hz/s\].
    #[inline(always)]
    pub fn slope_hz_per_s(&self, state: &State, current_a: f64) -> f64 {
        let mut slope = self.integrator * current_a;
        for i in 0..POLES {
            slope += self.residues[i] * current_a - self.rates[i] * state.modes_v[i];
        }
        self.gain_hz_per_v * slope
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn series_and_closed_form_meet() {
        let mut cases = 0;
        for i in 0..400 {
            let z = 1e-6 * 1.05f64.powi(i);
            if !(0.05..1.0).contains(&z) {
                continue;
            }
            let found = Stretch::of(z);
            let first = -(-z).exp_m1() / z;
            let second = (1.0 - first) / z;
            assert!((found.decay - (-z).exp()).abs() < 1e-15);
            assert!((found.first - first).abs() < 1e-15);
            assert!((found.second - second).abs() < 1e-13);
            assert!((found.third - (0.5 - second) / z).abs() < 1e-11);
            cases += 1;
        }
        assert!(cases > 50, "{cases}");
    }

    #[test]
    fn one_stretch_equals_many_short_ones() {
        let plant = Plant { integrator: 1e8, rates: [2e6, 3e7], residues: [4e8, 1e9], gain_hz_per_v: 3e7 };
        let start = State { direct_v: 1e-3, modes_v: [2e-3, -1e-3, 0.0], phase_cycles: 0.3, area_cycles_s: 0.0 };
        let (mut whole, mut parts) = (start, start);
        plant.advance(&mut whole, 2e-7, 1e-3);
        for _ in 0..4000 {
            plant.advance(&mut parts, 2e-7 / 4000.0, 1e-3);
        }
        assert!((whole.phase_cycles - parts.phase_cycles).abs() < 1e-12 * whole.phase_cycles.abs());
        assert!((whole.area_cycles_s / parts.area_cycles_s - 1.0).abs() < 1e-11);
        assert!((whole.modes_v[0] / parts.modes_v[0] - 1.0).abs() < 1e-11);
    }
}
