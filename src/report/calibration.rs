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

fn figure(figure: &FittedFigure) -> String {
    let (low, high) = figure.interval;
    if figure.unit == "ratio" {
        format!(
            "{}: {:.3} % (95 % interval {:.3} % to {:.3} %), planned {:.3} %",
            figure.key,
            figure.fitted * 100.0,
            low * 100.0,
            high * 100.0,
            figure.planned * 100.0
        )
    } else {
        format!(
            "{}: {:.2} {u} (95 % interval {low:.2} to {high:.2} {u}), planned {:.2} {u}",
            figure.key,
            figure.fitted,
            figure.planned,
            u = figure.unit
        )
    }
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

/// Returns the plan's text with the fitted figures in it, `basis = "measured"`, all else as typed.
#[must_use]
pub fn calibrated_plan(text: &str, found: &Calibration) -> String {
    let rows = found.rows.iter().filter(|row| row.unused.is_none()).count();
    let changes: Vec<(Place, String)> = found
        .fitted
        .iter()
        .map(|figure| {
            let (low, high) = figure.interval;
            match figure.anchor {
                Some(index) => {
                    let note = format!("calibrated from {rows} rows, 95 % interval {low:.2} to {high:.2} dBc");
                    let value =
                        format!("{{ value = \"{:.3} dBc\", basis = \"measured\", note = \"{note}\" }}", figure.fitted);
                    (Place::AnchorLevel(index), value)
                }
                None => {
                    let (low, high) = (low * 100.0, high * 100.0);
                    let note = format!("calibrated from {rows} rows, 95 % interval {low:.3} to {high:.3} %");
                    let value = format!(
                        "{{ value = \"{:.4} %\", basis = \"measured\", note = \"{note}\" }}",
                        figure.fitted * 100.0
                    );
                    (Place::Mismatch, value)
                }
            }
        })
        .collect();
    rewritten(text, &changes)
}
