//! One modulator run, or a captured one: text, JSON and a plot.

use serde_json::{Map, Value, json};

use super::ReportError;
use super::figures::with_prefix;
use super::json::json_text;
use super::plots::sequence_svg;
use crate::assess::{Capture, CaptureTone, Recognition, SeedTried, SequenceFacts, SequenceLine};
use crate::base::db_from_power;

/// Lines shown on a terminal.
const SHOWN_LINES: usize = 12;
/// Lines listed in the JSON output.
const LISTED_LINES: usize = 40;

/// What offsets are measured by.
#[derive(Debug, Clone, Copy, PartialEq, Default)]
pub struct OffsetScale {
    /// PFD frequency \[Hz\], where it is known; without it offsets are shares of it.
    pub rate_hz: Option<f64>,
    /// Loop edge \[Hz\], where it is known.
    pub edge_hz: Option<f64>,
}

/// Returns an offset given as a share of the PFD frequency, in Hz where that is known.
fn offset(share: f64, rate_hz: Option<f64>) -> String {
    match rate_hz {
        Some(rate_hz) => with_prefix(share * rate_hz, "Hz", 6),
        None => format!("{share:.9} f_pfd"),
    }
}

/// Returns a big integer or a fraction's part as JSON.
fn number(text: &str) -> Value {
    text.parse::<serde_json::Number>().map_or(Value::Null, Value::Number)
}

/// Returns the run for a terminal.
#[must_use]
pub fn sequence_text(facts: &SequenceFacts, scale: OffsetScale) -> String {
    let rate_hz = scale.rate_hz;
    let config = &facts.config;
    let seeds: Vec<String> = config.seeds().iter().map(u64::to_string).collect();
    let mut text = format!(
        "{} order {}, K/M = {}/{}, seeds {}, {}\n",
        config.structure().word(),
        config.order(),
        config.k(),
        config.modulus().get(),
        if seeds.is_empty() { "none".to_owned() } else { seeds.join(", ") },
        config.dither().words()
    );
    if config.is_held() {
        text.push_str("K = 0: the modulator is held, every output is 0 (runs at zero only where the plan says so)\n");
    }
    match &facts.period {
        Some(period) => {
            let exact = if facts.period_is_exact { "exact" } else { "not proven" };
            text.push_str(&format!(
                "period {period} PFD cycles ({exact}), after {} outputs of transient",
                facts.transient
            ));
            if let Ok(cycles) = period.to_string().parse::<f64>() {
                text.push_str(&format!("; lines lie {} apart", offset(1.0 / cycles, rate_hz)));
            }
            text.push('\n');
        }
        None => text.push_str("period unknown\n"),
    }
    match &facts.mean {
        Some(mean) => text.push_str(&format!("mean {}/{} exactly\n", mean.numerator(), mean.denominator())),
        None => text.push_str("mean unknown: the error filter does not vanish at zero frequency\n"),
    }
    text.push_str(&format!(
        "over {} outputs from index 0: {} to {}; histogram",
        facts.samples, facts.minimum, facts.maximum
    ));
    for (value, count) in &facts.histogram {
        text.push_str(&format!(" {value}: {count}"));
    }
    text.push_str(&format!("\nfirst {:?}\n", facts.first));
    if !facts.autocorrelation.is_empty() {
        let shown: Vec<String> = facts.autocorrelation.iter().take(8).map(|r| format!("{r:+.4}")).collect();
        text.push_str(&format!("autocorrelation of the outputs at lags 1 to 8: {}\n", shown.join(" ")));
    }
    if let Some(dither) = &facts.dither {
        text.push_str(&dither_text(dither, rate_hz));
    }
    text.push_str(&lines_text(facts, scale));
    text
}

fn dither_text(dither: &crate::assess::DitherFacts, rate_hz: Option<f64>) -> String {
    let whitens = if dither.can_whiten { "can" } else { "cannot (stage beyond order - 1)" };
    let mut text = format!(
        "{}: shifts the mean by {}/{}; it {whitens} whiten; own phase noise",
        dither.dither, dither.mean_shift.0, dither.mean_shift.1
    );
    for (share, level) in &dither.own_noise_dbc {
        let (level, unit) = match rate_hz {
            Some(rate_hz) => (level - db_from_power(rate_hz), "dBc/Hz"),
            None => (*level, "dBc/Hz less 10 log10(f_pfd/1 Hz)"),
        };
        text.push_str(&format!(" {level:.2} {unit} at {}", offset(*share, rate_hz)));
    }
    text.push('\n');
    text
}

fn lines_text(facts: &SequenceFacts, scale: OffsetScale) -> String {
    let Some(lines) = &facts.lines else {
        return "no exact lines: the period is too long or unknown; the plot shows the density\n".to_owned();
    };
    let sub_fractional = lines.iter().filter(|line| line.harmonic.is_none()).count();
    let mut text = format!(
        "lines of the phase error at the VCO before any loop: {}, of them {sub_fractional} sub-fractional\n",
        lines.len()
    );
    let within = scale.edge_hz.zip(scale.rate_hz).map(|(edge, rate)| edge / rate);
    let mut list = |title: &str, up_to_share: f64| {
        text.push_str(&format!("{title}\n"));
        let found = facts.strongest(SHOWN_LINES, up_to_share);
        if found.is_empty() {
            text.push_str("  none\n");
        }
        for line in found {
            let what = line.harmonic.map_or_else(|| "sub-fractional".to_owned(), |h| format!("{h} x K/M"));
            let at = offset(line.offset_share, scale.rate_hz);
            text.push_str(&format!("  {at:>22}  {:>8.2} dBc  {what}\n", line.level_dbc));
        }
    };
    if let Some(within) = within {
        list("strongest inside the loop edge:", within);
    }
    list("strongest:", 0.5);
    text
}

/// Returns the text of `sequence --json`.
///
/// # Errors
/// `NotFinite`, `Serialize`.
pub fn sequence_json(facts: &SequenceFacts, scale: OffsetScale, seeds: &[SeedTried]) -> Result<String, ReportError> {
    let rate_hz = scale.rate_hz;
    let config = &facts.config;
    let histogram: Map<String, Value> =
        facts.histogram.iter().map(|(value, count)| (value.to_string(), json!(count))).collect();
    let offsets = |share: f64| rate_hz.map(|rate_hz| share * rate_hz);
    let listed = |lines: Vec<&SequenceLine>| {
        json!(
            lines
                .into_iter()
                .map(|line| {
                    json!({
                        "bin": line.bin,
                        "offset_share": line.offset_share,
                        "offset_hz": offsets(line.offset_share),
                        "level_dbc": line.level_dbc,
                        "harmonic": line.harmonic,
                    })
                })
                .collect::<Vec<_>>()
        )
    };
    let mut document = json!({
        "schema": "thornmap.sequence/1",
        "structure": config.structure(),
        "order": config.order(),
        "k": config.k(),
        "m": config.modulus().get(),
        "seeds": config.seeds(),
        "dither": config.dither(),
        "period": facts.period.as_ref().map_or(Value::Null, |period| number(&period.to_string())),
        "period_is_exact": facts.period_is_exact,
        "transient": facts.transient,
        "mean": facts.mean.as_ref().map(|mean| json!({
            "numerator": number(&mean.numerator().to_string()),
            "denominator": number(&mean.denominator().to_string()),
        })),
        "samples": facts.samples,
        "minimum": facts.minimum,
        "maximum": facts.maximum,
        "histogram": histogram,
        "first": facts.first,
        "version": env!("CARGO_PKG_VERSION"),
        "pfd_hz": rate_hz,
        "convention": "levels of the accumulated phase error at the VCO before any loop, single sideband; offsets as shares of the PFD frequency, in Hz where that is given; without it densities are dBc/Hz times f_pfd in Hz",
        "autocorrelation": facts.autocorrelation,
        "line_count": facts.lines.as_ref().map(Vec::len),
        "sub_fractional_count":
            facts.lines.as_ref().map(|lines| lines.iter().filter(|line| line.harmonic.is_none()).count()),
        "lines": listed(facts.strongest(LISTED_LINES, 0.5)),
        "loop_edge_hz": scale.edge_hz,
        "lines_in_loop": match scale.edge_hz.zip(rate_hz) {
            Some((edge, rate)) => listed(facts.strongest(LISTED_LINES, edge / rate)),
            None => Value::Null,
        },
        "density": facts.density.iter().map(|(share, level)| json!({
            "offset_share": share,
            "offset_hz": offsets(*share),
            "level_dbc_per_hz": rate_hz.map(|rate_hz| level - db_from_power(rate_hz)),
            "level_dbc_times_pfd": level,
        })).collect::<Vec<_>>(),
        "dither_facts": facts.dither,
    });
    if !seeds.is_empty() {
        document["best_seeds"] = json!(seeds);
    }
    json_text("sequence", &document).map(|text| format!("{text}\n"))
}

/// Returns the best of the seeds tried.
#[must_use]
pub fn seeds_text(seeds: &[SeedTried], rate_hz: Option<f64>) -> String {
    let mut text =
        format!("{} first seeds tried; longest sequence first, then the lowest strongest line:\n", seeds.len());
    for tried in seeds.iter().take(10) {
        let period = tried.period.as_ref().map_or_else(|| "unknown".to_owned(), ToString::to_string);
        let line = tried.worst_line.as_ref().map_or_else(
            || "no exact line in reach".to_owned(),
            |line| format!("{:.2} dBc at {}", line.level_dbc, offset(line.offset_share, rate_hz)),
        );
        text.push_str(&format!("  seed {:>12}  period {period:>12}  {line}\n", tried.seed));
    }
    text
}

/// Returns the spectrum of a run as a picture of its own; `None` without lines or density.
///
/// # Errors
/// `ReportError` where drawing fails.
pub fn sequence_plot(facts: &SequenceFacts, rate_hz: Option<f64>) -> Result<Option<String>, ReportError> {
    sequence_svg(facts, rate_hz)
}

/// Returns a captured run for a terminal.
#[must_use]
pub fn capture_text(capture: &Capture, recognition: &Recognition, tones: Option<&[CaptureTone]>) -> String {
    let mut text = format!(
        "captured: {} values from {} to {}, mean {:.9} ± {:.2e} (if shaped)\n",
        capture.samples, capture.minimum, capture.maximum, capture.mean, capture.mean_uncertainty
    );
    match (capture.period, capture.period_mean) {
        (Some(period), Some((sum, over))) => {
            text.push_str(&format!("it repeats every {period} values; mean over them {sum}/{over} exactly\n"));
        }
        _ => text.push_str("it does not repeat within the capture\n"),
    }
    text.push_str(if recognition.matching {
        "matching: every value is that of\n"
    } else {
        "not matching any modulator tried"
    });
    if let Some(index) = recognition.first_difference {
        text.push_str(&format!("; the best agrees up to index {index}, the first that differs:\n"));
    }
    if recognition.found.is_empty() {
        text.push('\n');
    }
    for found in &recognition.found {
        let settings = &found.settings;
        text.push_str(&format!(
            "  {} order {}, K/M = {}/{}, seeds {:?}, {}{}\n",
            settings.structure.word(),
            settings.order,
            found.k,
            found.working_modulus,
            settings.seeds,
            settings.dither.words(),
            if found.integer == 0 { String::new() } else { format!(", N = {}", found.integer) }
        ));
    }
    text.push_str(&format!(
        "{} candidates tried; a run is known only from its first output, with seeds of zero, a first seed of 1, or those given\n",
        recognition.tried
    ));
    match tones {
        None => {}
        Some([]) => text.push_str("no tone of the channel's word within its search\n"),
        Some(tones) => {
            text.push_str("through the plan's detector and loop, at the output (windowed record, one sideband):\n");
            let level = |value: Option<f64>| value.map_or_else(|| "unknown".to_owned(), |v| format!("{v:.2} dBc"));
            for tone in tones {
                text.push_str(&format!(
                    "  {} x K/M at {:.3} Hz: modulator {}, nonlinearity {}\n",
                    tone.harmonic,
                    tone.offset_hz,
                    level(tone.modulator_dbc),
                    level(tone.nonlinearity_dbc)
                ));
            }
        }
    }
    text
}

/// Returns the text of `sequence --read … --json`.
///
/// # Errors
/// `NotFinite`, `Serialize`.
pub fn capture_json(
    capture: &Capture,
    recognition: &Recognition,
    tones: Option<&[CaptureTone]>,
) -> Result<String, ReportError> {
    let document = json!({
        "schema": "thornmap.capture/1",
        "version": env!("CARGO_PKG_VERSION"),
        "capture": capture,
        "recognition": recognition,
        "tones": tones,
    });
    json_text("capture", &document).map(|text| format!("{text}\n"))
}
