//! Whether the sampled loop settles: closed-loop poles outside the unit circle, by the argument principle.

use std::f64::consts::PI;

use num_complex::Complex64;

/// First steps of the half circle; a step that turns too far is halved.
const FIRST_STEPS: usize = 48;
/// Largest turn of the characteristic polynomial within one step \[rad\].
const LARGEST_TURN_RAD: f64 = 0.6;
/// Halvings of one step at most.
const MOST_HALVINGS: u32 = 20;

/// Returns the number of closed-loop poles outside the unit circle, z = e^(j·2πf/f_pfd).
///
/// With D(z) = (z − 1)²·Π(z − e^(−p·T)), whose zeros are the loop's open poles, P(z) = D(z)·(1 + A*(z)) is the
/// characteristic polynomial, of degree n = 2 + the filter's poles. Its argument turns by π over the upper half circle
/// for every zero inside, and by nothing for one outside. That A*(f_pfd/2) > −1 is necessary for none to be outside,
/// but not enough.
///
/// `decays` are e^(−p·T) of the filter's poles; `sampled` is A* at an angle 2πf/f_pfd in (0, π].
pub(super) fn poles_outside(decays: &[f64], sampled: impl Fn(f64) -> Complex64) -> usize {
    let polynomial = |angle: f64| {
        let z = Complex64::from_polar(1.0, angle);
        let open: Complex64 = decays.iter().map(|decay| z - decay).product();
        (z - 1.0) * (z - 1.0) * open * (1.0 + sampled(angle))
    };
    let degree = 2 + decays.len();
    // P(1) is real: its small neighbourhood turns by nothing.
    let mut angle = PI * 1e-7;
    let mut value = polynomial(angle);
    let mut turned = if value.re < 0.0 { value.arg() - PI.copysign(value.arg()) } else { value.arg() };
    for step in 1..=FIRST_STEPS {
        // Denser towards zero, where the loop's bandwidth lies.
        let end = PI * (step as f64 / FIRST_STEPS as f64).powi(3).max(1e-6);
        let mut halvings = 0u32;
        while angle < end {
            let next = angle + (end - angle) / f64::from(1u32 << halvings);
            let there = polynomial(next);
            let turn = (there / value).arg();
            if turn.abs() > LARGEST_TURN_RAD && halvings < MOST_HALVINGS {
                halvings += 1;
                continue;
            }
            turned += turn;
            (angle, value) = (next, there);
            halvings = halvings.saturating_sub(1);
        }
    }
    #[allow(clippy::cast_possible_truncation, clippy::cast_sign_loss, reason = "a count between 0 and the degree")]
    let inside = (turned / PI).round().clamp(0.0, degree as f64) as usize;
    degree - inside
}
