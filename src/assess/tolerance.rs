//! What a verdict becomes within the stated tolerances.

use crate::plan::Plan;

use super::result::{ChannelResult, Origin, Tone, Verdict};
use super::verdict::{Evidence, judge};

/// What is stated about errors of frequencies and levels.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Tolerances {
    /// Relative tolerance of the reference.
    pub reference: f64,
    /// Uncertainty of every level, half width \[dB\]; a tone's own uncertainty of method comes on top.
    pub level_db: f64,
}

impl Tolerances {
    /// Returns the tolerances of a plan; `None` where it states none.
    pub fn of(plan: &Plan) -> Option<Self> {
        let level_db = plan.analysis.level_uncertainty_db;
        match plan.reference.tolerance {
            None if level_db == 0.0 => None,
            tolerance => Some(Self { reference: tolerance.unwrap_or(0.0), level_db }),
        }
    }
}

/// Returns the best and the worst verdict that the tolerances allow.
///
/// All frequencies of the synthesizer move together with its reference: a tone offset d of its own by the share t of
/// itself, the offset of another clock by t times the frequency it beats with. Levels move by their uncertainty, all in
/// one direction; limits stay.
pub fn within(evidence: &Evidence, tolerances: &Tolerances, result: &ChannelResult) -> Option<(Verdict, Verdict)> {
    let carrier_hz = result.vco_hz.unwrap_or(0.0);
    let shifted = |sign: f64| -> Vec<Tone> {
        evidence
            .tones
            .iter()
            .map(|tone| {
                let moves_hz = match tone.origin {
                    Origin::Clock => carrier_hz * tolerances.reference,
                    _ => tone.offset_hz * tolerances.reference,
                };
                let at = |edge: Option<f64>, is_inside: bool| {
                    edge.map_or(is_inside, |edge| {
                        // The exact flag decides unless the tolerance reaches across the edge.
                        let is_sure = moves_hz == 0.0 || (tone.offset_hz - edge).abs() > moves_hz;
                        if is_sure { is_inside } else { sign > 0.0 }
                    })
                };
                let raised = sign * (tolerances.level_db + tone.level_uncertainty_db.unwrap_or(0.0));
                Tone {
                    inside_guard: at(result.guard_hz, tone.inside_guard),
                    inside_loop: at(result.loop_edge_hz, tone.inside_loop),
                    level_dbc: tone.level_dbc.map(|level| level + raised),
                    known_level_dbc: tone.known_level_dbc.map(|level| level + raised),
                    margin_db: tone.margin_db.map(|margin| margin - raised),
                    ..tone.clone()
                }
            })
            .collect()
    };
    let (low, high) = (shifted(-1.0), shifted(1.0));
    let best = judge(&Evidence { tones: &low, ..*evidence }).0;
    let worst = judge(&Evidence { tones: &high, ..*evidence }).0;
    Some((best, worst))
}
