//! `channels.csv`: one table of names and accessors is the whole definition of the file.

use std::ops::Deref;

use serde::Serialize;

use super::ReportError;
use super::figures::push_figure;
use super::json::json_text;
use crate::assess::{ChannelResult, Rule, Tone};

/// What a cell holds; unknown is an empty cell.
#[derive(Debug, Clone, PartialEq)]
pub enum Cell {
    /// Unknown or not applicable.
    Empty,
    /// Text that a user may have typed: made inert for spreadsheets.
    Text(String),
    /// An integer of any length.
    Integer(String),
    /// A figure in the base unit of the column's suffix.
    Figure(f64),
    /// Yes or no.
    Flag(bool),
}

/// One column of `channels.csv`.
#[derive(Debug, Clone, Copy)]
pub struct Column {
    /// Name, with the base unit as suffix; the same as the key in survey.json where both have it.
    pub name: &'static str,
    /// What the cell of a channel holds.
    cell: fn(&Facts<'_>) -> Cell,
}

/// A channel with what several of its cells need.
struct Facts<'a> {
    result: &'a ChannelResult,
    worst: Option<&'a Tone>,
}

impl Deref for Facts<'_> {
    type Target = ChannelResult;
    fn deref(&self) -> &ChannelResult {
        self.result
    }
}

fn figure(value: Option<f64>) -> Cell {
    value.map_or(Cell::Empty, Cell::Figure)
}

fn integer<T: ToString>(value: Option<T>) -> Cell {
    value.map_or(Cell::Empty, |number| Cell::Integer(number.to_string()))
}

fn text(value: &str) -> Cell {
    if value.is_empty() { Cell::Empty } else { Cell::Text(value.to_owned()) }
}

/// Returns the word under which survey.json knows an enum.
pub(crate) fn word<T: Serialize>(value: &T) -> String {
    json_text("word", value).map(|quoted| quoted.trim_matches('"').to_owned()).unwrap_or_default()
}

fn joined<T, I: IntoIterator<Item = T>>(parts: I, show: impl Fn(T) -> String, between: &str) -> Cell {
    text(&parts.into_iter().map(show).collect::<Vec<_>>().join(between))
}

fn worst(facts: &Facts<'_>, cell: impl Fn(&Tone) -> Cell) -> Cell {
    facts.worst.map_or(Cell::Empty, cell)
}

fn nearest(channel: &ChannelResult, cell: impl Fn(&crate::assess::BoundaryNear) -> Cell) -> Cell {
    channel.boundary.as_ref().map_or(Cell::Empty, cell)
}

/// Returns each rule that fired, once, with how often it did, in the order of the rules.
pub(crate) fn rules_fired(channel: &ChannelResult) -> Vec<(Rule, usize)> {
    let often = |rule: &Rule| channel.reasons.iter().filter(|reason| reason.rule == *rule).count();
    Rule::ALL.into_iter().map(|rule| (rule, often(&rule))).filter(|(_, often)| *often > 0).collect()
}

macro_rules! columns {
    ($($name:literal => $cell:expr;)*) => {
        /// Every column of `channels.csv`, in order.
        pub const COLUMNS: &[Column] = &[$(Column { name: $name, cell: $cell }),*];
    };
}

columns! {
    "group" => |c| text(&c.group);
    "group_index" => |c| integer(Some(c.group_index));
    "index" => |c| integer(Some(c.index));
    "channel_hz" => |c| Cell::Figure(c.channel_hz);
    "channel_exact" => |c| Cell::Text(word(&c.channel));
    "injection_hz" => |c| Cell::Figure(c.injection_hz);
    "output_hz" => |c| Cell::Figure(c.output_hz);
    "achieved_hz" => |c| figure(c.achieved_hz);
    "error_hz" => |c| figure(c.error_hz);
    "error_ppb" => |c| figure(c.error_ppb);
    "vco_hz" => |c| figure(c.vco_hz);
    "reference_hz" => |c| Cell::Figure(c.reference_hz);
    "doubler" => |c| Cell::Flag(c.doubler);
    "reference_divider" => |c| integer(Some(c.reference_divider));
    "pfd_hz" => |c| Cell::Figure(c.pfd_hz);
    "output_divider" => |c| integer(c.output_divider);
    "legal" => |c| Cell::Flag(c.legal);
    "illegal" => |c| joined(&c.illegal, |limit| limit.limit.clone(), "; ");
    "n" => |c| integer(c.n);
    "k" => |c| integer(c.k);
    "m" => |c| integer(c.m);
    "k_reduced" => |c| integer(c.k_reduced);
    "m_reduced" => |c| integer(c.m_reduced);
    "period" => |c| integer(c.period.as_ref());
    "period_is_exact" => |c| Cell::Flag(c.period_is_exact);
    "structure" => |c| Cell::Text(word(&c.structure));
    "order" => |c| integer(Some(c.order));
    "seeds" => |c| joined(&c.seeds, u64::to_string, " ");
    "unity_gain_hz" => |c| figure(c.unity_gain_hz);
    "phase_margin_deg" => |c| figure(c.phase_margin_deg);
    "closed_loop_3db_hz" => |c| figure(c.closed_loop_3db_hz);
    "peaking_db" => |c| figure(c.peaking_db);
    "tuning_v" => |c| figure(c.tuning_v);
    "guard_hz" => |c| figure(c.guard_hz);
    "loop_edge_hz" => |c| figure(c.loop_edge_hz);
    "boundary_family" => |c| nearest(c, |b| text(b.family));
    "boundary_p" => |c| nearest(c, |b| integer(Some(b.p)));
    "boundary_q" => |c| nearest(c, |b| integer(Some(b.q)));
    "boundary_tone_offset_hz" => |c| nearest(c, |b| Cell::Figure(b.tone_offset_hz));
    "boundary_vco_distance_hz" => |c| nearest(c, |b| Cell::Figure(b.vco_distance_hz));
    "boundary_inside_guard" => |c| nearest(c, |b| Cell::Flag(b.inside_guard));
    "boundary_inside_loop" => |c| nearest(c, |b| Cell::Flag(b.inside_loop));
    "worst_origin" => |c| worst(c, |t| text(t.origin.word()));
    "worst_label" => |c| worst(c, |t| text(&t.label));
    "worst_harmonic" => |c| worst(c, |t| integer(t.harmonic));
    "worst_offset_hz" => |c| worst(c, |t| Cell::Figure(t.offset_hz));
    "worst_level_dbc" => |c| worst(c, |t| figure(t.level_dbc));
    "worst_level_uncertainty_db" => |c| worst(c, |t| figure(t.level_uncertainty_db));
    "worst_known_level_dbc" => |c| worst(c, |t| figure(t.known_level_dbc));
    "worst_limit_dbc" => |c| worst(c, |t| figure(t.limit_dbc));
    "worst_margin_db" => |c| worst(c, |t| figure(t.margin_db));
    "worst_victims" => |c| worst(c, |t| joined(&t.victims, String::clone, "; "));
    "worst_basis" => |c| worst(c, |t| text(t.basis.word()));
    "tones" => |c| integer(Some(c.tones.len()));
    "unknown_tones" => |c| integer(Some(c.unknown_tones));
    "tones_below_floor" => |c| integer(Some(c.tones_below_floor));
    "method" => |c| Cell::Text(word(&c.method));
    "phase_error_deg" => |c| figure(c.phase_error_deg);
    "phase_error_with_tones_deg" => |c| figure(c.phase_error_with_tones_deg);
    "phase_error_known_deg" => |c| figure(c.phase_error_known_deg);
    "noise_unknown" => |c| joined(&c.noise_unknown, String::clone, "; ");
    "jitter_s" => |c| figure(c.jitter_s);
    "residual_fm_hz" => |c| figure(c.residual_fm_hz);
    "evm_percent" => |c| figure(c.evm_percent);
    "verdict" => |c| text(c.verdict.word());
    "verdict_best" => |c| c.verdict_best.map_or(Cell::Empty, |verdict| text(verdict.word()));
    "verdict_worst" => |c| c.verdict_worst.map_or(Cell::Empty, |verdict| text(verdict.word()));
    "rules" => |c| joined(rules_fired(c), |(rule, _)| rule.name().to_owned(), " ");
    "reasons" => |c| joined(&c.reasons, |reason| reason.text.clone(), "; ");
    "warnings" => |c| joined(&c.warnings, String::clone, "; ");
}

/// Returns text that no spreadsheet takes for a formula.
pub(crate) fn inert(text: String) -> String {
    match text.chars().next() {
        Some('=' | '+' | '-' | '@' | '\t' | '\r' | '\n' | '＝' | '＋' | '－' | '＠') => format!("'{text}"),
        _ => text,
    }
}

/// Appends a cell, quoted where RFC 4180 asks for it.
fn push_cell(out: &mut String, name: &str, cell: &Cell) -> Result<(), ReportError> {
    match cell {
        Cell::Empty => {}
        Cell::Text(text) => push_field(out, &inert(text.clone())),
        Cell::Integer(digits) => out.push_str(digits),
        Cell::Figure(value) => push_figure(out, name, *value)?,
        Cell::Flag(flag) => out.push_str(if *flag { "true" } else { "false" }),
    }
    Ok(())
}

fn push_field(out: &mut String, text: &str) {
    if !text.bytes().any(|byte| matches!(byte, b'"' | b',' | b'\r' | b'\n')) {
        return out.push_str(text);
    }
    out.push('"');
    for (place, part) in text.split('"').enumerate() {
        if place > 0 {
            out.push_str("\"\"");
        }
        out.push_str(part);
    }
    out.push('"');
}

/// Returns the bytes of `channels.csv`: a header and one row for every channel, in plan order (RFC 4180, UTF-8).
///
/// # Errors
/// `NotFinite` with the column of a NaN or an infinity.
pub fn channels_csv(channels: &[ChannelResult]) -> Result<Vec<u8>, ReportError> {
    let mut text = csv_header();
    push_rows(&mut text, channels)?;
    Ok(text.into_bytes())
}

/// Returns the first row of `channels.csv`.
pub(crate) fn csv_header() -> String {
    let names: Vec<&str> = COLUMNS.iter().map(|column| column.name).collect();
    format!("{}\r\n", names.join(","))
}

/// Appends the rows of channels.
pub(crate) fn push_rows(out: &mut String, channels: &[ChannelResult]) -> Result<(), ReportError> {
    for channel in channels {
        let facts = Facts { result: channel, worst: channel.worst_tone() };
        for (place, column) in COLUMNS.iter().enumerate() {
            if place > 0 {
                out.push(',');
            }
            push_cell(out, column.name, &(column.cell)(&facts))?;
        }
        out.push_str("\r\n");
    }
    Ok(())
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn makes_text_inert_and_leaves_numbers_alone() {
        let text = |name: &str, cell: Cell| {
            let mut out = String::new();
            push_cell(&mut out, name, &cell).unwrap();
            out
        };
        for typed in ["=1+1", "+1", "-1", "@SUM(A1)", "\t=1", "＝1"] {
            assert_eq!(text("group", Cell::Text(typed.to_owned())), format!("'{typed}"));
        }
        assert_eq!(text("group", Cell::Text("uplink".into())), "uplink");
        assert_eq!(text("worst_level_dbc", Cell::Figure(-56.5)), "-56.5");
        assert_eq!(text("boundary_p", Cell::Integer("-3".into())), "-3");
    }

    #[test]
    fn fields_are_quoted_as_the_usual_writer_does() {
        for text in ["", "plain", "a,b", "say \"no\"", "\"", "two\r\nlines", "ü;x", "a\nb,\"c\""] {
            let mut usual = csv::WriterBuilder::new().terminator(csv::Terminator::CRLF).from_writer(Vec::new());
            usual.write_record(["x", text]).unwrap();
            let mut ours = "x,".to_owned();
            push_field(&mut ours, text);
            ours.push_str("\r\n");
            assert_eq!(ours.into_bytes(), usual.into_inner().unwrap());
        }
    }

    #[test]
    fn names_are_unique() {
        let names: std::collections::BTreeSet<_> = COLUMNS.iter().map(|column| column.name).collect();
        assert_eq!(names.len(), COLUMNS.len());
    }
}
