//! What each order gains against pump mismatch, from the conditional-mean curve.

use serde::Serialize;

use crate::base::db_from_power;
use crate::plan::Plan;
use crate::tones::{Charge, PhaseDensity, harmonic};

/// Mismatch when the plan's is unknown; the gains do not depend on it.
const ANY_MISMATCH: f64 = 0.02;

/// One order against pump mismatch, long randomised sequence, no offset, before the loop.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct OrderGain {
    /// Order.
    pub order: u8,
    /// Tone at h = 1, 2, 3 for the mismatch used \[dBc\]; `None` where the curve gives no tone.
    pub tones_dbc: [Option<f64>; 3],
    /// How much lower than order 3 the tone at h = 1 is \[dB\].
    pub gain_over_three_db: f64,
    /// Lowest and highest modulator output.
    pub output_range: (i64, i64),
    /// Offset that keeps the pump on one side of its kink \[VCO cycles\].
    pub clearing_offset_cycles: f64,
    /// Mismatch used.
    pub mismatch: f64,
}

/// Returns the gains of orders 1 to 5.
#[must_use]
pub fn order_gains(plan: &Plan) -> Vec<OrderGain> {
    let mismatch = match &plan.detector.mismatch {
        Some(crate::plan::MismatchPoints::Constant(value)) if *value != 0.0 => value.abs(),
        _ => ANY_MISMATCH,
    };
    let tone = |order: u8, h: u64| {
        let density = PhaseDensity::mash(order).ok()?;
        let curve = |p: f64| p + 0.5 * mismatch * p.abs();
        let line = harmonic(&density, Charge::new(&curve, &[0.0]), 0.0, h);
        // Rounding leaves 1e-17 where the curve gives no tone.
        let size = std::f64::consts::TAU * line.nonlinearity.norm();
        (size > 1e-12).then(|| db_from_power(size * size))
    };
    let third = tone(3, 1).unwrap_or(f64::NAN);
    (1..=5u8)
        .filter_map(|order| {
            let density = PhaseDensity::mash(order).ok()?;
            let reach = 1i64 << (order - 1);
            Some(OrderGain {
                order,
                tones_dbc: [tone(order, 1), tone(order, 2), tone(order, 3)],
                gain_over_three_db: third - tone(order, 1)?,
                output_range: (1 - reach, reach),
                clearing_offset_cycles: density.reach_cycles(),
                mismatch,
            })
        })
        .collect()
}
