//! The words of a plan for firmware: JSON, and one CSV table with a row for each channel, vector, range and note.

use super::columns::{inert, word};
use super::json::json_text;
use super::{ReportError, firmware_c::c_header};
use crate::decide::export::{DriverWord, Export, ExportChannel, FIELDS, RoundedHz, TestVector};

/// A format of the export.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum FirmwareFormat {
    /// A C99 header.
    CHeader,
    /// One CSV table.
    Csv,
    /// JSON.
    Json,
}

/// Returns the bytes of an export in a format.
///
/// # Errors
/// `NotFinite`, `Serialize`, `Csv` where a writer fails.
pub fn firmware_bytes(export: &Export, format: FirmwareFormat) -> Result<Vec<u8>, ReportError> {
    match format {
        FirmwareFormat::CHeader => Ok(c_header(export).into_bytes()),
        FirmwareFormat::Csv => firmware_csv(export),
        FirmwareFormat::Json => json_text("export", export).map(|text| format!("{text}\n").into_bytes()),
    }
}

/// Cells before the fields of the word.
const HEAD: [&str; 14] = [
    "row",
    "name",
    "group",
    "index",
    "channel_hz",
    "channel_millihertz",
    "channel_exact",
    "stop_hz",
    "stop_millihertz",
    "stop_exact",
    "legal",
    "on_raster",
    "verdict",
    "rules",
];
/// Cells after the fields of the word; register values follow.
const TAIL: [&str; 4] = ["achieved_hz", "achieved_millihertz", "achieved_exact", "text"];

/// One row of the table; what does not apply is empty.
#[derive(Default)]
struct Row {
    head: [String; HEAD.len()],
    word: Option<DriverWord>,
    tail: [String; TAIL.len()],
    registers: Option<Vec<u64>>,
}

fn firmware_csv(export: &Export) -> Result<Vec<u8>, ReportError> {
    let mut writer = csv::WriterBuilder::new().terminator(csv::Terminator::CRLF).from_writer(Vec::new());
    let registers: Vec<String> = export
        .registers
        .iter()
        .flat_map(|values| &values.registers)
        .map(|register| inert(format!("register {}", register.name)))
        .collect();
    let names = HEAD.into_iter().chain(FIELDS.iter().map(|field| field.name)).chain(TAIL);
    writer.write_record(names.chain(registers.iter().map(String::as_str)))?;
    for row in rows(export) {
        let fields = FIELDS.iter().map(|field| row.word.as_ref().map(|word| (field.value)(word).to_string()));
        let values = (0..registers.len())
            .map(|place| row.registers.as_ref().and_then(|values| values.get(place)).map(u64::to_string));
        let cells =
            row.head.iter().cloned().chain(fields.map(Option::unwrap_or_default)).chain(row.tail.iter().cloned());
        writer.write_record(cells.chain(values.map(Option::unwrap_or_default)))?;
    }
    writer.into_inner().map_err(|error| ReportError::Csv(error.into_error().into()))
}

/// Returns every row: notes, channels, avoided ranges, vectors.
fn rows(export: &Export) -> Vec<Row> {
    let note = |name: &str, text: &str| Row {
        head: head([("row", "note".to_owned()), ("name", name.to_owned())]),
        tail: [String::new(), String::new(), String::new(), inert(text.to_owned())],
        ..Row::default()
    };
    let mut rows = vec![
        note("schema", export.schema),
        note("version", export.version),
        note("plan_sha256", &export.plan_sha256),
        note("title", &export.title),
        note("structure", export.structure),
        note("pfd_exact", &word(&export.pfd_exact)),
        note("caution", export.caution),
    ];
    for (place, reference) in export.references_exact.iter().enumerate() {
        rows.push(note(&format!("reference {place}"), &word(reference)));
    }
    rows.extend(export.rounding.iter().map(|sentence| note("rounding", sentence)));
    rows.extend(export.vectors_missing.iter().map(|sentence| note("missing vector", sentence)));
    for (place, channel) in export.channels.iter().enumerate() {
        let values = export.registers.as_ref().and_then(|registers| registers.channels.get(place).cloned().flatten());
        rows.push(channel_row(channel, values));
    }
    for range in &export.avoided {
        rows.push(Row {
            head: head([
                ("row", "avoided".to_owned()),
                ("group", inert(range.group.clone())),
                ("channel_hz", range.start_rounded.hz.to_string()),
                ("channel_millihertz", range.start_rounded.millihertz.to_string()),
                ("channel_exact", word(&range.start)),
                ("stop_hz", range.stop_rounded.hz.to_string()),
                ("stop_millihertz", range.stop_rounded.millihertz.to_string()),
                ("stop_exact", word(&range.stop)),
                ("verdict", "bad".to_owned()),
                ("rules", range.rules.join(" ")),
            ]),
            tail: [String::new(), String::new(), String::new(), inert(range.reason.clone())],
            ..Row::default()
        });
    }
    for (place, vector) in export.vectors.iter().enumerate() {
        let values = export.registers.as_ref().and_then(|registers| registers.vectors.get(place).cloned());
        rows.push(vector_row(vector, values));
    }
    rows
}

/// Returns the leading cells of a row from those that apply.
fn head<const N: usize>(cells: [(&str, String); N]) -> [String; HEAD.len()] {
    let mut row: [String; HEAD.len()] = Default::default();
    for (name, cell) in cells {
        if let Some(place) = HEAD.iter().position(|known| *known == name) {
            row[place] = cell;
        }
    }
    row
}

fn channel_row(channel: &ExportChannel, registers: Option<Vec<u64>>) -> Row {
    Row {
        head: head([
            ("row", "channel".to_owned()),
            ("group", inert(channel.group.clone())),
            ("index", channel.index.to_string()),
            ("channel_hz", channel.channel_rounded.hz.to_string()),
            ("channel_millihertz", channel.channel_rounded.millihertz.to_string()),
            ("channel_exact", word(&channel.channel)),
            ("legal", channel.legal.to_string()),
            ("on_raster", "true".to_owned()),
            ("verdict", channel.verdict.word().to_owned()),
            ("rules", channel.rules.iter().map(|rule| rule.name()).collect::<Vec<_>>().join(" ")),
        ]),
        word: channel.word.clone(),
        tail: achieved(channel.achieved_rounded, channel.achieved.map_or_else(String::new, |exact| word(&exact))),
        registers,
    }
}

fn vector_row(vector: &TestVector, registers: Option<Vec<u64>>) -> Row {
    Row {
        head: head([
            ("row", "vector".to_owned()),
            ("name", vector.name.clone()),
            ("group", inert(vector.group.clone())),
            ("channel_hz", vector.channel_rounded.hz.to_string()),
            ("channel_millihertz", vector.channel_rounded.millihertz.to_string()),
            ("channel_exact", word(&vector.channel)),
            ("legal", vector.legal.to_string()),
            ("on_raster", vector.on_raster.to_string()),
        ]),
        word: Some(vector.word.clone()),
        tail: achieved(Some(vector.achieved_rounded), word(&vector.achieved)),
        registers,
    }
}

fn achieved(rounded: Option<RoundedHz>, exact: String) -> [String; TAIL.len()] {
    let part = |of: fn(RoundedHz) -> i128| rounded.map_or_else(String::new, |value| of(value).to_string());
    [part(|value| value.hz), part(|value| value.millihertz), exact, String::new()]
}
