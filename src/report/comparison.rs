//! Modulators compared: text, CSV, JSON and a page from one result.

use askama::Template;
use num_bigint::BigUint;
use serde_json::json;

use super::json::json_text;
use super::policy::policy;
use super::{ReportError, ReportFile};
use crate::base::Assumption;
use crate::decide::compare::{Comparison, RANKING_RULE, Ranked};
use crate::plan::Plan;

/// The columns of every table: name in the CSV, heading for readers, cell.
type Column = (&'static str, &'static str, fn(&Ranked) -> String);

const COLUMNS: [Column; 15] = [
    ("option", "Option", |r| r.option.name()),
    ("bad", "Bad", |r| r.figures.bad.to_string()),
    ("marginal", "Marginal", |r| r.figures.marginal.to_string()),
    ("clear", "Clear", |r| r.figures.clear.to_string()),
    ("worst_margin_db", "Worst margin [dB]", |r| figure(r.figures.worst_margin_db, 2)),
    ("worst_in_loop_dbc", "Strongest own line in the loop [dBc]", |r| figure(r.figures.worst_in_loop_dbc, 1)),
    ("modulator_phase_deg", "Modulator phase error [deg]", |r| figure(r.figures.modulator_phase_deg, 4)),
    ("in_loop_noise_dbc_per_hz", "Modulator noise in the loop [dBc/Hz]", |r| {
        figure(r.figures.in_loop_noise_dbc_per_hz, 1)
    }),
    ("known_phase_error_deg", "Known phase error [deg]", |r| figure(r.figures.known_phase_error_deg, 4)),
    ("phase_error_deg", "Phase error [deg]", |r| figure(r.figures.phase_error_deg, 4)),
    ("shortest_sequence", "Shortest sequence [cycles]", |r| {
        r.figures.shortest_sequence.as_ref().map_or_else(String::new, ToString::to_string)
    }),
    ("output_range", "Outputs", |r| format!("{} to {}", r.figures.output_range.0, r.figures.output_range.1)),
    ("smallest_n", "Smallest N", |r| r.figures.usable_n.0.map_or_else(String::new, |n| n.to_string())),
    ("largest_n", "Largest N", |r| r.figures.usable_n.1.map_or_else(String::new, |n| n.to_string())),
    ("accumulator_bits", "Accumulator bits", |r| r.option.accumulator_bits().to_string()),
];

/// Returns a figure with so many decimals; empty where unknown.
fn figure(value: Option<f64>, decimals: usize) -> String {
    value.map_or_else(String::new, |value| format!("{value:.decimals$}"))
}

/// Returns a cell for readers: unknown is said.
fn for_readers(cell: String) -> String {
    if cell.is_empty() { "unknown".to_owned() } else { cell }
}

/// Returns a length of a sequence in a narrow column; a long one in powers of ten.
fn short_length(length: &BigUint) -> String {
    let digits = length.to_string();
    if digits.len() <= 12 { digits } else { format!("{}.{}e{}", &digits[..1], &digits[1..3], digits.len() - 1) }
}

/// Returns the sample in a sentence.
fn sample(comparison: &Comparison) -> String {
    let sample = &comparison.sample;
    format!("Tried on {} of {} channels ({}).", sample.channels, sample.of, sample.rule)
}

/// Returns the comparison for a terminal.
#[must_use]
pub fn comparison_text(plan: &Plan, comparison: &Comparison) -> String {
    let mut text =
        format!("{}: modulators compared. {}\nranking: {RANKING_RULE}\n", plan.identity.title, sample(comparison));
    text.push_str(
        "\n          bad  marg.  clear  worst margin  line in loop  mod. phase  shortest sequence     outputs  bits\n",
    );
    let dash = |cell: String| if cell.is_empty() { "-".to_owned() } else { cell };
    for entry in &comparison.ranked {
        let figures = &entry.figures;
        text.push_str(&format!("{:>2}. {}\n", entry.place, entry.option.name()));
        text.push_str(&format!(
            "    {:>9} {:>6} {:>6} {:>10} dB {:>9} dBc {:>7} deg {:>18} {:>11} {:>5}\n",
            figures.bad,
            figures.marginal,
            figures.clear,
            dash(figure(figures.worst_margin_db, 1)),
            dash(figure(figures.worst_in_loop_dbc, 1)),
            dash(figure(figures.modulator_phase_deg, 3)),
            figures.shortest_sequence.as_ref().map_or_else(|| "-".to_owned(), short_length),
            format!("{} to {}", figures.output_range.0, figures.output_range.1),
            entry.option.accumulator_bits(),
        ));
        text.push_str(&format!("    {}\n", entry.reason));
    }
    for refused in &comparison.refused {
        text.push_str(&format!("\nnot possible: {}: {}\n", refused.option.name(), refused.reason));
    }
    text.push_str(&format!("\n{}\n", comparison.recommendation.join("\n")));
    text
}

/// Returns the text of `compare --json`.
///
/// # Errors
/// `NotFinite`, `Serialize`.
pub fn comparison_json(plan: &Plan, comparison: &Comparison) -> Result<String, ReportError> {
    let ranked: Vec<_> = comparison
        .ranked
        .iter()
        .map(|entry| {
            json!({
                "place": entry.place,
                "option": entry.option.name(),
                "settings": entry.option,
                "accumulator_bits": entry.option.accumulator_bits(),
                "figures": entry.figures,
                "reason": entry.reason,
            })
        })
        .collect();
    let refused: Vec<_> = comparison
        .refused
        .iter()
        .map(|refused| json!({ "option": refused.option.name(), "reason": refused.reason }))
        .collect();
    let document = json!({
        "schema": "thornmap.comparison/1",
        "version": env!("CARGO_PKG_VERSION"),
        "plan_sha256": plan.sha256,
        "assumptions": comparison.assumptions,
        "sample": comparison.sample,
        "ranking": RANKING_RULE,
        "ranked": ranked,
        "refused": refused,
        "order_gains": comparison.order_gains,
        "recommendation": comparison.recommendation,
    });
    json_text("comparison", &document).map(|text| format!("{text}\n"))
}

fn comparison_csv(comparison: &Comparison) -> Result<Vec<u8>, ReportError> {
    let mut writer = csv::WriterBuilder::new().terminator(csv::Terminator::CRLF).from_writer(Vec::new());
    let head = ["place"].into_iter().chain(COLUMNS.iter().map(|(name, ..)| *name)).chain(["reason"]);
    writer.write_record(head)?;
    for entry in &comparison.ranked {
        let place = entry.place.to_string();
        let cells = COLUMNS.iter().map(|(.., cell)| cell(entry));
        writer.write_record(std::iter::once(place).chain(cells).chain([entry.reason.clone()]))?;
    }
    writer.into_inner().map_err(|error| ReportError::Csv(error.into_error().into()))
}

/// One row of the page's table.
struct Row {
    place: usize,
    cells: Vec<String>,
    reason: String,
}

#[derive(Template)]
#[template(path = "comparison.html")]
struct Page<'a> {
    policy: String,
    css: String,
    title: &'a str,
    recommendation: &'a [String],
    sample: String,
    rule: &'a str,
    columns: Vec<&'static str>,
    rows: Vec<Row>,
    refused: Vec<String>,
    mismatch: String,
    orders: Vec<Vec<String>>,
    assumptions: &'a [Assumption],
    plan_sha256: &'a str,
    version: &'a str,
}

fn page(plan: &Plan, comparison: &Comparison) -> Result<String, ReportError> {
    let css = include_str!("templates/report.css").replace('\r', "");
    let dash = |value: Option<f64>| value.map_or_else(|| "–".to_owned(), |value| format!("{value:.2}"));
    let page = Page {
        policy: policy(&css, None),
        title: &plan.identity.title,
        recommendation: &comparison.recommendation,
        sample: sample(comparison),
        rule: RANKING_RULE,
        columns: COLUMNS.iter().map(|(_, heading, _)| *heading).collect(),
        rows: comparison
            .ranked
            .iter()
            .map(|entry| Row {
                place: entry.place,
                cells: COLUMNS.iter().map(|(.., cell)| for_readers(cell(entry))).collect(),
                reason: entry.reason.clone(),
            })
            .collect(),
        refused: comparison.refused.iter().map(|r| format!("{}: {}", r.option.name(), r.reason)).collect(),
        mismatch: comparison
            .order_gains
            .first()
            .map_or_else(String::new, |gain| format!("{} %", gain.mismatch * 100.0)),
        orders: comparison
            .order_gains
            .iter()
            .map(|gain| {
                let mut row = vec![gain.order.to_string()];
                row.extend(gain.tones_dbc.iter().map(|tone| dash(*tone)));
                row.push(format!("{:.2}", gain.gain_over_three_db));
                row.push(format!("{} to {}", gain.output_range.0, gain.output_range.1));
                row.push(gain.clearing_offset_cycles.to_string());
                row
            })
            .collect(),
        assumptions: &comparison.assumptions,
        plan_sha256: &plan.sha256,
        version: env!("CARGO_PKG_VERSION"),
        css,
    };
    Ok(page.render()?)
}

/// Returns `compare.html`, `compare.csv` and `compare.json`.
///
/// # Errors
/// `ReportError` where a writer fails or a figure is not finite.
pub fn comparison_files(plan: &Plan, comparison: &Comparison) -> Result<Vec<ReportFile>, ReportError> {
    Ok(vec![
        ReportFile { path: "compare.html".into(), bytes: page(plan, comparison)?.into_bytes() },
        ReportFile { path: "compare.csv".into(), bytes: comparison_csv(comparison)? },
        ReportFile { path: "compare.json".into(), bytes: comparison_json(plan, comparison)?.into_bytes() },
    ])
}
