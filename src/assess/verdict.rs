//! The verdict: a total function of what is known about a channel (PHYSICS: rules B1–B4, M1–M5).

use crate::base::power_from_db;

use super::result::{Illegal, Origin, Reason, Rule, Tone, Verdict};

/// All that a verdict depends on; levels and limits at the output.
#[derive(Debug, Clone, Copy)]
pub struct Evidence<'a> {
    /// Limits that the channel's word misses; empty with a legal word.
    pub illegal: &'a [Illegal],
    /// Fractional numerator and modulus, where a word exists.
    pub word: Option<(u64, u64)>,
    /// Listed tones, each with its position flags, level and margin.
    pub tones: &'a [Tone],
    /// Highest harmonic that rule M3 looks at.
    pub harmonics: u64,
    /// Whether a mask judges the tones.
    pub mask: MaskState,
    /// Margin below a limit that is still "marginal", inclusive \[dB\].
    pub margin_db: f64,
    /// Limit on the phase error \[deg\].
    pub phase_limit_deg: Option<f64>,
    /// Phase error with tones \[deg\]; `None` when a source is unknown.
    pub phase_error_deg: Option<f64>,
    /// Phase error of the known sources with the known tones \[deg\].
    pub phase_error_known_deg: Option<f64>,
}

/// Whether tones are judged by a mask or by position alone.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum MaskState {
    /// A mask gives a limit at every offset.
    Given,
    /// Without a mask a known boundary or fractional tone inside the loop is above its limit.
    Absent,
}

/// Returns the worst state that any rule gives, and every rule that fired with its proof.
#[must_use]
pub fn judge(evidence: &Evidence) -> (Verdict, Vec<Reason>) {
    let mut reasons = Vec::new();
    if !evidence.illegal.is_empty() {
        reasons.push(no_legal_word(evidence));
    }
    for tone in evidence.tones {
        reasons.extend(judge_tone(evidence, tone));
    }
    reasons.extend(judge_phase_error(evidence));
    reasons.sort_by_key(|reason| reason.rule);
    let verdict = reasons.iter().map(|reason| reason.rule.verdict()).max().unwrap_or(Verdict::Clear);
    (verdict, reasons)
}

/// B1, with every limit that is missed.
fn no_legal_word(evidence: &Evidence) -> Reason {
    let limits: Vec<String> = evidence
        .illegal
        .iter()
        .map(|miss| {
            format!(
                "{} missed by {} (value {}, bound {})",
                miss.limit,
                with_unit(miss.missed_by, miss.unit),
                with_unit(miss.value, miss.unit),
                with_unit(miss.bound, miss.unit)
            )
        })
        .collect();
    Reason {
        rule: Rule::B1,
        text: format!("no legal word: {}", limits.join("; ")),
        k: evidence.word.map(|(k, _)| k),
        m: evidence.word.map(|(_, m)| m),
        q: None,
        residue: None,
        offset_hz: None,
    }
}

/// Returns a figure with its unit, engineering-scaled for hertz.
fn with_unit(value: f64, unit: &str) -> String {
    match unit {
        "Hz" => hertz(value),
        "" => format!("{value}"),
        other => format!("{value:.4} {other}"),
    }
}

/// Returns a frequency for a sentence: up to six significant decimals, trailing zeros dropped.
pub(super) fn hertz(value: f64) -> String {
    let (scale, unit) = match value.abs() {
        size if size >= 1e9 => (1e9, "GHz"),
        size if size >= 1e6 => (1e6, "MHz"),
        size if size >= 1e3 => (1e3, "kHz"),
        _ => (1.0, "Hz"),
    };
    let text = format!("{:.6}", value / scale);
    let text = text.trim_end_matches('0').trim_end_matches('.');
    format!("{text} {unit}")
}

/// B2, B3, M1, M2, M3 for one tone.
fn judge_tone(evidence: &Evidence, tone: &Tone) -> Option<Reason> {
    let reason = |rule, text: String| Reason {
        rule,
        text,
        k: evidence.word.map(|(k, _)| k),
        m: evidence.word.map(|(_, m)| m),
        q: tone.q.or(tone.harmonic),
        residue: tone.residue,
        offset_hz: Some(tone.offset_hz),
    };
    let hits = match tone.victims.as_slice() {
        [] => String::new(),
        victims => format!(" (hits {})", victims.join(", ")),
    };
    let place = format!("{} at {}{hits}", tone.label, hertz(tone.offset_hz));
    let of_modulator = matches!(tone.origin, Origin::Boundary | Origin::Fractional);
    let above = match (tone.known_level_dbc, tone.margin_db) {
        (None, _) => None,
        (Some(level), Some(margin)) if margin < 0.0 => {
            let part = if tone.level_dbc.is_some() { "" } else { " (known part alone)" };
            Some(format!("{place}: {level:.1} dBc{part}, {:.1} dB above its limit", -margin))
        }
        (Some(level), _) => {
            (evidence.mask == MaskState::Absent && tone.inside_loop && of_modulator && tone.family_known)
                .then(|| format!("{place}: {level:.1} dBc inside the loop, where no mask allows a tone"))
        }
    };
    if let Some(text) = above {
        return Some(reason(Rule::B2, text));
    }
    let Some(level) = tone.level_dbc else {
        let why = tone.unknown.join(", ");
        let rule = if tone.inside_guard && !tone.after_loop {
            Rule::B3
        } else if tone.inside_guard || tone.inside_loop {
            Rule::M2
        } else {
            return None;
        };
        let zone = if tone.inside_guard { "inside the guard" } else { "between guard and loop edge" };
        return Some(reason(rule, format!("{place}: level unknown ({why}), {zone}")));
    };
    match tone.margin_db {
        Some(margin) if margin <= evidence.margin_db => {
            Some(reason(Rule::M1, format!("{place}: {level:.1} dBc, only {margin:.1} dB below its limit")))
        }
        margin => {
            let judged = of_modulator || tone.origin == Origin::Clock;
            let low = tone.harmonic.is_some_and(|harmonic| harmonic <= evidence.harmonics);
            let text = margin.map_or_else(String::new, |m| format!(", {m:.1} dB below its limit"));
            (tone.inside_loop && judged && low)
                .then(|| reason(Rule::M3, format!("{place}: {level:.1} dBc inside the loop{text}")))
        }
    }
}

/// B4, M4, M5.
fn judge_phase_error(evidence: &Evidence) -> Option<Reason> {
    let limit = evidence.phase_limit_deg?;
    let reason = |rule, text| Some(Reason { rule, text, k: None, m: None, q: None, residue: None, offset_hz: None });
    if let Some(error) = evidence.phase_error_deg {
        if error > limit {
            return reason(Rule::B4, format!("phase error with tones {error:.3}° rms, limit {limit}°"));
        }
        let marginal_from = limit * power_from_db(-evidence.margin_db).sqrt();
        if error >= marginal_from {
            return reason(
                Rule::M4,
                format!("phase error with tones {error:.3}° rms, limit {limit}°, marginal from {marginal_from:.3}°"),
            );
        }
        return None;
    }
    if let Some(known) = evidence.phase_error_known_deg.filter(|known| *known > limit) {
        return reason(Rule::B4, format!("the known part of the phase error is {known:.3}° rms, limit {limit}°"));
    }
    reason(Rule::M5, format!("phase error limit {limit}° cannot be judged: a noise source or a tone is unknown"))
}
