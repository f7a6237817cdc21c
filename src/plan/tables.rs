//! Tables that a plan names: csv files beside it.

use crate::base::{Dimension, Frequency, parse_quantity};

use super::reader::{Located, Reader};

/// How a file beside the plan is read: its whole text, or why not, in words.
pub type Load<'a> = &'a dyn Fn(&str) -> Result<String, String>;

/// Rows of a csv file: strict about the header, comma or semicolon between cells.
fn rows(
    reader: &mut Reader,
    key: &str,
    file: &Located<String>,
    load: Load,
    columns: &[&str],
) -> Option<Vec<(u64, Vec<String>)>> {
    let text = match load(&file.value) {
        Ok(text) => text,
        Err(reason) => {
            reader.problem(key, &file.span, format!("\"{}\" cannot be read: {reason}", file.value));
            return None;
        }
    };
    let separator = if text.lines().next().is_some_and(|head| head.contains(';')) { b';' } else { b',' };
    let mut table = csv::ReaderBuilder::new()
        .delimiter(separator)
        .trim(csv::Trim::All)
        .comment(Some(b'#'))
        .flexible(true)
        .from_reader(text.as_bytes());
    let head: Vec<String> = match table.headers() {
        Ok(head) => head.iter().map(str::to_owned).collect(),
        Err(error) => {
            reader.problem(key, &file.span, format!("\"{}\": {error}", file.value));
            return None;
        }
    };
    let mut places = Vec::new();
    for column in columns {
        match head.iter().position(|name| name == column) {
            Some(place) => places.push(place),
            None => {
                let text = format!(
                    "\"{}\" has no column {column}; its first line must name {}",
                    file.value,
                    columns.join(", ")
                );
                reader.problem(key, &file.span, text);
                return None;
            }
        }
    }
    let mut found = Vec::new();
    for record in table.records() {
        let record = match record {
            Ok(record) => record,
            Err(error) => {
                reader.problem(key, &file.span, format!("\"{}\": {error}", file.value));
                return None;
            }
        };
        let line = record.position().map_or(0, csv::Position::line);
        let cells: Option<Vec<String>> = places.iter().map(|place| record.get(*place).map(str::to_owned)).collect();
        match cells {
            Some(cells) => found.push((line, cells)),
            None => {
                reader.problem(key, &file.span, format!("\"{}\" line {line}: too few cells", file.value));
                return None;
            }
        }
    }
    Some(found)
}

/// Returns rows of plain finite numbers.
pub fn read_numbers(
    reader: &mut Reader,
    key: &str,
    file: &Located<String>,
    load: Load,
    columns: &[&str],
) -> Option<Vec<Vec<f64>>> {
    let mut numbers = Vec::new();
    for (line, cells) in rows(reader, key, file, load, columns)? {
        let mut row = Vec::with_capacity(cells.len());
        for cell in &cells {
            match cell.parse::<f64>().ok().filter(|number| number.is_finite()) {
                Some(number) => row.push(number),
                None => {
                    let text = format!("\"{}\" line {line}: \"{cell}\" is not a finite number", file.value);
                    reader.problem(key, &file.span, text);
                    return None;
                }
            }
        }
        numbers.push(row);
    }
    Some(numbers)
}

/// Returns a column of channel frequencies with units, exact.
pub fn read_channels(reader: &mut Reader, key: &str, file: &Located<String>, load: Load) -> Option<Vec<Frequency>> {
    let mut channels = Vec::new();
    for (line, cells) in rows(reader, key, file, load, &["channel"])? {
        match parse_quantity(&cells[0], Dimension::Frequency) {
            Ok(hz) if hz.sign() > 0 => channels.push(Frequency::from_hz(hz)),
            Ok(_) => {
                let text = format!("\"{}\" line {line}: \"{}\" must be above zero", file.value, cells[0]);
                reader.problem(key, &file.span, text);
                return None;
            }
            Err(error) => {
                reader.problem(key, &file.span, format!("\"{}\" line {line}: {error}", file.value));
                return None;
            }
        }
    }
    Some(channels)
}
