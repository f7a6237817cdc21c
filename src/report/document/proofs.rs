//! The proof of a verdict: the integers, line by line, so that it can be done again by hand.

use crate::assess::{ChannelResult, Reason};
use crate::plan::Plan;
use crate::report::figures::{signed, significant, with_prefix};

/// Reasons that a proof tells in full; the rest is in survey.json.
const MOST_REASONS: usize = 8;

/// The proof of one channel.
pub(crate) struct Proof {
    pub channel: String,
    pub group: String,
    pub verdict: &'static str,
    pub lines: Vec<String>,
}

/// Returns the proof of a channel's verdict.
pub(super) fn proof(channel: &ChannelResult, plan: &Plan) -> Proof {
    let mut lines = vec![pfd_line(channel), output_line(channel)];
    lines.extend(word_line(channel));
    for miss in &channel.illegal {
        lines.push(format!(
            "{}: {} {u} against {} {u} (inclusive), missed by {} {u}",
            miss.limit,
            signed(&miss.value.to_string()),
            signed(&miss.bound.to_string()),
            signed(&miss.missed_by.to_string()),
            u = miss.unit
        ));
    }
    let edges = [("guard", channel.guard_hz), ("loop edge", channel.loop_edge_hz)];
    let edges: Vec<String> =
        edges.iter().filter_map(|(name, hz)| Some(format!("{name} {}", with_prefix((*hz)?, "Hz", 8)))).collect();
    if !edges.is_empty() {
        lines.push(format!("{}; both inclusive", edges.join(", ")));
    }
    for reason in channel.reasons.iter().take(MOST_REASONS) {
        lines.push(reason_line(reason, channel.pfd_hz));
    }
    if channel.reasons.len() > MOST_REASONS {
        lines.push(format!("and {} more in survey.json", channel.reasons.len() - MOST_REASONS));
    }
    if let (Some(best), Some(worst)) = (channel.verdict_best, channel.verdict_worst) {
        let tolerance = plan.reference.tolerance.map_or_else(String::new, |_| " of reference and level".to_owned());
        lines.push(format!("within the tolerances{tolerance}: {} at best, {} at worst", best.word(), worst.word()));
    }
    Proof { channel: channel.channel.to_string(), group: channel.group.clone(), verdict: channel.verdict.word(), lines }
}

/// Returns a frequency in hertz, every digit that a double holds.
fn hertz(hz: f64) -> String {
    signed(&format!("{hz} Hz"))
}

fn pfd_line(channel: &ChannelResult) -> String {
    format!(
        "PFD frequency = reference × D / R = {} × {} / {} = {}",
        hertz(channel.reference_hz),
        1 + u8::from(channel.doubler),
        channel.reference_divider,
        hertz(channel.pfd_hz)
    )
}

fn output_line(channel: &ChannelResult) -> String {
    // What is wanted of the VCO; the word comes as close as its line says.
    let vco = channel.output_divider.map_or_else(String::new, |divider| {
        format!("; wanted of the VCO: {divider} × output = {}", hertz(divider as f64 * channel.output_hz))
    });
    format!(
        "output = channel + injection = {} + {} = {}{vco}",
        hertz(channel.channel_hz),
        hertz(channel.injection_hz),
        hertz(channel.output_hz)
    )
}

fn word_line(channel: &ChannelResult) -> Option<String> {
    let (n, k, m) = (channel.n?, channel.k?, channel.m?);
    let divider = channel.output_divider?;
    Some(format!(
        "word: N = {n}, K = {k}, M = {m}; achieved output = PFD frequency × (N + K/M) / {divider} = {}, error {} Hz",
        channel.achieved_hz.map_or_else(|| "unknown".to_owned(), hertz),
        channel.error_hz.map_or_else(|| "unknown".to_owned(), |hz| significant(hz, 6))
    ))
}

fn reason_line(reason: &Reason, pfd_hz: f64) -> String {
    let mut line = format!("{}: {}", reason.rule.name(), reason.text);
    if let (Some(q), Some(k), Some(m), Some(residue), Some(offset_hz)) =
        (reason.q, reason.k, reason.m, reason.residue, reason.offset_hz)
    {
        line.push_str(&format!(
            "; {q} × {k} = {} (mod {m}), tone offset = {} / {m} × {} = {}",
            signed(&residue.to_string()),
            residue.unsigned_abs(),
            hertz(pfd_hz),
            hertz(offset_hz)
        ));
    }
    line
}
