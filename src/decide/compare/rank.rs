//! The rule of ranking, and why each option stands where it does.

use std::cmp::Ordering;

use super::gains::OrderGain;
use super::measure::Figures;
use super::{ModulatorOption, Ranked};
use crate::plan::Plan;

/// The rule in words, as every output states it.
pub const RANKING_RULE: &str = "fewest bad channels, then fewest marginal, then the larger worst margin (steps of 1 dB), \
     then the smaller modulator phase error (steps of 1 %), then the longer shortest sequence, then fewer accumulator bits, \
     then an odd first seed (its sequence is never shorter)";

/// Returns which figures rank first.
pub(super) fn order_of(a: &Figures, b: &Figures) -> Ordering {
    a.bad
        .cmp(&b.bad)
        .then(a.marginal.cmp(&b.marginal))
        .then(steps(b.worst_margin_db, 1.0).cmp(&steps(a.worst_margin_db, 1.0)))
        .then(share_steps(a).cmp(&share_steps(b)))
        .then_with(|| b.shortest_sequence.cmp(&a.shortest_sequence))
}

/// Returns a margin in whole steps; unknown ranks below every known one.
fn steps(value: Option<f64>, step: f64) -> i64 {
    #[allow(clippy::cast_possible_truncation, reason = "margins are far below 2^63 steps")]
    value.map_or(i64::MIN, |value| (value / step).floor() as i64)
}

/// Returns the modulator's phase error in steps of one per cent, on a log scale; unknown ranks last.
fn share_steps(figures: &Figures) -> i64 {
    match figures.modulator_phase_deg {
        Some(phase) if phase > 0.0 => steps(Some(phase.ln()), 0.01),
        Some(_) => i64::MIN,
        None => i64::MAX,
    }
}

/// Returns why an option stands before the next one.
#[must_use]
pub fn reason_for(figures: &Figures, next: Option<&Figures>) -> String {
    let own = format!("{} bad, {} marginal", figures.bad, figures.marginal);
    let Some(next) = next else {
        return format!("last by the rule: {own}");
    };
    if figures.bad != next.bad {
        return format!("{own}: {} bad channels fewer than the next", next.bad - figures.bad);
    }
    if figures.marginal != next.marginal {
        return format!("{own}: {} marginal channels fewer than the next", next.marginal - figures.marginal);
    }
    let (margin, next_margin) = (figures.worst_margin_db, next.worst_margin_db);
    if steps(margin, 1.0) != steps(next_margin, 1.0) {
        let known = |value: Option<f64>| value.map_or_else(|| "unknown".to_owned(), |v| format!("{v:.1} dB"));
        return format!("{own}: worst margin {} against {}", known(margin), known(next_margin));
    }
    if share_steps(figures) != share_steps(next) {
        let known = |value: Option<f64>| value.map_or_else(|| "unknown".to_owned(), |v| format!("{v:.4}°"));
        return format!(
            "{own}: modulator phase error {} against {}",
            known(figures.modulator_phase_deg),
            known(next.modulator_phase_deg)
        );
    }
    if figures.shortest_sequence != next.shortest_sequence {
        let known = |value: &Option<num_bigint::BigUint>| {
            value.as_ref().map_or_else(|| "unknown".to_owned(), ToString::to_string)
        };
        return format!(
            "{own}: shortest sequence {} cycles against {}",
            known(&figures.shortest_sequence),
            known(&next.shortest_sequence)
        );
    }
    format!("{own}: as good as the next, with no more accumulator bits")
}

/// Returns what to take, and what would change that: a paragraph each, the choice first.
pub(super) fn recommendation(plan: &Plan, ranked: &[Ranked], gains: &[OrderGain]) -> Vec<String> {
    let Some(best) = ranked.first() else {
        return vec!["No option works on this plan.".to_owned()];
    };
    let mut choice = format!("Take {}", best.option.name());
    let planned = ModulatorOption { settings: plan.modulator.settings.clone(), modulus: plan.modulator.modulus };
    let own = ranked.iter().find(|entry| entry.option.runs_like(&planned));
    match own {
        Some(own) if own.place == 1 => choice.push_str(" (the plan's own)"),
        Some(own) => choice.push_str(&format!(
            " instead of the plan's own, which is number {} with {} bad and {} marginal channels",
            own.place, own.figures.bad, own.figures.marginal
        )),
        None => {}
    }
    let (bad, marginal) = (best.figures.bad, best.figures.marginal);
    choice.push_str(&format!(". On the sample it leaves {bad} bad and {marginal} marginal channels."));
    let mut paragraphs = vec![choice];
    if best.figures.bad > 0 {
        paragraphs.push(
            "What stays bad is not the modulator's doing alone: coupling at boundaries needs another reference or channel."
                .to_owned(),
        );
    }
    paragraphs.extend(gains.iter().filter(|gain| gain.order > 3).map(|gain| gain_sentence(gain, ranked)));
    paragraphs.push(
        "What would change the choice: a lower pump mismatch or an offset current beyond the kink (then the order decides only the shaped noise), a wider loop (favours lower orders), a divider that cannot span the outputs of a high order, or an anchor that shows more coupling."
            .to_owned(),
    );
    paragraphs
}

/// Returns what one order gains over order 3 and what it costs, from the computed figures.
fn gain_sentence(gain: &OrderGain, ranked: &[Ranked]) -> String {
    let mut text = format!(
        "Order {} lowers the mismatch tone at h = 1 by {:.1} dB against order 3; it costs outputs from {} to {} (order 3: -3 to 4) and {} VCO cycles of static offset to clear the pump's kink (order 3: 2)",
        gain.order, gain.gain_over_three_db, gain.output_range.0, gain.output_range.1, gain.clearing_offset_cycles
    );
    let phase = |order| {
        ranked
            .iter()
            .find(|entry| entry.option.is_plain_mash(order))
            .and_then(|entry| entry.figures.modulator_phase_deg)
    };
    match (phase(gain.order), phase(3)) {
        (Some(own), Some(third)) => {
            text.push_str(&format!(", and the modulator's phase error becomes {own:.3}° (order 3: {third:.3}°)."));
        }
        _ => text.push('.'),
    }
    text
}
