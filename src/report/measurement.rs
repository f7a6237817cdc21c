//! The list of things to measure: text, JSON, a page, and the table to fill in.

use askama::Template;

use super::columns::inert;
use super::figures::{decibel, with_prefix};
use super::json::json_text;
use super::policy::policy;
use super::{ReportError, ReportFile};
use crate::base::{Assumption, Exact, Frequency};
use crate::decide::measure_list::{Line, MeasureChannel, MeasureList};

/// Columns of the table to fill in; calibration reads the same.
pub const MEASURED_COLUMNS: [&str; 6] = ["channel", "offset", "level", "rbw", "note", "group"];

/// Returns a figure in hertz as a text with its unit that reads back exactly: to the millihertz.
///
/// # Errors
/// `NotFinite` for what is no frequency.
fn typed_hz(key: &str, hz: f64) -> Result<String, ReportError> {
    let refused = || ReportError::NotFinite { key: key.to_owned(), found: hz };
    if !hz.is_finite() || hz.abs() > 1e15 {
        return Err(refused());
    }
    #[allow(clippy::cast_possible_truncation, reason = "checked above: at most 1e18 millihertz")]
    let millihertz = (hz * 1e3).round() as i128;
    Exact::new(millihertz, 1000).map(|exact| Frequency::from_hz(exact).to_string()).map_err(|_| refused())
}

fn level(value: Option<f64>) -> String {
    value.map_or_else(|| "unknown".to_owned(), |level| format!("{} dBc", decibel(level)))
}

/// Returns what is expected of a line in words.
fn expectation(line: &Line) -> String {
    match (line.expected_dbc, line.known_part_dbc) {
        (Some(expected), _) => format!("expected {}", level(Some(expected))),
        (None, Some(part)) => format!("level unknown ({}), known part {}", line.unknown, level(Some(part))),
        (None, None) => format!("level unknown ({})", line.unknown),
    }
}

/// Returns a remark where the channel's own noise comes close to the tone or hides it; empty otherwise.
fn own_noise(line: &Line) -> String {
    match (line.in_own_noise, line.own_noise_dbc) {
        (Some(true), Some(noise)) => {
            format!(
                "; in the channel's own noise ({} in this RBW): an upper bound is all there is to read",
                level(Some(noise))
            )
        }
        _ => String::new(),
    }
}

/// Returns the length of the list in one sentence.
fn length(list: &MeasureList) -> String {
    let proof = if list.proven_shortest {
        "proven shortest: no list with fewer shows the same".to_owned()
    } else {
        format!("the search was cut off: no list has fewer than {}", list.lower_bound)
    };
    format!(
        "{} channels show {} of {} needs ({proof}).",
        list.channels.len(),
        list.needs_met,
        list.needs_met + list.not_coverable.len()
    )
}

fn word_line(channel: &MeasureChannel) -> String {
    let settings = &channel.settings;
    let number = |value: Option<u64>| value.map_or_else(|| "–".to_owned(), |value| value.to_string());
    format!(
        "N {}, K {}, M {}, output divider {}; reference {}, doubler {}, divider {}",
        number(settings.n),
        number(settings.k),
        number(settings.m),
        number(settings.output_divider),
        with_prefix(settings.reference_hz, "Hz", 10),
        if settings.doubler { "on" } else { "off" },
        settings.reference_divider
    )
}

/// Returns the list for a terminal.
#[must_use]
pub fn measure_text(list: &MeasureList) -> String {
    let mut text = format!("{}: what to measure. {}\n", list.title, length(list));
    for caution in list.cautions {
        text.push_str(&format!("caution: {caution}\n"));
    }
    for (place, channel) in list.channels.iter().enumerate() {
        text.push_str(&format!(
            "\n{:>2}. {} ({}), carrier at {}, {}\n    {}\n",
            place + 1,
            channel.channel,
            channel.group,
            with_prefix(channel.output_hz, "Hz", 10),
            channel.verdict.word(),
            word_line(channel)
        ));
        for line in &channel.lines {
            text.push_str(&format!(
                "    {} at {}: {}, limit {}; span {}, RBW {}, floor {}{}\n",
                line.label,
                with_prefix(line.offset_hz, "Hz", 8),
                expectation(line),
                line.limit_dbc.map_or_else(|| "none".to_owned(), |limit| level(Some(limit))),
                with_prefix(line.span_hz, "Hz", 4),
                with_prefix(line.rbw_hz, "Hz", 4),
                line.floor_dbc_per_hz
                    .map_or_else(|| "unknown".to_owned(), |floor| format!("{} dBc/Hz", decibel(floor))),
                own_noise(line)
            ));
        }
        for need in &channel.shows {
            text.push_str(&format!("    shows: {}\n", need.text));
        }
    }
    if !list.not_coverable.is_empty() {
        text.push_str("\nnot coverable by any channel of the plan:\n");
        for need in &list.not_coverable {
            text.push_str(&format!("  {}: {}\n", need.text, need.reason));
        }
    }
    text
}

/// Returns the text of `measure --json`.
///
/// # Errors
/// `NotFinite`, `Serialize`.
pub fn measure_json(list: &MeasureList) -> Result<String, ReportError> {
    json_text("measurement", list).map(|text| format!("{text}\n"))
}

/// Returns the table to fill in: levels are empty, everything else is there, units in the cells (RFC 4180, UTF-8).
fn measure_csv(list: &MeasureList) -> Result<Vec<u8>, ReportError> {
    let mut writer = csv::WriterBuilder::new().terminator(csv::Terminator::CRLF).from_writer(Vec::new());
    writer.write_record(MEASURED_COLUMNS)?;
    for channel in &list.channels {
        for line in &channel.lines {
            writer.write_record([
                channel.channel.to_string(),
                typed_hz("offset_hz", line.offset_hz)?,
                String::new(),
                typed_hz("rbw_hz", line.rbw_hz)?,
                inert(format!("{}, {}{}", line.label, expectation(line), own_noise(line))),
                inert(channel.group.clone()),
            ])?;
        }
    }
    writer.into_inner().map_err(|error| ReportError::Csv(error.into_error().into()))
}

/// One row of the page's table.
struct Row {
    channel: String,
    group: String,
    output: String,
    verdict: &'static str,
    label: String,
    cells: [String; 7],
}

#[derive(Template)]
#[template(path = "measure.html")]
struct Page<'a> {
    policy: String,
    css: String,
    title: &'a str,
    length: String,
    cautions: &'a [&'static str],
    rows: Vec<Row>,
    shows: Vec<(String, Vec<String>)>,
    not_coverable: Vec<(String, String)>,
    conventions: &'a [String],
    assumptions: &'a [Assumption],
    plan_sha256: &'a str,
    version: &'a str,
}

fn row(channel: &MeasureChannel, line: &Line) -> Row {
    let dash = |value: Option<f64>| value.map_or_else(|| "–".to_owned(), decibel);
    Row {
        channel: channel.channel.to_string(),
        group: channel.group.clone(),
        output: with_prefix(channel.output_hz, "Hz", 10),
        verdict: channel.verdict.word(),
        label: line.label.clone(),
        cells: [
            with_prefix(line.offset_hz, "Hz", 8),
            dash(line.expected_dbc),
            dash(line.limit_dbc),
            with_prefix(line.span_hz, "Hz", 4),
            with_prefix(line.rbw_hz, "Hz", 4),
            dash(line.own_noise_dbc),
            dash(line.floor_dbc_per_hz),
        ],
    }
}

fn page(list: &MeasureList) -> Result<String, ReportError> {
    let css = include_str!("templates/report.css").replace('\r', "");
    let page = Page {
        policy: policy(&css, None),
        title: &list.title,
        length: length(list),
        cautions: &list.cautions,
        rows: list
            .channels
            .iter()
            .flat_map(|channel| channel.lines.iter().map(move |line| row(channel, line)))
            .collect(),
        shows: list
            .channels
            .iter()
            .map(|channel| {
                let head = format!("{} ({}): {}", channel.channel, channel.group, word_line(channel));
                (head, channel.shows.iter().map(|need| need.text.clone()).collect())
            })
            .collect(),
        not_coverable: list.not_coverable.iter().map(|need| (need.text.clone(), need.reason.clone())).collect(),
        conventions: &list.conventions,
        assumptions: &list.assumptions,
        plan_sha256: &list.plan_sha256,
        version: list.version,
        css,
    };
    Ok(page.render()?)
}

/// Returns `measure.html`, `measure.csv` and `measure.json`.
///
/// # Errors
/// `ReportError` where a writer fails or a figure is not finite.
pub fn measure_files(list: &MeasureList) -> Result<Vec<ReportFile>, ReportError> {
    Ok(vec![
        ReportFile { path: "measure.html".into(), bytes: page(list)?.into_bytes() },
        ReportFile { path: "measure.csv".into(), bytes: measure_csv(list)? },
        ReportFile { path: "measure.json".into(), bytes: measure_json(list)?.into_bytes() },
    ])
}
