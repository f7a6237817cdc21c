//! The causes of a tone, for a terminal and as JSON.

use serde_json::{Value, json};

use super::ReportError;
use super::json::json_text;
use crate::decide::identify::Identification;
use crate::plan::Plan;

/// Returns the causes, best first, with their proofs, their shifts and the experiment that tells the first two apart.
#[must_use]
pub fn identification_text(plan: &Plan, found: &Identification) -> String {
    let mut text = format!(
        "{}: channel {}, tone at {} within {}\n",
        plan.identity.title, found.channel, found.offset, found.within
    );
    if found.causes.is_empty() {
        text.push_str(
            "no mechanism of the plan puts a tone there; widen --within, or look for a clock that the plan does not list\n",
        );
        return text;
    }
    for (rank, cause) in found.causes.iter().enumerate() {
        text.push_str(&format!(
            "\n{}. {}\n   offset {} ({:+.3} Hz from the tone)\n   {}\n",
            rank + 1,
            cause.name(plan),
            cause.offset,
            cause.distance_hz,
            cause.proof
        ));
        for shift in &cause.shifts {
            text.push_str(&format!("   {}: {:+.3} Hz\n", shift.experiment.instruction(), shift.shift_hz));
        }
    }
    if let Some(advice) = &found.advice {
        text.push_str(&format!("\nto tell 1 from 2: {advice}\n"));
    }
    text.push_str("\nA wandering tone that none of these explains has an origin outside the plan: unknown.\n");
    text
}

/// Returns the text of `identify --json`.
///
/// # Errors
/// `NotFinite`, `Serialize`.
pub fn identification_json(plan: &Plan, found: &Identification) -> Result<String, ReportError> {
    let causes: Vec<Value> = found
        .causes
        .iter()
        .map(|cause| {
            json!({
                "mechanism": cause.mechanism,
                "name": cause.name(plan),
                "order": cause.order,
                "offset_hz": cause.offset.to_f64_hz(),
                "offset_exact": cause.offset,
                "distance_hz": cause.distance_hz,
                "proof": cause.proof,
                "shifts": cause.shifts,
            })
        })
        .collect();
    let document = json!({
        "schema": "thornmap.identification/1",
        "plan_sha256": plan.sha256,
        "channel_exact": found.channel,
        "offset_exact": found.offset,
        "within_exact": found.within,
        "causes": causes,
        "advice": found.advice,
    });
    json_text("identification", &document).map(|text| format!("{text}\n"))
}
