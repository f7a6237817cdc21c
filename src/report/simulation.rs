//! A channel simulated in time: text, JSON, pictures.

use serde_json::{Value, json};

use super::figures::with_prefix;
use super::json::json_text;
use super::plots::{settling_svg, simulation_svg};
use super::{ReportError, ReportFile};
use crate::assess::{ComparedTone, Settling, SimulatedChannel};
use crate::base::Assumption;
use crate::plan::Plan;

/// What the figures are, for every output.
const CONVENTION: &str =
    "at the VCO, one sideband, noise sources off: only modulator and detector speak; predicted minus simulated";

fn level(value: Option<f64>) -> String {
    value.map_or_else(|| "unknown".to_owned(), |value| format!("{value:.2}"))
}

fn rows(title: &str, tones: &[ComparedTone]) -> String {
    let mut text = format!("{title}\n   h  offset          predicted  simulated  difference  floor beside [dBc]\n");
    for tone in tones {
        text.push_str(&format!(
            "  {:>2}  {:<14} {:>10} {:>10} {:>11} {:>7}{}\n",
            tone.harmonic,
            with_prefix(tone.offset_hz, "Hz", 7),
            level(tone.predicted_dbc),
            level(tone.simulated_dbc),
            level(tone.difference_db),
            level(tone.floor_dbc),
            if tone.inside_loop { "  in the loop" } else { "" }
        ));
    }
    text
}

/// Returns a simulated channel for a terminal.
#[must_use]
pub fn simulation_text(plan: &Plan, found: &SimulatedChannel) -> String {
    let mut text = format!(
        "{}: channel {} in time, {} cycles after {} dropped{}\n{CONVENTION}\n\n",
        plan.identity.title,
        found.channel,
        found.cycles,
        found.dropped_cycles,
        if found.whole_periods { ", whole periods of the sequence" } else { ", windowed" }
    );
    text.push_str(&rows("lines at h x K/M", &found.tones));
    text.push_str(&rows("\nlines at h x f_pfd, from the phase within the cycle", &found.reference_tones));
    let predicted = found.predicted_rms_deg.map_or_else(|| "unknown".to_owned(), |deg| format!("{deg:.5} deg"));
    text.push_str(&format!(
        "\nrms phase from {} to {}: predicted {predicted}, simulated {:.5} deg\n",
        with_prefix(found.integration_hz.0, "Hz", 4),
        with_prefix(found.integration_hz.1, "Hz", 4),
        found.simulated_rms_deg
    ));
    for note in &found.notes {
        text.push_str(&format!("note: {note}\n"));
    }
    text
}

/// Returns the text of `simulate --json`; `settled_after_s` is the time that was dropped before the record, 20/f_c.
///
/// # Errors
/// `NotFinite`, `Serialize`.
pub fn simulation_json(
    plan: &Plan,
    pfd_hz: f64,
    found: &SimulatedChannel,
    assumptions: &[Assumption],
) -> Result<String, ReportError> {
    let tones: Vec<Value> = found.tones.iter().map(|tone| json!(tone)).collect();
    let document = json!({
        "schema": "thornmap.simulation/1",
        "cycles": found.cycles,
        "settled_after_s": found.dropped_cycles as f64 / pfd_hz,
        "tones": tones,
        "rms_phase_deg": { "predicted": found.predicted_rms_deg, "simulated": found.simulated_rms_deg },
        "version": env!("CARGO_PKG_VERSION"),
        "plan_sha256": plan.sha256,
        "channel_exact": found.channel,
        "convention": CONVENTION,
        "whole_periods": found.whole_periods,
        "reference_tones": found.reference_tones,
        "integration_hz": [found.integration_hz.0, found.integration_hz.1],
        "density": found.density.iter().map(|(offset_hz, level)| json!({ "offset_hz": offset_hz, "level_dbc_per_hz": level })).collect::<Vec<_>>(),
        "notes": found.notes,
        "assumptions": assumptions,
    });
    json_text("simulation", &document).map(|text| format!("{text}\n"))
}

/// Returns the picture of a simulated channel.
///
/// # Errors
/// `ReportError` where drawing fails.
pub fn simulation_files(found: &SimulatedChannel) -> Result<Vec<ReportFile>, ReportError> {
    let picture = simulation_svg(found)?;
    Ok(picture.into_iter().map(|svg| ReportFile { path: "simulation.svg".into(), bytes: svg.into_bytes() }).collect())
}

/// Returns the way after a step for a terminal.
#[must_use]
pub fn settling_text(plan: &Plan, found: &Settling) -> String {
    let settled = found.settled_after_s.map_or_else(
        || "does not settle in the time simulated".to_owned(),
        |s| format!("stays within it after {}", with_prefix(s, "s", 5)),
    );
    let linear = found.linear_settled_after_s.map_or_else(|| "unknown".to_owned(), |s| with_prefix(s, "s", 5));
    format!(
        "{}: channel {} reached from {} {} (noise sources and modulator off)\ntolerance {} at the output: {settled}\ncontinuous linear loop, closed form: {linear}\ncomparison cycles lost on the way: {}\n",
        plan.identity.title,
        found.channel,
        with_prefix(found.step_hz.abs(), "Hz", 6),
        if found.step_hz > 0.0 { "below" } else { "above" },
        with_prefix(found.tolerance_hz, "Hz", 4),
        found.slips.abs()
    )
}

/// Returns the text of `simulate --step … --json`.
///
/// # Errors
/// `NotFinite`, `Serialize`.
pub fn settling_json(plan: &Plan, found: &Settling, assumptions: &[Assumption]) -> Result<String, ReportError> {
    // About a thousand samples tell the way.
    let every = found.samples.len().div_ceil(1000).max(1);
    let linear_hz = |i: usize| found.linear_hz.get(i).copied();
    let document = json!({
        "schema": "thornmap.settling/1",
        "version": env!("CARGO_PKG_VERSION"),
        "plan_sha256": plan.sha256,
        "channel_exact": found.channel,
        "step_hz": found.step_hz,
        "tolerance_hz": found.tolerance_hz,
        "settled_after_s": found.settled_after_s,
        "linear_settled_after_s": found.linear_settled_after_s,
        "slips": found.slips.abs(),
        "samples": found.samples.iter().enumerate().step_by(every).map(|(i, (time_s, frequency_hz, phase_deg))| json!({
            "time_s": time_s, "frequency_error_hz": frequency_hz, "phase_error_deg": phase_deg,
            "linear_frequency_error_hz": linear_hz(i),
        })).collect::<Vec<_>>(),
        "assumptions": assumptions,
    });
    json_text("settling", &document).map(|text| format!("{text}\n"))
}

/// Returns the picture of a way after a step.
///
/// # Errors
/// `ReportError` where drawing fails.
pub fn settling_files(found: &Settling) -> Result<Vec<ReportFile>, ReportError> {
    let picture = settling_svg(found)?;
    Ok(picture.into_iter().map(|svg| ReportFile { path: "settling.svg".into(), bytes: svg.into_bytes() }).collect())
}
