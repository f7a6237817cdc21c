//! The spectrum of one modulator run: exact lines as stems, or the density.

use std::collections::BTreeMap;

use super::frame::{Axis, Frame, Hold, ROOM, Room, plot};
use crate::assess::SequenceFacts;
use crate::base::db_from_power;
use crate::report::ReportError;
use crate::report::figures::significant;
use crate::report::paint::Paint;

const NAME: &str = "sequence";
const TITLE: &str = "Phase error of the modulator at the VCO, before any loop";
const HEIGHT: u32 = 380;

/// Returns the picture as a file of its own, or `None` where there is neither line nor density.
pub(crate) fn sequence_svg(facts: &SequenceFacts, rate_hz: Option<f64>) -> Result<Option<String>, ReportError> {
    let scale = rate_hz.unwrap_or(1.0);
    let lines: Vec<(f64, f64, bool)> = facts
        .lines
        .iter()
        .flatten()
        .map(|line| (line.offset_share * scale, line.level_dbc, line.harmonic.is_some()))
        .collect();
    let density: Vec<(f64, f64)> =
        facts.density.iter().map(|(share, level)| (share * scale, level - db_from_power(scale))).collect();
    let points = if lines.is_empty() { density.clone() } else { lines.iter().map(|line| (line.0, line.1)).collect() };
    let first = points.iter().map(|point| point.0).fold(f64::INFINITY, f64::min);
    let (low, high) = points.iter().fold((f64::INFINITY, f64::NEG_INFINITY), |(l, h), p| (l.min(p.1), h.max(p.1)));
    let title = if rate_hz.is_some() { "offset from the carrier" } else { "offset over the PFD frequency" };
    let Some(mut x) = Axis::log_hz(first / 1.5, scale / 1.9, title) else { return Ok(None) };
    if rate_hz.is_none() {
        x.ticks = x.ticks.into_iter().map(|(tick, _)| (tick, format!("{tick:e}"))).collect();
    }
    let unit = match (lines.is_empty(), rate_hz) {
        (false, _) => "single sideband [dBc]",
        (true, Some(_)) => "single sideband [dBc/Hz]",
        (true, None) => "[dBc/Hz] times f_pfd [Hz]",
    };
    let Some(y) = Axis::linear(low.max(high - 160.0) - 6.0, high + 6.0, unit, |y| significant(y, 6)) else {
        return Ok(None);
    };
    let bottom = y.low;
    let mut body = String::new();
    let mut frame = Frame::new(&mut body, HEIGHT, Room { right: 22.0, ..ROOM }, x, y);
    frame.heading(TITLE);
    if lines.is_empty() {
        let places: Vec<(f64, f64)> = density.iter().map(|(offset, level)| frame.point(*offset, *level)).collect();
        frame.line(&places, Paint::Sequence, 1.5);
    }
    // The strongest of its kind in each column of the picture: more cannot be seen.
    let mut columns: BTreeMap<(bool, i64), (f64, f64)> = BTreeMap::new();
    for (offset, level, is_multiple) in &lines {
        let (x, y) = frame.point(*offset, level.max(bottom));
        #[allow(clippy::cast_possible_truncation, reason = "a column of the picture")]
        let column = columns.entry((*is_multiple, x.floor() as i64)).or_insert((x, y));
        if y < column.1 {
            *column = (x, y);
        }
    }
    for ((is_multiple, _), (x, y)) in columns {
        let paint = if is_multiple { Paint::Modulator } else { Paint::Total };
        let foot = frame.point(first, bottom).1;
        frame.line(&[(x, y), (x, foot)], paint, 1.2);
    }
    let left = frame.field().0;
    let key = if lines.is_empty() {
        "density of a record"
    } else {
        "exact lines: multiples of K/M (brown) and sub-fractional ones (violet)"
    };
    frame.text(key, (left, 30.5), 11.0, Paint::Faint, Hold::Start);
    frame.finish(NAME)?;
    Ok(Some(plot(NAME, TITLE, key.to_owned(), HEIGHT, &body).file()))
}
