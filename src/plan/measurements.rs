//! Measured tones from a table: csv with a head, `;` with decimal commas accepted.

use crate::base::{Dimension, Frequency, parse_quantity};

/// One measured tone.
#[derive(Debug, Clone, PartialEq)]
pub struct Measured {
    /// Line in the file, from 1.
    pub line: usize,
    /// Channel, before injection.
    pub channel: Frequency,
    /// Offset from the carrier, positive.
    pub offset: Frequency,
    /// Level \[dBc\]; an upper bound where `is_bound`.
    pub level_dbc: f64,
    /// Whether nothing was seen above the level.
    pub is_bound: bool,
    /// Resolution bandwidth \[Hz\], where it is given.
    pub rbw_hz: Option<f64>,
    /// Channel group, where it is given.
    pub group: Option<String>,
}

/// One thing wrong in a table of measurements.
#[derive(Debug, Clone, PartialEq, Eq, thiserror::Error)]
#[error("line {line}, column {column}: {text}")]
pub struct MeasuredProblem {
    /// Line from 1.
    pub line: usize,
    /// Name of the column.
    pub column: String,
    /// What was found and what is due.
    pub text: String,
}

/// Columns that are read; the first three are required.
const COLUMNS: [&str; 6] = ["channel", "offset", "level", "rbw", "note", "group"];

/// Returns the measured rows of a table; rows without a level were not measured and are left out.
///
/// # Errors
/// Every problem, in file order.
///
/// # Examples
/// ```
/// let text = "channel;offset;level\n433,2 MHz;7,5 kHz;< -80 dBc\n";
/// let rows = thornmap::plan::parse_measurements(text).unwrap();
/// assert!(rows[0].is_bound && rows[0].level_dbc == -80.0);
/// ```
pub fn parse_measurements(text: &str) -> Result<Vec<Measured>, Vec<MeasuredProblem>> {
    let text = text.strip_prefix('\u{feff}').unwrap_or(text);
    let head = text.lines().find(|line| !line.trim().is_empty()).unwrap_or_default();
    let separator = if head.contains(';') { b';' } else { b',' };
    let mut reader =
        csv::ReaderBuilder::new().delimiter(separator).flexible(true).trim(csv::Trim::All).from_reader(text.as_bytes());
    let problem = |line: usize, column: &str, text: String| MeasuredProblem { line, column: column.to_owned(), text };
    let head = match reader.headers() {
        Ok(head) => head.clone(),
        Err(error) => return Err(vec![problem(1, "-", error.to_string())]),
    };
    let place = |name: &str| head.iter().position(|cell| cell.eq_ignore_ascii_case(name));
    let missing: Vec<MeasuredProblem> = COLUMNS[..3]
        .iter()
        .filter(|name| place(name).is_none())
        .map(|name| {
            let found = head.iter().collect::<Vec<_>>().join(", ");
            problem(1, name, format!("missing; found the columns {found}, known are {}", COLUMNS.join(", ")))
        })
        .collect();
    if !missing.is_empty() {
        return Err(missing);
    }
    let mut rows = Vec::new();
    let mut problems = Vec::new();
    for (index, record) in reader.records().enumerate() {
        let record = match record {
            Ok(record) => record,
            Err(error) => {
                problems.push(problem(index + 2, "-", error.to_string()));
                continue;
            }
        };
        let line = record.position().map_or(index + 2, |at| usize::try_from(at.line()).unwrap_or(index + 2));
        let cell = |name: &str| {
            let cell = place(name).and_then(|i| record.get(i)).unwrap_or_default();
            // Spreadsheets may have been told that it is text.
            cell.strip_prefix('\'').unwrap_or(cell).trim().to_owned()
        };
        let level = cell("level");
        if level.is_empty() {
            continue;
        }
        let mut quantity = |name: &str, typed: &str, dimension| {
            let typed = if separator == b';' { typed.replace(',', ".") } else { typed.to_owned() };
            parse_quantity(&typed, dimension)
                .map_err(|error| problems.push(problem(line, name, error.to_string())))
                .ok()
        };
        let channel = quantity("channel", &cell("channel"), Dimension::Frequency);
        let offset = quantity("offset", &cell("offset"), Dimension::Frequency);
        let (is_bound, shown) = level.strip_prefix('<').map_or((false, level.as_str()), |rest| (true, rest.trim()));
        let level = quantity("level", shown, Dimension::Level);
        let typed = cell("rbw");
        let rbw = if typed.is_empty() { None } else { quantity("rbw", &typed, Dimension::Frequency) };
        if let (Some(channel), Some(offset), Some(level)) = (channel, offset, level) {
            if offset.sign() <= 0 {
                problems.push(problem(line, "offset", "must be above zero".to_owned()));
                continue;
            }
            rows.push(Measured {
                line,
                channel: Frequency::from_hz(channel),
                offset: Frequency::from_hz(offset),
                level_dbc: level.to_f64(),
                is_bound,
                rbw_hz: rbw.map(|rbw| rbw.to_f64()),
                group: Some(cell("group")).filter(|group| !group.is_empty()),
            });
        }
    }
    if problems.is_empty() { Ok(rows) } else { Err(problems) }
}
