//! One channel for a terminal, and as JSON.

use serde::Serialize;

use super::json::json_text;
use super::plots::{budget_svg, offset_svg};
use super::{ReportError, ReportFile};
use crate::assess::{ChannelResult, OffsetSweep, SpectrumView, Tone};
use crate::base::{Assumption, Basis};
use crate::loop_model::NoiseBudget;
use crate::plan::Plan;

/// The spectrum part of `channel --json`.
#[derive(Serialize)]
struct ChannelSpectrum<'a> {
    offset_hz: &'a [f64],
    modulator_dbc_per_hz: &'a [Option<f64>],
    total_dbc_per_hz: &'a [Option<f64>],
}

/// Returns the text of `channel --json`; `spectrum` is null where the modulator stands still or there is no word.
///
/// # Errors
/// `NotFinite` with the key of a NaN or an infinity; `Serialize` for what JSON cannot express.
pub fn channel_json(
    channel: &ChannelResult,
    view: Option<&SpectrumView>,
    assumptions: &[Assumption],
) -> Result<String, ReportError> {
    let spectrum = view.map(|view| ChannelSpectrum {
        offset_hz: &view.offset_hz,
        modulator_dbc_per_hz: &view.modulator_dbc_per_hz,
        total_dbc_per_hz: &view.total_dbc_per_hz,
    });
    Ok(format!(
        "{{\n\"schema\": \"thornmap.channel/1\",\n\"channel\": {},\n\"spectrum\": {},\n\"assumptions\": {}\n}}\n",
        json_text("channel", channel)?,
        json_text("spectrum", &spectrum)?,
        json_text("assumptions", assumptions)?
    ))
}

/// Returns a figure with a fixed number of decimals, or "unknown".
fn figure(value: Option<f64>, decimals: usize, unit: &str) -> String {
    value.map_or_else(|| "unknown".to_owned(), |value| format!("{value:.decimals$} {unit}"))
}

/// Returns a whole number or a dash where there is none.
fn whole(value: Option<u64>) -> String {
    value.map_or_else(|| "-".to_owned(), |value| value.to_string())
}

/// Returns everything about a channel as text, verdict first, then its proof.
#[must_use]
pub fn channel_text(plan: &Plan, channel: &ChannelResult, assumptions: &[Assumption]) -> String {
    let mut text = format!(
        "{}, group \"{}\": channel {}, output {}\nverdict: {}\n",
        plan.identity.title,
        channel.group,
        channel.channel,
        channel.output,
        channel.verdict.word()
    );
    for reason in &channel.reasons {
        text.push_str(&format!("  {}  {}\n", reason.rule.name(), reason.text));
    }
    if channel.reasons.is_empty() {
        text.push_str("  no rule fired\n");
    }
    text.push_str(&word_lines(channel));
    text.push_str(&loop_lines(channel));
    text.push_str(&boundary_lines(channel));
    text.push_str(&tone_lines(channel));
    text.push_str(&noise_lines(channel));
    text.push_str("\nassumed, not given by the plan:\n");
    for assumption in assumptions.iter().filter(|a| matches!(a.basis, Basis::Default | Basis::Extrapolated)) {
        text.push_str(&format!("  {} = {} ({})\n", assumption.key, assumption.value, assumption.basis.word()));
    }
    text.push_str(
        "\nLevels are predictions in dBc at the output, one sideband; they are no compliance measurement. Transmitting\n\
         needs a licence and your local rules decide; verify on hardware.\n",
    );
    text
}

fn word_lines(channel: &ChannelResult) -> String {
    let mut text = String::from("\nword\n");
    text.push_str(&format!(
        "  N {}  K {}  M {}  (K/M = {}/{} reduced)\n",
        whole(channel.n),
        whole(channel.k),
        whole(channel.m),
        whole(channel.k_reduced),
        whole(channel.m_reduced)
    ));
    text.push_str(&format!(
        "  PFD frequency {} Hz, output divider {}, achieved {} (error {}, {})\n",
        channel.pfd_hz,
        whole(channel.output_divider),
        figure(channel.achieved_hz, 3, "Hz"),
        figure(channel.error_hz, 6, "Hz"),
        figure(channel.error_ppb, 4, "ppb")
    ));
    let period = channel.period.as_ref().map_or_else(|| "unknown".to_owned(), |period| format!("{period} PFD cycles"));
    let exact = if channel.period_is_exact { "exact" } else { "not proven" };
    text.push_str(&format!(
        "  sequence length {period} ({exact}), order {}, seeds {:?}\n",
        channel.order, channel.seeds
    ));
    for miss in &channel.illegal {
        text.push_str(&format!(
            "  not legal: {}: {} {} against {} {}, missed by {} {}\n",
            miss.limit, miss.value, miss.unit, miss.bound, miss.unit, miss.missed_by, miss.unit
        ));
    }
    text
}

fn loop_lines(channel: &ChannelResult) -> String {
    format!(
        "\nloop\n  unity gain {}, phase margin {}, closed-loop 3 dB {}, peaking {}\n  loop edge {}, guard {} (both on the tone offset, inclusive)\n",
        figure(channel.unity_gain_hz, 1, "Hz"),
        figure(channel.phase_margin_deg, 2, "deg"),
        figure(channel.closed_loop_3db_hz, 1, "Hz"),
        figure(channel.peaking_db, 2, "dB"),
        figure(channel.loop_edge_hz, 1, "Hz"),
        figure(channel.guard_hz, 1, "Hz")
    )
}

fn boundary_lines(channel: &ChannelResult) -> String {
    let mut text = String::from("\nboundaries within guard or loop edge\n");
    if channel.boundaries.is_empty() {
        text.push_str("  none\n");
    }
    for near in &channel.boundaries {
        text.push_str(&format!(
            "  {} {}/{}: tone offset {} Hz, VCO distance {:.3} Hz\n",
            near.family, near.p, near.q, near.tone_offset_hz, near.vco_distance_hz
        ));
    }
    if let Some(near) = &channel.boundary {
        text.push_str(&format!(
            "  nearest of the PFD frequency: {}/{} at {} Hz; proof: q*K mod M = {}*{} mod {}\n",
            near.p,
            near.q,
            near.tone_offset_hz,
            near.q,
            whole(channel.k),
            whole(channel.m)
        ));
    }
    text
}

fn tone_lines(channel: &ChannelResult) -> String {
    let mut text = format!(
        "\ntones ({} of unknown level, {} below the floor, method {})\n",
        channel.unknown_tones,
        channel.tones_below_floor,
        serde_json::to_value(channel.method).ok().and_then(|v| v.as_str().map(str::to_owned)).unwrap_or_default()
    );
    text.push_str("  offset [Hz]        level [dBc]        limit     margin  in loop  what\n");
    for tone in &channel.tones {
        text.push_str(&tone_line(tone));
    }
    text
}

fn tone_line(tone: &Tone) -> String {
    let level = match (tone.level_dbc, tone.known_level_dbc) {
        (Some(level), _) => format!("{level:.2}"),
        (None, Some(known)) => format!(">= {known:.2}"),
        (None, None) => "unknown".to_owned(),
    };
    let uncertainty =
        tone.level_uncertainty_db.filter(|u| *u >= 0.005).map_or_else(String::new, |u| format!(" +-{u:.2}"));
    let cell = |value: Option<f64>| value.map_or_else(|| "-".to_owned(), |value| format!("{value:.2}"));
    let mut line = format!(
        "  {:<16.3}  {:<17}  {:>7}  {:>8}  {:<7}  {}\n",
        tone.offset_hz,
        format!("{level}{uncertainty}"),
        cell(tone.limit_dbc),
        cell(tone.margin_db),
        if tone.inside_loop { "yes" } else { "no" },
        tone.label
    );
    let known: Vec<String> = tone.contributions.known().map(|(name, level)| format!("{name} {level:.2}")).collect();
    if !known.is_empty() {
        line.push_str(&format!("      parts [dBc]: {}\n", known.join(", ")));
    }
    if !tone.unknown.is_empty() {
        line.push_str(&format!("      unknown: {}\n", tone.unknown.join("; ")));
    }
    line
}

fn noise_lines(channel: &ChannelResult) -> String {
    let mut text = format!(
        "\nphase error (rms)\n  noise {}, with tones {}, known part {}\n  jitter {}, residual FM {}, EVM floor {} with tones, {} by noise alone\n",
        figure(channel.phase_error_deg, 4, "deg"),
        figure(channel.phase_error_with_tones_deg, 4, "deg"),
        figure(channel.phase_error_known_deg, 4, "deg"),
        figure(channel.jitter_s.map(|s| s * 1e12), 4, "ps"),
        figure(channel.residual_fm_hz, 2, "Hz"),
        figure(channel.evm_percent, 3, "%"),
        // EVM floor: 100 · rms phase in radians.
        figure(channel.phase_error_deg.map(|deg| 100.0 * deg.to_radians()), 3, "%")
    );
    if !channel.noise_unknown.is_empty() {
        text.push_str(&format!("  unknown: {}\n", channel.noise_unknown.join(", ")));
    }
    text
}

/// Returns the pictures of a channel, `budget.svg` and `offset.svg`, and `channel.json`.
///
/// # Errors
/// `ReportError` where drawing fails.
pub fn channel_files(
    channel: &ChannelResult,
    budget: Option<&NoiseBudget>,
    sweep: Option<&OffsetSweep>,
    json: &str,
) -> Result<Vec<ReportFile>, ReportError> {
    let pictures = [
        ("budget.svg", budget.map(|budget| budget_svg(channel, budget)).transpose()?.flatten()),
        ("offset.svg", sweep.map(offset_svg).transpose()?.flatten()),
    ];
    let mut files = vec![ReportFile { path: "channel.json".into(), bytes: json.as_bytes().to_vec() }];
    for (name, picture) in pictures {
        files.extend(picture.map(|svg| ReportFile { path: name.into(), bytes: svg.into_bytes() }));
    }
    Ok(files)
}

/// Returns what an offset current would do, in sentences.
#[must_use]
pub fn offset_text(sweep: &OffsetSweep) -> String {
    let at = |current_a: f64| {
        sweep.tried.iter().min_by(|a, b| (a.current_a - current_a).abs().total_cmp(&(b.current_a - current_a).abs()))
    };
    let level = |value: Option<f64>| match value {
        Some(value) if value > -150.0 => format!("{value:.1} dBc"),
        Some(_) => "below -150 dBc".to_owned(),
        None => "none above the tone floor".to_owned(),
    };
    let (Some(now), Some(clear)) = (at(0.0), at(sweep.clearing_a)) else { return String::new() };
    format!(
        "\noffset current\n  {:.4} uA ({} VCO cycles) keep the pump on one side of its kink\n  nonlinearity at h = 1: {} without, {} with it; reference tone: {} without, {} with it\n  known phase error {} without, {} with it\n",
        sweep.clearing_a * 1e6,
        sweep.clearing_cycles,
        level(now.nonlinearity_dbc),
        level(clear.nonlinearity_dbc),
        level(now.reference_dbc),
        level(clear.reference_dbc),
        figure(now.phase_error_known_deg, 4, "deg"),
        figure(clear.phase_error_known_deg, 4, "deg"),
    )
}
