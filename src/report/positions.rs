//! What positions alone tell: references hunted, and intervals lost; text and JSON.

use serde_json::json;

use super::ReportError;
use super::json::json_text;
use super::remedy::criterion;
use crate::decide::remedy::{Criterion, GroupLoss, Hunted};
use crate::plan::Plan;

/// Returns a hunt for a terminal, best first; the JSON output has all.
#[must_use]
pub fn hunt_text(plan: &Plan, ranked: &[Hunted]) -> String {
    let channels = plan.channel_count();
    let mut text = format!(
        "{}: {} references tried on {channels} channels, by {}\n   bad  detector noise  reference\n",
        plan.identity.title,
        ranked.len(),
        criterion(Criterion::Guard)
    );
    for hunted in ranked.iter().take(20) {
        let bad = hunted.bad.map_or_else(|| "-".to_owned(), |bad| bad.to_string());
        let why = hunted.refused.as_ref().map_or_else(String::new, |why| format!("  {why}"));
        text.push_str(&format!("{bad:>6}  {:>+11.2} dB  {}{why}\n", hunted.noise_penalty_db, hunted.setting.reference));
    }
    if ranked.len() > 20 {
        text.push_str(&format!("and {} more with --json\n", ranked.len() - 20));
    }
    text.push_str("The noise penalty is that of the detector's floor in the loop, 10 log10 of the ratio of PFD frequencies; verify the winner with a survey.\n");
    text
}

/// Returns the text of `remedy --hunt … --json`.
///
/// # Errors
/// `NotFinite`, `Serialize`.
pub fn hunt_json(plan: &Plan, ranked: &[Hunted]) -> Result<String, ReportError> {
    let document = json!({
        "schema": "thornmap.hunt/1",
        "version": env!("CARGO_PKG_VERSION"),
        "plan_sha256": plan.sha256,
        "assumptions": plan.assumptions,
        "criterion": criterion(Criterion::Guard),
        "ranked": ranked,
    });
    json_text("hunt", &document).map(|text| format!("{text}\n"))
}

/// Returns the lost intervals for a terminal.
#[must_use]
pub fn intervals_text(plan: &Plan, losses: &[GroupLoss]) -> String {
    let mut text = format!(
        "{}: channels lost by position\nlost: 0 < |q·κ - p·M|·f_pfd/M <= guard with κ = N·M + K, K not 0; around f = (p/q·f_pfd ± guard/q)/P - injection\n",
        plan.identity.title
    );
    for loss in losses {
        text.push_str(&format!(
            "\n{}: {} channels, {} near a fraction, {} without a legal word: {:.4} % lost\n",
            loss.group,
            loss.channels,
            loss.near,
            loss.illegal,
            loss.share * 100.0
        ));
        for interval in loss.intervals.iter().take(40) {
            text.push_str(&format!(
                "  p/q {}/{}, P = {}: {} to {}, {} channels\n",
                interval.p,
                interval.q,
                interval.output_divider,
                interval.first,
                interval.last,
                interval.channels()
            ));
        }
        if loss.intervals.len() > 40 {
            text.push_str(&format!("  and {} more intervals with --json\n", loss.intervals.len() - 40));
        }
    }
    text
}

/// Returns the text of `remedy --intervals --json`.
///
/// # Errors
/// `NotFinite`, `Serialize`.
pub fn intervals_json(plan: &Plan, losses: &[GroupLoss]) -> Result<String, ReportError> {
    let document = json!({
        "schema": "thornmap.intervals/1",
        "version": env!("CARGO_PKG_VERSION"),
        "plan_sha256": plan.sha256,
        "assumptions": plan.assumptions,
        "rule": "0 < |q*word - p*M|*f_pfd/M <= guard, word = N*M + K, K not 0, p/q in lowest terms, ends inclusive",
        "groups": losses,
    });
    json_text("intervals", &document).map(|text| format!("{text}\n"))
}
