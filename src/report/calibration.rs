//! A calibration: text, JSON, and the plan with the fitted figures.

use serde_json::json;

use super::ReportError;
use super::figures::with_prefix;
use super::json::json_text;
use crate::base::Assumption;
use crate::decide::calibrate::{Calibration, FittedFigure};
use crate::plan::{Place, Plan, rewritten};

/// How parts and scatter are taken, for every output.
const CONVENTION: &str = "parts on one offset add as voltages in phase, as in every prediction; measured levels scatter evenly in dB; intervals are 95 %, two-sided, by Student's t";

fn level(value: Option<f64>) -> String {
    value.map_or_else(|| "-".to_owned(), |value| format!("{value:.2}"))
}

/// Returns the factor and the unit in which a plan gives a figure.
fn unit_of(figure: &FittedFigure) -> (f64, &'static str) {
    match figure.unit {
        "ratio" => (100.0, "%"),
        "A" => (1e6, "uA"),
        "dB" => (1.0, "dB"),
        _ => (1.0, "dBc"),
    }
}

fn figure(figure: &FittedFigure) -> String {
    let (scale, unit) = unit_of(figure);
    format!(
        "{}: {:.3} {unit} (95 % interval {:.3} to {:.3} {unit}), planned {:.3} {unit}",
        figure.key,
        figure.fitted * scale,
        figure.interval.0 * scale,
        figure.interval.1 * scale,
        figure.planned * scale
    )
}

/// Returns a calibration for a terminal.
#[must_use]
pub fn calibration_text(plan: &Plan, found: &Calibration) -> String {
    let mut text = format!("{}: {} measured rows\n{CONVENTION}\n\n", plan.identity.title, found.rows.len());
    text.push_str("  line  channel            offset          measured  predicted  residual    fitted  what\n");
    for row in &found.rows {
        let what = match (&row.unused, &row.label, row.mechanism) {
            (Some(why), ..) => format!("not used: {why}"),
            (None, Some(label), Some(mechanism)) => format!("{label}, mostly {mechanism}"),
            _ => String::new(),
        };
        text.push_str(&format!(
            "  {:>4}  {:<18} {:<15} {:>8} {:>10} {:>9} {:>9}  {what}\n",
            row.line,
            row.channel.to_string(),
            with_prefix(row.offset_hz, "Hz", 6),
            format!("{}{:.1}", if row.is_bound { "<" } else { "" }, row.measured_dbc),
            level(row.predicted_dbc),
            level(row.residual_db),
            level(row.fitted_dbc)
        ));
    }
    text.push_str("\nresiduals by the largest part, measured minus predicted\n");
    for mechanism in &found.mechanisms {
        let spread = mechanism.spread_db.map_or_else(|| "unknown".to_owned(), |spread| format!("{spread:.2} dB"));
        text.push_str(&format!(
            "  {}: {} rows, mean {:+.2} dB, spread {spread}\n",
            mechanism.mechanism, mechanism.count, mechanism.mean_db
        ));
    }
    text.push_str("\nfitted\n");
    for fitted in &found.fitted {
        text.push_str(&format!("  {}\n", figure(fitted)));
        text.push_str(&format!("    told by {}\n", fitted.covered.join("; ")));
    }
    if found.fitted.is_empty() {
        text.push_str("  nothing\n");
    }
    for why in &found.not_fitted {
        text.push_str(&format!("  as in the plan: {why}\n"));
    }
    if let Some(scatter_db) = found.scatter_db {
        let origin = if found.freedom == 0 {
            "assumed, too few rows".to_owned()
        } else {
            format!("{} degrees of freedom", found.freedom)
        };
        text.push_str(&format!("  scatter {scatter_db:.2} dB ({origin})\n"));
    }
    if !found.covered.is_empty() {
        text.push_str("\nthe fit covers, and beyond it is carried by the model alone:\n");
        for sentence in &found.covered {
            text.push_str(&format!("  {sentence}\n"));
        }
    }
    text
}

/// Returns the text of `calibrate --json`.
///
/// # Errors
/// `NotFinite`, `Serialize`.
pub fn calibration_json(plan: &Plan, found: &Calibration, assumptions: &[Assumption]) -> Result<String, ReportError> {
    let document = json!({
        "schema": "thornmap.calibration/1",
        "version": env!("CARGO_PKG_VERSION"),
        "plan_sha256": plan.sha256,
        "convention": CONVENTION,
        "rows": found.rows,
        "mechanisms": found.mechanisms,
        "fitted": found.fitted,
        "not_fitted": found.not_fitted,
        "scatter_db": found.scatter_db,
        "degrees_of_freedom": found.freedom,
        "covered": found.covered,
        "assumptions": assumptions,
    });
    json_text("calibration", &document).map(|text| format!("{text}\n"))
}

/// A plan's text with fitted figures in it.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct CalibratedPlan {
    /// The text; all else is as typed.
    pub text: String,
    /// Places whose figure was written, `basis = "measured"`.
    pub written: usize,
    /// Figures that have no place in the text and are not in it.
    pub missed: Vec<String>,
}

/// Returns the plan's text with the fitted figures in it.
#[must_use]
pub fn calibrated_plan(text: &str, found: &Calibration) -> CalibratedPlan {
    let mut changes = Vec::new();
    let mut keys = Vec::new();
    for figure in &found.fitted {
        let (scale, unit) = unit_of(figure);
        // The first sentence of the range counts the rows.
        let rows = figure.covered.first().map_or("no row", String::as_str);
        for placed in &figure.places {
            let (low, high) = (placed.interval.0 * scale, placed.interval.1 * scale);
            let note = format!("calibrated from {rows}, 95 % interval {low:.3} to {high:.3} {unit}");
            let value = placed.value * scale;
            let toml = format!("{{ value = \"{value:.4} {unit}\", basis = \"measured\", note = \"{note}\" }}");
            changes.push((placed.place.clone(), toml));
            keys.push(&figure.key);
        }
    }
    let (text, missed) = rewritten(text, &changes);
    let is_missed = |place: &Place| missed.contains(place);
    CalibratedPlan {
        text,
        written: changes.len() - missed.len(),
        missed: changes
            .iter()
            .zip(keys)
            .filter(|((place, _), _)| is_missed(place))
            .map(|(_, key)| key.clone())
            .collect(),
    }
}
