//! How far every channel stands from its nearest boundary.

use std::collections::{BTreeMap, BTreeSet};

use super::Plot;
use super::frame::{Axis, ChannelAxis, Frame, Hold, ROOM, plot, round_step};
use crate::assess::{ChannelResult, Verdict};
use crate::report::ReportError;
use crate::report::figures::count;
use crate::report::paint::Paint;
use crate::survey::SurveyResult;

const NAME: &str = "boundaries";
const TITLE: &str = "Distance to the nearest boundary";
const HEIGHT: u32 = 380;
/// Fractions named at most, the room of a name, and its distance from its channel.
const MOST_LABELS: usize = 24;
const LABEL_WIDTH: f64 = 38.0;
const LABEL_HEIGHT: f64 = 13.0;
const LABEL_DROP: f64 = 6.0;

/// Returns the plot, or `None` where no channel has a boundary.
pub(super) fn boundaries(result: &SurveyResult) -> Result<Option<Plot>, ReportError> {
    let channels = &result.channels;
    let offsets: Vec<f64> = channels.iter().filter_map(offset_hz).collect();
    if offsets.is_empty() {
        return Ok(None);
    }
    let lines: Vec<f64> =
        channels.iter().flat_map(|channel| [channel.guard_hz, channel.loop_edge_hz]).flatten().collect();
    let smallest = |figures: &[f64]| figures.iter().copied().filter(|hz| *hz > 0.0).fold(f64::INFINITY, f64::min);
    let high = offsets.iter().chain(&lines).copied().fold(0.0, f64::max);
    // Far inside guard and loop the exact depth matters no more; it would only press the rest together.
    let depth = round_step(smallest(&lines) / 600.0);
    let wanted = (smallest(&offsets) / 1.3).min(smallest(&lines) / 3.0);
    let low = if wanted >= depth || !depth.is_finite() { wanted } else { depth };
    let held = offsets.iter().filter(|hz| **hz < low).count();
    let Some(mut y) = Axis::log_hz(low, high * 1.3, "tone offset from the carrier") else { return Ok(None) };
    y.mark_held(held > 0);
    let Some(along) = ChannelAxis::new(channels) else { return Ok(None) };
    let mut body = String::new();
    let mut frame = Frame::new(&mut body, HEIGHT, ROOM, along.axis.clone(), y);
    frame.heading(TITLE);
    let summary = &result.summary;
    frame.verdict_key([
        (Verdict::Clear, summary.clear),
        (Verdict::Marginal, summary.marginal),
        (Verdict::Bad, summary.bad),
    ]);
    let labels = [
        held_line(&mut frame, &along, channels, |channel| channel.guard_hz, Paint::Guard),
        held_line(&mut frame, &along, channels, |channel| channel.loop_edge_hz, Paint::Edge),
    ];
    line_labels(&mut frame, labels);
    marks(&mut frame, &along, channels);
    fractions(&mut frame, &along, channels);
    frame.finish(NAME)?;
    Ok(Some(plot(NAME, TITLE, caption(result, held), HEIGHT, &body)))
}

fn offset_hz(channel: &ChannelResult) -> Option<f64> {
    channel.boundary.as_ref().map(|boundary| boundary.tone_offset_hz)
}

/// Draws one mark for each channel, worst last so that it lies on top; marks on the same spot are drawn once.
fn marks(frame: &mut Frame<'_>, along: &ChannelAxis, channels: &[ChannelResult]) {
    for verdict in [Verdict::Clear, Verdict::Marginal, Verdict::Bad] {
        let mut taken = BTreeSet::new();
        for (position, channel) in channels.iter().enumerate().filter(|(_, channel)| channel.verdict == verdict) {
            let x = along.at(position, channel);
            let place = match offset_hz(channel) {
                Some(offset) => frame.point(x, offset),
                None if !channel.legal => (frame.point(x, frame.y.high).0, frame.field().1 - 5.0),
                None => continue,
            };
            let spot = (format!("{:.0}", place.0 * 0.8), format!("{:.0}", place.1 * 0.8));
            if taken.insert(spot) {
                frame.mark(place, verdict);
            }
        }
    }
}

/// Writes p/q at the channel that stands nearest to each fraction, nearest fractions first, where there is room.
fn fractions(frame: &mut Frame<'_>, along: &ChannelAxis, channels: &[ChannelResult]) {
    let mut nearest: BTreeMap<(i128, u64), (f64, f64)> = BTreeMap::new();
    for (position, channel) in channels.iter().enumerate() {
        let Some(near) = channel.boundary.as_ref().filter(|near| near.family == "comparison") else { continue };
        let found = nearest.entry((near.p, near.q)).or_insert((f64::INFINITY, 0.0));
        if near.tone_offset_hz < found.0 {
            *found = (near.tone_offset_hz, along.at(position, channel));
        }
    }
    let mut wanted: Vec<_> = nearest.into_iter().collect();
    wanted.sort_by(|a, b| a.1.0.total_cmp(&b.1.0));
    let (left, _, right, bottom) = frame.field();
    let mut taken: Vec<(f64, f64)> = Vec::new();
    for ((p, q), (offset_hz, at)) in wanted {
        let (x, y) = frame.point(at, offset_hz);
        let y = if y + LABEL_DROP + LABEL_HEIGHT < bottom { y + LABEL_DROP } else { y - LABEL_DROP - LABEL_HEIGHT };
        let x = x.clamp(left + LABEL_WIDTH / 2.0, right - LABEL_WIDTH / 2.0);
        let is_free = taken.iter().all(|(a, b)| (a - x).abs() > LABEL_WIDTH || (b - y).abs() > LABEL_HEIGHT);
        if is_free && taken.len() < MOST_LABELS {
            frame.text(&format!("{p}/{q}"), (x, y), 10.0, Paint::Faint, Hold::Middle);
            taken.push((x, y));
        }
    }
}

/// Draws a figure of each channel as a line and returns its height at the right end.
fn held_line(
    frame: &mut Frame<'_>,
    along: &ChannelAxis,
    channels: &[ChannelResult],
    figure: impl Fn(&ChannelResult) -> Option<f64>,
    paint: Paint,
) -> Option<f64> {
    let mut places: Vec<(f64, f64)> = channels
        .iter()
        .enumerate()
        .filter_map(|(position, channel)| figure(channel).map(|hz| frame.point(along.at(position, channel), hz)))
        .collect();
    places.sort_by(|a, b| a.0.total_cmp(&b.0));
    // Of places less than half a unit apart the first is enough, unless the line jumps.
    let mut thinned: Vec<(f64, f64)> = Vec::new();
    for place in places {
        let close = thinned.last().is_some_and(|last| place.0 - last.0 < 1.0 && (place.1 - last.1).abs() < 0.3);
        if !close {
            thinned.push(place);
        }
    }
    let (first, last) = (*thinned.first()?, *thinned.last()?);
    let (left, _, right, _) = frame.field();
    thinned.insert(0, (left, first.1));
    thinned.push((right, last.1));
    frame.line(&thinned, paint, 1.2);
    Some(last.1)
}

/// Draws the names of guard and loop edge at their right ends, apart when the lines are close.
fn line_labels(frame: &mut Frame<'_>, [guard, edge]: [Option<f64>; 2]) {
    let right = frame.field().2 + 6.0;
    let (mut guard_y, mut edge_y) = (guard.unwrap_or(0.0), edge.unwrap_or(0.0));
    if let (Some(g), Some(e)) = (guard, edge)
        && (g - e).abs() < 13.0
    {
        let middle = (g + e) / 2.0;
        (guard_y, edge_y) = if g <= e { (middle - 6.5, middle + 6.5) } else { (middle + 6.5, middle - 6.5) };
    }
    if guard.is_some() {
        frame.text("guard", (right, guard_y - 4.0), 11.0, Paint::Guard, Hold::Start);
    }
    if edge.is_some() {
        frame.text("loop edge", (right, edge_y - 4.0), 11.0, Paint::Edge, Hold::Start);
    }
}

fn caption(result: &SurveyResult, held: usize) -> String {
    let mut text = format!(
        "Every channel by the offset of its nearest boundary tone (fractions p/q of the PFD frequency up to q = {}). \
         At or below the dashed line a tone is inside the guard, at or below the solid line inside the loop.",
        result.plan.boundary.largest_q
    );
    if held > 0 {
        text.push_str(&format!(" On the lowest line, at that offset or lower: {}.", count(held as u64)));
    }
    let without = result.channels.iter().filter(|channel| channel.legal && channel.boundary.is_none()).count();
    if without > 0 {
        text.push_str(&format!(
            " Without a fraction, and so without a boundary tone, not drawn: {}.",
            count(without as u64)
        ));
    }
    if result.summary.illegal > 0 {
        text.push_str(&format!(" Without a legal word, above the field: {}.", count(result.summary.illegal)));
    }
    text
}
